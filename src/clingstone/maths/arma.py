"""ARMA(p, q) errors within series: exact likelihood by a banded factorisation, missing steps included.

For t beyond the first m = max(p, q) steps of a series w_t = z_t − φ₁z_{t−1} − … is a moving average, and
before that w_t = z_t; so Cov(w) is banded with m bands and its Cholesky factor whitens in O(N m)
(Ansley 1979; Brockwell & Davis 1991, 5.3). Missing steps enter as unknown values: with D their
indicators and G = D'V⁻¹D,

    V_oo⁻¹ = V⁻¹ − V⁻¹D G⁻¹ D'V⁻¹ on the rows,     ln|V_oo| = ln|V| + ln|G|.

G has a block for each series, so that the first missing steps of all series share a column of D, the
second ones another, and so on.

V is on the scale of the innovations: Var(z_t) = γ₀ > 1.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import linalg
from scipy.linalg import lapack

from clingstone.maths.basis import Gram
from clingstone.maths.longrun import Grid, Places
from clingstone.maths.once import Array, once


def from_partial(partial: npt.ArrayLike) -> Array:
    """(p,) coefficients of a stationary autoregression from its partial correlations (Durbin–Levinson)."""
    phi = np.zeros(0)
    for r in np.asarray(partial, dtype=float):
        phi = np.append(phi - r * phi[::-1], r)
    return phi


def autocovariances(phi: Array, theta: Array, count: int) -> Array:
    """γ₀ … γ_{count−1} of z_t = Σφz + a_t + Σθa, Var(a) = 1."""
    p, q = len(phi), len(theta)
    top = max(p, q) + 1
    psi = np.zeros(q + 1)
    psi[0] = 1.0
    for j in range(1, q + 1):
        psi[j] = theta[j - 1] + sum(phi[i] * psi[j - 1 - i] for i in range(min(p, j)))
    full = np.r_[1.0, theta]
    right = np.array([sum(full[j] * psi[j - k] for j in range(k, q + 1)) for k in range(top)])
    A = np.eye(top)
    for k in range(top):
        for i in range(p):
            A[k, abs(k - i - 1)] -= phi[i]
    gamma = np.zeros(max(count, top))
    gamma[:top] = np.linalg.solve(A, right)
    for k in range(top, len(gamma)):
        gamma[k] = sum(phi[i] * gamma[k - i - 1] for i in range(p))
    return np.asarray(gamma[:count])


@dataclass(frozen=True, eq=False)
class Steps:
    """The steps of series laid end to end, and which of them have a row."""

    grid: Grid

    @property
    @once
    def place(self) -> Places:
        """(N,) steps since the start of the series."""
        return np.arange(self.grid.N) - np.repeat(self.grid.starts, self.grid.lengths)

    @property
    @once
    def missing(self) -> Places:
        """(k,) steps without a row."""
        empty = np.ones(self.grid.N, dtype=bool)
        empty[self.grid.place] = False
        return np.flatnonzero(empty)

    @property
    @once
    def holes(self) -> Places:
        """(S,) missing steps of each series."""
        series = np.repeat(np.arange(len(self.grid.lengths)), self.grid.lengths)
        return np.bincount(series[self.missing], minlength=len(self.grid.lengths))

    @property
    def depth(self) -> int:
        """The most missing steps of one series: columns of D."""
        return int(self.holes.max(initial=0))

    def filled(self, block: Array) -> Array:
        """(N, k + depth) a block on the steps, and D behind it."""
        D = np.zeros((self.grid.N, self.depth))
        before = np.cumsum(self.holes) - self.holes
        D[self.missing, np.arange(len(self.missing)) - np.repeat(before, self.holes)] = 1.0
        return np.hstack([self.grid.spread(block), D])

    @once
    def _apart(self, d: int) -> tuple[Places, Places]:
        """The later row of each pair d steps apart in one series, and its steps since the start."""
        later = np.flatnonzero(self.place >= d)
        return later, self.place[later]

    def whiten(self, phi: Array, theta: Array, wide: Array) -> tuple[Array, float]:
        """L⁻¹ of columns on the steps (N, k), LL' = V, and ln|V|."""
        m = max(len(phi), len(theta))
        w = np.array(wide, order="F")
        rows, _ = self._apart(m)
        for i, value in enumerate(phi, start=1):
            w[rows] -= value * wide[rows - i]
        if m == 0:
            return w, 0.0
        band = self._bands(phi, theta, m)
        factor = linalg.cholesky_banded(band, lower=True, overwrite_ab=True, check_finite=False)
        solved, _ = lapack.dtbtrs(factor, w, uplo="L", overwrite_b=1)
        return np.asarray(solved), float(2 * np.log(factor[0]).sum())

    def _bands(self, phi: Array, theta: Array, m: int) -> Array:
        """(m + 1, N) lower bands of Cov(w)."""
        gamma = autocovariances(phi, theta, 2 * m + 1)
        full = np.r_[1.0, theta]
        out = np.zeros((m + 1, self.grid.N))
        for d in range(m + 1):
            later, at = self._apart(d)
            moving = float(full[: len(full) - d] @ full[d:]) if d < len(full) else 0.0
            edge = gamma[d] - sum(f * gamma[abs(r - d)] for r, f in enumerate(phi, start=1))
            value = np.where(at < m, gamma[d], np.where(at - d < m, edge, moving))
            out[d, later - d] = value
        return out

    def gram(self, phi: Array, theta: Array, wide: Array, p: int) -> Gram:
        """[Q, e]'V_oo⁻¹[Q, e] and ln|V_oo|; wide = filled([Q, e]), p the columns of Q."""
        white, logdet = self.whiten(phi, theta, wide)
        h = self.depth
        z = white[:, : white.shape[1] - h]
        QQ, QE = z[:, :p].T @ z[:, :p], z[:, :p].T @ z[:, p:]
        EE = np.einsum("ij,ij->j", z[:, p:], z[:, p:])
        for some, U in self.grid.batches(white) if h else ():
            D, rest = U[:, :, -h:].transpose(0, 2, 1), U[:, :, :-h]
            # A series with fewer missing steps has columns of zeros, whose block is the identity.
            idle = np.arange(h) >= self.holes[some][:, None]
            L = np.linalg.cholesky(D @ D.transpose(0, 2, 1) + idle[:, :, None] * np.eye(h))
            half = np.linalg.solve(L, D @ rest).reshape(-1, rest.shape[2])
            logdet += float(2 * np.log(np.einsum("shh->sh", L)).sum())
            hq, he = half[:, :p], half[:, p:]
            QQ, QE, EE = QQ - hq.T @ hq, QE - hq.T @ he, EE - np.einsum("ij,ij->j", he, he)
        return Gram(QQ, QE, EE, logdet)
