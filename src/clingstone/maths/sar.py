"""Simultaneous autoregression u = λWu + ε over places: log-determinant, Grams, profile, moments.

V = σ²(A'A)⁻¹, A = I − λW (Whittle 1954; Ord 1975). Since V⁻¹ is quadratic in λ, the Gram of [Q, e] is
G₀ − λG₁ + λ²G₂ with three small matrices made once; what is left is ln|A|, and that does not know y.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from numpy.polynomial import chebyshev
from scipy import optimize, sparse
from scipy.sparse.linalg import SuperLU, splu

from clingstone.maths import reml
from clingstone.maths.basis import Gram
from clingstone.maths.groups import Load
from clingstone.maths.once import Array, once

DENSE = 1000  # places up to which all eigenvalues are taken
NODES = 28  # factorizations behind an interpolated ln|A|
NEAR_ONE = 1e-4  # how near 1/λ the search comes to the ends of the admissible range
GRID = 81
GOLDEN = (np.sqrt(5.0) - 1) / 2


@dataclass(frozen=True, eq=False)
class Links:
    """Weights between S places.

    W (S, S) : zero diagonal. similar : the symmetric matrix D^½WD^{−½} where W is a symmetric table of
    weights divided by its row sums D, else None; root (S,) : D^½.
    """

    W: sparse.csr_array
    similar: sparse.csr_array | None = None
    root: Array | None = None

    @classmethod
    def of(cls, C: sparse.csr_array) -> Links:
        """From any table of non-negative weights: the larger of c_ij and c_ji, divided by row sums.

        A likelihood needs ln|I − λW| real over a known range; symmetrising first makes it so.
        """
        C = sparse.csr_array(C.maximum(C.T))
        total = np.asarray(C.sum(axis=1)).ravel()
        scale = np.where(total > 0, total, 1.0)
        half = sparse.diags_array(1 / np.sqrt(scale))
        W = sparse.csr_array(sparse.diags_array(1 / scale) @ C)
        return cls(W, sparse.csr_array(half @ C @ half), np.sqrt(scale))

    @property
    def count(self) -> int:
        return int(self.W.shape[0])

    def left(self, lam: float) -> sparse.csc_array:
        """A = I − λW."""
        return sparse.csc_array(sparse.eye_array(self.count) - lam * self.W)

    @property
    @once
    def eigenvalues(self) -> Array | None:
        """All of W's, where they are real and few enough."""
        if self.similar is None or self.count > DENSE:
            return None
        return np.asarray(np.linalg.eigvalsh(self.similar.toarray()))

    @property
    @once
    def range(self) -> tuple[float, float]:
        """λ for which A stays regular.

        Rows that add to one have 1 as their largest eigenvalue and none beyond ±1; with all eigenvalues
        at hand the range goes on to 1/smallest. Weights that are not similar to symmetric ones are
        taken for |λ| < 1/min(row, column norm) (Kelejian & Prucha 2010).
        """
        if self.similar is None:
            size = abs(self.W)
            norm = min(float(size.sum(axis=0).max()), float(size.sum(axis=1).max()))
            return -1 / norm, 1 / norm
        if self.eigenvalues is not None and self.eigenvalues[0] < 0:
            return 1 / float(self.eigenvalues[0]), 1.0
        return -1.0, 1.0

    @property
    def searched(self) -> tuple[float, float]:
        """The range of a search: a touch inside ``range``."""
        low, high = self.range
        return low * (1 - NEAR_ONE), high * (1 - NEAR_ONE)

    def _symmetric(self, lam: float) -> SuperLU:
        """A factorization of I − λD^½WD^{−½}."""
        assert self.similar is not None
        M = sparse.csc_array(sparse.eye_array(self.count) - lam * self.similar)
        return splu(M, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True})

    def factor(self, lam: float) -> float:
        """ln|A| by one sparse factorization."""
        lu = splu(self.left(lam)) if self.similar is None else self._symmetric(lam)
        return float(np.log(np.abs(lu.U.diagonal())).sum())

    def solve(self, lam: float, block: Array) -> Array:
        """A⁻¹ block (S, k); by the symmetric sister where there is one, which fills in far less."""
        if self.root is None:
            return np.asarray(splu(self.left(lam)).solve(np.ascontiguousarray(block)))
        root = self.root[:, None]
        return np.asarray(self._symmetric(lam).solve(root * block) / root)

    def solve_across(self, lam: float, block: Array) -> Array:
        """A⁻ᵀ block (S, k)."""
        if self.root is None:
            return np.asarray(splu(sparse.csc_array(self.left(lam).T)).solve(np.ascontiguousarray(block)))
        root = self.root[:, None]
        return np.asarray(root * self._symmetric(lam).solve(block / root))

    @property
    @once
    def _pole(self) -> int:
        """How often the upper end of the range is an eigenvalue: connected parts of two places or more."""
        if self.similar is None:
            return 1
        _, label = sparse.csgraph.connected_components(self.similar, directed=False)
        return int(np.sum(np.bincount(label) > 1))

    @property
    @once
    def _series(self) -> tuple[Array, tuple[float, float]]:
        """Chebyshev coefficients of ln|A| less its pole, in t = −√(λ_u − λ), and the interval of t.

        Eigenvalues crowd at the upper end of the range, where ln|A| has a branch; t unfolds it.
        """
        low, high = self.searched
        end = self.range[1]
        ends = (-np.sqrt(end - low), -np.sqrt(end - high))
        x = np.cos(np.pi * (np.arange(NODES) + 0.5) / NODES)
        t = 0.5 * (ends[0] + ends[1]) + 0.5 * (ends[1] - ends[0]) * x
        lam = end - t**2
        value = np.array([self.factor(float(v)) for v in lam]) - self._pole * np.log1p(-lam / end)
        return chebyshev.chebfit(x, value, NODES - 1), (float(ends[0]), float(ends[1]))

    def logdet(self, lam: Array) -> Array:
        """ln|A| at any number of λ: from eigenvalues, or interpolated between factorizations."""
        lam = np.asarray(lam, dtype=float)
        if self.eigenvalues is not None:
            return np.asarray(np.log(np.abs(1 - lam[..., None] * self.eigenvalues)).sum(axis=-1))
        series, (first, last) = self._series
        end = self.range[1]
        x = (-np.sqrt(end - lam) - 0.5 * (first + last)) / (0.5 * (last - first))
        return np.asarray(chebyshev.chebval(x, series) + self._pole * np.log1p(-lam / end))

    def draw(self, lam: float, rng: np.random.Generator, B: int) -> Array:
        """(S, B) draws of A⁻¹ε, ε of unit variance."""
        return self.solve(lam, rng.standard_normal((self.count, B)))


