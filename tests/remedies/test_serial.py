"""Error processes along time: fading with row noise, ARMA, the two-step estimate, median-unbiased ρ."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.covariance.processes import Arma as ArmaErrors
from clingstone.covariance.processes import Fading, search
from clingstone.covariance.unbiased import unbiased
from clingstone.design.design import Term
from clingstone.maths import reml
from clingstone.needs import NotSupported
from clingstone.remedies import refit, remedy
from clingstone.remedies.praiswinsten import PraisWinsten
from clingstone.remedies.serial import Arma, Car1, half_life
from tests.remedies.cases import ar1, design, fits


def trend(n: int = 80, rho: float = 0.6, seed: int = 0):
    rng = np.random.default_rng(seed)
    X = np.column_stack([np.ones(n), np.arange(n) / n, rng.normal(size=n)])
    return X, np.arange(n), X[:, 2] + ar1(n, rho, 1, rng)[:, 0], rng


def items(found) -> dict[str, str]:
    return dict(found.account.items)


def dense_criterion(V, X, y) -> float:
    """−2ℓ_R with σ² profiled out, densely, with ln|X'V⁻¹X|."""
    n, p = X.shape
    inverse = np.linalg.inv(V)
    A = X.T @ inverse @ X
    b = np.linalg.solve(A, X.T @ inverse @ y)
    e = y - X @ b
    m = n - p
    logs = np.linalg.slogdet(V)[1] + np.linalg.slogdet(A)[1]
    return float(logs + m * (np.log(2 * np.pi * (e @ inverse @ e) / m) + 1))


# ---- car1 -----------------------------------------------------------------------------------------


def test_on_whole_steps_without_noise_it_is_ar1():
    X, tick, y, _ = trend()
    run = fits(design(X, tick=tick), y)
    one, other = refit(Car1("no"), "", run), refit(remedy("ar1"), "", run)
    for a, b in zip(one.intervals, other.intervals, strict=True):
        assert (a.estimate, a.se) == pytest.approx((b.estimate, b.se), rel=1e-5)
        assert a.df == pytest.approx(b.df, rel=2e-3)


def test_row_noise_is_found_where_it_is_and_not_where_it_is_not():
    rng = np.random.default_rng(4)
    n = 300
    X = np.column_stack([np.ones(n), rng.normal(size=n)])
    process = ar1(n, 0.9, 1, rng)[:, 0]
    noisy = refit(remedy("car1"), "", fits(design(X, tick=np.arange(n)), process + rng.normal(size=n)))
    clean = refit(remedy("car1"), "", fits(design(X, tick=np.arange(n)), process))
    assert 0.2 < float(items(noisy)["share of row noise"]) < 0.8
    assert float(items(noisy)["ρ per step"]) == pytest.approx(0.9, abs=0.08)
    assert "share of row noise" not in items(clean)
    assert float(items(clean)["likelihood ratio of row noise"].split()[0]) < 2.71


def test_each_column_of_a_batch_has_the_process_it_asks_for():
    """Row noise in some columns, the first and the last without: each as if it were alone."""
    rng = np.random.default_rng(4)
    n = 150
    of = design(np.column_stack([np.ones(n), rng.normal(size=n)]), tick=np.arange(n))
    Y = ar1(n, 0.9, 6, rng) + rng.normal(size=(n, 6)) * [0, 1, 0, 1, 1, 0]
    ready = remedy("car1").prepare(of, None)
    many = ready.fit(fits(of, Y))
    kinds = set()
    for b in range(6):
        alone = fits(of, Y[:, b])
        one = ready.fit(alone)
        kinds.add(ready.choose(alone.response).process.key)
        assert many.se[:, b] == pytest.approx(one.se[:, 0], rel=1e-5)
        assert many.df[:, b] == pytest.approx(one.df[:, 0], rel=1e-3)
    assert len(kinds) == 2


