"""The mean in doubt: curves, trends and surfaces, plainly and under the fitted dependence."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.evidence.finding import About
from clingstone.evidence.mean import (
    FunctionalForm,
    Trend,
    TrendSurface,
    contribution,
    explained,
    extension,
    f_test_given,
    natural_spline,
    plane,
)
from clingstone.maths.partition import Partition
from clingstone.needs import NotSupported
from clingstone.run import Run
from clingstone.structure.spatial import Sites

from .factories import ar1, design, fits

CLINIC = frozenset({"group:clinic"})


def test_spline_is_linear_beyond_the_outer_knots_and_smooth_between() -> None:
    x = np.linspace(-3, 7, 4001)
    B = natural_spline(x, 6)
    assert B.shape == (4001, 4)
    bend = np.diff(B, 2, axis=0) / (x[1] - x[0]) ** 2
    assert np.abs(bend[:180]).max() < 1e-6  # below the 5 % knot
    assert np.abs(bend[-180:]).max() < 1e-6 * np.abs(bend).max() + 1e-6  # above the 95 % knot
    assert np.abs(np.diff(bend, axis=0)).max() < 1e-2 * np.abs(bend).max()  # second derivative has no jump
    assert np.linalg.matrix_rank(np.column_stack([np.ones(4001), x, B])) == 6


def test_few_distinct_values_give_fewer_columns() -> None:
    assert natural_spline(np.tile([0.0, 1, 2], 5), 6).shape == (15, 1)
    assert natural_spline(np.tile([0.0, 1, 2, 3], 5), 6).shape == (20, 2)
    with pytest.raises(NotSupported, match="2 distinct values"):
        natural_spline(np.tile([0.0, 1], 5), 6)


def test_ordinary_f_equals_two_regressions() -> None:
    rng = np.random.default_rng(1)
    x = rng.uniform(0, 4, 60)
    made = fits(design(x), np.sin(x) + 0.3 * rng.standard_normal(60))
    reading = FunctionalForm().read(made, About("x1", "a curve in x1"))
    X = np.column_stack([np.ones(60), x])
    XB = np.column_stack([X, natural_spline(x, 6)])
    y = made.design.Q @ made.response.coef[:, 0] + made.response.residual[:, 0]
    small, large = (float(np.sum((y - A @ np.linalg.lstsq(A, y, rcond=None)[0]) ** 2)) for A in (X, XB))
    F = (small - large) / 4 / (large / 54)
    assert reading.statistic[0] == pytest.approx(F)
    assert reading.p[0] == pytest.approx(stats.f.sf(F, 4, 54))
    assert reading.estimate is not None
    assert reading.estimate[0] == pytest.approx((small - large) / small)
    # Adding anything that the model holds changes nothing.
    again = FunctionalForm().read(fits(made.design, 5 * y + 3 * x - 2), About("x1"))
    assert again.p[0] == pytest.approx(reading.p[0], rel=1e-6)


def test_f_given_groups_equals_dense_least_squares() -> None:
    rng = np.random.default_rng(2)
    g, x = np.repeat(np.arange(12), 6), rng.standard_normal(72)
    y = 0.8 * rng.standard_normal(12)[g] + rng.standard_normal(72)
    made = fits(design(x, groups={"clinic": g}), y)
    wide = extension(made.design, "functional-form", "x1")
    F, q, df2 = f_test_given(made, wide, CLINIC)
    model = made[CLINIC]
    ratio = model.variances["group:clinic"][0] / model.variances["row"][0]
    V = np.eye(72) + ratio * np.equal.outer(g, g)
    X = np.column_stack([np.ones(72), x, natural_spline(x, 6)])
    W = np.linalg.inv(V)
    C = np.linalg.inv(X.T @ W @ X)
    b = C @ X.T @ W @ y
    rest = y - X @ b
    scale = rest @ W @ rest / (72 - 6)
    expected = b[2:] @ np.linalg.solve(C[2:, 2:], b[2:]) / 4 / scale
    assert (q, df2) == (4, 66)
    assert F[0] == pytest.approx(expected, rel=1e-6)


def test_size_under_dependence() -> None:
    # x and the errors both drift along the series: the ordinary F rejects whatever the mean is, the
    # F with the dependence fitted first keeps near its size.
    rng = np.random.default_rng(3)
    n, B = 120, 400
    x = np.cumsum(rng.standard_normal(n))
    made = Fits(Response.of(design(x, time=np.arange(n)), ar1(0.7, (n, B), rng)), Run())
    about = About("x1", "a curve in x1")
    plain = np.mean(FunctionalForm().read(made, about).p < 0.05)
    held = np.mean(FunctionalForm().read(made, about, frozenset({"serial"})).p < 0.05)
    assert plain > 0.3
    assert held < 0.05 + 3 * np.sqrt(0.05 * 0.95 / B) + 0.02  # REML held fixed: two points allowed


def test_a_real_curve_is_found_under_dependence() -> None:
    rng = np.random.default_rng(4)
    g, x = np.repeat(np.arange(20), 8), rng.standard_normal(160)
    y = 0.5 * x**2 + rng.standard_normal(20)[g] + rng.standard_normal(160)
    made = fits(design(x, groups={"clinic": g}), y)
    reading = FunctionalForm().read(made, About("x1", "a curve in x1"), CLINIC)
    assert reading.p[0] < 1e-6
    assert reading.low is not None
    assert reading.low[0] > 0.05


def test_interval_of_the_share_inverts_the_noncentral_f() -> None:
    F = np.array([0.2, 1.0, 3.0, 20.0])
    estimate, low, high = explained(F, 4, 60, 0.9)
    assert estimate == pytest.approx(4 * F / (4 * F + 60))
    for f, end, level in ((3.0, low[2], 0.95), (3.0, high[2], 0.05), (20.0, low[3], 0.95)):
        assert stats.ncf.cdf(f, 4, 60, end / (1 - end) * 65) == pytest.approx(level, abs=1e-6)
    assert low[0] == 0.0
    assert np.all(low <= estimate)
    assert np.all(estimate <= high)


def test_a_trend_is_found_and_under_dependence_is_not_overclaimed() -> None:
    rng = np.random.default_rng(5)
    n, t = 100, np.arange(100.0)
    made = fits(design(rng.standard_normal(n), time=t), 0.03 * t + rng.standard_normal(n))
    assert Trend().read(made, About()).p[0] < 1e-4
    B = 200
    slow = Fits(Response.of(design(n=n, time=t), ar1(0.8, (n, B), rng)), Run())
    assert np.mean(Trend().read(slow, About()).p < 0.05) > 0.4
    assert np.mean(Trend().read(slow, About(), frozenset({"serial"})).p < 0.05) < 0.12


def test_a_model_that_holds_the_trend_is_tested_only_for_bends() -> None:
    rng = np.random.default_rng(6)
    t = np.arange(60.0)
    wide = extension(design(t, time=t), "trend", "")
    assert wide.p - 2 == 2
    full = design(t, *natural_spline(t, 4).T, time=t)
    made = fits(full, rng.standard_normal(60))
    with pytest.raises(NotSupported, match="already spans trend in time"):
        Trend().read(made, About())


def test_surfaces() -> None:
    rng = np.random.default_rng(7)
    xy = rng.uniform(-50, 90, size=(80, 2))
    y = 0.02 * xy[:, 0] + 0.0002 * xy[:, 0] * xy[:, 1] + 0.3 * rng.standard_normal(80)
    made = fits(design(n=80, xy=xy), y)
    linear, quadratic = (
        TrendSurface().read(made, a).statistic[0] for a in TrendSurface().abouts(made.design)
    )
    for columns, F in (
        (xy, linear),
        (np.column_stack([xy, xy**2, xy[:, 0] * xy[:, 1]]), quadratic),
    ):
        X = np.column_stack([np.ones(80), columns])
        rest = float(np.sum((y - X @ np.linalg.lstsq(X, y, rcond=None)[0]) ** 2))
        q = columns.shape[1]
        assert pytest.approx((np.sum((y - y.mean()) ** 2) - rest) / q / (rest / (79 - q))) == F


def test_plane_of_longitude_and_latitude_does_not_break_at_the_date_line() -> None:
    lon, lat = np.array([179.5, -179.5, 179.9, -179.9]), np.array([-17.0, -17.0, -16.0, -18.0])
    part = Partition.of("site", np.arange(4))
    one = plane(Sites(part, np.column_stack([lon, lat]), "lonlat", "km"))
    two = plane(Sites(part, np.column_stack([(lon + 30) % 360 - 180 + 0.0, lat]), "lonlat", "km"))
    np.testing.assert_allclose(one, two, atol=1e-9)
    assert one[0, 0] < one[1, 0]  # west of the line lies west
    assert one[2, 1] > one[3, 1]  # north lies up


def test_curve_shows_what_is_left_along_the_covariate() -> None:
    rng = np.random.default_rng(8)
    x = rng.uniform(-2, 2, 400)
    made = fits(design(x), x**2 + 0.2 * rng.standard_normal(400))
    found = FunctionalForm().curve(made, About("x1", "a curve in x1"))
    assert found is not None
    assert sum(found.size) == 400
    at, repaired = found.lines["repaired"]
    assert at == found.x
    np.testing.assert_allclose(repaired, found.y, atol=0.15)
    assert found.y[0] > 0.5
    assert min(found.y) < -0.8


def test_partial_residuals_add_what_the_model_has_of_the_variable() -> None:
    """By ordinary least squares from scratch: residual + b(x − x̄), and the bend on top of it."""
    rng = np.random.default_rng(18)
    x, z = rng.uniform(-2, 2, 300), rng.standard_normal(300)
    y = 3 * x + x**2 + z + 0.2 * rng.standard_normal(300)
    made = fits(design(x, z), y)
    X = np.column_stack([np.ones(300), x, z])
    b = np.linalg.lstsq(X, y, rcond=None)[0]
    np.testing.assert_allclose(contribution(made.response, "x1"), b[1] * (x - x.mean()), atol=1e-9)
    found = FunctionalForm().curve(made, About("x1", "a curve in x1"))
    assert found.y_name == "mean partial residual"
    edges = np.quantile(x, np.linspace(0, 1, 21)[1:-1])
    codes = np.searchsorted(edges, x, side="left")
    partial = y - X @ b + b[1] * (x - x.mean())
    means = [partial[codes == k].mean() for k in range(20)]
    np.testing.assert_allclose(found.y, means, atol=1e-9)
    at, fitted = found.lines["fitted"]
    np.testing.assert_allclose(np.diff(fitted) / np.diff(at), b[1])
    np.testing.assert_allclose(found.lines["repaired"][1], found.y, atol=0.15)


def test_covariates_that_cannot_bend_are_left_out() -> None:
    rng = np.random.default_rng(9)
    made = design(rng.integers(0, 2, 50), rng.standard_normal(50))
    assert [a.key for a in FunctionalForm().abouts(made)] == ["x2"]
