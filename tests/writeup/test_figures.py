"""Figures: what they draw, what they say without eyes, and bytes that depend on the numbers alone."""

from __future__ import annotations

import ast
import re
import subprocess
import sys
import xml.etree.ElementTree as ET
from dataclasses import replace
from itertools import combinations
from pathlib import Path

import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg

from clingstone import evidence as evidence_room
from clingstone.evidence.finding import Curve
from clingstone.writeup import curves, figures, places
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
    # From the checkout, so that no other library's top-level "tests" is found first.
    subprocess.run([sys.executable, "-c", code], check=True, cwd=Path(__file__).parents[2])


def test_the_ladder_draws_every_interval_where_it_lies():
    """The drawn ends are read back from the figure and compared with the rows."""
    results = fixture.trial()
    figure = figures.ladder(results).paint(WIDE)
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


# ---- every kind of curve ---------------------------------------------------------------------


def kinds_in_evidence() -> set[str]:
    """Every kind that a test of this package can give a curve, read from its source."""
    found = set()
    for path in Path(evidence_room.__file__).parent.glob("*.py"):
        tree = ast.parse(path.read_text(encoding="utf-8"))
        shared = any(
            isinstance(node, ast.ImportFrom) and any(a.name == "Curve" for a in node.names)
            for node in ast.walk(tree)
        )
        for node in ast.walk(tree) if shared else ():
            if isinstance(node, ast.Call) and getattr(node.func, "id", "") == "Curve":
                (kind,) = [k.value for k in node.keywords if k.arg == "kind"]
                assert isinstance(kind, ast.Constant), path
                found.add(kind.value)
    return found


def test_every_kind_that_the_evidence_gives_has_a_painter_and_a_caption():
    kinds = kinds_in_evidence()
    assert len(kinds) >= 9
    assert kinds == curves.KINDS
    assert set(curves.CAPTIONS) == kinds


def _curve(kind: str, n: int = 24) -> Curve:
    """A curve of each kind with all that it may hold."""
    rng = np.random.default_rng(6)
    x = tuple(map(float, range(1, n + 1)))
    y = tuple(rng.normal(0, 0.3, n).tolist())
    half = tuple([0.25] * n)
    base = Curve(kind, x, y, tuple(-h for h in half), half, tuple(map(float, range(50, 50 + n))),
                 x_name="distance", y_name="correlation of residuals", unit="km")  # fmt: skip
    words = ("", "above the fit, as its neighbours are", "below the fit among sites above it")
    made = {
        "local-map": replace(base, labels=tuple(words[i % 3] for i in range(n)), high=(), x_name="easting"),
        "map": replace(base, size=y, low=(), high=()),
        "directions": replace(base, x=(0.0, 45.0, 90.0, 135.0), y=y[:4], low=base.low[:4], high=base.high[:4],
                              size=base.size[:4], unit="", y_name="Moran's I along the axis"),
        "left-out": replace(base, low=(), high=(), labels=tuple(f"farm {i}" for i in range(n)), unit="",
                            x_name="farm", y_name="coefficient of Dose without it",
                            lines={"all groups": ((1.0, float(n)), (0.1, 0.1))}),
        "autocorrelation": replace(base, lines={"partial correlation": (x, y), "semivariance": (x, half)}),
        "traces": replace(base, lines={"buoy 1": (x, y), "buoy 2": (x, y[::-1])}),
        "variogram": replace(base, y=half, lines={"robust": (x, half), "fitted": (x, half)}),
        "function": replace(base, lines={"repaired": (x, y), "fitted": (x, half)}),
        "group-means": replace(base, labels=tuple(f"farm {i}" for i in range(n))),
    }  # fmt: skip
    return made.get(kind, base)


@pytest.mark.parametrize("kind", sorted(curves.KINDS))
@pytest.mark.parametrize("width", [WIDE, NARROW])
def test_each_kind_is_drawn_with_words_that_stay_inside_and_apart(kind, width):
    """Each text lies on the paper and meets no other text; its table holds every mark."""
    given = fixture.finding("spatial", "moran", verdict="present", sentence="Near sites are alike.",
                            curve=_curve(kind))  # fmt: skip
    (plate,) = curves.plates(replace(fixture.wells(), evidence=(given,)))
    root = ET.fromstring(plate.svg(width))
    assert [e.text for e in root.iter(f"{SVG}text")]
    assert "Near sites are alike." in plate.alt
    assert len(plate.table.rows) == (48 if kind == "traces" else len(given.curve.y))
    figure = plate.paint(width)
    renderer = FigureCanvasAgg(figure).get_renderer()
    boxes = [(t.get_text(), t.get_window_extent(renderer)) for t in figure.texts if t.get_text()]
    for text, box in boxes:
        assert box.x0 >= -1, text
        assert box.x1 <= width + 1, text
        assert box.y0 >= -1, text
    for (a, one), (b, two) in combinations(boxes, 2):
        assert not one.overlaps(two), (a, b)


