"""Numbers in words and figures, and one table with many renderings.

Every number that a person reads, in the terminal, the report or the methods text, is formatted
here, so that the same number looks the same everywhere. Nothing here rounds before a decision:
formatting is the last step.
"""

from __future__ import annotations

import csv
import io
import math
import textwrap
import unicodedata
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from html import escape
from typing import Literal

MINUS = "−"
NBSP = "\u00a0"
THIN = "\u202f"  # narrow no-break space, between thousands
FIGURE = "\u2007"  # as wide as a digit: pads decimals so that columns align
POINT = "\u2008"  # as wide as a full stop
MISSING = "—"
COLUMNS = 80

_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def decimals_for(se: float, significant: int = 2) -> int:
    """Decimals such that ``significant`` digits of a standard error are shown; may be negative.

    Digits follow uncertainty: two significant digits of the standard error decide those of the
    estimate. A standard error that is zero or not finite decides nothing, and 2 is returned.
    """
    if not math.isfinite(se) or se <= 0:
        return 2
    # Rounding may carry into the next decade: 0.0996 to two digits is 0.10.
    lead = int(f"{se:.{significant - 1}e}".split("e")[1])
    return significant - 1 - lead


def number(value: float, decimals: int) -> str:
    """A number with a true minus sign, grouped thousands and ``decimals`` (negative: rounded to tens …)."""
    if math.isnan(value):
        return MISSING
    if math.isinf(value):
        return "∞" if value > 0 else f"{MINUS}∞"
    rounded = round(value, decimals)
    if rounded != 0 and (decimals > 6 or abs(rounded) >= 1e9):
        return _scientific(value, max(1, decimals + 1 + math.floor(math.log10(abs(rounded)))))
    body = f"{abs(rounded):,.{max(0, decimals)}f}"
    if "," in body and abs(rounded) < 10_000:
        body = body.replace(",", "")
    return (MINUS if rounded < 0 else "") + body.replace(",", THIN)


def significant(value: float, digits: int = 2) -> str:
    """A number to so many significant digits; powers of ten where zeros would have to be counted."""
    if not math.isfinite(value) or value == 0:
        return number(value, 0)
    if not 1e-4 <= abs(value) < 1e7:
        return _scientific(value, digits)
    return number(value, decimals_for(abs(value), digits))


def _scientific(value: float, digits: int) -> str:
    mantissa, power = f"{abs(value):.{max(0, digits - 1)}e}".split("e")
    sign = MINUS if value < 0 else ""
    return f"{sign}{mantissa}{NBSP}×{NBSP}10{superscript(int(power))}"


def superscript(value: int) -> str:
    return str(value).translate(_SUPERSCRIPT)


def span(low: float, high: float, decimals: int) -> str:
    """A range in figures: "−6.4 to 0.2"."""
    return f"{number(low, decimals)} to {number(high, decimals)}"


def percent(share: float) -> str:
    """A share as "18 %": whole numbers, finer below 1 and above 99."""
    if not math.isfinite(share):
        return MISSING
    return f"{_hundredths(share)}{NBSP}%"


def percent_span(low: float, high: float) -> str:
    """A range of shares: "6 to 41 %"."""
    return f"{_hundredths(low)} to {_hundredths(high)}{NBSP}%"


def _hundredths(share: float) -> str:
    if not math.isfinite(share):
        return MISSING
    value = 100 * share
    size = abs(value)
    if size >= 0.995 and not 99 < size < 100:
        return number(value, 0)
    if 99 < size < 100:
        return "more than 99.9" if size > 99.95 else number(value, 1)
    if size < 0.005:
        return "0"
    return number(value, decimals_for(size, 1))


def p_value(p: float) -> str:
    """A p-value with its letter: "p = 0.003", "p = 4 × 10⁻⁵", "p < 10⁻⁶"."""
    if math.isnan(p):
        return "p not available"
    return f"p{NBSP}{p_figure(p, equals=True)}"


def p_figure(p: float, *, equals: bool = False) -> str:
    """The figure alone, for a table column headed p."""
    sign = f"={NBSP}" if equals else ""
    if math.isnan(p):
        return MISSING
    if p < 1e-6:
        return f"<{NBSP}10{superscript(-6)}"
    if p < 0.0005:
        return sign + _scientific(p, 1)
    if p < 0.0995:
        return sign + number(p, max(3, decimals_for(p, 1)))
    if p <= 0.99:
        return sign + number(p, 2)
    return f">{NBSP}0.99"


def times(factor: float) -> str:
    """How an interval changes: "2.3 times as wide"; a factor that shows as 1.0 is "about as wide"."""
    shown = significant(factor)
    return "about as wide" if shown == "1.0" else f"{shown} times as wide"


def degrees(df: float) -> str:
    """Degrees of freedom: one decimal below 100, whole above; "∞" for a normal reference."""
    if not math.isfinite(df):
        return number(df, 0)
    return number(df, 0) if df == round(df) or df >= 100 else number(df, 1)


def count(n: int, noun: str, plural: str = "") -> str:
    """ "1 clinic", "12 clinics", "1 series" """
    return f"{number(n, 0)} {noun if n == 1 else plural or plural_of(noun)}"


