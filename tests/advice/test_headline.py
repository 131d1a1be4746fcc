"""Headlines: what hangs together, how strongly, and what it does, in plain words."""

from __future__ import annotations

from dataclasses import replace

import pytest

from clingstone.advice import headline as say
from clingstone.ledger.ledger import Inflation
from tests.advice.synthetic import facts, ledger, refit

BAND = (0.95, 1.10)


def test_what_is_present_comes_before_what_may_be():
    text = say.dependence(ledger(group="unclear", serial="present"))
    assert text.index("follow each other in time hang together") < text.index(
        "one clinic hang together is not settled"
    )


def test_what_was_not_detected_is_not_in_the_headline():
    assert say.dependence(ledger(group="not detected")) == ""


def test_units_of_time_have_a_plural_and_symbols_have_none():
    assert "after 1.4\u00a0days" in say.dependence(ledger(serial="present"))
    assert "out to about 4.0\u00a0km." in say.dependence(ledger(spatial="present"))


def test_an_inner_level_is_named_by_itself():
    book = ledger(group="present")
    book = replace(book, standing=(replace(book.standing[0], label="hospital/ward"),))
    assert "The rows of one ward hang together" in say.dependence(book)


def test_a_structure_without_a_size_says_so():
    book = replace(ledger(group="present"), shares=())
    assert "how strongly cannot be sized" in say.dependence(book)


@pytest.mark.parametrize(
    ("widths", "words"),
    [
        (
            [("arm", 2.3)],
            "It matters for arm: the advised interval is 2.3 times as wide as the ordinary one.",
        ),
        (
            [("arm", 0.6)],
            "It matters for arm: the advised interval is narrower, 0.60 times as wide as the ordinary one.",
        ),
        ([("arm", 1.05), ("x", 1.0)], "It moves the intervals of arm and x little."),
        (
            [("arm: visits", 3.0)],
            "It matters for “arm: visits”: the advised interval is 3.0 times as wide as the ordinary one.",
        ),
        (
            [("arm", 2.0), ("x", 1.4), ("z", 1.0)],
            "It matters for arm: the advised interval is 2.0 times as wide as the ordinary one; that of x is "
            "1.4 times as wide.",
        ),
        (
            [("arm", 0.3), ("x", 1.4)],  # too narrow an ordinary interval is said before too wide a one
            "It matters for x: the advised interval is 1.4 times as wide as the ordinary one; that of arm is "
            "0.30 times as wide.",
        ),
        (
            [("a", 5.0), ("b", 2.0), ("c", 1.5), ("d", 0.5)],
            "It matters for a: the advised interval is 5.0 times as wide as the ordinary one; those of 3 "
            "more focus rows change as well.",
        ),
        ([], ""),
    ],
)
def test_consequence(widths, words):
    assert say.consequence(widths, BAND) == words


def test_widths_are_those_of_the_intervals_shown():
    found = facts(ledger(group="present"))
    refits = (refit("ordinary", "", 4.0), refit("mixed-intercept", "clinic", 9.2))
    assert say.widths(found, refits, refits[1]) == [("arm", pytest.approx(2.3))]
    assert say.widths(found, refits, refits[0]) == []
    assert say.widths(found, refits, None) == []


def test_nothing_declared_is_not_nothing_found():
    book = replace(ledger(), standing=())
    assert "No structure was declared" in say.nothing(book)


def test_filled_words_and_the_facts_behind_them():
    found = facts(ledger(group="present"), groups=12)
    assert say.filled("{groups} groups, {no such fact}.", found) == "12 groups, not known."
    assert say.read_by("{groups} groups", ("sites", "groups"), found) == (("groups", "12"),)


def test_no_headline_uses_words_that_nobody_should_write():
    for state in ("present", "unclear"):
        text = say.dependence(ledger(group=state, serial=state, spatial=state))
        for word in ("absent", "significant", "passed", "!", "detected"):
            assert word not in text


def test_a_ledger_hands_out_its_parts():
    book = ledger(group="present")
    assert book.factor("arm") == Inflation("arm", "total", 1.2, 1.8, 2.6)
    assert book.factor("x") is None
    assert book.of("group:clinic").label == "clinic"
    assert book.of("nothing") is None
    assert book.share("row").share == 0.6
    assert book.parameter("serial", "ρ").estimate == 0.6


