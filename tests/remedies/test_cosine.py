"""The cosine refit: its parts written out, its exact law, refusals, coverage."""

from __future__ import annotations

from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest
from scipy import stats

from clingstone.design.design import Contrast, Term
from clingstone.needs import NotSupported
from clingstone.remedies import explain, refit, remedy
from tests.remedies.cases import ar1, design, fits

HAC = remedy("hac")


def working(rho: float):
    """An AR(1) with a known ρ, as the error model of the user's data."""
    return SimpleNamespace(shape={"serial.rho": np.array([rho])})


def trend(n=80, seed=0, rho=0.5, drop=()):
    rng = np.random.default_rng(seed)
    keep = np.setdiff1d(np.arange(n), drop)
    X = np.column_stack([np.ones(n), np.arange(n) / n, rng.normal(size=n)])
    y = ar1(n, rho, 1, rng)[:, 0] + X[:, 1]
    return X[keep], keep, y[keep]


def test_the_standard_error_is_the_written_out_cosine_sum():
    X, tick, y = trend(drop=(5, 6, 30))
    result = refit(HAC, "", fits(design(X, tick=tick), y))
    e = y - X @ np.linalg.lstsq(X, y, rcond=None)[0]
    inverse = np.linalg.inv(X.T @ X)
    N = 80
    nu = int(0.4 * N ** (2 / 3))
    S = np.zeros((3, 3))
    for j in range(1, nu + 1):
        u = np.sqrt(2 / N) * np.cos(np.pi * j * (tick + 0.5) / N) @ (X * e[:, None])
        S += N / nu * np.outer(u, u)
    se = np.sqrt(np.diag(inverse @ S @ inverse))
    assert [r.se for r in result.intervals] == pytest.approx(se, rel=1e-9)
    items = dict(result.account.items)
    assert items["cosines ν = ⌊0.4 N^⅔⌋"] == str(nu)
    assert items["missing steps, entered as zero scores"] == "3"


def test_the_exact_p_agrees_with_draws_from_the_working_law():
    n, rho = 40, 0.6
    X, tick, _ = trend(n=n)
    of = design(X, tick=tick)
    rng = np.random.default_rng(5)
    run = fits(of, ar1(n, rho, 20_000, rng))
    found = HAC.prepare(of, working(rho)).fit(run)
    for alpha in (0.1, 0.05, 0.01):
        size = np.mean(found.p < alpha, axis=1)
        assert np.allclose(size, alpha, atol=4.5 * np.sqrt(alpha / 20_000))
    # The interval inverts the same law: it leaves zero out exactly where p < 0.05.
    assert np.array_equal((found.low > 0) | (found.high < 0), found.p < 0.05)


def test_student_t_undercovers_a_trend_where_the_exact_law_does_not():
    # Size of t with ν df for a trend at n = 50, ρ = 0.5 is about twice nominal.
    n, rho = 50, 0.5
    X, tick, _ = trend(n=n)
    of = design(X, tick=tick)
    run = fits(of, ar1(n, rho, 8000, np.random.default_rng(6)))
    plain = replace(HAC, law="t").prepare(of, working(rho)).fit(run)
    assert 0.09 < np.mean(plain.p[1] < 0.05) < 0.13
    exact = HAC.prepare(of, working(rho)).fit(run)
    assert np.mean(exact.p[1] < 0.05) == pytest.approx(0.05, abs=0.011)


@pytest.mark.slow
def test_with_rho_fitted_the_size_stays_near_nominal():
    # ρ̂ by REML in each of 200 series of 100 rows; a white covariate and a trend. MCSE 0.015.
    n, rho = 100, 0.5
    X, tick, _ = trend(n=n)
    of = design(X, tick=tick)
    Y = ar1(n, rho, 200, np.random.default_rng(7))
    rejected = np.array([[r.p < 0.05 for r in refit(HAC, "", fits(of, y)).intervals] for y in Y.T])
    assert np.all(rejected.mean(axis=0) < 0.12)


