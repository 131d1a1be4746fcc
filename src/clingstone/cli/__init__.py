"""The command line: commands over Settings, exit status.

Exit status: 0 done; 2 the input or the call is wrong; 1 a fault of ours, or a replay whose numbers
differ; 130 stopped from the keyboard. Nothing heavy is imported before a command has its arguments.
"""

from __future__ import annotations

import sys
from collections.abc import Sequence
from typing import Annotated, NoReturn

import typer

from clingstone.cli import examine, plan, rehearse, saved
from clingstone.cli.screen import lines
from clingstone.needs import InputError, NotSupported
from clingstone.options import apart, in_shell

app = typer.Typer(
    name="clingstone",
    add_completion=False,
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    help="Which rows of a regression hang together, what that does to its intervals, and what to report.",
)


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


app.command("examine", short_help="Examine a file and save the report.")(examine.command)
app.command("demo", short_help="Examine one of the demonstration data sets.")(examine.demo)
app.command("replay", short_help="Run a saved examination again and compare every number.")(saved.replay)
app.command("rehearse", short_help="Simulate y on a design and see how each remedy would have done.")(
    rehearse.command
)
app.command("plan", short_help="The interval width to expect with other numbers of groups, rows.")(
    plan.command
)


def main(arguments: Sequence[str] | None = None) -> NoReturn:
    """The ``clingstone`` command."""
    words = list(sys.argv[1:] if arguments is None else arguments)
    try:
        typer.main.get_command(app)(args=apart(words), prog_name="clingstone")
    except (InputError, NotSupported) as error:
        _tell(lines(f"clingstone: {in_shell(str(error))}"))
        if error.hint:
            _tell(lines(in_shell(error.hint), "  "))
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
