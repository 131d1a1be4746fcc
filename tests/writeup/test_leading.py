"""What leads, what is folded, and how strong a dependence is told to be where the data hold too little."""

from __future__ import annotations

import math
import re
from dataclasses import replace

import pytest

from clingstone.demo import DEMOS
from clingstone.display import MINUS, NBSP, shortened
from clingstone.evidence.finding import Curve
from clingstone.examination import examine
from clingstone.ledger.ledger import Parameter
from clingstone.remedies.remedy import ByBandwidth
from clingstone.writeup import bandwidths, strength
from clingstone.writeup.leading import leading, with_most_given
from clingstone.writeup.methods import methods_text, report_this
from clingstone.writeup.outcome import law_words, leaning
from clingstone.writeup.read import account_pairs, has_freedom
from clingstone.writeup.report import report
from clingstone.writeup.sentences import parameter_words, sections
from clingstone.writeup.tables import parameters
from tests.writeup import fixture
from tests.writeup.test_report import Page


def told(test: str, verdict: str, given: tuple[str, ...] = (), structure: str = "group", **more):
    words = f"{test} says {verdict}{' beside ' + given[0] if given else ''}."
    return fixture.finding(
        structure, test, verdict=verdict, given=given, sentence=words, about="clinic", **more
    )


# ---- what leads ------------------------------------------------------------------------------


def test_second_looks_that_agree_are_folded_and_another_question_leads():
    found = [
        told("group-lm", "present"),
        told("group-f", "present", primary=True),
        told("restricted-lr", "present"),
        told("slope-variation", "present"),
        told("group-endogeneity", "unclear"),
    ]
    assert [f.test for f in leading(found)] == ["group-f", "slope-variation"]


@pytest.mark.parametrize(("first", "second", "leads"), [
    ("not detected", "present", True),
    ("unclear", "present", True),
    ("present", "not detected", False),
    ("present", "present", False),
])  # fmt: skip
def test_a_second_look_leads_only_where_it_sees_what_the_first_did_not(first, second, leads):
    found = [told("group-f", first, primary=True), told("group-lm", second)]
    assert (found[1] in leading(found)) is leads


def test_what_another_structure_explains_away_is_shown():
    found = [
        told("group-f", "present", primary=True),
        told("group-f", "present", ("serial",)),
        told("restricted-lr", "not detected", ("serial",)),
        told("restricted-lr", "present"),
    ]
    assert leading(found) == found[:3]


def test_of_the_mean_the_reading_with_most_fitted_decides():
    """A curve that is seen alone and not once dependence is fitted does not lead; the other way it does."""
    alone = told("functional-form", "present", structure="mean")
    beside = told("functional-form", "not detected", ("serial",), structure="mean")
    assert leading([alone, beside]) == []
    seen = replace(beside, verdict="present")
    assert leading([replace(alone, verdict="not detected"), seen]) == [seen]
    assert with_most_given([alone, beside]) == [beside]


def test_two_readings_in_the_same_words_lead_once():
    found = [
        told("group-f", "present", primary=True),
        told("group-f", "not detected", ("serial",)),
        told("restricted-lr", "not detected", ("serial",)),
    ]
    found[2] = replace(found[2], sentence=found[1].sentence)
    assert leading(found) == found[:2]


def test_checks_that_could_not_tell_are_counted_where_nothing_leads():
    found = (
        told("outliers", "unclear", structure="lookalike"),
        told("normality", "not detected", structure="lookalike"),
        told("functional-form", "not applicable", structure="mean"),
    )
    page = Page(report(replace(fixture.trial(), evidence=found)))
    assert "Nothing was detected here; 1 check could not tell." in page.text
    assert "2 findings, 1 of them unclear, with statistics" in page.text
    assert "None of these checks could be run on these data." in page.text


def test_the_page_keeps_every_finding_and_folds_what_does_not_lead():
    found = (
        told("group-f", "present", primary=True),
        told("group-lm", "present"),
        told("functional-form", "not detected", structure="mean"),
    )
    html = report(replace(fixture.trial(), evidence=found))
    page = Page(html)
    for f in found:
        assert f.sentence in page.text
    folds = re.findall(r'<details class="all">.*?</details>\s*\n', html, re.S)
    assert len(folds) == 2
    assert "group-lm says present" in folds[0]
    assert "group-f says present" not in folds[0].split("<table")[0]
    assert "Everything that was looked at: 2 findings, with statistics" in page.text
    assert "Nothing was detected here." in page.text