def test_a_correlation_that_hardly_fades_within_the_data_has_no_half_life_told():
    """ρ = 0.9999995: half of it is gone after 1.4 million steps; 0.98: after 34."""
    book = ledger(serial="present")
    rho = replace(book.parameter("serial", "ρ"), estimate=0.9999995, low=0.97, high=0.9999999)
    others = tuple(p for p in book.parameters if p.name != "ρ")
    text = say.dependence(replace(book, parameters=(*others, rho)), rows=100)
    assert "correlation more than 0.99 (0.97 to more than 0.99) per day, hardly fading within" in text
    slow = replace(book, parameters=(*others, replace(rho, estimate=0.98)))
    assert "hardly fading" in say.dependence(slow, rows=30)
    assert "half of it gone after" in say.dependence(slow, rows=40)
    assert "half of it gone after" in say.dependence(slow)


def test_a_range_beyond_the_map_is_not_given_in_figures():
    assert "hardly fading within the map." in say.dependence(ledger(spatial="present"), over=1.2)
    assert "out to about" in say.dependence(ledger(spatial="present"), over=0.8)


def test_what_could_not_be_tested_is_not_called_undetected():
    book = replace(
        ledger(group="not applicable"),
        detectable=(),
        refused=(("group:clinic", "clinic: 1 groups; a variance between groups needs 5 or more"),),
    )
    assert say.nothing(book) == (
        "Dependence between rows could not be tested (clinic: 1 group; a variance between groups needs 5 or "
        "more): none is ruled out."
    )


def test_unequal_spread_beside_what_could_not_be_tested_claims_no_test():
    """Sixty groups of one row, or one group of sixty: nothing was looked for, so nothing is undetected."""
    spread = {"unequal_variances": True, "what_the_spread_goes_with": "x"}
    none = replace(ledger(group="not applicable"), detectable=(), refused=())
    assert say.unequal(facts(none, **spread)) == (
        "Dependence between rows could not be tested (clinic): none is ruled out. "
        "But the residuals spread unequally with x."
    )
    some = replace(ledger(group="not applicable", serial="not detected"), detectable=(), refused=())
    assert say.unequal(facts(some, **spread)) == (
        "No dependence between rows was detected that could widen a focus interval, but the residuals "
        "spread unequally with x. What could not be tested is not ruled out: clinic."
    )
    assert say.unequal(facts(replace(none, standing=()), **spread)) == (
        "No structure was declared, so no dependence between rows could be looked for. "
        "But the residuals spread unequally with x."
    )


def test_what_was_tested_and_what_was_not_are_told_apart():
    book = replace(ledger(group="not applicable", serial="not detected"), detectable=(), refused=())
    text = say.nothing(book)
    assert text.startswith("No dependence was detected")
    assert "What could not be tested is not ruled out: clinic." in text
    assert text.endswith("between rows that follow each other in time is not known.")


def test_what_was_not_seen_is_told_as_room_not_as_a_find():
    """Never "may hang together: they share 0 % (0 to 45 %)"."""
    book = ledger(group="unclear")
    none = replace(book, shares=(replace(book.shares[0], share=0.0, low=0.0, high=0.45), *book.shares[1:]))
    assert say.dependence(none) == (
        "Whether the rows of one clinic hang together is not settled: none of what the model leaves over is "
        "estimated to be theirs, but up to 45\u00a0% could be."
    )
    assert say.dependence(book).endswith("is estimated at 18\u00a0% and could be up to 41\u00a0%.")
    assert "is estimated at 0.60 per day and could be up to 0.75" in say.dependence(ledger(serial="unclear"))
    fixed = replace(book, standing=(replace(book.standing[0], fixed=True, widens=False),))
    assert "but the design fixes that level" in say.dependence(fixed)


def test_every_structure_that_was_not_found_has_its_size_or_a_word():
    book = ledger(group="not detected", serial="not detected", spatial="unclear")
    blind = replace(book.detectable[0], key="serial", parameter="ρ", value=float("nan"))
    text = say.nothing(replace(book, detectable=(*book.detectable, blind)))
    assert "an intraclass correlation of 0.09" in text
    assert "Not even the strongest between rows that follow each other in time would have shown" in text
    assert "How weak a one would have shown between near places is not known." in text


def test_slopes_that_differ_are_told_beside_what_rows_share():
    book = ledger(group="present")
    more = {"slopes_differ": True, "name_of_the_slope": "dose", "level_of_the_slopes": "ward/patient"}
    assert say.doubts(facts(book, **more)) == ["Slopes of dose differ from patient to patient."]
    assert say.doubts(facts(book, **{**more, "slopes_differ": False})) == []
    assert say.doubts(facts(ledger(serial="present"), **more)) == []  # then it is all that is to be covered
