"""Sums and scores drawn from their own law, against rows drawn and added up, and the exact moments."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.covariance.each import each
from clingstone.maths.forms import Form
from clingstone.rehearsal.drawn import draw, law
from clingstone.rehearsal.truths import draw as draw_rows
from clingstone.rehearsal.truths import draw_summed
from rehearsal.worlds import trial, truth_of

KEY = "group:clinic"


@pytest.mark.parametrize("weights", [False, True])
def test_moments_are_those_of_the_model(weights):
    """E y'y = tr V and Cov(A_g'y_g) = σ²A_g'A_g + τ²A_g'z_gz_g'A_g, by the dense matrices."""
    f = trial(G=5, m=6, weights=weights)
    of, part = f.design, f.design.partitions["clinic"]
    tau2, sigma2, B = 0.7, 1.3, 40_000
    found = draw(of, part, tau2, sigma2, np.random.default_rng(0), B)
    root = np.ones(of.n) if of.root is None else of.root
    total = found.ss + np.sum(found.coef**2, axis=0)
    V = sigma2 * np.eye(of.n) + tau2 * np.outer(root, root) * (part.codes[:, None] == part.codes)
    sd = np.sqrt(2 * np.trace(V @ V) / B)
    assert np.mean(total) == pytest.approx(np.trace(V), abs=4 * sd)
    assert np.var(total) == pytest.approx(2 * np.trace(V @ V), rel=0.06)
    for g in range(part.count):
        here = part.codes == g
        A = np.column_stack([of.Q[here], root[here]])
        want = A.T @ V[np.ix_(here, here)] @ A
        got = found.raw[g] @ found.raw[g].T / B
        size = np.sqrt(np.diag(want))
        assert np.abs(got - want).max() < 5 * np.max(np.outer(size, size)) / np.sqrt(B)
    assert np.cov(found.raw[0, 0], found.raw[1, 0])[0, 1] == pytest.approx(0, abs=0.03)


def test_sums_and_scores_add_up_to_what_least_squares_leaves():
    f = trial()
    of, part = f.design, f.design.partitions["clinic"]
    found = draw(of, part, 0.5, 1.0, np.random.default_rng(3), 7)
    # Q'e = 0, and the constant is in the model, so e adds up to zero over all clinics.
    assert found.scores(part).sum(axis=0) == pytest.approx(np.zeros((of.p, 7)), abs=1e-10)
    assert found.sums(part).sum(axis=0) == pytest.approx(np.zeros(7), abs=1e-9)
    one = found.column(4)
    assert (one.B, found.B) == (1, 7)
    assert one.sums(part)[:, 0] == pytest.approx(found.sums(part)[:, 4])


def test_estimates_have_the_law_that_rows_give():
    """θ̂, σ̂² and s² by both draws: the same mean and spread within Monte-Carlo error."""
    f = trial(G=10, m=8)
    truth = truth_of(f, [KEY], theta=[-0.5])
    B, seen = 3000, []
    for response in (
        draw_summed(truth, f, "clinic", np.random.default_rng(1), B),
        draw_rows(truth, f, np.random.default_rng(2), B),
    ):
        found = each(f.algebra([KEY]), response).minima()
        ratio = np.exp(found.theta[0])
        seen.append(np.stack([ratio / (1 + ratio), response.s2, response.coef[1], found.at_bound[0]]))
    for a, b in zip(*seen, strict=True):
        error = np.sqrt((a.var() + b.var()) / B)
        assert a.mean() == pytest.approx(b.mean(), abs=4 * error)
        assert a.std() == pytest.approx(b.std(), rel=0.1)


def test_rows_that_no_clinic_spans_are_counted():
    f = trial(G=5, m=6)
    found = law(f.design, f.design.partitions["clinic"])
    # In a clinic the constant and the arm are one direction, age another.
    assert found.rest == f.design.n - 2 * 5


def test_there_are_no_rows_to_ask_for():
    f = trial(G=5, m=6)
    found = draw(f.design, f.design.partitions["clinic"], 0.0, 1.0, np.random.default_rng(0), 2)
    with pytest.raises(ValueError, match="no rows"):
        found.gram(Form("any", np.eye(f.design.n), 0.0, 1.0))