def test_replicates_of_a_visit_are_carried_and_equal_a_dense_fit():
    rng = np.random.default_rng(5)
    visit = np.sort(rng.integers(0, 30, 60))
    X = np.column_stack([np.ones(60), rng.normal(size=60)])
    y = ar1(30, 0.7, 1, rng)[visit, 0] + 0.7 * rng.normal(size=60)
    run = fits(design(X, tick=visit), y)
    object.__setattr__(run.design.serial, "ties", int(np.sum(np.diff(visit) == 0)))
    found = refit(remedy("car1"), "", run)
    process = Fading(run.design, noise=True)
    best = search(process, run.response)
    rho, ratio = process._piece.at(best.theta)
    apart = np.abs(visit[:, None] - visit)

    def at(r, lam):
        return dense_criterion(np.eye(60) + lam * r**apart, X, y)

    here = at(rho, ratio)
    gram = process.gram(best.theta, run.response)
    inner = float(reml.criterion(gram, run.design.m)[0]) + 2 * np.linalg.slogdet(run.design.basis.R)[1]
    assert inner == pytest.approx(here, abs=1e-8)
    for step in ((0.02, 1), (-0.02, 1), (0, 1.1), (0, 0.9)):
        assert at(rho + step[0], ratio * step[1]) > here
    V = np.linalg.inv(np.eye(60) + ratio * rho**apart)
    A = np.linalg.inv(X.T @ V @ X)
    b = A @ X.T @ V @ y
    s2 = (y - X @ b) @ V @ (y - X @ b) / 58
    assert [r.estimate for r in found.intervals] == pytest.approx(b)
    assert [r.se for r in found.intervals] == pytest.approx(np.sqrt(s2 * np.diag(A)))


def test_elapsed_time_decides_not_its_unit():
    rng = np.random.default_rng(6)
    t = np.cumsum(rng.exponential(size=90))
    X = np.column_stack([np.ones(90), rng.normal(size=90)])
    y = ar1(90, 0.7, 1, rng)[:, 0]
    one = refit(Car1("no"), "", fits(design(X, elapsed=t), y))
    ten = refit(Car1("no"), "", fits(design(X, elapsed=10 * t), y))
    assert ten.intervals[1].se == pytest.approx(one.intervals[1].se, rel=1e-5)
    days, tens = (float(items(f)["half of the correlation is left after"].split()[0]) for f in (one, ten))
    assert tens == pytest.approx(10 * days, rel=0.02)


def test_half_life_in_the_unit_of_the_user():
    series = design(np.ones((40, 1)), tick=np.arange(40)).serial
    assert half_life(0.5, series) == "1 day"
    assert half_life(0.25, series) == "0.5 days"
    assert half_life(-0.2, series) == ""


def test_short_series_and_ties_are_refused_with_reasons():
    X, _, y, _ = trend(12)
    with pytest.raises(NotSupported, match="longest series has 12 times"):
        refit(remedy("car1"), "", fits(design(X, tick=np.arange(12)), y))
    X, _, y, rng = trend(60)
    with pytest.raises(NotSupported, match="irregularly spaced"):
        refit(remedy("arma"), "", fits(design(X, elapsed=np.cumsum(rng.exponential(size=60))), y))


# ---- arma -----------------------------------------------------------------------------------------


def test_aicc_finds_the_order_and_keeps_ar1_when_nothing_asks_for_more():
    rng = np.random.default_rng(8)
    n = 400
    z = rng.normal(size=n + 50)
    second = np.zeros(n + 50)
    for t in range(2, n + 50):
        second[t] = 0.4 * second[t - 1] + 0.4 * second[t - 2] + z[t]
    X = np.column_stack([np.ones(n), rng.normal(size=n)])
    made = design(X, tick=np.arange(n))
    found = refit(remedy("arma"), "", fits(made, second[50:]))
    assert "AR(2)" in found.account.estimator
    assert float(items(found)["φ2"]) == pytest.approx(0.4, abs=0.12)
    plain = refit(remedy("arma"), "", fits(made, ar1(n, 0.6, 1, rng)[:, 0]))
    assert "AR(1)" in plain.account.estimator
    assert "AR(1) +0.0" in items(plain)["AICc against the chosen order"]


def test_missing_steps_equal_the_dense_likelihood():
    X, _, y, rng = trend(70, seed=9)
    tick = np.sort(rng.choice(90, 70, replace=False))
    run = fits(design(X, tick=tick), y)
    process = ArmaErrors(run.design, 1, 1)
    best = search(process, run.response)
    phi, theta = process.coefficients(best.theta)
    f, q = float(phi[0]), float(theta[0])
    lag = np.abs(tick[:, None] - tick)
    g0, g1 = (1 + 2 * f * q + q**2) / (1 - f**2), 0.0
    g1 = f * g0 + q
    V = np.where(lag == 0, g0, g1 * f ** np.maximum(lag - 1, 0))
    inner = best.value + 2 * np.linalg.slogdet(run.design.basis.R)[1]
    assert inner == pytest.approx(dense_criterion(V, X, y), abs=1e-7)


