"""AR(1) and its continuous-time form within series, by elapsed steps.

Rows stand in series and time order. Two neighbours of one series that are Δ base steps apart
correlate φ = ρ^Δ; R is the correlation matrix. R⁻¹ is tridiagonal:

    R⁻¹ = I + Σ_Δ [ φ²/(1 − φ²) D_Δ − φ/(1 − φ²) A_Δ ],   ln|R| = Σ_links ln(1 − φ²),

A_Δ the adjacency of the links of length Δ, D_Δ diagonal: how many such links a row has. So a Gram at
any ρ is a short weighted sum of fixed ones when few lengths occur (Jones 1980 for gaps). When many
occur (irregular times) rows are whitened one by one: w_t = (z_t − φ_t z_{t−1})/√(1 − φ_t²).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import linalg, sparse

from clingstone.maths.forms import Form
from clingstone.maths.once import Array, once

FEW_LENGTHS = 24
SHORT = 64  # steps from the first row of a series to its last, up to which lags are summed up one by one
SPREAD = 4  # times n: the largest grid of series × steps that is laid out
BLOCK = 1_000_000  # numbers laid out at once


@dataclass(frozen=True, eq=False)
class Links:
    """Neighbouring rows of one series.

    steps : (n,) base steps since the row before in the same series, NaN at the start of a series.
    """

    steps: Array

    @property
    def n(self) -> int:
        return len(self.steps)

    @property
    @once
    def later(self) -> npt.NDArray[np.int64]:
        """Rows that have a row before them; that row is ``later − 1``."""
        return np.flatnonzero(~np.isnan(self.steps))

    @property
    @once
    def lengths(self) -> tuple[Array, npt.NDArray[np.int64]]:
        """Distinct link lengths (D,) and how often each occurs (D,)."""
        length, count = np.unique(self.steps[self.later], return_counts=True)
        return length, count

    @property
    def few(self) -> bool:
        return len(self.lengths[0]) <= FEW_LENGTHS

    @property
    @once
    def forms(self) -> tuple[tuple[Form, Form], ...]:
        """(D_Δ, A_Δ) for each distinct length."""
        out = []
        for length in self.lengths[0]:
            rows = self.later[self.steps[self.later] == length]
            degree = np.bincount(np.concatenate([rows, rows - 1]), minlength=self.n).astype(float)
            ends = np.concatenate([rows, rows - 1]), np.concatenate([rows - 1, rows])
            ones = np.ones(2 * len(rows))
            A = sparse.csr_array((ones, ends), shape=(self.n, self.n))
            D = sparse.csr_array(sparse.diags_array(degree))
            out.append(
                (Form(f"links:{length:g}:ends", D, 0.0, 2.0), Form(f"links:{length:g}:pairs", A, -2.0, 2.0))
            )
        return tuple(out)

    def weights(self, rho: Array) -> tuple[Array, Array]:
        """Weights of I and of D_Δ, A_Δ length by length in R⁻¹, (K, 1 + 2D), and ln|R| (K,), at ρ (K,)."""
        length, count = self.lengths
        phi, rest = correlation(rho, length)
        pairs = np.stack([phi**2 / rest, -phi / rest], axis=2).reshape(len(phi), -1)
        return np.hstack([np.ones((len(phi), 1)), pairs]), np.asarray(np.log(rest) @ count)

    def whiten(self, rho: float, block: Array) -> Array:
        """L⁻¹ block with LL' = R; block (n,) or (n, k)."""
        phi, root = (v.reshape((-1,) + (1,) * (block.ndim - 1)) for v in self._before(rho))
        out = np.array(block, dtype=float)
        out[1:] -= phi[1:] * block[:-1]
        out /= root
        return out

    def _before(self, rho: float) -> tuple[Array, Array]:
        """φ of each row and the row before it (n,), and √(1 − φ²); 0 and 1 at the start of a series."""
        length = self.lengths[0]
        own = correlation(rho, length if len(length) == 1 else self.steps[self.later])
        phi, root = np.zeros(self.n), np.ones(self.n)
        phi[self.later], root[self.later] = own[0], np.sqrt(own[1])
        return phi, root

    def logdet(self, rho: float) -> float:
        """ln|R|."""
        length, count = self.lengths
        return float(count @ np.log(correlation(rho, length)[1]))

    def colour(self, rho: float, block: Array) -> Array:
        """L block with LL' = R: white noise (n, k) to the stationary process, x_t = φx_{t−1} + √(1−φ²)z_t."""
        phi, rest = correlation(rho, self.steps[self.later])
        band = np.ones((2, self.n))
        band[1] = 0.0
        band[1, self.later - 1] = -phi
        noise = np.array(block, dtype=float)
        noise[self.later] *= np.sqrt(rest)[:, None]
        return np.asarray(linalg.solve_banded((1, 0), band, noise, overwrite_b=True, check_finite=False))

    def apply(self, rho: float, block: Array) -> Array:
        """R block, one pass forwards and one back."""
        phi, rest = correlation(rho, self.steps[self.later])
        band = np.ones((2, self.n))
        band[1] = 0.0
        band[1, self.later - 1] = -phi
        # R = LL' with L = C⁻¹S, C bidiagonal with unit diagonal, S the innovations' deviations.
        variance = np.ones((self.n, 1))
        variance[self.later, 0] = rest
        upper = np.ones((2, self.n))
        upper[0] = 0.0
        upper[0, self.later] = -phi
        back = linalg.solve_banded((0, 1), upper, block, check_finite=False)
        return np.asarray(linalg.solve_banded((1, 0), band, variance * back, check_finite=False))

    @property
    @once
    def _places(self) -> npt.NDArray[np.int64] | None:
        """(n,) whole steps since the first row of the series; None where rows share a step or lie between."""
        length = np.where(np.isnan(self.steps), 0.0, self.steps)
        if np.any(length != np.round(length)) or np.any(length[self.later] < 1):
            return None
        along = np.cumsum(length).astype(np.int64)
        first = along[self.starts][np.cumsum(np.isnan(self.steps)) - 1]
        return np.asarray(along - first, dtype=np.int64)

    @property
    def starts(self) -> npt.NDArray[np.int64]:
        """First rows of the series."""
        return np.flatnonzero(np.isnan(self.steps))

    def lag_sums(self, left: Array, right: Array) -> Array | None:
        """(K, p, q) C_k with left'R(ρ)right = Σ_k ρ^k C_k for every ρ; None where series are long.

        C_k adds left_i'right_j over the rows i, j of one series that are k steps apart. Series are laid out
        on series × steps, some at a time, and one product per block holds every lag.
        """
        place = self._places
        if place is None:
            return None
        T, starts = int(place.max()) + 1, self.starts
        if T > SHORT or T * len(starts) > SPREAD * self.n + 1000:
            return None
        p, q = left.shape[1], right.shape[1]
        series = np.cumsum(np.isnan(self.steps)) - 1
        ends, size = np.append(starts, self.n), max(1, BLOCK // (T * max(p + q, 1)))
        W = np.zeros((T * p, T * q))
        for first in range(0, len(starts), size):
            last = min(first + size, len(starts))
            rows = slice(ends[first], ends[last])
            at = series[rows] - first, place[rows]
            grid = np.zeros((last - first, T, p + q))
            grid[at[0], at[1], :p], grid[at[0], at[1], p:] = left[rows], right[rows]
            W += grid[:, :, :p].reshape(last - first, -1).T @ grid[:, :, p:].reshape(last - first, -1)
        apart = np.abs(np.subtract.outer(np.arange(T), np.arange(T)))
        out = np.zeros((T, p, q))
        np.add.at(out, apart, W.reshape(T, p, T, q).transpose(0, 2, 1, 3))
        return out

    def dense(self, rho: float) -> Array:
        """(n, n) R; for small n."""
        return self.apply(rho, np.eye(self.n))


def correlation(rho: float | Array, steps: Array) -> tuple[Array, Array]:
    """φ = ρ^Δ and 1 − φ², the latter without cancellation when φ is near one; (K, L) for ρ (K,), Δ (L,)."""
    with np.errstate(divide="ignore"):
        log = np.multiply.outer(np.log(np.abs(rho)), steps)
    phi = np.exp(log)
    if np.any(rho < 0):
        odd = np.round(steps).astype(np.int64) % 2 == 1
        phi = np.where(np.logical_and.outer(rho < 0, odd), -phi, phi)
    return phi, -np.expm1(2 * log)


def at_rho(sums: Array, rho: float | Array) -> Array:
    """Σ_k ρ^k C_k of ``Links.lag_sums``, (p, q), or (len(ρ), p, q)."""
    return np.asarray(np.tensordot(np.power.outer(rho, np.arange(len(sums))), sums, 1))
