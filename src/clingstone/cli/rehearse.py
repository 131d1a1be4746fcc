"""The command ``rehearse``."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from clingstone.cli import screen
from clingstone.cli.arguments import ALWAYS, MUST, SAVING, Entries, with_options
from clingstone.cli.saved import can_be_saved, examination_of, unused

if TYPE_CHECKING:
    from clingstone.examination import Examination

Subject = Annotated[
    Path,
    typer.Argument(
        metavar="DIR|DATA", help="A folder that clingstone saved, or a file with options as for examine."
    ),
]
Replicates = Annotated[
    int, typer.Option("--replicates", metavar="NUMBER", help="Per error model, at the most.")
]
Only = Annotated[
    list[str] | None,
    typer.Option(
        "--remedy", metavar="NAME", help="A remedy to rehearse; left out, all. Give it once for each."
    ),
]
EngineName = Annotated[
    str, typer.Option("--engine", metavar="here|cores|dask", help="Where the replicates are made.")
]
Workers = Annotated[
    int | None,
    typer.Option("--workers", metavar="NUMBER", help="Processes of --engine cores; else all."),
]
Scheduler = Annotated[
    str | None,
    typer.Option("--scheduler", metavar="ADDRESS", help="Of a Dask cluster, such as tcp://10.0.0.1:8786."),
]
Chunks = Annotated[
    Path | None,
    typer.Option(
        "--chunks",
        metavar="DIR",
        help="Folder of finished chunks, from which a stopped rehearsal goes on. [default: OUT-chunks]",
    ),
]
WholePath = Annotated[
    int,
    typer.Option(
        "--whole-path",
        metavar="NUMBER",
        help="Also detect, advise and refit inside so many replicates per error model.",
    ),
]
ToTheEnd = Annotated[
    bool, typer.Option("--to-the-end", help="Make all replicates, also when the ranking is settled.")
]
_OWN: Entries = {
    "subject": (Subject, MUST),
    "replicates": (Replicates, 10_000),
    "remedy": (Only, None),
    "engine": (EngineName, "here"),
    "workers": (Workers, None),
    "scheduler": (Scheduler, None),
    "chunks": (Chunks, None),
    "whole_path": (WholePath, 0),
    "to_the_end": (ToTheEnd, False),
}


@with_options(_OWN, {**SAVING, **ALWAYS}, without=("rehearsal",))
def command(
    *,
    context: typer.Context,
    subject: Path,
    replicates: int,
    remedy: list[str] | None,
    engine: Any,
    workers: int | None,
    scheduler: str | None,
    chunks: Path | None,
    whole_path: int,
    to_the_end: bool,
    out: Path | None,
    json: bool,
    overwrite: bool,
    quiet: bool,
    debug: bool,
    **given: Any,
) -> None:
    """Simulate y on a design many times, under several error models, and see how each remedy would have done.

    With a saved folder, its report and results.json are written again with the rehearsal in them.
    """
    from clingstone.rehearsing import rehearse

    folder = _folder(subject, out, overwrite)
    with screen.progress(quiet) as progress:
        examination = examination_of(subject, given, progress, context)
        found = rehearse(
            examination,
            replicates,
            remedies=remedy or None,
            engine=engine,
            workers=workers,
            scheduler=scheduler,
            folder=chunks if chunks is not None else folder.with_name(f"{folder.name}-chunks"),
            stop_early=not to_the_end,
            whole_path=whole_path,
            progress=progress,
        )
        heard = examination.with_rehearsal(found)
        heard.save(folder, overwrite=overwrite or subject.is_dir())
    if json:
        from clingstone.results import to_json

        screen.write(to_json(heard.results))
    elif not quiet:
        screen.write(_printed(heard, folder))


def _folder(subject: Path, out: Path | None, overwrite: bool) -> Path:
    if out is not None:
        can_be_saved(out, overwrite)
        return out
    return subject if subject.is_dir() else unused(f"{subject.stem}-clingstone", overwrite)


def _printed(heard: Examination, folder: Path) -> str:
    from clingstone.display import wrapped
    from clingstone.writeup import rehearsed

    found, shown = heard.rehearsal, rehearsed.table(heard.results)
    assert found is not None
    parts = []
    if shown is not None:
        short = ("refit", "smallest coverage", "width", "holds")
        heads = tuple(replace(c, head=head) for c, head in zip(shown.columns, short, strict=True))
        parts.append(replace(shown, columns=heads).to_text())
    lines = wrapped(f"Stopped {found.stopped}. Width is over the ordinary interval's. The error models:")
    for truth in found.truths:
        lines += wrapped(f"{truth.name}: {truth.words}", indent="  ", hang="    ")
    for walk in found.walks:
        lines += wrapped(
            f"Examined anew in {walk.replicates:,} replicates, the advised interval of {walk.term} held the "
            f"true value in {100 * walk.coverage:.1f} % (± {200 * walk.mcse:.1f})."
        )
    lines += wrapped(f"Advised: {heard.refit().name}." if heard.advice.remedy else heard.advice.headline)
    parts.append("\n".join(lines))
    return "\n\n".join(parts) + f"\n\nreport.html · results.json   in  {folder}/\n"
