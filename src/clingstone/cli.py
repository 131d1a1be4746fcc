"""The command line: commands over Settings, exit status, progress.

Exit status: 0 done; 2 the input or the call is wrong; 1 a fault of ours, or a replay whose numbers
differ; 130 stopped from the keyboard. Nothing heavy is imported before a command has its arguments.
"""

from __future__ import annotations

import inspect
import sys
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import replace
from itertools import count
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, NoReturn

import typer

from clingstone import cli_plan, cli_rehearse
from clingstone.demo import DEMOS, data_folder, find
from clingstone.needs import InputError, NotSupported
from clingstone.options import Option, in_shell, settings_options

if TYPE_CHECKING:
    from clingstone.examination import Examination
    from clingstone.intake.job import Job
    from clingstone.run import Progress

app = typer.Typer(
    name="clingstone",
    add_completion=False,
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    help="Which rows of a regression hang together, what that does to its intervals, and what to report.",
)

Out = Annotated[
    Path | None,
    typer.Option("--out", metavar="DIR", help="Folder for what is saved. [default: NAME-clingstone]"),
]
AsJson = Annotated[bool, typer.Option("--json", help="Print results.json and nothing else.")]
Overwrite = Annotated[bool, typer.Option("--overwrite", help="Replace what an earlier run saved in DIR.")]
Quiet = Annotated[bool, typer.Option("--quiet", help="Say nothing but errors; show no progress.")]
Debug = Annotated[bool, typer.Option("--debug", help="On a fault of ours, show the traceback.")]


def _version(wanted: bool) -> None:
    if wanted:
        from clingstone import __version__

        typer.echo(f"clingstone {__version__}")
        raise typer.Exit()


@app.callback()
def _root(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version.")
    ] = False,
) -> None: ...


# ---- the commands ----------------------------------------------------------------------------


