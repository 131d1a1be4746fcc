"""Arguments that commands share, an option for every field of Settings, and what a call asks for."""

from __future__ import annotations

import inspect
from collections.abc import Callable, Mapping
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from clingstone.options import Option, settings_options

if TYPE_CHECKING:
    from clingstone.intake.job import Job

Entries = Mapping[str, tuple[Any, Any]]  # argument → annotation and default
MUST = inspect.Parameter.empty  # the default of an argument that must be given

Out = Annotated[
    Path | None,
    typer.Option("--out", metavar="DIR", help="Folder for what is saved. [default: NAME-clingstone]"),
]
AsJson = Annotated[bool, typer.Option("--json", help="Print results.json and nothing else.")]
Overwrite = Annotated[bool, typer.Option("--overwrite", help="Replace what an earlier run saved in DIR.")]
Quiet = Annotated[bool, typer.Option("--quiet", help="Say nothing but errors; show no progress.")]
Debug = Annotated[bool, typer.Option("--debug", help="On a fault of ours, show the traceback.")]
SAVING: Entries = {"out": (Out, None), "json": (AsJson, False), "overwrite": (Overwrite, False)}
ALWAYS: Entries = {"quiet": (Quiet, False), "debug": (Debug, False)}


def with_options(
    own: Entries, shared: Entries, without: tuple[str, ...] = ()
) -> Callable[[Callable[..., None]], Callable[..., None]]:
    """A command with its own arguments, then an option for every field of Settings, then the shared ones.

    Settings in ``without``, and those that the command has an argument of its own for, are left out.
    """
    entries = {"context": (typer.Context, MUST), **own}
    for option in settings_options():
        if option.name not in (*without, *own):
            entries[option.name] = (Annotated[option.kind, _typer_option(option)], option.default)
    entries |= shared

    def dressed(command: Callable[..., None]) -> Callable[..., None]:
        command.__signature__ = inspect.Signature(  # type: ignore[attr-defined]
            [
                inspect.Parameter(name, inspect.Parameter.KEYWORD_ONLY, annotation=kind, default=default)
                for name, (kind, default) in entries.items()
            ]
        )
        command.__annotations__ = {name: kind for name, (kind, _) in entries.items()}
        return command

    return dressed


def _typer_option(option: Option) -> Any:
    names = (f"{option.flag}/--no-{option.flag[2:]}",) if option.is_switch else (option.flag,)
    return typer.Option(*names, metavar=option.metavar, help=option.help)


def asked(context: typer.Context, data: Path, given: Mapping[str, Any]) -> Job:
    """The data and options of a call, by name; those of a job file lie under those of the line."""
    from clingstone.intake import job

    options = [option for option in settings_options() if option.name in given]
    if data.suffix.casefold() != job.SUFFIX:
        return job.Job(data, {option.name: option.read(given[option.name]) for option in options})
    told = job.read(data)
    line = {o.name: o.read(given[o.name]) for o in options if _on_the_line(context, o.name)}
    return replace(told, arguments={**told.arguments, **line})


def _on_the_line(context: typer.Context, name: str) -> bool:
    """Whether an option was given, be it as its default."""
    source = context.get_parameter_source(name)
    return source is not None and source.name == "COMMANDLINE"


def changed(given: Mapping[str, Any]) -> bool:
    """Whether an option of an examination is other than its default."""
    return any(given[o.name] != o.default for o in settings_options() if o.name in given)
