"""Places with levels above their rows on many columns of y: every column searched with exact derivatives.

Joint models of a field with an intercept of the places (what rows of one place share beyond what neighbours
share), and of levels that hold whole places. A variance is searched by ln(λ + a), a the noise of a place's
mean: it reaches zero like any other point, and large ratios by their logarithm.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from clingstone.covariance.algebras import Chosen
from clingstone.covariance.layered import Layered
from clingstone.covariance.pieces import GroupPiece, SpatialPiece
from clingstone.covariance.ranges import Mapped
from clingstone.design.response import Response
from clingstone.maths import matern, reml
from clingstone.maths.each import Grams, Minima, Places, newton
from clingstone.maths.eachdf import SlopesEach
from clingstone.maths.fieldeach import Fields
from clingstone.maths.groups import Load
from clingstone.maths.once import Array, once
from clingstone.maths.search import Flags, slack

MOST_SITES = 500  # an evaluation costs S³
EVERY = 2  # ranges of the scan that the starts take: every second one
RATIOS = (0.0, 0.3, 1.5, 6.0, 30.0)  # starts of the variance of a place's effects, in units of a mean's noise
OTHER = 4.0  # of the criterion on that grid, within which a second valley is followed as well
FALL, SHORT = 1e-6, 1e-2  # of the criterion, and of a step, below which Newton's next place is the last
LEAST = 1e-11  # a step of any kind that gains less is the last
DAMP = 1e-4  # of the first step, in units of the largest curvature; a bolder step is Newton's own
ROUNDS = 60


def field_each(algebra: Chosen, response: Response) -> FieldEach | None:
    """What evaluates a field and levels of whole places column by column, or None for other components."""
    if (
        type(algebra) is not Layered
        or type(algebra.spatial) is not SpatialPiece
        or algebra.serial is not None
    ):
        return None
    part = algebra.spatial.sites.part
    whole = all(piece.part.relation(part) == "same" for piece in algebra.chain)
    levels = algebra.chain or algebra.above
    few = algebra.spatial.sites.count <= MOST_SITES
    return FieldEach(algebra, response) if whole and levels and few else None


@dataclass(frozen=True, eq=False)
class FieldEach(Mapped):
    """A field with levels of whole places over B columns of y; θ as in the algebra."""

    @property
    def levels(self) -> tuple[GroupPiece, ...]:
        return (*self.algebra.chain, *self.algebra.above)

    @property
    def _sized(self) -> tuple[GroupPiece | SpatialPiece, ...]:
        """Pieces in the order of η, each with its variance."""
        return (*self.levels, self.piece)

    @property
    @once
    def fields(self) -> Fields:
        part, D, nu = self.piece.sites.part, self.piece.distance, self.piece.smoothness
        load = Load(self.design.sizes(part), self.design.sums(part), self.response.sums(part))

        def same(piece: GroupPiece) -> Array | None:
            up = piece.part.codes[part.first]
            return None if piece in self.algebra.chain else np.asarray((up[:, None] == up).astype(float))

        def kernels(reach: Array, bent: bool) -> tuple[Array, ...]:
            phi = reach[:, None, None]
            return matern.kernel_bends(D, phi, nu) if bent else (matern.kernel(D, phi, nu),)

        base = reml.independent(self.design.p, self.response.ss)
        return Fields(base, load, tuple(same(piece) for piece in self.levels), kernels, self.design.m)

    # ---- θ of the algebra and η of the fields: (λ_j …, ln φ, λ) ---------------------------------

    @property
    @once
    def _order(self) -> list[int]:
        """Where each η stands in θ."""
        own = [self.algebra.slices[piece.key].start for piece in self.levels]
        start = self.algebra.slices[self.piece.key].start
        return [*own, start, start + 1]

    @property
    def _ratios(self) -> list[int]:
        """Which of η are variances."""
        L = len(self.levels)
        return [*range(L), L + 1]

    def eta(self, theta: Array) -> Array:
        """(K, d) from θ (d, K)."""
        out = theta[self._order].T.copy()
        for i, piece in zip(self._ratios, self._sized, strict=True):
            out[:, i] = piece.variance(self.algebra.own(piece, theta))
        return out

    def theta(self, eta: Array) -> Array:
        """(d, K), inside the bounds; a variance of zero at its lower one."""
        out = np.empty(eta.T.shape)
        for i, place in enumerate(self._order):
            axis = self.algebra.parameters[place]
            x = eta[:, i]
            if i in self._ratios:
                with np.errstate(divide="ignore"):
                    x = np.log(x)
            out[place] = np.clip(x, axis.low, axis.high)
        return out

    # ---- reading ------------------------------------------------------------------------------

    def grams(self, theta: Array, columns: Places) -> Grams:
        """Grams of columns (K,) of y, each at its own θ (d, K)."""
        return self.fields.grams(self.eta(theta), columns)

    def slopes(self, theta: Array, columns: Places, free: Sequence[int]) -> SlopesEach:
        """What Satterthwaite's df take, at θ (d, K); free : coordinates that are not at a bound."""
        eta = self.eta(theta)
        found = self.fields.bent(eta, columns)
        mine = [self._order.index(i) for i in free]
        # ∂/∂ln λ = λ ∂/∂λ, and once more of the second kind.
        step = np.where([i in self._ratios for i in range(eta.shape[1])], eta, 1.0)
        first, second = _chained(found.first, found.second, step[:, None], self._ratios)
        s2 = found.c / self.design.m
        phi = np.linalg.inv(found.QQ) * s2[:, None, None]
        moved = (found.moved * step[..., None, None])[:, mine] / s2[:, None, None, None]
        H = np.empty((len(columns), 1 + len(free), 1 + len(free)))
        H[:, 0, 0] = self.design.m / 2
        H[:, 0, 1:] = H[:, 1:, 0] = -first[:, 1][:, mine] / (2 * s2[:, None])
        inner = second[:, 0] + second[:, 1] / s2[:, None, None]
        H[:, 1:, 1:] = inner[:, mine][:, :, mine] / 2
        return SlopesEach(phi, -phi[:, None] @ moved @ phi[:, None], H, float(self.design.m))

    # ---- searching ----------------------------------------------------------------------------

    def minima(self) -> Minima:
        """The REML estimates of every column: the better of the ends of its two deepest valleys."""
        first, second, also = self._starts()
        every = np.arange(len(first))
        found = self._descend(first, every)
        found.take(self._descend(second, also), also)
        gone = np.flatnonzero(found.eta[:, -1] == 0)
        back = self._returned(found.eta[gone], gone)
        again = np.isfinite(back[:, -2])
        found.take(self._descend(back[again], gone[again]), gone[again])
        theta = self.theta(found.eta)
        box = np.array([(axis.low, axis.high) for axis in self.algebra.parameters])
        bound = (theta <= box[:, :1] + 1e-6) | (theta >= box[:, 1:] - 1e-4)
        # Where there is no field there is no range.
        bound[self._order[-2]] |= found.eta[:, -1] == 0
        return Minima(theta, found.value, bound, found.settled)

    def _returned(self, eta: Array, columns: Places) -> Array:
        """η of columns without a field, at the range at which one would gain most; NaN where none gains."""
        best, out = np.zeros(len(eta)), eta.copy()
        out[:, -2] = np.nan
        for phi in self._reaches if len(eta) else ():
            at = eta.copy()
            at[:, -2] = phi
            slope = self.fields.bent(at, columns).slope[:, -1] * self._noise
            better = slope < best - slack(0.0)
            best[better], out[better, -2] = slope[better], phi
        return out

    @property
    @once
    def _noise(self) -> float:
        """a, the noise of a place's mean."""
        return float(np.mean(1 / self.fields.load.c))

    @property
    def _reaches(self) -> Array:
        """ln φ at which fields are looked for."""
        return np.array(self.algebra.parameters[self._order[-2]].scan[1::EVERY])

    @property
    def grid(self) -> int:
        """Places of the grid of starts."""
        return int(len(self._reaches) * len(RATIOS) ** len(self.levels) * (len(RATIOS) - 1))

    def _starts(self) -> tuple[Array, Array, Places]:
        """(B, d) the best of a grid that all columns share, and (C, d) of columns (C,) the second valley.

        Valleys are those along the range, the best variances taken at each.
        """
        reach = self._reaches
        ratios = [self._noise * r for r in RATIOS]
        B = self.response.B
        best, at = np.full((len(reach), B), np.inf), np.empty((len(reach), B, len(self._order)))
        for k, phi in enumerate(reach):
            for *levels, top in itertools.product(*[ratios] * len(self.levels), ratios[1:]):
                eta = np.array([*levels, phi, top])
                gram = self.algebra.gram(self.theta(eta[None])[:, 0], self.response)
                value = reml.criterion(gram, self.design.m)
                better = value < best[k]
                best[k, better], at[k, better] = value[better], eta
        padded = np.pad(best, ((1, 1), (0, 0)), constant_values=np.inf)
        valley = np.where((best <= padded[:-2]) & (best <= padded[2:]), best, np.inf)
        one, two = np.argsort(valley, axis=0, kind="stable")[:2]
        every = np.arange(B)
        also = np.flatnonzero(valley[two, every] < best[one, every] + OTHER)
        return at[one, every], at[two[also], also], also

    def _descend(self, eta: Array, columns: Places) -> _Ends:
        """Levenberg's damped Newton on the searching scale, variances of zero held while that pays."""
        scale = self._scale
        x = scale.at(eta)
        value, g, H = scale.read(self.fields, x, columns)
        damp, done = np.full(len(x), DAMP), np.zeros(len(x), dtype=bool)
        for _ in range(ROUNDS):
            live = np.flatnonzero(~done)
            if not len(live):
                break
            at, slope = x[live], g[live]
            held = ((at <= scale.low) & (slope > 0)) | ((at >= scale.high) & (slope < 0))
            held[:, -2] |= at[:, -1] <= scale.low[-1]  # no field, no range
            step = newton(np.moveaxis(H[live], 0, -1), slope.T, held.T, damp[live]).T
            trial = np.clip(at + step, scale.low, scale.high)
            fall = np.abs(np.einsum("ki,ki->k", slope * ~held, trial - at))
            # Newton squares the distance: so short a step ends within rounding of the minimum.
            near = (fall < FALL) & (np.abs(trial - at).max(axis=1) < SHORT) & (damp[live] <= DAMP)
            last = near | (fall < LEAST)
            end = live[last]
            x[end], value[end], done[end] = trial[last], value[end] - fall[last] / 2, True
            live, trial = live[~last], trial[~last]
            if not len(live):
                continue
            new = scale.read(self.fields, trial, columns[live])
            good = new[0] <= value[live]
            took = live[good]
            x[took] = trial[good]
            value[took], g[took], H[took] = (part[good] for part in new)
            damp[live] = np.where(good, damp[live] / 10, np.maximum(damp[live], 1e-6) * 10)
            done[live] |= damp[live] > 1e8
        return _Ends(scale.eta(x), value, done)

    @property
    @once
    def _scale(self) -> _Scale:
        a, axes = self._noise, [self.algebra.parameters[i] for i in self._order]
        low, high = np.array([axis.low for axis in axes]), np.array([axis.high for axis in axes])
        low[self._ratios], high[self._ratios] = np.log(a), np.log(np.exp(high[self._ratios]) + a)
        return _Scale(a, self._ratios, low, high)


