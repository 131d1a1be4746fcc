"""A plate: one figure with its words and its table, drawn at any width as SVG or PNG."""

from __future__ import annotations

import io
import re
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any
from xml.sax.saxutils import escape

from clingstone.display import Table, clean
from clingstone.maths.once import kept
from clingstone.writeup.look import LIGHT

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from clingstone.results import Results

WIDE = 660.0  # CSS pixels, as wide as the page's column of figures
NARROW = 336.0  # a phone of 360 pixels less its margins
PAGE_FONT = "system-ui, -apple-system, 'Segoe UI', 'Noto Sans', 'Liberation Sans', Arial, sans-serif"
TEXT = 13.5
SMALL = 12.0


@dataclass(frozen=True)
class Plate:
    """A figure.

    name : stem of its files. caption : one line above it. alt : states its finding in words.
    table : the numbers behind it. paint : draws it at a width in CSS pixels.
    quiet : nothing was detected in it, and a page may fold it away. note : what a reader should know
    of how it was drawn.
    """

    name: str
    caption: str
    alt: str
    table: Table
    paint: Callable[[float], Figure]
    quiet: bool = False
    note: str = ""

    def svg(self, width: float = WIDE) -> str:
        """An SVG whose text is text and whose bytes depend on nothing but the numbers."""
        import matplotlib

        settings: dict[str, Any] = {
            "svg.fonttype": "none",
            "svg.hashsalt": f"{self.name}-{width:g}",
            "path.simplify": False,
        }
        out = io.StringIO()
        with matplotlib.rc_context(settings | _LOOK), _any_letter():  # type: ignore[arg-type]
            self.paint(width).savefig(out, format="svg", metadata={"Date": None, "Creator": None})
        return _tidy(out.getvalue(), f"{self.name}-{width:g}", self.caption, self.alt)

    def drawn(self, width: float = WIDE) -> Figure:
        """The figure itself, to be restyled."""
        import matplotlib

        with matplotlib.rc_context(_LOOK):  # type: ignore[arg-type]
            return self.paint(width)

    def png(self, width: float = WIDE, scale: float = 2.0) -> bytes:
        import matplotlib

        out = io.BytesIO()
        with matplotlib.rc_context(_LOOK), _any_letter():  # type: ignore[arg-type]
            self.paint(width).savefig(out, format="png", dpi=72 * scale, metadata={"Software": None})
        return out.getvalue()


def written(results: Results, plate: Plate, width: float = WIDE) -> str:
    """The SVG of a plate of some results, drawn once for the page and for its file."""
    return kept(results, ("svg", plate.name, width), lambda: plate.svg(width))


@contextmanager
def _any_letter() -> Iterator[None]:
    """A label may hold letters that the font measured with lacks: SVG keeps them as text all the same."""
    import warnings

    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", "Glyph .* missing from font")
        yield


_LOOK: dict[str, Any] = {
    "font.family": "sans-serif",
    "font.sans-serif": ["DejaVu Sans"],
    "font.size": TEXT,
    "text.color": LIGHT.ink,
    "axes.edgecolor": LIGHT.faint,
    "axes.labelcolor": LIGHT.muted,
    "axes.unicode_minus": True,
    "axes.linewidth": 1.0,
    "xtick.color": LIGHT.faint,
    "ytick.color": LIGHT.faint,
    "xtick.labelcolor": LIGHT.muted,
    "ytick.labelcolor": LIGHT.muted,
    "hatch.linewidth": 1.2,
    "text.parse_math": False,
}


def blank(width: float, height: float) -> Figure:
    """A figure whose point is one CSS pixel, on paper. Drawn without pyplot."""
    from matplotlib.figure import Figure

    return Figure(figsize=(width / 72, height / 72), dpi=72, facecolor=LIGHT.paper)


