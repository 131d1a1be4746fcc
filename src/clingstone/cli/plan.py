"""The command ``plan``."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Any

import typer

from clingstone.cli import screen
from clingstone.cli.arguments import ALWAYS, Entries, changed, with_options
from clingstone.cli.saved import examination_of
from clingstone.needs import InputError

Subject = Annotated[
    Path | None,
    typer.Argument(
        metavar="[DIR|DATA]",
        help="A folder that clingstone saved, or a file with options as for examine; else state numbers.",
    ),
]
DRAWN = (".svg", ".png")


def _number(flag: str, words: str) -> Any:
    return Annotated[float | None, typer.Option(flag, metavar="NUMBER", help=words)]


def _text(flag: str, metavar: str, words: str) -> Any:
    return Annotated[str | None, typer.Option(flag, metavar=metavar, help=words)]


_OWN: Entries = {
    "subject": (Subject, None),
    "term": (_text("--term", "NAME", "Coefficient; else the first in focus."), None),
    "groups": (_text("--groups", "LIST", "Numbers of groups, such as 12,24,36."), None),
    "rows": (_text("--rows", "LIST", "Rows of one group, such as 10,20."), None),
    "icc": (_number("--icc", "Correlation of two rows of one group."), None),
    "rho": (_number("--rho", "Correlation of neighbouring visits."), None),
    "reach": (_number("--range", "Practical range, the map having a side of 1."), None),
    "sd": (_number("--sd", "Standard deviation of one row."), 1.0),
    "varies": (_text("--varies", "unit|row", "Between what the two arms differ."), "unit"),
    "cost_group": (_number("--cost-group", "What one more group costs."), None),
    "cost_row": (_number("--cost-row", "What one more row costs."), None),
    "confidence": (_number("--confidence", "Level of the intervals."), None),
    "figure": (
        Annotated[
            Path | None, typer.Option("--figure", metavar="FILE", help="Draw the widths: an SVG or a PNG.")
        ],
        None,
    ),
    "csv": (Annotated[bool, typer.Option("--csv", help="Print the table as CSV and nothing else.")], False),
}


@with_options(_OWN, ALWAYS, without=("rehearsal",))
def command(
    *,
    context: typer.Context,
    subject: Path | None,
    term: str | None,
    groups: str | None,
    rows: str | None,
    icc: float | None,
    rho: float | None,
    reach: float | None,
    sd: float,
    varies: Any,
    cost_group: float | None,
    cost_row: float | None,
    confidence: float | None,
    figure: Path | None,
    csv: bool,
    quiet: bool,
    debug: bool,
    **given: Any,
) -> None:
    """The interval width to expect with other numbers of groups (series, places) and rows in each.

    From a saved examination or a file, whose design and error model are enlarged; or from stated numbers,
    for two arms of equal size.
    """
    from clingstone.rehearsing import plan

    if figure is not None and figure.suffix.casefold() not in DRAWN:
        raise InputError(f"a figure cannot be drawn as {figure.name}", "Name it with .svg or .png.")
    if subject is None and changed(given):
        raise InputError(
            "options of an examination were given, but no data",
            "Name a file or a saved folder, or state --icc, --rho or --range with --groups and --rows.",
        )
    with screen.progress(quiet) as progress:
        made = plan(
            None if subject is None else examination_of(subject, given, progress, context),
            term=term,
            groups=_whole(groups, "--groups"),
            rows=_whole(rows, "--rows"),
            icc=icc,
            rho=rho,
            range=reach,
            sd=sd,
            varies=varies,
            cost_group=cost_group,
            cost_row=cost_row,
            confidence=confidence,
        )
    screen.write(made.table().to_csv() if csv else f"{made}\n")
    if figure is not None:
        from clingstone.writeup.planned import plate

        drawn = plate(made)
        svg = figure.suffix.casefold() == ".svg"
        figure.write_bytes(drawn.svg().encode() if svg else drawn.png())


def _whole(text: str | None, flag: str) -> list[int] | None:
    if text is None:
        return None
    try:
        found = [int(word) for word in text.replace(" ", "").split(",")]
    except ValueError:
        found = []
    if not found or min(found) < 1:
        raise InputError(f"{flag} {text!r} is no list of whole numbers", "Write it as 12,24,36.")
    return found
