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

BLOCK = 1_000_000  # doubles in the largest array of one evaluation: what a cache holds
SMALL = 100_000  # entries up to which an indicator is kept as a plain matrix


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
        forms = self._forms
        serial = self.algebra.serial
        w, logdet = np.ones((len(columns), 1)), np.zeros(len(columns))
        if serial is not None:
            length, count = serial.links.lengths
            phi, rest = correlations(serial.rho(self.algebra.own(serial, theta)), length)
            pairs = np.stack([phi**2 / rest, -phi / rest], axis=1).reshape(-1, len(columns))
            w = np.concatenate([w, pairs.T], axis=1)
            logdet = count.astype(float) @ np.log(rest)
        p = self.design.p
        gram = Grams(
            (w @ forms.QQ).reshape(-1, p, p),
            np.matmul(w[:, None], forms.QE[columns])[:, 0],
            np.einsum("kf,kf->k", w, forms.EE[columns]),
            logdet,
        )
        if forms.c is None or forms.TQ is None or forms.TE is None:
            return gram, None
        cells = forms.c.shape[1]
        return gram, Loads(
            w @ forms.c,
            (w @ forms.TQ).reshape(-1, cells, p),
            np.matmul(w[:, None], forms.TE[columns])[:, 0],
        )

    @property
    def _forms(self) -> Forms:
        """R⁻¹ as a weighted sum of fixed forms: what each amounts to, the identity first."""
        parts = self.algebra.chain
        key = ("each forms", self.algebra.serial is not None, parts[0].part.key if parts else "")
        return kept(self.response, key, self._stacked)

    def _stacked(self) -> Forms:
        design, response, algebra = self.design, self.response, self.algebra
        p, B = design.p, response.B
        QQ, QE, EE = [np.eye(p).ravel()], [np.zeros((p, B))], [response.ss]
        plain = algebra._plain(response)
        loads = [] if plain is None else [(plain.c, plain.TQ, plain.TE)]
        for d, pair in enumerate(algebra.serial.links.forms if algebra.serial is not None else ()):
            for which, form in enumerate(pair):
                qe, ee = response.gram(form)
                QQ.append(design.gram(form).ravel())
                QE.append(qe)
                EE.append(ee)
                if plain is not None:
                    loads.append(algebra._form_load(d, which, response))
        c = TQ = TE = None
        if loads:
            c = np.stack([load[0] for load in loads])
            TQ = np.stack([load[1].ravel() for load in loads])
            TE = np.ascontiguousarray(np.stack([load[2] for load in loads]).transpose(2, 0, 1))
        by_column = np.ascontiguousarray(np.stack(QE).transpose(2, 0, 1))
        return Forms(np.stack(QQ), by_column, np.ascontiguousarray(np.stack(EE).T), c, TQ, TE)


@dataclass(frozen=True, eq=False)
class Forms:
    """Gram and loads of F forms: QQ (F, pp), QE (B, F, p), EE (B, F); c (F, G), TQ (F, Gp), TE (B, F, G)."""

    QQ: Array
    QE: Array
    EE: Array
    c: Array | None
    TQ: Array | None
    TE: Array | None


@dataclass(frozen=True, eq=False)
class Loads:
    """What the rows of each of G cells amount to, per column: c (K, G), TQ (K, G, p), TE (K, G)."""

    c: Array
    TQ: Array
    TE: Array

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


def correlations(rho: Array, length: Array) -> tuple[Array, Array]:
    """φ = ρ^Δ and 1 − φ², (D, K), without cancellation when φ is near one."""
    with np.errstate(divide="ignore"):
        log = np.log(np.abs(rho))[None] * length[:, None]
    phi = np.exp(log)
    odd = (np.round(length).astype(np.int64) % 2 == 1)[:, None]
    phi = np.where(odd & (rho < 0)[None], -phi, phi)
    return phi, np.where(np.isfinite(log), -np.expm1(2 * np.maximum(log, -700.0)), 1.0)
