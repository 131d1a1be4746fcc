"""Kenward-Roger inference for covariance models that are linear in their parameters.

Kenward & Roger (1997), with expected information; V is linear in its parameters, so the term of second
derivatives is zero. Everything is in the basis Q: Φ = (Q'V⁻¹Q)⁻¹, P_i = −Q'V⁻¹V_iV⁻¹Q and
Q_ij = Q'V⁻¹V_iV⁻¹V_jV⁻¹Q, V_i the derivative of V in parameter i.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from clingstone.maths.once import Array
from clingstone.maths.reference import fai_cornelius


@dataclass(frozen=True, eq=False)
class Kenward:
    """Φ, its adjusted form, the P_i, and W, the inverse expected information of the parameters.

    phi, adjusted : (p, p). P : (d, p, p). W : (d, d).
    """

    phi: Array
    adjusted: Array
    P: Array
    W: Array

    @classmethod
    def of(cls, phi: Array, P: Array, QQ: Array, information: Array) -> Kenward:
        """From Φ, P (d, p, p), Q_ij (d, d, p, p) and the expected restricted information (d, d)."""
        PPhi = P @ phi
        W = np.asarray(np.linalg.inv(information))
        inner = np.einsum("ij,ijab->ab", W, QQ - np.einsum("iab,jbc->ijac", PPhi, P))
        adjusted = phi + 2 * phi @ inner @ phi
        return cls(phi, (adjusted + adjusted.T) / 2, P, W)

    def df(self, w: Array) -> float:
        """Denominator df of one contrast w (p,): 2/A₁, Satterthwaite's df with expected information."""
        u = self.phi @ w
        g = np.einsum("a,iab,b->i", u, self.P, u) / (w @ u)
        return float(2.0 / (g @ self.W @ g))

    def joint(self, L: Array) -> tuple[float, float]:
        """(scale, df2) so that scale · (1/q) β'L(L'Φ_AL)⁻¹L'β is referred to F(q, df2). L (p, q), q ≥ 2.

        Where the approximated mean or variance of F does not exist (few groups), the df of the q
        independent contrasts are combined instead (Fai & Cornelius 1996) and the scale is one.
        """
        q = L.shape[1]
        theta = L @ np.linalg.solve(L.T @ self.phi @ L, L.T)
        T = np.einsum("ab,bc,icd,de->iae", theta, self.phi, self.P, self.phi)
        trace = np.einsum("iaa->i", T)
        A1 = float(trace @ self.W @ trace)
        A2 = float(np.einsum("ij,iab,jba->", self.W, T, T))
        B = (A1 + 6 * A2) / (2 * q)
        g = ((q + 1) * A1 - (q + 4) * A2) / ((q + 2) * A2)
        d = 3 * q + 2 * (1 - g)
        c1, c2, c3 = g / d, (q - g) / d, (q + 2 - g) / d
        mean = 1 / (1 - A2 / q)
        variance = 2 / q * (1 + c1 * B) / ((1 - c2 * B) ** 2 * (1 - c3 * B))
        rho = variance / (2 * mean**2)
        df2 = 4 + (q + 2) / (q * rho - 1)
        if not (q > A2 and c2 * B < 1 and c3 * B < 1 and df2 > 2):
            _, vectors = np.linalg.eigh(L.T @ self.phi @ L)
            return 1.0, fai_cornelius(np.array([self.df(L @ v) for v in vectors.T]))
        return df2 / (mean * (df2 - 2)), df2
