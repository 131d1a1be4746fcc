"""What warns beside the advice, and rules that read more than counts."""

from __future__ import annotations

import numpy as np
import pytest

from clingstone.advice.choose import Score, Scores
from clingstone.advice.facts import facts as read
from clingstone.advice.response import response_facts
from clingstone.evidence import TESTS, gather
from clingstone.ledger.ledger import weigh
from clingstone.run import one_thread
from tests.advice.synthetic import facts, ledger, refit
from tests.advice.test_choose import ALL, decide, trial
from tests.ledger import factories as make


def cautions(advice) -> list[str]:
    return [c.rule for c in advice.cautions]


# ---- the response --------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("make_y", "two", "counts"),
    [
        (lambda rng: (rng.random(60) < 0.3) * 1.0, True, False),
        (lambda rng: np.where(rng.random(60) < 0.3, 1.0, 2.0), True, False),
        (lambda rng: rng.poisson(2.0, 60).astype(float), False, True),
        (lambda rng: 40.0 + rng.poisson(20.0, 60), False, False),  # ages
        (lambda rng: rng.standard_normal(60), False, False),
        (lambda rng: 1e12 + rng.standard_normal(60), False, False),  # far from zero, and yet continuous
        (lambda rng: 1e6 + (rng.random(60) < 0.3), True, False),
    ],
)
def test_two_values_and_counts_are_told_from_other_numbers(make_y, two, counts):
    rng = np.random.default_rng(12)
    fits = make.fits(make.design({"x": rng.standard_normal(60)}), make_y(rng))
    found = {f.name: f.value for f in response_facts(fits)}
    assert found == {"response of two values": two, "response of counts": counts}


def test_a_weighted_response_is_read_on_its_own_scale():
    rng = np.random.default_rng(13)
    root = np.sqrt(rng.integers(1, 5, 60))
    y = (rng.random(60) < 0.4) * 1.0
    fits = make.fits(make.design({"x": rng.standard_normal(60)}, root=root), y)
    assert response_facts(fits)[0].value


def test_the_response_is_cautioned_about():
    assert "two-valued-response" in cautions(decide(trial(response_of_two_values=True)))
    assert "count-response" in cautions(decide(trial(response_of_counts=True)))


# ---- predictors together -------------------------------------------------------------------------


def test_predictors_that_differ_only_together_are_told():
    """Each of five means pulls a little; Mundlak's joint test sees what none shows alone."""
    rng = np.random.default_rng(61)
    groups, m = np.repeat(np.arange(60), 6), 360
    between = rng.standard_normal((60, 3))
    X = between[groups] + rng.standard_normal((m, 3))
    own = 0.22 * between.sum(axis=1) + 0.8 * rng.standard_normal(60)
    y = X @ [0.5, 0.2, 0.1] + own[groups] + rng.standard_normal(m)
    columns = {f"x{j}": X[:, j] for j in range(3)}
    fits = make.fits(make.design(columns, groups={"barn": groups}), y)
    with one_thread():
        tests = tuple(t for t in TESTS if t.primary or t.id == "group-endogeneity")
        evidence = gather(fits, tests)
        found = read(fits, evidence, weigh(fits, evidence, ()))
    assert found.says("predictors differ together")
    assert found.word("level of the predictors together") == "barn"
    told = trial(
        focus_at_group_level=False,
        predictors_differ_together=True,
        level_of_the_predictors_together="clinic",
        p_of_the_predictors_together=0.012,
    )
    assert "predictors-differ-together" in cautions(decide(told))
    both = told.plus(trial(between_differs_from_within=True).known)
    assert "predictors-differ-together" not in cautions(decide(both))


# ---- robust against a model of the order in time ---------------------------------------------------


def panel(**more):
    values = {
        "groups": 30,
        "series": 30,
        "rows_in_the_longest_series": 40,
        "series_within_groups": True,
        "effective_clusters": 28.0,
        "focus_at_group_level": True,
    }
    return facts(ledger(group="present", serial="present"), **{**values, **more})


def test_a_robust_error_far_above_the_model_in_time_is_preferred_over_many_groups():
    wide = (refit("ordinary"), refit("cluster-robust", "clinic", 8.0), refit("joint", "", 4.0))
    advice = decide(panel(), wide)
    assert (advice.remedy, advice.because[0].rule) == ("cluster-robust", "robust-over-groups")
    assert "2 times" in advice.because[0].sentence
    near = (refit("ordinary"), refit("cluster-robust", "clinic", 5.6), refit("joint", "", 4.0))
    assert decide(panel(), near).remedy == "joint"
    assert decide(panel(groups=12, series=12), wide).remedy == "joint"
    rough = (wide[0], refit("cluster-robust", "clinic", 8.0, df=3.0), wide[2])
    assert decide(panel(), rough).remedy == "joint"


