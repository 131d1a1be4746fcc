"""The methods section as a document: the one thing that Markdown, LaTeX and Word each print."""

from __future__ import annotations

from dataclasses import dataclass

from clingstone.display import Column, Table, clean, listed
from clingstone.results import Reference, Results
from clingstone.writeup import tables
from clingstone.writeup.bibliography import references_of, source
from clingstone.writeup.items import GUIDELINES, ITEMS, NUMBERED, Section
from clingstone.writeup.read import served
from clingstone.writeup.sentences import sections

NOTE = "Draft written from the results. Square brackets mark what only you can know; nothing was guessed."
SHOWN = 6  # focus rows with a table of their own in the document; every row stands in intervals.csv
OPENING = 64  # characters by which a table recalls a sentence


@dataclass(frozen=True)
class Draft:
    """parts : the text. items, answers : what each reporting item asks and where it is answered; which
    items each sentence answers. tables : the numbers a reader expects beside the text."""

    title: str
    note: str
    parts: tuple[Section, ...]
    items: Table
    answers: Table
    tables: tuple[Table, ...]
    references: tuple[Reference, ...]


def draft(results: Results) -> Draft:
    """The methods section of an examination."""
    parts = sections(results)
    return Draft(
        title=clean(f"Methods: {results.case.formula or results.case.name}"),
        note=NOTE,
        parts=parts,
        items=items(parts),
        answers=answers(parts),
        tables=tuple(shown(results).values()),
        references=references_of(results),
    )


def items(parts: tuple[Section, ...]) -> Table:
    """Per reporting item: what it asks, its numbers in published guidelines, the sentences that answer."""
    columns = (
        Column("item", "item"),
        Column("asks", "asks for"),
        Column("guidelines", "elsewhere"),
        Column("answered", "answered in"),
    )
    rows = [(item, asks, NUMBERED[item], where(parts, item)) for item, asks in ITEMS.items()]
    named = listed(f"{name}: {source(key).cited}" for name, key in GUIDELINES.items())
    note = f"Sentences are counted by section. The same is asked elsewhere under other numbers ({named})."
    return Table.of("Reporting items", columns, rows, note)


def where(parts: tuple[Section, ...], item: str) -> str:
    """ "Design and data 1, 3; Estimates 2 (blank left)": sections and sentences that answer an item."""
    found = []
    for part in parts:
        held = [(k, s.blank) for k, s in enumerate(part.sentences, 1) if item in s.items]
        told = [f"{k} (blank left)" if blank else str(k) for k, blank in held]
        if told:
            found.append(f"{part.title} {', '.join(told)}")
    return "; ".join(found)


def answers(parts: tuple[Section, ...]) -> Table:
    """Every sentence, by section and number, with the items that it answers."""
    columns = (Column("sentence", "sentence"), Column("begins", "begins"), Column("items", "answers"))
    rows = [
        (f"{part.title} {k}", opening(s.text), ", ".join(s.items) or "none; it is a remark")
        for part in parts
        for k, s in enumerate(part.sentences, 1)
    ]
    return Table.of("Which sentence answers which item", columns, rows)


def opening(text: str) -> str:
    """The first words of a sentence."""
    text = clean(text)
    return text if len(text) <= OPENING else f"{text[:OPENING].rsplit(' ', 1)[0]} …"


def shown(results: Results) -> dict[str, Table]:
    """The tables of the document by the stem of their files: intervals of each focus row, the dependence,
    what it does to every coefficient, joint tests, groups."""
    ledger = results.ledger
    found: dict[str, Table | None] = {
        f"intervals-{k}": tables.intervals(results, name) for k, name in enumerate(served(results)[:SHOWN], 1)
    }
    found["shares"] = tables.shares(results) if ledger.shares else None
    found["dependence"] = tables.parameters(results) if ledger.parameters else None
    found["inflation"] = tables.inflation(results) if ledger.inflation else None
    found |= {"joint": tables.joint(results), "groups": tables.groups(results)}
    return {stem: table for stem, table in found.items() if table is not None and table.rows}
