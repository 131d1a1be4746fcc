"""Places beyond the reach of a dense covariance: the nearest-neighbour likelihood in the layers' scheme."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from clingstone.covariance.layered import Layered
from clingstone.covariance.pieces import SpatialPiece, ratio_of
from clingstone.design.response import Response
from clingstone.maths import groups, matern, vecchia
from clingstone.maths.basis import Gram
from clingstone.maths.groups import Load
from clingstone.maths.once import Array, once
from clingstone.maths.vecchia import KEPT, NEIGHBOURS, Order
from clingstone.needs import NotSupported, memory

TINY = 1e-6  # of a site's variance, added where a field stands without noise


@dataclass(frozen=True, eq=False)
class NearestPiece(SpatialPiece):
    """As ``SpatialPiece``, each site conditioned on ``NEIGHBOURS`` earlier ones; nothing is S × S."""

    @property
    def distance(self) -> Array:
        raise NotSupported(
            f"{self.sites.count:,} distinct places are too many for a table of all their distances",
            "What needs it is left out beyond the dense limit.",
        )

    @property
    @once
    def order(self) -> Order:
        """The same for the same sites: its random choices are part of the method."""
        S = self.sites.count
        distances = NEIGHBOURS * (NEIGHBOURS + 1) / 2 if S <= KEPT else 0
        memory(8.0 * S * (4 * NEIGHBOURS + 40 + distances), f"a nearest-neighbour likelihood of {S:,} places")
        return Order.of(self.sites.points, NEIGHBOURS, np.random.default_rng(0))

    def correlation(self, theta: Array) -> vecchia.Correlation:
        reach = float(np.exp(theta[0]))
        return lambda distance: matern.kernel(distance, reach, self.smoothness)

    def field(self, theta: Array) -> Array:
        """Rows of U for the correlation R alone."""
        noise = np.full(self.sites.count, TINY)
        return self.order.rows(self.correlation(theta), 1.0, noise)[0]

    def R(self, theta: Array) -> Array:
        return self.distance

    def spread(self, theta: Array) -> Array:
        half = self.order.across(self.field(theta), self.design.sums(self.sites.part))
        return np.asarray(half.T @ half)

    def draw(self, theta: Array, rng: np.random.Generator, B: int) -> Array:
        size = float(np.sqrt(ratio_of(theta[1:2], self.parameters[1])[0]))
        if size == 0:
            return np.zeros((self.design.n, B))
        drawn = self.order.draw(self.field(theta), rng.standard_normal((self.sites.count, B)))
        effects = size * drawn[self.sites.part.codes]
        return effects if self.design.root is None else effects * self.design.root[:, None]


@dataclass(frozen=True, eq=False)
class Nearest(Layered):
    """Layers whose top is a ``NearestPiece``; no level holds whole sites."""

    @property
    def _top_piece(self) -> NearestPiece:
        assert isinstance(self.spatial, NearestPiece)
        return self.spatial

    def grams(self, thetas: Array, response: Response) -> list[Gram]:
        return [self.gram(theta, response) for theta in thetas.T]

    def field(self, response: Response, m: int, restricted: bool = True) -> None:
        return None

    def _top(self, gram: Gram, load: Load, theta: Array) -> Gram:
        piece = self._top_piece
        own = self.own(piece, theta)
        ratio = float(piece.variance(own[:, None])[0])
        return vecchia.top(gram, load, piece.order, piece.correlation(own), ratio)

    def whiten(self, theta: Array, block: Array) -> Array:
        """As ``Layered.whiten``; the square root of the sites' part is U of their means."""
        theta = np.asarray(theta, dtype=float)
        u, out = self.white_rows(theta, block)
        for level in self.chain:
            u, out = groups.whiten(
                level.part, u, out, float(level.variance(self.own(level, theta)[:, None])[0])
            )
        piece = self._top_piece
        own, part = self.own(piece, theta), piece.sites.part
        c = part.sums(u * u)
        ratio = float(piece.variance(own[:, None])[0])
        weights, _ = piece.order.rows(piece.correlation(own), ratio, 1 / c[piece.order.order])
        sums = part.sums(u[:, None] * out)
        white = np.empty_like(sums)
        white[piece.order.order] = piece.order.whiten(weights, sums / c[:, None])
        change = (white - sums / np.sqrt(c)[:, None]) / np.sqrt(c)[:, None]
        return np.asarray(out + u[:, None] * change[part.codes])