@dataclass(frozen=True, eq=False)
class Profile:
    """[Q, e]'A'A[Q, e] for every λ, B columns of e, one row per place.

    QQ1, QQ2 (p, p) : Q'(W + W')Q and Q'W'WQ; QE1, QE2 (p, B) and EE0, EE1, EE2 (B,) likewise.
    """

    links: Links
    QQ1: Array
    QQ2: Array
    QE1: Array
    QE2: Array
    EE0: Array
    EE1: Array
    EE2: Array

    @classmethod
    def of(cls, links: Links, Q: Array, e: Array) -> Profile:
        """Q (S, p) orthonormal and e (S, B) orthogonal to it, rows in the order of the places."""
        WQ, We = links.W @ Q, links.W @ e
        one = Q.T @ WQ
        return cls(
            links,
            one + one.T,
            WQ.T @ WQ,
            Q.T @ We + WQ.T @ e,
            WQ.T @ We,
            np.einsum("ij,ij->j", e, e),
            2 * np.einsum("ij,ij->j", e, We),
            np.einsum("ij,ij->j", We, We),
        )

    def gram(self, lam: float) -> Gram:
        """On the scale where σ² = 1; the logarithm of |V| is −2 ln|A|."""
        return Gram(
            np.eye(len(self.QQ1)) - lam * self.QQ1 + lam**2 * self.QQ2,
            -lam * self.QE1 + lam**2 * self.QE2,
            self.EE0 - lam * self.EE1 + lam**2 * self.EE2,
            -2.0 * float(self.links.logdet(np.array(lam))),
        )

    def column(self, b: int) -> Profile:
        pick = slice(b, b + 1)
        return Profile(
            self.links,
            self.QQ1,
            self.QQ2,
            self.QE1[:, pick],
            self.QE2[:, pick],
            self.EE0[pick],
            self.EE1[pick],
            self.EE2[pick],
        )

    def criterion(self, lam: Array, m: int, restricted: bool) -> Array:
        """(B,) −2ℓ at a λ for each column, σ² profiled out; m residual df, or n for ML."""
        p = len(self.QQ1)
        l1 = lam[:, None, None]
        QQ = np.eye(p) - l1 * self.QQ1 + l1**2 * self.QQ2
        QE = (-lam * self.QE1 + lam**2 * self.QE2).T[:, :, None]
        L = np.linalg.cholesky(QQ)
        half = np.linalg.solve(L, QE)[:, :, 0]
        c = self.EE0 - lam * self.EE1 + lam**2 * self.EE2 - np.einsum("bp,bp->b", half, half)
        out = reml.profiled(c, m) - 2.0 * self.links.logdet(lam)
        if restricted:
            out = out + 2.0 * np.log(np.einsum("bii->bi", L)).sum(axis=1)
        return np.asarray(out)

    def search(self, m: int, restricted: bool) -> tuple[Array, npt.NDArray[np.bool_]]:
        """λ̂ (B,) and whether it lies at an end of the range: a shared grid, then golden sections."""
        low, high = self.links.searched
        B = len(self.EE0)
        # Nodes crowd at both ends, where the likelihood may still turn.
        grid = 0.5 * (low + high) - 0.5 * (high - low) * np.cos(np.linspace(0, np.pi, GRID))
        value = np.stack([self.criterion(np.full(B, lam), m, restricted) for lam in grid])
        best = value.argmin(axis=0)
        a, b = grid[np.maximum(best - 1, 0)], grid[np.minimum(best + 1, GRID - 1)]
        x, y = b - GOLDEN * (b - a), a + GOLDEN * (b - a)
        fx, fy = self.criterion(x, m, restricted), self.criterion(y, m, restricted)
        for _ in range(36):
            left = fx < fy
            a, b = np.where(left, a, x), np.where(left, y, b)
            new = np.where(left, b - GOLDEN * (b - a), a + GOLDEN * (b - a))
            f = self.criterion(new, m, restricted)
            x, y = np.where(left, new, y), np.where(left, x, new)
            fx, fy = np.where(left, f, fy), np.where(left, fx, f)
        found = 0.5 * (a + b)
        edge = (found - low < 1e-6) | (high - found < 1e-6)
        return found, edge

    def interval(self, lam: float, m: int, restricted: bool, drop: float) -> tuple[float, float]:
        """Where −2ℓ of the first column has risen by ``drop`` on both sides of λ̂, or an end of the range."""
        one = self.column(0)
        top = float(one.criterion(np.array([lam]), m, restricted)[0])

        def rise(at: float) -> float:
            return float(one.criterion(np.array([at]), m, restricted)[0]) - top - drop

        def crossed(end: float) -> float:
            return end if rise(end) <= 0 else float(optimize.brentq(rise, end, lam, xtol=1e-8))

        low, high = self.links.searched
        return crossed(low), crossed(high)


