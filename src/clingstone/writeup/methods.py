"""The methods text as Markdown, and the two sentences for the paper."""

from __future__ import annotations

import re

from clingstone.display import Table, clean, count, listed, span
from clingstone.ledger.ledger import Parameter
from clingstone.ledger.sizes import AT_ZERO
from clingstone.results import Results
from clingstone.writeup import strength
from clingstone.writeup.draft import draft
from clingstone.writeup.naming import named, subject
from clingstone.writeup.outcome import estimate_words
from clingstone.writeup.plate import many
from clingstone.writeup.read import advised, decimals, has_freedom, level_percent, ordinary, row_of, served

SPOKEN = 3  # focus rows named in the two sentences


def methods_text(results: Results) -> str:
    """The whole methods section as Markdown: text, what answers which reporting item, references."""
    paper = draft(results)
    lines = [f"# {escaped(paper.title)}", "", paper.note, ""]
    for part in paper.parts:
        lines += [f"## {part.title}", "", " ".join(escaped(s.text) for s in part.sentences), ""]
    for table in (paper.items, paper.answers):
        lines += [f"## {table.caption}", "", *piped(table), ""]
        lines += [table.note, ""] if table.note else []
    lines += ["## References", "", *(f"- {escaped(r.text)}" for r in paper.references)]
    return "\n".join(lines).rstrip() + "\n"


def piped(table: Table) -> list[str]:
    """A table as lines of Markdown."""
    rows = [table.heads, *table.shown()]
    lines = ["| " + " | ".join(escaped(text) for text in row) + " |" for row in rows]
    return [lines[0], "|" + "---|" * len(table.columns), *lines[1:]]


def escaped(text: str) -> str:
    """Text that Markdown prints as written: labels cannot start markup, a table cell or an element."""
    return re.sub(r"([\\`*<|])", r"\\\1", clean(text))


def report_this(results: Results) -> str:
    """Two sentences for the paper: how the rows depend, and the focus estimates."""
    return f"{_depends(results)} {_estimates(results)}"


READ_FIRST = ("intraclass correlation", "ρ", "practical range")


def _depends(results: Results) -> str:
    """The known parameter of every structure to be covered, with its interval; or what was not detected."""
    ledger, repair = results.ledger, results.advice.repair
    mended = repair if results.advice.state == "mean first" else None
    standing = mended.standing if mended else ledger.standing
    parameters = mended.parameters if mended else ledger.parameters
    shown = {s.key for s in standing if s.verdict == "present"}
    kept = [p for p in parameters if p.name in READ_FIRST and p.key in shown and p.note != AT_ZERO]
    start = f"With a {mended.what} in the model, rows" if mended else "Rows"
    if results.advice.structures:
        told = [f"{subject(results, p.key)} ({_size(results, p)})" for p in kept]
        told = told or [subject(results, s.key) for s in standing if s.verdict == "present"]
        between = f": dependence was found between {listed(told)}" if told else ""
        return f"{start} were not independent{between}."
    looked = listed(subject(results, s.key) for s in standing)
    text = f"Dependence between {looked} was not detected" if looked else "Dependence was not looked for"
    could = [d.sentence.rstrip(" .") for d in ledger.detectable]
    return f"{text}; {'; '.join(s[0].lower() + s[1:] for s in could)}." if could else f"{text}."


def _size(results: Results, p: Parameter) -> str:
    """ "intraclass correlation 0.19, 95 % interval 0.08 to 0.42"."""
    unit = f" {p.unit if p.name == 'ρ' else many(p.unit)}".rstrip()
    text = f"{p.name} {strength.figure(results, p, p.estimate)}{unit}"
    ends = strength.interval(results, p)
    return f"{text}, {level_percent(results)} interval {ends}" if ends else text


def _estimates(results: Results) -> str:
    best = advised(results)
    if best is None:
        why = " ".join(r.sentence for r in results.advice.because) or results.advice.headline
        return f"No correction is reported. {why}"
    names = served(results)
    words = [(n, estimate_words(results, best, n)) for n in names[:SPOKEN]]
    told = [f"{named(name)} is estimated at {said}" for name, said in words if said]
    if not told:
        return f"Estimates come from: {best.name}."
    account = best.account
    name = "" if best.name == "ordinary" or best.name in account.estimator else f"{best.name}; "
    by = f"{'degrees of freedom' if has_freedom(best) else 'intervals'}: {account.df_rule}"
    text = f"By {account.estimator} ({name}{by}), {'; '.join(told)}"
    if len(names) > SPOKEN:
        text += f"; {count(len(names) - SPOKEN, 'further estimate')} in the table of intervals"
    text += _beside(results, names[:SPOKEN])
    if results.advice.state == "mean first":
        text = f"The mean of the model seems incomplete, so this is provisional: {text[0].lower()}{text[1:]}"
    return f"{text}."


def _beside(results: Results, names: tuple[str, ...]) -> str:
    """What the ordinary intervals would have been."""
    best, base = advised(results), ordinary(results)
    found = [(n, row) for n in names if (row := row_of(base, n)) is not None]
    if base is best or not found:
        return ""
    several = len(found) > 1
    ends = [
        span(row.low, row.high, decimals(results, n)) + (f" for {named(n)}" if several else "")
        for n, row in found
    ]
    return f"; an ordinary fit, which takes rows as independent, would give {listed(ends)}"
