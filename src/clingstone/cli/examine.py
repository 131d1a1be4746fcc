"""The commands ``examine`` and ``demo``."""

from __future__ import annotations

from pathlib import Path
from textwrap import fill
from typing import TYPE_CHECKING, Annotated, Any

import typer

from clingstone.cli import screen
from clingstone.cli.arguments import (
    ALWAYS,
    MUST,
    SAVING,
    AsJson,
    Debug,
    Entries,
    Out,
    Overwrite,
    Quiet,
    asked,
    with_options,
)
from clingstone.cli.saved import can_be_saved, unused
from clingstone.demo import DEMOS, find

if TYPE_CHECKING:
    from clingstone.examination import Examination

Data = Annotated[
    Path,
    typer.Argument(metavar="DATA", help="A file: CSV, Parquet, Excel, SPSS, Stata …, or a job file (.toml)."),
]
_OWN: Entries = {"data": (Data, MUST)}


@with_options(_OWN, {**SAVING, **ALWAYS})
def command(
    context: typer.Context,
    data: Path,
    *,
    out: Path | None,
    json: bool,
    overwrite: bool,
    quiet: bool,
    debug: bool,
    **given: Any,
) -> None:
    """Examine a file: which rows hang together, what it does to each interval, what to report.

    A job file (study.toml, as every saved folder holds one) names the data and the options; options on the
    line win.
    """
    job = asked(context, data, given)
    folder = out if out is not None else job.out
    _run(job.data, dict(job.arguments), folder, json=json, overwrite=overwrite, quiet=quiet)


def demo(
    name: Annotated[str, typer.Argument(metavar="[NAME]", help=f"One of {', '.join(DEMOS)}.")] = "trial",
    out: Out = None,
    json: AsJson = False,
    overwrite: Overwrite = False,
    quiet: Quiet = False,
    debug: Debug = False,
) -> None:
    """Examine one of the demonstration data sets (an invented valley; see demo_data/README.md)."""
    chosen = find(name)
    if not (json or quiet):
        typer.echo(f"{fill(chosen.question, 78)}\n\n{chosen.command}\n")
    _run(chosen.path, dict(chosen.arguments), out, json=json, overwrite=overwrite, quiet=quiet)


def _run(
    data: Path, arguments: dict[str, Any], out: Path | None, *, json: bool, overwrite: bool, quiet: bool
) -> None:
    """Examine, save, print. With --json a folder is written only when --out names one."""
    folder = out if out is not None else None if json else unused(f"{data.stem}-clingstone", overwrite)
    if folder is not None:
        can_be_saved(folder, overwrite)
    from clingstone.examination import examine

    with screen.progress(quiet) as progress:
        examination = examine(data, **arguments, progress=progress)
        if folder is not None:
            examination.save(folder, overwrite=overwrite)
    if json:
        from clingstone.results import to_json

        screen.write(to_json(examination.results))
    elif not quiet:
        screen.write(_printed(examination, folder))


def _printed(examination: Examination, folder: Path | None) -> str:
    text = str(examination).rstrip("\n") + "\n"
    return text if folder is None else f"{text}\nreport.html · methods.md · results.json   in  {folder}/\n"
