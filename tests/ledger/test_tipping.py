"""Where a focus interval would take in zero: one structure, places, and two structures together."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from clingstone.covariance.fits import Fits
from clingstone.ledger import tipping as module
from clingstone.ledger.entries import Ledger, Parameter, Share
from clingstone.ledger.tipping import tipping
from clingstone.structure.serial import Series
from tests.ledger import factories as make

NONE = Ledger((), (), (), (), (), (), ())


def test_tipping_point_of_a_group_is_where_the_interval_meets_zero():
    rng = np.random.default_rng(9)
    f = make.trial(rng, G=12, n=20, icc=0.05, effect=1.2)
    (tip,) = tipping(f, NONE, ("arm",))
    assert tip.value is not None
    d = f.design
    X, Z = d.Q @ d.basis.R, np.eye(12)[d.group.levels[0].codes]
    y = f.response.residual[:, 0] + d.Q @ f.response.coef[:, 0]
    V = (1 - tip.value) * np.eye(d.n) + tip.value * Z @ Z.T
    bread = np.linalg.inv(X.T @ X)
    M = np.eye(d.n) - d.Q @ d.Q.T
    scale = float(y @ M @ y) / np.trace(M @ V)
    se = np.sqrt(scale * (bread @ X.T @ V @ X @ bread)[1, 1])
    beta = float((bread @ X.T @ y)[1])
    # Satterthwaite's df from the parts of the coefficient between and within clinics, written out:
    # 12 clinics and two columns of clinics (constant, arm), 240 rows less 12 clinics and x
    a = X @ bread[:, 1]
    between = float(np.sum((Z @ np.linalg.pinv(Z) @ a) ** 2) / np.sum(a**2))
    n0 = np.trace(Z.T @ M @ Z) / 10
    parts_of_variance = between * (1 + tip.value * (n0 - 1)), (1 - between) * (1 - tip.value)
    df = sum(parts_of_variance) ** 2 / (parts_of_variance[0] ** 2 / 10 + parts_of_variance[1] ** 2 / 227)
    assert 9.9 < df < 12
    # linear between values 0.01 apart
    assert abs(beta) == pytest.approx(stats.t.isf(0.025, df) * se, rel=2e-3)
    assert f"{tip.value:.2g}" in tip.sentence


def test_tipping_point_of_a_series_is_where_the_interval_meets_zero():
    rng = np.random.default_rng(12)
    t = np.arange(80)
    f = make.fits(make.design({"day": t}, tick=t), 0.03 * t + make.ar1(rng, 1, 80, 0.2))
    (tip,) = tipping(f, NONE, ("day",))
    assert tip.value is not None
    d = f.design
    V = tip.value ** np.abs(t[:, None] - t)
    w = d.basis.contrast(np.array([0.0, 1.0]))
    M = np.eye(80) - d.Q @ d.Q.T
    scale = float(f.response.ss[0]) / np.trace(M @ V)
    se = np.sqrt(scale * w @ d.Q.T @ V @ d.Q @ w)
    assert abs(w @ f.response.coef[:, 0]) == pytest.approx(stats.t.isf(0.025, d.m) * se, rel=5e-3)


def test_tipping_point_at_irregular_times_where_a_rate_is_searched():
    """The working parameter falls as ρ rises; the same table in whole steps gives nearly the same point."""
    rng = np.random.default_rng(12)
    t = np.arange(80)
    f = make.fits(make.design({"day": t}, tick=t), 0.03 * t + make.ar1(rng, 1, 80, 0.2))
    (whole,) = tipping(f, NONE, ("day",))
    known = f.design.serial
    free = Series(known.name, known.part, known.elapsed, known.unit, 1.0, None, "irregular")
    irregular = replace(f.design, serial=free)
    g = Fits(replace(f.response, design=irregular), f.run)
    (found,) = tipping(g, NONE, ("day",))
    assert found.value == pytest.approx(whole.value, abs=0.01)


def test_no_tipping_point_is_said_in_words():
    rng = np.random.default_rng(3)
    f = make.trial(rng, effect=0.0)
    arm, x = tipping(f, NONE, ("arm", "x"))
    assert arm.value is None
    assert "without any dependence" in arm.sentence
    assert x.value is None
    assert "Not even an intraclass correlation of 0.95" in x.sentence


@pytest.mark.parametrize(("series", "length"), [(1, 80), (10, 40), (40, 8)])
def test_spline_over_the_correlation_is_the_form_worked_out_at_each(series, length, monkeypatch):
    """Slow twin: Q'KQ at all 60 values instead of 17 and a spline between them."""
    rng = np.random.default_rng(series)
    who, t = np.repeat(np.arange(series), length), np.tile(np.arange(length), series)
    x = np.cumsum(rng.standard_normal(series * length))
    f = make.fits(make.design({"x": x}, series=who, tick=t), rng.standard_normal(series * length))
    fast = module._series(f, f.components["serial"])
    monkeypatch.setattr(module, "NODES", 60)
    slow = module._series(f, f.components["serial"])
    assert np.max(np.abs(fast.mixed - slow.mixed)) < 2e-3 * np.max(np.abs(slow.mixed))
    assert np.max(np.abs(fast.trace / slow.trace - 1)) < 1e-4


