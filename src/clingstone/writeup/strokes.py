"""Strokes that several figures share: a band, named lines, words above and below a panel."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from clingstone.evidence.finding import Curve
from clingstone.maths.once import Array
from clingstone.writeup.look import LIGHT
from clingstone.writeup.plate import SMALL, say, with_unit

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

LINES: tuple[tuple[str, object], ...] = (("line", "-"), ("dashed", (0, (5, 2))), ("dotted", (0, (1, 1.5))))
SECOND = 17.0  # pixels of a second line of words
LETTER = 0.58 * SMALL


def band(panel: Axes, curve: Curve, x: Array) -> None:
    if curve.low and curve.high:
        panel.fill_between(
            x, curve.low, curve.high, facecolor=LIGHT.wash, edgecolor=LIGHT.faint, linewidth=0.8
        )


def lines(panel: Axes, curve: Curve, color: str) -> str:
    """Draws the named lines of a curve; the words that name them stand above, instead of a legend."""
    told = []
    for k, (name, (x, y)) in enumerate(curve.lines.items()):
        words, style = LINES[k % len(LINES)]
        hue = color if k == 0 else LIGHT.ink
        panel.plot(x, y, color=hue, linewidth=2, linestyle=style)
        told.append(f"{words}: {name}")
    return "; ".join(told)


def line_words(curve: Curve) -> str:
    """What :func:`lines` will say, known before anything is drawn."""
    return "; ".join(f"{LINES[k % len(LINES)][0]}: {name}" for k, name in enumerate(curve.lines))


def room(width: float, left: str, right: str) -> float:
    """Pixels that the words at the two ends of a line need beyond one line: none, or a second line."""
    return SECOND if left and right and (len(left) + len(right) + 2) * LETTER > width else 0.0


def ends(figure: Figure, y: float, left: str, right: str) -> None:
    """Small words at the left and at the right of a line; on two lines where they would meet."""
    width = float(figure.get_size_inches()[0]) * 72
    down = room(width, left, right)
    say(figure, 0, y, left, fontsize=SMALL, color=LIGHT.muted)
    say(figure, width, y + down, right, ha="right", fontsize=SMALL, color=LIGHT.muted)


def foot(curve: Curve, otherwise: str) -> str:
    """The name of the horizontal axis, with its unit."""
    return with_unit(curve.x_name or otherwise, curve.unit)


def gap(x: Array) -> float:
    """The smallest step between distinct values; 1 where there is none."""
    steps = np.diff(np.unique(x))
    return float(steps.min()) if len(steps) else 1.0
