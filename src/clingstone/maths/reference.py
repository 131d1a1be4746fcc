"""Reference distributions of t and F statistics, and the degrees of freedom they are given.

Letters: w a contrast in the basis Q, Φ the covariance of Q'β̂, θ covariance parameters, k rows
(coefficients or contrasts), B columns of y. Tails are survival functions, accurate far out.
"""

from __future__ import annotations

import numpy as np
from scipy import special

from clingstone.maths.once import Array


def t_two_sided(t: Array, df: Array | float) -> Array:
    """P(|T| > |t|) for Student's t; df may be infinite, arrays broadcast; NaN where df is not positive."""
    t2 = np.square(np.asarray(t, dtype=float))
    df = np.asarray(df, dtype=float)
    finite = np.where(np.isfinite(df) & (df > 0), df, 1.0)
    with np.errstate(invalid="ignore", over="ignore"):
        # I_x(ν/2, ½) with x = ν/(ν+t²) is the two-sided tail itself, so nothing is subtracted from one;
        # below t² = ν the complement in 1 − x = t²/(ν+t²) keeps the digits that x near one has lost.
        far = special.betainc(finite / 2, 0.5, finite / (finite + t2))
        near = special.betaincc(0.5, finite / 2, t2 / (finite + t2))
        p = np.where(t2 < finite, near, far)
        p = np.where(np.isposinf(df), special.erfc(np.sqrt(t2 / 2)), p)
    return np.asarray(np.where(np.isnan(t2) | ~(df > 0), np.nan, p))


def t_quantile(alpha: float, df: Array | float) -> Array:
    """c with P(|T| > c) = alpha; df may be infinite; NaN where df is not positive."""
    df = np.asarray(df, dtype=float)
    finite = np.where(np.isfinite(df) & (df > 0), df, 1.0)
    y = special.betainccinv(0.5, finite / 2, alpha)  # t²/(ν+t²)
    x = special.betaincinv(finite / 2, 0.5, alpha)  # ν/(ν+t²)
    with np.errstate(divide="ignore"):
        c = np.sqrt(finite * np.where(y < 0.5, y / (1 - y), (1 - x) / x))
    c = np.where(np.isposinf(df), np.sqrt(2) * special.erfcinv(alpha), c)
    return np.asarray(np.where(df > 0, c, np.nan))


def f_tail(F: Array, df1: float, df2: Array | float) -> Array:
    """P(F(df1, df2) > F); df2 may be infinite; NaN where df2 is not positive."""
    F = np.asarray(F, dtype=float)
    df2 = np.asarray(df2, dtype=float)
    finite = np.where(np.isfinite(df2) & (df2 > 0), df2, 1.0)
    p = special.fdtrc(df1, finite, F)
    p = np.where(np.isposinf(df2), special.chdtrc(df1, df1 * F), p)
    return np.asarray(np.where(df2 > 0, p, np.nan))


def t_rows(estimate: Array, se: Array, df: Array, confidence: float) -> tuple[Array, Array, Array]:
    """low, high and two-sided p of k rows; p and the interval invert one t distribution.

    estimate, se : (k, B). df : (k, 1) or (k, B). A standard error of zero or NaN gives NaN for all.
    """
    se = np.where(se > 0, se, np.nan)
    c = t_quantile(1 - confidence, df)
    return estimate - c * se, estimate + c * se, t_two_sided(estimate / se, df)


def satterthwaite(gradient: Array, information: Array, largest: float) -> float:
    """df = 2/(g'I⁻¹g), g the gradient of ln Var in θ, I the information of θ (Satterthwaite 1946).

    gradient : (d,). information : (d, d) positive definite. The result is kept within [1, largest].
    """
    spread = float(gradient @ np.linalg.solve(information, gradient))
    return float(np.clip(2.0 / spread, 1.0, largest)) if spread > 0 else float(largest)


def fai_cornelius(df: Array) -> float:
    """Denominator df of a joint F over q independent contrasts with their own df (Fai & Cornelius 1996).

    E = Σ νⱼ/(νⱼ−2) matches the mean of F; equal νⱼ are returned as they are, and where a νⱼ ≤ 2 has
    no such mean the smallest νⱼ is returned.
    """
    df = np.asarray(df, dtype=float)
    if np.ptp(df) <= 1e-8 * df.max() or df.min() <= 2:
        return float(df.min())
    E = float(np.sum(df / (df - 2)))
    return 2 * E / (E - len(df))


def wald(estimate: Array, covariance: Array) -> Array:
    """β'V⁻¹β for each column; estimate (q, B), covariance (q, q, B); NaN where V is not of full rank."""
    V = np.moveaxis(covariance, -1, 0)
    scale = np.sqrt(np.einsum("bii->bi", V))
    scale = np.where(scale > 0, scale, 1.0)
    values, vectors = np.linalg.eigh(V / (scale[:, :, None] * scale[:, None, :]))
    z = np.einsum("bij,bi->bj", vectors, np.moveaxis(estimate, -1, 0) / scale)
    full = values[:, 0] > 1e-10 * values[:, -1]
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(np.where(full, np.sum(z**2 / values, axis=1), np.nan))


def hotelling(wald_statistic: Array, q: int, eta: float) -> tuple[Array, float]:
    """F = (η−q+1)/(ηq)·Wald and its denominator df η−q+1 (Hotelling's T² with η df)."""
    df2 = eta - q + 1
    return np.asarray(df2 / (eta * q) * wald_statistic), df2
