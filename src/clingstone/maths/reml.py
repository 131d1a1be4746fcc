"""Restricted likelihood from a Gram matrix: criterion, scale, coefficients, differences.

Everything here reads a :class:`~clingstone.maths.basis.Gram` of [Q, e] and the residual degrees of
freedom m; what the covariance V looks like is the business of whoever made the Gram.

The covariance of y is σ²V(θ). With c = e'V⁻¹e − e'V⁻¹Q(Q'V⁻¹Q)⁻¹Q'V⁻¹e,

    −2ℓ_R(σ², θ) = ln|V| + ln|Q'V⁻¹Q| + m ln(2πσ²) + c/σ²,

and σ̂² = c/m profiles the scale out (Patterson & Thompson 1971, Biometrika 58:545; Harville 1977).
Since X = QR, ℓ_R − ln|det R| is the restricted log-likelihood that lme4 and nlme print, which use
ln|X'V⁻¹X|. With precision weights add Σ ln √ω, because the basis is on the scale of √ω·y.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.linalg import lapack

from clingstone.maths.basis import Gram
from clingstone.maths.once import Array


def independent(p: int, ss: Array) -> Gram:
    """The Gram at V = I: Q'Q = I, Q'e = 0, e'e = ss (B,)."""
    return Gram(np.eye(p), np.zeros((p, len(ss))), np.asarray(ss, dtype=float), 0.0)


def reduced(gram: Gram) -> tuple[Array, Array, float]:
    """Generalised least squares from a Gram.

    Returns
    -------
    delta : (p, B), so that β̂ = R⁻¹(Q'y + delta) on top of ordinary least squares.
    rss : (B,) c above, the generalised residual sum of squares.
    logdet : ln|Q'V⁻¹Q|.
    """
    if gram.QQ.shape[0] == 0:
        return np.zeros_like(gram.QE), gram.EE, 0.0
    L: Array = np.asarray(np.linalg.cholesky(gram.QQ), dtype=float)
    half = forward(L, gram.QE)
    rss = gram.EE - np.einsum("ij,ij->j", half, half)
    delta, _ = lapack.dtrtrs(L, half, lower=1, trans=1)
    return np.asarray(delta), np.asarray(rss), float(2 * np.log(np.diag(L)).sum())


def forward(L: Array, block: Array) -> Array:
    """L⁻¹ block for a lower triangle L; straight to LAPACK, since a search calls it thousands of times."""
    solved, _ = lapack.dtrtrs(L, block, lower=1)
    return np.asarray(solved)


def rss(gram: Gram) -> Array:
    """(B,) generalised residual sum of squares c."""
    return reduced(gram)[1]


def scale(gram: Gram, m: int) -> Array:
    """(B,) σ̂² = c/m."""
    return np.asarray(rss(gram) / m)


def criterion(gram: Gram, m: int) -> Array:
    """(B,) −2ℓ_R with σ² profiled out."""
    _, c, logdet = reduced(gram)
    return np.asarray(gram.logdet + logdet + profiled(c, m))


def profiled(c: Array, m: int) -> Array:
    """m ln(2πσ̂²) + m at σ̂² = c/m: what the data add to −2ℓ_R."""
    # A generalised sum of squares that rounds to zero or below is a perfect fit.
    return np.asarray(m * (np.log(2 * np.pi * np.maximum(c, 1e-300) / m) + 1))


def gradient(f: Callable[[Array], float], theta: Array, step: float = 1e-4) -> Array:
    """(d,) central differences."""
    out = np.empty(len(theta))
    for i in range(len(theta)):
        shift = np.zeros(len(theta))
        shift[i] = step
        out[i] = (f(theta + shift) - f(theta - shift)) / (2 * step)
    return out


def hessian(f: Callable[[Array], float], theta: Array, step: float = 1e-3) -> Array:
    """(d, d) central second differences."""
    d = len(theta)
    H = np.empty((d, d))
    here = f(theta)
    unit = step * np.eye(d)
    for i in range(d):
        H[i, i] = (f(theta + unit[i]) - 2 * here + f(theta - unit[i])) / step**2
        for j in range(i):
            up = f(theta + unit[i] + unit[j]) + f(theta - unit[i] - unit[j])
            down = f(theta + unit[i] - unit[j]) + f(theta - unit[i] + unit[j])
            H[i, j] = H[j, i] = (up - down) / (4 * step**2)
    return H
