"""Figures: what they draw, what they say without eyes, and bytes that depend on the numbers alone."""

from __future__ import annotations

import re
import subprocess
import sys
import xml.etree.ElementTree as ET
from dataclasses import replace

import numpy as np
import pytest

from clingstone.evidence.finding import Curve
from clingstone.writeup import curves, figures
from clingstone.writeup.look import LIGHT
from clingstone.writeup.plate import NARROW, WIDE
from clingstone.writeup.save import plates
from tests.writeup import fixture

SVG = "{http://www.w3.org/2000/svg}"


def _all():
    return [(n, p) for n in ("trial", "stream", "wells") for p in plates(getattr(fixture, n)())]


@pytest.mark.parametrize(("case", "plate"), _all(), ids=lambda v: getattr(v, "name", v))
def test_every_figure_is_text_that_parses_and_names_itself(case, plate):
    for width in (WIDE, NARROW):
        root = ET.fromstring(plate.svg(width))
        texts = [e.text for e in root.iter(f"{SVG}text")]
        assert texts  # text stays text
        assert "<image" not in plate.svg(width)
        ids = [e.get("id") for e in root.iter() if e.get("id")]
        assert len(ids) == len(set(ids))
        named = (root.get("aria-labelledby") or "").split()
        words = {e.get("id"): e.text for e in root.iter() if e.get("id") in named}
        assert words[named[0]] == plate.caption
        assert words[named[1]] == plate.alt
    assert len(plate.alt) > 20
    assert plate.table.rows


def test_bytes_depend_on_the_numbers_alone():
    first, second = fixture.trial(), fixture.trial()
    for a, b in zip(plates(first), plates(second), strict=True):
        assert a.svg() == b.svg()
        assert a.png() == b.png()
        assert not re.search(r"20\d\d-\d\d-\d\dT", a.svg())


def test_ids_of_figures_on_one_page_do_not_meet():
    seen: set[str] = set()
    for plate in plates(fixture.trial()):
        for width in (WIDE, NARROW):
            ids = set(re.findall(r'\bid="([^"]+)"', plate.svg(width)))
            assert not ids & seen
            seen |= ids


def test_png_is_a_picture_of_the_asked_size():
    png = figures.ladder(fixture.trial()).png(WIDE, scale=2)
    assert png[:8] == b"\x89PNG\r\n\x1a\n"
    assert int.from_bytes(png[16:20]) == 2 * WIDE


def test_no_figure_needs_a_window_system():
    code = (
        "import sys; from tests.writeup import fixture; from clingstone.writeup import figures\n"
        "figures.ladder(fixture.trial()).svg(); assert 'matplotlib.pyplot' not in sys.modules"
    )
    subprocess.run([sys.executable, "-c", code], check=True)


def test_the_ladder_draws_every_interval_where_it_lies():
    """The drawn ends are read back from the figure and compared with the rows."""
    results = fixture.trial()
    figure = figures.ladder(results, None).paint(WIDE)
    (panel,) = figure.axes
    lines = [
        line for line in panel.get_lines() if line.get_linestyle() != "None" and len(line.get_xdata()) == 2
    ]
    drawn = {tuple(round(float(v), 6) for v in line.get_xdata()) for line in lines}
    arm = [r for fit in results.refits for r in fit.intervals if r.term == "arm: treated"]
    for row in arm:
        assert (round(row.low, 6), round(row.high, 6)) in drawn
    assert (0.0, 0.0) in drawn  # the null line


def test_advised_is_solid_and_first_and_ordinary_is_hollow():
    results = fixture.trial()
    panel = figures.ladder(results).paint(WIDE).axes[0]
    dots = [line for line in panel.get_lines() if len(line.get_xdata()) == 1]
    assert dots[0].get_markerfacecolor() == LIGHT.accent
    assert dots[0].get_ydata()[0] < dots[1].get_ydata()[0]
    assert dots[1].get_markerfacecolor() == LIGHT.paper
    assert "advised: mixed model" in figures.ladder(results).table.rows[0][1].text


def test_the_ladder_tells_its_finding_in_words():
    alt = figures.ladder(fixture.trial()).alt
    assert "−6.4 to 0.2" in alt
    assert "−4.5 to −1.7" in alt
    # widths: 2·2.2165·1.49 = 6.61 over 2·1.9658·0.71 = 2.79 (t quantiles from tables) is 2.4
    assert "2.4 times as wide" in alt


