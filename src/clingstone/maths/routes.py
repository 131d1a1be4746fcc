"""Which way to the law of a ratio: by the structure of the form and the size of the problem.

| form | size | route |
| any | up to SMALL rows or cells | eigenvalues of MSM |
| paths, groups | any n | known eigenvectors of S |
| long paths | any n, values not too near the ends | Chebyshev moments |
| any | up to DENSE rows or cells | eigenvalues of MSM |
| sparse | up to SPARSE rows or cells | one factorization per node |
| the rest | any n | a three-point spectrum with the same four traces: approximate |
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy import linalg, sparse

from clingstone.maths.basis import Basis
from clingstone.maths.chains import Chains
from clingstone.maths.forms import Form
from clingstone.maths.lanczos import spectrum_ends
from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition
from clingstone.maths.spectra import Eigen, Factored, Modes, Polynomials, Spectrum, line
from clingstone.maths.traces import cell_coordinates, projected, residual_df, sweep_out

SMALL = 200  # always by eigenvalues
DENSE = 1500
SPARSE = 20_000
LINKS = 30  # stored entries per row up to which a factorization stays sparse
LONG = 2_000  # paths from which Chebyshev moments are cheaper than all eigenvectors
TERMS = 192  # most Chebyshev moments
PATHS = 200  # most paths handled one by one
WHOLE = 1e-12  # 1 − squared cosine at which a direction of Q counts as an eigenvector

WORDS = {
    "eigen": "exact, from eigenvalues",
    "modes": "exact, from the known spectrum of the form",
    "polynomials": "exact, from the known spectrum of the form",
    "factored": "exact, from sparse factorizations",
    "traces": "approximate, from the first four moments",
    "interpolated": "interpolated between exact values",
    "constant": "the statistic cannot vary under this design",
}


def name(form: Form, swept: Partition | None) -> str:
    """The route's name: "eigen", "modes", "factored" or "traces"."""
    if form.order <= SMALL:
        return "eigen"
    if form.chains is not None and (swept is None or _unions(form.chains, swept)):
        return "modes"
    if form.part is not None and form.diagonal_core is not None and swept is None:
        return "modes"
    if form.order + (swept.count if swept is not None and form.part is not None else 0) <= DENSE:
        return "eigen"
    separate = swept is None or (form.part is None and _separate(form, swept))
    if separate and form.order <= SPARSE and form.core.nnz <= LINKS * form.order:
        return "factored"
    return "traces"


@once
def spectrum(basis: Basis, form: Form, swept: Partition | None) -> Spectrum:
    """The spectrum of an exact route; kept with the basis. Raises ValueError for the route "traces"."""
    way = name(form, swept)
    if way == "eigen":
        return eigen(basis, form, swept)
    if way == "modes":
        if form.chains is None:
            return _cell_modes(form, basis.Q)
        Q = basis.Q if swept is None else sweep_out(basis, swept).Q
        return _chain_modes(form.chains, Q, 0 if swept is None else swept.count)
    if way == "factored":
        return factored(basis, form, swept)
    raise ValueError(f"no exact route for the form {form.key}")


# ---- eigenvalues --------------------------------------------------------------------------


def _extended(form: Form, V: Array) -> tuple[Array, int]:
    """Coordinates of an orthonormal block, and the dimensions left where S and the block are zero.

    For cells, the block falls partly outside the span of Z̃; a square root of that adds a few rows.
    """
    if form.part is None:
        return V, 0
    outside, room = _outside(form, V)
    outside = outside[:room]
    whole: Array = np.linalg.qr(np.vstack([V, outside]))[0]  # unit length again, to the last digit
    return whole, room - len(outside)


@once
def eigen(basis: Basis, form: Form, swept: Partition | None) -> Eigen:
    """All eigenvalues of MSM on range M, by one dense symmetric problem of the order of the core."""
    V = form.coordinates(basis.Q)
    if swept is not None:
        rest = form.coordinates(sweep_out(basis, swept).Q)
        V = np.hstack([cell_coordinates(form, swept).toarray(), rest])
    V, zeros = _extended(form, V)
    A = np.zeros((V.shape[0], V.shape[0]))
    A[: form.order, : form.order] = form.core.toarray()
    # M A M + κVV' moves the directions of V beyond the spectrum, where they are dropped.
    kappa = 2.0 * max(abs(form.low), abs(form.high), 1e-300)
    AV = A @ V
    core = V.T @ AV
    A -= V @ AV.T
    A -= (AV - V @ (core + kappa * np.eye(V.shape[1]))) @ V.T
    found = linalg.eigvalsh(0.5 * (A + A.T), check_finite=False, overwrite_a=True)
    values: Array = np.asarray(found, dtype=float)[: len(found) - V.shape[1]]
    if zeros:
        return Eigen(np.append(values, 0.0), np.append(np.ones(len(values)), float(zeros)))
    return Eigen(values, np.ones(len(values)))


