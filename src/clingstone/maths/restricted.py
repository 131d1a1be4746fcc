"""The exact null law of the restricted likelihood ratio of one variance (Crainiceanu & Ruppert 2004).

Under τ² = 0 the ratio is sup_λ m ln(1 + N/D) − Σ ln(1 + λμ) with N = Σ λμ/(1 + λμ) w² and
D = Σ w²/(1 + λμ) + χ²_{m−r}, μ the r nonzero eigenvalues of Z'MZ and w² independent χ²₁: it depends on the
design alone.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from clingstone.maths.once import Array

BINS = 40  # eigenvalues that are kept apart; neighbours share one χ² with their number as df
GRID = 60  # values of λ
DIRECT = 400  # groups up to which the eigenproblem is solved as it stands
CLASSES = 150  # group sizes that are kept apart beyond that
ROWS = 4_000  # draws at once: what a cache holds


@dataclass(frozen=True, eq=False)
class Modes:
    """Nonzero eigenvalues of Z'MZ in ascending order, and how often each occurs."""

    mu: Array
    count: npt.NDArray[np.int64]

    @property
    def rank(self) -> int:
        return int(self.count.sum())


def modes(sizes: Array, sums: Array, rank: int) -> Modes:
    """The spectrum of Z'MZ = diag(sizes) − tt', t (G, p) the group sums of Q.

    G groups of one size s carry G − p eigenvalues equal to s; the rest of them is compressed to p rows,
    so that the eigenproblem has at most p rows for every distinct size. More than 150 distinct sizes are
    put into 150 classes of neighbours. rank : number of nonzero eigenvalues.
    """
    G, p = sums.shape
    if G <= DIRECT:
        found = np.linalg.eigvalsh(np.diag(sizes) - sums @ sums.T)[G - rank :]
        return Modes(np.maximum(found, 0.0), np.ones(rank, dtype=np.int64))
    distinct, code = np.unique(sizes, return_inverse=True)
    if len(distinct) > CLASSES:
        edges = np.quantile(sizes, np.linspace(0, 1, CLASSES + 1)[1:-1])
        code = np.searchsorted(np.unique(edges), sizes)
    same: list[tuple[float, int]] = []
    diagonal, rows = [], []
    for k in range(int(code.max()) + 1):
        own = code == k
        count = int(own.sum())
        if not count:
            continue
        size = float(sizes[own].mean())
        block = sums[own]
        if count > p:
            same.append((size, count - p))
            block = np.linalg.qr(block, mode="r")
        diagonal += [size] * len(block)
        rows.append(block)
    T = np.vstack(rows)
    small = np.linalg.eigvalsh(np.diag(diagonal) - T @ T.T)
    inside = rank - sum(c for _, c in same)
    mu = np.concatenate([small[len(small) - inside :], [s for s, _ in same]])
    times = np.concatenate([np.ones(inside, dtype=np.int64), [c for _, c in same]]).astype(np.int64)
    order = np.argsort(mu, kind="stable")
    return Modes(np.maximum(mu[order], 0.0), times[order])


def draws(found: Modes, m: int, rng: np.random.Generator, N: int) -> Array:
    """(N,) draws of the ratio without a group effect. m : residual degrees of freedom."""
    mu, df = _binned(found)
    scale = float(np.average(mu, weights=df))
    # The grid starts lower with more groups: a smaller λ can then be told from zero.
    grid = np.geomspace(0.02 / (scale * np.sqrt(found.rank)), 1e3 / scale, GRID)
    shrink = 1.0 / (1.0 + np.outer(mu, grid))
    # With S = N + D, the same at every λ, the ratio is m ln S − m ln min_λ D(λ) Π(1 + λμ)^(1/m): one
    # logarithm a draw. λ = 0 stands in front.
    weight = np.exp(-(df @ np.log(shrink)) / m)
    D = np.vstack([shrink, np.ones(GRID)]) * weight
    D = np.hstack([np.ones((len(D), 1)), D])
    rest = m - found.rank
    single = df == 1
    out = np.empty(N)
    for start in range(0, N, ROWS):
        size = min(ROWS, N - start)
        w2 = np.zeros((size, len(df) + 1))
        w2[:, :-1][:, single] = rng.standard_normal((size, int(single.sum()))) ** 2
        w2[:, :-1][:, ~single] = rng.chisquare(df[~single], size=(size, int((~single).sum())))
        if rest > 0:
            w2[:, -1] = rng.chisquare(rest, size=size)
        at = w2 @ D
        out[start : start + size] = m * np.log(at[:, 0] / at.min(axis=1))
    return out


def _binned(found: Modes) -> tuple[Array, Array]:
    """At most ``BINS`` eigenvalues, neighbours put together in equal shares of the rank."""
    mu, count = found.mu, found.count
    if len(mu) <= BINS:
        return mu, count.astype(float)
    place = (np.cumsum(count) - count / 2) / found.rank
    code = np.minimum((place * BINS).astype(int), BINS - 1)
    df = np.bincount(code, weights=count, minlength=BINS)
    total = np.bincount(code, weights=count * mu, minlength=BINS)
    held = df > 0
    return np.asarray(total[held] / df[held]), np.asarray(df[held], dtype=float)
