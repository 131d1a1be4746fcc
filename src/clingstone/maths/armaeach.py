"""ARMA(p, q) errors of many columns of y, each at parameters of its own; no step missing, q at most one.

For an autoregression the rows past the first p of a series are whitened by z_t − Σφ_i z_{t−i}, so that
[Q, e]'V⁻¹[Q, e] is a quadratic form in (1, −φ) of products of lagged rows, made once. The first p rows add
their own inverse covariance. With a moving average w_t = z_t − φz_{t−1} has one band beside its diagonal,
and its innovations v_t = w_t − (θ/d_{t−1})v_{t−1} of variance d_t run for all columns at once (Ansley 1979).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from clingstone.maths.each import Grams, Minima, Places, minimise_each, minimise_from
from clingstone.maths.longrun import Grid
from clingstone.maths.once import Array, once
from clingstone.maths.search import Axis

STARTS = 3  # of a search over two or more parameters, as in a search of one column


@dataclass(frozen=True, eq=False)
class ArmaEach:
    """The restricted criterion of every column. Q (N, k) and E (N, B) on the steps of the grid."""

    grid: Grid
    Q: Array
    E: Array
    p: int
    q: int

    @staticmethod
    def carries(grid: Grid, p: int, q: int) -> bool:
        """Whether no step is missing, the order is one of these, and every series has p steps."""
        order = q == 0 or (q == 1 and p <= 1)
        return order and len(grid.place) == grid.N and int(grid.lengths.min()) >= p

    def minima(self, axes: tuple[Axis, ...], m: int) -> Minima:
        """The REML estimates of every column; m : rows less columns of the design."""
        B = self.E.shape[1]

        def criteria(theta: Array, columns: Places) -> Array:
            return self.grams(theta, columns).criterion(m)

        def shared(theta: Array) -> Array:
            return criteria(np.repeat(theta[:, None], B, axis=1), np.arange(B))

        if len(axes) == 1:
            return minimise_each(criteria, shared, axes, B)
        mesh = np.meshgrid(*[np.array(a.starts) for a in axes], indexing="ij")
        grid = np.stack([g.ravel() for g in mesh])
        order = np.argsort([shared(theta) for theta in grid.T], axis=0, kind="stable")[:STARTS]
        return best([minimise_from(criteria, axes, grid[:, place]) for place in order])

    def grams(self, theta: Array, columns: Places) -> Grams:
        """Grams of columns (K,), each at its own θ (d, K): partial correlations, then the moving average."""
        partial = np.tanh(theta)
        if self.q == 0:
            return self._autoregression(partial, columns)
        phi = partial[0] if self.p else np.zeros(len(columns))
        return self._moving(phi, partial[-1], columns)

    # ---- autoregressions ----

    @property
    @once
    def _products(self) -> tuple[tuple[Array, Array, Array], tuple[Array, Array, Array]]:
        """Products of rows i and j steps back, past the first p of a series; and of its first p rows."""
        p, starts = self.p, self.grid.starts
        since = np.arange(self.grid.N) - np.repeat(starts, self.grid.lengths)
        later = np.flatnonzero(since >= p)
        return self._crossed([later - i for i in range(p + 1)]), self._crossed([starts + i for i in range(p)])

    def _crossed(self, rows: list[Places]) -> tuple[Array, Array, Array]:
        """(r², k, k), (r², k, B) and (r², B) sums of [Q, e] at one set of rows times that at another."""
        pairs = [(i, j) for i in rows for j in rows]
        return (
            np.stack([self.Q[i].T @ self.Q[j] for i, j in pairs]),
            np.stack([self.Q[i].T @ self.E[j] for i, j in pairs]),
            np.stack([np.einsum("nb,nb->b", self.E[i], self.E[j]) for i, j in pairs]),
        )

    def _autoregression(self, partial: Array, columns: Places) -> Grams:
        p, K = self.p, len(columns)
        phi, logdet = np.zeros((0, K)), np.zeros(K)
        first = np.zeros((K, p, p))  # the inverse covariance of the first p rows
        # Durbin and Levinson: predictions from j rows, of variance Π 1/(1 − r²) over the later r.
        for j, r in enumerate(partial):
            precision = np.prod(1 - partial[j:] ** 2, axis=0)
            ahead = np.concatenate([-phi[::-1], np.ones((1, K))]).T  # the error of row j, from rows 0 … j
            first[:, : j + 1, : j + 1] += precision[:, None, None] * ahead[:, :, None] * ahead[:, None, :]
            logdet -= np.log(precision)
            phi = np.concatenate([phi - r * phi[::-1], r[None]])
        c = np.concatenate([np.ones((1, K)), -phi]).T
        weights = ((c[:, :, None] * c[:, None, :]).reshape(K, -1), first.reshape(K, -1))
        parts = [
            (
                np.tensordot(w, QQ, axes=1),
                np.einsum("kr,rqk->kq", w, QE[:, :, columns]),
                np.einsum("kr,rk->k", w, EE[:, columns]),
            )
            for w, (QQ, QE, EE) in zip(weights, self._products, strict=True)
        ]
        QQ, QE, EE = (one + other for one, other in zip(*parts, strict=True))
        return Grams(QQ, QE, EE, len(self.grid.lengths) * logdet)

    # ---- with a moving average ----

    @property
    @once
    def _lanes(self) -> tuple[Array, Array, Array]:
        """Q (T, S, k), E (T, S, B) and which steps exist (T, S), each series a lane from its first step."""
        T, S = int(self.grid.lengths.max()), len(self.grid.lengths)
        at = np.arange(self.grid.N) - np.repeat(self.grid.starts, self.grid.lengths)
        lane = np.repeat(np.arange(S), self.grid.lengths)
        out = []
        for block in (self.Q, self.E, np.ones((self.grid.N, 1))):
            wide = np.zeros((T, S, block.shape[1]))
            wide[at, lane] = block
            out.append(wide)
        return out[0], out[1], out[2][:, :, 0]

    def _moving(self, phi: Array, theta: Array, columns: Places) -> Grams:
        Q, E, there = self._lanes
        T, S, k = Q.shape
        K = len(columns)
        E = np.ascontiguousarray(E[:, :, columns].transpose(0, 2, 1))  # (T, K, S)
        d = (1 + 2 * phi * theta + theta**2) / (1 - phi**2)  # the variance of z on that of the innovations
        f, t = phi[:, None, None], theta[:, None, None]
        QQ, QE, EE, logdet = np.zeros((K, k, k)), np.zeros((K, k)), np.zeros(K), np.zeros(K)
        v = np.zeros((K, S, k + 1))
        before = np.zeros((K, S, k + 1))
        for step in range(T):
            z = np.concatenate([np.broadcast_to(Q[step], (K, S, k)), E[step][:, :, None]], axis=2)
            if step == 0:
                v = z
            else:
                v = (z - f * before - t / d[:, None, None] * v) * there[step][:, None]
                d = 1 + theta**2 - theta**2 / d
            before = z
            G = np.matmul(v.transpose(0, 2, 1), v) / d[:, None, None]
            QQ += G[:, :k, :k]
            QE += G[:, :k, k]
            EE += G[:, k, k]
            logdet += there[step].sum() * np.log(d)
        return Grams(QQ, QE, EE, logdet)


def best(found: list[Minima]) -> Minima:
    """Column by column the smallest of several minima."""
    which = np.argmin([one.value for one in found], axis=0)
    every = np.arange(len(which))

    def picked(parts: list[npt.NDArray[Any]]) -> npt.NDArray[Any]:
        return np.asarray(np.stack(parts)[which, ..., every])

    return Minima(
        picked([one.theta for one in found]).T,
        picked([one.value for one in found]),
        picked([one.at_bound for one in found]).T,
        picked([one.converged for one in found]),
    )
