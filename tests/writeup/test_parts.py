"""Parts of the write-up: names in prose, conventions, rows fitted alone, rehearsals, many panels."""

from __future__ import annotations

import math
import xml.etree.ElementTree as ET
from dataclasses import replace

import numpy as np
import pytest

from clingstone.advice.choose import Reason
from clingstone.advice.entries import Repair, Score, Scores
from clingstone.evidence.finding import Curve
from clingstone.ledger.ledger import Share
from clingstone.rehearsal.tallies import Left, Rehearsal
from clingstone.rehearsal.truths import Truth
from clingstone.remedies.remedy import Convention
from clingstone.summary import GroupSummary
from clingstone.writeup import curves, figures, panels, places, rehearsed, tables
from clingstone.writeup.methods import methods_text, report_this
from clingstone.writeup.naming import lost, noun, subject, with_rows, words_of_test
from clingstone.writeup.outcome import tipping_words
from clingstone.writeup.panels import tree
from clingstone.writeup.plate import many, with_unit
from clingstone.writeup.read import ALONE, alone, distinct, focus_rows, names_of, served
from clingstone.writeup.report import LONG, headline, how_sure, report
from clingstone.writeup.terminal import terminal
from tests.writeup import fixture
from tests.writeup.test_report import Page

ARM = "arm: treated"


def plain(text: str) -> str:
    return text.replace("\u00a0", " ")


# ---- names -----------------------------------------------------------------------------------


def level(key: str, parent: str = "") -> GroupSummary:
    return GroupSummary(key, 3, 2, 2.0, 2, 0.0, 0, parent)


def test_a_level_is_called_by_what_is_left_of_its_key_under_its_parent():
    assert noun(level("flock/lamb", "flock")) == "lamb"
    recurring = replace(level("Block/Variety", "Block"), labels=("I/Victory", "II/Victory", "II/Marvel"))
    assert noun(recurring) == "Variety within Block"
    assert noun(level("km/h")) == "km/h"  # a column whose name holds a slash is no nesting


def test_structures_are_told_by_the_rows_that_they_join():
    trial, stream = fixture.trial(), fixture.stream()
    assert subject(trial, "group:clinic") == "rows of one clinic"
    assert subject(stream, "serial") == "rows that follow each other in time"
    assert subject(stream, "row") == "single rows"


@pytest.mark.parametrize(
    ("reason", "words"),
    [
        ("missing pressure (response)", "pressure missing"),
        ("missing flow (m3/s) (predictor)", "flow (m3/s) missing"),
        ("weight 0 (w)", "weight 0 (w)"),
    ],
)
def test_reasons_of_lost_rows_leave_out_the_role(reason, words):
    assert lost(reason) == words


def test_tests_have_their_usual_names():
    base = fixture.trial()
    curve, spread = base.evidence[1], base.evidence[2]
    assert words_of_test(base, curve) == "curve in age"
    assert words_of_test(base, replace(curve, given=("group:clinic",))) == "curve in age; given clinic"
    assert words_of_test(base, replace(spread, about_words="age")) == "unequal spread along age"
    assert "Durbin–Watson" in words_of_test(fixture.stream(), fixture.stream().evidence[0])


def test_outlying_rows_are_named_where_they_are_cautioned_about():
    base = fixture.trial()
    far = replace(
        base.evidence[2], test="outliers", rows=(240, 6), verdict="present", sentence="Two lie far."
    )
    reason = Reason("Single rows lie far from the rest.", "outlying-rows", (), "cook-weisberg-1982")
    advice = replace(base.advice, cautions=(reason,))
    results = replace(base, evidence=(*base.evidence, far), advice=advice)
    told = "Single rows lie far from the rest (rows 241 and 7 of trial.csv)."
    assert with_rows(results, reason.sentence, reason.rule) == told
    assert with_rows(results, "Something else.", "lopsided") == "Something else."
    assert f"Not settled: {told}" in list(how_sure(results))
    assert "rows 241 and 7" in " ".join(terminal(results).split())
    assert "They are in rows 241 and 7 of trial.csv." in methods_text(results)
    assert "Rows 241 and 7 of trial.csv." in Page(report(results)).text


