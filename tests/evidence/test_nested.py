"""Groups: the exact F, its correlation with the exact interval, and REML beside them."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.evidence.anova import anova, icc_interval
from clingstone.evidence.finding import About
from clingstone.evidence.nested import GroupF, IntraclassCorrelation, group_means, half_mixture
from clingstone.maths.once import Array
from clingstone.needs import NotSupported
from clingstone.run import Run

from .factories import design, fits, hat

CLINIC = About("clinic", "rows of one clinic")


def unbalanced(rng: np.random.Generator, G: int = 9) -> tuple[Array, Array, Array]:
    g = np.repeat(np.arange(G), rng.integers(1, 9, G))
    rng.shuffle(g)
    return g, rng.standard_normal(len(g)), rng.standard_normal(G)[g] * 0.7 + rng.standard_normal(len(g))


def test_hand_worked_balanced_table() -> None:
    # Three clinics of two rows: means 2, 5, 8; SSB = 2·(9 + 0 + 9) = 36, SSW = 3·2 = 6.
    y = [1.0, 3.0, 4.0, 6.0, 7.0, 9.0]
    made = fits(design(n=6, groups={"clinic": [0, 0, 1, 1, 2, 2]}), y)
    table = anova(made.response, made.design.partitions["clinic"])
    assert (table.df1, table.df2, table.n0) == (2, 3, pytest.approx(2.0))
    assert table.between[0] == pytest.approx(36.0)
    assert table.within[0] == pytest.approx(6.0)
    assert table.F[0] == pytest.approx(9.0)  # 18/2
    assert table.icc[0] == pytest.approx(16 / 20)  # (18 − 2)/(18 + 2)
    reading = GroupF().read(made, CLINIC)
    F, upper, lower = 9.0, stats.f.ppf(0.975, 2, 3), stats.f.ppf(0.025, 2, 3)
    assert reading.low is not None
    assert reading.high is not None
    assert reading.low[0] == pytest.approx((F / upper - 1) / (F / upper + 1), abs=1e-9)
    assert reading.high[0] == pytest.approx((F / lower - 1) / (F / lower + 1), abs=1e-9)


def test_interval_equals_dense_pivot() -> None:
    rng = np.random.default_rng(4)
    g, x, y = unbalanced(rng)
    made = fits(design(x, groups={"clinic": g}), y)
    part = made.design.partitions["clinic"]
    table = anova(made.response, part)
    low, high = icc_interval(made.response, part, table, 0.9)
    M, Z = hat(made.design), np.eye(part.count)[part.codes]
    mu, U = np.linalg.eigh(M @ Z @ Z.T @ M)
    mu, U = mu[-table.df1 :], U[:, -table.df1 :]
    w = U.T @ made.response.residual[:, 0]
    for end, quantile in ((low[0], 0.95), (high[0], 0.05)):
        ratio = end / (1 - end)
        W = np.sum(w**2 / (1 + ratio * mu)) / table.df1 / (table.within[0] / table.df2)
        assert pytest.approx(stats.f.ppf(quantile, table.df1, table.df2), rel=1e-6) == W


def test_weighted_rows_equal_the_scaled_regression() -> None:
    rng = np.random.default_rng(5)
    g, x, y = unbalanced(rng)
    omega = rng.uniform(0.3, 3, len(y))
    made = fits(design(x, groups={"clinic": g}, weights=omega), y)
    table = anova(made.response, made.design.partitions["clinic"])
    root = np.sqrt(omega)
    X = np.column_stack([np.ones(len(x)), x]) * root[:, None]
    XZ = np.column_stack([x, np.eye(g.max() + 1)[np.unique(g, return_inverse=True)[1]]]) * root[:, None]
    rest = [float(np.sum((root * y - B @ np.linalg.lstsq(B, root * y, rcond=None)[0]) ** 2)) for B in (X, XZ)]
    assert table.within[0] == pytest.approx(rest[1])
    assert table.between[0] == pytest.approx(rest[0] - rest[1])


@given(st.integers(0, 10_000), st.floats(0.01, 100), st.floats(-1e4, 1e4))
def test_order_of_rows_and_units_of_y_do_not_matter(seed: int, scale: float, shift: float) -> None:
    rng = np.random.default_rng(seed)
    g, x, y = unbalanced(rng)
    one = GroupF().read(fits(design(x, groups={"clinic": g}), y), CLINIC)
    turn = rng.permutation(len(y))
    two = GroupF().read(
        fits(design(x[turn], groups={"clinic": g[turn]}), (scale * y + shift + 3 * x)[turn]), CLINIC
    )
    assert two.p[0] == pytest.approx(one.p[0], rel=1e-5)
    for name in ("statistic", "estimate", "low", "high"):
        assert getattr(two, name)[0] == pytest.approx(getattr(one, name)[0], rel=1e-5, abs=1e-7)


def test_size_and_coverage() -> None:
    rng = np.random.default_rng(6)
    g = np.repeat(np.arange(10), [1, 2, 3, 4, 5, 6, 8, 10, 12, 20])
    x, between = rng.standard_normal(len(g)), rng.standard_normal(10)[g]
    made, B = design(x, between, groups={"clinic": g}), 4000
    e = rng.standard_normal((len(g), B))
    null = GroupF().read(Fits(Response.of(made, e), Run()), CLINIC)
    assert np.mean(null.p < 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / B))
    icc = 0.3
    y = np.sqrt(icc) * rng.standard_normal((10, B))[g] + np.sqrt(1 - icc) * e
    there = GroupF().read(Fits(Response.of(made, y), Run()), CLINIC)
    assert there.low is not None
    assert there.high is not None
    inside = np.mean((there.low < icc) & (icc < there.high))
    assert inside == pytest.approx(0.95, abs=3 * np.sqrt(0.05 * 0.95 / B))


def test_reml_correlation_and_its_null_law() -> None:
    rng = np.random.default_rng(7)
    g = np.repeat(np.arange(12), rng.integers(2, 9, 12))
    x, B = rng.standard_normal(len(g)), 400
    made = Fits(Response.of(design(x, groups={"clinic": g}), rng.standard_normal((len(g), B))), Run())
    reading = IntraclassCorrelation().read(made, CLINIC)
    assert np.mean(reading.p <= 0.05) == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / B))
    assert np.mean(reading.statistic < 1e-6) == pytest.approx(np.mean(reading.p > 0.99), abs=0.02)


def test_given_others_is_the_restricted_likelihood_ratio() -> None:
    rng = np.random.default_rng(8)
    g, t = np.repeat(np.arange(15), 8), np.tile(np.arange(8), 15)
    y = rng.standard_normal(15)[g] + rng.standard_normal(120)
    made = fits(design(rng.standard_normal(120), groups={"clinic": g}, time=t, who=g), y)
    (others,) = GroupF().givens(made, CLINIC)
    assert others == frozenset({"serial"})
    reading = GroupF().read(made, CLINIC, others)
    expected = 2 * (made[{"serial", "group:clinic"}].loglik[0] - made[{"serial"}].loglik[0])
    assert reading.statistic[0] == pytest.approx(expected)
    assert reading.p[0] == pytest.approx(0.5 * stats.chi2.sf(expected, 1))


def test_mixture_of_zero_is_one() -> None:
    p, log_p = half_mixture(np.array([0.0, 2.7055434540954, np.nan]))
    assert p[0] == 1.0
    assert p[1] == pytest.approx(0.05, rel=1e-9)
    assert log_p[1] == pytest.approx(np.log(0.05), rel=1e-9)
    assert np.isnan(p[2])


@pytest.mark.parametrize(
    ("groups", "words"),
    [
        ([0, 0, 0, 0, 0, 0], "only one clinic"),
        ([0, 1, 2, 3, 4, 5], "every clinic has a single row"),
    ],
)
def test_what_cannot_be_compared_is_refused(groups: list[int], words: str) -> None:
    made = fits(design(n=6, groups={"clinic": groups}), [1.0, 2, 4, 3, 5, 9])
    with pytest.raises(NotSupported, match=words):
        GroupF().read(made, CLINIC)


def test_groups_already_in_the_model_are_refused() -> None:
    g = np.repeat([0, 1, 2], 4)
    made = fits(design(g == 1, g == 2, groups={"clinic": g}), np.arange(12.0) ** 1.5)
    with pytest.raises(NotSupported, match="already has a coefficient for every clinic"):
        GroupF().read(made, CLINIC)


def test_curve_is_the_sorted_means_with_their_intervals() -> None:
    y = [1.0, 3.0, 4.0, 6.0, 7.0, 9.0]
    made = fits(design(n=6, groups={"clinic": ["b", "b", "a", "a", "c", "c"]}), y)
    curve = group_means(made, CLINIC)
    assert curve is not None
    assert curve.labels == ("b", "a", "c")
    assert curve.y == pytest.approx((-3.0, 0.0, 3.0))
    # Var of a mean residual = σ²(n_g − n_g²/n)/n_g² = σ²(1/2 − 1/6), σ² = MSW = 2
    half = stats.t.ppf(0.975, 3) * np.sqrt(2 * (1 / 2 - 1 / 6))
    assert curve.high == pytest.approx(tuple(m + half for m in (-3.0, 0.0, 3.0)))
    assert curve.size == (2, 2, 2)
