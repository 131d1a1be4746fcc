"""The last step on facts made by hand: states, preferences, fallbacks, words."""

from __future__ import annotations

import math

import pytest

from clingstone.advice.choose import Score, Scores, settle
from clingstone.advice.entries import Advice
from clingstone.advice.mean import Missing
from tests.advice.synthetic import facts, ledger, refit, shortlist

ALL = (
    refit("ordinary"),
    refit("heteroscedasticity-robust"),
    refit("cluster-robust", "clinic", 9.6),
    refit("mixed-intercept", "clinic", 9.2),
    refit("ar1", "", 6.0),
    refit("hac", "", 6.2),
    refit("spatial-gls", "", 7.0),
    refit("joint", "", 10.0),
)


def decide(found, refits=ALL, scores=None) -> Advice:
    return settle(shortlist(found, refits), found, refits, scores)


def trial(**more):
    values = {
        "groups": 12,
        "effective_clusters": 11.0,
        "focus_at_group_level": True,
        "groups_in_the_smaller_arm": 6,
    }
    return facts(ledger(group="present"), **{**values, **more})


def test_few_groups_and_a_group_level_focus():
    advice = decide(trial())
    assert (advice.state, advice.remedy, advice.at) == ("supported", "mixed-intercept", "clinic")
    assert ("cluster-robust", "clinic") in [(c.remedy, c.at) for c in advice.alternatives]
    assert advice.structures == {"group"}
    assert advice.levels == ("clinic",)
    assert "The rows of one clinic hang together: they share 18\u00a0% (6 to 41\u00a0%)" in advice.headline
    assert (
        "It matters for arm: the advised interval is 2.3 times as wide as the ordinary one" in advice.headline
    )
    (because,) = advice.because
    assert because.rule == "few-groups"
    assert ("groups", "12") in because.facts
    assert "12 groups" in because.sentence


@pytest.mark.parametrize(
    ("values", "remedy"),
    [
        ({"groups": 60, "effective_clusters": 45.0}, "cluster-robust"),
        ({"groups": 60, "effective_clusters": 6.0}, "mixed-intercept"),
        ({"focus_at_group_level": False}, "cluster-robust"),
        ({"focus_at_group_level": False, "effective_clusters": 4.0}, "cluster-robust"),
    ],
)
def test_which_group_remedy(values, remedy):
    assert decide(trial(**values)).remedy == remedy


@pytest.mark.parametrize(
    ("values", "remedy", "state"),
    [
        ({"rows_in_the_longest_series": 120, "series": 1, "regular_times": True}, "ar1", "supported"),
        (
            {"rows_in_the_longest_series": 30, "series": 1, "regular_times": True},
            "ar1",
            "supported with caveat",
        ),
        ({"rows_in_the_longest_series": 400, "series": 1, "regular_times": True}, "ar1", "supported"),
        (
            {
                "rows_in_the_longest_series": 200,
                "series": 1,
                "regular_times": True,
                "focus_smooth_in_time": True,
            },
            "hac",
            "supported",
        ),
        (
            {
                "rows_in_the_longest_series": 400,
                "series": 1,
                "regular_times": True,
                "focus_smooth_in_time": True,
            },
            "ar1",
            "supported",
        ),
        (
            {
                "rows_in_the_longest_series": 70,
                "series": 1,
                "regular_times": True,
                "first_order_does_not_fit": True,
            },
            "hac",
            "supported",
        ),
    ],
)
def test_one_series(values, remedy, state):
    advice = decide(facts(ledger(serial="present"), **values))
    assert (advice.remedy, advice.state) == (remedy, state)
    assert "correlation 0.60 (0.40 to 0.75) per day, half of it gone after 1.4" in advice.headline


def test_many_short_series_are_clusters():
    found = facts(
        ledger(group="present", serial="present"),
        groups=40,
        effective_clusters=35.0,
        rows_in_the_longest_series=8,
        series=40,
        series_within_groups=True,
        focus_at_group_level=True,
    )
    advice = decide(found)
    assert (advice.remedy, advice.because[-1].rule) == ("cluster-robust", "many-short-series")


def test_few_long_series_in_groups_need_a_joint_model():
    found = facts(
        ledger(group="present", serial="present"),
        groups=8,
        effective_clusters=7.0,
        rows_in_the_longest_series=60,
        series=8,
        series_within_groups=True,
        focus_at_group_level=True,
    )
    advice = decide(found)
    assert advice.remedy == "joint"
    assert advice.levels == ("clinic", "series")


