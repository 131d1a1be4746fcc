"""Intercepts of groups, one level or nested, by what each cell adds up to.

At a level with cells g, V = V₀ + λ ZZ' and V₀ does not couple rows of different cells. All that
matters of a cell is c_g = z_g'V₀⁻¹z_g and t_g = z_g'V₀⁻¹[Q, e] (with V₀ = I and no weights: its count
and its sums). Then, by the Sherman–Morrison formula cell by cell,

    [Q, e]'V⁻¹[Q, e] = [Q, e]'V₀⁻¹[Q, e] − Σ_g λ/(1 + λc_g) t_g t_g',   ln|V| = ln|V₀| + Σ_g ln(1 + λc_g),

and the same pair at V is c_g/(1 + λc_g), t_g/(1 + λc_g), which add up to the cells of the next level.
Exact, O(cells · p²) at each λ.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
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
    """Cells of equal loads put together: one level costs O(classes) at each θ, whatever G.

    V₀⁻¹ is a weighted sum of F fixed forms (of one, the identity, for independent rows), and so are the
    loads; what they add up to is quadratic in the weights, P = F(F + 1)/2 products of two forms.

    c (D, F), count (D,); QQ (D, P, p, p), QE (D, P, p, B), EE (D, P, B): Σ t_g t_g' over each class.
    """

    c: Array
    count: npt.NDArray[np.int64]
    QQ: Array
    QE: Array
    EE: Array

    @classmethod
    def of(cls, loads: Sequence[Load], most: float = np.inf) -> Classes | None:
        """From the loads under each form; None where D·P exceeds ``most``, and nothing would be saved."""
        c, code, count = _alike(np.stack([load.c for load in loads], axis=1))
        pairs = _pairs(len(loads))
        if len(c) * len(pairs) > most:
            return None
        order = np.argsort(code, kind="stable")
        ends = np.cumsum(count)
        spans = [order[end - k : end] for end, k in zip(ends, count, strict=True)]
        Q, E = [load.TQ for load in loads], [load.TE for load in loads]

        def summed(of: Callable[[Array, Array], Array], left: list[Array], right: list[Array]) -> Array:
            """Σ over each class for every product of two forms, both orders when they differ."""
            made = []
            for rows in spans:
                a, b = [x[rows] for x in left], [x[rows] for x in right]
                made.append([of(a[i], b[j]) + (of(a[j], b[i]) if i != j else 0.0) for i, j in pairs])
            return np.array(made)

        return cls(
            c,
            count,
            summed(lambda a, b: a.T @ b, Q, Q),
            summed(lambda a, b: a.T @ b, Q, E),
            summed(lambda a, b: np.einsum("gb,gb->b", a, b), E, E),
        )

    def shrinkage(self, ratio: Array, w: Array) -> tuple[Array, Array]:
        """Weights (K, D·P) of the products above, and Σ ln(1 + λc) (K,), at λ (K,) and weights (K, F)."""
        i, j = np.array(_pairs(w.shape[1])).T
        c = w @ self.c.T
        by_class = ratio[:, None] / (1 + ratio[:, None] * c)
        products = by_class[:, :, None] * (w[:, i] * w[:, j])[:, None, :]
        return products.reshape(len(w), -1), np.log1p(ratio[:, None] * c) @ self.count.astype(float)

    def lower(self, gram: Gram, ratio: float, w: Array) -> Gram:
        """As :func:`lower`, at weights (F,) of the forms."""
        products, logdet = self.shrinkage(np.array([ratio]), w[None])
        p, B = self.QE.shape[2:]
        return Gram(
            gram.QQ - (products @ self.QQ.reshape(-1, p * p)).reshape(p, p),
            gram.QE - (products @ self.QE.reshape(-1, p * B)).reshape(p, B),
            gram.EE - products[0] @ self.EE.reshape(-1, B),
            gram.logdet + float(logdet[0]),
        )


def _pairs(F: int) -> list[tuple[int, int]]:
    return [(i, j) for i in range(F) for j in range(i, F)]


def _alike(c: Array) -> tuple[Array, npt.NDArray[np.int64], npt.NDArray[np.int64]]:
    """Distinct rows of c (G, F), which of them each row is (G,), and how often each occurs."""
    code = np.zeros(len(c), dtype=np.int64)
    for column in c.T:
        values, own = np.unique(column, return_inverse=True)
        _, code = np.unique(code * len(values) + own.ravel(), return_inverse=True)
        code = code.ravel()
    _, first, count = np.unique(code, return_index=True, return_counts=True)
    return c[first], code, count


def whiten(part: Partition, u: Array, block: Array, ratio: float) -> tuple[Array, Array]:
    """(u, block) multiplied by V^{−1/2} for V = I + λUU', U the columns of u cut by cell.

    u (n,) : the level's indicator, already whitened by what lies below. block (n, k).
    """
    c = part.sums(u * u)
    shrink = 1 / np.sqrt(1 + ratio * c)
    back = ((1 - shrink) / c)[:, None] * part.products(u, block)
    out = back[part.codes]
    out *= -u[:, None]
    out += block
    return u * shrink[part.codes], out


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
