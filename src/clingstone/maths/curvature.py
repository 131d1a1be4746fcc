"""Satterthwaite inference for a restricted-likelihood fit, from Grams alone.

With Φ(θ, σ²) = σ²(Q'V⁻¹Q)⁻¹ and the information H of (ln σ², θ), a contrast w has
df = 2/(g'H⁻¹g), g = ∂ ln(w'Φw) (Satterthwaite 1946; Giesbrecht & Burns 1985). The result does not
depend on how θ is parameterised. In ln σ² the derivatives are known: g₀ = 1 and H₀₀ = m/2.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from clingstone.maths import reml
from clingstone.maths.basis import Gram
from clingstone.maths.once import Array
from clingstone.maths.reference import fai_cornelius, satterthwaite

STEP = 1e-3  # on working scales of order one (logarithms, atanh): differences good to about six digits


@dataclass(frozen=True, eq=False)
class Slopes:
    """Φ and its derivatives in the free θ, with the information of (ln σ², θ).

    phi : (p, p). slopes : (d, p, p). information : (1 + d, 1 + d). largest : no df exceeds it.
    """

    phi: Array
    slopes: Array
    information: Array
    largest: float

    @property
    def sound(self) -> bool:
        """Whether the information is positive definite, so that it has an inverse to speak of."""
        return bool(np.linalg.eigvalsh(_unit(self.information))[0] > 1e-8)

    def df(self, w: Array) -> float:
        """Satterthwaite df of one contrast w (p,)."""
        g = np.r_[1.0, [w @ s @ w for s in self.slopes]] if len(self.slopes) else np.ones(1)
        g[1:] /= w @ self.phi @ w
        return satterthwaite(g, self.information, self.largest)

    def joint(self, L: Array) -> float:
        """Denominator df of the F test of q contrasts L (p, q) (Fai & Cornelius 1996)."""
        _, vectors = np.linalg.eigh(L.T @ self.phi @ L)
        return fai_cornelius(np.array([self.df(L @ v) for v in vectors.T]))


def slopes(
    gram: Callable[[Array], Gram],
    theta: Array,
    free: Sequence[int],
    m: int,
    restricted: bool = True,
    grams: Callable[[Array], Gram] | None = None,
    sigma2: float | None = None,
) -> Slopes:
    """Derivatives by central differences over the free coordinates of θ.

    gram : θ → Gram of one column of y. m : residual df, or n with ``restricted=False`` (ML).
    grams : θ → Gram of many columns drawn from the model itself; the information is then the
    expected one, by the mean of their residual sums of squares, and ``sigma2`` is the true scale.
    """
    here = gram(theta)
    s2 = float(reml.scale(here, m)[0])
    phi = s2 * np.linalg.inv(here.QQ)
    look = gram if grams is None else grams
    truth = s2 if sigma2 is None else sigma2

    def read(at: Array) -> tuple[float, float, Array]:
        found = look(at)
        _, c, logdet = reml.reduced(found)
        return found.logdet + (logdet if restricted else 0.0), float(np.mean(c)) / truth, found.QQ

    d = len(free)
    unit = STEP * np.eye(len(theta))[list(free)]
    D0, c0, _ = read(theta)
    H = np.zeros((1 + d, 1 + d))
    H[0, 0] = c0 / 2
    ends = [(read(theta + u), read(theta - u)) for u in unit]
    out = np.empty((d, *phi.shape))
    for i, (up, down) in enumerate(ends):
        out[i] = -phi @ ((up[2] - down[2]) / (2 * STEP * s2)) @ phi
        H[0, i + 1] = H[i + 1, 0] = -(up[1] - down[1]) / (4 * STEP)
        H[i + 1, i + 1] = (up[0] + up[1] - 2 * (D0 + c0) + down[0] + down[1]) / (2 * STEP**2)
        for j in range(i):
            corners = [
                read(theta + a * unit[i] + b * unit[j]) for a, b in ((1, 1), (-1, -1), (1, -1), (-1, 1))
            ]
            f = [D + c for D, c, _ in corners]
            H[i + 1, j + 1] = H[j + 1, i + 1] = (f[0] + f[1] - f[2] - f[3]) / (8 * STEP**2)
    return Slopes((phi + phi.T) / 2, out, H, float(m))


def _unit(H: Array) -> Array:
    """H scaled to a unit diagonal, so that definiteness does not depend on units."""
    diagonal = np.diag(H)
    if np.any(diagonal <= 0):
        return -np.eye(len(H))
    scale = 1 / np.sqrt(diagonal)
    return np.asarray(H * scale[:, None] * scale[None, :])
