"""ln det of I − 2z(MSM − tM) on what a design leaves over, by four routes; never n × n for large n.

The determinant identity behind them: with D(z) = I − 2z(S − tI),

    det over range M  =  det D(z) · det( Q'D(z)⁻¹Q ).

Each class gives ``log_det(z, t)`` for z (J,) in the upper half plane, or real and short of ``edge``, on
the branch that is real there: only logarithms of numbers off the negative axis are added.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from scipy import sparse

from clingstone.maths.chains import Chains
from clingstone.maths.contour import Complex, log_pivots
from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition

NUMBERS_AT_ONCE = 2_000_000


class Spectrum(Protocol):
    """m : number of eigenvalues of MSM on range M. low, high : bounds of the spectrum of D's form."""

    @property
    def m(self) -> float: ...
    @property
    def low(self) -> float: ...
    @property
    def high(self) -> float: ...
    def log_det(self, z: Complex, t: float) -> Complex: ...


def edge(spectrum: Spectrum, t: float, upper: bool) -> float:
    """How far c may go on the side of a tail: ½/(λ − t), or ±∞ where no eigenvalue lies beyond t."""
    gap = (spectrum.high if upper else spectrum.low) - t
    return 0.5 / gap if (gap > 0) == upper and gap != 0 else (np.inf if upper else -np.inf)


@dataclass(frozen=True, eq=False)
class Eigen:
    """Known eigenvalues of MSM. values (U,), counts (U,) multiplicities (also fractional)."""

    values: Array
    counts: Array

    @property
    def m(self) -> float:
        return float(self.counts.sum())

    @property
    def low(self) -> float:
        return float(self.values.min())

    @property
    def high(self) -> float:
        return float(self.values.max())

    def log_det(self, z: Complex, t: float) -> Complex:
        return _sum_of_logs(z, self.values - t, self.counts)


