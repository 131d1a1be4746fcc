"""The column space of a design: X = QR, contrasts in that basis, and Grams of [Q, e]."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt
from scipy import linalg

from clingstone.maths.once import Array, frozen

RANK_TOLERANCE = 1e-10
LONG = 20_000  # rows
APART = 1e-4  # length of a unit column without those before it, from which products of columns suffice
HELD = 0.1  # share of its length that a column keeps, from which one projection leaves no rounding behind


@dataclass(frozen=True, eq=False)
class Basis:
    """X = QR with Q orthonormal. X itself is not kept.

    Parameters
    ----------
    Q : (n, p), orthonormal columns.
    R : (p, p), so that the design's columns are Q @ R. Upper triangular up to a column order.
    extends : the basis whose columns are the first of these, where it was made by adding to one, at once
        or in steps; those between are let go.
    """

    Q: Array
    R: Array
    extends: Basis | None = field(default=None, repr=False)
    inverse: Array = field(init=False, repr=False)

    def __post_init__(self) -> None:
        object.__setattr__(self, "inverse", np.linalg.inv(self.R) if self.R.size else self.R)

    @classmethod
    def of(cls, X: Array) -> Basis:
        """Q and R of a design of full column rank.

        Columns are scaled to unit length first, so the rank rule does not depend on units. Raises
        ``ValueError`` for an aliased design; ask :func:`aliased` for the columns first.
        """
        scale = lengths(X)
        if np.any(scale == 0):
            raise ValueError("a design column is zero in every row")
        Q, R = _factored(X / scale)
        if X.shape[1] and np.abs(np.diag(R)).min() < RANK_TOLERANCE:
            raise ValueError("the design columns are linearly dependent")
        return cls(frozen(Q), frozen(R * scale))

    @property
    def n(self) -> int:
        return int(self.Q.shape[0])

    @property
    def p(self) -> int:
        return int(self.Q.shape[1])

    @property
    def leverage(self) -> Array:
        """(n,) diagonal of the hat matrix."""
        return np.asarray(np.einsum("ij,ij->i", self.Q, self.Q))

    def contrast(self, c: Array) -> Array:
        """w = R⁻ᵀc, so that c'β̂ = w'Q'y and Var(c'β̂) = σ²‖w‖². c: (p,) or (k, p) → (p,) or (p, k)."""
        return np.asarray(self.inverse.T @ np.asarray(c, dtype=float).T)

    def coefficients(self, coef: Array) -> Array:
        """β̂ = R⁻¹Q'y from Q'y, (p,) or (p, B)."""
        return np.asarray(self.inverse @ coef)

    def project(self, Y: Array, first: int = 0) -> Array:
        """MY: what the design leaves over. first : so many columns of Q are known to be orthogonal to Y."""
        Q = self.Q[:, first:]
        rest = np.asarray(Q @ (Q.T @ Y))
        np.subtract(Y, rest, out=rest)
        if self.n >= LONG and np.all(lengths(rest) >= HELD * lengths(Y)):
            return rest
        # Twice is enough: a second pass removes what rounding leaves of large means.
        rest -= Q @ (Q.T @ rest)
        return rest

    def extend(self, columns: Array) -> Basis:
        """Basis of [X, columns], the old columns first and unchanged. Columns (n, k)."""
        return self.beside(Basis.of(self.project(columns)), self.Q.T @ columns)

    def beside(self, rest: Basis, cross: Array) -> Basis:
        """Basis of [X, Q cross + columns of rest], where rest is orthogonal to this basis. cross : (p, k)."""
        p, k = self.p, rest.p
        R = np.zeros((p + k, p + k))
        R[:p, :p], R[:p, p:], R[p:, p:] = self.R, cross, rest.R
        return Basis(frozen(np.hstack([self.Q, rest.Q])), frozen(R), self.extends or self)

    def holds(self, inner: Basis) -> bool:
        """Whether the first columns of Q are those of another basis, to which columns were added."""
        return inner in (self, self.extends)


def lengths(Y: Array) -> Array:
    """(k,) lengths of columns (n, k)."""
    return np.asarray(np.sqrt(np.einsum("i...,i...->...", Y, Y)))


def _factored(X: Array) -> tuple[Array, Array]:
    """QR of columns of unit length.

    Of a long table by Cholesky factors of the columns' products, twice, which is as accurate where they are
    far from dependent and several times faster (Yamamoto, Nakatsukasa, Yanagisawa & Fukaya 2015).
    """
    if X.shape[0] < LONG:
        return np.linalg.qr(X)
    Q, R = X, np.eye(X.shape[1])
    for _ in range(2):
        try:
            L = np.linalg.cholesky(Q.T @ Q)
        except np.linalg.LinAlgError:
            return np.linalg.qr(X)
        if np.diag(L).min(initial=1.0) < APART:
            return np.linalg.qr(X)
        Q, R = Q @ np.linalg.inv(L).T, L.T @ R
    return Q, R


def aliased(X: Array, tolerance: float = RANK_TOLERANCE) -> tuple[int, ...]:
    """Columns that are linear combinations of others, by pivoted QR on unit-length columns.

    The rule: a pivot below ``tolerance``, 1e-10 of the largest. Earlier columns are kept where there is a
    choice.
    """
    scale = np.linalg.norm(X, axis=0)
    zero = tuple(int(j) for j in np.flatnonzero(scale == 0))
    Z = X / np.where(scale == 0, 1.0, scale)
    kept: list[int] = []
    lost: list[int] = list(zero)
    # The p × p factor carries the same dependencies as X and is cheap to examine column by column.
    R: npt.NDArray[np.float64] = np.asarray(  # p × p
        linalg.qr(Z, mode="r", check_finite=False)[0][: X.shape[1]]
    )
    Q = np.zeros((R.shape[0], 0))
    for j in range(X.shape[1]):
        if j in zero:
            continue
        rest = R[:, j] - Q @ (Q.T @ R[:, j])
        rest -= Q @ (Q.T @ rest)
        size = float(np.linalg.norm(rest))
        if size < tolerance:
            lost.append(j)
        else:
            kept.append(j)
            Q = np.hstack([Q, rest[:, None] / size])
    return tuple(sorted(lost))


@dataclass(frozen=True, eq=False)
class Gram:
    """[Q, e]'V⁻¹[Q, e] for B columns of e, with ln|V|; V is on the scale where σ² = 1.

    QQ (p, p) · QE (p, B) · EE (B,) · logdet scalar.
    """

    QQ: Array
    QE: Array
    EE: Array
    logdet: float
