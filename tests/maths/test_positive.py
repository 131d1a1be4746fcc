"""The tail of one positive term against many: Student's t, the contour, hand-worked cases."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats
from scipy.special import betaln

from clingstone.maths.positive import one_positive, t_tail
from clingstone.maths.ratio import eigen_tails


@pytest.mark.parametrize("q", [1, 2, 5, 30, 190])
def test_independent_terms_give_students_t(q):
    c = np.array([0.01, 0.7, 1.96, 4.0, 25.0])
    p, log_p = t_tail(np.eye(q + 1), c)
    assert np.allclose(p, 2 * stats.t.sf(c, q), rtol=1e-12)
    assert np.allclose(log_p, np.log(2) + stats.t.logsf(c, q), rtol=1e-10)
    assert np.allclose(t_tail(7.0 * np.eye(q + 1), -c)[0], p, rtol=1e-12)


def test_one_negative_term_by_hand():
    """P(Z₀² > ηZ₁²) = (2/π) arctan(1/√η)."""
    eta = np.array([1e-12, 0.3, 1.0, 50.0, 1e12])
    p, _ = one_positive(1.0, eta[None, :])
    assert np.allclose(p, 2 / np.pi * np.arctan(1 / np.sqrt(eta)), rtol=1e-12)


def test_no_negative_term_leaves_certainty():
    p, log_p = one_positive(2.0, np.zeros(3))
    assert p[0] == pytest.approx(1.0, abs=1e-14)
    assert log_p[0] <= 0.0


@given(st.integers(1, 12), st.integers(0, 3000), st.floats(-3, 4))
def test_agrees_with_the_contour_at_any_spread(q, seed, power):
    eta = np.exp(np.random.default_rng(seed).normal(size=q) * 3)
    eta *= 10.0**power / eta.sum()
    twin = eigen_tails(np.concatenate([[1.0], -eta]), [0.0])
    p, log_p = one_positive(1.0, eta)
    assert p[0] == pytest.approx(twin.upper[0], rel=1e-9)
    assert log_p[0] == pytest.approx(twin.log_upper[0], rel=1e-9, abs=1e-10)
    assert one_positive(5.0, 5.0 * eta)[0][0] == pytest.approx(p[0], rel=1e-12)


def test_a_correlated_numerator_against_simulation():
    """400 000 draws: s.e. 0.0005 at most."""
    rng = np.random.default_rng(4)
    A = rng.standard_normal((5, 5))
    V = A @ A.T
    z = rng.standard_normal((400_000, 5)) @ np.linalg.cholesky(V).T
    t = z[:, 0] / np.sqrt(np.mean(z[:, 1:] ** 2, axis=1))
    for c in (0.5, 2.0, 4.0):
        assert t_tail(V, [c])[0][0] == pytest.approx(np.mean(np.abs(t) > c), abs=0.003)


def test_far_tails_keep_their_logarithm():
    p, log_p = t_tail(np.eye(31), [1e12])
    assert p[0] == 0.0
    # P(|t| > c) → 2 q^(q/2 − 1) c^(−q) / B(q/2, 1/2), the leading term of Student's tail.
    expected = np.log(2) + 14 * np.log(30) - 30 * np.log(1e12) - betaln(15, 0.5)
    assert log_p[0] == pytest.approx(expected, rel=1e-12)


def test_what_is_refused():
    with pytest.raises(ValueError, match="no negative"):
        one_positive(1.0, np.array([-0.1]))
    with pytest.raises(ValueError, match="ω₀ > 0"):
        one_positive(0.0, np.array([0.1]))
    with pytest.raises(ValueError, match="no terms"):
        t_tail(np.eye(1), [1.0])
    assert t_tail(np.eye(3), [0.0])[0][0] == 1.0