# ---- known eigenvectors -------------------------------------------------------------------


def _compressed(rows: Array) -> Array:
    """At most p rows with the same Gram, for one block (k, p) or a stack of them (…, k, p)."""
    k, p = rows.shape[-2:]
    if k <= p:
        return rows
    return rows[..., :0, :] if p == 0 else np.asarray(np.linalg.qr(rows, mode="r"))


def _unions(chains: Chains, swept: Partition) -> bool:
    """True if the indicators of the swept cells lie in the null space of a path Laplacian.

    Each cell must be a union of whole paths; sweeping it then only removes that many zero eigenvalues.
    """
    if chains.kind != "differences":
        return False
    codes = chains.in_order(swept.codes)
    return bool(np.all(codes == np.repeat(codes[chains.starts], chains.lengths)))


def _chain_modes(chains: Chains, Q: Array, removed: int) -> Modes:
    p = Q.shape[1]
    values: list[Array] = []
    counts: list[Array] = []
    rows: list[Array] = []
    row_values: list[Array] = []
    zero_rows: list[Array] = []
    zero_count = -float(removed)
    for b, count, block in chains.transformed(Q):
        if chains.kind == "differences":
            zero_rows.append(block[0])
            zero_count += count
            b, block = b[1:], block[1:]
        block = _compressed(block) if len(b) else block
        values.append(b)
        counts.append(np.full(len(b), float(count)))
        rows.append(block.reshape(len(b) * block.shape[1], p))
        row_values.append(np.repeat(b, block.shape[1]))
    if chains.kind == "differences":
        kept = _compressed(np.vstack(zero_rows))
        values.append(np.zeros(1))
        counts.append(np.array([zero_count]))
        rows.append(kept)
        row_values.append(np.zeros(len(kept)))
    return _deflated(values, counts, rows, row_values)


def _cell_modes(form: Form, Q: Array) -> Modes:
    diagonal = form.diagonal_core
    assert diagonal is not None
    V = form.coordinates(Q)
    distinct, place, count = np.unique(diagonal, return_inverse=True, return_counts=True)
    order = np.argsort(place, kind="stable")
    blocks = [_compressed(b) for b in np.split(V[order], np.cumsum(count)[:-1])]
    outside, zeros = _outside(form, V)
    values = [distinct, np.zeros(1)]
    counts = [count.astype(float), np.array([float(zeros)])]
    return _deflated(
        values,
        counts,
        [*blocks, outside],
        [*(np.full(len(b), v) for b, v in zip(blocks, distinct, strict=True)), np.zeros(len(outside))],
    )


def _outside(form: Form, V: Array) -> tuple[Array, int]:
    """Rows of Q outside the span of the cells (a square root of I − V'V), and the dimension there."""
    value, vector = np.linalg.eigh(np.eye(V.shape[1]) - V.T @ V)
    keep = value > max(WHOLE, 4e-16 * form.n)  # sums of n rows carry that much rounding
    return np.sqrt(value[keep])[:, None] * vector[:, keep].T, form.n - form.order


def _deflated(
    values: Sequence[Array], counts: Sequence[Array], rows: Sequence[Array], row_values: Sequence[Array]
) -> Modes:
    """Modes, after directions of Q that are themselves eigenvectors at an end of the spectrum are removed.

    The constant is one for every Laplacian; without this a value near the end would leave no room for
    the contour, though no eigenvalue of MSM lies there.
    """
    b, c = np.concatenate(values), np.concatenate(counts)
    F, f = np.vstack(rows), np.concatenate(row_values)
    used = c > 0
    b, c = b[used], c[used]
    for _ in range(F.shape[1] + 1):
        changed = False
        for end in (b.min(), b.max()):
            inside = f == end
            _, size, right = np.linalg.svd(F[inside])
            whole = np.flatnonzero(size**2 > 1.0 - WHOLE)
            if len(whole) == 0:
                continue
            keep = np.delete(right, whole, axis=0).T  # the other directions of Q
            F = F @ keep
            c = np.where(b == end, c - len(whole), c)
            changed = True
        left = c > 0.5
        if not changed or not left.any():
            break
        rows_left = np.isin(f, b[left])
        b, c, F, f = b[left], c[left], F[rows_left], f[rows_left]
    return Modes(b, c, F, f)


