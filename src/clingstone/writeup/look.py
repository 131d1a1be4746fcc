"""One look for the report and its figures: hues, marks and names of the structures.

The hues were chosen by search, not by taste: a test computes their smallest difference in normal
sight, in three colour-vision deficiencies and in grey, and the contrast of text with the paper.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, fields


@dataclass(frozen=True)
class Palette:
    """Hex colours by role. No two roles share a hex, so that a figure can be recoloured by role."""

    paper: str
    ink: str
    muted: str  # secondary text
    faint: str  # rules, the null line, grids
    wash: str  # bands and boxes
    group: str
    serial: str
    spatial: str
    row: str
    accent: str  # "advised"


LIGHT = Palette(
    paper="#fbfaf6",
    ink="#1d2226",
    muted="#5a6166",
    faint="#c3c1b8",
    wash="#eeece4",
    group="#188ba3",
    serial="#d37931",
    spatial="#561574",
    row="#d3d9da",
    accent="#95284c",
)

DARK = Palette(
    paper="#15191d",
    ink="#eceae3",
    muted="#a9adae",
    faint="#444b51",
    wash="#20262b",
    group="#30d3c1",
    serial="#f3ca48",
    spatial="#8f65f0",
    row="#4f555c",
    accent="#f85c6d",
)


@dataclass(frozen=True)
class Mark:
    """How one structure is drawn everywhere: role in the palette, marker, hatch, glyph, words."""

    role: str
    marker: str
    hatch: str
    glyph: str
    words: str


MARKS = {
    "group": Mark("group", "s", "", "■", "group"),
    "serial": Mark("serial", "o", "////", "●", "serial"),
    "spatial": Mark("spatial", "^", "xxxx", "▲", "spatial"),
    "row": Mark("row", "D", "", "◇", "row noise"),
}


def mark(structure: str | None) -> Mark:
    """The mark of a structure; what belongs to no structure is row noise."""
    return MARKS.get(structure or "row", MARKS["row"])


def variables(palette: Palette) -> str:
    """The palette as CSS custom properties."""
    return " ".join(f"--{f.name}: {getattr(palette, f.name)};" for f in fields(palette))


def by_role(svg: str) -> str:
    """An SVG whose light-palette colours are replaced by CSS custom properties.

    Only style attributes are touched, never a label that happens to read like a colour.
    """
    svg = re.sub(r' (fill|stroke)="(#[0-9a-f]{6})"', r' style="\1: \2"', svg)
    roles = {getattr(LIGHT, f.name): f"var(--{f.name})" for f in fields(LIGHT)}

    def recolour(match: re.Match[str]) -> str:
        return re.sub(r"#[0-9a-f]{6}", lambda m: roles.get(m.group(), m.group()), match.group())

    return re.sub(r'style="[^"]*"', recolour, svg)