def test_a_row_that_cannot_be_served_is_left_out_of_the_ladder():
    results = fixture.trial()
    fit = results.refits[2]
    rows = tuple(replace(r, estimate=float("nan")) if r.term == "arm: treated" else r for r in fit.intervals)
    results = replace(results, refits=(*results.refits[:2], replace(fit, intervals=rows), results.refits[3]))
    labels = [row[1].text for row in figures.ladder(results).table.rows]
    assert not any("cluster-robust" in label for label in labels)


def test_nothing_fitted_means_no_ladder():
    assert figures.ladder(replace(fixture.trial(), refits=())) is None


def test_share_bar_sums_to_the_whole_and_states_its_intervals():
    plate = figures.share_bar(fixture.trial())
    bar = plate.paint(WIDE).axes[0]
    assert sum(p.get_width() for p in bar.patches) == pytest.approx(1.0)
    assert bar.patches[0].get_width() == pytest.approx(0.18)
    assert "clinic 18\u00a0% (6 to 41\u00a0%)" in plate.alt


def test_groups_are_sorted_and_thicker_with_more_rows():
    figure = curves.plates(fixture.trial())[0].paint(WIDE)
    lines = [line for line in figure.axes[0].get_lines() if len(line.get_xdata()) == 2 and line.get_alpha()]
    middles = [float(np.mean(line.get_xdata())) for line in lines]
    assert middles == sorted(middles)
    widths = {float(line.get_linewidth()) for line in lines}
    assert len(widths) > 6


def test_the_scale_bar_is_a_round_length_drawn_to_scale():
    """In the plane a bar of 2 km spans 2 km of the axes; its pixels are compared with the axes' own."""
    plate = next(p for p in curves.plates(fixture.wells()) if p.name.startswith("map"))
    figure = plate.paint(WIDE)
    (bar,) = figure.artists
    panel = figure.axes[0]
    words = next(t.get_text() for t in figure.texts if t.get_text().endswith(" km"))
    length = float(words.split()[0])
    figure.draw_without_rendering()
    ends = figure.transFigure.transform([(x, 0.5) for x in bar.get_xdata()])
    per_km = panel.transData.transform([(432, 515), (433, 515)])
    assert (ends[1, 0] - ends[0, 0]) / (per_km[1, 0] - per_km[0, 0]) == pytest.approx(length, rel=0.01)


def test_a_degree_of_longitude_shrinks_with_latitude():
    """At 60° north a degree of longitude is half of 111.2 km (cos 60° = 1/2)."""
    chart = Curve("map", (10.0, 11.0, 12.0), (59.9, 60.1, 60.0), size=(1.0, -1.0, 0.5))
    figure = curves.paint_map(chart, "spatial", WIDE, lonlat=True)
    figure.draw_without_rendering()
    panel = figure.axes[0]
    (bar,) = figure.artists
    words = next(t.get_text() for t in figure.texts if t.get_text().endswith(" km"))
    ends = figure.transFigure.transform([(x, 0.5) for x in bar.get_xdata()])
    degree = panel.transData.transform([(10, 60), (11, 60)])
    km = (ends[1, 0] - ends[0, 0]) / (degree[1, 0] - degree[0, 0]) * 111.195 / 2
    assert km == pytest.approx(float(words.split()[0]), rel=0.01)
    north = panel.transData.transform([(10, 60), (10, 61)])
    assert (north[1, 1] - north[0, 1]) / (degree[1, 0] - degree[0, 0]) == pytest.approx(2.0, rel=0.01)


def test_hostile_labels_stay_text():
    for plate in plates(fixture.trial("</text><script>x</script>$\\frac{1}{2}$")):
        root = ET.fromstring(plate.svg())
        assert not list(root.iter(f"{SVG}script"))
        assert not list(root.iter("script"))


@pytest.mark.parametrize("count", [1, 2, 41, 900])
def test_few_and_many_groups_are_drawn(count):
    rng = np.random.default_rng(1)
    y = rng.normal(size=count)
    curve = Curve(
        "group-means", tuple(map(float, range(count))), tuple(y), tuple(y - 1), tuple(y + 1), (3.0,) * count,
        tuple(f"g{i}" for i in range(count)), "school", "mean residual",
    )  # fmt: skip
    figure = curves.paint_groups(curve, "group", WIDE)
    assert figure.get_size_inches()[1] * 72 < 1200
    assert sum(t.get_text().startswith("g") for t in figure.texts) == (count if count <= curves.LISTED else 0)
