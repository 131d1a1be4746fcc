"""Writes the generated parts of the docs: python docs/make.py [--check]

A part stands between ``<!-- made: NAME -->`` and ``<!-- end -->``. The part ``printed`` is what the
example above it prints; the examples of a page are run in reading order. With --check nothing is
written or run; the exit status is 1 when a part is out of date, or when docs/methods.md does not
describe exactly the tests and remedies that are registered. (What is printed is checked by the tests,
which run the examples anyway.)
"""

from __future__ import annotations

import contextlib
import io
import os
import re
import shutil
import sys
import tempfile
from collections.abc import Callable, Iterable, Iterator
from dataclasses import fields
from pathlib import Path

from clingstone.advice.rules import rule_table
from clingstone.evidence import TESTS
from clingstone.needs import Limits
from clingstone.options import settings_options
from clingstone.remedies import REMEDIES

HERE = Path(__file__).parent
MARK = re.compile(r"(<!-- made: (?!printed)([\w-]+) -->\n).*?(<!-- end -->)", re.S)
EXAMPLE = re.compile(
    r"^```python\n(.*?)^```\n(?:\n<!-- made: printed -->\n(.*?)<!-- end -->\n)?", re.M | re.S
)


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


def examples(text: str) -> Iterator[tuple[re.Match[str], str]]:
    """The Python examples of a page, run in reading order in the working folder, and what each prints."""
    names: dict[str, object] = {}
    for number, found in enumerate(EXAMPLE.finditer(text), start=1):
        with contextlib.redirect_stdout(io.StringIO()) as out:
            exec(compile(found[1], f"example {number}", "exec"), names)
        yield found, out.getvalue()


def printed(text: str) -> str:
    """A page in which every part ``printed`` holds what its example prints now."""
    if "<!-- made: printed -->" not in text:
        return text
    out, end, home = [], 0, Path.cwd()
    with tempfile.TemporaryDirectory() as folder:
        shutil.copytree(HERE.parent / "demo_data", Path(folder, "demo_data"))
        os.chdir(folder)
        try:
            for found, said in examples(text):
                if found[2] is not None:
                    out += [text[end : found.start(2)], f"\n```text\n{said.strip()}\n```\n\n"]
                    end = found.end(2)
        finally:
            os.chdir(home)
    return "".join(out) + text[end:]


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
    for page in sorted(HERE.rglob("*.md")):
        text = page.read_text(encoding="utf-8")
        new = made(text) if check else printed(made(text))
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