def top(gram: Gram, load: Load, links: Links, lam: float, ratio: float) -> Gram:
    """The Gram once place effects with covariance λ_r(A'A)⁻¹ are added to V (see ``matern.top``).

    load : the places' c and t under what lies below. By Woodbury with the sparse precision
    P = A'A/λ_r, the Gram changes by −T'(P + D)⁻¹T and ln|V| by ln|P + D| − ln|P|.
    """
    A = links.left(lam)
    lu = splu(
        sparse.csc_array((A.T @ A) / ratio + sparse.diags_array(load.c)),
        permc_spec="MMD_AT_PLUS_A",
        diag_pivot_thresh=0.0,
        options={"SymmetricMode": True},
    )
    solved = lu.solve(np.hstack([load.TQ, load.TE]))
    p = load.TQ.shape[1]
    change = load.TQ.T @ solved
    logdet = float(np.log(np.abs(lu.U.diagonal())).sum()) + links.count * np.log(ratio)
    return Gram(
        gram.QQ - change[:, :p],
        gram.QE - change[:, p:],
        gram.EE - np.einsum("sb,sb->b", load.TE, solved[:, p:]),
        gram.logdet + logdet - 2.0 * float(links.logdet(np.array(lam))),
    )


def moments(links: Links, u: Array) -> tuple[Array, Array]:
    """λ̂ and σ̂² (B,) of the three moment conditions of Kelejian & Prucha (1999), u (S, B) residuals.

    With ū = Wu and ū̄ = W²u the conditions are linear in (λ, λ², σ²); their squares are minimised.
    Needs no determinant, so it serves any W and any number of places.
    """
    W, n = links.W, links.count
    one = W @ u
    two = W @ one
    trace = float(W.multiply(W).sum())

    def dot(a: Array, b: Array) -> Array:
        return np.asarray(np.einsum("ij,ij->j", a, b) / n)

    G = np.empty((u.shape[1], 3, 3))
    G[:, 0] = np.stack([2 * dot(u, one), -dot(one, one), np.ones(u.shape[1])], axis=1)
    G[:, 1] = np.stack([2 * dot(two, one), -dot(two, two), np.full(u.shape[1], trace / n)], axis=1)
    G[:, 2] = np.stack([dot(u, two) + dot(one, one), -dot(one, two), np.zeros(u.shape[1])], axis=1)
    g = np.stack([dot(u, u), dot(one, one), dot(u, one)], axis=1)
    found = [_least_squares(G[b], g[b]) for b in range(u.shape[1])]
    return np.array([f[0] for f in found]), np.array([f[1] for f in found])


