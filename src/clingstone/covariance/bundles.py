"""Slopes that vary between groups, and the bundle of a level's intercept with its slopes."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from clingstone.covariance.components import Parameter
from clingstone.covariance.pieces import GroupPiece, Piece, ratio_of, ratio_parameter
from clingstone.design.design import Design
from clingstone.maths import slopes
from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition

Z_HIGH = 7.6  # |atanh| of a correlation that counts as ±1: 0.9999995


@dataclass(frozen=True, eq=False)
class SlopePiece:
    """A slope that varies between the cells of one partition.

    x : the covariate. apart : uncorrelated with the intercept, the slope then being one through x = 0;
    else x is centred, so that the variance of the intercept is that at the mean of x and the two
    variances add up to the average variance of a row. x is scaled to unit spread either way. earlier :
    keys of what it may be correlated with.
    """

    key: str
    design: Design
    part: Partition
    x: str
    apart: bool
    earlier: tuple[str, ...] = ()

    @property
    @once
    def scale(self) -> tuple[float, float]:
        """Centre and spread of x, so that the column is (x − centre)/spread."""
        x = np.asarray(self.design.covariates[self.x], dtype=float)
        weight = np.ones(len(x)) if self.design.root is None else self.design.root**2
        centre = 0.0 if self.apart else float(np.average(x, weights=weight))
        return centre, float(np.sqrt(np.average((x - centre) ** 2, weights=weight)))

    @property
    @once
    def column(self) -> Array:
        """(n,) √ω (x − centre)/spread."""
        centre, spread = self.scale
        u = (np.asarray(self.design.covariates[self.x], dtype=float) - centre) / spread
        return np.asarray(u if self.design.root is None else u * self.design.root)

    @property
    @once
    def parameters(self) -> tuple[Parameter, ...]:
        total = self.part.sums(self.column**2)
        ratio = ratio_parameter(
            f"{self.key}.log_ratio", np.maximum(total, 1e-12 * total.max()), self.design.n
        )
        scan = tuple(np.linspace(-2.5, 2.5, 9))
        return (
            ratio,
            *(Parameter(f"{self.key}.with.{k}", -Z_HIGH, Z_HIGH, (0.0,), scan) for k in self.earlier),
        )

    def variance(self, theta: Array) -> Array:
        return ratio_of(theta[0], self.parameters[0])

    def shape(self, theta: Array) -> Mapping[str, Array]:
        if not self.earlier:
            return {}
        rho = np.tanh(theta[1])
        return {f"{self.key}.correlation": np.where(self.variance(theta) > 0, rho, np.nan)}

    def spread(self, theta: Array) -> Array:
        T = self.part.sums(self.column[:, None] * self.design.Q)
        return np.asarray(T.T @ T)

    def draw(self, theta: Array, rng: np.random.Generator, B: int) -> Array:
        size = np.sqrt(self.variance(theta[:, None])[0])
        effects = size * rng.standard_normal((self.part.count, B))
        return np.asarray(self.column[:, None] * effects[self.part.codes])

    def dense(self, theta: Array) -> Array:
        same = self.part.codes[:, None] == self.part.codes
        return np.asarray(self.variance(theta[:, None])[0] * same * np.outer(self.column, self.column))


@dataclass(frozen=True, eq=False)
class Bundle:
    """The intercept and the slopes of one level, with the covariance Γ = LL' between them over σ².

    θ below is the pieces' own slices, one after the other.
    """

    design: Design
    pieces: tuple[GroupPiece | SlopePiece, ...]

    @property
    def part(self) -> Partition:
        return self.pieces[0].part

    @property
    def q(self) -> int:
        return len(self.pieces)

    @property
    @once
    def names(self) -> tuple[str, ...]:
        """Of its columns: "" for the constant, else the covariate."""
        return tuple(p.x if isinstance(p, SlopePiece) else "" for p in self.pieces)

    @property
    @once
    def columns(self) -> Array:
        """(n, q) U."""
        root = self.design.root
        ones = np.ones(self.design.n) if root is None else root
        return np.column_stack([p.column if isinstance(p, SlopePiece) else ones for p in self.pieces])

    @property
    @once
    def free(self) -> Array:
        """(q, q) which pairs below the diagonal may be correlated."""
        place = {piece.key: j for j, piece in enumerate(self.pieces)}
        out = np.zeros((self.q, self.q), dtype=bool)
        for i, piece in enumerate(self.pieces):
            for key in piece.earlier if isinstance(piece, SlopePiece) else ():
                out[i, place[key]] = True
        return out

    def L(self, theta: Array) -> Array:
        """(q, q) factor of Γ over σ²; a component of zero variance has a row of zeros."""
        return np.asarray(self.factors(np.asarray(theta, dtype=float)[:, None])[0])

    def factors(self, theta: Array) -> Array:
        """(K, q, q) the same at K values of θ (d, K)."""
        K, start = theta.shape[1], 0
        log, z = np.empty((K, self.q)), np.zeros((K, self.q, self.q))
        for i, piece in enumerate(self.pieces):
            own = theta[start : start + len(piece.parameters)]
            with np.errstate(divide="ignore"):
                log[:, i] = np.log(piece.variance(own))
            z[:, i, self.free[i]] = own[1:].T
            start += len(own)
        return slopes.factor(log, z)

    def theta(self, L: Array) -> Array:
        """Working parameters of a factor, inside their bounds: the inverse of :meth:`L`."""
        log, z = slopes.parameters(L @ L.T, self.free, Z_HIGH)
        out = []
        for i, piece in enumerate(self.pieces):
            first = piece.parameters[0]
            out += [np.clip(log[i : i + 1], first.low, first.high), z[i, self.free[i]]]
        return np.concatenate(out)

    @property
    @once
    def turned(self) -> Array:
        """(q, q) T, so that TΓT' is in the user's units with the intercept at x = 0."""
        T = np.eye(self.q)
        for j, piece in enumerate(self.pieces):
            if isinstance(piece, SlopePiece):
                centre, spread = piece.scale
                T[j, j] = 1 / spread
                for i, name in enumerate(self.names):
                    T[i, j] += -centre / spread if name == "" else 0.0
        return T

    def covariance(self, theta: Array, sigma2: float) -> Array:
        """(q, q) of intercept and slopes in the user's units, the intercept at x = 0."""
        L = self.turned @ self.L(theta)
        return np.asarray(sigma2 * L @ L.T)

    @property
    @once
    def _sums(self) -> Array:
        """(q, G, p) U_j'Q cell by cell."""
        return np.stack([self.part.sums(u[:, None] * self.design.Q) for u in self.columns.T])

    def spread(self, key: str, theta: Array) -> Array:
        j = next(j for j, piece in enumerate(self.pieces) if piece.key == key)
        L = self.L(theta)
        gamma, T = L @ L.T, self._sums
        out = T[j].T @ T[j]
        for i in range(j):
            if gamma[i, j] != 0:
                cross = T[i].T @ T[j]
                out = out + gamma[i, j] / gamma[j, j] * (cross + cross.T)
        return np.asarray(out)

    def draw(self, theta: Array, rng: np.random.Generator, B: int) -> Array:
        white = rng.standard_normal((self.q, self.part.count, B))
        effects = np.einsum("ij,jgb->igb", self.L(theta), white)
        out = np.zeros((self.design.n, B))
        for u, effect in zip(self.columns.T, effects, strict=True):
            out += u[:, None] * effect[self.part.codes]
        return out

    def dense(self, theta: Array) -> Array:
        UL = self.columns @ self.L(theta)
        return np.asarray((UL @ UL.T) * (self.part.codes[:, None] == self.part.codes))


def pieces_of(pieces: tuple[Piece, ...]) -> tuple[SlopePiece, ...]:
    """The slopes among some pieces."""
    return tuple(piece for piece in pieces if isinstance(piece, SlopePiece))
