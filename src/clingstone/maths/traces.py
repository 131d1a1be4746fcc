"""Traces of projected forms: tr (MSM)ʳ for r = 1 … 4 and tr MS_aMS_b, without an n × n array.

With B_r = Q'SʳQ (Tiefelsdorf 2000; Cliff and Ord 1981 for r ≤ 2):

    τ₁ = tr S − tr B₁                    τ₂ = tr S² − 2 tr B₂ + tr B₁²
    τ₃ = tr S³ − 3 tr B₃ + 3 tr B₂B₁ − tr B₁³
    τ₄ = tr S⁴ − 4 tr B₄ + 4 tr B₃B₁ + 2 tr B₂² − 4 tr B₂B₁² + tr B₁⁴

Where cell means are swept out, the same identities are used twice: first with the cell indicators
(sparse), then with Q on what is left.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from scipy import sparse

from clingstone.maths.basis import Basis
from clingstone.maths.forms import Form
from clingstone.maths.once import Array, frozen, once
from clingstone.maths.partition import Partition

# A column of an orthonormal block that keeps less than this of its length is spanned by the cells.
SPANNED = 1e-9
KEPT = 100_000_000


def combine(plain: Sequence[float], B: Sequence[Array]) -> list[float]:
    """τ₁ … τ_r from tr Sʳ and B_r = Q'SʳQ, r = 2 or 4."""
    B1, B2 = B[0], B[1]
    t = [plain[0] - np.trace(B1), plain[1] - 2 * np.trace(B2) + np.sum(B1 * B1)]
    if len(B) > 2:
        B3, B4 = B[2], B[3]
        square = B1 @ B1
        t.append(plain[2] - 3 * np.trace(B3) + 3 * np.sum(B2 * B1) - np.sum(square * B1))
        t.append(
            plain[3]
            - 4 * np.trace(B4)
            + 4 * np.sum(B3 * B1)
            + 2 * np.sum(B2 * B2)
            - 4 * np.sum(B2 * square)
            + np.sum(square * square)
        )
    return [float(v) for v in t]


@dataclass(frozen=True, eq=False)
class Swept:
    """What is left of a basis once cell means are taken out, and the cells' unit vectors.

    Q : (n, p₁) orthonormal, orthogonal to the cells; p₁ < p where the cells span columns of the basis.
    part : the cells. rank : p₁ + G.
    """

    Q: Array
    part: Partition

    @property
    def rank(self) -> int:
        return int(self.Q.shape[1]) + self.part.count

    def sweep(self, block: Array) -> Array:
        return np.asarray(block - self.part.means(block)[self.part.codes])


@once
def sweep_out(basis: Basis, part: Partition) -> Swept:
    """The basis with cell means taken out; kept with the basis."""
    Q = basis.Q - part.means(basis.Q)[part.codes]
    if basis.p == 0 or np.abs(Q - basis.Q).max() < 1e-13:
        return Swept(basis.Q, part)
    U, size, _ = np.linalg.svd(Q, full_matrices=False)
    left = U[:, size > SPANNED]
    left = left - part.means(left)[part.codes]
    return Swept(frozen(np.linalg.qr(left)[0]), part)


def _symmetric(X: Array) -> Array:
    return np.asarray(0.5 * (X + X.T))


def _powers(apply: Callable[[Array], Array], Q: Array, depth: int) -> list[Array]:
    """B_r = Q'SʳQ for r = 1 … depth (2 or 4)."""
    one = apply(Q)
    B = [_symmetric(Q.T @ one), one.T @ one]
    if depth > 2:
        two = apply(one)
        B += [_symmetric(one.T @ two), two.T @ two]
    return [np.asarray(b) for b in B]


@once
def projected(basis: Basis, form: Form, swept: Partition | None, depth: int) -> tuple[float, ...]:
    """τ₁ … τ_depth of a form on what the basis (and the cells) leave over; depth 2 or 4.

    Cost O(nnz·p + n p²), and for depth 4 the entries of S². Kept with the basis.
    """
    plain = [form.trace(r) for r in range(1, depth + 1)]
    if swept is None:
        return tuple(combine(plain, _powers(form.apply, basis.Q, depth)))
    rest = sweep_out(basis, swept)
    A, C = form.core, cell_coordinates(form, swept)
    one = sparse.csr_array(A @ C)
    blocks = [sparse.csr_array(C.T @ one), sparse.csr_array(one.T @ one)]
    if depth > 2:
        two = sparse.csr_array(A @ one)
        blocks += [sparse.csr_array(one.T @ two), sparse.csr_array(two.T @ two)]
    inner = _combine_sparse(plain, blocks)
    return tuple(combine(inner, _powers(lambda X: rest.sweep(form.apply(X)), rest.Q, depth)))


