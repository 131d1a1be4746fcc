"""The methods section as a LaTeX document that compiles alone, under pdfTeX, XeTeX and LuaTeX."""

from __future__ import annotations

from clingstone.display import Table, clean, latex
from clingstone.results import Results
from clingstone.writeup.draft import Draft, draft
from clingstone.writeup.items import Sentence

PREAMBLE = r"""\documentclass[11pt]{article}
\usepackage{iftex}
\iftutex
  \usepackage{fontspec}
\else
  \usepackage[utf8]{inputenc}
  \usepackage[T1]{fontenc}
  \usepackage{textcomp}
@UNKNOWN@\fi
\usepackage[a4paper,margin=25mm]{geometry}
\usepackage{booktabs,longtable,array,graphicx}
\newcommand{\blank}[1]{\textbf{#1}} % what only the authors know
\emergencystretch=3em
"""
# What T1 and TS1 hold beyond ASCII, so far as a label is likely to use it.
KNOWN = frozenset(chr(c) for c in range(0xA1, 0x180)) | frozenset("‘’“”„†‡•€")


def latex_text(results: Results) -> str:
    """The whole methods section: text, tables, reporting items, references."""
    paper = draft(results)
    body = "\n".join([*_text(paper), *map(_table, paper.tables), *_end(paper)])
    return f"{PREAMBLE.replace('@UNKNOWN@', _unknown(body))}\n\\begin{{document}}\n{body}\\end{{document}}\n"


def _unknown(body: str) -> str:
    """pdfTeX stops at a letter that its fonts lack: each such is set as its number in a box, not lost."""
    strange = sorted({c for c in body if ord(c) > 126} - KNOWN)
    return "".join(
        rf"  \DeclareUnicodeCharacter{{{ord(c):04X}}}{{\fbox{{\tiny {ord(c):04X}}}}}" + "\n" for c in strange
    )


def _text(paper: Draft) -> list[str]:
    lines = [rf"\section*{{{_plain(paper.title)}}}", rf"\emph{{{_plain(paper.note)}}}", ""]
    for part in paper.parts:
        lines += [rf"\subsection*{{{_plain(part.title)}}}", *map(_sentence, part.sentences), ""]
    return lines


def _sentence(s: Sentence) -> str:
    return rf"\blank{{{_plain(s.text)}}}" if s.blank else _plain(s.text)


def _plain(text: str) -> str:
    return latex(clean(text))


def _table(table: Table) -> str:
    """A floating table, made narrower where it is wider than the page."""
    note = rf"\par\smallskip\footnotesize {_plain(table.note)}" if table.note else ""
    return "\n".join(
        [
            r"\begin{table}[htbp]\centering\small",
            rf"\caption{{{_plain(table.caption)}}}",
            r"\resizebox{\ifdim\width>\linewidth \linewidth\else\width\fi}{!}{%",
            table.to_latex() + "%",
            rf"}}{note}",
            r"\end{table}",
            "",
        ]
    )


def _long(table: Table, widths: tuple[float, ...]) -> str:
    """A table over several pages, its columns as shares of the width of the text."""
    spec = "".join(rf">{{\raggedright\arraybackslash}}p{{{w}\linewidth}}" for w in widths)
    rows = [" & ".join(_plain(t) for t in row) + r" \\" for row in table.shown()]
    heads = " & ".join(map(latex, table.heads)) + r" \\"
    note = [_plain(table.note), ""] if table.note else []
    return "\n".join(
        [
            rf"\subsection*{{{_plain(table.caption)}}}",
            rf"{{\footnotesize\begin{{longtable}}{{{spec}}}",
            rf"\toprule {heads} \midrule\endhead",
            *rows,
            r"\bottomrule\end{longtable}}",
            *note,
        ]
    )


def _end(paper: Draft) -> list[str]:
    lines = [_long(paper.items, (0.06, 0.3, 0.25, 0.25)), _long(paper.answers, (0.24, 0.5, 0.16))]
    lines += [r"\subsection*{References}", r"\begin{itemize}\raggedright"]
    return [*lines, *(rf"\item {_plain(r.text)}" for r in paper.references), r"\end{itemize}", ""]
