"""Symmetric quadratic forms e'Se over the rows: lags, paths, groups, neighbour graphs.

Every form is S = Z̃AZ̃' with orthonormal columns Z̃ (the rows themselves, or cells of rows scaled to
unit length) and a small or sparse core A, so that cells of a million rows never become an n × n array.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import sparse

from clingstone.maths.chains import Chains, chains_of
from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition

ROWS_AT_ONCE = 20_000
FILL_LIMIT = 200_000_000


@dataclass(frozen=True, eq=False)
class Form:
    """A symmetric form S of order n.

    Parameters
    ----------
    key : unique within a design.
    matrix : (n, n) sparse symmetric S; or (G, G) weights W between cells when ``part`` is given.
    low, high : bounds of the spectrum of S (never inside it).
    part : rows → cells; then S = ZWZ', Z the indicator (n, G).
    root : (n,) square roots of precision weights, the entries of Z; ones if None.
    chains : the paths that the rows make, for forms that link neighbours in order.
    """

    key: str
    matrix: sparse.csr_array
    low: float
    high: float
    part: Partition | None = None
    root: Array | None = None
    chains: Chains | None = None

    @property
    def n(self) -> int:
        return int(self.matrix.shape[0]) if self.part is None else self.part.n

    @property
    def order(self) -> int:
        """Order of the core A: n, or the number of cells."""
        return int(self.matrix.shape[0])

    @property
    @once
    def S(self) -> sparse.csr_array:
        """(n, n) S written out. Raises ValueError where that would fill memory."""
        if self.part is None:
            return self.matrix
        sizes = self.part.sizes.astype(float)
        linked = sparse.csr_array(
            (np.ones(self.matrix.nnz), self.matrix.indices, self.matrix.indptr), self.matrix.shape
        )
        fill = float(sizes @ (linked @ sizes))
        if fill > FILL_LIMIT:
            raise ValueError(f"the form {self.key} has {fill:.3g} entries; use its cells instead")
        Z = self.part.indicator.T
        if self.root is not None:
            Z = sparse.diags_array(self.root) @ Z
        return sparse.csr_array(Z @ self.matrix @ Z.T)

    @property
    @once
    def unit(self) -> Array:
        """(G,) length of each column of Z."""
        assert self.part is not None
        sizes = self.part.sizes.astype(float) if self.root is None else self.part.sums(self.root**2)
        return np.asarray(np.sqrt(sizes))

    @property
    @once
    def core(self) -> sparse.csr_array:
        """A, with S = Z̃AZ̃'."""
        if self.part is None:
            return self.matrix
        scale = sparse.diags_array(self.unit)
        return sparse.csr_array(scale @ self.matrix @ scale)

    @property
    @once
    def diagonal_core(self) -> Array | None:
        """(G,) diagonal of A when A is diagonal, else None."""
        diagonal = np.asarray(self.core.diagonal())
        return diagonal if np.count_nonzero(self.core.data) == np.count_nonzero(diagonal) else None

    def coordinates(self, block: Array) -> Array:
        """Z̃'block, (order, k)."""
        if self.part is None:
            return block
        weighted = block if self.root is None else block * self.root[:, None]
        return np.asarray(self.part.sums(weighted) / self.unit[:, None])

    def apply(self, block: Array) -> Array:
        """S @ block, (n,) or (n, k)."""
        if self.part is None:
            return np.asarray(self.matrix @ block)
        root = 1.0 if self.root is None else self.root
        flat = block.ndim == 1
        wide = block[:, None] if flat else block
        weighted = wide * np.reshape(root, (-1, 1))
        out = np.asarray(self.matrix @ self.part.sums(weighted))[self.part.codes] * np.reshape(root, (-1, 1))
        return np.asarray(out[:, 0] if flat else out)

    @once
    def trace(self, power: int) -> float:
        """tr Sʳ for r = 1 … 4, without forming Sʳ."""
        if self.chains is not None:
            return self.chains.trace(power)
        if self.diagonal_core is not None:
            return float(np.sum(self.diagonal_core**power))
        return power_trace(self.core, power)


def power_trace(A: sparse.csr_array, power: int) -> float:
    """tr Aʳ of a sparse symmetric A, r = 1 … 4; A² is made in strips of rows and not kept."""
    if power == 1:
        return float(A.diagonal().sum())
    if power == 2:
        return float(A.data @ A.data)
    total = 0.0
    for start in range(0, A.shape[0], ROWS_AT_ONCE):
        strip = A[start : start + ROWS_AT_ONCE]
        square = strip @ A
        total += float(strip.multiply(square).sum()) if power == 3 else float(square.data @ square.data)
    return total