def plural_of(noun: str) -> str:
    """The plural of a plain English noun; column names in other tongues merely get an s."""
    if noun.endswith("series"):
        return noun
    if noun.endswith(("s", "x", "ch", "sh")):
        return noun + "es"
    if noun.endswith("y") and noun[-2:-1] not in tuple("aeiou"):
        return noun[:-1] + "ies"
    return noun + "s"


def listed(items: Iterable[str], last: str = "and") -> str:
    """ "a", "a and b", "a, b and c" """
    words = list(items)
    if len(words) < 2:
        return "".join(words)
    return f"{', '.join(words[:-1])} {last} {words[-1]}"


def clean(text: str) -> str:
    """One printable line: control characters of a label never reach a terminal or a page."""
    spaced = "".join(" " if c in "\t\r\n\v\f" else c for c in text)
    return "".join("\ufffd" if unicodedata.category(c) in ("Cc", "Cf", "Cs") else c for c in spaced)


def columns_of(text: str) -> int:
    """Terminal columns of a text: wide characters take two, combining ones none."""
    wide = sum(2 if unicodedata.east_asian_width(c) in "WF" else 1 for c in text)
    return wide - sum(1 for c in text if unicodedata.combining(c))


def pad(text: str, width: int, right: bool = False) -> str:
    space = " " * max(0, width - columns_of(text))
    return space + text if right else text + space


def wrapped(text: str, width: int = COLUMNS, indent: str = "", hang: str | None = None) -> list[str]:
    """Lines of at most ``width`` columns; a no-break space never breaks."""
    return textwrap.wrap(
        clean(text),
        width,
        initial_indent=indent,
        subsequent_indent=indent if hang is None else hang,
        break_long_words=True,
        break_on_hyphens=False,
    ) or [indent.rstrip()]


def align_decimals(texts: Sequence[str]) -> list[str]:
    """Pads on the right so that decimal points stand under each other in tabular figures."""
    tails = [len(t) - t.rindex(".") - 1 if _has_point(t) else -1 for t in texts]
    most = max(tails, default=-1)
    if most < 0:
        return list(texts)
    out = []
    for text, tail in zip(texts, tails, strict=True):
        numeric = text[-1:].isdigit()
        missing = (POINT + FIGURE * most) if tail < 0 else FIGURE * (most - tail)
        out.append(text + missing if numeric else text)
    return out


def _has_point(text: str) -> bool:
    return "." in text and text[-1].isdigit() and text[text.rindex(".") + 1 :].isdigit()


Align = Literal["left", "right", "decimal"]
Raw = str | float | int | None


@dataclass(frozen=True)
class Column:
    """Head as a reader sees it, key as a file names it."""

    key: str
    head: str
    align: Align = "left"


@dataclass(frozen=True)
class Cell:
    """What is shown, and the unrounded value that goes into a file."""

    text: str
    raw: Raw = None


def cell(value: Raw | Cell, text: str | None = None) -> Cell:
    """A cell from a value and, for numbers, the text that shows it."""
    if isinstance(value, Cell):
        return value
    return Cell(str(value) if text is None else text, value)


