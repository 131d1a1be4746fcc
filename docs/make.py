"""Writes the generated parts of the docs: python docs/make.py [--check]

A part stands between ``<!-- made: NAME -->`` and ``<!-- end -->``. With --check nothing is written;
the exit status is 1 when a part is out of date, or when docs/methods.md does not describe exactly the
tests and remedies that are registered.
"""

from __future__ import annotations

import re
import sys
from collections.abc import Callable, Iterable
from dataclasses import fields
from pathlib import Path

from clingstone.advice.rules import rule_table
from clingstone.evidence import TESTS
from clingstone.needs import Limits
from clingstone.options import settings_options
from clingstone.remedies import REMEDIES

HERE = Path(__file__).parent
MARK = re.compile(r"(<!-- made: ([\w-]+) -->\n).*?(<!-- end -->)", re.S)


def rules() -> str:
    """The advice as a table: the rules that decide, then those that warn."""
    head = ("rule", "when", "then", "because", "source", "strength")
    return _table(head, (tuple(map(str, row)) for row in rule_table()))


def options() -> str:
    """Every argument of examine, as Python and the command line spell it."""
    head = ("argument", "option", "what it says", "default")
    rows = (
        (f"`{o.name}`", f"`{o.flag} {o.metavar or ''}".rstrip() + "`", o.help, _default(o.default))
        for o in settings_options()
    )
    return _table(head, rows)


def limits() -> str:
    """What the data must carry."""
    found = Limits()
    rows = ((f"`{each.name}`", f"{getattr(found, each.name):g}") for each in fields(Limits))
    return _table(("limit", "value"), rows)


PARTS: dict[str, Callable[[], str]] = {"rules": rules, "options": options, "limits": limits}


def _default(value: object) -> str:
    return "" if value is None else f"`{value}`"


def _table(head: tuple[str, ...], rows: Iterable[tuple[str, ...]]) -> str:
    def line(cells: Iterable[str]) -> str:
        return "| " + " | ".join(cell.replace("|", "\\|").replace("\n", " ") for cell in cells) + " |"

    return "\n".join([line(head), "|" + "---|" * len(head), *map(line, rows)]) + "\n"


def made(text: str) -> str:
    """A page with its generated parts made anew. Raises KeyError for a part that nobody makes."""
    return MARK.sub(lambda found: f"{found[1]}\n{PARTS[found[2]]()}\n{found[3]}", text)


def undescribed() -> list[str]:
    """Registered tests and remedies without a heading in methods.md, and headings without a method."""
    text = (HERE / "methods.md").read_text(encoding="utf-8")
    described = re.findall(r"^### `([\w-]+)`", text, re.M)
    registered = [method.id for method in (*TESTS, *REMEDIES)]
    lines = [f"methods.md does not describe {id}" for id in registered if id not in described]
    lines += [
        f"methods.md describes {id}, which is not registered" for id in described if id not in registered
    ]
    return lines + [f"methods.md describes {id} twice" for id in set(described) if described.count(id) > 1]


def main(check: bool) -> int:
    faults = undescribed()
    for page in sorted(HERE.glob("*.md")):
        text = page.read_text(encoding="utf-8")
        new = made(text)
        if new == text:
            continue
        if check:
            faults.append(f"{page.name} is out of date: run python docs/make.py")
        else:
            page.write_text(new, encoding="utf-8")
    print("\n".join(faults) if faults else "the docs are up to date")
    return 1 if faults else 0


if __name__ == "__main__":
    sys.exit(main("--check" in sys.argv[1:]))
