"""Bandwidths of long-run variances and the fixed-b law of t, against obvious loops and published curves."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.maths import bandwidth
from clingstone.maths.fixedb import bartlett_law, wishart
from clingstone.maths.longrun import Grid

# Upper-tail critical values of Kiefer & Vogelsang (2005), Bartlett kernel, as cubics in b: level, c₀ … c₃
# (from memory; the tail areas below agree with them).
CUBICS = [
    (0.05, (1.6449, 2.1859, 0.3142, -0.3427)),
    (0.025, (1.9600, 2.9694, 0.4160, -0.5324)),
    (0.01, (2.3263, 4.1618, 0.5368, -0.9060)),
]


def one(n: int) -> Grid:
    return Grid.of(np.zeros(n, dtype=np.int32), np.arange(n))


@pytest.mark.parametrize("b", [0.02, 0.1, 0.3, 0.5, 1.0])
@pytest.mark.parametrize(("level", "cubic"), CUBICS)
def test_tails_at_published_critical_values(b, level, cubic):
    c = float(np.polyval(cubic[::-1], b))
    tail = float(bartlett_law(np.array([1000]), 1000 * b).tail(np.array([c]))[0]) / 2
    assert tail == pytest.approx(level, abs=0.0022)  # the cubics are fitted curves; largest seen 0.0016


def test_small_bandwidth_is_nearly_normal_and_quantile_inverts_the_tail():
    law = bartlett_law(np.array([100_000]), 10.0)
    assert law.quantile(0.05) == pytest.approx(1.96, abs=0.03)
    wide = bartlett_law(np.array([60]), 30.0)
    assert wide.tail(np.array([wide.quantile(0.05)]))[0] == pytest.approx(0.05, rel=1e-8)
    scale, nu = wishart(wide)
    assert scale == pytest.approx(wide.weights.sum())
    assert nu == pytest.approx(scale**2 / np.sum(wide.weights**2))


@pytest.mark.parametrize("lengths", [(80,), (30, 50), (12, 20, 48)])
def test_law_equals_simulation(lengths):
    # t of the mean of N(0, 1) rows with a Bartlett variance of centred rows, series after series.
    N, S, rng = sum(lengths), 10, np.random.default_rng(5)
    codes = np.repeat(np.arange(len(lengths)), lengths).astype(np.int32)
    tick = np.concatenate([np.arange(n) for n in lengths])
    z = rng.normal(size=(N, 20_000))
    variance = Grid.of(codes, tick).bartlett_squares(z - z.mean(axis=0), S - 1)
    t = z.sum(axis=0) / np.sqrt(variance)
    law = bartlett_law(np.array(lengths), S)
    for c in (1.5, 2.0, 3.0):
        share = float(np.mean(np.abs(t) > c))
        noise = 3 * np.sqrt(share / 20_000)
        assert float(law.tail(np.array([c]))[0]) == pytest.approx(share, abs=noise + 0.004)


def test_order_of_series_does_not_matter():
    assert bartlett_law(np.array([20, 40]), 8.0) is bartlett_law(np.array([40, 20]), 8.0)


def test_rules_of_the_number_of_steps():
    assert bandwidth.textbook(100) == 4
    assert bandwidth.textbook(16) == 2
    assert bandwidth.wide(100) == pytest.approx(13.0)


def test_newey_west_rule_equals_its_formula_in_a_loop():
    rng = np.random.default_rng(2)
    u = np.convolve(rng.normal(size=151), [1.0, 0.6], "valid")
    n, top = len(u), int(4 * (len(u) / 100) ** (2 / 9))
    gamma = [sum(u[t] * u[t - j] for t in range(j, n)) / n for j in range(top + 1)]
    s0 = gamma[0] + 2 * sum(gamma[1:])
    s1 = 2 * sum(j * gamma[j] for j in range(1, top + 1))
    wanted = 1.1447 * ((s1 / s0) ** 2 * n) ** (1 / 3)
    assert bandwidth.newey_west(one(n), u) == pytest.approx(wanted, rel=1e-12)
    assert bandwidth.newey_west(one(n), 7 * u) == pytest.approx(wanted, rel=1e-12)


def test_andrews_rule_for_a_known_autoregression():
    # With one column α(1) = 4ρ²/((1 − ρ)²(1 + ρ)²), whatever the innovation variance.
    rng = np.random.default_rng(3)
    u = np.zeros(4000)
    for t in range(1, 4000):
        u[t] = 0.5 * u[t - 1] + rng.normal()
    y, x = u[1:] - u[1:].mean(), u[:-1] - u[:-1].mean()
    rho = float(x @ y / (x @ x))
    wanted = 1.1447 * (4 * rho**2 / ((1 - rho) ** 2 * (1 + rho) ** 2) * 4000) ** (1 / 3)
    assert bandwidth.andrews(one(4000), u[:, None]) == pytest.approx(wanted, rel=1e-10)


def test_series_apart_never_pair_up():
    u = np.random.default_rng(4).normal(size=20)
    codes = np.repeat([0, 1], 10).astype(np.int32)
    grid = Grid.of(codes, np.tile(np.arange(10), 2))
    found = bandwidth.autocovariance(grid, u, 2)
    by_hand = [sum(u[t] * u[t - j] for s in (0, 10) for t in range(s + j, s + 10)) / 20 for j in range(3)]
    assert found == pytest.approx(by_hand)
