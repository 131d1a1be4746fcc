"""Long-run variance on a regular grid of time: equal-weighted cosines and the Bartlett kernel.

Rows sit on the ticks of their series; a missing tick is a zero score (amplitude modulation, Parzen 1963).
Sources: Lazarus, Lewis, Stock & Watson (2018) for the cosines; Newey & West (1987, 1994) for Bartlett;
Bakirov & Székely (2006) for the law of a ratio with one positive weight.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import fft, optimize, signal

from clingstone.maths.once import Array, once

NODES = 80
_theta, _weight = np.polynomial.legendre.leggauss(NODES)
ANGLE = (_theta + 1) * np.pi / 4  # Gauss-Legendre on (0, π/2)
WEIGHT = _weight * np.pi / 4
Places = npt.NDArray[np.int64]
AT_ONCE = 1_000_000  # numbers of the series that are taken together


@dataclass(frozen=True, eq=False)
class Grid:
    """Series laid end to end on one grid of ticks.

    place : (n,) grid position of each row. starts, lengths : (S,) of each series, in ticks.
    """

    place: Places
    starts: Places
    lengths: Places

    @classmethod
    def of(cls, codes: npt.NDArray[np.int32], tick: Places) -> Grid:
        """From the series of each row (nondecreasing codes) and its whole step, increasing in a series."""
        change = np.r_[True, codes[1:] != codes[:-1]]
        first = np.flatnonzero(change)
        last = np.r_[first[1:], len(codes)] - 1
        lengths = tick[last] - tick[first] + 1
        starts = np.r_[0, np.cumsum(lengths)[:-1]]
        series = np.cumsum(change) - 1
        return cls(starts[series] + tick - tick[first][series], starts, lengths)

    @property
    def N(self) -> int:
        return int(self.lengths.sum())

    def spread(self, block: Array) -> Array:
        """(n, k) rows → (N, k) ticks, zeros where a tick has no row."""
        out = np.zeros((self.N, *block.shape[1:]))
        out[self.place] = block
        return out

    @property
    @once
    def counts(self) -> Places:
        """(S,) cosines per series, ν = ⌊0.4 N^⅔⌋, at least one; none for a series of one tick."""
        nu = np.floor(0.4 * self.lengths ** (2 / 3)).astype(np.int64)
        return np.asarray(np.where(self.lengths > 1, np.maximum(nu, 1), 0))

    def batches(self, U: Array) -> Iterator[tuple[Places, Array]]:
        """Series of one length together, some at a time: which they are (s,), and their ticks (s, N, k).

        U : (N, k) on the ticks.
        """
        for N in np.unique(self.lengths):
            alike = np.flatnonzero(self.lengths == N)
            size = max(1, int(AT_ONCE // (N * U.shape[1])))
            for i in range(0, len(alike), size):
                some = alike[i : i + size]
                yield some, U[self.starts[some][:, None] + np.arange(N)]

    def cosine_sums(self, block: Array) -> Array:
        """(Σν, k) √(N/ν)·Λ_j, Λ_j = √(2/N) Σ_t cos(πj(t−½)/N) u_t, so that Ŝ = Λ'Λ. O(N k log N)."""
        out = np.empty((int(self.counts.sum()), block.shape[1]))
        offset = np.cumsum(self.counts) - self.counts
        for some, U in self.batches(self.spread(block)):
            if nu := int(self.counts[some[0]]):
                turned = fft.dct(U, type=2, axis=1)[:, 1 : nu + 1]
                # scipy's transform carries a factor 2
                out[offset[some][:, None] + np.arange(nu)] = turned / np.sqrt(2 * nu)
        return out

    def cosines(self) -> Array:
        """(n, max ν) the cosines of each row's own series, zeros beyond its ν: Λ are their sums by series."""
        series: Places = np.repeat(np.arange(len(self.lengths)), self.lengths)[self.place]
        N, nu = (np.asarray(each[series])[:, None] for each in (self.lengths, self.counts))
        t = (self.place - self.starts[series] + 0.5)[:, None]
        j = np.arange(1, int(self.counts.max()) + 1)
        return np.where(j <= nu, np.sqrt(2 / np.maximum(nu, 1)) * np.cos(np.pi * j * t / N), 0.0)

    def law(self, Q: Array, a: Array, correlate: Callable[[Array], Array]) -> tuple[Array, Array, Array]:
        """Covariances of a'ε and F'ε, F = M(a∘C): (q, q), (q, q, r) and (q, r, q, r), r = Σν.

        Q : (n, p) with M = I − QQ'. a : (n, q). correlate : H (n, k) ↦ ΩH. A series has cosines of its own
        and goes with no other, so all but the projection is a block per series: O(n ν² + r² p).
        """
        (n, q), p = a.shape, Q.shape[1]
        C = self.cosines()
        U = (a[:, :, None] * C[:, None]).reshape(n, -1)
        V, Z = correlate(U), correlate(a)
        r = int(self.counts.sum())
        own = np.zeros((q, r, q, r))
        QU, QV, aV = np.zeros((p, q, r)), np.zeros((p, q, r)), np.zeros((q, q, r))
        rows: Places = np.asarray(np.searchsorted(self.place, np.r_[self.starts, self.N]))
        ends = np.cumsum(self.counts)
        for s, nu in enumerate(self.counts):
            if nu == 0:
                continue
            mine, at = slice(rows[s], rows[s + 1]), slice(ends[s] - nu, ends[s])
            u, v = (block[mine].reshape(-1, q, C.shape[1])[:, :, :nu].reshape(-1, q * nu) for block in (U, V))
            own[:, at, :, at] = (u.T @ v).reshape(q, nu, q, nu)
            QU[:, :, at] = (Q[mine].T @ u).reshape(p, q, nu)
            QV[:, :, at] = (Q[mine].T @ v).reshape(p, q, nu)
            aV[:, :, at] = (a[mine].T @ v).reshape(q, q, nu)
        K, KV = QU.reshape(p, q * r), QV.reshape(p, q * r)
        cross = K.T @ (KV - correlate(Q).T @ Q @ K / 2)
        FF = own.reshape(q * r, q * r) - cross - cross.T
        aF = aV - np.tensordot(Z.T @ Q, QU, 1)
        return a.T @ Z, aF, FF.reshape(q, r, q, r)

    def correlate(self, block: Array, rho: float) -> Array:
        """ΩH for Ω_ts = ρ^|t−s| within series, H (n, k): one filter each way on the ticks."""
        if rho == 0.0:
            return block
        out = np.empty((self.N, block.shape[1]))
        for some, U in self.batches(self.spread(block)):
            ahead = signal.lfilter([1.0], [1.0, -rho], U, axis=1)
            back = signal.lfilter([1.0], [1.0, -rho], U[:, ::-1], axis=1)[:, ::-1]
            out[self.starts[some][:, None] + np.arange(U.shape[1])] = ahead + back - U
        return np.asarray(out[self.place])

    def bartlett(self, block: Array, lags: int) -> Array:
        """(k, k) Σ_j (1 − |j|/(lags+1)) Γ_j of the columns of block, series by series. O(Nk²), any lags."""
        out = np.zeros((block.shape[1], block.shape[1]))
        for moving in self._moving(block, lags + 1):
            out += moving.T @ moving / (lags + 1)
        return out

    def bartlett_squares(self, block: Array, lags: int) -> Array:
        """(k,) the diagonal of ``bartlett`` alone."""
        out = np.zeros(block.shape[1])
        for moving in self._moving(block, lags + 1):
            out += np.einsum("ij,ij->j", moving, moving) / (lags + 1)
        return out

    def _moving(self, block: Array, L: int) -> Iterator[Array]:
        """Moving sums of L ticks over each zero-padded series: a Bartlett sum is their mean square.

        Windows longer than a series hold all of it L − N + 1 times; one weighted row stands for L − N.
        """
        for _, U in self.batches(self.spread(block)):
            s, N, k = U.shape
            total = np.zeros((s, N + 1, k))
            np.cumsum(U, axis=1, out=total[:, 1:])
            M = min(L, N)
            index = np.arange(N + M - 1)
            yield (total[:, np.minimum(index + 1, N)] - total[:, np.maximum(index + 1 - M, 0)]).reshape(-1, k)
            if L > N:
                yield np.sqrt(L - N) * total[:, N]


