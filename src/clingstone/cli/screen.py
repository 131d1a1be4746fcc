"""What a person sees at the terminal: progress, lines of a fitting length, signs that its encoding has."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from clingstone.run import Progress


@contextmanager
def progress(quiet: bool) -> Iterator[Progress | None]:
    """A listener that draws on standard error, or None when that is no terminal."""
    if quiet or not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import Progress as Bars
    from rich.progress import TaskID, TextColumn, TimeElapsedColumn

    bars = Bars(
        TextColumn("{task.description}"),
        TextColumn("{task.completed} of {task.total}"),
        TimeElapsedColumn(),
        console=Console(stderr=True),
        transient=True,
    )
    seen: dict[str, TaskID] = {}

    def listen(label: str, done: int, total: int) -> None:
        if label not in seen:
            seen[label] = bars.add_task(label, total=total)
        bars.update(seen[label], completed=done, total=total)

    with bars:
        yield listen


def lines(text: str, indent: str = "") -> str:
    """At most 80 signs in a line; a path or an option is never broken."""
    import textwrap

    return textwrap.fill(
        text,
        80,
        initial_indent=indent,
        subsequent_indent=indent or "  ",
        break_long_words=False,
        break_on_hyphens=False,
    )


def write(text: str) -> None:
    """To standard output; a sign that its encoding lacks becomes "?" rather than a fault."""
    encoding = sys.stdout.encoding or "utf-8"
    sys.stdout.write(text.encode(encoding, errors="replace").decode(encoding))
    sys.stdout.flush()
