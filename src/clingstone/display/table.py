"""One table with many renderings: text, HTML, LaTeX and CSV read the same cells."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from html import escape
from typing import Literal

from clingstone.display.numbers import MINUS, NBSP
from clingstone.display.words import COLUMNS, clean, columns_of, pad, wrapped

FIGURE = "\u2007"  # as wide as a digit: pads decimals so that columns align
POINT = "\u2008"  # as wide as a full stop

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

    @property
    def heads(self) -> list[str]:
        return [clean(c.head) for c in self.columns]

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
        heads = self.heads
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
            f'<th scope="col"{k}>{escape(head)}</th>' for head, k in zip(self.heads, kinds, strict=True)
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
        lines += [" & ".join(map(latex, self.heads)) + r" \\", "\\midrule"]
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
    ">": r"\textgreater{}", MINUS: "$-$", "×": r"$\times$", "∞": r"$\infty$", NBSP: "~",
    FIGURE: r"\phantom{0}", POINT: r"\phantom{.}", "ρ": r"$\rho$", "—": "---",
    "⁻": r"\textsuperscript{$-$}",
    **{s: rf"\textsuperscript{{{d}}}" for d, s in enumerate("⁰¹²³⁴⁵⁶⁷⁸⁹")},
    **{s: rf"\textsubscript{{{d}}}" for d, s in enumerate("₀₁₂₃₄₅₆₇₈₉")},
    **{s: rf"$\{name}$" for s, name in zip("αβγδεηθκλμνπστφχψωΓΔΘΛΣΦΨΩ", (
        "alpha", "beta", "gamma", "delta", "varepsilon", "eta", "theta", "kappa", "lambda", "mu", "nu", "pi",
        "sigma", "tau", "varphi", "chi", "psi", "omega", "Gamma", "Delta", "Theta", "Lambda", "Sigma", "Phi",
        "Psi", "Omega"), strict=True)},
    **{s: rf"$\{name}$" for s, name in zip("±·√≥≤→↔‖⌈⌉⌊⌋", (
        "pm", "cdot", "surd", "ge", "le", "to", "leftrightarrow", "Vert", "lceil", "rceil", "lfloor",
        "rfloor"), strict=True)},
    "′": "$'$", "…": r"\ldots{}", "–": "--", "½": r"$\frac12$", "⅔": r"$\frac23$", "°": r"$^\circ$",
    "\ufffd": r"\fbox{?}", "⁺": r"\textsuperscript{+}", "ᵢ": r"\textsubscript{i}",
    "₍": r"\textsubscript{(}", "₎": r"\textsubscript{)}",
}  # fmt: skip


def latex(text: str) -> str:
    """Text that LaTeX prints as written."""
    return "".join(_LATEX.get(c, c) for c in text)


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