def test_joint_test_of_a_factor_and_many_columns():
    rng = np.random.default_rng(10)
    n = 90
    level = np.arange(n) % 3
    X = np.column_stack([np.ones(n), level == 1, level == 2]).astype(float)
    terms = (Term("constant", (0,), "constant"), Term("arm", (1, 2), "factor", focus=True))
    made = design(X, tick=np.arange(n), terms=terms)
    Y = ar1(n, 0.5, 3, rng)
    for made_of in (Car1("no"), Arma(((1, 0),))):
        whole = fits(made, Y)
        many = made_of.prepare(made, None).fit(whole)
        single = refit(made_of, "", fits(made, Y[:, 1]))
        assert many.se[:, 1] == pytest.approx([r.se for r in single.intervals], rel=1e-5)
        assert many.joint["arm"][0][1] == pytest.approx(single.terms[0].F, rel=1e-5)


@pytest.mark.parametrize(("n", "rho", "least"), [(40, 0.3, 0.90), (100, 0.6, 0.925), (100, 0.9, 0.85)])
def test_coverage_of_a_trend_in_short_series(n, rho, least):
    """Satterthwaite intervals of a trend; ordinary ones miss far more often."""
    rng = np.random.default_rng(11)
    X = np.column_stack([np.ones(n), np.arange(n) / n])
    B = 300
    run = fits(design(X, tick=np.arange(n)), ar1(n, rho, B, rng))
    shown = Car1("no").prepare(run.design, None).fit(run)
    naive = remedy("ordinary").prepare(run.design, None).fit(run)
    covered, before = (float(np.mean((r.low[1] < 0) & (r.high[1] > 0))) for r in (shown, naive))
    assert covered > least - 0.03  # MCSE about 0.014
    assert covered > before + 0.02


# ---- two steps ------------------------------------------------------------------------------------


def test_two_steps_equal_an_obvious_loop():
    X, tick, y, _ = trend(60, seed=12)
    found = refit(PraisWinsten(), "", fits(design(X, tick=tick), y))
    rho, b = 0.0, np.linalg.lstsq(X, y, rcond=None)[0]
    for _ in range(200):
        e = y - X @ b
        rho = e[1:] @ e[:-1] / (e[:-1] @ e[:-1])
        first = np.sqrt(1 - rho**2)
        XX = np.vstack([first * X[:1], X[1:] - rho * X[:-1]])
        yy = np.r_[first * y[0], y[1:] - rho * y[:-1]]
        b = np.linalg.lstsq(XX, yy, rcond=None)[0]
    s2 = np.sum((yy - XX @ b) ** 2) / 57
    assert [r.estimate for r in found.intervals] == pytest.approx(b, rel=1e-8)
    assert [r.se for r in found.intervals] == pytest.approx(np.sqrt(s2 * np.diag(np.linalg.inv(XX.T @ XX))))
    assert items(found)["ρ per step"] == f"{rho:.6g}"
    assert any("Prais–Winsten" in words for words, _ in remedy("ar1").conventions())


# ---- median-unbiased ρ ----------------------------------------------------------------------------


@pytest.mark.slow
def test_median_unbiased_correlation_is_so_and_its_interval_covers():
    """20 rows with a trend and ρ = 0.7: residual correlations are far too low, the exact law is not."""
    rng = np.random.default_rng(13)
    n, B, rho = 20, 300, 0.7
    made = design(np.column_stack([np.ones(n), np.arange(n)]), tick=np.arange(n))
    run = fits(made, ar1(n, rho, B, rng))
    found = [unbiased(run.response.column(b), 0.9) for b in range(B)]
    middle = np.array([f.rho for f in found])
    assert float(np.mean(middle < rho)) == pytest.approx(0.5, abs=0.09)  # three standard errors of a median
    covered = float(np.mean([f.low < rho < f.high for f in found]))
    assert covered == pytest.approx(0.9, abs=0.05)
    e = run.response.residual
    plain = np.einsum("ij,ij->j", e[1:], e[:-1]) / np.einsum("ij,ij->j", e, e)
    assert float(np.mean(plain < rho)) > 0.9


def test_where_it_does_not_apply_nothing_is_said():
    rng = np.random.default_rng(14)
    X = np.ones((40, 1))
    times = np.cumsum(rng.exponential(size=40))
    assert unbiased(fits(design(X, elapsed=times), rng.normal(size=40)).response, 0.95) is None
    long = fits(design(np.ones((400, 1)), tick=np.arange(400)), rng.normal(size=400))
    assert unbiased(long.response, 0.95) is None
