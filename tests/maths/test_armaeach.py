"""ARMA errors of many columns at once: against dense covariances, and against the search of one column."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import linalg

from clingstone.covariance.processes import Arma, search
from clingstone.design.response import Response
from clingstone.maths.arma import autocovariances
from clingstone.maths.armaeach import ArmaEach
from remedies.cases import ar1, design

ORDERS = ((1, 0), (2, 0), (3, 0), (0, 1), (1, 1))
LENGTHS = (12, 7, 15)


def series(lengths: tuple[int, ...], B: int) -> tuple[Response, ArmaEach]:
    rng = np.random.default_rng(3)
    n = sum(lengths)
    tick = np.concatenate([np.arange(k) for k in lengths])
    of = design(
        np.column_stack([np.ones(n), rng.normal(size=n)]),
        series=np.repeat(np.arange(len(lengths)), lengths),
        tick=tick,
    )
    Y = np.hstack([ar1(n, rho, 1, rng) for rho in np.linspace(-0.3, 0.9, B)])
    return Response.of(of, Y), of


def together(response: Response, order: tuple[int, int]) -> tuple[Arma, ArmaEach]:
    process = Arma(response.design, *order)
    grid = process.steps.grid
    assert ArmaEach.carries(grid, *order)
    return process, ArmaEach(grid, grid.spread(response.design.Q), grid.spread(response.residual), *order)


@pytest.mark.parametrize("order", ORDERS)
def test_grams_are_those_of_the_covariance_written_out(order):
    response, of = series(LENGTHS, 4)
    process, many = together(response, order)
    theta = np.random.default_rng(1).normal(0, 0.6, size=(sum(order), 6))
    columns = np.array([0, 1, 2, 3, 1, 0])
    found = many.grams(theta, columns)
    for k, b in enumerate(columns):
        phi, moving = process.coefficients(theta[:, k])
        gamma = autocovariances(phi, moving, max(LENGTHS))
        V = linalg.block_diag(*[linalg.toeplitz(gamma[:size]) for size in LENGTHS])
        inverse, Q, e = np.linalg.inv(V), of.Q, response.residual[:, b]
        np.testing.assert_allclose(found.QQ[k], Q.T @ inverse @ Q, rtol=1e-9, atol=1e-12)
        np.testing.assert_allclose(found.QE[k], Q.T @ inverse @ e, rtol=1e-9, atol=1e-10)
        assert found.EE[k] == pytest.approx(e @ inverse @ e, rel=1e-10)
        assert found.logdet[k] == pytest.approx(np.linalg.slogdet(V)[1], rel=1e-9, abs=1e-10)


@pytest.mark.parametrize("order", ORDERS)
@pytest.mark.parametrize("lengths", [(40,), (20, 30)])
def test_every_column_has_the_optimum_of_its_own_search(order, lengths):
    response, of = series(lengths, 5)
    process, many = together(response, order)
    found = many.minima(process.parameters, of.m)
    assert found.converged.sum() >= 3  # one may sit on the edge, one on the ridge of ARMA(1,1)
    for b in np.flatnonzero(found.converged):
        alone = search(process, response.column(b))
        assert found.value[b] == pytest.approx(alone.value, abs=1e-6)
        np.testing.assert_allclose(np.tanh(found.theta[:, b]), np.tanh(alone.theta), atol=2e-3)  # flat ridges


def test_what_it_does_not_carry():
    response, _ = series(LENGTHS, 1)
    grid = Arma(response.design, 1, 0).steps.grid
    assert not ArmaEach.carries(grid, 1, 2)
    assert not ArmaEach.carries(grid, 2, 1)
    assert not ArmaEach.carries(grid, 8, 0)  # a series of 7 steps
    rng = np.random.default_rng(1)
    gap = design(np.ones((9, 1)), series=np.zeros(9, dtype=int), tick=np.r_[0:4, 5:10])
    assert not ArmaEach.carries(Arma(Response.of(gap, rng.normal(size=9)).design, 1, 0).steps.grid, 1, 0)