def _least_squares(G: Array, g: Array) -> tuple[float, float]:
    """σ² is linear, so it is profiled out and λ searched on (−1, 1)."""
    column = G[:, 2]

    def split(lam: float) -> tuple[float, float]:
        rest = g - G[:, 0] * lam - G[:, 1] * lam**2
        sigma2 = float(column @ rest / (column @ column))
        return float(np.sum((rest - column * sigma2) ** 2)), sigma2

    grid = np.linspace(-0.99, 0.99, 67)
    start = int(np.argmin([split(float(v))[0] for v in grid]))
    ends = float(grid[max(start - 1, 0)]), float(grid[min(start + 1, 66)])
    found = optimize.minimize_scalar(
        lambda v: split(float(v))[0], bounds=ends, method="bounded", options={"xatol": 1e-12}
    )
    lam = float(found.x)
    return lam, split(lam)[1]


def neighbour_correlation(links: Links, lam: float, rng: np.random.Generator) -> float:
    """Mean correlation of linked places that λ implies: it is not λ itself, and differs by place.

    Exact up to ``DENSE`` places, from draws above (50 to 200).
    """
    pairs = sparse.coo_array(links.W)
    i, j = pairs.coords
    if not len(i):
        return float("nan")
    if links.count <= DENSE:
        inverse = np.linalg.inv(links.left(lam).toarray())
        V = inverse @ inverse.T
        sd = np.sqrt(np.diag(V))
        return float(np.mean(V[i, j] / (sd[i] * sd[j])))
    u = links.draw(lam, rng, int(np.clip(4_000_000 // links.count, 50, 200)))
    u /= np.sqrt(np.mean(u**2, axis=1, keepdims=True))
    return float(np.mean(np.einsum("kb,kb->k", u[i], u[j]) / u.shape[1]))