def _examine(
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


def _with_settings(command: Callable[..., None]) -> Callable[..., None]:
    """The command with an option for every field of Settings, in their order."""
    Data = Annotated[
        Path,
        typer.Argument(
            metavar="DATA", help="A file: CSV, Parquet, Excel, SPSS, Stata …, or a job file (.toml)."
        ),
    ]
    shared = {"out": Out, "json": AsJson, "overwrite": Overwrite, "quiet": Quiet, "debug": Debug}
    kinds: dict[str, Any] = {"context": typer.Context, "data": Data}
    defaults: dict[str, Any] = {}
    for option in settings_options():
        kinds[option.name] = Annotated[option.kind, _typer_option(option)]
        defaults[option.name] = option.default
    for name, kind in shared.items():
        kinds[name] = kind
        defaults[name] = None if name == "out" else False
    command.__signature__ = inspect.Signature(  # type: ignore[attr-defined]
        [
            inspect.Parameter(
                name,
                inspect.Parameter.KEYWORD_ONLY,
                annotation=kind,
                default=defaults.get(name, inspect.Parameter.empty),
            )
            for name, kind in kinds.items()
        ]
    )
    command.__annotations__ = kinds
    return command


def _typer_option(option: Option) -> Any:
    names = (f"{option.flag}/--no-{option.flag[2:]}",) if option.is_switch else (option.flag,)
    return typer.Option(*names, metavar=option.metavar, help=option.help)


app.command("examine", short_help="Examine a file and save the report.")(_with_settings(_examine))


@app.command(short_help="Examine one of the demonstration data sets.")
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
        typer.echo(f"{_wrapped(chosen.question)}\n\n{chosen.command}\n")
    _run(chosen.path, dict(chosen.arguments), out, json=json, overwrite=overwrite, quiet=quiet)


@app.command(short_help="Run a saved examination again and compare every number.")
def replay(
    folder: Annotated[Path, typer.Argument(metavar="DIR", help="A folder that clingstone saved.")],
    data: Annotated[
        Path | None, typer.Option("--data", metavar="FILE", help="Where the data are, if they were moved.")
    ] = None,
    debug: Debug = False,
) -> None:
    """Run a saved examination again and say whether every number agrees."""
    from clingstone.examination import replay as again

    agrees, lines = again(folder, data if data is not None else _data_of(folder))
    for line in lines:
        typer.echo(line)
    if not agrees:
        raise typer.Exit(1)


def _data_of(folder: Path) -> Path | None:
    """The file of a saved run where it can be looked for: at its path as given, then by its name here,
    beside the folder, among the demonstrations. That it is the same data is seen by the fingerprint.
    """
    from clingstone.results import read_tree

    saved = folder / "results.json"
    if not saved.is_file():
        return None  # the verb says so
    origin = read_tree(saved.read_text(encoding="utf-8"))["case"]["origin"]
    given, name = origin.get("path", ""), origin.get("file", "")
    if given and Path(given).is_file():
        return Path(given)
    places = (Path(), folder.absolute().parent, data_folder())
    return next((place / name for place in places if name and (place / name).is_file()), None)


def _run(
    data: Path, arguments: dict[str, Any], out: Path | None, *, json: bool, overwrite: bool, quiet: bool
) -> None:
    """Examine, save, print. With --json a folder is written only when --out names one."""
    folder = out if out is not None else None if json else _unused(f"{data.stem}-clingstone", overwrite)
    if folder is not None:
        _can_be_made(folder)
        from clingstone.writeup.save import check

        check(folder, overwrite)  # before the work, not after it
    from clingstone.examination import examine

    with _progress(quiet) as progress:
        examination = examine(data, **arguments, progress=progress)
        if folder is not None:
            examination.save(folder, overwrite=overwrite)
    if json:
        from clingstone.results import to_json

        _write(to_json(examination.results))
    elif not quiet:
        _write(_printed(examination, folder))


def _can_be_made(folder: Path) -> None:
    """Raises InputError where a part of the path is a file."""
    for part in folder.expanduser().absolute().parents:
        if part.is_file():
            raise InputError(
                f"{part} is a file, so {folder.name} cannot be a folder in it",
                "Name another folder with --out.",
            )


def _unused(name: str, overwrite: bool) -> Path:
    """The folder of that name, or the first of NAME-2, NAME-3 … that is not there yet."""
    if overwrite or not Path(name).exists():
        return Path(name)
    return next(path for path in (Path(f"{name}-{k}") for k in count(2)) if not path.exists())


def _printed(examination: Examination, folder: Path | None) -> str:
    text = str(examination).rstrip("\n") + "\n"
    return text if folder is None else f"{text}\nreport.html · methods.md · results.json   in  {folder}/\n"


cli_rehearse.register(app)
cli_plan.register(app)

# ---- what a person sees meanwhile ------------------------------------------------------------


@contextmanager
def _progress(quiet: bool) -> Iterator[Progress | None]:
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


def _wrapped(text: str) -> str:
    import textwrap

    return textwrap.fill(text, 78)


def _lines(text: str, indent: str = "") -> str:
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


def _write(text: str) -> None:
    """To standard output; a sign that its encoding lacks becomes "?" rather than a fault."""
    encoding = sys.stdout.encoding or "utf-8"
    sys.stdout.write(text.encode(encoding, errors="replace").decode(encoding))
    sys.stdout.flush()


# ---- the way out -----------------------------------------------------------------------------


def main(arguments: Sequence[str] | None = None) -> NoReturn:
    """The ``clingstone`` command."""
    words = list(sys.argv[1:] if arguments is None else arguments)
    try:
        typer.main.get_command(app)(args=words, prog_name="clingstone")
    except (InputError, NotSupported) as error:
        _tell(_lines(f"clingstone: {in_shell(str(error))}"))
        if error.hint:
            _tell(_lines(in_shell(error.hint), "  "))
        sys.exit(2)
    except Exception as fault:
        if "--debug" in words:
            raise
        _tell(f"clingstone: a fault of ours stopped the work ({type(fault).__name__}: {fault}).")
        _tell("  Run the same command with --debug for the traceback, and send us that.")
        sys.exit(1)
    sys.exit(0)


def _tell(line: str) -> None:
    typer.echo(line, err=True)
