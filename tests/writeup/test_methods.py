"""The methods text: numbers only from results, blanks for what the data cannot know."""

from __future__ import annotations

import re
from dataclasses import replace

import pytest

from clingstone.display import number
from clingstone.writeup.draft import draft
from clingstone.writeup.items import ITEMS
from clingstone.writeup.methods import methods_text, report_this
from clingstone.writeup.read import term_of
from clingstone.writeup.sentences import sections
from tests.writeup import fixture

MAKERS = [fixture.trial, fixture.stream, fixture.wells]


@pytest.mark.parametrize("make", MAKERS)
def test_every_item_is_answered_or_left_as_a_visible_blank(make):
    results = make()
    answered = {item for part in sections(results) for s in part.sentences for item in s.items}
    assert answered | ({"M14"} if not results.case.group else set()) == set(ITEMS)
    text = methods_text(results)
    for part in sections(results):
        for s in part.sentences:
            if s.blank:
                assert s.text.startswith("[")
                assert s.text.endswith(": to be filled in]")
                assert s.text in text
    paper = draft(results)
    assert [row[0].text for row in paper.items.rows] == list(ITEMS)
    named = {f"{part.title} {k}" for part in sections(results) for k in range(1, len(part.sentences) + 1)}
    assert {row[0].text for row in paper.answers.rows} == named


@pytest.mark.parametrize("make", MAKERS)
def test_words_that_claim_too_much_never_appear(make):
    text = methods_text(make()) + report_this(make())
    assert not re.search(r"\b(absent|passed|significan\w+|prove[sdn]?)\b", text, re.I)
    assert "!" not in text


def test_the_text_of_a_trial():
    text = methods_text(fixture.trial()).replace("\u00a0", " ").replace("\\<", "<")
    for words in (
        "412 of the 423 rows",
        "Left out were 9 rows (pressure missing) and 2 rows (age missing).",
        "The rows belong to 12 clinics of 9 to 71 rows (median 31; coefficient of variation of size 0.56).",
        "the 12 clinics count as 9.3 of equal size",
        "Assignment to arm was by clinic, so the clinic is the unit of analysis for arm.",
        "a linear regression of pressure on arm and age (pressure ~ arm + age), with 3 coefficients",
        "arm varies only between clinics; age varies from row to row",
        "was judged present (p < 10⁻⁶ by its own test). The rows of one clinic hang together.",
        "holds a random intercept of clinic besides the noise of single rows",
        "nothing was detected: curve in age (p = 0.44)",
        "[why these clinics: to be filled in]",
        "an intraclass correlation of 0.18 (95 % interval 0.06 to 0.41) and a standard deviation of 2.3 mmHg",
        "−3.1 (95 % interval −6.4 to 0.2; 10.4 degrees of freedom; p = 0.063)",
        "Kenward–Roger, expected information",
        "−6.9 to 0.7 (cluster-robust, by clinic)",
        "−4.5 to −1.7 (ordinary fit, as if rows were independent)",
        "An alternative (It does not trust the model of the dependence): cluster-robust, by clinic.",
        "post-hoc choice",
        "The seed of every random number was 0.",
        "numpy 2.4.0",
        "not rehearsed",
    ):
        assert words in text, words


def test_every_number_of_an_estimate_comes_from_its_row():
    """Change the rows, and the text changes with them: nothing is written beside the results."""
    results = fixture.trial()
    fit = results.refits[1]
    rows = tuple(replace(r, estimate=7.7, low=5.5, high=9.9, df=33.3, p=0.011) for r in fit.intervals)
    moved = replace(results, refits=(results.refits[0], replace(fit, intervals=rows), *results.refits[2:]))
    text = methods_text(moved).replace("\u00a0", " ")
    assert "7.7 (95 % interval 5.5 to 9.9; 33.3 degrees of freedom; p = 0.011)" in text
    assert "10.4 degrees of freedom" not in text


def test_failed_and_boundary_fits_are_stated():
    results = fixture.trial()
    fit = replace(results.refits[1], boundary=True, converged=False)
    text = methods_text(replace(results, refits=(results.refits[0], fit)))
    assert "at its bound of zero" in text
    assert "did not converge" in text


