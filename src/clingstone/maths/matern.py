"""Correlation in space: Matérn kernels of half-integer smoothness, and sites at the top of a model.

Kernels take straight distances (the plane, or the chord of the sphere), where they are valid in
three dimensions (Stein 1999; Gneiting 2013, Bernoulli 19).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import linalg
from scipy.linalg import lapack

from clingstone.maths.basis import Gram
from clingstone.maths.groups import Load
from clingstone.maths.once import Array
from clingstone.maths.reml import forward

# Distance at which the correlation has fallen to 0.05, in units of the range parameter φ: the root
# of kernel(x, 1, smoothness) = 0.05.
PRACTICAL = {0.5: 2.99573, 1.5: 2.73887, 2.5: 2.64690}


def kernel(distance: Array, reach: float | Array, smoothness: float = 0.5) -> Array:
    """Correlation at a distance. ``reach`` is φ: e^{−d/φ} for smoothness ½, and for 3/2 and 5/2 the
    Matérn form in √(2κ)d/φ."""
    if smoothness == 0.5:
        out = distance * (-1 / reach)
        return np.asarray(np.exp(out, out=out))
    if smoothness == 1.5:
        x = np.sqrt(3) * distance / reach
        return np.asarray((1 + x) * np.exp(-x))
    if smoothness == 2.5:
        x = np.sqrt(5) * distance / reach
        return np.asarray((1 + x + x * x / 3) * np.exp(-x))
    raise ValueError(f"smoothness {smoothness:g} is not one of 0.5, 1.5, 2.5")


def kernel_slope(distance: Array, reach: float, smoothness: float = 0.5) -> Array:
    """Derivative of :func:`kernel` in ln φ."""
    if smoothness == 0.5:
        out = distance * (-1 / reach)
        x = np.exp(out)
        x *= out
        return np.asarray(np.negative(x, out=x))
    x = distance * (np.sqrt(2 * smoothness) / reach)
    if smoothness == 1.5:
        return np.asarray(x * x * np.exp(-x))
    if smoothness == 2.5:
        return np.asarray(x * x * (1 + x) / 3 * np.exp(-x))
    raise ValueError(f"smoothness {smoothness:g} is not one of 0.5, 1.5, 2.5")


def kernel_bends(distance: Array, reach: float | Array, smoothness: float = 0.5) -> tuple[Array, ...]:
    """:func:`kernel` with its first and second derivative in ln φ; reach may be an array that broadcasts."""
    x = distance * ((1.0 if smoothness == 0.5 else np.sqrt(2 * smoothness)) / reach)
    e = np.exp(-x)
    if smoothness == 0.5:
        first = x * e
        return e, first, (x - 1) * first
    if smoothness == 1.5:
        first = x * x * e
        return (1 + x) * e, first, (x - 2) * first
    if smoothness == 2.5:
        e *= 1 / 3
        return (3 + x * (3 + x)) * e, x * x * (1 + x) * e, x * x * (x * (x - 2) - 2) * e
    raise ValueError(f"smoothness {smoothness:g} is not one of 0.5, 1.5, 2.5")


def top(gram: Gram, load: Load, K: Array) -> Gram:
    """The Gram once site effects with covariance K (S, S) are added to V. K is overwritten.

    load : the sites' c and t under what lies below (see ``maths.groups``). With D = diag(c) and
    B = I + D^½KD^½ = LL', the Gram changes by −T'D⁻¹T + ‖L⁻¹D^{−½}T‖², ln|V| by ln|B|.
    """
    L, root = factor(load.c, K)
    TQ, TE = load.TQ / root[:, None], load.TE / root[:, None]
    HQ, HE = forward(L, TQ), forward(L, TE)
    return Gram(
        gram.QQ - TQ.T @ TQ + HQ.T @ HQ,
        gram.QE - TQ.T @ TE + HQ.T @ HE,
        gram.EE - np.einsum("sb,sb->b", TE, TE) + np.einsum("sb,sb->b", HE, HE),
        gram.logdet + float(2 * np.log(np.diag(L)).sum()),
    )


@dataclass(frozen=True, eq=False)
class Spectrum:
    """Sites at the top of a model whose c does not depend on θ, for every variance ratio at once.

    With D^½RD^½ = UΛU', the Gram at K = λR changes by −H' diag(λΛ/(1 + λΛ)) H, H = U'D^{−½}T: one
    eigendecomposition per range, O(S·columns) per λ.
    """

    values: Array
    HQ: Array
    HE: Array

    @classmethod
    def of(cls, load: Load, R: Array) -> Spectrum:
        root = np.sqrt(load.c)
        values, U = linalg.eigh(R * root[:, None] * root, overwrite_a=True, check_finite=False)
        HQ, HE = U.T @ (load.TQ / root[:, None]), U.T @ (load.TE / root[:, None])
        return cls(np.maximum(values, 0.0), HQ, HE)

    def top(self, gram: Gram, ratio: float) -> Gram:
        """As :func:`top` with K = λR."""
        w = ratio * self.values / (1 + ratio * self.values)
        WQ = self.HQ * w[:, None]
        return Gram(
            gram.QQ - WQ.T @ self.HQ,
            gram.QE - WQ.T @ self.HE,
            gram.EE - w @ (self.HE * self.HE),
            gram.logdet + float(np.log1p(ratio * self.values).sum()),
        )


def factor(c: Array, K: Array) -> tuple[Array, Array]:
    """L (S, S) with LL' = I + D^½KD^½ in its lower triangle, and √c (S,). K is overwritten."""
    root = np.sqrt(c)
    K *= root[:, None]
    K *= root
    K[np.diag_indices_from(K)] += 1.0
    # The transpose of a C-ordered symmetric array is the same array in LAPACK's order: no copy.
    L, info = lapack.dpotrf(K.T, lower=1, clean=0, overwrite_a=1)
    if info:
        raise np.linalg.LinAlgError("the covariance of the sites is not positive definite")
    return np.asarray(L), root


def whiten(L: Array, root: Array, codes: npt.NDArray[np.int32], u: Array, block: Array, sums: Array) -> Array:
    """(n, k) block whitened by V = I + UKU': what lies outside the span of U stays, the rest by L⁻¹.

    u (n,) : indicator whitened by what lies below; sums (S, k) = U'block; L, root from :func:`factor`.
    """
    inside = sums / root[:, None]
    change = (forward(L, inside) - inside) / root[:, None]
    return np.asarray(block + u[:, None] * change[codes])