def test_the_band_and_the_correlations_of_a_correlogram_lie_where_they_should():
    curve = _curve("correlogram")
    panel, below = curves.paint_autocorrelation(curve, "spatial", WIDE).axes
    (dots,) = [line for line in panel.get_lines() if line.get_marker() == "^"]
    assert tuple(dots.get_xdata()) == curve.x
    assert tuple(dots.get_ydata()) == curve.y
    shade = panel.collections[0].get_paths()[0].vertices
    assert shade[:, 1].max() == 0.25
    assert shade[:, 1].min() == -0.25
    assert [b.get_height() for b in below.patches] == list(curve.size)


def test_lines_beside_correlations_are_hollow_and_a_semivariance_has_its_own_scale():
    curve = _curve("autocorrelation")
    figure = curves.paint_autocorrelation(curve, "serial", WIDE)
    above, between, _ = figure.axes
    hollow = [line for line in above.get_lines() if line.get_markerfacecolor() == "none"]
    assert [tuple(line.get_ydata()) for line in hollow] == [curve.y]
    assert tuple(between.get_lines()[-1].get_ydata()) == (0.25,) * 24
    assert any("partial correlation" in t.get_text() for t in figure.texts)


def test_places_that_stand_out_differ_in_shape_and_face_and_are_counted():
    curve = _curve("local-map")
    figure = places.paint_local(curve, "spatial", WIDE)
    (panel,) = figure.axes
    faint, like, unlike = panel.get_lines()
    assert (faint.get_marker(), like.get_marker(), unlike.get_marker()) == ("o", "^", "D")
    assert unlike.get_markerfacecolor() == LIGHT.paper  # below the fit
    assert like.get_markerfacecolor() == LIGHT.spatial  # above it
    assert len(faint.get_xdata()) == len(like.get_xdata()) == len(unlike.get_xdata()) == 8
    said = " ".join(t.get_text() for t in figure.texts)
    assert "above the fit, as its neighbours are: 8 sites" in said


def test_axes_of_direction_are_drawn_at_their_angle():
    curve = _curve("directions")
    figure = places.paint_directions(curve, "spatial", WIDE)
    (panel,) = figure.axes
    angles = []
    for line in figure.artists:
        (x0, x1), (y0, y1) = line.get_xdata(), line.get_ydata()
        wide, tall = figure.get_size_inches()
        angles.append(float(np.degrees(np.arctan2((y1 - y0) * tall, (x1 - x0) * wide))) % 180)
    assert angles == pytest.approx([0, 45, 90, 135])
    assert [(b.get_x(), b.get_width()) for b in panel.patches] == [(-0.25, 0.5)] * 4


def test_a_left_out_group_is_drawn_against_the_coefficient_with_all():
    curve = _curve("left-out")
    panel = curves.paint_left_out(curve, "lookalike", WIDE).axes[0]
    whole, marks = panel.get_lines()
    assert set(whole.get_xdata()) == {0.1}
    assert tuple(marks.get_xdata()) == curve.y
    given = fixture.finding("lookalike", "group-influence", verdict="present", sentence="x", curve=curve)
    (plate,) = curves.plates(replace(fixture.wells(), evidence=(given,)))
    assert plate.caption == "Coefficient of Dose without each farm in turn"
    assert "all groups: 0.100" in plate.alt


def test_of_many_groups_left_out_the_two_ends_are_named():
    n = curves.LISTED + 60
    y = tuple(np.linspace(-1, 1, n).tolist())
    curve = Curve("left-out", tuple(map(float, range(n))), y, labels=tuple(f"herd {i}" for i in range(n)),
                  x_name="herd", y_name="coefficient of x without it",
                  lines={"all groups": ((0.0, 1.0), (0.1, 0.1))})  # fmt: skip
    figure = curves.paint_left_out(curve, "lookalike", WIDE)
    (words,) = [t.get_text() for t in figure.texts if "herd" in t.get_text()]
    assert words == f"line: all groups; top: herd 0; bottom: herd {n - 1}"
    assert figure.get_size_inches()[1] * 72 < 600