def test_places():
    good = facts(ledger(spatial="present"), sites=80, range_over_extent=0.2)
    assert (decide(good).remedy, decide(good).state) == ("spatial-gls", "supported")
    few = facts(ledger(spatial="present"), sites=30, range_over_extent=0.2)
    assert decide(few).state == "supported with caveat"
    wide = decide(facts(ledger(spatial="present"), sites=80, range_over_extent=0.62))
    assert (wide.remedy, wide.state) == ("spatial-gls", "supported with caveat")
    assert any("only a handful of places" in c.sentence for c in wide.cautions)
    assert "hardly more than one" not in " ".join([wide.headline, *(c.sentence for c in wide.cautions)])
    far = facts(ledger(spatial="present"), sites=80, range_over_extent=1.2)
    advice = decide(far)
    assert (advice.state, advice.remedy, advice.alternatives) == ("not correctable", "", ())
    assert advice.refused[0][2].startswith("Needed: sites over an area")
    assert advice.headline.endswith("These data cannot carry a correction.")
    assert advice.because[0].sentence.endswith("the map holds hardly more than one independent place.")


def test_nothing_found_says_what_could_have_been_seen():
    advice = decide(facts(ledger(group="not detected")))
    assert (advice.state, advice.remedy) == ("nothing found", "ordinary")
    assert "an intraclass correlation of 0.09" in advice.headline
    assert {c.remedy for c in advice.alternatives} >= {"cluster-robust", "mixed-intercept"}
    assert advice.structures == frozenset()


def test_a_design_level_outranks_silent_tests():
    from dataclasses import replace

    book = ledger(group="not detected")
    book = replace(book, standing=tuple(replace(s, fixed=True) for s in book.standing))
    found = facts(
        book,
        groups=12,
        effective_clusters=11.0,
        focus_at_group_level=True,
        groups_in_the_smaller_arm=6,
        assigned_or_sampled_by_group=True,
        design_facts="arm assigned by clinic",
    )
    advice = decide(found)
    assert advice.remedy == "mixed-intercept"
    assert advice.structures == frozenset()
    assert advice.protected == {"group"}
    assert advice.because[0].rule == "design-first"
    assert "arm assigned by clinic" in advice.because[0].sentence
    assert "chosen-after-looking" not in [c.rule for c in advice.cautions]


def test_plausible_earns_protection():
    advice = decide(
        facts(ledger(group="unclear"), groups=12, effective_clusters=11.0, focus_at_group_level=True)
    )
    assert (advice.remedy, advice.protected, advice.structures) == ("mixed-intercept", {"group"}, frozenset())
    assert "is not settled: " in advice.headline


def curve(**more) -> Missing:
    values = {
        "shows": True,
        "goes": ("day",),
        "left": "rows that follow each other in time no longer hang together",
        "sign": "it would explain 30 % of what the model leaves over, p < 10⁻⁶",
    }
    return Missing("curve in dose", "functional-form", "dose", **{**values, **more})


def test_mean_first():
    found = facts(ledger(serial="present"), curve(), rows_in_the_longest_series=120, series=1)
    advice = decide(found, (*ALL, refit("repaired-mean", "dose")))
    assert (advice.state, advice.remedy, advice.at) == ("mean first", "repaired-mean", "dose")
    assert "curve in dose" in advice.headline
    assert not advice.mean_in_doubt
    assert "ar1" in [c.remedy for c in advice.alternatives]


def test_mean_first_without_its_refit_advises_no_numbers():
    found = facts(ledger(serial="present"), curve(), rows_in_the_longest_series=120, series=1)
    assert decide(found).remedy == ""


def test_a_mean_in_doubt_shows_both():
    found = facts(
        ledger(serial="present"),
        curve(shows=False, goes=(), stays=("day",), doubt=True),
        rows_in_the_longest_series=120,
        series=1,
    )
    advice = decide(found, (*ALL, refit("repaired-mean", "dose")))
    assert (advice.state, advice.remedy, advice.mean_in_doubt) == ("supported with caveat", "ar1", True)
    assert "repaired-mean" in [c.remedy for c in advice.alternatives]
    assert "mean-in-doubt" in [c.rule for c in advice.cautions]


def test_a_curve_beside_a_dependence_that_stays():
    found = facts(
        ledger(serial="present"),
        curve(goes=(), stays=("day",)),
        rows_in_the_longest_series=120,
        series=1,
    )
    advice = decide(found)
    assert (advice.remedy, advice.state, advice.mean_in_doubt) == ("ar1", "supported with caveat", False)
    assert "mean-as-well" in [c.rule for c in advice.cautions]


