"""Grams of many columns of y, each at its own θ: intercepts that nest, AR(1) at few link lengths, places."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from clingstone.covariance.algebras import Chosen
from clingstone.covariance.fieldeach import FieldEach, field_each
from clingstone.covariance.layered import Layered
from clingstone.covariance.pieces import SerialPiece
from clingstone.covariance.ranges import Ranges, ranges
from clingstone.covariance.stacked import Forms
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.maths.each import Grams, Minima, Places, minimise_each
from clingstone.maths.eachdf import SlopesEach, slopes_each
from clingstone.maths.groups import Classes
from clingstone.maths.once import Array, kept
from clingstone.maths.partition import Partition

BLOCK = 1_000_000  # doubles in the largest array of one evaluation: what a cache holds
SMALL = 100_000  # entries up to which an indicator is kept as a plain matrix


def each(algebra: Chosen, response: Response) -> Each | Ranges | FieldEach | None:
    """What evaluates these components column by column, or None where only one θ for all is at hand."""
    if not isinstance(algebra, Layered) or algebra.spatial is not None or algebra.above:
        return ranges(algebra, response) or field_each(algebra, response)
    serial = algebra.serial
    if serial is not None and (
        type(serial) is not SerialPiece or not serial.links.few or len(serial.parameters) != 1
    ):
        return None
    if any(len(piece.parameters) != 1 for piece in algebra.chain):
        return None
    return Each(algebra, response)


@dataclass(frozen=True, eq=False)
class Each:
    """A layered algebra without places over B columns of y."""

    algebra: Layered
    response: Response

    @property
    def design(self) -> Design:
        return self.response.design

    def minima(self, near: Array | None = None) -> Minima:
        """The REML estimates of every column."""
        m = self.design.m

        def criteria(theta: Array, columns: Places) -> Array:
            return self.grams(theta, columns).criterion(m)

        def shared(theta: Array) -> Array:
            return reml.criterion(self.algebra.gram(theta, self.response), m)

        return minimise_each(criteria, shared, self.algebra.parameters, self.response.B, near)

    def grams(self, theta: Array, columns: Places) -> Grams:
        """Grams of columns (K,) of y, each at its own θ (d, K)."""
        return Grams.in_blocks(self._grams, theta, columns, max(1, BLOCK // self._doubles))

    def slopes(self, theta: Array, columns: Places, free: Sequence[int]) -> SlopesEach:
        """What Satterthwaite's df take, at θ (d, K); free : coordinates that are not at a bound."""
        return slopes_each(lambda at: self.grams(at, columns), theta, free, self.design.m)

    @property
    def _doubles(self) -> int:
        """Doubles that one column takes."""
        p = self.design.p
        classes = self.algebra.classes(self.response)
        cells = self.algebra.chain[0].part.count if self.algebra.chain else 0
        if classes is not None:
            cells = classes.QQ.shape[0] * classes.QQ.shape[1]
        return max(1, (cells + p + 1) * (p + 2))

    def _grams(self, theta: Array, columns: Places) -> Grams:
        w, logdet = self.algebra.weights(theta)
        forms, p = self.algebra.forms(self.response), self.design.p
        gram = Grams(
            (w @ forms.QQ).reshape(-1, p, p),
            np.matmul(w[:, None], forms.QE[columns])[:, 0],
            np.einsum("kf,kf->k", w, forms.EE[columns]),
            logdet,
        )
        if (classes := self.algebra.classes(self.response)) is not None:
            return self._one_level(classes, theta, w, gram, columns)
        load = Loads.of(forms, w, columns) if self.algebra.chain else None
        for step, piece in enumerate(self.algebra.chain):
            ratio = piece.variance(self.algebra.own(piece, theta))
            assert load is not None
            gram = load.lower(gram, ratio)
            if step + 1 < len(self.algebra.chain):
                load = load.shrunk(ratio).lifted(self.algebra._up[step])
        return gram

    def _one_level(self, classes: Classes, theta: Array, w: Array, gram: Grams, columns: Places) -> Grams:
        piece = self.algebra.chain[0]
        p, B = self.design.p, self.response.B

        def by_column() -> tuple[Array, Array]:
            QE, EE = classes.QE.reshape(-1, p, B), classes.EE.reshape(-1, B)
            return np.ascontiguousarray(QE.transpose(2, 0, 1)), np.ascontiguousarray(EE.T)

        # Column first, so that the values of one column lie together.
        key = ("each classes", self.algebra.serial is not None, piece.part.key)
        QE, EE = kept(self.response, key, by_column)
        products, logdet = classes.shrinkage(piece.variance(self.algebra.own(piece, theta)), w)
        whole = len(columns) == B and bool(np.array_equal(columns, np.arange(B)))
        QE, EE = (QE, EE) if whole else (QE[columns], EE[columns])
        return Grams(
            gram.QQ - (products @ classes.QQ.reshape(-1, p * p)).reshape(-1, p, p),
            gram.QE - np.matmul(products[:, None, :], QE)[:, 0],
            gram.EE - np.einsum("kd,kd->k", products, EE),
            gram.logdet + logdet,
        )


@dataclass(frozen=True, eq=False)
class Loads:
    """What the rows of each of G cells amount to, per column: c (K, G), TQ (K, G, p), TE (K, G)."""

    c: Array
    TQ: Array
    TE: Array

    @classmethod
    def of(cls, forms: Forms, w: Array, columns: Places) -> Loads | None:
        """From the loads of each form, at weights (K, F)."""
        if forms.c is None or forms.TQ is None or forms.TE is None:
            return None
        TQ = (w @ forms.TQ).reshape(len(w), forms.c.shape[1], -1)
        return cls(w @ forms.c, TQ, np.matmul(w[:, None], forms.TE[columns])[:, 0])

    def lower(self, gram: Grams, ratio: Array) -> Grams:
        """The Grams once intercepts of variance ratio λ (K,) are added at these cells."""
        w = ratio[:, None] / (1 + ratio[:, None] * self.c)
        WQ = (self.TQ * w[..., None]).transpose(0, 2, 1)
        return Grams(
            gram.QQ - np.matmul(WQ, self.TQ),
            gram.QE - np.matmul(WQ, self.TE[..., None])[..., 0],
            gram.EE - np.einsum("kg,kg,kg->k", self.TE, w, self.TE),
            gram.logdet + np.log1p(ratio[:, None] * self.c).sum(axis=1),
        )

    def shrunk(self, ratio: Array) -> Loads:
        k = 1 / (1 + ratio[:, None] * self.c)
        return Loads(self.c * k, self.TQ * k[..., None], self.TE * k)

    def lifted(self, up: Partition) -> Loads:
        """Added up to the cells of the next level."""
        if up.n * up.count <= SMALL:
            Z = kept(up, ("dense indicator",), lambda: np.asarray(up.indicator.toarray()))
            return Loads(self.c @ Z.T, np.matmul(Z, self.TQ), self.TE @ Z.T)
        K, G, p = self.TQ.shape
        TQ = up.sums(np.ascontiguousarray(self.TQ.transpose(1, 0, 2)).reshape(G, K * p))
        TQ = TQ.reshape(up.count, K, p).transpose(1, 0, 2)
        return Loads(up.sums(self.c.T).T, TQ, up.sums(self.TE.T).T)
