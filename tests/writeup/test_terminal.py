"""The answer in 80 columns."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest

from clingstone.display import columns_of
from clingstone.writeup.terminal import case_line, terminal
from tests.writeup import fixture


@pytest.mark.parametrize("make", [fixture.trial, fixture.stream, fixture.wells])
@pytest.mark.parametrize("width", [80, 60])
def test_no_line_is_too_long(make, width):
    assert max(columns_of(line) for line in terminal(make(), width).splitlines()) <= width


def test_the_answer_leads_and_the_numbers_follow_the_advised_error():
    text = terminal(fixture.trial())
    parts = text.split("\n\n")
    assert parts[0].startswith("trial.csv · 412 rows, 12 clinics of 9 to 71 rows")
    assert parts[1].startswith("The rows of a clinic hang together")
    # standard error 1.49: one decimal; t(10.4) gives 2.2165, so −3.1 ± 3.3 (worked out by hand)
    assert "(−6.4 to 0.2)" in parts[2]
    assert "10.4 df" in parts[2]
    assert parts[2].index("ordinary fit") < parts[2].index("advised: ")
    assert "degrees of freedom" in text
    assert "Not settled: Two clinics carry 40 % of the information on arm." in text


def test_what_cannot_be_corrected_says_why_and_what_would_be_needed():
    text = " ".join(terminal(fixture.wells()).split())
    assert "The range is half as long as the map. Sites over a wider area would be needed." in text


def test_what_stops_every_correction_is_not_followed_by_single_refits():
    base = fixture.wells()
    whole = ("every correction", "the model fits every row exactly", "Needed: something left over.")
    advice = replace(base.advice, refused=(whole, ("ordinary", "it could not be fitted to these data", "")))
    text = " ".join(terminal(replace(base, advice=advice)).split())
    assert "The model fits every row exactly. Needed: something left over." in text
    assert "could not be fitted" not in text


def test_a_row_that_a_refit_cannot_serve_shows_no_empty_interval():
    base = fixture.trial()
    last = base.refits[-1]
    none = tuple(
        replace(row, se=math.nan, df=math.nan, low=math.nan, high=math.nan, status="unusable: too few")
        for row in last.intervals
    )
    text = terminal(replace(base, refits=(*base.refits[:-1], replace(last, intervals=none))))
    assert "(no interval)" in text
    assert "(— to —)" not in text


def test_groups_of_a_single_row_are_counted_in_the_singular():
    base = fixture.trial()
    level = replace(base.case.group[0], count=60, smallest=1, largest=1)
    text = case_line(replace(base, case=replace(base.case, group=(level,))))
    assert "60 clinics of 1 row" in text


def test_silent_data_say_what_they_could_have_shown():
    base = fixture.trial()
    advice = replace(base.advice, structures=frozenset(), remedy="ordinary", at="", state="nothing found")
    text = " ".join(terminal(replace(base, advice=advice)).split())
    assert base.ledger.detectable[0].sentence in text


def test_labels_cannot_steer_the_terminal():
    text = terminal(fixture.trial("\x1b[31m\r\nroot"))
    assert "\x1b" not in text
    assert "\r" not in text


def test_rows_left_out_are_counted_by_reason():
    assert "11 rows left out (pressure missing in 9 and age missing in 2)" in case_line(fixture.trial())


def test_notes_on_the_reading_close_the_answer_and_the_rest_is_counted():
    base = fixture.trial()
    told = "Noticed: One clinic's label appears with and without a trailing blank; read as one."
    assert told in " ".join(terminal(base).split("\n\n")[-1].split())
    many = replace(base, case=replace(base.case, notes=tuple(f"Note {k}." for k in range(6))))
    last = terminal(many).split("\n\n")[-1].splitlines()
    assert last[:4] == [f"Noticed: Note {k}." for k in range(4)]
    assert last[4:] == ["2 more notes on the reading in the report."]