@pytest.mark.parametrize(
    ("name", "unit", "text"),
    [
        ("time apart", "day", "time apart (days)"),
        ("day", "day", "day"),
        ("Days", "day", "Days"),
        ("distance", "km", "distance (km)"),
        ("", "year", "years"),
        ("x", "", "x"),
    ],
)
def test_axes_name_their_unit_once(name, unit, text):
    assert with_unit(name, unit) == text
    assert many("km") == "km"


def test_a_long_headline_is_cut_behind_its_first_sentence():
    first = "The rows of one clinic hang together: they share 0.5 % of what the model leaves over."
    rest = "It matters for arm. " * 8
    assert headline(first) == (first, "")
    assert headline(f"{first} {rest}") == (first, rest.strip())
    one = "word " * (LONG // 4)
    assert headline(one)[1] == ""


# ---- rows ------------------------------------------------------------------------------------


def test_one_interval_is_one_rung():
    base = fixture.trial()
    twin = replace(base.refits[2], remedy="joint", name="all structures fitted together")
    results = replace(base, refits=(*base.refits, twin))
    assert [f.name for f in distinct(results, ARM)] == [f.name for f in distinct(base, ARM)]
    assert len(figures.ladder(results).table.rows) == len(figures.ladder(base).table.rows)
    same = replace(base.refits[0], remedy="mixed-intercept", name="mixed, at zero", at="clinic")
    both = replace(base, refits=(base.refits[0], same))
    assert {f.remedy for f in distinct(both, ARM)} == {"ordinary", "mixed-intercept"}


def test_parts_of_a_row_stand_in_tables_and_not_in_the_ladder():
    base = fixture.trial()
    rows = tuple(replace(r, term=f"{r.term} [within]") for r in base.refits[2].intervals)
    split = replace(base.refits[2], remedy="within-between", name="within and between", intervals=rows)
    results = replace(base, refits=(*base.refits, split))
    assert f"{ARM} [within]" in focus_rows(results)
    assert served(results) == (ARM,)
    assert "[within]" not in figures.ladder(results).svg()
    assert f"{ARM} [within]" in Page(report(results)).text


def test_a_term_fitted_alone_stands_beside_its_row():
    base = fixture.trial()
    row = replace(base.refits[1].get(ARM), term=ARM + ALONE, estimate=-2.2, low=-5.0, high=0.6)
    fit = replace(base.refits[1], name="mixed, each term alone", intervals=(row,), coefficients=())
    results = replace(base, refits=(*base.refits, fit))
    assert focus_rows(results) == focus_rows(base)
    assert names_of(results) == names_of(base)
    assert alone(results, ARM) == (fit, row)
    assert alone(base, ARM) is None
    table = tables.intervals(results, ARM)
    assert [r[0].text for r in table.rows][-1] == "mixed, each term alone"
    said = plain(methods_text(results))
    assert "With the constant alone beside it, arm: treated is −2.2 (95 % interval −5.0 to 0.6" in said


def test_other_conventions_stand_under_the_interval_that_they_change():
    base = fixture.trial()
    fit = base.refits[1]
    rows = tuple(replace(r, low=-6.0, high=-0.2, df=math.inf, p=0.037) for r in fit.intervals)
    told = replace(fit, conventions=(Convention("normal quantile", rows),))
    results = replace(base, refits=(base.refits[0], told, *base.refits[2:]))
    table = tables.conventions(results, ARM)
    assert [[c.text for c in row[:4]] for row in table.rows] == [
        [f"{fit.name} (advised)", "as reported", "−3.1", "−6.4 to 0.2"],
        ["", "normal quantile", "−3.1", "−6.0 to −0.2"],
    ]
    assert tables.conventions(base, ARM) is None
    assert "normal quantile" in Page(report(results)).text
    said = plain(methods_text(results))
    assert "Under other conventions the reported interval of arm: treated is −6.0 to −0.2" in said


def test_what_turns_no_row_is_said_once():
    base = fixture.trial()
    one = replace(base.ledger.tipping[0], value=None, sentence=f"No correlation would take “{ARM}” to zero.")
    two = replace(one, term="age", sentence="No correlation would take age to zero.")
    ledger = replace(base.ledger, tipping=(one, two))
    assert tipping_words(replace(base, ledger=ledger)) == (
        f"No correlation would take “{ARM}” or age to zero.",
    )
    assert tipping_words(base) == (base.ledger.tipping[0].sentence,)


def test_a_mended_mean_brings_its_own_shares():
    base = fixture.trial()
    shares = (
        Share("group", "group:clinic", "clinic", 0.3, 0.1, 0.5),
        Share(None, "row", "single rows", 0.7, 0.5, 0.9),
    )
    repair = Repair(
        "curve in age", "", (), ("clinic",), (), "mixed-intercept", "clinic", base.ledger.standing, shares,
        base.ledger.parameters,
    )  # fmt: skip
    advice = replace(base.advice, state="mean first", repair=repair)
    results = replace(base, advice=advice)
    bar = figures.share_bar(results)
    assert bar.caption == "What the model with a curve in age leaves over, by structure"
    assert "clinic 30" in plain(bar.alt)
    assert "With a curve in age added to the model the shares are: clinic 30 %" in plain(
        methods_text(results)
    )
    said = report_this(results)
    assert said.startswith("With a curve in age in the model, rows were not independent")
    assert "provisional" in said
    assert figures.share_bar(base).caption == "What the model leaves over, by structure"


# ---- rehearsal -------------------------------------------------------------------------------


def rehearsal() -> Rehearsal:
    scores = Scores(
        (
            Score("ordinary", "", 0.71, 0.010, 1.0),
            Score("mixed-intercept", "clinic", 0.946, 0.0035, 2.3),
            Score("cluster-robust", "clinic", 0.951, 0.0035, 2.6),
        )
    )
    truths = (Truth("estimate", "share of clinic 0.18", ("group:clinic",), (0.2,), 1.0),)
    left = (Left("wild-cluster-bootstrap", "clinic", "a short rehearsal has no time for it"),)
    return Rehearsal(truths, (), (), scores, (), left, 400, 0.95, 0, "after 400 replicates")


def test_a_rehearsal_is_told_with_its_error_in_every_place():
    results = replace(fixture.trial(), rehearsal=rehearsal())
    told = plain(" ".join(how_sure(results)))
    assert "the advised interval covers 94.6 % (± 0.7) at the least, the ordinary one 71.0 % (± 2.0)" in told
    assert "Not rehearsed" not in told
    table = rehearsed.table(results)
    assert [r[0].text for r in table.rows] == [
        "mixed model, intercept per clinic (advised)",
        "ordinary fit",
        "cluster-robust, by clinic",
    ]
    assert [r[3].text for r in table.rows] == ["yes", "no", "yes"]  # 0.71 is below 0.95 − 2·0.01 − 0.01
    assert "Wild cluster bootstrap by clinic was not rehearsed" in table.note
    page = Page(report(results)).text
    assert "Rehearsed on this design" in page
    said = plain(methods_text(results))
    assert "400 simulated responses of this design under each of 1 error model (share of clinic 0.18)" in said
    assert "not rehearsed on this design" not in said


def test_without_a_rehearsal_nothing_of_one_is_shown():
    base = fixture.trial()
    assert rehearsed.plate(base) is None
    assert rehearsed.table(base) is None
    assert list(rehearsed.sure(base)) == []
    assert 'id="rehearsal"' not in report(base)


def test_the_rehearsal_figure_puts_each_coverage_at_its_place():
    plate = rehearsed.plate(replace(fixture.trial(), rehearsal=rehearsal()))
    figure = plate.paint(660)
    panel = figure.axes[0]
    points = [line.get_xdata()[0] for line in panel.lines if line.get_marker() == "o"]
    assert points == pytest.approx([94.6, 71.0, 95.1])
    bars = [
        line.get_xdata() for line in panel.lines if len(line.get_xdata()) == 2 and line.get_marker() == "None"
    ]
    assert any(np.allclose(b, [69.0, 73.0]) for b in bars)
    words = " ".join(t.get_text() for t in figure.texts)
    assert "2.30 ×" in words
    assert "promised 95 %" in words


# ---- figures of many parts ---------------------------------------------------------------------


def traces(count: int = 14, band: bool = True) -> Curve:
    time = tuple(float(t) for t in range(6))
    lines = {f"lamb {k}": (time, tuple(math.sin(t + k) for t in time)) for k in range(count)}
    low, high = ((-1.0,) * 6, (1.0,) * 6) if band else ((), ())
    return Curve(
        "traces",
        time if band else (),
        (0.0,) * 6 if band else (),
        low,
        high,
        x_name="day",
        y_name="residual",
        unit="day",
        note="12 of 85 series",
        lines=lines,
    )


@pytest.mark.parametrize("width", [336, 660])
@pytest.mark.parametrize(("count", "band"), [(1, False), (5, True), (12, True)])
def test_traces_stand_on_common_axes_one_panel_for_each_series(width, count, band):
    base = fixture.stream()
    finding = replace(base.evidence[0], more=(traces(count, band),))
    plates = curves.plates(replace(base, evidence=(finding,)))
    assert [p.name for p in plates][1].startswith("traces")
    figure = plates[1].paint(width)
    assert len(figure.axes) == count
    assert len({(*a.get_xlim(), *a.get_ylim()) for a in figure.axes}) == 1
    drawn = figure.axes[0].lines[-1]
    assert list(drawn.get_ydata()) == pytest.approx([math.sin(t) for t in range(6)])
    texts = {t.get_text() for t in figure.texts}
    assert "lamb 0" in texts
    assert "day" in texts  # the unit is the name: said once
    assert len(plates[1].table.rows) == 6 * count
    assert plates[1].note == "12 of 85 series"
    ET.fromstring(plates[1].svg(width))


def test_strips_are_as_wide_as_their_groups_and_parents_end_where_children_do():
    base = fixture.trial()
    outer = GroupSummary("flock", 2, 4, 5.0, 6, 0.28, 0, tree=(6, 4), tree_labels=("Beck", "Dell"))
    inner = GroupSummary(
        "flock/lamb", 4, 2, 2.5, 3, 0.23, 0, "flock", tree=(3, 3, 2, 2), tree_labels=("a", "b", "c", "d")
    )
    case = replace(base.case, n=10, group=(outer, inner), arrangement="nested")
    plate = tree(replace(base, case=case))
    assert plate.alt.startswith("10 rows: 2 flocks of 4 to 6 rows; 4 lambs of 2 to 3 rows. Each stands")
    first, second = plate.paint(660).axes
    assert [b.get_width() for b in first.patches] == [6, 4]
    assert [b.get_x() for b in second.patches] == [0, 3, 6, 8]
    (boundary,) = second.collections
    assert [s[0][0] for s in boundary.get_segments()] == [6]
    assert tree(replace(base, case=replace(case, group=()))) is None
    assert [r[2].raw for r in plate.table.rows] == [6, 4, 3, 3, 2, 2]


def test_neighbours_are_joined_on_the_map_and_said_below_it():
    base = fixture.wells()
    chart = base.evidence[0].curve
    joined = replace(chart, links=((0, 1), (1, 2)))
    figure = curves.paint_map(joined, "spatial", 660)
    line = next(li for li in figure.axes[0].lines if len(li.get_xdata()) == 6)
    x, y = np.array(line.get_xdata()), np.array(line.get_ydata())
    assert x[[0, 1, 3, 4]] == pytest.approx([chart.x[0], chart.x[1], chart.x[1], chart.x[2]])
    assert y[[0, 1, 3, 4]] == pytest.approx([chart.y[0], chart.y[1], chart.y[1], chart.y[2]])
    assert np.isnan(x[[2, 5]]).all()
    assert any("lines: neighbours" in t.get_text() for t in figure.texts)
    bare = curves.paint_map(chart, "spatial", 660)
    assert not any("neighbours" in t.get_text() for t in bare.texts)


def test_an_interval_out_of_all_proportion_runs_out_of_the_panel():
    base = fixture.trial()
    wide = replace(
        base.refits[2], intervals=tuple(replace(r, low=-90.0, high=80.0) for r in base.refits[2].intervals)
    )
    figure = figures.ladder(replace(base, refits=(*base.refits[:2], wide))).paint(660)
    panel = figure.axes[0]
    low, high = panel.get_xlim()
    assert -8 < low < -6.4
    assert 0.2 < high < 2
    arrows = {line.get_marker(): line.get_xdata()[0] for line in panel.lines if line.get_marker() in "<>"}
    assert arrows == {"<": low, ">": high}
    assert any("−90.0 to 80.0" in t.get_text() for t in figure.texts)


def test_many_focus_rows_have_three_rungs_each_on_the_first_screen():
    base = fixture.trial()
    case = replace(base.case, focus=("constant", "arm", "age"))
    few = figures.ladder(replace(base, case=case))
    assert len(few.table.rows) == 12
    names = [f"x{k}" for k in range(5)]
    refits = tuple(
        replace(
            fit, intervals=tuple(replace(fit.get("age"), term=n) for n in names), coefficients=tuple(names)
        )
        for fit in base.refits
    )
    many_rows = replace(base, refits=refits, case=replace(base.case, focus=tuple(names)))
    assert len(figures.ladder(many_rows).table.rows) == 15
    full = figures.ladders(many_rows)
    assert [p.name for p in full] == [f"intervals-all-{k}" for k in range(1, 6)]
    assert [len(p.table.rows) for p in full] == [4] * 5
    assert figures.ladders(base) == ()  # the first screen holds them all


def test_the_label_of_a_rung_is_whole_or_visibly_cut():
    base = fixture.trial()
    long = replace(
        base.refits[1],
        name="random intercept of flock and flock/lamb, with curve in day and so many more words behind it "
        "that no four lines hold them",
    )
    results = replace(base, refits=(base.refits[0], long, *base.refits[2:]))
    figure = figures.ladder(results).paint(660)
    words = [t.get_text() for t in figure.texts]
    start = next(i for i, w in enumerate(words) if w.startswith("advised:"))
    end = next(i for i, w in enumerate(words) if w.startswith("−3.1"))
    lines = words[start:end]
    assert len(lines) == 4
    assert lines[-1].endswith("…")
    assert " ".join(lines)[:-1] in f"advised: {long.name}"


# ---- what was read, drawn --------------------------------------------------------------------


def test_the_time_line_has_a_stroke_for_each_row_where_it_was_taken():
    base = fixture.stream()
    curve = replace(
        traces(2, False), lines={"a": ((0.0, 1.0, 4.0), (1.0, 2.0, 3.0)), "b": ((2.0, 3.0), (0.0, 0.0))}
    )
    results = replace(base, evidence=(replace(base.evidence[0], more=(curve,)), *base.evidence[1:]))
    plate = panels.timeline(results)
    (panel,) = plate.paint(660).axes
    strokes = [[float(s[0][0]) for s in c.get_segments()] for c in panel.collections]
    assert strokes == [[0.0, 1.0, 4.0], [2.0, 3.0]]
    assert [[c.raw for c in row] for row in plate.table.rows] == [["a", 3, 0.0, 4.0], ["b", 2, 2.0, 3.0]]
    assert plate.caption.endswith("2021-03-01 to 2023-03-01")
    assert "31 steps missing" in plate.alt
    assert panels.timeline(fixture.trial()) is None


def test_the_places_are_drawn_where_they_lie_and_it_is_said_when_not_all_are():
    base = fixture.wells()
    plate = places.sites(base)
    dots = plate.paint(660).axes[0].get_lines()[0]
    assert tuple(map(float, dots.get_xdata())) == base.case.spatial.x
    assert tuple(map(float, dots.get_ydata())) == base.case.spatial.y
    assert len(plate.table.rows) == 60
    assert plate.note == ""
    many = replace(base, case=replace(base.case, spatial=replace(base.case.spatial, sites=2500)))
    assert places.sites(many).note == "60 of 2,500 sites are drawn"
    assert places.sites(fixture.trial()) is None


@pytest.mark.slow
def test_many_rows_make_no_large_page():
    """Figures draw a bounded number of marks: ten times the rows leave the page less than twice as large."""
    import pandas as pd

    from clingstone.examination import examine

    sizes = []
    for groups in (25, 250):
        rng = np.random.default_rng(3)
        g = np.repeat(np.arange(groups), 20)
        frame = pd.DataFrame({"g": [f"g{k}" for k in g], "t": np.tile(np.arange(20), groups)})
        frame["x"] = rng.normal(size=len(g))
        frame["y"] = frame["x"] + rng.normal(size=groups)[g] + rng.normal(size=len(g))
        found = examine(frame, model="y ~ x", group="g", time="t", rehearsal="none")
        sizes.append(len(report(found.results).encode()))
    assert sizes[1] < 2 * sizes[0]
    assert sizes[1] < 3_000_000
