"""Folders that were saved or will be: their names, the data they came from, and the command ``replay``."""

from __future__ import annotations

from dataclasses import replace
from itertools import count
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from clingstone.cli.arguments import Debug, asked, changed
from clingstone.demo import data_folder
from clingstone.needs import InputError

if TYPE_CHECKING:
    from clingstone.examination import Examination
    from clingstone.run import Progress


def replay(
    folder: Annotated[Path, typer.Argument(metavar="DIR", help="A folder that clingstone saved.")],
    data: Annotated[
        Path | None, typer.Option("--data", metavar="FILE", help="Where the data are, if they were moved.")
    ] = None,
    debug: Debug = False,
) -> None:
    """Run a saved examination again and say whether every number agrees."""
    from clingstone.examination import replay as again

    agrees, said = again(folder, data if data is not None else _data_of(folder))
    for line in said:
        typer.echo(line)
    if not agrees:
        raise typer.Exit(1)


def examination_of(
    subject: Path, given: dict[str, Any], progress: Progress | None, context: typer.Context
) -> Examination:
    """The saved examination run again, or a new one of a file; without the short rehearsal."""
    from clingstone.case import Case
    from clingstone.examination import examined, settings_of
    from clingstone.reopened import reopened, saved
    from clingstone.run import Run, one_thread

    if subject.is_dir():
        if changed(given):
            raise InputError(
                f"{subject} is a saved examination, which holds its own settings",
                "Give the data file instead to examine it with other settings.",
            )
        case = reopened(saved(subject), _data_of(subject))
    else:
        job = asked(context, subject, given)
        with one_thread():
            case = Case.of(job.data, settings_of({**job.arguments, "rehearsal": "none"}))
    with one_thread():
        return examined(case, Run(replace(case.settings, rehearsal="none"), report=progress))


def _data_of(folder: Path) -> Path | None:
    """The file of a saved run where it can be looked for: at its path as given, then by its name here,
    beside the folder, among the demonstrations. That it is the same data is seen by the fingerprint.
    """
    from clingstone.results import read_tree

    results = folder / "results.json"
    if not results.is_file():
        return None  # the verb says so
    origin = read_tree(results.read_text(encoding="utf-8"))["case"]["origin"]
    given, name = origin.get("path", ""), origin.get("file", "")
    if given and Path(given).is_file():
        return Path(given)
    places = (Path(), folder.absolute().parent, data_folder())
    return next((place / name for place in places if name and (place / name).is_file()), None)


def can_be_saved(folder: Path, overwrite: bool) -> None:
    """Before the work, not after it. Raises InputError where the folder cannot be made or is in use."""
    from clingstone.writeup.save import check

    for part in folder.expanduser().absolute().parents:
        if part.is_file():
            raise InputError(
                f"{part} is a file, so {folder.name} cannot be a folder in it",
                "Name another folder with --out.",
            )
    check(folder, overwrite)


def unused(name: str, overwrite: bool) -> Path:
    """The folder of that name, or the first of NAME-2, NAME-3 … that is not there yet."""
    if overwrite or not Path(name).exists():
        return Path(name)
    return next(path for path in (Path(f"{name}-{k}") for k in count(2)) if not path.exists())