@dataclass(frozen=True)
class Table:
    """One table; text, HTML, LaTeX and CSV all read it, and none formats a number again."""

    caption: str
    columns: tuple[Column, ...]
    rows: tuple[tuple[Cell, ...], ...]
    note: str = ""

    @classmethod
    def of(
        cls, caption: str, columns: Iterable[Column], rows: Iterable[Iterable[Raw | Cell]], note: str = ""
    ) -> Table:
        heads = tuple(columns)
        body = tuple(tuple(cell(c) for c in row) for row in rows)
        for row in body:
            if len(row) != len(heads):
                raise ValueError(f"a row of {len(row)} cells in a table of {len(heads)} columns")
        return cls(caption, heads, body, note)

    def without_empty(self) -> Table:
        """The same table without columns in which no row has a word to show."""
        kept = [j for j in range(len(self.columns)) if j == 0 or any(row[j].text for row in self.rows)]
        columns = tuple(self.columns[j] for j in kept)
        return Table(self.caption, columns, tuple(tuple(r[j] for j in kept) for r in self.rows), self.note)

    def shown(self) -> list[list[str]]:
        """Cell texts, decimals aligned, column by column turned back into rows."""
        texts = [[clean(c.text) for c in row] for row in self.rows]
        for j, column in enumerate(self.columns):
            if column.align == "decimal":
                for row, text in zip(texts, align_decimals([r[j] for r in texts]), strict=True):
                    row[j] = text
        return texts

    def to_text(self, width: int = COLUMNS, indent: str = "  ") -> str:
        """Plain text within ``width`` columns: long words wrap, and what cannot fit is stacked."""
        body = self.shown()
        heads = [c.head for c in self.columns]
        widths = [max(columns_of(r[j]) for r in [heads, *body]) for j in range(len(heads))]
        fitted = _shrink(widths, [c.align == "left" for c in self.columns], width - len(indent))
        if fitted is None:
            lines = self._stacked(heads, body, width, indent)
        else:
            lines = self._ruled(heads, body, fitted, indent)
        title = wrapped(self.caption, width) if self.caption else []
        note = wrapped(self.note, width, indent) if self.note else []
        return "\n".join([*title, *lines, *note])

    def _ruled(self, heads: list[str], body: list[list[str]], widths: list[int], indent: str) -> list[str]:
        lines = _grid(heads, widths, self.columns, indent)
        lines.append((indent + "  ".join("─" * w for w in widths)).rstrip())
        for row in body:
            lines += _grid(row, widths, self.columns, indent)
        return lines

    def _stacked(self, heads: list[str], body: list[list[str]], width: int, indent: str) -> list[str]:
        lines: list[str] = []
        for row in body:
            lines += wrapped(row[0], width, indent)
            for head, text in zip(heads[1:], row[1:], strict=True):
                lines += wrapped(f"{head}: {text.strip()}", width, indent + "  ", indent + "    ")
        return lines

    def to_html(self) -> str:
        """A table element with a caption and scoped heads; every text is escaped."""
        kinds = ["" if c.align == "left" else ' class="figure"' for c in self.columns]
        heads = "".join(
            f'<th scope="col"{k}>{escape(c.head)}</th>' for c, k in zip(self.columns, kinds, strict=True)
        )
        lines = [f"<table><caption>{escape(clean(self.caption))}</caption>"]
        lines.append(f"<thead><tr>{heads}</tr></thead><tbody>")
        for row in self.shown():
            first = f'<th scope="row">{escape(row[0])}</th>'
            rest = "".join(f"<td{k}>{escape(t)}</td>" for t, k in zip(row[1:], kinds[1:], strict=True))
            lines.append(f"<tr>{first}{rest}</tr>")
        lines.append("</tbody></table>")
        if self.note:
            lines.append(f'<p class="note">{escape(clean(self.note))}</p>')
        return "\n".join(lines)

    def to_latex(self) -> str:
        """A tabular with head rules only (booktabs); every text is escaped."""
        spec = "".join("l" if c.align == "left" else "r" for c in self.columns)
        lines = [f"% {clean(self.caption)}", f"\\begin{{tabular}}{{{spec}}}", "\\toprule"]
        lines += [" & ".join(latex(c.head) for c in self.columns) + r" \\", "\\midrule"]
        lines += [" & ".join(latex(t) for t in row) + r" \\" for row in self.shown()]
        return "\n".join([*lines, "\\bottomrule", "\\end{tabular}"])

    def to_csv(self) -> str:
        """Unrounded values under the columns' keys; empty where a number is missing."""
        out = io.StringIO()
        writer = csv.writer(out, lineterminator="\n")
        writer.writerow([c.key for c in self.columns])
        for row in self.rows:
            writer.writerow([_plain(c) for c in row])
        return out.getvalue()


def _plain(c: Cell) -> str:
    if c.raw is None:
        return ""
    if isinstance(c.raw, float):
        return "" if math.isnan(c.raw) else repr(float(c.raw))
    return str(c.raw)


def _shrink(widths: list[int], flexible: list[bool], room: int) -> list[int] | None:
    """Column widths that fit in ``room``, narrowing the widest text columns; None if they cannot."""
    fitted, least = list(widths), 12
    gaps = 2 * (len(widths) - 1)
    while sum(fitted) + gaps > room:
        wide = max((w for w, f in zip(fitted, flexible, strict=True) if f), default=0)
        if wide <= least:
            return None
        fitted[next(j for j, w in enumerate(fitted) if flexible[j] and w == wide)] -= 1
    return fitted


def _grid(row: Sequence[str], widths: list[int], columns: Sequence[Column], indent: str) -> list[str]:
    """One table row as text lines; long text cells wrap within their column."""
    parts = [
        wrapped(t, w) if c.align == "left" else [t] for t, w, c in zip(row, widths, columns, strict=True)
    ]
    lines = []
    for k in range(max(len(p) for p in parts)):
        cells = [
            pad(p[k] if k < len(p) else "", w, c.align != "left")
            for p, w, c in zip(parts, widths, columns, strict=True)
        ]
        lines.append((indent + "  ".join(cells)).rstrip(" "))
    return lines


_LATEX = {
    "\\": r"\textbackslash{}", "&": r"\&", "%": r"\%", "$": r"\$", "#": r"\#", "_": r"\_", "{": r"\{",
    "}": r"\}", "~": r"\textasciitilde{}", "^": r"\textasciicircum{}", "<": r"\textless{}",
    ">": r"\textgreater{}", MINUS: "$-$", "×": r"$\times$", "∞": r"$\infty$", NBSP: "~", THIN: r"\,",
    FIGURE: r"\phantom{0}", POINT: r"\phantom{.}", "ρ": r"$\rho$", "—": "---",
    "⁻": r"\textsuperscript{$-$}",
    **{s: rf"\textsuperscript{{{d}}}" for d, s in enumerate("⁰¹²³⁴⁵⁶⁷⁸⁹")},
}  # fmt: skip


def latex(text: str) -> str:
    """Text that LaTeX prints as written."""
    return "".join(_LATEX.get(c, c) for c in text)
