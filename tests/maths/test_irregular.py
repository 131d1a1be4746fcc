"""Moments on panels of link lengths against rows whitened one by one."""

from __future__ import annotations

import numpy as np
import pytest
from tests.remedies.cases import design, fits

from clingstone.covariance import layered
from clingstone.maths import reml
from clingstone.maths.irregular import Panels
from clingstone.maths.markov import Links


def links(n: int = 3000, seed: int = 0) -> tuple[Links, np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    steps = rng.exponential(size=n)
    steps[::20] = np.nan
    Q = np.linalg.qr(rng.normal(size=(n, 4)))[0]
    E = rng.normal(size=(n, 2))
    return Links(steps), Q, E - Q @ (Q.T @ E)


@pytest.mark.parametrize("rho", [1e-6, 0.05, 0.5, 0.9, 0.999, 0.999999])
def test_grams_equal_whitened_rows(rho):
    made, Q, E = links()
    panels = Panels.of(made)
    apart, along, logdet = panels.weights(rho)
    W, V = made.whiten(rho, Q), made.whiten(rho, E)

    def summed(moments):
        return np.tensordot(apart, moments[0], 1) + np.tensordot(along, moments[1], 1)

    assert np.eye(4) + summed(panels.moments(Q)) == pytest.approx(W.T @ W, rel=1e-7)
    size = np.sqrt(np.outer(np.sum(W**2, axis=0), np.sum(V**2, axis=0)))
    assert np.max(np.abs(summed(panels.moments(Q, E)) - W.T @ V) / size) < 1e-8
    assert np.sum(E**2, axis=0) + summed(panels.squares(E)) == pytest.approx(np.sum(V**2, axis=0), rel=1e-8)
    assert logdet == pytest.approx(made.logdet(rho), abs=1e-6)


def test_polynomials_add_up_to_one_and_carry_powers_of_the_length():
    made, _, _ = links(500)
    panels = Panels.of(made)
    assert panels.counts.sum() == pytest.approx(len(made.later))
    steps = made.steps[made.later]
    assert panels.counts @ panels.lengths == pytest.approx(steps.sum(), rel=1e-9)


def test_the_fit_of_many_irregular_rows_is_the_same_either_way(monkeypatch):
    rng = np.random.default_rng(2)
    n = 6000
    t = np.cumsum(rng.exponential(size=n))
    phi = 0.6 ** np.r_[0.0, np.diff(t)]
    u = np.empty(n)
    u[0] = rng.normal()
    for k in range(1, n):
        u[k] = phi[k] * u[k - 1] + np.sqrt(1 - phi[k] ** 2) * rng.normal()
    X = np.column_stack([np.ones(n), rng.normal(size=n)])
    fast = fits(design(X, elapsed=t), u)
    monkeypatch.setattr(layered, "MANY_ROWS", 10**9)
    slow = fits(design(X, elapsed=t), u)
    one, other = slow[{"serial"}], slow.algebra({"serial"}).gram(slow[{"serial"}].theta[:, 0], slow.response)
    monkeypatch.setattr(layered, "MANY_ROWS", 5000)
    same = fast[{"serial"}]
    assert same.theta == pytest.approx(one.theta, abs=1e-5)
    assert same.loglik == pytest.approx(one.loglik, abs=1e-5)
    gram = fast.algebra({"serial"}).gram(one.theta[:, 0], fast.response)
    assert reml.scale(gram, fast.design.m) == pytest.approx(reml.scale(other, slow.design.m), rel=1e-9)
