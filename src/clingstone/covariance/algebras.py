"""The cheapest exact algebra of a set of components.

Layers where the structures stack, others where slopes vary or two levels cross, the nearest-neighbour
likelihood of many places, and a dense V where rows are few and nothing else serves.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from clingstone.covariance.base import Pieces
from clingstone.covariance.bundles import SlopePiece, pieces_of
from clingstone.covariance.components import Component, slope_of
from clingstone.covariance.crossed import Crossed, crossed
from clingstone.covariance.layered import Layered, stack
from clingstone.covariance.pieces import GroupPiece, Piece, SerialPiece, SpatialPiece
from clingstone.covariance.sloped import Sloped, sloped
from clingstone.covariance.vecchia import Nearest, NearestPiece
from clingstone.covariance.visits import VisitPiece
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.maths.basis import Gram
from clingstone.maths.once import Array
from clingstone.needs import Limits, NotSupported


@dataclass(frozen=True, eq=False)
class Dense(Pieces):
    """V as an n × n array; for sets that do not stack, and as the plain twin of those that do."""

    def _factor(self, theta: Array) -> Array:
        return np.asarray(np.linalg.cholesky(self.dense(np.asarray(theta, dtype=float))), dtype=float)

    def gram(self, theta: Array, response: Response) -> Gram:
        L = self._factor(theta)
        W = reml.forward(L, np.hstack([self.design.Q, response.residual]))
        WQ, WE = W[:, : self.design.p], W[:, self.design.p :]
        logdet = float(2 * np.log(np.diag(L)).sum())
        return Gram(WQ.T @ WQ, WQ.T @ WE, np.einsum("ij,ij->j", WE, WE), logdet)

    def whiten(self, theta: Array, block: Array) -> Array:
        return reml.forward(self._factor(theta), block)


Chosen = Layered | Sloped | Crossed | Dense


def choose(design: Design, components: Sequence[Component], limits: Limits) -> Chosen:
    """The cheapest exact algebra of a set of components. Raises NotSupported."""
    if _many_places(design, components, limits):
        return _nearest(design, components)
    pieces = _pieces(design, components)
    if pieces_of(pieces):
        nested = sloped(design, pieces)
        if nested is not None:
            return nested
    layered = stack(design, pieces)
    if layered is not None:
        return layered
    cut = crossed(design, pieces)
    if cut is not None:
        return cut
    if design.n <= limits.dense_rows:
        return Dense(design, pieces)
    names = ", ".join(component.label for component in components)
    if pieces_of(pieces) and any(piece.key == "serial" for piece in pieces):
        raise NotSupported(
            f"{names}: slopes that vary and a dependence along time are fitted together only up to "
            f"{limits.dense_rows:,} rows, and this table has {design.n:,}",
            "Ask for cluster-robust or mixed-robust by the groups: they allow for slopes that vary and any "
            "dependence inside a group at once.",
        )
    raise NotSupported(
        f"{names} cut across one another; fitting them together needs a table of at most "
        f"{limits.dense_rows:,} rows, and this one has {design.n:,}",
        "Fit them one at a time, or declare levels that nest.",
    )


def _many_places(design: Design, components: Sequence[Component], limits: Limits) -> bool:
    spatial = any(component.key == "spatial" for component in components)
    return spatial and design.spatial is not None and design.spatial.count > limits.dense_sites


def _nearest(design: Design, components: Sequence[Component]) -> Layered:
    """Layers under a nearest-neighbour likelihood of the places. Raises NotSupported."""
    assert design.spatial is not None
    pieces = tuple(
        NearestPiece(piece.key, design, design.spatial) if isinstance(piece, SpatialPiece) else piece
        for piece in _pieces(design, components)
    )
    found = stack(design, pieces)
    if found is None or found.above:
        names = ", ".join(component.label for component in components)
        raise NotSupported(
            f"{names} cannot be fitted together with {design.spatial.count:,} places: beyond the dense limit "
            "only what lies within places, or within time inside them, goes with the map",
            "Fit them one at a time.",
        )
    return Nearest(design, pieces, found.serial, found.chain, found.spatial)


def _pieces(design: Design, components: Sequence[Component]) -> tuple[Piece, ...]:
    """In the order given; a slope may be correlated with what comes before it at its level."""
    out: list[Piece] = []
    for component in components:
        found = slope_of(design, component.key)
        if found is None:
            out.append(_piece(design, component))
            continue
        level, x, apart = found
        at_level = [p for p in out if isinstance(p, GroupPiece | SlopePiece) and p.part is level]
        if not at_level:
            raise NotSupported(
                f"slopes of {x} that vary between {level.key} need an intercept that does so too",
                f"Ask for group:{level.key} as well.",
            )
        earlier = [p.key for p in at_level if not (isinstance(p, SlopePiece) and p.apart)]
        out.append(SlopePiece(component.key, design, level, x, apart, () if apart else tuple(earlier)))
    return tuple(out)


def _piece(design: Design, component: Component) -> Piece:
    if component.key == "serial":
        assert design.serial is not None
        piece = VisitPiece if component.repeats else SerialPiece
        return piece(component.key, design, design.serial)
    if component.key == "spatial":
        assert design.spatial is not None
        return SpatialPiece(component.key, design, design.spatial)
    return GroupPiece(component.key, design, design.partitions[component.part])