def test_p_and_interval_invert_one_law():
    X, tick, y = trend()
    of = design(X, tick=tick)
    row = refit(HAC, "", fits(of, y)).get("x1")
    again = refit(HAC, "", fits(of, y, confidence=max(1 - row.p, 0.5))).get("x1")
    edge = min(abs(again.low), abs(again.high))
    assert row.p < 0.5
    assert edge < 1e-6 * again.se


def test_above_ten_thousand_rows_t_with_nu_df_is_used():
    n = 10_400
    rng = np.random.default_rng(8)
    X = np.column_stack([np.ones(n), rng.normal(size=n)])
    result = refit(HAC, "", fits(design(X, tick=np.arange(n)), rng.normal(size=n)))
    nu = int(0.4 * n ** (2 / 3))
    row = result.get("x1")
    assert (row.df, row.df_rule) == (nu, "ν cosines")
    assert row.p == pytest.approx(2 * stats.t.sf(abs(row.estimate / row.se), nu), rel=1e-9)


def test_the_joint_test_holds_its_size_under_the_working_law():
    n, rho = 80, 0.5
    X, tick, _ = trend(n=n)
    terms = (Term("constant", (0,), "constant"), Term("pair", (1, 2), "factor"))
    of = design(X, tick=tick, terms=terms)
    run = fits(of, ar1(n, rho, 6000, np.random.default_rng(9)))
    exact = np.mean(HAC.prepare(of, working(rho)).fit(run).joint["pair"][3] < 0.05)
    plain = np.mean(replace(HAC, law="t").prepare(of, working(rho)).fit(run).joint["pair"][3] < 0.05)
    assert plain > 0.08
    assert 0.03 < exact < 0.07


def test_many_columns_and_contrasts_are_read_as_one_by_one():
    X, tick, y = trend()
    of = design(X, tick=tick, contrasts=[Contrast("gap", (0.0, 1.0, -1.0))])
    Y = np.column_stack([y, ar1(80, 0.3, 2, np.random.default_rng(1))])
    ready = HAC.prepare(of, working(0.4))
    found = ready.fit(fits(of, Y))
    for b in range(3):
        one = ready.fit(fits(of, Y[:, b]))
        for name in ("estimate", "se", "low", "high", "p"):
            assert np.allclose(getattr(found, name)[:, [b]], getattr(one, name), rtol=1e-9)
        c = np.array([0.0, 1.0, -1.0])
        assert one.se[3, 0] == pytest.approx(np.sqrt(c @ one.covariance @ c))


def test_several_long_series_are_blocks():
    rng = np.random.default_rng(10)
    X = np.column_stack([np.ones(120), rng.normal(size=120)])
    series, tick = np.repeat([0, 1, 2], 40), np.tile(np.arange(40), 3)
    result = refit(HAC, "", fits(design(X, tick=tick, series=series), rng.normal(size=120)))
    assert "3 series enter as blocks" in result.notes[0]
    assert dict(result.account.items)["series"] == "3"


# ---- refusals -----------------------------------------------------------------------------


def test_irregular_times_are_refused():
    X, _, y = trend()
    of = design(X, elapsed=np.sort(np.random.default_rng(0).uniform(0, 50, len(y))))
    with pytest.raises(NotSupported, match="irregularly spaced") as stop:
        refit(HAC, "", fits(of, y))
    assert "ar1" in stop.value.hint


def test_short_series_are_refused_with_their_number():
    X, _, y = trend()
    of = design(X, tick=np.tile(np.arange(8), 10), series=np.repeat(np.arange(10), 8))
    with pytest.raises(NotSupported, match=r"10 of 10 series have fewer than 20 rows \(the shortest has 8\)"):
        refit(HAC, "", fits(of, y))


def test_no_order_and_weights_are_refused():
    X, tick, y = trend()
    with pytest.raises(NotSupported, match="no serial structure"):
        refit(HAC, "", fits(design(X), y))
    with pytest.raises(NotSupported, match="precision weights"):
        refit(HAC, "", fits(design(X, tick=tick, root=np.ones(80)), y))


