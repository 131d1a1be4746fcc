"""Grams of many columns of y under places alone, each at its own range and ratio, from few shared ranges.

With D^½R_φD^½ = UΛU' and H = U'D^{−½}T (see ``maths.matern``), the Gram at V = I + λZR_φZ' is

    [Q, e]'[Q, e] − T'D⁻¹T + H' diag(1/(1 + λΛ)) H,   ln|V| = Σ ln(1 + λΛ),

one eigendecomposition per range, O(S) at each λ. Ranges are taken at even steps of ln φ, once for a map;
between them every entry is read by the polynomial through the nearest eight. Entries are analytic in ln φ:
at steps of a tenth the error is below 1e-8 of the entry.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy import linalg

from clingstone.covariance.algebras import Chosen
from clingstone.covariance.layered import Layered
from clingstone.covariance.pieces import SpatialPiece
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.maths.basis import Gram
from clingstone.maths.each import Grams, Minima, Places, minimise_from
from clingstone.maths.eachdf import SlopesEach, slopes_each
from clingstone.maths.groups import Load
from clingstone.maths.once import Array, kept, once

MOST_SITES = 500  # eigenvectors of every range are kept: 100 MB for so many sites
FINER = 4  # shared ranges per step of the range's own scan
WIDTH = 8  # ranges that a polynomial goes through
BLOCK = 16_384  # columns × places in one go
_PLACES = np.arange(WIDTH)
_SCALE = np.array([np.prod(np.delete(j - _PLACES, j)) for j in _PLACES], dtype=float)


def ranges(algebra: Chosen, response: Response) -> Ranges | None:
    """What evaluates places alone column by column, or None where there is more, or a large map."""
    if type(algebra) is not Layered or type(algebra.spatial) is not SpatialPiece:
        return None
    alone = algebra.serial is None and not algebra.chain and not algebra.above
    few = algebra.spatial.sites.count <= MOST_SITES
    return Ranges(algebra, response) if alone and few and len(algebra.parameters) == 2 else None


@dataclass(frozen=True, eq=False)
class Shared:
    """One range: values Λ (S,), H of the basis HQ (S, p), products of its columns two by two, QQ."""

    values: Array
    HQ: Array
    QQ: Array


@dataclass(frozen=True, eq=False)
class Mapped:
    """A field, alone or with levels, over B columns of y; θ as in the algebra."""

    algebra: Layered
    response: Response

    @property
    def design(self) -> Design:
        return self.response.design

    @property
    def piece(self) -> SpatialPiece:
        assert isinstance(self.algebra.spatial, SpatialPiece)
        return self.algebra.spatial


@dataclass(frozen=True, eq=False)
class Ranges(Mapped):
    """Places alone over B columns of y; θ = (ln φ, ln λ)."""

    @property
    @once
    def nodes(self) -> Array:
        """(N,) ln φ of the shared ranges."""
        reach = self.piece.parameters[0]
        return np.linspace(reach.low, reach.high, FINER * (len(reach.scan) - 1) + 1)

    def minima(self, near: Array | None = None) -> Minima:
        """The REML estimates of every column, from the best of a grid that all share."""
        m, B = self.design.m, self.response.B
        every = np.arange(B)

        def criteria(theta: Array, columns: Places) -> Array:
            return self.grams(theta, columns).criterion(m)

        ratio = self.piece.parameters[1]
        best, start = np.full(B, np.inf), np.empty((2, B))
        for k in range(0, len(self.nodes), FINER):
            for at in ratio.scan:
                theta = np.array([self.nodes[k], at])
                value = reml.criterion(self._gram(k, float(self.piece.variance(theta[:, None])[0])), m)
                better = value < best
                best[better], start[:, better] = value[better], theta[:, None]
        if near is not None:
            closer = criteria(np.repeat(near[:, None], B, axis=1), every) < best
            start[:, closer] = near[:, None]
        return minimise_from(criteria, self.algebra.parameters, start)

    def grams(self, theta: Array, columns: Places) -> Grams:
        """Grams of columns (K,) of y, each at its own θ (2, K)."""
        p, K = self.design.p, len(columns)
        step = self.nodes[1] - self.nodes[0]
        place = (theta[0] - self.nodes[0]) / step
        first = np.clip(np.floor(place).astype(np.int64) - WIDTH // 2 + 1, 0, len(self.nodes) - WIDTH)
        weight = _lagrange(place - first)  # (WIDTH, K)
        ratio = self.piece.variance(theta)
        half, QE, EE, logdet = np.zeros((K, p * (p + 1) // 2)), np.zeros((K, p)), np.zeros(K), np.zeros(K)
        order, size = np.argsort(first, kind="stable"), max(8, BLOCK // self.piece.sites.count)
        # Blocks of columns that lie in a cache; those of one block share nearly all their ranges.
        for these in np.split(order, range(size, K, size)):
            for k in range(int(first[these[0]]), int(first[these[-1]]) + WIDTH):
                near = these[(first[these] <= k) & (k < first[these] + WIDTH)]
                one, HE = self._shared(k), self._HE(k)[columns[near]]
                a = weight[k - first[near], near]
                V = 1 + ratio[near, None] * one.values
                logdet[near] += a * _log_product(V)
                W = a[:, None] / V
                half[near] += W @ one.QQ
                W *= HE
                QE[near] += W @ one.HQ
                EE[near] += np.einsum("ks,ks->k", W, HE)
        QQ, rest = np.empty((K, p, p)), self._rest
        i, j = np.triu_indices(p)
        QQ[:, i, j] = QQ[:, j, i] = half
        return Grams(rest.QQ + QQ, rest.QE.T[columns] + QE, rest.EE[columns] + EE, logdet)

    def slopes(self, theta: Array, columns: Places, free: Sequence[int]) -> SlopesEach:
        """What Satterthwaite's df take, at θ (d, K); free : coordinates that are not at a bound."""
        return slopes_each(lambda at: self.grams(at, columns), theta, free, self.design.m)

    # ---- what all columns share --------------------------------------------------------------

    def _gram(self, k: int, ratio: float) -> Gram:
        """All columns at the k-th shared range and one ratio."""
        one, HE, rest = self._shared(k), self._HE(k), self._rest
        V = 1 + ratio * one.values
        WQ = one.HQ / V[:, None]
        return Gram(
            rest.QQ + WQ.T @ one.HQ,
            rest.QE + (HE @ WQ).T,
            rest.EE + self._squares(k) @ (1 / V),
            float(np.log(V).sum()),
        )

    @property
    @once
    def _load(self) -> Load:
        load = self.algebra.forms(self.response).load(np.ones(1))
        assert load is not None
        return load

    @property
    @once
    def _rest(self) -> Gram:
        """[Q, e]'[Q, e] − T'D⁻¹T: what varies between the rows of one place."""
        base, root = reml.independent(self.design.p, self.response.ss), np.sqrt(self._load.c)
        TQ, TE = self._load.TQ / root[:, None], self._load.TE / root[:, None]
        if self.piece.sites.count == self.design.n:  # nothing but rounding
            return Gram(0 * base.QQ, 0 * base.QE, 0 * base.EE, 0.0)
        return Gram(base.QQ - TQ.T @ TQ, base.QE - TQ.T @ TE, base.EE - np.einsum("sb,sb->b", TE, TE), 0.0)

    def _turn(self, k: int) -> tuple[Array, Array]:
        """Λ (S,) and U'D^{−½} (S, S) of the k-th range; kept with the map, for every model over it."""
        c, piece = self._load.c, self.piece

        def found() -> tuple[Array, Array]:
            root = np.sqrt(c)
            R = piece.R(np.array([self.nodes[k], 0.0]))
            values, U = linalg.eigh(R * root[:, None] * root, overwrite_a=True, check_finite=False)
            return np.maximum(values, 0.0), np.ascontiguousarray(U.T / root)

        return kept(piece.sites, ("turn", piece.smoothness, float(self.nodes[k]), c.tobytes()), found)

    def _shared(self, k: int) -> Shared:
        def found() -> Shared:
            values, turn = self._turn(k)
            HQ = turn @ self._load.TQ
            i, j = np.triu_indices(self.design.p)
            return Shared(values, HQ, HQ[:, i] * HQ[:, j])

        return kept(self.design, ("shared range", self.piece.key, k), found)

    def _HE(self, k: int) -> Array:
        """(B, S) H of e, the values of one column of y lying together."""

        def found() -> Array:
            return np.ascontiguousarray((self._turn(k)[1] @ self._load.TE).T)

        return kept(self.response, ("shared range", self.piece.key, k), found)

    def _squares(self, k: int) -> Array:
        HE = self._HE(k)
        return np.asarray(HE * HE)


def _lagrange(t: Array) -> Array:
    """(WIDTH, K) weights of the values at 0, 1, … in the polynomial through them, at t (K,)."""
    apart = t - _PLACES[:, None]
    return np.stack([np.prod(np.delete(apart, j, axis=0), axis=0) / _SCALE[j] for j in _PLACES])


def _log_product(V: Array) -> Array:
    """(K,) Σ ln V over (K, S), by logarithms of products of four: no four ratios overflow."""
    for _ in range(2):
        if V.shape[1] % 2:
            V = np.hstack([V, np.ones((len(V), 1))])
        middle = V.shape[1] // 2
        V = V[:, :middle] * V[:, middle:]
    return np.asarray(np.log(V).sum(axis=1))
