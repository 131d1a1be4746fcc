"""The palette is chosen by test: differences in every sight, contrast of every text."""

from __future__ import annotations

from dataclasses import astuple
from itertools import combinations

import numpy as np
import pytest

from clingstone.writeup.look import DARK, LIGHT, MARKS, Palette, by_role, mark, variables

colorspacious = pytest.importorskip("colorspacious")

ROLES = ("group", "serial", "spatial", "row", "accent")
# Smallest differences asked for. A difference of about 2 in CAM02-UCS is just noticeable (Luo, Cui
# and Li 2006, from memory); areas and markers of a few pixels need several times that.
APART = 15.0
APART_IN_GREY = 7.0
SIGHTS = {
    "normal": None,
    **{
        kind: {"name": "sRGB1+CVD", "cvd_type": kind, "severity": 100}
        for kind in ("protanomaly", "deuteranomaly", "tritanomaly")
    },
}


def _rgb(hex_: str) -> np.ndarray:
    return np.array([int(hex_[i : i + 2], 16) / 255 for i in (1, 3, 5)])


def _contrast(a: str, b: str) -> float:
    """Contrast ratio of WCAG 2: relative luminances, lighter over darker."""

    def luminance(hex_: str) -> float:
        c = _rgb(hex_)
        linear = np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4)
        return float(linear @ [0.2126, 0.7152, 0.0722])

    low, high = sorted((luminance(a), luminance(b)))
    return (high + 0.05) / (low + 0.05)


def test_contrast_of_black_on_white_is_21():
    assert _contrast("#000000", "#ffffff") == pytest.approx(21.0)


@pytest.mark.parametrize("palette", [LIGHT, DARK], ids=["light", "dark"])
@pytest.mark.parametrize("sight", SIGHTS)
def test_structures_differ_in_every_sight(palette: Palette, sight: str):
    colours = np.array([_rgb(getattr(palette, role)) for role in ROLES])
    if SIGHTS[sight]:
        colours = np.clip(colorspacious.cspace_convert(colours, SIGHTS[sight], "sRGB1"), 0, 1)
    seen = colorspacious.cspace_convert(colours, "sRGB1", "CAM02-UCS")
    least = min(float(np.linalg.norm(a - b)) for a, b in combinations(seen, 2))
    assert least >= APART


@pytest.mark.parametrize("palette", [LIGHT, DARK], ids=["light", "dark"])
def test_structures_differ_in_grey(palette: Palette):
    colours = np.array([_rgb(getattr(palette, role)) for role in ROLES])
    lightness = colorspacious.cspace_convert(colours, "sRGB1", "CAM02-UCS")[:, 0]
    assert min(abs(a - b) for a, b in combinations(lightness, 2)) >= APART_IN_GREY


@pytest.mark.parametrize("palette", [LIGHT, DARK], ids=["light", "dark"])
def test_text_has_contrast_on_paper_and_in_boxes(palette: Palette):
    for text in (palette.ink, palette.muted, palette.accent):
        for ground in (palette.paper, palette.wash):
            assert _contrast(text, ground) >= 4.5
    # Marks are graphics: 3 to 1 (WCAG 2.1, 1.4.11); row noise is outlined in ink instead.
    for role in ("group", "serial", "spatial", "accent"):
        assert _contrast(getattr(palette, role), palette.paper) >= 3.0


def test_marks_differ_without_colour():
    assert len({m.marker for m in MARKS.values()}) == len(MARKS)
    assert len({m.glyph for m in MARKS.values()}) == len(MARKS)
    assert len({MARKS[k].hatch for k in ("group", "serial", "spatial")}) == 3
    assert mark(None).words == "row noise"


def test_roles_have_hexes_of_their_own():
    for palette in (LIGHT, DARK):
        assert len(set(astuple(palette))) == len(astuple(palette))


def test_recolouring_touches_style_and_never_labels():
    svg = f'<path style="fill: {LIGHT.group}"/><rect fill="{LIGHT.paper}"/><text>{LIGHT.ink}</text>'
    out = by_role(svg)
    assert 'style="fill: var(--group)"' in out
    assert 'style="fill: var(--paper)"' in out
    assert f"<text>{LIGHT.ink}</text>" in out
    assert f"--ink: {DARK.ink};" in variables(DARK)
