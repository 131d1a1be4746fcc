"""What every algebra can say of its components one by one, and slopes together with their intercept."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from clingstone.covariance.bundles import Bundle, SlopePiece
from clingstone.covariance.components import Parameter
from clingstone.covariance.pieces import GroupPiece, Piece, SerialPiece
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths.basis import Gram
from clingstone.maths.field import Field
from clingstone.maths.once import Array, once
from clingstone.maths.search import Optimum
from clingstone.needs import NotSupported


@dataclass(frozen=True, eq=False)
class Pieces:
    """What every algebra can say of its components one by one."""

    design: Design
    pieces: tuple[Piece, ...]

    @property
    def parameters(self) -> tuple[Parameter, ...]:
        return tuple(parameter for piece in self.pieces for parameter in piece.parameters)

    @property
    @once
    def slices(self) -> Mapping[str, slice]:
        """Where each component's working parameters stand in θ."""
        out, start = {}, 0
        for piece in self.pieces:
            end = start + len(piece.parameters)
            out[piece.key] = slice(start, end)
            start = end
        return out

    def own(self, piece: Piece, theta: Array) -> Array:
        return np.asarray(theta[self.slices[piece.key]])

    @property
    @once
    def bundles(self) -> tuple[Bundle, ...]:
        """Levels whose slopes may be correlated with their intercept, one bundle per level."""
        levels = dict.fromkeys(piece.part.key for piece in self.pieces if isinstance(piece, SlopePiece))
        return tuple(self.bundle(key) for key in levels)

    @property
    @once
    def level_keys(self) -> tuple[str, ...]:
        """Group levels between which something varies."""
        own = (p.part.key for p in self.pieces if isinstance(p, GroupPiece | SlopePiece))
        return tuple(dict.fromkeys(own))

    @once
    def bundle(self, level: str) -> Bundle:
        """Everything that varies between the groups of one level."""
        own = tuple(p for p in self.pieces if isinstance(p, GroupPiece | SlopePiece) and p.part.key == level)
        return Bundle(self.design, own)

    def joined(self, bundle: Bundle, theta: Array) -> Array:
        """θ of a bundle's pieces, one after the other."""
        return np.concatenate([self.own(piece, theta) for piece in bundle.pieces])

    @property
    @once
    def alone(self) -> tuple[Piece, ...]:
        """Pieces that are in no bundle."""
        held = {piece.key for bundle in self.bundles for piece in bundle.pieces}
        return tuple(piece for piece in self.pieces if piece.key not in held)

    def variances(self, theta: Array, sigma2: Array) -> Mapping[str, Array]:
        """Variance of each component and of "row" noise, (B,); θ (d, B), σ² (B,).

        An AR(1) process without noise of its own counts with |ρ|σ², the rest is row noise.
        """
        out, row = {}, np.asarray(sigma2, dtype=float)
        for piece in self.pieces:
            out[piece.key] = piece.variance(self.own(piece, theta)) * sigma2
            if isinstance(piece, SerialPiece):
                row = row - out[piece.key]
        return {**out, "row": row}

    def shape(self, theta: Array) -> Mapping[str, Array]:
        out: dict[str, Array] = {}
        for piece in self.pieces:
            out.update(piece.shape(self.own(piece, theta)))
        return out

    def spread(self, key: str, theta: Array) -> Array:
        """(p, p) Q'KQ; Σ variances[key]·spread(key) over components and "row" is Q'Var(y)Q.

        The covariance of a slope with what stands before it in its bundle counts with the slope.
        """
        if key == "row":
            return np.eye(self.design.p)
        for bundle in self.bundles:
            if any(piece.key == key for piece in bundle.pieces):
                return bundle.spread(key, self.joined(bundle, theta))
        piece = next(piece for piece in self.pieces if piece.key == key)
        return piece.spread(self.own(piece, theta))

    def draw(self, theta: Array, sigma2: float, rng: np.random.Generator, B: int) -> Array:
        """(n, B) draws from N(0, σ²V(θ)), on the scale of the basis."""
        total = np.zeros((self.design.n, B))
        if not any(isinstance(piece, SerialPiece) for piece in self.pieces):
            total = rng.standard_normal((self.design.n, B))
        for piece in self.alone:
            total += piece.draw(self.own(piece, theta), rng, B)
        for bundle in self.bundles:
            total += bundle.draw(self.joined(bundle, theta), rng, B)
        return np.asarray(np.sqrt(sigma2) * total)

    def dense(self, theta: Array) -> Array:
        """(n, n) V(θ); for small n."""
        serial = any(isinstance(piece, SerialPiece) for piece in self.pieces)
        V = np.zeros((self.design.n, self.design.n)) if serial else np.eye(self.design.n)
        for piece in self.alone:
            V += piece.dense(self.own(piece, theta))
        for bundle in self.bundles:
            V += bundle.dense(self.joined(bundle, theta))
        return V

    def gram(self, theta: Array, response: Response) -> Gram:
        raise NotSupported("no algebra was chosen for these components")

    def minimum(self, response: Response, m: int, warm: Optimum | None) -> Optimum | None:
        """The REML optimum for the first column of y where an algebra has a faster way to it; else None."""
        return None

    def field(self, response: Response, m: int, restricted: bool = True) -> Field | None:
        """The criterion of one column of y with its slopes, where an algebra has them; else None.

        m : residual df, or n with ``restricted=False`` (maximum likelihood).
        """
        return None

    @property
    def heavy(self) -> bool:
        """One Gram takes long enough for a search to spare them."""
        return False

    def grams(self, thetas: Array, response: Response) -> list[Gram]:
        """Grams at many θ (d, K)."""
        return [self.gram(theta, response) for theta in thetas.T]
