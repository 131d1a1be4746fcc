"""Exact V⁻¹ and ln|V| by layers, from the rows upwards, none larger than the number of cells or sites:

row noise     I, or the AR(1) correlation within series, or I and a process of visits within series
intercepts    levels that nest one another, finest first, each holding whole series
places        the spatial covariance between sites, with coarser levels that hold whole sites
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from clingstone.covariance.base import Pieces
from clingstone.covariance.bundles import pieces_of
from clingstone.covariance.pieces import GroupPiece, Piece, SerialPiece, SpatialPiece
from clingstone.covariance.stacked import Forms
from clingstone.covariance.visits import VisitPiece
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import groups, matern, reml
from clingstone.maths.basis import Gram
from clingstone.maths.field import Field
from clingstone.maths.groups import Classes, Load
from clingstone.maths.irregular import Panels
from clingstone.maths.once import Array, kept, once
from clingstone.maths.partition import Partition

HEAVY_SITES = 300
MANY_ROWS = 5000  # irregular rows from which their links are summed up by length


@dataclass(frozen=True, eq=False)
class Layered(Pieces):
    """Row noise, nested intercepts, places: see the head of the file.

    serial : the AR(1) row noise, a process of visits beside row noise, or None.
    chain : intercepts below the sites, finest first.
    spatial : between the sites, or None. above : levels that hold whole sites.
    """

    serial: SerialPiece | VisitPiece | None = None
    chain: tuple[GroupPiece, ...] = ()
    spatial: SpatialPiece | None = None
    above: tuple[GroupPiece, ...] = ()

    @property
    def heavy(self) -> bool:
        return self.spatial is not None and self.spatial.sites.count > HEAVY_SITES

    def gram(self, theta: Array, response: Response) -> Gram:
        theta = np.asarray(theta, dtype=float)
        if (classes := self.classes(response)) is not None:
            piece = self.chain[0]
            w, logdet = self.weights(theta[:, None])
            gram = self.forms(response).gram(w[0], float(logdet[0]))
            return classes.lower(gram, float(piece.variance(self.own(piece, theta)[:, None])[0]), w[0])
        gram, load = self._rows(theta, response)
        for step, piece in enumerate(self.chain):
            ratio = float(piece.variance(self.own(piece, theta)[:, None])[0])
            assert load is not None
            gram = groups.lower(gram, load, ratio)
            if step + 1 < len(self.chain) or self.spatial is not None:
                load = load.shrunk(ratio).lifted(self._up[step])
        if self.spatial is None:
            return gram
        assert load is not None
        return self._top(gram, load, theta)

    def _top(self, gram: Gram, load: Load, theta: Array) -> Gram:
        """The Gram once the sites' effects are added to what lies below them."""
        return matern.top(gram, load, self._between(theta))

    def grams(self, thetas: Array, response: Response) -> list[Gram]:
        """As ``gram`` at each column of θ (d, K); places alone share one eigendecomposition per range."""
        if self.spatial is None or not self.places_alone or response.B == 1:
            return super().grams(thetas, response)
        load = self.forms(response).load(np.ones(1))
        assert load is not None
        base = reml.independent(self.design.p, response.ss)
        out: list[Gram] = [base] * thetas.shape[1]
        for reach in np.unique(thetas[0]):
            at = np.flatnonzero(thetas[0] == reach)
            spectrum = matern.Spectrum.of(load, self.spatial.R(thetas[:, at[0]]))
            for k, ratio in zip(at.tolist(), self.spatial.variance(thetas[:, at]), strict=True):
                out[k] = spectrum.top(base, float(ratio))
        return out

    @property
    def places_alone(self) -> bool:
        """Whether places stand over independent rows and nothing else."""
        return self.spatial is not None and not (self.serial or self.chain or self.above)

    def field(self, response: Response, m: int, restricted: bool = True) -> Field | None:
        """The criterion of one column of y with its slopes, where places stand alone."""
        piece = self.spatial
        if piece is None or not self.places_alone:
            return None
        forms = self.forms(response)
        load = forms.load(np.ones(1))
        assert load is not None

        def slope(theta: Array) -> Array:
            return np.asarray(piece.slope(theta) * float(piece.variance(theta[:, None])[0]))

        return Field(forms.gram(np.ones(1), 0.0), load, self._between, slope, m, restricted)

    # ---- rows: I or AR(1) --------------------------------------------------------------

    @property
    def _cells(self) -> Partition | None:
        """The first partition above the rows."""
        if self.chain:
            return self.chain[0].part
        return None if self.spatial is None else self.spatial.sites.part

    @property
    def few(self) -> bool:
        """Whether R⁻¹ is a weighted sum of few fixed forms."""
        return self.serial is None or (isinstance(self.serial, SerialPiece) and self.serial.links.few)

    def weights(self, theta: Array) -> tuple[Array, Array]:
        """Weights of those forms (K, F) and ln|R| (K,), at θ (d, K)."""
        if not isinstance(self.serial, SerialPiece):
            return np.ones((theta.shape[1], 1)), np.zeros(theta.shape[1])
        return self.serial.links.weights(self.serial.rho(self.own(self.serial, theta)))

    def forms(self, response: Response) -> Forms:
        """What those forms amount to."""
        cells, links = self._cells, self.serial.links if isinstance(self.serial, SerialPiece) else None
        key = ("forms", links is not None, "" if cells is None else cells.key)
        return kept(response, key, lambda: Forms.of(response, links, cells))

    def classes(self, response: Response) -> Classes | None:
        """Cells of equal loads together, where one level of intercepts is all that stands above the rows."""
        if len(self.chain) != 1 or self.spatial is not None or not self.few:
            return None
        key = ("classes", self.serial is not None, self.chain[0].part.key)
        return kept(response, key, lambda: self.forms(response).classes())

    def _rows(self, theta: Array, response: Response) -> tuple[Gram, Load | None]:
        if isinstance(self.serial, VisitPiece):
            return self._by_visit(self.serial, theta, response)
        if not self.few:
            assert self.serial is not None
            return self._by_row(float(self.serial.rho(self.own(self.serial, theta))), response)
        w, logdet = self.weights(theta[:, None])
        forms = self.forms(response)
        return forms.gram(w[0], float(logdet[0])), forms.load(w[0])

    def _by_row(self, rho: float, response: Response) -> tuple[Gram, Load | None]:
        """Rows whitened one by one: irregular times."""
        assert isinstance(self.serial, SerialPiece)
        links = self.serial.links
        if self._cells is None and self.design.n >= MANY_ROWS:
            return self._by_panel(rho, response), None
        WQ, WE = links.whiten(rho, self.design.Q), links.whiten(rho, response.residual)
        gram = Gram(WQ.T @ WQ, WQ.T @ WE, np.einsum("ij,ij->j", WE, WE), links.logdet(rho))
        cells = self._cells
        if cells is None:
            return gram, None
        w = links.whiten(rho, self._ones)
        return gram, Load(cells.sums(w * w), cells.sums(w[:, None] * WQ), cells.sums(w[:, None] * WE))

    def _by_visit(self, piece: VisitPiece, theta: Array, response: Response) -> tuple[Gram, Load | None]:
        """Visits solved in one banded system."""
        visits, cells, forms = piece.visits, self._cells, self.forms(response)
        up = None
        if cells is not None:
            up = Partition(f"visit>{cells.key}", cells.codes[visits.part.first], cells.labels)
        sums = kept(
            response, ("visit sums",), lambda: visits.sums(np.hstack([self.design.Q, response.residual]))
        )
        plain = forms.gram(np.ones(1), 0.0), forms.load(np.ones(1))
        return visits.lower(*piece.at(self.own(piece, theta)), sums, *plain, up)

    def _by_panel(self, rho: float, response: Response) -> Gram:
        """The same from moments on panels of the lengths of links, made once for every ρ."""
        assert isinstance(self.serial, SerialPiece)
        links, Q, E = self.serial.links, self.design.Q, response.residual
        panels = kept(self.design, ("link panels",), lambda: Panels.of(links))
        apart, along, logdet = panels.weights(rho)

        def summed(moments: tuple[Array, Array]) -> Array:
            return np.asarray(np.tensordot(apart, moments[0], 1) + np.tensordot(along, moments[1], 1))

        QQ = summed(kept(self.design, ("panel moments",), lambda: panels.moments(Q)))
        QE = summed(kept(response, ("panel moments",), lambda: panels.moments(Q, E)))
        EE = summed(kept(response, ("panel squares",), lambda: panels.squares(E)))
        return Gram(np.eye(self.design.p) + QQ, QE, response.ss + EE, logdet)

    @property
    @once
    def _ones(self) -> Array:
        return np.ones(self.design.n) if self.design.root is None else self.design.root

    # ---- upwards: intercepts, places ----------------------------------------------------

    @property
    @once
    def _up(self) -> tuple[Partition, ...]:
        """Cells of each level of the chain put into the cells of the next level or of the sites."""
        parts = [piece.part for piece in self.chain]
        if self.spatial is not None:
            parts.append(self.spatial.sites.part)
        return tuple(
            Partition(f"{low.key}>{high.key}", low.parent(high), high.labels) for low, high in pairwise(parts)
        )

    def _between(self, theta: Array) -> Array:
        """(S, S) covariance of the sites' effects."""
        assert self.spatial is not None
        own = self.own(self.spatial, theta)
        K = self.spatial.R(own)
        K *= float(self.spatial.variance(own[:, None])[0])
        for piece in self.above:
            up = piece.part.codes[self.spatial.sites.part.first]
            K += piece.variance(self.own(piece, theta)[:, None])[0] * (up[:, None] == up)
        return K

    def white_rows(self, theta: Array, block: Array) -> tuple[Array, Array]:
        """The indicator of any cell, and (n, k) rows, once the noise of rows is whitened."""
        u, out = self._ones, np.asarray(block, dtype=float)
        if isinstance(self.serial, SerialPiece):
            rho = float(self.serial.rho(self.own(self.serial, theta)))
            return self.serial.links.whiten(rho, u), self.serial.links.whiten(rho, out)
        if isinstance(self.serial, VisitPiece):
            white, at = self.serial.visits.whiten, self.serial.at(self.own(self.serial, theta))
            return white(*at, u), white(*at, out)
        return u, out

    def whiten(self, theta: Array, block: Array) -> Array:
        """A square root of V⁻¹ applied to (n, k) rows on the scale of the basis, layer by layer."""
        u, out = self.white_rows(theta, block)
        for piece in self.chain:
            ratio = float(piece.variance(self.own(piece, theta)[:, None])[0])
            u, out = groups.whiten(piece.part, u, out, ratio)
        if self.spatial is None:
            return out
        part = self.spatial.sites.part
        L, root = matern.factor(part.sums(u * u), self._between(theta))
        return matern.whiten(L, root, part.codes, u, out, part.sums(u[:, None] * out))


def stack(design: Design, pieces: Sequence[Piece]) -> Layered | None:
    """The pieces in layers, or None when they do not stack."""
    if pieces_of(tuple(pieces)):
        return None
    serial = next((p for p in pieces if isinstance(p, SerialPiece | VisitPiece)), None)
    spatial = next((p for p in pieces if isinstance(p, SpatialPiece)), None)
    levels = [p for p in pieces if isinstance(p, GroupPiece)]
    above: list[GroupPiece] = []
    if spatial is not None:
        above = [p for p in levels if p.part.relation(spatial.sites.part) == "nests"]
    chain = sorted((p for p in levels if p not in above), key=lambda p: -p.part.count)
    # From the rows up, every layer must hold whole cells of the one below it.
    rising = [serial.series.part] if serial is not None else []
    rising += [p.part for p in chain]
    rising += [spatial.sites.part] if spatial is not None else []
    if any(high.relation(low) not in ("nests", "same") for low, high in pairwise(rising)):
        return None
    return Layered(design, tuple(pieces), serial, tuple(chain), spatial, tuple(above))
