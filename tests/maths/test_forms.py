"""Forms: their entries by hand, their action, spectrum bounds and traces against dense arrays."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import sparse
from tests.maths import twins

from clingstone.maths import forms
from clingstone.maths.partition import Partition

RNG = np.random.default_rng(3)


def some_forms() -> list[forms.Form]:
    n = 24
    codes = np.repeat([0, 1, 2, 3, 4], [1, 2, 5, 7, 9])
    part = Partition.of("g", RNG.permutation(codes))
    root = np.sqrt(RNG.uniform(0.5, 2.0, n))
    W = twins.nearest(n, 3)[1]
    small = twins.nearest(5, 2)[1]
    return [
        forms.differences(*twins.step(n), n, "one path"),
        forms.differences(*twins.within(codes), n, "five paths"),
        forms.lagged(*twins.step(n), n, "one lag"),
        forms.lagged(*twins.step(n, 5), n, "five steps"),
        forms.lagged(np.array([0, 0, 3]), np.array([1, 2, 9]), n, "no path"),
        forms.differences(np.array([0, 0, 3]), np.array([1, 2, 9]), n, "no path differences"),
        forms.cells(part),
        forms.cells(part, root),
        forms.graph(W, "graph"),
        forms.cells_graph(part, small, "cells graph"),
        forms.cells_graph(part, small, "cells graph weighted", root),
    ]


FORMS = some_forms()
IDS = [f.key for f in FORMS]


def test_entries_by_hand():
    D = forms.differences(np.array([0, 1]), np.array([1, 2]), 4, "d").S.toarray()
    assert np.array_equal(D, [[1, -1, 0, 0], [-1, 2, -1, 0], [0, -1, 1, 0], [0, 0, 0, 0]])
    L = forms.lagged(np.array([0, 1]), np.array([2, 3]), 4, "l").S.toarray()
    assert np.array_equal(L, 0.5 * np.array([[0, 0, 1, 0], [0, 0, 0, 1], [1, 0, 0, 0], [0, 1, 0, 0]]))
    part = Partition.of("g", ["a", "b", "a"])
    assert np.array_equal(forms.cells(part).S.toarray(), [[1, 0, 1], [0, 1, 0], [1, 0, 1]])
    rooted = forms.cells(part, np.array([1.0, 2.0, 3.0])).S.toarray()
    assert np.array_equal(rooted, [[1, 0, 3], [0, 4, 0], [3, 0, 9]])
    W = sparse.csr_array(np.array([[5.0, 1.0], [0.0, 5.0]]))
    # Rows of the same cell are no pair, whatever the diagonal of W says.
    assert np.array_equal(
        forms.cells_graph(part, W, "w").S.toarray(), [[0, 0.5, 0], [0.5, 0, 0.5], [0, 0.5, 0]]
    )
    assert np.array_equal(forms.graph(W, "g").S.toarray(), [[5, 0.5], [0.5, 5]])


@pytest.mark.parametrize("form", FORMS, ids=IDS)
def test_action_bounds_and_traces_match_the_dense_form(form):
    S = form.S.toarray()
    assert np.array_equal(S, S.T)
    block = RNG.standard_normal((form.n, 3))
    assert np.allclose(form.apply(block), S @ block, atol=1e-12)
    assert np.allclose(form.apply(block[:, 0]), S @ block[:, 0], atol=1e-12)
    values = np.linalg.eigvalsh(S)
    assert form.low <= values[0] + 1e-10
    assert form.high >= values[-1] - 1e-10
    for r in range(1, 5):
        assert form.trace(r) == pytest.approx(np.sum(values**r), abs=1e-9, rel=1e-12)


@pytest.mark.parametrize("form", [f for f in FORMS if f.part is not None], ids=lambda f: f.key)
def test_the_core_and_coordinates_rebuild_the_form(form):
    Z = form.coordinates(np.eye(form.n)).T
    assert np.allclose(Z.T @ Z, np.eye(form.order), atol=1e-12)
    assert np.allclose(Z @ form.core.toarray() @ Z.T, form.S.toarray(), atol=1e-12)


def test_sums_over_pairs_are_what_the_forms_give():
    codes = np.repeat([0, 1, 2], [4, 1, 6])
    earlier, later = twins.within(codes)
    e = RNG.standard_normal(len(codes))
    assert e @ forms.differences(earlier, later, 11, "d").apply(e) == pytest.approx(
        sum((e[j] - e[i]) ** 2 for i, j in zip(earlier, later, strict=True))
    )
    assert e @ forms.lagged(earlier, later, 11, "l").apply(e) == pytest.approx(
        sum(e[i] * e[j] for i, j in zip(earlier, later, strict=True))
    )


@pytest.mark.parametrize("kind", ["differences", "lagged"])
@pytest.mark.parametrize("lag", [1, 2, 3])
def test_path_spectra_are_exact(kind, lag):
    codes = np.repeat([0, 1, 2], [1, 8, 5])
    pairs = [(i, j) for i in range(14) for j in range(i, 14) if j - i == lag and codes[i] == codes[j]]
    earlier, later = np.array(pairs).T
    form = getattr(forms, kind)(earlier, later, 14, kind)
    assert form.chains is not None
    expected = np.sort(np.concatenate([form.chains.eigenvalues(int(k)) for k in form.chains.lengths]))
    assert np.allclose(expected, np.linalg.eigvalsh(form.S.toarray()), atol=1e-12)
    # Bounds of a path form are attained, not merely safe.
    assert form.low == pytest.approx(expected[0], abs=1e-12)
    assert form.high == pytest.approx(expected[-1], abs=1e-12)


@pytest.mark.parametrize("kind", ["differences", "lagged"])
def test_transform_and_moments_are_those_of_the_form(kind):
    n = 60
    codes = np.repeat([0, 1], [25, 35])
    form = getattr(forms, kind)(*twins.within(codes), n, kind)
    Q = twins.trend_design(n, 4).Q
    # f(S) through the transform, for a function that is no polynomial
    S = form.S.toarray()
    value, vector = np.linalg.eigh(S)
    expected = (Q.T @ vector) @ np.diag(np.exp(0.7 * value)) @ (vector.T @ Q)
    total = np.zeros((4, 4))
    for b, _, block in form.chains.transformed(Q):
        total += np.einsum("lcp,l,lcq->pq", block, np.exp(0.7 * b), block)
    assert np.allclose(total, expected, atol=1e-12)
    # Chebyshev moments by the three-term recurrence on the dense matrix
    low, high = form.chains.interval
    x = (2.0 * S - (low + high) * np.eye(n)) / (high - low)
    before, now = Q, x @ Q
    moments = form.chains.moments(Q, 12)
    assert np.allclose(moments[0], Q.T @ Q, atol=1e-13)
    for j in range(1, 13):
        assert np.allclose(moments[j], Q.T @ now, atol=1e-12)
        before, now = now, 2.0 * x @ now - before


@pytest.mark.parametrize("kind", ["differences", "lagged"])
def test_path_log_determinant_in_closed_form(kind):
    codes = np.repeat([0, 1, 2, 3], [1, 2, 2, 9])
    form = getattr(forms, kind)(*twins.within(codes), 14, kind)
    low, high = form.chains.interval
    middle, half = 0.5 * (low + high), 0.5 * (high - low)
    values = np.linalg.eigvalsh(form.S.toarray())
    z = np.array([0.02 + 0.0j, 0.03 + 0.4j, -0.05 + 3.0j, 0.01 - 20.0j])
    for t in (middle, middle + 0.3 * half):
        alpha, beta = 1.0 - 2.0 * z * (middle - t), -2.0 * z * half
        expected = np.log(1.0 - 2.0 * z[:, None] * (values - t)).sum(axis=1)
        assert np.allclose(form.chains.log_determinant(alpha, beta), expected, atol=1e-11)


def test_pairs_that_branch_are_no_paths():
    assert forms.lagged(np.array([0, 0]), np.array([1, 2]), 3, "branch").chains is None
    assert forms.lagged(np.array([0, 1]), np.array([2, 2]), 3, "join").chains is None
    assert forms.lagged(np.array([1]), np.array([0]), 3, "backwards").chains is None
    lone = forms.differences(np.array([], dtype=int), np.array([], dtype=int), 3, "none")
    assert lone.chains is not None
    assert lone.chains.lengths.tolist() == [1, 1, 1]
    assert (lone.low, lone.high) == (0.0, 0.0)


def test_gershgorin_is_sharp_for_a_graph_of_near_equal_rows():
    W = twins.nearest(400, 6)[1]
    form = forms.graph(W, "w")
    top = np.linalg.eigvalsh(form.S.toarray())[-1]
    assert top <= form.high < 1.02 * top
    # A star: plain row sums give 4, the largest eigenvalue is 2.
    star = sparse.csr_array((np.ones(8), ([0, 0, 0, 0, 1, 2, 3, 4], [1, 2, 3, 4, 0, 0, 0, 0])), shape=(5, 5))
    low, high = forms.gershgorin(star)
    assert 2.0 <= high < 2.6
    assert -2.6 < low <= -2.0


@given(st.integers(2, 9), st.integers(0, 10_000))
def test_gershgorin_never_lies_inside_the_spectrum(n, seed):
    rng = np.random.default_rng(seed)
    A = rng.standard_normal((n, n)) * (rng.uniform(size=(n, n)) < 0.5)
    S = 0.5 * (A + A.T)
    low, high = forms.gershgorin(sparse.csr_array(S))
    values = np.linalg.eigvalsh(S)
    assert low <= values[0] + 1e-9
    assert high >= values[-1] - 1e-9


def test_weights_that_are_not_finite_are_refused():
    with pytest.raises(ValueError, match="not finite"):
        forms.graph(sparse.csr_array(np.array([[0.0, np.inf], [1.0, 0.0]])), "bad")


def test_cells_of_many_rows_are_never_written_out():
    part = Partition.of("g", np.zeros(30_000, dtype=int))
    form = forms.cells(part)
    e = np.ones(30_000)
    assert e @ form.apply(e) == pytest.approx(9e8)
    assert form.trace(4) == pytest.approx(30_000.0**4)
    with pytest.raises(ValueError, match="use its cells"):
        _ = form.S
