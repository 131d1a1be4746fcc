"""P(ω₀Z₀² > Σ η_jZ_j²): the tail of t² where the variance estimate is a quadratic form of rank q."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from clingstone.maths.once import Array


def one_positive(omega0: npt.ArrayLike, eta: npt.ArrayLike) -> tuple[Array, Array]:
    """P(ω₀Z₀² > Σ η_jZ_j²) and its logarithm, Z independent standard normal.

    Parameters
    ----------
    omega0 : scalar or (B,), positive. eta : (q,) or (q, B), ≥ 0.

    Returns
    -------
    (B,) probability and (B,) natural logarithm, both to relative accuracy.

    Notes
    -----
    With h_j = η_j/ω₀: P = (1/π) ∫₀¹ x^((q−1)/2) [(1 − x) Π(x + h_j)]^(−½) dx (Bakirov and Székely 2006).
    The integrand is positive, so nothing cancels; x = 1/(1 + e^(−π sinh v)) takes care of both ends and of
    h_j however small. The step is halved until two answers agree to 1e-13.

    Raises ValueError for ω₀ ≤ 0 or a negative η.
    """
    w = np.atleast_1d(np.asarray(omega0, dtype=float))
    h = np.asarray(eta, dtype=float)
    h = h[:, None] if h.ndim == 1 else h
    if np.any(w <= 0) or np.any(h < 0):
        raise ValueError("one_positive needs ω₀ > 0 and no negative η")
    h = h / w
    B = h.shape[1]
    log_p = np.array([_log_tail(h[:, b]) for b in range(B)])
    log_p = np.minimum(log_p, 0.0)
    return np.exp(log_p), log_p


def _log_tail(h: Array) -> float:
    previous = np.inf
    value = np.nan
    for step in (0.125, 0.0625, 0.03125, 0.015625):
        value = _double_exponential(h, step)
        if abs(value - previous) < 1e-13 * max(1.0, abs(value)):
            break
        previous = value
    return value


def _double_exponential(h: Array, step: float) -> float:
    v = np.arange(-4.7, 4.7 + step / 2, step)
    y = np.pi * np.sinh(v)
    log_x, log_rest = -np.logaddexp(0.0, -y), -np.logaddexp(0.0, y)  # ln x and ln(1 − x)
    # x^((q−1)/2) Π(x + h)^(−½) = x^(−½) Π(1 + h/x)^(−½); dx = x(1 − x) π cosh v dv
    x = np.exp(log_x)
    fall = np.zeros_like(v)
    for value in h:
        if value > 0:
            fall += np.where(x > value, np.log1p(value / np.maximum(x, 1e-300)), np.log(value + x) - log_x)
    terms = 0.5 * log_x + 0.5 * log_rest - 0.5 * fall + np.log(np.cosh(v))
    top = float(terms.max())
    return top + float(np.log(np.sum(np.exp(terms - top)) * step))


def t_tail(covariance: Array, values: npt.ArrayLike) -> tuple[Array, Array]:
    """P(|t| > c) and its logarithm for t = Z₀/√(Σ_j Z_j²/q), (Z₀, …, Z_q) jointly normal.

    covariance (q + 1, q + 1) of (Z₀, Z₁ … Z_q), Z₀ first; values c (B,). With the identity this is
    Student's t with q degrees of freedom. Used where the numerator is correlated with the variance
    estimate, or the terms of the estimate with each other.
    """
    c = np.abs(np.atleast_1d(np.asarray(values, dtype=float)))
    q = covariance.shape[0] - 1
    if q < 1:
        raise ValueError("the variance estimate has no terms")
    value, vector = np.linalg.eigh(0.5 * (covariance + covariance.T))
    L = vector * np.sqrt(np.maximum(value, 0.0))  # LL' = covariance
    head, rest = np.outer(L[0], L[0]), L[1:].T @ L[1:]
    out, log_out = np.empty(len(c)), np.empty(len(c))
    for b, cut in enumerate(c):
        if cut == 0.0:
            out[b], log_out[b] = 1.0, 0.0
            continue
        omega = np.linalg.eigvalsh(head - (cut**2 / q) * rest)
        p, log_p = one_positive(omega[-1], np.maximum(-omega[:-1], 0.0))
        out[b], log_out[b] = p[0], log_p[0]
    return out, log_out