def _sum_of_logs(z: Complex, b: Array, counts: Array) -> Complex:
    """Σ c_k ln(1 − 2z b_k), (J,), in strips of z."""
    out = np.empty(len(z), dtype=complex)
    strip = max(1, NUMBERS_AT_ONCE // max(len(b), 1))
    for j in range(0, len(z), strip):
        part = z[j : j + strip, None]
        out[j : j + strip] = np.log(1.0 - 2.0 * part * b) @ counts
    return out


@dataclass(frozen=True, eq=False)
class Modes:
    """S with known eigenvectors. values (U,), counts (U,): the spectrum of S; rows (L, p) of Q in the
    eigenvectors (compressed to at most p rows where an eigenvalue repeats), each with its eigenvalue."""

    values: Array
    counts: Array
    rows: Array
    row_values: Array

    @property
    def m(self) -> float:
        return float(self.counts.sum() - self.rows.shape[1])

    @property
    def low(self) -> float:
        return float(self.values.min())

    @property
    def high(self) -> float:
        return float(self.values.max())

    @property
    @once
    def products(self) -> Array | None:
        """(L, p²) outer products of the rows, where they are few enough to keep."""
        L, p = self.rows.shape
        if L * p * p > NUMBERS_AT_ONCE:
            return None
        return np.asarray((self.rows[:, :, None] * self.rows[:, None, :]).reshape(L, p * p))

    def log_det(self, z: Complex, t: float) -> Complex:
        whole = _sum_of_logs(z, self.values - t, self.counts)
        p = self.rows.shape[1]
        if p == 0:
            return whole
        S = np.empty((len(z), p, p), dtype=complex)
        b = self.row_values - t
        if self.products is not None:
            strip = max(1, NUMBERS_AT_ONCE // max(len(b), 1))
            for j in range(0, len(z), strip):
                weight = 1.0 / (1.0 - 2.0 * z[j : j + strip, None] * b)
                flat = weight.real @ self.products + 1j * (weight.imag @ self.products)
                S[j : j + strip] = flat.reshape(-1, p, p)
        else:
            for j, node in enumerate(z):
                weight = 1.0 / (1.0 - 2.0 * node * b)
                real = self.rows.T @ (weight.real[:, None] * self.rows)
                S[j] = real + 1j * (self.rows.T @ (weight.imag[:, None] * self.rows))
        return np.asarray(whole + log_pivots(S))

    def below(self, t: float) -> int:
        """Number of eigenvalues of MSM on range M below t (Haynsworth: inertia of D and of Q'D⁻¹Q)."""
        inside = float(self.counts[self.values < t].sum())
        p = self.rows.shape[1]
        if p == 0:
            return round(inside)
        gap = self.row_values - t
        # At an eigenvalue of S itself the count is taken just above it.
        gap = np.where(gap == 0.0, -1e-12 * max(abs(self.low), abs(self.high)), gap)
        S = self.rows.T @ (self.rows / gap[:, None])
        return round(inside - int(np.sum(np.linalg.eigvalsh(S) < 0)))


@dataclass(frozen=True, eq=False)
class Polynomials:
    """Long paths: Q'D(z)⁻¹Q from Chebyshev moments C_j (J + 1, p, p), ln det D in closed form.

    With D = αI + βx, x on [−1, 1]: Q'D⁻¹Q = (α²−β²)^(−½) Σ' 2rʲC_j, r = −β/(α + √(α²−β²)), the term
    j = 0 halved. The sum may stop where |r|ʲ is below rounding.
    """

    chains: Chains
    moments: Array
    n: int

    @property
    def m(self) -> float:
        return float(self.n - self.moments.shape[1])

    @property
    def low(self) -> float:
        return self.chains.interval[0]

    @property
    def high(self) -> float:
        return self.chains.interval[1]

    def log_det(self, z: Complex, t: float) -> Complex:
        alpha, beta = line(self.chains, z, t)
        whole = self.chains.log_determinant(alpha, beta)
        count, p = self.moments.shape[0], self.moments.shape[1]
        if p == 0:
            return whole
        root = np.sqrt(alpha - beta) * np.sqrt(alpha + beta)
        r = -beta / (alpha + root)
        # A running product, not exp(j ln r): it keeps a tiny imaginary part of r (complex step).
        power = np.cumprod(np.broadcast_to(r[:, None], (len(z), count)), axis=1)
        power = np.concatenate([np.ones((len(z), 1)), 2.0 * power[:, :-1]], axis=1)
        flat = self.moments.reshape(count, p * p)
        S = (power.real @ flat + 1j * (power.imag @ flat)) / root[:, None]
        return np.asarray(whole + log_pivots(S.reshape(-1, p, p)))


def line(chains: Chains, z: Complex, t: float) -> tuple[Complex, Complex]:
    """α and β of D(z) = αI + βx for a form moved to [−1, 1]."""
    low, high = chains.interval
    middle, half = 0.5 * (low + high), 0.5 * (high - low)
    return np.asarray(1.0 - 2.0 * z * (middle - t)), np.asarray(-2.0 * z * half)


@dataclass(frozen=True, eq=False)
class Factored:
    """General sparse S: one sparse factorization of D(z) per node.

    A (N, N) sparse symmetric, V (N, p) orthonormal: Q in the coordinates of A. zeros : dimensions on
    which S is zero and Q too. cells : cells whose means are swept out as well, with no entry of A
    between two of them and V orthogonal to them; then D⁻¹Z̃ is D⁻¹1 cut into cells, Z̃'D⁻¹Z̃ is
    diagonal, and a Schur complement of order p is left.

    Where Re D is positive definite, elimination without pivoting is stable; no pivot meets the negative
    real axis (see ``log_pivots``).
    """

    A: sparse.csr_array
    V: Array
    zeros: int
    low: float
    high: float
    cells: Partition | None = None

    @property
    def m(self) -> float:
        swept = 0 if self.cells is None else self.cells.count
        return float(self.V.shape[0] - self.V.shape[1] + self.zeros - swept)

    @property
    @once
    def ordering(self) -> tuple[sparse.csc_array, Array, sparse.csr_array | None]:
        """A, V and the cells' unit vectors (G, N) with rows in an order that keeps factors sparse."""
        from scipy.sparse.linalg import splu

        shift = 1.0 + float(abs(self.A).sum(axis=1).max())  # makes the matrix diagonally dominant
        shifted = sparse.csc_array(self.A + shift * sparse.eye_array(self.A.shape[0]))
        found = splu(shifted, "MMD_AT_PLUS_A", 0.0, options={"SymmetricMode": True})
        order = np.argsort(found.perm_c)
        unit = None
        if self.cells is not None:
            scale = sparse.diags_array(1.0 / np.sqrt(self.cells.sizes))
            unit = sparse.csr_array(scale @ self.cells.indicator[:, order])
        return sparse.csc_array(self.A[order][:, order]), self.V[order], unit

    def log_det(self, z: Complex, t: float) -> Complex:
        from scipy.sparse.linalg import splu

        A, V, unit = self.ordering
        eye = sparse.csc_array(sparse.eye_array(A.shape[0]))
        p = V.shape[1]
        right = V.astype(complex)
        if unit is not None:
            right = np.column_stack([right, unit.T @ np.ones(unit.shape[0])])
        out = np.empty(len(z), dtype=complex)
        S = np.empty((len(z), p, p), dtype=complex)
        for j, node in enumerate(z):
            D = sparse.csc_array((1.0 + 2.0 * node * t) * eye - (2.0 * node) * A)
            factor = splu(D, "NATURAL", 0.0, options={"SymmetricMode": True})
            out[j] = np.log(factor.U.diagonal()).sum() + self.zeros * np.log(1.0 + 2.0 * node * t)
            solved = factor.solve(right) if right.shape[1] else right
            S[j] = V.T @ solved[:, :p]
            if unit is not None:
                on_cells = unit @ solved  # Z̃'D⁻¹Q, and the diagonal of Z̃'D⁻¹Z̃
                out[j] += np.log(on_cells[:, p]).sum()
                S[j] -= on_cells[:, :p].T @ (on_cells[:, :p] / on_cells[:, p:])
        return np.asarray(out + log_pivots(S))
