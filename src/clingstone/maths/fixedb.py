"""The law of t with a kernel variance whose bandwidth is a fixed part b of the series (fixed-b).

t² has the law of χ²₁ over Σ λ_j χ²₁, λ the eigenvalues of the kernel k(|r − s|/b) on the unit interval
with its means taken out, the two independent (Kiefer & Vogelsang 2005). The kernel is laid on a grid, so
no table is needed; several series of one regression share one centring, because it is the sum of all
their scores that is zero.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import numpy.typing as npt

from clingstone.maths.longrun import RatioLaw

POINTS = 200  # against 600 points the tail moves by less than 1e-4


def bartlett_law(lengths: npt.NDArray[np.int64], bandwidth: float) -> RatioLaw:
    """Of t with a Bartlett kernel of bandwidth S steps over series of so many steps."""
    return _law(tuple(int(N) for N in np.sort(np.asarray(lengths))), round(float(bandwidth), 6))


@lru_cache(maxsize=256)
def _law(lengths: tuple[int, ...], bandwidth: float) -> RatioLaw:
    N = np.array(lengths, dtype=float)
    coarse = max(1.0, N.sum() / POINTS)
    counts = np.maximum(np.round(N / coarse).astype(int), 1)
    if len(counts) > 2 * POINTS:  # very many short series: independent blocks, one value each
        counts, N = counts[: 2 * POINTS], N[: 2 * POINTS]
    M = int(counts.sum())
    series = np.repeat(np.arange(len(counts)), counts)
    place = np.concatenate([(np.arange(c) + 0.5) * n / c for c, n in zip(counts, N, strict=True)])
    apart = np.abs(place[:, None] - place[None, :]) / bandwidth
    K = np.where(series[:, None] == series[None, :], np.maximum(1.0 - apart, 0.0), 0.0)
    K -= K.mean(axis=0)
    K -= K.mean(axis=1)[:, None]
    values = np.linalg.eigvalsh((K + K.T) / 2) / M
    kept = values[values > 1e-12 * values[-1]]
    return RatioLaw(kept, np.r_[1.0, np.zeros(len(kept))])


def wishart(law: RatioLaw) -> tuple[float, float]:
    """(scale, ν): the variance estimate behaves like scale times χ²_ν/ν, by its first two moments."""
    return float(law.weights.sum()), law.df
