"""Rules that read the refits, and the remedies that are second opinions or other questions."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.advice.choose import Score, Scores, settle
from clingstone.advice.pick import same, serves
from clingstone.advice.shortlist import LEVELS, PLAIN, shortlist_for
from clingstone.ledger.ledger import Inflation
from tests.advice.synthetic import facts, ledger, refit, shortlist
from tests.advice.test_choose import ALL, decide, trial
from tests.advice.test_repair import walk
from tests.ledger import factories as make

WITHIN = {"groups": 6, "effective_clusters": 6.0, "focus_at_group_level": False}


def without(*names: str):
    return tuple(r for r in ALL if r.remedy not in names)


def test_few_treated_groups_by_lot_are_drawn_again():
    values = {"groups": 20, "groups_in_the_smaller_arm": 2, "assignment_can_be_redrawn": True}
    found = trial(**values, assigned_level="clinic")
    advice = decide(found, (*ALL, refit("randomisation", "clinic", 12.0)))
    assert (advice.state, advice.remedy) == ("supported with caveat", "randomisation")
    assert "few-treated-by-lot" in {r.rule for r in advice.because}
    assert "few-treated-redrawn" in {c.rule for c in advice.cautions}
    assert decide(trial(**{**values, "assignment_can_be_redrawn": False})).state == "not correctable"


def test_slopes_that_differ_outweigh_a_narrow_rehearsal():
    wide = (*without("cluster-robust"), refit("cluster-robust", "clinic", 20.0, 5.0))
    scores = Scores(
        (
            Score("mixed-intercept", "clinic", 0.95, 0.007, 1.0),
            Score("cluster-robust", "clinic", 0.95, 0.007, 2.0),
        )
    )
    for table in (None, scores):
        advice = decide(trial(**WITHIN), wide, table)
        assert advice.remedy == "cluster-robust"
        assert "slopes-differ" in {r.rule for r in advice.because}
    # 9.6 against 9.2: no sign of slopes, and the rehearsal decides.
    assert decide(trial(**WITHIN), ALL, scores).remedy == "mixed-intercept"


def test_slopes_that_differ_in_few_groups_have_a_model_of_their_own():
    wide = (*without("cluster-robust"), refit("cluster-robust", "clinic", 20.0, 5.0))
    slope = refit("mixed-slope", "x by clinic", 18.0, 5.0)
    assert decide(trial(**WITHIN), (*wide, slope)).remedy == "mixed-slope"
    lost = refit("mixed-slope", "x by clinic", 18.0, 5.0, boundary=True)
    assert decide(trial(**WITHIN), (*wide, lost)).remedy == "cluster-robust"


def test_two_few_df_for_the_robust_refit_leave_the_model_with_a_caution():
    wide = (*without("cluster-robust"), refit("cluster-robust", "clinic", 20.0, 3.0))
    advice = decide(trial(**WITHIN), wide)
    assert advice.remedy == "mixed-intercept"
    assert "slopes-may-differ" in {c.rule for c in advice.cautions}


def test_a_much_wider_jackknife_is_said():
    found = trial(groups=60, effective_clusters=45.0)
    base = decide(found, (*ALL, refit("cluster-jackknife", "clinic", 9.9)))
    wider = decide(found, (*ALL, refit("cluster-jackknife", "clinic", 14.0)))
    assert base.remedy == wider.remedy == "cluster-robust"
    assert "second-opinion-wider" not in {c.rule for c in base.cautions}
    (said,) = [c.sentence for c in wider.cautions if c.rule == "second-opinion-wider"]
    assert "1.5 times as wide" in said
    assert "arm" in said


def test_a_variance_of_zero_that_the_design_fixes_is_a_caveat():
    from dataclasses import replace

    book = ledger(group="unclear")
    book = replace(book, shares=(replace(book.shares[0], share=0.0, low=0.0), *book.shares[1:]))
    values = {"groups": 12, "effective_clusters": 11.0, "focus_at_group_level": True, "largest_factor": 1.9}
    refits = (*without("mixed-intercept"), refit("mixed-intercept", "clinic", 9.2, boundary=True))
    scores = Scores(
        (
            Score("mixed-intercept", "clinic", 0.96, 0.007, 1.3),
            Score("cluster-robust", "clinic", 0.95, 0.007, 1.0),
        )
    )
    for table in (None, scores):
        advice = decide(facts(book, **values), refits, table)
        assert (advice.state, advice.remedy) == ("supported with caveat", "mixed-intercept")
        assert advice.because[-1].rule == "variance-at-zero"
    (said,) = [c.sentence for c in advice.cautions if c.rule == "group-variance-at-zero"]
    assert "1.9 times" in said
    assert "at-its-bound" not in {c.rule for c in advice.cautions}


def test_short_series_in_groups_are_clusters():
    """Four visits are too few for a correlation in time; 27 subjects are enough to be clusters."""
    values = {
        "groups": 27,
        "effective_clusters": 27.0,
        "focus_at_group_level": True,
        "rows_in_the_longest_series": 4,
        "series": 27,
        "series_within_groups": True,
        "series_can_be_clusters": True,
        "serial_estimable": False,
    }
    book = ledger(group="present", serial="present")
    advice = decide(facts(book, **values))
    assert (advice.state, advice.remedy, advice.at) == ("supported", "cluster-robust", "clinic")
    few = {**values, "groups": 9, "effective_clusters": 8.0, "series": 9}
    assert decide(facts(book, **few)).because[-1].rule == "short-series-in-groups"
    lone = {**values, "series_can_be_clusters": False, "series_within_groups": False}
    assert decide(facts(book, **lone)).state == "not correctable"


def test_crossed_levels_with_many_groups_each():
    values = {
        **{"groups": 40, "effective_clusters": 35.0, "focus_at_group_level": False},
        **{"crossed_levels_to_cover": 2, "groups_of_the_smallest_crossed_level": 30},
        "crossed_levels": "a + b",
    }
    both = refit("multiway-cluster", "a + b", 9.0)
    assert decide(facts(ledger(group="present"), **values), (*ALL, both)).remedy == "multiway-cluster"
    values["groups_of_the_smallest_crossed_level"] = 12
    assert decide(facts(ledger(group="present"), **values), (*ALL, both)).remedy == "cluster-robust"


def test_group_means_stand_in_for_a_mixed_model_that_could_not_be_fitted():
    refits = (*without("mixed-intercept"), refit("group-means", "clinic", 9.4, 10.0))
    assert decide(trial(), refits).remedy == "group-means"


def test_another_order_is_said_when_it_differs():
    values = {"rows_in_the_longest_series": 50, "series": 1, "regular_times": True}
    found = facts(ledger(serial="present"), **values)
    for width, rules in ((6.0, set()), (8.0, {"another-order"})):
        advice = decide(found, (*ALL, refit("arma", "", width)))
        assert advice.remedy == ("arma" if rules else "ar1")
        assert {c.rule for c in advice.cautions} & {"another-order"} == rules
        # With the numbers of ar1 it is no alternative of its own; advised, it is none either.
        assert "arma" not in {c.remedy for c in advice.alternatives}


def test_only_a_rule_changes_the_question():
    """Neither the fallback nor a rehearsal advises an effect within groups for a pooled one."""
    found = trial(focus_at_group_level=False)
    refits = (ALL[0], refit("fixed-effects", "clinic", 3.0, estimand="within"))
    assert decide(found, refits).state == "not correctable"
    scores = Scores((Score("fixed-effects", "clinic", 0.95, 0.007, 0.5),))
    assert decide(found, refits, scores).remedy == ""


def test_of_equal_refits_the_plainest_name_is_advised():
    found = facts(ledger(serial="present"), rows_in_the_longest_series=120, series=1, regular_times=True)
    refits = (ALL[0], refit("ar1", "", 6.0), refit("car1", "", 6.0))
    scores = Scores((Score("car1", "", 0.95, 0.007, 1.5),))
    assert decide(found, refits, scores).remedy == "ar1"


def test_second_opinions_are_advised_only_where_no_other_held():
    refits = (*ALL, refit("cluster-jackknife", "clinic", 8.0))
    both = [
        Score("mixed-intercept", "clinic", 0.95, 0.007, 2.3),
        Score("cluster-jackknife", "clinic", 0.95, 0.007, 2.0),
    ]
    assert decide(trial(), refits, Scores(tuple(both))).remedy == "mixed-intercept"
    both[0] = Score("mixed-intercept", "clinic", 0.80, 0.007, 2.3)
    assert decide(trial(), refits, Scores(tuple(both))).remedy == "cluster-jackknife"


def test_an_estimate_that_moves_is_said():
    from dataclasses import replace

    row = refit("mixed-intercept", "clinic", 9.2).intervals[0]
    moved = replace(
        refit("mixed-intercept", "clinic", 9.2), intervals=(replace(row, estimate=row.estimate + 3),)
    )
    advice = decide(trial(), (*without("mixed-intercept"), moved))
    assert "estimate-moves" in {c.rule for c in advice.cautions}
    assert "estimate-moves" not in {c.rule for c in decide(trial()).cautions}


def test_a_move_that_weighting_alone_explains_is_none():
    """An ordinary estimate three times as uncertain as it says may well lie three of its errors away."""
    from dataclasses import replace

    row = refit("mixed-intercept", "clinic", 2.0).intervals[0]
    near = replace(
        refit("mixed-intercept", "clinic", 2.0), intervals=(replace(row, estimate=row.estimate + 3),)
    )

    def told(factor: float) -> bool:
        book = replace(trial().ledger, inflation=(Inflation(row.term, "total", factor, factor, factor),))
        advice = decide(replace(trial(), ledger=book), (*without("mixed-intercept"), near))
        return "estimate-moves" in {c.rule for c in advice.cautions}

    assert told(1.0)
    assert not told(3.0)


def test_same_and_serves():
    one = refit("ar1", "", 6.0)
    assert same(one, refit("car1", "", 6.0))
    assert not same(one, refit("car1", "", 6.1))
    found = facts(ledger(serial="present"))
    assert serves(one, found)
    from dataclasses import replace

    between = replace(one, intervals=(replace(one.intervals[0], term="arm [between]"),))
    assert not serves(between, found)
    assert not serves(between, found, every=False)


# ---- the shortlist on made data ---------------------------------------------------------------------


@pytest.fixture(scope="module")
def nested():
    rng = np.random.default_rng(3)
    farm, pen = np.repeat(np.arange(14), 20), np.repeat(np.arange(56), 5)
    y = rng.standard_normal(14)[farm] + 0.5 * rng.standard_normal(56)[pen] + rng.standard_normal(280)
    columns = {"x": rng.standard_normal(280)}
    return walk(
        make.fits(make.design(columns, groups={"farm": farm, "farm/pen": pen}, arrangement="nested"), y)
    )


def test_second_opinions_are_refitted_at_one_level(nested):
    found, short, refits, _ = nested
    by_id: dict[str, list[str]] = {}
    for choice in short.candidates:
        by_id.setdefault(choice.remedy, []).append(choice.at)
    for remedy, levels in by_id.items():
        assert len(levels) <= (LEVELS if remedy in PLAIN else 1), remedy
    assert by_id["cluster-robust"] == ["farm", "farm/pen"]
    assert by_id["cluster-jackknife"] == [found.word("group level")]
    assert len(refits) <= 20


def test_a_remedy_that_serves_no_focus_row_is_refused_with_the_reason():
    clinic = np.repeat(np.arange(12), 20)
    rng = np.random.default_rng(1)
    design = make.design({"arm": clinic % 2}, groups={"clinic": clinic}, assigned={"arm": "clinic"})
    fits = make.fits(design, rng.standard_normal(12)[clinic] + rng.standard_normal(240))
    found, short, refits, advice = walk(fits)
    assert not {"fixed-effects", "within-between", "group-t"} & {c.remedy for c in short.candidates}
    assert {"group-means", "randomisation"} <= {r.remedy for r in refits}
    assert len({r[:2] for r in advice.refused}) == len(advice.refused)
    assert shortlist_for(found, fits).candidates == short.candidates


def test_an_empty_shortlist_settles():
    found = facts(ledger(group="present"), groups=12, effective_clusters=11.0, focus_at_group_level=True)
    assert settle(shortlist(found, ()), found, ()).state == "not correctable"


def test_at_a_variance_of_zero_the_random_intercept_holds_better_than_the_robust_interval():
    """Both are too short there, by the same chance; the rule names the one that is less so.

    8 groups of unequal size, intraclass correlation 1/3, a group-level column; of 3,000 columns of y those
    with a variance estimated at zero. Fixed seed; the difference of the two coverages is about 3 of its
    Monte-Carlo errors, taken over the same columns.
    """
    from clingstone.covariance.fits import Fits
    from clingstone.design.response import Response
    from clingstone.remedies import remedy
    from clingstone.remedies.refit import at as set_at
    from clingstone.run import Run, Settings

    rng = np.random.default_rng(3)
    sizes = np.maximum(2, (10 * np.exp(rng.normal(0, 0.7, 8))).astype(int))
    group = np.repeat(np.arange(8), sizes)
    design = make.design({"arm": group % 2}, groups={"clinic": group})
    Y = np.sqrt(1 / 3) * rng.standard_normal((8, 3000))[group]
    Y = Y + np.sqrt(2 / 3) * rng.standard_normal((len(group), 3000))
    fits = Fits(Response.of(design, Y), Run(Settings()))
    zero = fits[{"group:clinic"}].variances["group:clinic"] <= 0
    assert zero.sum() > 50
    held = {}
    for id_ in ("mixed-intercept", "cluster-robust"):
        ready = set_at(remedy(id_), "clinic", fits)
        found = ready.prepare(design, ready.working(fits)).fit(fits)
        held[id_] = (found.low[1] <= 0) & (found.high[1] >= 0)
        assert held[id_].mean() > 0.91  # over all columns both are near 95 %
    mixed, robust = (held[k][zero].mean() for k in ("mixed-intercept", "cluster-robust"))
    assert robust < mixed < 0.9