def _linked(
    earlier: npt.NDArray[Any], later: npt.NDArray[Any], n: int, weight: float, diagonal: Array
) -> sparse.csr_array:
    """``weight`` in both places of every pair, and a diagonal."""
    apart = int(later[0] - earlier[0]) if len(earlier) else 1
    if apart > 0 and np.all(later - earlier == apart):  # bands need no sort: several times faster
        band = weight * np.bincount(earlier, minlength=n - apart)
        bands: Array = np.zeros((3, n))  # by column: entries (i + apart, i), (i, i), (i − apart, i)
        bands[0, : n - apart], bands[1], bands[2, apart:] = band, diagonal, band
        S: sparse.csr_array = sparse.dia_array((bands, np.array([-apart, 0, apart])), shape=(n, n)).tocsr()
    else:
        both = (np.concatenate([earlier, later]), np.concatenate([later, earlier]))
        pairs = sparse.coo_array((np.full(len(both[0]), weight), both), shape=(n, n))
        S = sparse.csr_array(pairs + sparse.diags_array(diagonal))
    S.eliminate_zeros()
    return S


def differences(earlier: npt.NDArray[Any], later: npt.NDArray[Any], n: int, key: str) -> Form:
    """e'Se = Σ (e_later − e_earlier)² over pairs of rows: the numerator of Durbin and Watson (1950).

    Pairs that make paths (each row at most once earlier and once later, earlier < later) have a known
    spectrum, 2 − 2cos(πk/ℓ) for a path of ℓ rows.
    """
    ends = np.bincount(earlier, minlength=n) + np.bincount(later, minlength=n)
    S = _linked(earlier, later, n, -1.0, ends.astype(float))
    chains = chains_of(earlier, later, n, "differences") if np.all(earlier < later) else None
    high = chains.bounds[1] if chains is not None else gershgorin(S)[1]
    return Form(key, S, 0.0, high, chains=chains)


def lagged(earlier: npt.NDArray[Any], later: npt.NDArray[Any], n: int, key: str) -> Form:
    """e'Se = Σ e_earlier e_later over pairs of rows; S holds ½ in both places of a pair."""
    S = _linked(earlier, later, n, 0.5, np.zeros(n))
    chains = chains_of(earlier, later, n, "lagged") if np.all(earlier < later) else None
    low, high = chains.bounds if chains is not None else gershgorin(S)
    return Form(key, S, low, high, chains=chains)


def cells(part: Partition, root: Array | None = None) -> Form:
    """e'ZZ'e = Σ over cells of (sum of e)²; with precision weights the entries of Z are ``root``."""
    key = f"cells:{part.key}" + ("" if root is None else ":weighted")
    identity = sparse.csr_array(sparse.eye_array(part.count))
    total = part.sizes.astype(float) if root is None else part.sums(root**2)
    low = float(total.min()) if part.count == part.n else 0.0
    return Form(key, identity, low, float(total.max()), part, root)


def graph(W: sparse.csr_array, key: str) -> Form:
    """S = (W + W')/2 of a weight matrix over the rows."""
    S = symmetric_part(W)
    return Form(key, S, *gershgorin(S))


def cells_graph(part: Partition, W: sparse.csr_array, key: str, root: Array | None = None) -> Form:
    """S = Z(W + W')Z'/2 of a weight matrix between cells, pairs of rows of the same cell left out."""
    S = symmetric_part(W)
    S.setdiag(0.0)
    S.eliminate_zeros()
    total = np.sqrt(part.sizes.astype(float) if root is None else part.sums(root**2))
    scaled = sparse.csr_array(sparse.diags_array(total) @ S @ sparse.diags_array(total))
    low, high = gershgorin(scaled)
    return Form(key, S, min(low, 0.0), max(high, 0.0), part, root)


def symmetric_part(W: sparse.csr_array) -> sparse.csr_array:
    """(W + W')/2. Raises ValueError for entries that are not finite."""
    S = sparse.csr_array(0.5 * (W + W.T))
    if not np.all(np.isfinite(S.data)):
        raise ValueError("a weight is not finite")
    return S


def gershgorin(S: sparse.csr_array) -> tuple[float, float]:
    """Bounds of the spectrum: the smaller of the row-sum discs and the scaled discs of positive weights.

    For entries of one sign off the diagonal, rows scaled by √(row sums) give a bound that never
    exceeds the largest geometric mean of linked row sums, far sharper for row-standardised graphs.
    """
    if S.shape[0] == 0:
        return 0.0, 0.0
    diagonal = np.asarray(S.diagonal())
    off = abs(S - sparse.diags_array(diagonal)).tocsr()
    radius = np.asarray(off.sum(axis=1)).ravel()
    # Any positive scaling d gives discs of radius (off @ d)/d; two Perron steps sharpen them.
    low, high = float((diagonal - radius).min()), float((diagonal + radius).max())
    scale = np.ones(S.shape[0])
    for _ in range(20):
        step = off @ scale + 1e-12 + 0.05 * scale * max(radius.max(), 1e-300)
        scale = np.maximum(step / step.max(), 1e-8)
        radius = np.asarray(off @ scale) / scale
        low, high = max(low, float((diagonal - radius).min())), min(high, float((diagonal + radius).max()))
    return low, high
