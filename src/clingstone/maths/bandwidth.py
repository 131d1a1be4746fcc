"""How far along time a long-run variance looks: published rules for its bandwidth.

All are for scores on a grid of steps, series after series; a bandwidth S is in steps, and the Bartlett
kernel gives lag j the weight 1 − j/S.
"""

from __future__ import annotations

from typing import Literal

import numpy as np

from clingstone.maths.longrun import Grid
from clingstone.maths.once import Array

Kernel = Literal["bartlett", "quadratic-spectral"]
RHO_CAP = 0.97  # Andrews's rule has no bandwidth at a unit root (Andrews 1991, section 6)


def wide(N: int) -> float:
    """1.3√N, to go with fixed-b critical values (Lazarus, Lewis, Stock & Watson 2018)."""
    return 1.3 * float(np.sqrt(N))


def textbook(N: int) -> int:
    """⌊4(N/100)^(2/9)⌋ lags, the first step of Newey & West (1994), often used as it is."""
    return int(4 * (N / 100) ** (2 / 9))


def newey_west(grid: Grid, score: Array) -> float:
    """S of Newey & West (1994) for one series of weighted scores (n,), without prewhitening.

    n* = ⌊4(N/100)^(2/9)⌋, s₀ = γ₀ + 2Σγ_j, s₁ = 2Σjγ_j, S = 1.1447((s₁/s₀)² N)^⅓. NaN where s₀ is
    not positive.
    """
    top = textbook(grid.N)
    gamma = autocovariance(grid, score, top)
    s0 = gamma[0] + 2 * gamma[1:].sum()
    s1 = 2 * float(np.arange(1, top + 1) @ gamma[1:])
    return float(1.1447 * np.cbrt((s1 / s0) ** 2 * grid.N)) if s0 > 0 else float("nan")


def andrews(grid: Grid, scores: Array, kernel: Kernel = "bartlett") -> float:
    """S of Andrews (1991), a first-order autoregression of each column of scores (n, k)."""
    over, under = 0.0, 0.0
    for score in scores.T:
        rho, sigma2 = _autoregression(grid, score)
        if kernel == "bartlett":
            over += 4 * rho**2 * sigma2**2 / ((1 - rho) ** 6 * (1 + rho) ** 2)
        else:
            over += 4 * rho**2 * sigma2**2 / (1 - rho) ** 8
        under += sigma2**2 / (1 - rho) ** 4
    if under == 0:
        return float("nan")
    alpha = over / under
    if kernel == "bartlett":
        return float(1.1447 * np.cbrt(alpha * grid.N))
    return float(1.3221 * (alpha * grid.N) ** 0.2)


def autocovariance(grid: Grid, score: Array, top: int) -> Array:
    """γ₀ … γ_top, sums over pairs of one series divided by the number of steps."""
    out = np.zeros(top + 1)
    for _, U in grid.batches(grid.spread(score[:, None])):
        u, N = U[:, :, 0], U.shape[1]
        for j in range(min(top, N - 1) + 1):
            out[j] += np.einsum("st,st->", u[:, : N - j], u[:, j:])
    return out / grid.N


def _autoregression(grid: Grid, score: Array) -> tuple[float, float]:
    """ρ and the innovation variance of u_t on 1, u_{t−1} by least squares, within series."""
    u = grid.spread(score[:, None])[:, 0]
    begins = np.zeros(grid.N, dtype=bool)
    begins[grid.starts] = True
    later = np.flatnonzero(~begins)
    y, x = u[later], u[later - 1]
    y, x = y - y.mean(), x - x.mean()
    size = float(x @ x)
    if size == 0:
        return 0.0, 0.0
    rho = float(np.clip(x @ y / size, -RHO_CAP, RHO_CAP))
    return rho, float(np.mean((y - rho * x) ** 2))