@dataclass(frozen=True, eq=False)
class RatioLaw:
    """Law of t² = (a'ε)²/‖F'ε‖² for normal ε, from the covariance G of [a'ε, F'ε].

    weights : (q,) λ, the eigenvalues of Cov(F'ε). load : (q+1,) v, so that at c the matrix of the form
    (a'ε)² − c²‖F'ε‖² is diag(0, −c²λ) + vv': a diagonal plus rank one, with one positive eigenvalue.
    """

    weights: Array
    load: Array

    @classmethod
    def of(cls, G: Array) -> RatioLaw:
        """G : (q+1, q+1) covariance, a'ε first."""
        values, vectors = np.linalg.eigh(G[1:, 1:])
        kept = values > 1e-14 * values[-1]
        values, vectors = values[kept], vectors[:, kept]
        load = (vectors.T @ G[1:, 0]) / np.sqrt(values)  # Cov(a'ε, whitened F'ε)
        rest = max(float(G[0, 0] - load @ load), 0.0)
        return cls(values, np.r_[np.sqrt(rest), load])

    @property
    def df(self) -> float:
        """Satterthwaite df of the denominator, (Σλ)²/Σλ²."""
        return float(self.weights.sum() ** 2 / np.sum(self.weights**2))

    def tail(self, t: Array) -> Array:
        """P(|T| > |t|) for (B,) values, with relative accuracy; NaN stays NaN."""
        t = np.atleast_1d(np.asarray(t, dtype=float))
        out = np.full(len(t), np.nan)
        out[t == 0] = 1.0
        out[np.isposinf(np.abs(t))] = 0.0
        ok = np.flatnonzero(np.isfinite(t) & (t != 0))
        step = max(1, int(4e6 // (NODES * len(self.load))))
        for i in range(0, len(ok), step):
            out[ok[i : i + step]] = self._tail(np.abs(t[ok[i : i + step]]))
        return out

    def _tail(self, c: Array) -> Array:
        delta = np.hstack([np.zeros((len(c), 1)), -np.outer(c**2, self.weights)])
        v2 = self.load**2
        top = _positive_root(delta, v2)
        # With ω₀ the positive and ωⱼ ≤ 0 the other eigenvalues, ηⱼ = −ωⱼ/ω₀ and x = cos²θ:
        # P = (2/π) ∫₀^{π/2} cos^q θ Π(x + ηⱼ)^{−½} dθ. The product comes from the secular equation,
        # its root at x = 1 divided out exactly: Π(x + ηⱼ) = Π_k(x − δ_k/ω₀) · ω₀Σ v²/((ω₀−δ)(xω₀−δ)).
        x = np.cos(ANGLE) ** 2
        scaled = delta / top[:, None]
        share = v2 / (top[:, None] - delta)
        gap = x[None, :, None] - scaled[:, None, :]
        log_product = np.log(gap).sum(axis=2) + np.log((share[:, None, :] / gap).sum(axis=2))
        q = delta.shape[1] - 1
        integrand = np.exp(q * np.log(np.cos(ANGLE)) - log_product / 2)
        return np.asarray(np.clip(2 / np.pi * integrand @ WEIGHT, 0.0, 1.0))

    @once
    def quantile(self, alpha: float) -> float:
        """c with P(|T| > c) = alpha, by root finding in ln c."""

        def excess(log_c: float) -> float:
            return float(np.log(self.tail(np.exp([log_c]))[0]) - np.log(alpha))

        low, high = -1.0, 1.5
        while excess(low) < 0:
            low -= 2
        while excess(high) > 0:
            high += 2
        return float(np.exp(optimize.brentq(excess, low, high, xtol=1e-12)))


def joint_law(G: Array, A: Array) -> tuple[float, float]:
    """(η, scale): scale · (η−q+1)/(ηq) · Wald is referred to F(q, η−q+1).

    The variance estimate is V_st = Σ_j f_sj f_tj with Cov(f_sj, f_tl) = G_st,jl, G (q, q, r, r), and the
    contrasts have covariance A (q, q). η matches the moments of V to a Wishart, as for clusters
    (Pustejovsky & Tipton 2018); the scale is the mean ratio of V's expectation to A. With independent
    scores η = r and the scale is one, which is the test of Lazarus et al. (2018).
    """
    omega = np.einsum("stjj->st", G)
    q = len(omega)
    values, vectors = np.linalg.eigh((omega + omega.T) / 2)
    if values[0] <= 1e-10 * values[-1]:
        return np.nan, np.nan
    T = (vectors / np.sqrt(values)) @ vectors.T
    G = np.einsum("su,uvjl,vt->stjl", T, G, T)
    same = np.einsum("ssjl,ttjl->", G, G)
    cross = np.einsum("stjl,tsjl->", G, G)
    return float(q * (q + 1) / (same + cross)), float(q / np.trace(T @ A @ T))


def _positive_root(delta: Array, v2: Array) -> Array:
    """(B,) the root ω > 0 of 1 = Σ v²/(ω − δ), δ ≤ 0 (B, q+1): bisection in ln ω, then Newton.

    δ₀ = 0, so the root lies between v₀² and Σv².
    """
    high = np.log(np.full(len(delta), v2.sum()))
    low = np.maximum(high - 700.0, np.log(max(float(v2[0]), 1e-300)))
    for _ in range(40):
        middle = (low + high) / 2
        above = np.sum(v2 / (np.exp(middle)[:, None] - delta), axis=1) > 1
        low, high = np.where(above, middle, low), np.where(above, high, middle)
    omega = np.exp((low + high) / 2)
    for _ in range(3):
        gap = omega[:, None] - delta
        f = np.sum(v2 / gap, axis=1)
        omega = np.maximum(omega + (f - 1) / np.sum(v2 / gap**2, axis=1) * f, omega / 2)
    return np.asarray(omega)
