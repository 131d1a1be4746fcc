"""The ends of a large symmetric spectrum by Lanczos' recurrence; it always returns an answer."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.linalg import eigh_tridiagonal

from clingstone.maths.once import Array

CHECK_EVERY = 20


def spectrum_ends(
    apply: Callable[[Array], Array], n: int, steps: int, tolerance: float = 1e-10
) -> tuple[float, float]:
    """Ends of the spectrum of a symmetric operator of order n, each moved outwards by its residual.

    Three vectors are held. Without reorthogonalisation an extreme Ritz value may repeat, which does no
    harm to the ends, and its residual β_k|s_k| stays a bound of its distance from an eigenvalue (Paige
    1980). Stops when both residuals are below ``tolerance`` of the spectrum's length, or after ``steps``.
    """
    now = np.random.default_rng(0).standard_normal(n)
    now /= np.linalg.norm(now)
    before, beta = np.zeros(n), 0.0
    diagonal: list[float] = []
    off: list[float] = []
    low = high = 0.0
    for k in range(1, min(steps, n) + 1):
        ahead = apply(now) - beta * before
        alpha = float(ahead @ now)
        ahead -= alpha * now
        beta = float(np.linalg.norm(ahead))
        diagonal.append(alpha)
        last = k == min(steps, n) or beta <= 1e-14 * max(map(abs, diagonal))
        if last or k % CHECK_EVERY == 0:
            low, high, gap = _ritz(np.array(diagonal), np.array(off), beta)
            if last or gap <= tolerance * (high - low):
                break
        off.append(beta)
        before, now = now, ahead / beta
    return low, high


def _ritz(diagonal: Array, off: Array, beta: float) -> tuple[float, float, float]:
    """Extreme Ritz values moved outwards by their residuals, and the larger residual."""
    value, vector = eigh_tridiagonal(diagonal, off)
    first, last = beta * abs(vector[-1, 0]), beta * abs(vector[-1, -1])
    return float(value[0] - first), float(value[-1] + last), float(max(first, last))
