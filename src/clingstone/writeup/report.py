"""The report: one HTML page that stands alone, leading with the answer."""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Mapping
from functools import cache
from importlib.resources import files
from typing import TYPE_CHECKING, Any

from clingstone.display import Table, clean, count, sentence, significant
from clingstone.evidence.finding import Finding
from clingstone.remedies.remedy import Refit
from clingstone.results import Results
from clingstone.writeup import bandwidths, curves, figures, rehearsed, tables
from clingstone.writeup.bibliography import cite, references_of, with_source
from clingstone.writeup.draft import answers, items
from clingstone.writeup.leading import STRUCTURES, leading, with_most_given
from clingstone.writeup.look import DARK, LIGHT, by_role, mark, variables
from clingstone.writeup.methods import report_this
from clingstone.writeup.naming import label_of, pointed_at, with_rows
from clingstone.writeup.outcome import USUAL, alternatives, tipping_words
from clingstone.writeup.panels import timeline, tree
from clingstone.writeup.places import sites
from clingstone.writeup.plate import NARROW, PAGE_FONT, WIDE, Plate, written
from clingstone.writeup.read import account_pairs, advised, focus_rows, ordered, served
from clingstone.writeup.sentences import design, model, sections, standing_words
from clingstone.writeup.terminal import case_line

if TYPE_CHECKING:
    from jinja2 import Environment

LONG = 170  # characters of a headline beyond which it is cut, and one sentence is set smaller

QUIET = 8  # figures in which nothing was detected that a page shows; the folder holds all

STATES = {
    "supported": "These data support a correction.",
    "supported with caveat": "These data support a correction, with a caveat.",
    "mean first": "Mend the mean of the model first.",
    "not correctable": "These data cannot carry a correction.",
    "nothing found": "No dependence that matters was detected.",
}

CONTENTS = (
    ("case", "What was read"),
    ("evidence", "What the residuals say"),
    ("ledger", "How strong, and what it does"),
    ("intervals", "Every interval"),
    ("rehearsal", "Rehearsed on this design"),
    ("advice", "Why this advice"),
    ("explain", "How each interval was reached"),
    ("methods", "Methods text"),
    ("references", "References"),
    ("again", "To do it again"),
    ("cautions", "Cautions"),
)

TITLES = {
    "group": "Groups",
    "serial": "Order in time",
    "spatial": "Places",
    "mean": "The mean of the model",
    "lookalike": "What can look like dependence",
}


def report(results: Results) -> str:
    """The whole page. The same results give the same bytes."""
    view: dict[str, Any] = {
        "results": results,
        "css": _raw(_css()),
        "js": _raw(_asset("report.js")),
        "contents": [c for c in CONTENTS if c[0] != "rehearsal" or results.rehearsal is not None],
        "methods": sections(results),
        "references": results.references or references_of(results),
    }
    view |= _answer(results) | _case(results) | _ledger(results) | _intervals(results) | _advice(results)
    view |= {"evidence": _evidence(results), "again": [_table(t) for t in _again(results)]}
    view |= _rehearsal(results)
    view["conventions"] = [
        _table(t) for n in focus_rows(results)[: figures.PANELS] if (t := tables.conventions(results, n))
    ]
    view["bandwidths"] = [_plate(results, p) for p in bandwidths.plates(results)]
    view["checklist"] = [_table(items(view["methods"])), _table(answers(view["methods"]))]
    return _environment().get_template("report.html.j2").render(view)


def fragment(results: Results) -> str:
    """The answer alone, for a notebook."""
    drawn = [p for p in (figures.ladder(results), figures.share_bar(results)) if p is not None]
    view = {
        "results": results,
        "state": STATES[results.advice.state],
        "plates": [_raw(by_role(written(results, p))) for p in drawn],
        "report_this": report_this(results),
        "light": _raw(variables(LIGHT)),
        "dark": _raw(variables(DARK)),
    }
    return _environment().get_template("fragment.html.j2").render(view)


