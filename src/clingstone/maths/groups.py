"""Intercepts of groups, one level or nested, by what each cell adds up to.

At a level with cells g, V = V₀ + λ ZZ' and V₀ does not couple rows of different cells. All that
matters of a cell is c_g = z_g'V₀⁻¹z_g and t_g = z_g'V₀⁻¹[Q, e] (with V₀ = I and no weights: its count
and its sums). Then, by the Sherman–Morrison formula cell by cell,

    [Q, e]'V⁻¹[Q, e] = [Q, e]'V₀⁻¹[Q, e] − Σ_g λ/(1 + λc_g) t_g t_g',   ln|V| = ln|V₀| + Σ_g ln(1 + λc_g),

and the same pair at V is c_g/(1 + λc_g), t_g/(1 + λc_g), which add up to the cells of the next level.
Exact, O(cells · p²) at each λ.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from clingstone.maths.basis import Gram
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition


@dataclass(frozen=True, eq=False)
class Load:
    """What the rows of each of G cells amount to under V₀⁻¹: c (G,), TQ (G, p), TE (G, B)."""

    c: Array
    TQ: Array
    TE: Array

    def shrunk(self, ratio: float) -> Load:
        """The same cells once their own intercept of variance ratio λ is in V."""
        k = 1 / (1 + ratio * self.c)
        return Load(self.c * k, self.TQ * k[:, None], self.TE * k[:, None])

    def lifted(self, up: Partition) -> Load:
        """Added up to the cells of the next level; ``up`` puts these G cells into its cells."""
        return Load(up.sums(self.c), up.sums(self.TQ), up.sums(self.TE))


def lower(gram: Gram, load: Load, ratio: float) -> Gram:
    """The Gram once intercepts of variance ratio λ are added to V at these cells."""
    w = ratio / (1 + ratio * load.c)
    WQ = load.TQ * w[:, None]
    return Gram(
        gram.QQ - WQ.T @ load.TQ,
        gram.QE - WQ.T @ load.TE,
        gram.EE - np.einsum("gb,g,gb->b", load.TE, w, load.TE),
        gram.logdet + float(np.log1p(ratio * load.c).sum()),
    )


@dataclass(frozen=True, eq=False)
class Classes:
    """Cells of equal c put together: one level costs O(distinct sizes) at each λ, whatever G.

    c (D,), count (D,), QQ (D, p, p), QE (D, p, B), EE (D, B): Σ t_g t_g' over each class.
    """

    c: Array
    count: npt.NDArray[np.int64]
    QQ: Array
    QE: Array
    EE: Array

    @classmethod
    def of(cls, load: Load) -> Classes:
        c, code, count = np.unique(load.c, return_inverse=True, return_counts=True)
        order = np.argsort(code, kind="stable")
        ends = np.cumsum(count)
        TQ, TE = load.TQ[order], load.TE[order]
        spans = [slice(end - k, end) for end, k in zip(ends, count, strict=True)]
        return cls(
            c,
            count,
            np.stack([TQ[s].T @ TQ[s] for s in spans]),
            np.stack([TQ[s].T @ TE[s] for s in spans]),
            np.stack([np.einsum("gb,gb->b", TE[s], TE[s]) for s in spans]),
        )

    def lower(self, gram: Gram, ratio: float) -> Gram:
        """As :func:`lower`."""
        w = ratio / (1 + ratio * self.c)
        return Gram(
            gram.QQ - np.tensordot(w, self.QQ, axes=1),
            gram.QE - np.tensordot(w, self.QE, axes=1),
            gram.EE - w @ self.EE,
            gram.logdet + float(self.count @ np.log1p(ratio * self.c)),
        )


def whiten(part: Partition, u: Array, block: Array, ratio: float) -> tuple[Array, Array]:
    """(u, block) multiplied by V^{−1/2} for V = I + λUU', U the columns of u cut by cell.

    u (n,) : the level's indicator, already whitened by what lies below. block (n, k).
    """
    c = part.sums(u * u)
    shrink = 1 / np.sqrt(1 + ratio * c)
    back = ((1 - shrink) / c)[:, None] * part.sums(u[:, None] * block)
    return u * shrink[part.codes], block - u[:, None] * back[part.codes]


@dataclass(frozen=True, eq=False)
class Expected:
    """Expected REML information of a one-level intercept, and Kenward & Roger's ingredients.

    Parameters are (σ², τ²), V = σ²I + τ²ZZ'. information (2, 2) = ½tr(PVᵢPVⱼ); Phi (p, p) =
    (Q'V⁻¹Q)⁻¹; P (2, p, p) = −Q'V⁻¹VᵢV⁻¹Q; Q (2, 2, p, p) = Q'V⁻¹VᵢV⁻¹VⱼV⁻¹Q (Kenward & Roger
    1997, Biometrics 53:983). V is linear in its parameters, so the second-derivative term is zero.
    """

    information: Array
    Phi: Array
    P: Array
    Q: Array


def expected_information(n: int, c: Array, sums: Array, sigma2: float, tau2: float) -> Expected:
    """Closed form in the cells: c (G,) counts (or total weights), sums (G, p) of Q. O(Gp²)."""
    p, G = sums.shape[1], len(c)
    u = sigma2 + tau2 * c

    def S(w: Array) -> Array:
        return np.asarray(sums.T @ (sums * w[:, None]))

    # The part of Q that lies within cells sees only σ²: Wn = I − S(1/c).
    Wn = np.eye(p) - S(1 / c)
    Phi: Array = np.asarray(np.linalg.inv(Wn / sigma2 + S(1 / (c * u))), dtype=float)
    P = np.stack([-(Wn / sigma2**2 + S(1 / (c * u**2))), -S(u**-2.0)])
    Q = np.empty((2, 2, p, p))
    Q[0, 0] = Wn / sigma2**3 + S(1 / (c * u**3))
    Q[0, 1] = Q[1, 0] = S(u**-3.0)
    Q[1, 1] = S(c / u**3)
    t = np.array(
        [
            [(n - G) / sigma2**2 + np.sum(u**-2.0), np.sum(c / u**2)],
            [np.sum(c / u**2), np.sum(c**2 / u**2)],
        ]
    )
    info = np.empty((2, 2))
    for i in range(2):
        for j in range(2):
            info[i, j] = (t[i, j] - 2 * np.trace(Phi @ Q[i, j]) + np.trace(Phi @ P[i] @ Phi @ P[j])) / 2
    return Expected(info, Phi, P, Q)
