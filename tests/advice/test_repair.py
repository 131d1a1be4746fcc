"""The mean repaired: which structures go, which stay, and which remedy serves what stays."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from clingstone.advice.choose import settle, shortlist_for
from clingstone.advice.facts import facts
from clingstone.advice.mean import Missing, missing_part
from clingstone.advice.structures import covered, needed, reach, subject
from clingstone.covariance.fits import Fits
from clingstone.evidence import TESTS, gather
from clingstone.ledger.ledger import Standing, judged, weigh
from clingstone.remedies import remedy
from clingstone.remedies.refit import at as set_at
from clingstone.remedies.refit import refit as run_remedy
from clingstone.run import one_thread
from tests.advice import synthetic
from tests.ledger import factories as make


def walk(fits: Fits):
    with one_thread():
        evidence = gather(fits)
        found = facts(fits, evidence, weigh(fits, evidence))
        short = shortlist_for(found, fits)
        refits = short.refit(fits)
        return found, short, refits, settle(short, found, refits)


def growth(seed: int, subjects: int = 40, times: int = 6, bend: float = 4.0, sd: float = 0.7):
    """Subjects with their own level, measured over a bent time course; errors independent in time."""
    rng = np.random.default_rng(seed)
    who, t = np.repeat(np.arange(subjects), times), np.tile(np.arange(times), subjects)
    twin = (rng.random(subjects) < 0.5).astype(float)[who]
    own = sd * rng.standard_normal(subjects)[who]
    y = 2 * t - bend * (t / (times - 1)) ** 2 + own + 0.5 * rng.standard_normal(subjects * times)
    return who, t, twin, y


def grown(seed: int, **more) -> Fits:
    who, t, twin, y = growth(seed, **more)
    columns = {"t": t, "twin": twin}
    return make.fits(make.design(columns, groups={"lamb": who}, series=who, tick=t), y)


def test_a_missed_curve_that_hid_the_subjects():
    """Order in time is only the curve; the subjects show once it is in, and are corrected for."""
    found, _short, _refits, advice = walk(grown(1))
    assert found.missing is not None
    assert advice.state == "mean first"
    assert (advice.remedy, advice.at) == ("repaired-mean", "t")
    assert advice.structures == {"group"}
    assert advice.repair is not None
    assert advice.repair.remedy in ("mixed-intercept", "cluster-robust")
    assert advice.levels == ("lamb",)
    assert "rows of one lamb" in advice.headline
    assert "no longer hang together" in advice.headline
    assert "curve in t" in advice.headline
    assert {r.rule for r in advice.because} >= {"mean-then-dependence"}
    assert "chosen-after-looking" in {c.rule for c in advice.cautions}


def test_the_repaired_refit_is_the_inner_remedy_on_the_longer_model():
    found, short, refits, _advice = walk(grown(1))
    repaired = next(r for r in refits if r.remedy == "repaired-mean")
    inner, _ = short.inner
    alone = run_remedy(remedy(inner.remedy), inner.at, found.missing.again)
    ordinary = next(r for r in refits if r.remedy == "ordinary")
    for row in repaired.intervals:
        twin = alone.get(row.term)
        assert (row.low, row.high, row.df) == (twin.low, twin.high, twin.df)
    for term in ("t", "twin"):
        assert repaired.get(term).se_ratio == pytest.approx(repaired.get(term).se / ordinary.get(term).se)
    assert repaired.covers == alone.covers
    assert repaired.name.endswith("with curve in t")


def test_the_part_has_its_own_columns_and_never_enters_the_focus():
    found, _, _, _ = walk(grown(1))
    names = [t.name for t in found.missing.again.design.terms if t.focus]
    assert names == ["t", "twin"]
    assert found.after.focus == found.focus == ("t", "twin")


def bent(seed: int, n: int):
    """A covariate that is autocorrelated (0.7) and bends the mean; independent errors."""
    rng = np.random.default_rng(seed)
    x = make.ar1(rng, 1, n, 0.7)
    return make.fits(make.design({"x": x}, tick=np.arange(n)), 1.2 * x**2 + rng.standard_normal(n))


def test_nothing_left_is_the_ordinary_fit_of_the_longer_model():
    """A covariate that moves from time to time: one as smooth as a trend would only be doubted."""
    _, short, _, advice = walk(bent(2, 400))
    assert (advice.state, advice.remedy, short.inner[0].remedy) == ("mean first", "repaired-mean", "ordinary")
    assert advice.repair.goes == ("day",)
    assert advice.repair.stays == advice.repair.appears == ()
    assert "what is left could not widen a focus interval" in advice.headline
    assert advice.levels == ()


def test_what_may_be_left_is_guarded_against():
    """150 times: with the curve in, no order is seen, yet its upper end could widen the interval."""
    _, short, _, advice = walk(bent(2, 150))
    assert (advice.state, advice.mean_in_doubt) == ("mean first", True)
    assert advice.protected == {"serial"}
    assert short.inner[0].remedy == "ar1"
    assert "after-the-repair" in {c.rule for c in advice.cautions}


def test_a_dependence_that_stays_whole_keeps_its_remedy_with_the_repaired_refit_beside_it():
    rng = np.random.default_rng(6)
    t = np.arange(400)
    x = rng.standard_normal(400)
    y = x**2 + 1.5 * make.ar1(rng, 1, 400, 0.8)
    _, short, _refits, advice = walk(make.fits(make.design({"x": x}, tick=t), y))
    assert (advice.state, advice.remedy) == ("supported with caveat", "hac")
    assert short.inner[0].remedy == "ar1"
    assert "repaired-mean" in {c.remedy for c in advice.alternatives}
    assert advice.repair.stays == ("day",)


def test_independent_rows_with_a_straight_mean_are_seldom_sent_to_the_mean():
    """Size: without dependence a curve has to show at 1 %; of 60 columns at most 3 do (tail 0.003)."""
    rng = np.random.default_rng(20)
    x, sent = rng.standard_normal(80), 0
    design = make.design({"x": x}, groups={"clinic": np.repeat(np.arange(16), 5)})
    tests = tuple(t for t in TESTS if t.primary or t.id == "functional-form")
    for _ in range(60):
        fits = make.fits(design, rng.standard_normal(80))
        evidence = gather(fits, tests)
        missing = missing_part(fits, evidence, judged(fits, evidence, ("x",)))
        sent += missing is not None and missing.p < 0.01
    assert sent <= 3


def test_what_nothing_can_correct_after_the_repair_is_said():
    """Three groups with a group-level focus: the curve goes in, the groups stay beyond correction."""
    book = synthetic.ledger(group="present", serial="present")
    after = synthetic.ledger(group="present", serial="not detected")
    missing = Missing(
        "curve in dose", "functional-form", "dose", True, goes=("day",), stays=("clinic",), left="…"
    )
    values = {"groups": 3, "focus_at_group_level": True}
    found = synthetic.facts(book, missing, **values)
    found = replace(found, after=synthetic.facts(after, missing, **values))
    advice = settle(synthetic.shortlist(found, ()), found, ())
    assert (advice.state, advice.remedy) == ("not correctable", "")
    assert advice.because[0].rule == "too-few-groups"


# ---- what has to be covered ------------------------------------------------------------------------


def standing(verdict: str, **more) -> Standing:
    return Standing("group", "group:clinic", "clinic", verdict, 0.4, float("nan"), (), "", **more)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("one", "wanted"),
    [
        (standing("present"), True),
        (standing("not detected"), False),
        (standing("not detected", fixed=True), True),
        (standing("not applicable", fixed=True), False),
        (standing("unclear", matters=True, widens=True), True),
        (standing("unclear", matters=True, widens=False), False),  # could only narrow
        (replace(standing("unclear", matters=True), p_alone=0.001), False),  # another explains it
    ],
)
def test_covered(one, wanted):
    assert covered(one) is wanted


def test_reach_of_clusters_follows_the_nesting():
    rng = np.random.default_rng(0)
    farm, pen = np.repeat(np.arange(8), 12), np.repeat(np.arange(24), 4)
    design = make.design(
        {"x": rng.standard_normal(96)}, groups={"farm": farm, "farm/pen": pen}, arrangement="nested"
    )
    fits = make.fits(design, rng.standard_normal(96))

    def of(id_: str, level: str) -> frozenset[str]:
        return reach(set_at(remedy(id_), level, fits), fits)

    assert of("cluster-robust", "farm") == {"group:farm", "group:farm/pen"}
    assert of("cluster-robust", "farm/pen") == {"group:farm/pen"}
    assert of("mixed-intercept", "farm") == {"group:farm"}
    assert of("mixed-intercept", "farm + farm/pen") == {"group:farm", "group:farm/pen"}
    assert of("ordinary", "") == frozenset()


def test_alternatives_cover_every_level_that_has_to_be_covered():
    """Farms differ: clustering by pen leaves the farms out and is no alternative."""
    rng = np.random.default_rng(3)
    farm, pen = np.repeat(np.arange(14), 20), np.repeat(np.arange(56), 5)
    y = rng.standard_normal(14)[farm] + 0.5 * rng.standard_normal(56)[pen] + rng.standard_normal(280)
    design = make.design(
        {"x": rng.standard_normal(14)[farm]}, groups={"farm": farm, "farm/pen": pen}, arrangement="nested"
    )
    found, _, _, advice = walk(make.fits(design, y))
    assert "group:farm" in needed(found.ledger)
    pairs = {(c.remedy, c.at) for c in advice.alternatives}
    assert ("cluster-robust", "farm") in pairs | {(advice.remedy, advice.at)}
    assert ("cluster-robust", "farm/pen") not in pairs


def test_of_two_identical_fits_one_is_made():
    """Places with repeats: spatial errors with a place intercept, and everything together, are one fit."""
    rng = np.random.default_rng(4)
    place = np.repeat(np.arange(40), 3)
    xy = rng.uniform(size=(40, 2))
    D = np.linalg.norm(xy[:, None] - xy, axis=2)
    field = np.linalg.cholesky(np.exp(-D / 0.1) + 1e-9 * np.eye(40)) @ rng.standard_normal(40)
    y = field[place] + 0.5 * rng.standard_normal(40)[place] + 0.5 * rng.standard_normal(120)
    x = rng.standard_normal(40)[place]
    design = make.design({"x": x}, groups={"well": place}, xy=xy, site=place)
    _found, short, refits, _advice = walk(make.fits(design, y))
    made = [r.remedy for r in refits]
    assert "joint" in made
    assert "spatial-gls" not in made
    assert short.twins == {"spatial-gls": "joint"}


def test_levels_alone_need_no_joint_refit_beside_their_intercepts():
    rng = np.random.default_rng(0)
    farm, pen = np.repeat(np.arange(8), 12), np.repeat(np.arange(24), 4)
    design = make.design(
        {"x": rng.standard_normal(96)}, groups={"farm": farm, "farm/pen": pen}, arrangement="nested"
    )
    _, _short, refits, _ = walk(make.fits(design, rng.standard_normal(96)))
    assert "joint" not in {r.remedy for r in refits}
    assert ("mixed-intercept", "farm + farm/pen") in {(r.remedy, r.at) for r in refits}


def test_subjects_of_sentences():
    assert subject(standing("present")) == "rows of one clinic"
    assert subject(replace(standing("present"), label="farm/pen")) == "rows of one pen"
    assert subject(replace(standing("present"), key="serial")) == "rows that follow each other in time"
    assert subject(replace(standing("present"), key="spatial")) == "near places"


def test_a_repair_with_a_robust_covariance_is_not_told_to_assume_equal_spread():
    """A curve and a spread that grows with x, no structure declared: what is behind the repair counts."""
    rng = np.random.default_rng(4)
    x = rng.uniform(0, 3, 300)
    y = x + 0.8 * x**2 + (0.2 + x) * rng.standard_normal(300)
    _, short, _refits, advice = walk(make.fits(make.design({"x": x}), y))
    assert (advice.state, advice.remedy) == ("mean first", "repaired-mean")
    assert short.inner[0].remedy == "heteroscedasticity-robust"
    assert "unequal-variances" not in {c.rule for c in advice.cautions}
    assert "no dependence between rows could be looked for" in advice.headline
