"""Cells of rows: sums, relations, nesting, against loops."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from clingstone.maths.partition import Partition

LABELS = ["b", "a", "b", "c", "a", "b"]


def test_cells_by_hand():
    part = Partition.of("g", LABELS)
    assert part.labels == ("a", "b", "c")
    assert part.codes.tolist() == [1, 0, 1, 2, 0, 1]
    assert part.sizes.tolist() == [2, 3, 1]
    assert part.first.tolist() == [1, 0, 3]
    assert (part.n, part.count) == (6, 3)
    y = np.array([1.0, 10.0, 2.0, 100.0, 20.0, 3.0])
    assert part.sums(y).tolist() == [30.0, 6.0, 100.0]
    assert part.means(np.column_stack([y, -y])).tolist() == [[15, -15], [2, -2], [100, -100]]


def test_relations_by_hand():
    inner = Partition.of("ward", [0, 0, 1, 1, 2, 3])
    outer = Partition.of("clinic", [0, 0, 0, 0, 1, 1])
    assert outer.relation(inner) == "nests"
    assert inner.relation(outer) == "nested"
    assert inner.relation(Partition.of("w", list("aabbcd"))) == "same"
    assert inner.relation(Partition.of("t", [0, 1, 0, 1, 0, 1])) == "crossed"
    assert inner.parent(outer).tolist() == [0, 0, 1, 1]


def test_recycled_labels_become_pairs():
    clinic = Partition.of("clinic", ["x", "x", "y", "y"])
    ward = Partition.of("ward", ["1", "2", "1", "1"])
    pair = ward.within(clinic)
    assert pair.key == "clinic/ward"
    assert pair.labels == ("x/1", "x/2", "y/1")
    assert pair.codes.tolist() == [0, 1, 2, 2]
    assert clinic.relation(pair) == "nests"


def test_some_rows():
    part = Partition.of("g", LABELS).take(np.array([0, 3, 5]))
    assert part.labels == ("b", "c")
    assert part.codes.tolist() == [0, 1, 0]


@given(st.lists(st.integers(0, 6), min_size=1, max_size=40), st.integers(0, 1000))
def test_sums_do_not_depend_on_row_order_and_match_a_loop(values, seed):
    rng = np.random.default_rng(seed)
    y = rng.standard_normal((len(values), 2))
    part = Partition.of("g", values)
    loop = np.array([y[np.asarray(values) == v].sum(axis=0) for v in sorted(set(values))])
    assert np.allclose(part.sums(y), loop)
    assert np.allclose(part.sums(y[:, 0]), loop[:, 0])
    assert np.allclose(part.indicator.toarray() @ y, loop)
    shuffled = rng.permutation(len(values))
    assert np.allclose(part.take(shuffled).sums(y[shuffled]), loop)
    assert part.sizes.sum() == len(values)
    assert np.array_equal(part.codes[part.first], np.arange(part.count))


def test_codes_are_read_only():
    part = Partition.of("g", LABELS)
    with pytest.raises(ValueError, match="read-only"):
        part.codes[0] = 2


def test_rows_that_stand_cell_after_cell_add_up_as_scattered_ones_do():
    rng = np.random.default_rng(1)
    codes = np.sort(np.append(np.arange(30), rng.integers(0, 30, 500))).astype(np.int32)
    values, order = rng.standard_normal(530), rng.permutation(530)
    labels = tuple(str(i) for i in range(30))
    together, scattered = Partition("g", codes, labels), Partition("g", codes[order], labels)
    assert together.starts is not None
    assert scattered.starts is None
    assert np.allclose(together.sums(values), scattered.sums(values[order]), rtol=1e-13, atol=1e-13)
    assert together.sums(values > 0).tolist() == np.bincount(codes, values > 0).tolist()
    assert scattered.take(np.argsort(order)).codes.tolist() == codes.tolist()
