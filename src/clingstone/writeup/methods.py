"""The methods text as Markdown, its checklist, and the two sentences for the paper."""

from __future__ import annotations

import math
import re

from clingstone.display import clean, listed, number, span
from clingstone.ledger.ledger import Parameter
from clingstone.results import Results
from clingstone.writeup.bibliography import references_of
from clingstone.writeup.items import ITEMS
from clingstone.writeup.read import (
    advised,
    decimals,
    focus_rows,
    label_of,
    level_percent,
    ordinary,
    row_of,
)
from clingstone.writeup.sentences import estimate_words, sections
from clingstone.writeup.tables import parameter_decimals

SPOKEN = 3  # focus rows named in the two sentences


def methods_items(results: Results) -> tuple[tuple[str, tuple[str, ...]], ...]:
    """Every sentence of the methods text with the keys of the reporting items that it answers."""
    return tuple((s.text, s.items) for part in sections(results) for s in part.sentences)


def checklist(results: Results) -> tuple[tuple[str, str, str], ...]:
    """Item, what it asks, and where the text answers it: section titles, or what is left to fill in."""
    rows = []
    parts = sections(results)
    for item, words in ITEMS.items():
        places = [
            f"{part.title}{' (blank left)' if s.blank else ''}"
            for part in parts
            for s in part.sentences
            if item in s.items
        ]
        rows.append((item, words, "; ".join(dict.fromkeys(places))))
    return tuple(rows)


def methods_text(results: Results) -> str:
    """The whole methods section as Markdown: text, checklist, references."""
    lines = [f"# Methods: {escaped(results.case.formula or results.case.name)}", ""]
    lines += [
        "Draft written from the results. Square brackets mark what only you can know; nothing was guessed.",
        "",
    ]
    for part in sections(results):
        lines += [f"## {part.title}", ""]
        lines += [" ".join(escaped(s.text) for s in part.sentences), ""]
    lines += ["## Reporting items", "", "| item | asks for | answered under |", "|---|---|---|"]
    lines += [f"| {item} | {asks} | {escaped(where)} |" for item, asks, where in checklist(results)]
    lines += ["", "## References", ""]
    lines += [f"- {escaped(r.text)}" for r in references_of(results)]
    return "\n".join(lines).rstrip() + "\n"


def escaped(text: str) -> str:
    """Text that Markdown prints as written: labels cannot start markup, a table cell or an element."""
    return re.sub(r"([\\`*<|])", r"\\\1", clean(text))


def report_this(results: Results) -> str:
    """Two sentences for the paper: how the rows depend, and the focus estimates."""
    return f"{_depends(results)} {_estimates(results)}"


READ_FIRST = ("intraclass correlation", "ρ", "practical range")


def _depends(results: Results) -> str:
    """The known parameter of every structure in the model, with its interval; or what was not detected."""
    kept = [p for p in results.ledger.parameters if p.name in READ_FIRST and p.key in results.ledger.model]
    if kept and results.advice.structures:
        return f"Rows were not independent: {'; '.join(_parameter(results, p) for p in kept)}."
    if results.advice.structures:
        labels = [s.label for s in results.ledger.standing if s.verdict == "present"]
        return f"Rows were not independent ({listed(labels)})." if labels else "Rows were not independent."
    named = [s.label for s in results.ledger.standing]
    looked = f" between rows ({listed(named)})" if named else " between rows"
    shown = [d.sentence.rstrip(" .") for d in results.ledger.detectable]
    if shown:
        return f"Dependence{looked} was not detected; {'; '.join(s[0].lower() + s[1:] for s in shown)}."
    return f"Dependence{looked} was not detected."


def _parameter(results: Results, p: Parameter) -> str:
    places = parameter_decimals(p)
    unit = f" {p.unit}" if p.unit else ""
    bounds = (
        f" ({level_percent(results)} interval {span(p.low, p.high, places)})"
        if math.isfinite(p.low + p.high)
        else ""
    )
    return f"{label_of(results, p.key)}, {p.name} {number(p.estimate, places)}{unit}{bounds}"


def _estimates(results: Results) -> str:
    best, base = advised(results), ordinary(results)
    names = focus_rows(results)[:SPOKEN]
    if best is None:
        return f"No correction is reported: {results.advice.headline}"
    first = results.advice.state == "mean first"
    told = [f"{name} {words}" for name in names if (words := estimate_words(results, best, name))]
    if not told:
        return f"Estimates come from: {best.name}."
    start = (
        "The mean of the model seems incomplete, so these are provisional: estimates"
        if first
        else "Estimates"
    )
    rule = f"degrees of freedom: {best.account.df_rule}"
    name = "" if best.name in best.account.estimator else f"{best.name}; "
    text = f"{start} from {best.account.estimator} ({name}{rule}): {'; '.join(told)}"
    if base is not None and base is not best:
        plain = [
            f"{span(row.low, row.high, decimals(results, name))} for {name}"
            for name in names
            if (row := row_of(base, name)) is not None
        ]
        text += f"; the ordinary fit, which takes rows as independent, would give {listed(plain)}"
    return text + "."