def axes(figure: Figure, left: float, top: float, width: float, height: float) -> Axes:
    """Axes at a place given in pixels from the top left corner; only the bottom rule is drawn."""
    whole = figure.get_size_inches() * 72
    box = (left / whole[0], 1 - (top + height) / whole[1], width / whole[0], height / whole[1])
    panel = figure.add_axes(box, facecolor="none")
    for side in ("top", "right", "left"):
        panel.spines[side].set_visible(False)
    panel.tick_params(length=3, labelsize=SMALL, pad=3)
    return panel


def say(figure: Figure, x: float, y: float, text: str, **style: object) -> None:
    """Text at pixels from the top left; by default small, ink, left, centred on its line."""
    whole = figure.get_size_inches() * 72
    kept: dict[str, object] = {
        "fontsize": TEXT,
        "va": "center_baseline",
        "ha": "left",
        "color": LIGHT.ink,
        **style,
    }
    figure.text(x / whole[0], 1 - y / whole[1], clean(text), **kept)  # type: ignore[arg-type]


def clip(text: str, room: float, size: float = TEXT) -> str:
    """A label shortened to about ``room`` pixels; the whole label stands in the table behind."""
    most = max(4, int(room / (0.56 * size)))
    return text if len(text) <= most else text[: most - 1].rstrip() + "…"


TIMES = ("second", "minute", "hour", "day", "week", "month", "quarter", "year", "step")


def many(unit: str) -> str:
    """A unit behind a number or on an axis: days, but km."""
    return f"{unit}s" if unit in TIMES else unit


def with_unit(name: str, unit: str) -> str:
    """The label of an axis; a unit that the name already says is left out."""
    unit = "" if name.casefold() in (unit.casefold(), many(unit).casefold()) else many(unit)
    return f"{name} ({unit})" if unit and name else name or unit


def few_ticks(panel: Axes, which: str = "x", most: int = 5) -> None:
    """At most so many round ticks, with a true minus and no offset text."""
    from matplotlib.ticker import FuncFormatter, MaxNLocator

    from clingstone.display import number

    axis = panel.xaxis if which == "x" else panel.yaxis
    axis.set_major_locator(MaxNLocator(most, steps=[1, 2, 5, 10]))
    ticks = axis.get_majorticklocs()
    step = float(abs(ticks[1] - ticks[0])) if len(ticks) > 1 else 1.0
    places = _places(step)
    axis.set_major_formatter(FuncFormatter(lambda value, _: number(float(value), places, grouped=False)))


def _places(step: float) -> int:
    places = 0
    while places < 9 and abs(step * 10**places - round(step * 10**places)) > 1e-6:
        places += 1
    return places


def _tidy(svg: str, prefix: str, caption: str, alt: str) -> str:
    """Drops the XML preamble and fixed size, makes ids unique on a page, names the figure for everyone."""
    svg = svg[svg.index("<svg") :]
    svg = re.sub(r"<metadata>.*?</metadata>", "", svg, flags=re.S)
    svg = re.sub(r'(<svg[^>]*?) height="[^"]*"', r"\1", svg, count=1)
    svg = re.sub(r'(<svg[^>]*?) width="[^"]*"', r"\1", svg, count=1)
    svg = re.sub(r'\bid="([^"]+)"', rf'id="{prefix}-\1"', svg)
    svg = re.sub(r"url\(#([^)]+)\)", rf"url(#{prefix}-\1)", svg)
    svg = re.sub(r'href="#([^"]+)"', rf'href="#{prefix}-\1"', svg)
    svg = re.sub(r"<defs>\s*<style.*?</style>\s*</defs>", "", svg, count=1, flags=re.S)
    svg = re.sub(r" font-family: 'DejaVu Sans'[^;\"]*;", "", svg)
    head = (
        f'role="img" aria-labelledby="{prefix}-title {prefix}-desc" '
        f'style="max-width: 100%; font-family: {PAGE_FONT}; stroke-linejoin: round"'
    )
    told = {"title": caption, "desc": alt}
    words = "".join(f'<{tag} id="{prefix}-{tag}">{escape(clean(text))}</{tag}>' for tag, text in told.items())
    svg = svg.replace("<svg ", f"<svg {head} ", 1)
    return svg.replace(">", f">\n{words}", 1).strip() + "\n"