def test_the_same_over_series_without_groups():
    found = facts(
        ledger(serial="present"),
        series=24,
        rows_in_the_longest_series=40,
        regular_times=True,
        series_can_be_clusters=True,
        group_level="",
    )
    wide = (refit("ordinary"), refit("cluster-robust", "series", 8.0), refit("ar1", "", 4.0))
    advice = decide(found, wide)
    assert (advice.remedy, advice.because[0].rule) == ("cluster-robust", "robust-over-series")


def test_few_groups_whose_slopes_differ_have_an_estimate_each():
    found = trial(
        focus_at_group_level=False, effective_clusters=6.0, slopes_differ=True, name_of_the_slope="x"
    )
    few = (
        refit("ordinary"),
        refit("cluster-robust", "clinic", 9.0, df=2.5),
        refit("mixed-intercept", "clinic", 4.0),
        refit("group-t", "clinic", 7.0, estimand="within"),
    )
    advice = decide(found, few)
    assert (advice.remedy, advice.because[0].rule) == ("group-t", "own-estimates")
    plain = (*few[:1], refit("cluster-robust", "clinic", 5.0, df=2.5), *few[2:])
    assert (
        decide(trial(focus_at_group_level=False, effective_clusters=6.0), plain).remedy == "mixed-intercept"
    )


# ---- places --------------------------------------------------------------------------------------

PLACES = (
    refit("ordinary"),
    refit("spatial-gls", "", 6.0),
    refit("spatial-error", "", 6.5),
    refit("spatial-components", "", 9.0),
)


def test_borders_and_a_range_at_its_end_change_the_remedy_for_places():
    book = ledger(spatial="present")
    assert decide(facts(book, sites=80), PLACES).remedy == "spatial-gls"
    assert (
        decide(facts(book, sites=80, neighbours_by_borders_or_pairs=True), PLACES).remedy == "spatial-error"
    )
    assert decide(facts(book, sites=80, range_at_its_bound=True), PLACES).remedy == "spatial-components"


def test_one_axis_and_outcomes_of_neighbours_are_cautions():
    found = facts(
        ledger(spatial="present"), sites=80, likeness_along_one_axis=True, outcomes_of_neighbours=True
    )
    assert {"one-axis", "neighbours-outcomes"} <= set(cautions(decide(found, PLACES)))


def test_facts_of_places_in_data():
    rng = np.random.default_rng(5)
    at, looks = np.arange(60.0), ("direction", "robust-lm-lag")
    y = np.cumsum(rng.standard_normal(60))  # along a line, without a range
    fits = make.fits(make.design({"x": rng.standard_normal(60)}, xy=np.column_stack([at, at % 7])), y)
    with one_thread():
        evidence = gather(fits, tuple(t for t in TESTS if t.primary or t.id in looks))
        found = read(fits, evidence, weigh(fits, evidence, ()))
    assert {"likeness along one axis", "outcomes of neighbours"} <= set(found)
    assert found.says("range at its bound")
    assert not found.says("neighbours by borders or pairs")


# ---- rehearsals ------------------------------------------------------------------------------------


def test_an_advice_that_no_rehearsal_tried_says_so():
    assert "not-rehearsed" not in cautions(decide(trial()))  # who asked for none is told nothing new
    tried = Scores((Score("mixed-intercept", "clinic", 0.95, 0.005, 2.0, 0.95, "estimate"),))
    assert "not-rehearsed" not in cautions(decide(trial(), scores=tried))
    firm = {"unequal_variances": True, "focus_at_group_level": False, "df_of_the_robust_refit": 12.0}
    left_out = decide(
        facts(ledger(group="present"), groups=30, effective_clusters=25.0, **firm), scores=tried
    )
    assert (left_out.remedy, "not-rehearsed" in cautions(left_out)) == ("cluster-robust", True)
    nothing = decide(facts(ledger(group="not detected")))
    assert "not-rehearsed" not in cautions(nothing)


def test_what_holds_only_under_its_own_model_is_fragile():
    rows = tuple(
        Score(
            r.remedy, r.at, 0.80, 0.004, 2.0, 0.95 if r.remedy == "mixed-intercept" else 0.85, "noisy series"
        )
        for r in ALL
    )
    advice = decide(trial(), scores=Scores(rows))
    assert (advice.remedy, advice.state) == ("mixed-intercept", "supported with caveat")
    assert "fragile" in cautions(advice)
    assert "rehearsal-fell-short" not in cautions(advice)
    assert "noisy series" in next(c.sentence for c in advice.cautions if c.rule == "fragile")