# ---- how strong ------------------------------------------------------------------------------


def test_a_half_life_far_beyond_the_series_is_told_as_more_than_they_hold():
    """Series of 40 daily rows: at most ten times as long, 400 days, is told."""
    base = fixture.stream()
    serial = replace(base.case.serial, longest=40, step=1.0, unit="day")
    results = replace(base, case=replace(base.case, serial=serial))
    half = Parameter("serial", "half-life", 1.4e6, 35.0, math.inf, "day", "")
    assert strength.figure(results, half, half.estimate) == "more than 400"
    assert strength.interval(results, half) == "35 to more than 400"
    assert "a half-life of more than 400 days" in parameter_words(results, half)
    shown = parameters(replace(results, ledger=replace(results.ledger, parameters=(half,)))).rows[0]
    assert [c.text for c in shown[2:4]] == ["more than 400", "35 to more than 400"]
    assert shown[2].raw == 1.4e6  # a file keeps what was found
    near = replace(half, estimate=2.9, low=2.0, high=5.3)
    assert strength.figure(results, near, 2.9) == "2.9"
    assert strength.interval(results, near) == "2.0 to 5.3"


def test_a_range_far_beyond_the_map_is_told_as_more_than_it_holds():
    results = fixture.wells()
    wide = results.case.spatial.extent
    reach = Parameter("spatial", "practical range", 0.8, 0.5, 1e9, "km", "")
    assert strength.most(results, reach) == 10 * wide
    assert strength.interval(results, reach).endswith(strength.figure(results, reach, 1e9))
    assert strength.interval(results, reach).startswith("0.50 to more than ")
    gone = replace(reach, estimate=2e9, low=1e9, high=3e9)
    assert strength.interval(results, gone) == strength.figure(results, gone, 2e9)


def test_what_is_no_length_has_no_bound_and_an_unknown_end_no_interval():
    results = fixture.stream()
    rho = Parameter("serial", "ρ", 0.5, 0.2, 0.7, "per day", "")
    assert strength.most(results, rho) == math.inf
    assert strength.interval(results, rho) == "0.20 to 0.70"
    assert strength.interval(results, replace(rho, low=math.nan)) == ""


# ---- accounts --------------------------------------------------------------------------------


@pytest.mark.parametrize(("text", "shown"), [
    ("0.799953", "0.8"),
    ("0.123456 (0.1 to -0.2345678)", f"0.1235 (0.1 to {MINUS}0.2345)".replace("0.2345)", "0.2346)")),
    ("1e-05; 12345.67", f"1{NBSP}×{NBSP}10⁻⁵; 12,346"),
    ("34% (Alder)", f"34{NBSP}% (Alder)"),
    ("version 1.2.34567, x3.14159, 12,345.678", "version 1.2.34567, x3.14159, 12,345.678"),
    ("412 rows, 3.5 each", "412 rows, 3.5 each"),
    ("", ""),
])  # fmt: skip
def test_figures_of_many_digits_are_cut_and_other_words_left(text, shown):
    assert shortened(text) == shown


def test_a_law_without_degrees_of_freedom_is_not_given_any():
    base = fixture.trial()
    best = base.refits[1]
    account = replace(best.account, df_rule="wild bootstrap", reference="the restricted wild bootstrap of t",
                      items=(("interval", "found by inverting the test"),))  # fmt: skip
    rows = tuple(replace(r, df=math.nan) for r in best.intervals)
    fit = replace(best, account=account, intervals=rows)
    results = replace(base, refits=(base.refits[0], fit))
    assert has_freedom(best)
    assert not has_freedom(fit)
    text = methods_text(results).replace(NBSP, " ")
    assert "p-values come from the restricted wild bootstrap of t, without degrees of freedom." in text
    assert "degrees of freedom by this rule" not in text
    assert "intervals: wild bootstrap" in report_this(results)
    assert ("intervals and p-values", "wild bootstrap") in account_pairs(fit)
    assert ("degrees of freedom", best.account.df_rule) in account_pairs(best)


@pytest.mark.parametrize(("reference", "words"), [
    ("t", "the t distribution"),
    ("normal", "the normal distribution"),
    ("fixed-b law of t", "the fixed-b law of t"),
    ("permutations of whole units of clinic, two-sided", "permutations of whole units of clinic, two-sided"),
])  # fmt: skip
def test_a_reference_is_named_as_a_sentence_does(reference, words):
    assert law_words(reference) == words


