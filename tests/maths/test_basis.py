"""Column spaces: reproduction, contrasts, extension and aliasing against numpy's least squares."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from clingstone.maths.basis import Basis, aliased


def example(n=30, seed=0):
    rng = np.random.default_rng(seed)
    X = np.column_stack([np.ones(n), rng.standard_normal(n) * 1e-6, 1e5 + rng.standard_normal(n)])
    return X, X @ np.array([2.0, 3e5, -1.0]) + rng.standard_normal(n)


def test_coefficients_and_variances_are_those_of_least_squares():
    X, y = example()
    basis = Basis.of(X)
    assert np.allclose(basis.Q @ basis.R, X)
    assert np.allclose(basis.Q.T @ basis.Q, np.eye(3), atol=1e-13)
    expected = np.linalg.lstsq(X, y, rcond=None)[0]
    assert np.allclose(basis.coefficients(basis.Q.T @ y), expected, rtol=1e-6)
    c = np.array([0.0, 1e-6, 1.0])
    w = basis.contrast(c)
    assert w @ (basis.Q.T @ y) == pytest.approx(c @ expected, rel=1e-7)
    scaled = X / np.linalg.norm(X, axis=0)
    inverse = np.linalg.inv(scaled.T @ scaled)
    short = c / np.linalg.norm(X, axis=0)
    assert w @ w == pytest.approx(short @ inverse @ short, rel=1e-4)
    assert basis.leverage.sum() == pytest.approx(3.0)
    assert basis.contrast(np.eye(3)).shape == (3, 3)


def test_projection_leaves_nothing_of_the_columns_behind():
    X, _ = example()
    basis = Basis.of(X)
    y = 1e9 + np.random.default_rng(1).standard_normal((30, 4))
    e = basis.project(y)
    # Rounding of a mean of 1e9 alone would leave about 1e-7.
    assert np.abs(basis.Q.T @ e).max() < 1e-12


def test_extension_keeps_the_old_columns_and_spans_the_new():
    X, _ = example()
    more = np.random.default_rng(2).standard_normal((30, 2)) + X[:, :1]
    basis = Basis.of(X)
    wide = basis.extend(more)
    assert np.array_equal(wide.Q[:, :3], basis.Q)
    assert np.allclose(wide.Q @ wide.R, np.column_stack([X, more]))
    assert np.allclose(wide.Q.T @ wide.Q, np.eye(5), atol=1e-12)


def test_aliased_columns_are_named_and_earlier_ones_kept():
    x = np.arange(6.0)
    X = np.column_stack([np.ones(6), x, 3 - 2 * x, np.zeros(6), x**2])
    assert aliased(X) == (2, 3)
    with pytest.raises(ValueError, match="dependent"):
        Basis.of(X[:, :3])
    with pytest.raises(ValueError, match="zero in every row"):
        Basis.of(X[:, 3:])


@given(st.integers(-12, 12), st.integers(0, 1000))
def test_the_rank_rule_does_not_depend_on_units(power, seed):
    X = np.random.default_rng(seed).standard_normal((12, 3))
    X[:, 2] *= 10.0**power
    assert aliased(X) == ()
    both = np.column_stack([X, X[:, 1] + 10.0**-power * X[:, 2]])
    assert len(aliased(both)) == 1


def test_a_long_table_is_factored_as_a_short_one():
    """Cholesky factors taken twice against Householder's, nearly dependent columns included."""
    rng = np.random.default_rng(3)
    n = 30_000
    X = np.column_stack([np.ones(n), rng.standard_normal((n, 3)) * [1e-6, 1.0, 1e4]])
    for gap in (1.0, 1e-7):
        wide = np.column_stack([X, X[:, 1] / 1e-6 + gap * rng.standard_normal(n)])
        basis, (Q, R) = Basis.of(wide), np.linalg.qr(wide)
        signs = np.sign(np.diag(basis.R) * np.diag(R))
        assert np.abs(basis.Q.T @ basis.Q - np.eye(5)).max() < 1e-14
        assert np.allclose(basis.R, signs[:, None] * R, rtol=1e-10, atol=1e-10 * np.abs(R).max())
        assert np.allclose(basis.Q, Q * signs, atol=1e-10 / gap * 1e-4)
    with pytest.raises(ValueError, match="dependent"):
        Basis.of(np.column_stack([X, X[:, 1] + X[:, 2]]))


def test_projection_leaves_nothing_in_the_column_space_however_large_the_mean():
    rng = np.random.default_rng(4)
    basis = Basis.of(np.column_stack([np.ones(25_000), rng.standard_normal(25_000)]))
    y = rng.standard_normal((25_000, 2))
    for Y in (y, y + 1e9):
        e = basis.project(Y)
        assert np.abs(basis.Q.T @ e).max() < 1e-12 * np.linalg.norm(e)