def _combine_sparse(plain: Sequence[float], B: Sequence[sparse.csr_array]) -> list[float]:
    """The same identities for sparse B_r."""

    def inner(X: sparse.csr_array, Y: sparse.csr_array) -> float:
        return float(X.multiply(Y).sum())

    B1, B2 = B[0], B[1]
    t = [plain[0] - float(B1.trace()), plain[1] - 2 * float(B2.trace()) + inner(B1, B1)]
    if len(B) > 2:
        B3, B4 = B[2], B[3]
        square = sparse.csr_array(B1 @ B1)
        t.append(plain[2] - 3 * float(B3.trace()) + 3 * inner(B2, B1) - inner(square, B1))
        t.append(
            plain[3]
            - 4 * float(B4.trace())
            + 4 * inner(B3, B1)
            + 2 * inner(B2, B2)
            - 4 * inner(B2, square)
            + inner(square, square)
        )
    return t


def cell_coordinates(form: Form, part: Partition) -> sparse.csr_array:
    """Z̃'C, the unit vectors of some cells in the coordinates of a form, (order, G) sparse."""
    size = np.sqrt(part.sizes.astype(float))
    C = sparse.csr_array(part.indicator.T / size)
    if form.part is None:
        return C
    Z = form.part.indicator if form.root is None else form.part.indicator @ sparse.diags_array(form.root)
    return sparse.csr_array(sparse.diags_array(1.0 / form.unit) @ Z @ C)


def overlap(a: Form, b: Form) -> float:
    """tr S_aS_b."""
    if a.part is None and b.part is None:
        return float(a.matrix.multiply(b.matrix).sum())
    if a.part is None:
        return overlap(b, a)
    Z = a.part.indicator if a.root is None else a.part.indicator @ sparse.diags_array(a.root)
    if b.part is None:
        return float(a.matrix.multiply(Z @ b.matrix @ Z.T).sum())
    other = b.part.indicator if b.root is None else b.part.indicator @ sparse.diags_array(b.root)
    N = sparse.csr_array(Z @ other.T)
    return float(a.matrix.multiply(N @ b.matrix @ N.T).sum())


def cross_traces(
    forms: Sequence[Form], basis: Basis, swept: Partition | None = None, keep: int = KEPT
) -> Array:
    """(K, K) τ_ab = tr(MS_aMS_b), symmetric; the diagonal is τ₂ of each form.

    The products S_kQ are held together up to ``keep`` numbers, else made again for each pair.
    """
    rest = None if swept is None else sweep_out(basis, swept)
    Q = basis.Q if rest is None else rest.Q

    def applied(form: Form) -> Array:
        block = form.apply(Q)
        return block if rest is None else rest.sweep(block)

    K = len(forms)
    together = K * Q.size <= keep
    held = [applied(f) for f in forms] if together else []
    small = [_symmetric(Q.T @ (held[k] if together else applied(forms[k]))) for k in range(K)]
    out = np.empty((K, K))
    for a in range(K):
        left = held[a] if together else applied(forms[a])
        for b in range(a, K):
            right = held[b] if together else applied(forms[b])
            plain = overlap(forms[a], forms[b]) - (
                0.0 if swept is None else _cells_lost(forms[a], forms[b], swept)
            )
            out[a, b] = out[b, a] = plain - 2 * np.sum(left * right) + np.sum(small[a] * small[b])
    return out


def _cells_lost(a: Form, b: Form, part: Partition) -> float:
    """tr S_aS_b − tr M_ZS_aM_ZS_b for the cells' projection alone."""
    size = np.sqrt(part.sizes.astype(float))
    C = sparse.csc_array(part.indicator.T / size)
    left, right = _applied_sparse(a, C), _applied_sparse(b, C)
    inner = (C.T @ left).multiply(C.T @ right).sum()
    return float(2 * left.multiply(right).sum() - inner)


def _applied_sparse(form: Form, C: sparse.csc_array) -> sparse.csr_array:
    if form.part is None:
        return sparse.csr_array(form.matrix @ C)
    Z = form.part.indicator if form.root is None else form.part.indicator @ sparse.diags_array(form.root)
    return sparse.csr_array(Z.T @ (form.matrix @ (Z @ C)))


def means(forms: Sequence[Form], basis: Basis, swept: Partition | None = None) -> Array:
    """(K,) expected values of T_k = e'S_ke / e'e under spherical errors: τ₁/m."""
    m = residual_df(basis, swept)
    return np.array([projected(basis, f, swept, 2)[0] / m for f in forms])


def covariances(forms: Sequence[Form], basis: Basis, swept: Partition | None = None) -> Array:
    """(K, K) covariances of the ratios T_k: 2(τ_ab − τ_aτ_b/m)/(m(m + 2))."""
    m = residual_df(basis, swept)
    expected = means(forms, basis, swept)
    out = 2.0 * (cross_traces(forms, basis, swept) - m * np.outer(expected, expected)) / (m * (m + 2.0))
    return np.asarray(out)


def covariance(a: Form, b: Form, basis: Basis, swept: Partition | None = None) -> float:
    """Covariance of two ratios."""
    return float(covariances([a, b], basis, swept)[0, 1])


def residual_df(basis: Basis, swept: Partition | None = None) -> int:
    """m: rows less the rank of the basis and of the swept cells together."""
    return basis.n - (basis.p if swept is None else sweep_out(basis, swept).rank)
