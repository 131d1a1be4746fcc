"""Unequal variance, outliers, shape and copies."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import signal, stats

from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.evidence.finding import About
from clingstone.evidence.lookalikes import Duplicates, Heteroscedasticity, Normality, Outliers
from clingstone.evidence.whitened import whitened
from clingstone.needs import NotSupported
from clingstone.run import Run, one_thread

from .factories import design, fits

ALL = About("", "all rows")


def test_studentised_statistic_equals_the_regression_of_squares() -> None:
    rng = np.random.default_rng(1)
    x, B = rng.standard_normal(50), 3
    many = Fits(Response.of(design(x), rng.standard_normal((50, B)) + x[:, None]), Run())
    reading = Heteroscedasticity().read(many, About("fitted", "the fitted values"))
    for b in range(B):
        e2 = many.response.residual[:, b] ** 2
        r = np.corrcoef(e2, x)[0, 1]  # the fitted values are linear in x
        assert reading.statistic[b] == pytest.approx(50 * r**2)
        assert reading.p[b] == pytest.approx(stats.chi2.sf(50 * r**2, 1))


def test_ratio_of_spreads_is_recovered_and_covered() -> None:
    rng = np.random.default_rng(2)
    n, B = 400, 500
    x = np.repeat(np.arange(5.0), n // 5)  # the outer fifths are the outer values
    y = np.exp(0.25 * x)[:, None] * rng.standard_normal((n, B))
    reading = Heteroscedasticity().read(Fits(Response.of(design(x), y), Run()), About("x1", "x1"))
    true = np.exp(0.25 * 4)
    assert reading.estimate is not None
    assert np.median(reading.estimate) == pytest.approx(true, rel=0.03)
    assert reading.low is not None
    assert reading.high is not None
    inside = np.mean((reading.low < true) & (true < reading.high))
    assert inside > 0.93  # the pooled kurtosis makes it wide, never narrow, when spreads differ


@pytest.mark.parametrize("share", [0.5, 0.9, 0.1])
def test_a_rare_or_common_value_is_compared_with_the_rest(share: float) -> None:
    rng = np.random.default_rng(10)
    x = (rng.uniform(size=4000) < share).astype(float)
    y = np.where(x == 1, 3.0, 1.0) * rng.standard_normal(4000)
    reading = Heteroscedasticity().read(fits(design(x), y), About("x1", "x1"))
    assert reading.estimate is not None
    assert reading.estimate[0] == pytest.approx(3.0, rel=0.15)


def test_size_with_heavy_tails() -> None:
    rng = np.random.default_rng(3)
    x, B = rng.standard_normal(300), 2000
    y = rng.standard_t(6, size=(300, B))
    reading = Heteroscedasticity().read(Fits(Response.of(design(x), y), Run()), About("x1", "x1"))
    assert np.mean(reading.p < 0.05) == pytest.approx(0.05, abs=0.02)


def test_a_constant_fit_has_no_variable_to_follow() -> None:
    made = fits(design(n=20), np.random.default_rng(4).standard_normal(20))
    with pytest.raises(NotSupported, match="do not vary"):
        Heteroscedasticity().read(made, About("fitted", "the fitted values"))


def test_every_row_beyond_the_bound_is_named_furthest_first() -> None:
    rng = np.random.default_rng(15)
    y = rng.standard_normal(200)
    y[[40, 7, 90]] += (16, -24, 10)
    assert Outliers().read(fits(design(n=200), y), ALL).rows == (7, 40, 90)
    quiet = Outliers().read(fits(design(n=200), rng.standard_normal(200)), ALL)
    assert len(quiet.rows) == 1


def test_outlier_is_named_by_row_and_equals_leaving_it_out() -> None:
    rng = np.random.default_rng(5)
    x, y = rng.standard_normal(30), rng.standard_normal(30)
    y[17] += 9
    reading = Outliers().read(fits(design(x), y), ALL)
    assert reading.rows == (17,)
    keep = np.arange(30) != 17
    X = np.column_stack([np.ones(30), x])
    b, rest, *_ = np.linalg.lstsq(X[keep], y[keep], rcond=None)
    s2 = rest[0] / 27
    spread = 1 + X[17] @ np.linalg.solve(X[keep].T @ X[keep], X[17])
    t = (y[17] - X[17] @ b) / np.sqrt(s2 * spread)
    assert reading.statistic[0] == pytest.approx(t)
    assert reading.p[0] == pytest.approx(min(30 * 2 * stats.t.sf(abs(t), 27), 1.0))


def test_size_of_the_outlier_test() -> None:
    rng = np.random.default_rng(6)
    made = Fits(Response.of(design(rng.standard_normal(25)), rng.standard_normal((25, 4000))), Run())
    assert np.mean(Outliers().read(made, ALL).p < 0.05) == pytest.approx(0.05, abs=0.012)


def test_shape_is_told_with_skewness() -> None:
    rng = np.random.default_rng(7)
    skewed = Normality().read(fits(design(n=300), rng.exponential(size=300)), ALL)
    assert skewed.p[0] < 1e-6
    assert skewed.estimate is not None
    assert skewed.estimate[0] > 1
    many = Fits(Response.of(design(n=200), rng.standard_normal((200, 2000))), Run())
    assert np.mean(Normality().read(many, ALL).p < 0.05) == pytest.approx(0.055, abs=0.02)


def test_copies_are_counted_in_y_and_in_the_model() -> None:
    rng = np.random.default_rng(8)
    x, y = rng.standard_normal(20), rng.standard_normal(20)
    x2, y2 = np.concatenate([x, x[:3]]), np.concatenate([y, y[:2], [99.0]])
    reading = Duplicates().read(fits(design(x2), y2), ALL)
    assert reading.statistic[0] == 2
    assert reading.rows == (20, 21)
    assert reading.flag is not None
    assert bool(reading.flag[0])
    assert "2 rows copy" in Duplicates().sentence(reading, ALL)
    none = Duplicates().read(fits(design(x), y), ALL)
    assert none.statistic[0] == 0
    assert "No row is identical" in Duplicates().sentence(none, ALL)


def test_copies_in_several_columns_and_units() -> None:
    rng = np.random.default_rng(9)
    x = np.tile(rng.standard_normal(10), 2)
    Y = rng.standard_normal((20, 2))
    Y[10:, 1] = Y[:10, 1]
    for scale in (1.0, 1e6, 1e-6):
        count = Duplicates().read(Fits(Response.of(design(scale * x), scale * Y), Run()), ALL).statistic
        assert count.tolist() == [0.0, 10.0]


def test_rows_of_other_times_or_groups_are_no_copies() -> None:
    x, y = np.zeros(6), np.array([1.0, 1, 2, 2, 3, 3])
    x[:2] = 1.0
    made = design(x, groups={"g": [0, 1, 0, 0, 1, 1]}, time=[0, 1, 2, 2, 3, 4])
    reading = Duplicates().read(fits(made, y), ALL)
    assert reading.rows == (3,)


def test_spread_that_grows_to_both_ends_is_seen_with_the_square() -> None:
    """nR² of the regression of squares on x and x², written out; the straight line alone is silent."""
    rng = np.random.default_rng(21)
    x = rng.uniform(-2, 2, 300)
    y = x + (0.4 + np.abs(x)) * rng.standard_normal(300)
    made = fits(design(x), y)
    reading = Heteroscedasticity().read(made, About("x1²", "x1"))
    e2 = made.response.residual[:, 0] ** 2
    Z = np.column_stack([np.ones(300), x, x**2])
    left = e2 - Z @ np.linalg.lstsq(Z, e2, rcond=None)[0]
    r2 = 1 - left @ left / np.sum((e2 - e2.mean()) ** 2)
    assert reading.statistic[0] == pytest.approx(300 * r2)
    assert reading.p[0] == pytest.approx(stats.chi2.sf(300 * r2, 2))
    assert reading.p[0] < 1e-6
    assert reading.estimate[0] > 2
    assert Heteroscedasticity().read(made, About("x1", "x1")).p[0] > 0.05
    assert "Far from the middle of x1" in Heteroscedasticity().sentence(reading, About("x1²", "x1"))


def test_size_of_the_square() -> None:
    rng = np.random.default_rng(22)
    y = rng.standard_normal((200, 1500))
    made = Fits(Response.of(design(rng.standard_normal(200)), y), Run())
    reading = Heteroscedasticity().read(made, About("x1²", "x1"))
    assert np.mean(reading.p < 0.05) == pytest.approx(0.05, abs=0.02)


def dependent(kind: str, B: int) -> Fits:
    """B columns of errors with one spread, and a predictor that moves as slowly as they do."""
    rng = np.random.default_rng(8)
    if kind == "order":
        n = 200
        e = signal.lfilter([1.0], [1.0, -0.7], rng.standard_normal((n + 100, B)), axis=0)[100:]
        d = design(np.cos(2 * np.pi * np.arange(n) / n), time=np.arange(n))
    elif kind == "groups":
        g = np.repeat(np.arange(30), 8)
        e = 0.8 * rng.standard_normal((30, B))[g] + rng.standard_normal((240, B))
        d = design(rng.standard_normal(30)[g], groups={"g": g})
    else:
        xy = rng.uniform(size=(100, 2))
        V = np.exp(-np.linalg.norm(xy[:, None] - xy[None], axis=2) / 0.2) + 0.3 * np.eye(100)
        e = np.linalg.cholesky(V) @ rng.standard_normal((100, B))
        d = design(xy[:, 0], xy=xy, site=np.arange(100))
    return Fits(Response.of(d, e), Run())


@pytest.mark.parametrize("kind", ["order", "groups", "places"])
def test_size_given_the_dependence(kind: str) -> None:
    """At 5 % with 400 draws (Monte-Carlo error 1.1 points), where the plain test says so far more often."""
    with one_thread():
        made = dependent(kind, 400)
        about = About("x1²", "x1")
        alone = np.mean(Heteroscedasticity().read(made, about).p < 0.05)
        given = np.mean(Heteroscedasticity().read(made, about, made.full_node).p < 0.05)
        far = np.mean(Outliers().read(made, ALL, made.full_node).p < 0.05)
        shape = np.mean(Normality().read(made, ALL, made.full_node).p < 0.05)
    assert alone > 0.12
    assert given == pytest.approx(0.05, abs=0.033)
    assert far == pytest.approx(0.055, abs=0.035)
    assert shape == pytest.approx(0.06, abs=0.035)


def test_power_given_the_order_in_time() -> None:
    rng = np.random.default_rng(9)
    n, x = 200, np.cos(2 * np.pi * np.arange(200) / 200)
    e = signal.lfilter([1.0], [1.0, -0.7], rng.standard_normal((n + 100, 100)), axis=0)[100:]
    made = Fits(Response.of(design(x, time=np.arange(n)), np.exp(0.5 * x)[:, None] * e), Run())
    assert np.mean(Heteroscedasticity().read(made, About("x1", "x1"), made.full_node).p < 0.05) > 0.95


def test_whitened_copies_are_the_generalised_fit_written_out() -> None:
    """Intercepts: a row less 1 − 1/√(1 + nλ) of its group's mean, of rows and columns alike."""
    rng = np.random.default_rng(10)
    g = np.repeat(np.arange(12), 5)
    x = rng.standard_normal(60)
    y = x + rng.standard_normal(12)[g] + rng.standard_normal(60)
    made = fits(design(x, groups={"g": g}), y)
    model = made[{"group:g"}]
    ratio = float(model.variances["group:g"][0] / model.variances["row"][0])
    k = 1 - 1 / np.sqrt(1 + 5 * ratio)
    X = np.column_stack([np.ones(60), x])
    means = np.eye(12)[g] @ (np.eye(12)[g].T / 5)
    WX, Wy = X - k * means @ X, y - k * means @ y
    b = np.linalg.lstsq(WX, Wy, rcond=None)[0]
    white = whitened(made, made.full_node)
    np.testing.assert_allclose(white.residual[:, 0], Wy - WX @ b, atol=1e-8)
    np.testing.assert_allclose(made.design.Q @ white.coef[:, 0], X @ b, atol=1e-8)