def test_two_sentences_for_the_paper():
    words = report_this(fixture.trial()).replace("\u00a0", " ")
    assert words.count(". ") == 1
    assert "rows of one clinic (intraclass correlation 0.18, 95 % interval 0.06 to 0.41)" in words
    assert "“arm: treated” is estimated at −3.1 (95 % interval −6.4 to 0.2;" in words
    assert words.endswith("would give −4.5 to −1.7.")


def test_nothing_found_says_what_could_have_been_seen():
    base = fixture.trial()
    advice = replace(base.advice, structures=frozenset(), remedy="ordinary", at="", state="nothing found")
    words = report_this(replace(base, advice=advice))
    assert "was not detected" in words
    assert "0.04" in words
    assert "would give" not in words  # the ordinary fit is not compared with itself


def test_a_mean_in_doubt_makes_the_estimates_provisional():
    base = fixture.trial()
    assert "provisional" in report_this(replace(base, advice=replace(base.advice, state="mean first")))


def test_what_cannot_be_corrected_gives_no_estimate():
    assert "No correction is reported" in report_this(fixture.wells())


def test_markdown_cannot_be_broken_by_labels():
    text = methods_text(fixture.trial("|*`<img src=x>`*"))
    assert "<img" not in re.sub(r"\\<", "", text)
    rows = [line for line in text.splitlines() if re.match(r"\| M\d", line)]
    assert len(rows) == len(ITEMS)
    assert all(len(re.findall(r"(?<!\\)\|", row)) == 5 for row in rows)


def test_digits_follow_the_advised_error():
    results = fixture.stream()  # advised standard error of rain 0.0024: four decimals
    assert number(results.refits[1].get("rain").estimate, 4) in report_this(results)


def test_coefficients_of_a_logarithm_are_also_ratios():
    """exp(0.0391) = 1.03987, exp(0.0344) = 1.0350, exp(0.0438) = 1.0448 (worked out by hand)."""
    text = methods_text(fixture.stream())
    assert "as a ratio 1.0399 (1.0350 to 1.0448)" in text
    assert "as a ratio" not in methods_text(fixture.trial())
    base = fixture.stream()
    tens = replace(base, case=replace(base.case, transformed="log10"))
    assert "as a ratio 1.0942 (" in methods_text(tens)  # 10 to the power 0.0391


@pytest.mark.parametrize(
    ("coefficient", "term"),
    [
        ("arm: treated", "arm"),
        ("dose × arm: treated", "dose × arm"),
        ("arm: a × sex: f", "arm × sex"),
        ("x", "x"),
    ],
)
def test_a_coefficient_knows_its_term(coefficient, term):
    assert term_of(coefficient) == term


def test_the_error_model_is_written_out_as_an_equation():
    text = methods_text(fixture.trial()).replace("\u00a0", " ")
    assert (
        "As an equation: pressure = b0 + b1 (arm: treated) + b2 (age) + u[clinic] + e, where u[clinic] is "
        "one normal draw for each clinic; e is independent normal noise of single rows."
    ) in text
    assert "+ s[time] + e" in methods_text(fixture.stream())
    assert "+ f[place] + e" in methods_text(fixture.wells())
    base = fixture.trial()
    sloped = replace(base, ledger=replace(base.ledger, model=("slope:clinic:age",)))
    assert "As an equation" not in methods_text(sloped)  # not written where a part has no letter


def test_one_statistic_of_two_tests_is_told_once_with_both_sources():
    results = fixture.trial()
    first = next(f for f in results.evidence if f.structure == "group" and f.verdict != "not applicable")
    said = "With order in time taken into account, rows of one clinic share 26 %."
    one = replace(first, primary=False, given=("serial",), sentence=said, source="harville-fenech-1985")
    both = (one, replace(one, test="restricted-lr", source="greven-2008"))
    text = methods_text(replace(results, evidence=both))
    assert text.count("rows of one clinic share 26 % (") == 1
    assert "(Harville & Fenech 1985; Greven et al. 2008)" in text
