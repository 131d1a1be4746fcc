"""ARMA(p, q) errors within series: exact likelihood by a banded factorisation, missing steps included.

For t beyond the first m = max(p, q) steps of a series w_t = z_t − φ₁z_{t−1} − … is a moving average, and
before that w_t = z_t; so Cov(w) is banded with m bands and its Cholesky factor whitens in O(N m)
(Ansley 1979; Brockwell & Davis 1991, 5.3). Missing steps enter as unknown values: with D their
indicators and G = D'V⁻¹D,

    V_oo⁻¹ = V⁻¹ − V⁻¹D G⁻¹ D'V⁻¹ on the rows,     ln|V_oo| = ln|V| + ln|G|.

V is on the scale of the innovations: Var(z_t) = γ₀ > 1.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import linalg

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

    def filled(self, block: Array) -> Array:
        """(N, k + missing) a block on the steps, and the indicators of the missing ones behind it."""
        holes = np.zeros((self.grid.N, len(self.missing)))
        holes[self.missing, np.arange(len(self.missing))] = 1.0
        return np.hstack([self.grid.spread(block), holes])

    def whiten(self, phi: Array, theta: Array, wide: Array) -> tuple[Array, float]:
        """L⁻¹ of columns on the steps (N, k), LL' = V, and ln|V|."""
        m = max(len(phi), len(theta))
        place, N = self.place, self.grid.N
        w = np.array(wide)
        inside = place >= m
        for i, value in enumerate(phi, start=1):
            rows = np.flatnonzero(inside)
            w[rows] -= value * wide[rows - i]
        band = self._bands(phi, theta, m)
        if m == 0:
            return w, 0.0
        factor = linalg.cholesky_banded(band, lower=True, overwrite_ab=True, check_finite=False)
        solved = linalg.solve_banded((len(factor) - 1, 0), factor, w, overwrite_b=True, check_finite=False)
        assert len(solved) == N
        return np.asarray(solved), float(2 * np.log(factor[0]).sum())

    def _bands(self, phi: Array, theta: Array, m: int) -> Array:
        """(m + 1, N) lower bands of Cov(w)."""
        place, N = self.place, self.grid.N
        gamma = autocovariances(phi, theta, 2 * m + 1)
        full = np.r_[1.0, theta]
        out = np.zeros((m + 1, N))
        for d in range(m + 1):
            later = np.flatnonzero(place >= d)  # the later row of each pair d steps apart in one series
            at = place[later]
            moving = float(full[: len(full) - d] @ full[d:]) if d < len(full) else 0.0
            edge = gamma[d] - sum(f * gamma[abs(r - d)] for r, f in enumerate(phi, start=1))
            value = np.where(at < m, gamma[d], np.where(at - d < m, edge, moving))
            out[d, later - d] = value
        return out

    def gram(self, phi: Array, theta: Array, wide: Array, p: int) -> Gram:
        """[Q, e]'V_oo⁻¹[Q, e] and ln|V_oo|; wide = filled([Q, e]), p the columns of Q."""
        white, logdet = self.whiten(phi, theta, wide)
        k = len(self.missing)
        z, holes = white[:, : white.shape[1] - k], white[:, white.shape[1] - k :]
        if k:
            L = np.linalg.cholesky(holes.T @ holes)
            half = linalg.solve_triangular(L, holes.T @ z, lower=True, check_finite=False)
            logdet += float(2 * np.log(np.diag(L)).sum())
        else:
            half = np.zeros((0, z.shape[1]))
        Q, E, hq, he = z[:, :p], z[:, p:], half[:, :p], half[:, p:]
        return Gram(
            Q.T @ Q - hq.T @ hq,
            Q.T @ E - hq.T @ he,
            np.einsum("ij,ij->j", E, E) - np.einsum("ij,ij->j", he, he),
            logdet,
        )