def test_spline_over_the_correlation_holds_where_steps_are_unequal():
    """Eleven weighings 7 days apart and one after a day: K(ρ) = ρ^(Δ/7) written out, at every ρ."""
    day = np.array([1, 8, 15, 22, 29, 36, 43, 44, 50, 57, 64])
    who, t = np.repeat(np.arange(8), 11), np.tile(day, 8)
    rng = np.random.default_rng(44)
    f = make.fits(make.design({"day": t}, series=who, tick=t), rng.standard_normal(88))
    known = f.design.serial
    free = Series(known.name, known.part, known.elapsed, known.unit, 7.0, None, "irregular")
    f = Fits(replace(f.response, design=replace(f.design, serial=free)), f.run)
    scan, Q = module._series(f, f.components["serial"]), f.design.Q
    apart = np.where(who[:, None] == who, np.abs(t[:, None] - t), np.inf)
    for k in range(1, len(scan.s)):
        K = scan.s[k] ** (apart / 7.0)
        assert scan.mixed[k] == pytest.approx(Q.T @ K @ Q, rel=1e-2, abs=1e-2)
        assert scan.trace[k] == pytest.approx(88 - np.trace(Q.T @ K @ Q), abs=2e-2)


# ---- places --------------------------------------------------------------------------------------


def places(seed: int, S: int = 60, repeats: int = 1, effect: float = 0.12) -> Fits:
    rng = np.random.default_rng(seed)
    xy = 10 * rng.uniform(size=(S, 2))
    site = np.repeat(np.arange(S), repeats)
    x = xy[site, 0] + 0.5 * rng.standard_normal(S * repeats)
    y = effect * x + rng.standard_normal(S * repeats)
    return make.fits(make.design({"x": x}, xy=xy, site=site), y)


def sized(share: float, reach: float) -> Ledger:
    book = replace(NONE, shares=(Share("spatial", "spatial", "place", share, 0.0, 0.9),))
    return replace(book, parameters=(Parameter("spatial", "practical range", reach, 1.0, 9.0, "km"),))


def dense(f: Fits, share: float, reach: float) -> tuple[float, float]:
    """Standard error and Satterthwaite df of x at a share and a practical range, with whole matrices."""
    d = f.design
    points = d.spatial.xy[d.spatial.part.codes]
    D = np.linalg.norm(points[:, None] - points, axis=2)
    V = (1 - share) * np.eye(d.n) + share * np.exp(-3 * D / reach)  # 0.05 of the correlation at the range
    M = np.eye(d.n) - d.Q @ d.Q.T
    MV = M @ V
    w = d.basis.contrast(np.array([0.0, 1.0]))
    scale = float(f.response.ss[0]) / np.trace(MV)
    return float(np.sqrt(scale * w @ d.Q.T @ V @ d.Q @ w)), float(np.trace(MV) ** 2 / np.trace(MV @ MV))