# ---- single groups ---------------------------------------------------------------------------


def test_what_leaving_groups_out_does_fills_the_item_on_influence():
    base = fixture.trial()
    curve = Curve("left-out", (1.0, 2.0, 3.0), (-3.9, -3.2, -1.2), labels=("Brook", "Combe", "Ings"),
                  size=(5.0, 5.0, 5.0), x_name="clinic", y_name="coefficient of arm: treated without it",
                  lines={"all groups": ((1.0, 3.0), (-3.1, -3.1))})  # fmt: skip
    given = fixture.finding("lookalike", "group-influence", verdict="not detected", sentence="x", curve=curve)
    results = replace(base, evidence=(*base.evidence, given))
    (said,) = leaning(replace(results, refits=results.refits[:1]))
    assert said == (
        "With one clinic at a time left out, the ordinary coefficient of “arm: treated” lies between −3.90 "
        "and −1.20 (with all −3.10; furthest from that without clinic Ings)."
    )
    blanks = [s for part in sections(results) for s in part.sentences if s.blank and "M14" in s.items]
    assert not blanks


def test_without_any_such_finding_the_item_stays_a_blank_unless_a_refit_tells_it():
    base = fixture.trial()
    plain = [replace(f, account=replace(f.account, items=())) for f in base.refits]
    blank = replace(base, refits=tuple(plain))
    assert any(s.blank and s.items == ("M14",) for part in sections(blank) for s in part.sentences)
    largest = ("largest part one cluster has in a variance", "34% (Brook)")
    fit = replace(plain[2], account=replace(plain[2].account, items=(largest,)))
    results = replace(base, refits=(*plain[:2], fit, *plain[3:]))
    (said,) = leaning(results)
    assert said == f"Largest part one cluster has in a variance ({fit.name}): 34{NBSP}% (Brook)."
    assert not any(s.blank and s.items == ("M14",) for part in sections(results) for s in part.sentences)


# ---- bandwidths ------------------------------------------------------------------------------


def test_standard_errors_by_lags_are_drawn_as_the_account_tells_them():
    base = fixture.trial()
    told = ByBandwidth("arm: treated", "lags", "", (0.0, 1.0, 2.0), (0.71, 0.9, 0.85))
    fit = replace(base.refits[2], account=replace(base.refits[2].account, bandwidths=(told,)))
    results = replace(base, refits=(*base.refits[:2], fit))
    (plate,) = bandwidths.plates(results)
    assert plate.caption == f"Standard error of “arm: treated” by lags: {fit.name}"
    assert "from 0.710 at 0 to 0.900 at 1; the ordinary one is 0.710" in plate.alt
    panel = plate.paint(660.0).axes[0]
    told, dashed = panel.get_lines()
    assert list(told.get_ydata()) == [0.71, 0.9, 0.85]
    assert set(dashed.get_ydata()) == {0.71}
    assert [t.get_text() for t in panel.get_xticklabels()] == ["0", "1", "2"]
    assert plate.caption in report(results)


def test_a_cutoff_keeps_its_unit_and_a_single_bandwidth_draws_nothing():
    fit = fixture.wells().refits[0]
    term = fit.intervals[-1].term
    told = ByBandwidth(term, "cutoff", "km", (2.0, 4.0), (0.1, 0.2), (8.1, 7.2))
    found = bandwidths.sweep(replace(fit, account=replace(fit.account, bandwidths=(told,))), term, 0.05)
    assert (found.what, found.at, found.se) == ("cutoff (km)", ("2", "4"), (0.1, 0.2))
    assert told.pair()[1] == "0.1 at 2 km (8.1 df); 0.2 at 4 km (7.2 df)"
    alone = replace(told, at=(2.0,), se=(0.1,), df=(8.1,))
    for one in (alone, replace(told, term="another")):
        changed = replace(fit, account=replace(fit.account, bandwidths=(one,)))
        assert bandwidths.sweep(changed, term, 1) is None


def test_the_account_of_a_kernel_is_read_as_it_is_written():
    """The words come from another room: a refit of the demonstration stream must still be read."""
    demo = DEMOS["stream"]
    arguments = {**demo.arguments, "rehearsal": "none"}
    results = examine(str(demo.path), **arguments).results
    (plate,) = bandwidths.plates(results)
    assert plate.name == "bandwidths-hac"
    assert len(plate.table.rows) >= 6
    assert [r[0].text for r in plate.table.rows[:3]] == ["0", "1", "2"]