def test_a_correlation_next_to_one_is_held_and_told():
    X, tick, _ = trend()
    ready = HAC.prepare(design(X, tick=tick), working(0.99999))
    assert ready.rho == 0.999
    assert "held at 0.999" in ready.notes[0]
    alone = HAC.prepare(design(X, tick=tick), None)
    assert alone.rho == 0.0
    assert "independent errors" in alone.notes[0]


def test_conventions_show_bartlett_with_a_normal_quantile():
    X, tick, y = trend()
    shown = dict(explain(HAC, "", fits(design(X, tick=tick), y)))
    assert len(shown) == 5
    rows = next(v for k, v in shown.items() if "lags, factor n/(n − p), normal" in k)
    e = y - X @ np.linalg.lstsq(X, y, rcond=None)[0]
    lags = int(4 * (80 / 100) ** (2 / 9))
    weight = np.maximum(0, 1 - np.abs(tick[:, None] - tick) / (lags + 1))
    u, inverse = X * e[:, None], np.linalg.inv(X.T @ X)
    V = 80 / 77 * inverse @ (u.T @ weight @ u) @ inverse
    assert [r.se for r in rows] == pytest.approx(np.sqrt(np.diag(V)), rel=1e-9)
    assert all(r.df == np.inf for r in rows)


def slow_under_noise(n: int, seed: int) -> np.ndarray:
    """Half of the variance a first-order process of 0.9, half row noise."""
    rng = np.random.default_rng([77, seed])
    return np.sqrt(0.5) * ar1(n, 0.9, 1, rng)[:, 0] + np.sqrt(0.5) * rng.standard_normal(n)


def test_the_law_under_row_noise_is_that_of_the_whole_matrix():
    """E of the law's two forms, a'Ωa and tr F'ΩF, with Ω = (1 − v)ρ^|t−s| + vI written out."""
    from clingstone.maths.longrun import Grid
    from clingstone.remedies.longrun import _correlate

    n, rho, noise = 40, 0.8, 0.3
    t = np.arange(n)
    omega = (1 - noise) * rho ** np.abs(t[:, None] - t) + noise * np.eye(n)
    block = np.random.default_rng(3).standard_normal((n, 4))
    grid = Grid.of(np.zeros(n, dtype=np.intp), t)
    np.testing.assert_allclose(_correlate(grid, block, rho, noise), omega @ block, rtol=1e-10, atol=1e-10)
    np.testing.assert_allclose(
        _correlate(grid, block, rho, 0.0), grid.correlate(block, rho), rtol=1e-12, atol=1e-12
    )


def test_row_noise_enters_the_law_where_the_errors_ask_for_it():
    """The ρ of the slow part, not one between it and the noise; the interval is the wider for it."""
    from clingstone.remedies.serial import under_noise

    X, tick, _ = trend(n=300)
    f = fits(design(X, tick=tick), X[:, 1] + slow_under_noise(300, 1))
    found = under_noise(f)
    assert found is not None
    assert 0.75 < found["rho"] < 0.99
    assert 0.2 < found["noise"] < 0.8
    items = dict(refit(HAC, "", f).account.items)
    assert items["share of row noise over it"] == f"{found['noise']:.3f}"
    plain = HAC.prepare(f.design, f[{"serial"}])
    noisy = HAC.prepare(f.design, HAC.working(f))
    assert noisy.laws[1].quantile(0.05) > 1.1 * plain.laws[1].quantile(0.05)


def test_a_first_order_process_is_seldom_taken_for_one_under_noise():
    """5 % by the law of the likelihood ratio at the boundary; four or more of 24 have a chance of 3 %."""
    from clingstone.remedies.serial import under_noise

    X, tick, _ = trend(n=120)
    rng = np.random.default_rng(5)
    made = design(X, tick=tick)
    asked = [under_noise(fits(made, ar1(120, 0.5, 1, rng)[:, 0])) is not None for _ in range(24)]
    assert sum(asked) <= 3
