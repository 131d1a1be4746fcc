"""Grams of many columns of y, each at its own θ: intercepts that nest, and AR(1) at few link lengths."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from clingstone.covariance.algebras import Chosen, Layered
from clingstone.covariance.pieces import SerialPiece
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.maths.each import Grams, Minima, Places, minimise_each
from clingstone.maths.once import Array, kept
from clingstone.maths.partition import Partition

BLOCK = 4_000_000  # doubles in the largest array of one evaluation


def each(algebra: Chosen, response: Response) -> Each | None:
    """What evaluates these components column by column, or None where only one θ for all is at hand."""
    if not isinstance(algebra, Layered) or algebra.spatial is not None or algebra.above:
        return None
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
        size = max(1, BLOCK // self._doubles)
        if len(columns) <= size:
            return self._grams(theta, columns)
        parts = [
            self._grams(theta[:, i : i + size], columns[i : i + size]) for i in range(0, len(columns), size)
        ]
        return Grams(
            np.concatenate([g.QQ for g in parts]),
            np.concatenate([g.QE for g in parts]),
            np.concatenate([g.EE for g in parts]),
            np.concatenate([g.logdet for g in parts]),
        )

    @property
    def _doubles(self) -> int:
        """Doubles that one column takes."""
        p = self.design.p
        cells = self.algebra.chain[0].part.count if self.algebra.chain else 0
        if self._classed:
            cells = len(self.algebra._classes(self.algebra.chain[0].part, self.response).c)
        return max(1, (cells + p + 1) * (p + 2))

    @property
    def _classed(self) -> bool:
        """One level over independent rows: cells of equal size go together."""
        return self.algebra.serial is None and len(self.algebra.chain) == 1

    def _grams(self, theta: Array, columns: Places) -> Grams:
        if self._classed:
            return self._one_level(theta, columns)
        gram, load = self._rows(theta, columns)
        for step, piece in enumerate(self.algebra.chain):
            ratio = piece.variance(self.algebra.own(piece, theta))
            assert load is not None
            gram = load.lower(gram, ratio)
            if step + 1 < len(self.algebra.chain):
                load = load.shrunk(ratio).lifted(self.algebra._up[step])
        return gram

    # ---- one level: classes of cells -------------------------------------------------------

    def _one_level(self, theta: Array, columns: Places) -> Grams:
        piece = self.algebra.chain[0]
        p, B = self.design.p, self.response.B
        classes = self.algebra._classes(piece.part, self.response)
        # Column first, so that the values of one column lie together.
        QE, EE = kept(
            self.response,
            ("each classes", piece.part.key),
            lambda: (np.ascontiguousarray(classes.QE.transpose(2, 0, 1)), np.ascontiguousarray(classes.EE.T)),
        )
        ratio = piece.variance(self.algebra.own(piece, theta))[:, None]
        w = ratio / (1 + ratio * classes.c)  # (K, D)
        QQ = np.eye(p) - (w @ classes.QQ.reshape(-1, p * p)).reshape(-1, p, p)
        whole = len(columns) == B and bool(np.array_equal(columns, np.arange(B)))
        QE, EE = (QE, EE) if whole else (QE[columns], EE[columns])
        ss = self.response.ss[columns]
        return Grams(
            QQ,
            -np.matmul(w[:, None, :], QE)[:, 0],
            ss - np.einsum("kd,kd->k", w, EE),
            np.log1p(ratio * classes.c) @ classes.count.astype(float),
        )

    # ---- rows, then levels -----------------------------------------------------------------

    def _rows(self, theta: Array, columns: Places) -> tuple[Grams, Loads | None]:
        p, K = self.design.p, len(columns)
        ss = self.response.ss[columns]
        QQ, QE, logdet = np.repeat(np.eye(p)[None], K, axis=0), np.zeros((K, p)), np.zeros(K)
        plain = self.algebra._plain(self.response)
        load = None
        if plain is not None:
            load = Loads.repeat(plain.c, plain.TQ, plain.TE[:, columns])
        serial = self.algebra.serial
        if serial is None:
            return Grams(QQ, QE, ss, logdet), load
        rho = serial.rho(self.algebra.own(serial, theta))
        length, count = serial.links.lengths
        phi, rest = correlations(rho, length)
        EE = ss.copy()
        for d, pair in enumerate(serial.links.forms):
            for which, w in enumerate((phi[d] ** 2 / rest[d], -phi[d] / rest[d])):
                qe, ee = self.response.gram(pair[which])
                QQ += w[:, None, None] * self.design.gram(pair[which])
                QE += w[:, None] * qe.T[columns]
                EE += w * ee[columns]
                if load is not None:
                    c, TQ, TE = self.algebra._form_load(d, which, self.response)
                    load = load.plus(w, c, TQ, TE[:, columns])
        return Grams(QQ, QE, EE, count.astype(float) @ np.log(rest)), load


@dataclass(frozen=True, eq=False)
class Loads:
    """What the rows of each of G cells amount to, per column: c (G, K), TQ (G, K, p), TE (G, K)."""

    c: Array
    TQ: Array
    TE: Array

    @classmethod
    def repeat(cls, c: Array, TQ: Array, TE: Array) -> Loads:
        K = TE.shape[1]
        return cls(np.repeat(c[:, None], K, axis=1), np.repeat(TQ[:, None], K, axis=1), TE)

    def plus(self, w: Array, c: Array, TQ: Array, TE: Array) -> Loads:
        return Loads(self.c + w * c[:, None], self.TQ + w[:, None] * TQ[:, None], self.TE + w * TE)

    def lower(self, gram: Grams, ratio: Array) -> Grams:
        """The Grams once intercepts of variance ratio λ (K,) are added at these cells."""
        w = ratio / (1 + ratio * self.c)
        TQ = self.TQ.transpose(1, 2, 0)  # (K, p, G)
        WQ = TQ * w.T[:, None]
        return Grams(
            gram.QQ - np.matmul(WQ, TQ.transpose(0, 2, 1)),
            gram.QE - np.matmul(WQ, self.TE.T[..., None])[..., 0],
            gram.EE - np.einsum("gk,gk,gk->k", self.TE, w, self.TE),
            gram.logdet + np.log1p(ratio * self.c).sum(axis=0),
        )

    def shrunk(self, ratio: Array) -> Loads:
        k = 1 / (1 + ratio * self.c)
        return Loads(self.c * k, self.TQ * k[..., None], self.TE * k)

    def lifted(self, up: Partition) -> Loads:
        G, K, p = self.TQ.shape
        TQ = up.sums(self.TQ.reshape(G, K * p)).reshape(up.count, K, p)
        return Loads(up.sums(self.c), TQ, up.sums(self.TE))


def correlations(rho: Array, length: Array) -> tuple[Array, Array]:
    """φ = ρ^Δ and 1 − φ², (D, K), without cancellation when φ is near one."""
    with np.errstate(divide="ignore"):
        log = np.log(np.abs(rho))[None] * length[:, None]
    phi = np.exp(log)
    odd = (np.round(length).astype(np.int64) % 2 == 1)[:, None]
    phi = np.where(odd & (rho < 0)[None], -phi, phi)
    return phi, np.where(np.isfinite(log), -np.expm1(2 * np.maximum(log, -700.0)), 1.0)