@pytest.mark.parametrize(
    ("values", "rule"),
    [
        ({"groups": 4, "groups_in_the_smaller_arm": 2}, "two-treated-groups"),
        ({"groups": 40, "groups_in_the_smaller_arm": 2}, "two-treated-groups"),
        ({"groups": 4, "groups_in_the_smaller_arm": float("nan")}, "too-few-groups"),
        ({"groups": 3, "focus_at_group_level": False}, "groups-as-factor"),
    ],
)
def test_groups_that_nothing_can_correct(values, rule):
    advice = decide(trial(**values))
    assert (advice.state, advice.because[0].rule, advice.remedy) == ("not correctable", rule, "")
    assert advice.refused[0][2].startswith("Needed")


def test_residuals_alone():
    advice = decide(trial(columns_of_the_model_known=False), ())
    assert (advice.state, advice.because[0].rule) == ("not correctable", "residuals-alone")


def test_a_preferred_remedy_that_could_not_be_fitted_gives_way():
    without = tuple(r for r in ALL if r.remedy != "mixed-intercept")
    advice = decide(trial(), without)
    assert advice.remedy == "cluster-robust"


def test_no_remedy_that_covers_is_not_correctable():
    advice = decide(trial(), ALL[:2])
    assert (advice.state, advice.because[0].rule) == ("not correctable", "no-remedy-covers")


def test_a_structure_left_uncovered_is_named():
    found = facts(
        ledger(group="present", spatial="unclear"),
        groups=12,
        effective_clusters=11.0,
        focus_at_group_level=True,
        sites=60,
    )
    advice = decide(found, tuple(r for r in ALL if r.remedy != "joint"))
    assert advice.remedy in ("mixed-intercept", "cluster-robust")
    assert advice.state == "supported with caveat"
    assert any("between near places" in c.sentence for c in advice.cautions if c.rule == "not-covered")


def test_unusable_focus_rows_rule_a_refit_out():
    from dataclasses import replace

    lost = refit("mixed-intercept", "clinic")
    lost = replace(lost, intervals=(replace(lost.intervals[0], low=math.nan, high=math.nan),))
    kept = tuple(lost if r.remedy == "mixed-intercept" else r for r in ALL)
    assert decide(trial(), kept).remedy == "cluster-robust"


def test_low_df_is_a_caveat():
    refits = tuple(refit(r.remedy, r.at, 9.0, 3.1) if r.remedy == "mixed-intercept" else r for r in ALL)
    advice = decide(trial(), refits)
    assert advice.state == "supported with caveat"
    assert any("3.1 degrees of freedom" in c.sentence for c in advice.cautions)


# ---- with a rehearsal ----------------------------------------------------------------------------


def scored(**coverage: tuple[float, float]) -> Scores:
    rows = tuple(Score(name.replace("_", "-"), "clinic", c, 0.007, w) for name, (c, w) in coverage.items())
    return Scores(rows)


def test_scores_choose_the_narrowest_adequate():
    scores = scored(mixed_intercept=(0.90, 2.0), cluster_robust=(0.95, 2.4))
    assert decide(trial(), scores=scores).remedy == "cluster-robust"
    scores = scored(mixed_intercept=(0.945, 2.0), cluster_robust=(0.95, 2.4))
    assert decide(trial(), scores=scores).remedy == "mixed-intercept"


def test_adequate_is_nominal_less_two_monte_carlo_errors_and_a_point():
    scores = scored(cluster_robust=(0.95 - 0.014 - 0.01 + 1e-9, 1.0), mixed_intercept=(0.9259, 1.0))
    assert scores.adequate("cluster-robust", "clinic") is True
    assert scores.adequate("mixed-intercept", "clinic") is False
    assert scores.adequate("ar1", "") is None


def test_equal_widths_go_to_the_simpler():
    scores = scored(cluster_robust=(0.95, 2.0), mixed_intercept=(0.95, 2.01))
    assert decide(trial(), scores=scores).remedy == "mixed-intercept"


def test_when_none_is_adequate_the_rules_decide():
    scores = scored(cluster_robust=(0.80, 2.0), mixed_intercept=(0.80, 2.01))
    assert decide(trial(), scores=scores).remedy == "mixed-intercept"