# ---- long paths and sparse forms ----------------------------------------------------------


def polynomials(basis: Basis, form: Form, swept: Partition | None, t: float) -> Polynomials | None:
    """Chebyshev moments, as many as a value t needs; None where paths are short or t is too far out.

    On the saddle r = x̄, the value on [−1, 1]; the nodes that matter lie within 10/√K'' of it.
    """
    chains = form.chains
    if chains is None or swept is not None or chains.n < LONG or len(chains.lengths) > PATHS:
        return None
    low, high = chains.interval
    half = 0.5 * (high - low)
    x = float(np.clip((t - low) / half - 1.0, -0.999, 0.999))
    s = saddle(chains, t)
    alpha, beta = line(chains, np.array([s + 0j]), t)
    place = np.cos(np.pi * (np.arange(1024) + 0.5) / 1024)  # the limiting spectrum on [−1, 1]
    curve = 2.0 * chains.n * half**2 * np.mean(((place - x) / (alpha + beta * place).real) ** 2)
    reach = 1.0 / np.sqrt(curve)
    side = 1.0 if x > 0 else -1.0
    alpha, beta = line(chains, np.array([s + side * reach + 10j * reach]), t)
    r = float(np.abs(beta / (alpha + np.sqrt(alpha - beta) * np.sqrt(alpha + beta)))[0])
    r = max(r, abs(x))
    if r >= 0.99:
        return None
    need = int(np.ceil(np.log(1e-16 * (1.0 - r)) / np.log(max(r, 1e-3)))) + 1
    top = 16 * int(np.ceil(need / 16))
    if top > TERMS or chains.lengths.min() <= 2 * top:
        return None
    return Polynomials(chains, _moments(basis, form, top), form.n)


def saddle(chains: Chains, t: float) -> float:
    """The saddle point of K for a long path: r = x̄, so that s = v/(2·half·(1 − vr)), v = 2r/(1 + r²)."""
    low, high = chains.interval
    half = 0.5 * (high - low)
    r = float(np.clip((t - low) / half - 1.0, -1.0 + 1e-9, 1.0 - 1e-9))
    v = 2.0 * r / (1.0 + r**2)
    return v / (2.0 * half * (1.0 - v * r))


@once
def _moments(basis: Basis, form: Form, top: int) -> Array:
    assert form.chains is not None
    return form.chains.moments(basis.Q, top)


@once
def _separate(form: Form, cells: Partition) -> bool:
    """True if the form has no entry between rows of two different cells."""
    entries = form.core.tocoo()
    return bool(np.all(cells.codes[entries.row] == cells.codes[entries.col]))


def factored(basis: Basis, form: Form, swept: Partition | None = None) -> Factored:
    """The sparse form itself, with Q in its coordinates."""
    Q = basis.Q if swept is None else sweep_out(basis, swept).Q
    V, zeros = _extended(form, form.coordinates(Q))
    extra = V.shape[0] - form.order
    A = form.core if extra == 0 else sparse.block_diag([form.core, sparse.csr_array((extra, extra))])
    low, high = sharp_bounds(form)
    return Factored(sparse.csr_array(A), V, zeros, min(low, 0.0), max(high, 0.0), swept)


@once
def sharp_bounds(form: Form) -> tuple[float, float]:
    """Bounds of the spectrum of S from Lanczos, opened by 0.1 % of its length, inside the form's own."""
    low, high = spectrum_ends(lambda v: form.core @ v, form.order, 60, 1e-3)
    room = 1e-3 * (high - low)
    return max(form.low, low - room), min(form.high, high + room)


def extremes(basis: Basis, form: Form, swept: Partition | None) -> tuple[float, float]:
    """The extreme eigenvalues of MSM on range M by Lanczos, each moved outwards by its residual.

    Directions that M removes are moved to the middle of the spectrum, so that they are never an end.
    """
    rest = None if swept is None else sweep_out(basis, swept)
    Q = basis.Q if rest is None else rest.Q
    middle = projected(basis, form, swept, 2)[0] / residual_df(basis, swept)

    def left(v: Array) -> Array:
        v = v - Q @ (Q.T @ v)
        return v if rest is None else np.asarray(rest.sweep(v))

    def apply(v: Array) -> Array:
        kept = left(v)
        return left(form.apply(kept) - middle * kept)

    steps = 300 if form.n <= SPARSE else 100
    low, high = spectrum_ends(apply, form.n, steps)
    return max(form.low, middle + low), min(form.high, middle + high)
