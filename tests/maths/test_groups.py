"""Intercepts by cell sums."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.maths import groups, reml
from clingstone.maths.basis import Basis
from clingstone.maths.groups import Classes, Load
from clingstone.maths.partition import Partition


def case(seed: int = 0) -> tuple[Basis, Partition, np.ndarray, Load]:
    rng = np.random.default_rng(seed)
    n = 40
    part = Partition.of("g", rng.integers(0, 7, n))
    basis = Basis.of(np.column_stack([np.ones(n), rng.standard_normal(n)]))
    e = basis.project(rng.standard_normal((n, 3)))
    return basis, part, e, Load(part.sizes.astype(float), part.sums(basis.Q), part.sums(e))


def test_two_groups_of_two_by_hand() -> None:
    # y = (1, 2, 4, 5), a constant: Q = ½, e = (−2, −1, 1, 2), T_e = (−3, 3), T_Q = (1, 1), λ = 1:
    # QQ = 1 − Σ 1/3 = 1/3, QE = 0, EE = 10 − (9 + 9)/3 = 4, ln|V| = 2 ln 3.
    part = Partition.of("g", np.array([0, 0, 1, 1]))
    e = np.array([[-2.0], [-1.0], [1.0], [2.0]])
    load = Load(np.array([2.0, 2.0]), np.ones((2, 1)), part.sums(e))
    gram = groups.lower(reml.independent(1, np.array([10.0])), load, 1.0)
    assert gram.QQ[0, 0] == pytest.approx(1 / 3)
    assert gram.QE[0, 0] == pytest.approx(0.0)
    assert gram.EE[0] == pytest.approx(4.0)
    assert gram.logdet == pytest.approx(2 * np.log(3))


@pytest.mark.parametrize("ratio", [0.0, 0.3, 1e6])
def test_classes_equal_cells(ratio: float) -> None:
    _, _, e, load = case()
    base = reml.independent(2, np.einsum("ij,ij->j", e, e))
    classes = Classes.of([load])
    assert classes is not None
    one, other = groups.lower(base, load, ratio), classes.lower(base, ratio, np.ones(1))
    assert len(classes.c) < len(load.c)
    assert np.allclose(one.QQ, other.QQ, atol=1e-12)
    assert np.allclose(one.QE, other.QE, atol=1e-12)
    assert np.allclose(one.EE, other.EE, atol=1e-12)
    assert one.logdet == pytest.approx(other.logdet)


def test_classes_of_several_forms_equal_cells() -> None:
    # Loads of three forms on 40 cells of three kinds, weighed: cell by cell, and by class.
    rng = np.random.default_rng(3)
    kind = rng.integers(0, 3, 40)
    c = np.array([[1.0, 2.0, -1.0], [1.0, 0.0, 0.5], [2.0, 2.0, -1.0]])[kind]
    loads = [Load(c[:, f], rng.standard_normal((40, 2)), rng.standard_normal((40, 3))) for f in range(3)]
    w = np.array([1.0, 0.4, -0.3])
    total = Load(
        c @ w,
        sum(a * x.TQ for a, x in zip(w, loads, strict=True)),
        sum(a * x.TE for a, x in zip(w, loads, strict=True)),
    )
    base = reml.independent(2, np.full(3, 1000.0))
    classes = Classes.of(loads)
    assert classes is not None
    assert sorted(classes.count.tolist()) == sorted(np.bincount(kind).tolist())
    one, other = groups.lower(base, total, 0.7), classes.lower(base, 0.7, w)
    assert np.allclose(one.QQ, other.QQ, atol=1e-12)
    assert np.allclose(one.QE, other.QE, atol=1e-12)
    assert np.allclose(one.EE, other.EE, atol=1e-10)
    assert one.logdet == pytest.approx(other.logdet)
    assert Classes.of(loads, most=17) is None


def test_whitening_by_hand() -> None:
    # One cell of 4 rows, λ = 2: V^{−½}1 = 1/√(1 + 8) = 1/3; what sums to zero is unchanged.
    part = Partition.of("g", np.zeros(4, dtype=int))
    block = np.array([[1.0, 1.0], [1.0, -1.0], [1.0, 0.0], [1.0, 0.0]])
    u, white = groups.whiten(part, np.ones(4), block, 2.0)
    assert u == pytest.approx(np.full(4, 1 / 3))
    assert white[:, 0] == pytest.approx(np.full(4, 1 / 3))
    assert white[:, 1] == pytest.approx(block[:, 1])


def test_expected_information_is_the_trace_formula() -> None:
    basis, part, _, load = case(2)
    s2, t2 = 1.3, 0.6
    Z = (part.codes[:, None] == np.arange(part.count)).astype(float)
    V = s2 * np.eye(40) + t2 * Z @ Z.T
    W = np.linalg.inv(V)
    Phi = np.linalg.inv(basis.Q.T @ W @ basis.Q)
    P = W - W @ basis.Q @ Phi @ basis.Q.T @ W
    D = [np.eye(40), Z @ Z.T]
    found = groups.expected_information(40, load.c, load.TQ, s2, t2)
    assert np.allclose(found.Phi, Phi, atol=1e-12)
    for i in range(2):
        assert np.allclose(found.P[i], -basis.Q.T @ W @ D[i] @ W @ basis.Q, atol=1e-11)
        for j in range(2):
            assert found.information[i, j] == pytest.approx(np.trace(P @ D[i] @ P @ D[j]) / 2, rel=1e-11)
            dense = basis.Q.T @ W @ D[i] @ W @ D[j] @ W @ basis.Q
            assert np.allclose(found.Q[i, j], dense, atol=1e-11)