def test_a_rehearsal_that_falls_short_lowers_the_state():
    found = trial(assignment_can_be_redrawn=False)
    short = decide(found, scores=scored(mixed_intercept=(0.88, 2.0), cluster_robust=(0.86, 2.4)))
    assert (short.remedy, short.state) == ("mixed-intercept", "supported with caveat")
    told = [c.sentence for c in short.cautions if c.rule == "none-held"]
    assert len(told) == 1
    assert "in 88\u00a0% of replicates" in told[0]
    assert "below the 95\u00a0% it promises" in told[0]
    held = decide(found, scores=scored(mixed_intercept=(0.95, 2.0), cluster_robust=(0.86, 2.4)))
    assert held.state == "supported"
    assert not [c for c in held.cautions if c.rule in ("none-held", "rehearsal-fell-short")]


def firm_rule():
    return facts(
        ledger(group="present"),
        groups=30,
        effective_clusters=25.0,
        focus_at_group_level=False,
        unequal_variances=True,
        df_of_the_robust_refit=12.0,
    )


def test_a_firm_rule_gives_way_where_its_remedy_falls_clearly_short_and_another_holds():
    """The floor is 0.95 − 2 · 0.007 − 0.01 = 0.926, and clearly below it 0.912."""
    advice = decide(firm_rule(), scores=scored(cluster_robust=(0.90, 1.4), mixed_intercept=(0.95, 1.0)))
    assert (advice.remedy, advice.state) == ("mixed-intercept", "supported")
    told = advice.because[-1]
    assert told.rule == "spread-in-groups: gave way"
    assert "in only 90\u00a0% of replicates" in told.sentence


def test_a_firm_rule_that_a_rehearsal_doubts_a_little_stays_and_says_so():
    advice = decide(firm_rule(), scores=scored(cluster_robust=(0.92, 1.4), mixed_intercept=(0.95, 1.0)))
    assert (advice.remedy, advice.state) == ("cluster-robust", "supported with caveat")
    assert [c.rule for c in advice.cautions if c.rule.startswith("rehearsal")] == ["rehearsal-fell-short"]


def test_a_firm_rule_stays_where_no_other_remedy_holds():
    advice = decide(firm_rule(), scores=scored(cluster_robust=(0.90, 1.4), mixed_intercept=(0.80, 1.0)))
    assert (advice.remedy, advice.state) == ("cluster-robust", "supported with caveat")
    assert advice.because[-1].rule == "spread-in-groups"


def test_a_rehearsal_at_the_edge_of_its_error_only_warns():
    scores = Scores((Score("mixed-intercept", "clinic", 0.88, 0.0335, 1.0),))
    advice = decide(trial(), scores=scores)
    assert advice.state == "supported"
    assert any(c.rule == "perhaps-short" and "88\u00a0%" in c.sentence for c in advice.cautions)


def test_few_groups_of_an_outer_level_are_told():
    more = {"fewest_groups_to_cover": 6, "level_with_the_fewest_groups": "Block"}
    advice = decide(trial(groups=18, effective_clusters=17.0, **more))
    assert advice.state == "supported with caveat"
    told = "Of Block there are only 6 groups: what varies between them is known roughly."
    assert told in [c.sentence for c in advice.cautions]


def test_many_copies_are_a_caveat():
    advice = decide(trial(share_of_copied_rows=0.5))
    assert advice.state == "supported with caveat"
    assert any(c.rule == "many-copies" for c in advice.cautions)
    assert not any(c.rule == "many-copies" for c in decide(trial(share_of_copied_rows=0.02)).cautions)


def test_a_robust_error_far_above_the_model_in_time_is_a_caveat():
    found = facts(ledger(serial="present"), series=50, rows_in_the_longest_series=60, regular_times=True)
    wide = (refit("ordinary"), refit("ar1", "", 4.0), refit("cluster-robust", "clinic", 9.0))
    advice = decide(found, wide)
    assert (advice.remedy, advice.state) == ("ar1", "supported with caveat")
    assert any(c.rule == "robust-in-time" and "2.2 times" in c.sentence for c in advice.cautions)
    near = (*wide[:2], refit("cluster-robust", "clinic", 5.0))
    assert decide(found, near).state == "supported"


def test_shocks_that_series_share_given_the_order_in_time_are_a_caveat():
    values = {"series": 8, "rows_in_the_longest_series": 60, "regular_times": True, "common_shocks": True}
    advice = decide(facts(ledger(serial="present"), common_shocks_in_time=True, **values))
    assert (advice.remedy, advice.state) == ("ar1", "supported with caveat")
    assert "common-shocks-stay" in {c.rule for c in advice.cautions}
    less = decide(facts(ledger(serial="present"), common_shocks_in_time=False, **values))
    assert less.state == "supported"
    assert "common-shocks" in {c.rule for c in less.cautions}