@pytest.mark.parametrize("repeats", [1, 3])
def test_tipping_share_and_range_of_places_meet_zero(repeats):
    f = places(4, repeats=repeats, effect={1: 0.16, 3: 0.14}[repeats])
    *_, share, reach = tipping(f, sized(0.5, 2.5), ("x",))
    assert (share.parameter, reach.parameter) == ("spatial share", "practical range")
    slope = abs(float(f.design.basis.contrast(np.array([0.0, 1.0])) @ f.response.coef[:, 0]))
    for at in ((share.value, 2.5), (0.5, reach.value)):
        assert None not in at
        se, df = dense(f, *at)
        assert slope == pytest.approx(stats.t.isf(0.025, df) * se, rel=0.01)
    assert "fades over 2.5" in share.sentence
    assert "at their share of 50" in reach.sentence


def test_without_a_share_the_range_is_a_third_of_the_map():
    f = places(5, effect=0.3)
    (only,) = tipping(f, NONE, ("x",))
    assert only.parameter == "spatial share"
    assert f"{f.design.spatial.extent / 3:.2g}" in only.sentence


def test_a_field_over_places_is_the_form_written_out():
    """Q'KQ, tr MK and tr MKMK against n × n matrices."""
    f = places(6, S=20, repeats=3)
    d = f.design
    spread, one, two = module._field(f, 4.0)
    points = d.spatial.xy[d.spatial.part.codes]
    K = np.exp(-3 * np.linalg.norm(points[:, None] - points, axis=2) / 4.0)
    MK = (np.eye(d.n) - d.Q @ d.Q.T) @ K
    from clingstone.maths.matern import PRACTICAL

    assert PRACTICAL[0.5] == pytest.approx(3.0, abs=0.01)
    np.testing.assert_allclose(spread, d.Q.T @ K @ d.Q, rtol=0.01, atol=0.01)
    assert one == pytest.approx(np.trace(MK), rel=0.01)
    assert two == pytest.approx(np.trace(MK @ MK), rel=0.01)


# ---- two structures ------------------------------------------------------------------------------


def test_two_structures_together_meet_zero_along_the_border():
    rng = np.random.default_rng(21)
    barn, t = np.repeat(np.arange(12), 15), np.tile(np.arange(15), 12)
    arm = (barn % 2).astype(float)
    y = 0.5 * arm + 0.2 * rng.standard_normal(12)[barn] + make.ar1(rng, 12, 15, 0.2)
    f = make.fits(make.design({"arm": arm}, groups={"barn": barn}, series=barn, tick=t), y)
    book = replace(NONE, parameters=(Parameter("group:barn", "intraclass correlation", 0.05, 0.0, 0.3),))
    *_, both = tipping(f, book, ("arm",))
    assert both.key == "group:barn + serial"
    d, w = f.design, f.design.basis.contrast(np.array([0.0, 1.0]))
    same = (barn[:, None] == barn).astype(float)
    M = np.eye(d.n) - d.Q @ d.Q.T
    slope = abs(float(w @ f.response.coef[:, 0]))
    assert len(both.border) > 3
    for icc, rho in both.border:
        if rho == 0.0:
            continue  # the first structure is enough alone
        V = (1 - icc) * same * rho ** np.abs(t[:, None] - t) + icc * same
        scale = float(f.response.ss[0]) / np.trace(M @ V)
        se = np.sqrt(scale * w @ d.Q.T @ V @ d.Q @ w)
        df = module._freedom(d, f.components["group:barn"], w, np.array([icc]))[0]
        assert slope == pytest.approx(stats.t.isf(0.025, df) * se, rel=0.02)
    at = dict(both.border)
    assert both.value == at[0.05]
    falling = [rho for _, rho in sorted(both.border)]
    assert falling == sorted(falling, reverse=True)