@dataclass(frozen=True, eq=False)
class _Scale:
    """The scale of the search: ln(λ_j + a) …, ln φ, ln(λ + a); its box low, high (d,)."""

    a: float
    ratios: list[int]
    low: Array
    high: Array

    def at(self, eta: Array) -> Array:
        x = eta.copy()
        x[:, self.ratios] = np.log(eta[:, self.ratios] + self.a)
        return np.clip(x, self.low, self.high)

    def eta(self, x: Array) -> Array:
        """Back; exactly zero at the lower end."""
        out, own = x.copy(), x[:, self.ratios]
        out[:, self.ratios] = np.where(own <= self.low[self.ratios], 0.0, np.exp(own) - self.a)
        return out

    def read(self, fields: Fields, x: Array, columns: Places) -> tuple[Array, Array, Array]:
        """The criterion (K,), its slope (K, d) and bend (K, d, d) on this scale."""
        at = self.eta(x)
        found = fields.bent(at, columns)
        step = np.ones_like(at)
        step[:, self.ratios] = at[:, self.ratios] + self.a
        return found.value, *_chained(found.slope, found.bend, step, self.ratios)


@dataclass(eq=False)
class _Ends:
    """Where columns ended: η (K, d), the criterion (K,), whether the search settled (K,)."""

    eta: Array
    value: Array
    settled: Flags

    def take(self, other: _Ends, columns: Places) -> None:
        """The lower end of each of those columns."""
        lower = other.value < self.value[columns] - slack(0.0)
        c = columns[lower]
        self.eta[c], self.value[c], self.settled[c] = (
            other.eta[lower],
            other.value[lower],
            other.settled[lower],
        )


def _chained(first: Array, second: Array, step: Array, ratios: list[int]) -> tuple[Array, Array]:
    """Derivatives (…, d), (…, d, d) once λ is told by a logarithm x: dλ/dx = step (…, d) = d²λ/dx²."""
    out = second * step[..., :, None] * step[..., None, :]
    for i in ratios:
        out[..., i, i] += first[..., i] * step[..., i]
    return first * step, out
