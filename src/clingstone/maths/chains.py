"""Disjoint paths of rows: what is known in closed form of the forms that link neighbours in a path."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt
from scipy import fft, sparse

from clingstone.maths.once import Array, once

Kind = Literal["differences", "lagged"]
Rows = npt.NDArray[np.int64]
STRETCH = 8192  # rows of a product that stay in a cache
Complex = npt.NDArray[np.complex128]


@dataclass(frozen=True, eq=False)
class Chains:
    """n rows that fall into paths; rows without a link are paths of length 1.

    kind : "differences" (Laplacian of each path) or "lagged" (half its adjacency).
    lengths : (C,) rows of each path. order : (n,) rows path by path, or None if stored so.
    """

    kind: Kind
    lengths: npt.NDArray[np.int64]
    order: Rows | None = None

    @property
    def n(self) -> int:
        return int(self.lengths.sum())

    @property
    @once
    def starts(self) -> npt.NDArray[np.int64]:
        return np.concatenate(([0], np.cumsum(self.lengths)[:-1]))

    @property
    @once
    def by_length(self) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]]:
        """Distinct lengths and how many paths have each."""
        distinct, counts = np.unique(self.lengths, return_counts=True)
        return distinct, counts

    @property
    def interval(self) -> tuple[float, float]:
        """The interval on which the Chebyshev polynomials of this kind live."""
        return (0.0, 4.0) if self.kind == "differences" else (-1.0, 1.0)

    @property
    @once
    def bounds(self) -> tuple[float, float]:
        """Smallest and largest eigenvalue."""
        longest = float(self.lengths.max())
        if self.kind == "differences":
            return 0.0, 4.0 * np.cos(0.5 * np.pi / longest) ** 2 if longest > 1 else 0.0
        edge = float(np.cos(np.pi / (longest + 1.0)))
        return -edge, edge

    def eigenvalues(self, length: int) -> Array:
        """Eigenvalues of one path, in the order of the transform's frequencies."""
        if self.kind == "differences":
            return np.asarray(4.0 * np.sin(0.5 * np.pi * np.arange(length) / length) ** 2)
        return np.asarray(np.cos(np.pi * np.arange(1, length + 1) / (length + 1.0)))

    def trace(self, power: int) -> float:
        """tr Sʳ, a sum over the eigenvalues of each distinct length."""
        total = 0.0
        for length, count in zip(*self.by_length, strict=True):
            values = self.eigenvalues(int(length))
            total += float(count) * float(np.sum(values**power))
        return total

    def in_order(self, block: npt.NDArray[Any]) -> npt.NDArray[Any]:
        return block if self.order is None else block[self.order]

    def transformed(self, block: Array) -> Iterator[tuple[Array, int, Array]]:
        """For each distinct length: its eigenvalues (L,), the count of paths, F'block as (L, count, k).

        The eigenvectors of a path are cosines (DCT-II) or sines (DST-I).
        """
        rows = self.in_order(block)
        for length, count in zip(*self.by_length, strict=True):
            L = int(length)
            first = self.starts[self.lengths == length]
            picked = rows[first[:, None] + np.arange(L)]  # (count, L, k)
            if L == 1:
                out = picked
            elif self.kind == "differences":
                out = fft.dct(picked, type=2, axis=1, norm="ortho")
            else:
                out = fft.dst(picked, type=1, axis=1, norm="ortho")
            yield self.eigenvalues(L), int(count), np.swapaxes(out, 0, 1)

    def log_determinant(self, alpha: Complex, beta: Complex) -> Complex:
        """ln det(αI + βx) for complex α, β, x the form moved to [−1, 1].

        With ρ± = (α ± √(α²−β²))/2 and q = ρ₋/ρ₊: a path Laplacian of ℓ rows has determinant
        (α−β)(ρ₊^ℓ − ρ₋^ℓ)/(ρ₊ − ρ₋), a half adjacency (ρ₊^(ℓ+1) − ρ₋^(ℓ+1))/(ρ₊ − ρ₋). Every
        logarithm below is of a number off the negative axis, so the branch is the right one.
        """
        root = np.sqrt(alpha - beta) * np.sqrt(alpha + beta)
        larger = 0.5 * (alpha + root)
        log_larger = np.log(larger)
        log_q = 2.0 * np.log(np.abs(beta) / (np.abs(alpha + root)) + 1e-300)
        q = (beta / (alpha + root)) ** 2
        total = np.zeros_like(alpha)
        for length, count in zip(*self.by_length, strict=True):
            power = float(length) if self.kind == "differences" else float(length) + 1.0
            tail = np.where(power * log_q < -80.0, 0.0, q**power)
            if self.kind == "differences":
                # (α−β)/(ρ₊−ρ₋) = √((α−β)/(α+β))
                edge = 0.5 * (np.log(alpha - beta) - np.log(alpha + beta)) + log_larger * power
            else:
                edge = log_larger * float(length) - np.log(1.0 - q)
            total = total + float(count) * (edge + np.log(1.0 - tail))
        return np.asarray(total)

    def moments(self, Q: Array, top: int) -> Array:
        """(top + 1, p, p) C_j = Q'T_j(x)Q, x the form moved to [−1, 1]; needs every path longer than ``top``.

        T_j of a path is the mean of the shifts by ±j, reflected at both ends: with its own sign about
        half a step (differences, and a factor (−1)^j), with the opposite sign about one step (lagged).
        """
        rows = self.in_order(Q)
        p = Q.shape[1]
        out = np.zeros((top + 1, p, p))
        for start, length in zip(self.starts, self.lengths, strict=True):
            q = rows[start : start + length]
            for j in range(top + 1):
                out[j] += _path_moment(q, j, self.kind)
        return out


def _path_moment(q: Array, j: int, kind: Kind) -> Array:
    if j == 0:
        return np.asarray(q.T @ q)
    L = _lagged(q, j)
    if kind == "differences":
        head, tail = q[:j], q[len(q) - j :]
        ends = head.T @ head[::-1] + tail.T @ tail[::-1]
        return np.asarray((0.5 if j % 2 == 0 else -0.5) * (L + L.T + ends))
    head, tail = q[: j - 1], q[len(q) - j + 1 :]
    ends = head.T @ head[::-1] + tail.T @ tail[::-1]
    return np.asarray(0.5 * (L + L.T - ends))


def _lagged(q: Array, j: int) -> Array:
    """Σ_t q_t q_{t+j}', in stretches that a cache holds."""
    ends = range(0, len(q) - j, STRETCH)
    return np.asarray(sum(q[a : min(a + STRETCH, len(q) - j)].T @ q[a + j : a + j + STRETCH] for a in ends))


def chains_of(earlier: Rows, later: Rows, n: int, kind: Kind) -> Chains | None:
    """The paths that pairs of rows make, or None if a row has two successors or two predecessors.

    Pairs must run forward (earlier < later).
    """
    if len(earlier) == 0:
        return Chains(kind, np.ones(n, dtype=np.int64))
    incoming = np.bincount(later, minlength=n)
    if incoming.max() > 1 or np.bincount(earlier, minlength=n).max() > 1:
        return None
    if np.all(later - earlier == 1):
        starts = np.flatnonzero(incoming == 0)
        return Chains(kind, np.diff(np.append(starts, n)))
    links = sparse.coo_array((np.ones(len(earlier), dtype=np.int8), (earlier, later)), shape=(n, n))
    labels = sparse.csgraph.connected_components(links.tocsr(), directed=False)[1]
    order = np.argsort(labels, kind="stable")
    return Chains(kind, np.bincount(labels).astype(np.int64), order)