@cache
def _environment() -> Environment:
    from jinja2 import Environment, PackageLoader, StrictUndefined

    return Environment(
        loader=PackageLoader("clingstone.writeup", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        finalize=_tied,
    )


# Letters that are written from right to left: Hebrew, Arabic and their like, with spaces inside.
_RIGHT = re.compile(
    r"[\u0590-\u08ff\ufb1d-\ufdff\ufe70-\ufefc]+(?:[ \d]*[\u0590-\u08ff\ufb1d-\ufdff\ufe70-\ufefc]+)*"
)


def _tied(value: Any) -> Any:
    """Plain text without control characters, and never broken between a figure and its per cent sign.

    A label from right to left is set apart, so that the figures after it keep their place in the line.
    """
    if type(value) is not str:
        return value
    apart = _RIGHT.sub(lambda m: f"\u2068{m.group()}\u2069", clean(value))
    return re.sub(r"(\d) %", "\\1\u00a0%", apart)


def _asset(name: str) -> str:
    return files("clingstone.writeup").joinpath("templates", name).read_text(encoding="utf-8")


def _css() -> str:
    css = _asset("report.css").replace("@LIGHT@", variables(LIGHT)).replace("@DARK@", variables(DARK))
    return css.replace("@FONT@", PAGE_FONT)


def _raw(html: str) -> Any:
    """Markup that is ours: templates, tables and figures, whose texts were escaped when they were made."""
    from markupsafe import Markup

    return Markup(html)


def _table(table: Table) -> Mapping[str, Any]:
    bare = Table(table.caption, table.columns, table.rows)
    return {"caption": table.caption, "html": _raw(bare.to_html()), "note": clean(table.note)}


def _plate(results: Results, plate: Plate) -> Mapping[str, Any]:
    shown = plate.table
    if len(shown.rows) > curves.TABLED:
        note = f"The first {curves.TABLED} of {len(shown.rows)}; the file of the figure holds them all."
        shown = Table(shown.caption, shown.columns, shown.rows[: curves.TABLED], note)
    return {
        "name": plate.name,
        "caption": plate.caption,
        "wide": _raw(by_role(written(results, plate, WIDE))),
        "narrow": _raw(by_role(written(results, plate, NARROW))),
        "table": _table(shown),
        "note": clean(sentence(plate.note)),
    }


def _factor(results: Results, name: str) -> str:
    """How far the standard error of a row should move, and within what range."""
    factor = results.ledger.factor(name)
    if factor is None or not math.isfinite(factor.low + factor.high):
        return ""
    low, shown, high = (significant(v) for v in sorted((factor.low, factor.estimate, factor.high)))
    words = "about the ordinary one" if shown == "1.0" else f"{shown} times the ordinary one"
    more = f"; anything from {low} to {high} is compatible with these data" if low != high else ""
    return f"The standard error of {name} should be {words}{more}."


def headline(words: str) -> tuple[str, str]:
    """A headline of one breath, and what follows it: a long one is cut behind its first sentence."""
    if len(words) <= LONG:
        return words, ""
    cut = next((m.end() for m in re.finditer(r"[.?] (?=[A-Z])", words) if m.start() > 20), len(words))
    return words[:cut].strip(), words[cut:].strip()


def _answer(results: Results) -> dict[str, Any]:
    ladder, shares = figures.ladder(results), figures.share_bar(results)
    parts = headline(results.advice.headline)
    hidden = len(focus_rows(results)) - len(served(results)[: figures.PANELS])
    return {
        "case_line": clean(case_line(results)),
        "state": STATES[results.advice.state],
        "headline": parts,
        "long": len(parts[0]) > LONG,
        "ladder": _plate(results, ladder) if ladder else None,
        "shares": _plate(results, shares) if shares else None,
        "more_focus": f"{count(hidden, 'more row')} in focus under “Every interval”." if hidden > 0 else "",
        "report_this": report_this(results),
        "how_sure": list(how_sure(results)),
    }


def how_sure(results: Results) -> Iterable[str]:
    """What supports the advice, and what is not settled."""
    yield from rehearsed.sure(results)
    if results.rehearsal is None:
        yield (
            "Not rehearsed on this design: the advice rests on published rules, not on a coverage measured "
            "for these data."
        )
    if results.advice.state not in ("mean first", "not correctable"):
        # The factors are those of the model as it stands, with every structure sized.
        yield from filter(None, (_factor(results, name) for name in served(results)[: figures.PANELS]))
    if results.advice.mean_in_doubt:
        yield "Whether the mean or the dependence makes the pattern is not settled."
    for reason in results.advice.cautions:
        yield f"Not settled: {with_rows(results, reason.sentence, reason.rule)}"
    if not results.advice.structures:
        yield from (d.sentence for d in results.ledger.detectable)


def _case(results: Results) -> dict[str, Any]:
    words = [" ".join(s.text for s in part(results) if not s.blank) for part in (design, model)]
    sizes = tables.groups(results)
    drawn = (tree(results), timeline(results), sites(results))
    return {
        "case_words": words,
        "case_tables": [_table(sizes)] if sizes else [],
        "drawn": [_plate(results, p) for p in drawn if p is not None],
    }


def _evidence(results: Results) -> list[dict[str, Any]]:
    plates = curves.plates_by_structure(results)
    parts = []
    for structure, title in TITLES.items():
        found = [f for f in results.evidence if f.structure == structure]
        if not found:
            continue
        first = leading(found)
        rest = [f for f in found if f not in first]
        drawn = plates.get(structure, ())
        quiet = [p for p in drawn if p.quiet]
        m = mark(structure)
        own = structure in STRUCTURES
        parts.append(
            {
                "title": title,
                "role": m.role if own else "",
                "glyph": m.glyph if own else "•",
                "findings": [_finding(results, f) for f in first],
                "silent": "" if first else _silent(found),
                "others": [_finding(results, f) for f in rest],
                "looked": _looked(found),
                "plates": [_plate(results, p) for p in drawn if not p.quiet],
                "quiet": [_plate(results, p) for p in quiet[:QUIET]],
                "more": count(max(0, len(quiet) - QUIET), "more figure"),
                "unshown": len(quiet) > QUIET,
                "table": _table(tables.evidence(results, structure)),
            }
        )
    return parts


def _silent(found: list[Finding]) -> str:
    """What is said where no finding leads."""
    asked = [f for f in with_most_given(found) if f.verdict != "not applicable"]
    if not asked:
        return "None of these checks could be run on these data."
    given = any(f.given for f in asked)
    unclear = sum(f.verdict == "unclear" for f in asked)
    text = "Nothing was detected here" + (" once the dependence is fitted" if given else "")
    if unclear:
        text += f"; {count(unclear, 'check')} could not tell"
    return f"{text}."


def _looked(found: list[Finding]) -> str:
    """ "21 findings, 3 of them unclear"."""
    unclear = sum(f.verdict == "unclear" for f in found)
    return count(len(found), "finding") + (f", {unclear} of them unclear" if unclear else "")


def _finding(results: Results, f: Finding) -> dict[str, Any]:
    where = pointed_at(results, f) if f.verdict in ("present", "unclear") else ""
    return {
        "words": f.sentence,
        "where": where[:1].upper() + where[1:],
        "verdict": f.verdict,
        "exploratory": not f.primary and f.verdict != "not applicable",
        "caveats": [sentence(c) for c in f.caveats],
    }


def _ledger(results: Results) -> dict[str, Any]:
    ledger = results.ledger
    shown = []
    if ledger.parameters:
        shown.append(tables.parameters(results))
    if ledger.inflation:
        shown.append(tables.inflation(results))
    told = [standing_words(results, s) for s in ledger.standing]
    refused = [
        sentence(f"{label_of(results, key)} was not estimated: {reason}") for key, reason in ledger.refused
    ]
    return {
        "standing": told + refused,
        "ledger_tables": [_table(t) for t in shown],
        "turning": [*tipping_words(results), *(d.sentence for d in ledger.detectable)],
        "history": list(ledger.history),
    }


def _rehearsal(results: Results) -> dict[str, Any]:
    found, shown = rehearsed.plate(results), rehearsed.table(results)
    return {
        "rehearsal_plate": _plate(results, found) if found else None,
        "rehearsal_table": _table(shown) if shown else None,
        "rehearsal_words": list(rehearsed.methods_words(results)),
    }


def _intervals(results: Results) -> dict[str, Any]:
    joint = tables.joint(results)
    return {
        "ladders": [_plate(results, p) for p in figures.ladders(results)],
        "interval_tables": [_table(tables.intervals(results, n)) for n in focus_rows(results)],
        "other_tables": [_table(tables.intervals(results, n)) for n in tables.other_rows(results)],
        "joint": _table(joint) if joint else None,
    }


def _advice(results: Results) -> dict[str, Any]:
    advice = results.advice
    refused = tables.refused(results)
    best = advised(results)
    return {
        "because": [with_source(r.sentence, r.source) for r in advice.because],
        "alternatives": list(alternatives(results)),
        "refused": _table(refused) if refused else None,
        "accounts": [
            {"name": fit.name, "advised": fit is best, "rows": list(_account(fit))}
            for fit in ordered(results)
        ],
        "cautions": [
            *(with_source(with_rows(results, r.sentence, r.rule), r.source) for r in advice.cautions),
            *USUAL,
        ],
    }


def _account(fit: Refit) -> Iterable[tuple[str, str]]:
    a = fit.account
    yield from account_pairs(fit)
    if fit.boundary:
        yield "boundary", "a variance was estimated at its bound of zero"
    if not fit.converged:
        yield "convergence", "the search for the variances did not converge"
    for note in fit.notes:
        yield "note", note
    if cite(a.source):
        yield "sources", cite(a.source)[1:-1]


def _again(results: Results) -> list[Table]:
    settings = {k: _shown(v) for k, v in results.settings.items() if v is not None}
    origin = {k: _shown(v) for k, v in results.case.origin.items() if k != "path"}
    versions = {"clingstone": results.clingstone, **results.versions}
    return [
        tables.pairs("The data as read", ("what", "value"), origin),
        tables.pairs("Settings, every argument that was given or taken", ("argument", "value"), settings),
        tables.pairs("Versions", ("software", "version"), versions),
    ]


def _shown(value: Any) -> str:
    if isinstance(value, Mapping):
        return ", ".join(f"{k}: {_shown(v)}" for k, v in value.items())
    if isinstance(value, (list, tuple)):
        return ", ".join(_shown(v) for v in value)
    return str(value)
