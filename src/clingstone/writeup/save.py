"""A folder of files, written whole or not at all."""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import partial
from pathlib import Path

from clingstone.display import Table
from clingstone.needs import InputError
from clingstone.results import Results, to_json
from clingstone.run import Progress
from clingstone.writeup import bandwidths, curves, figures, rehearsed, script, tables, word
from clingstone.writeup.bibliography import bibtex, csl_json
from clingstone.writeup.draft import shown
from clingstone.writeup.latex import latex_text
from clingstone.writeup.methods import methods_text
from clingstone.writeup.panels import timeline, tree
from clingstone.writeup.places import sites
from clingstone.writeup.plate import Plate, written
from clingstone.writeup.report import report

RESULTS = "results.json"
FIGURES = "figures"
TABLES = "tables"
WORD = "methods.docx"  # written where python-docx is installed
FILES = (
    *("report.html", "methods.md", "methods.tex", WORD, "references.bib", "references.json"),
    *("evidence.csv", "intervals.csv", RESULTS),
    *script.FILES,
)
SUFFIXES = {FIGURES: (".svg", ".png", ".csv"), TABLES: (".csv", ".tex")}


def save(
    results: Results, folder: str | Path, *, overwrite: bool = False, progress: Progress | None = None
) -> Path:
    """Write report, methods text (Markdown, LaTeX, Word), references (BibTeX, CSL-JSON), tables, figures and
    results.json; return the folder.

    The files are written beside the folder first and moved into place at once, so that a failure
    leaves nothing half-written. An existing folder is used when it is empty, or when it holds only
    what an earlier call wrote and ``overwrite`` is true.

    Raises InputError when the folder holds anything else, is a file, or cannot be written.
    """
    target = check(folder, overwrite)
    steps = _steps(results, target)
    try:
        with _beside(target) as fresh:
            for done, (label, write) in enumerate(steps):
                if progress is not None:
                    progress(label, done, len(steps))
                write(fresh)
            _put(fresh, target)
    except OSError as problem:
        raise InputError(
            f"{target} could not be written: {problem.strerror or problem}",
            "Name a folder in which you may write, on a disk with room.",
        ) from problem
    if progress is not None:
        progress("saved", len(steps), len(steps))
    return target


def plates(results: Results) -> tuple[Plate, ...]:
    """Every figure of an examination: the two of the first screen, then those of the evidence."""
    drawn = (
        figures.ladder(results),
        figures.share_bar(results),
        *figures.ladders(results),
        rehearsed.plate(results),
        tree(results),
        timeline(results),
        sites(results),
    )
    lead = [p for p in drawn if p is not None]
    return (*lead, *bandwidths.plates(results), *curves.plates(results))


def _steps(results: Results, target: Path) -> list[tuple[str, Callable[[Path], None]]]:
    """Labels and writers, in order; each writer is given the folder to write into."""
    texts: dict[str, Callable[[], str]] = {
        "report.html": lambda: report(results),
        "methods.md": lambda: results.methods or methods_text(results),
        "methods.tex": lambda: latex_text(results),
        "references.bib": lambda: bibtex(results),
        "references.json": lambda: csl_json(results),
        "evidence.csv": lambda: tables.evidence_file(results).to_csv(),
        "intervals.csv": lambda: tables.intervals_file(results).to_csv(),
        RESULTS: lambda: to_json(results),
        **script.files(results, target),
    }
    steps = [(name, partial(_write_text, name, make)) for name, make in texts.items()]
    steps += [(WORD, partial(_write_word, results))] if word.available() else []
    steps += [(f"table {stem}", partial(_write_table, stem, t)) for stem, t in shown(results).items()]
    return [
        *steps,
        *((f"figure {plate.name}", partial(_write_plate, results, plate)) for plate in plates(results)),
    ]


def _write_text(name: str, make: Callable[[], str], folder: Path) -> None:
    (folder / name).write_text(make(), encoding="utf-8", newline="\n")


def _write_word(results: Results, folder: Path) -> None:
    (folder / WORD).write_bytes(word.word_bytes(results))


def _write_table(stem: str, table: Table, folder: Path) -> None:
    inside = folder / TABLES
    inside.mkdir(exist_ok=True)
    _write_text(f"{stem}.csv", table.to_csv, inside)
    _write_text(f"{stem}.tex", lambda: table.to_latex() + "\n", inside)


def _write_plate(results: Results, plate: Plate, folder: Path) -> None:
    inside = folder / FIGURES
    inside.mkdir(exist_ok=True)
    (inside / f"{plate.name}.svg").write_text(written(results, plate), encoding="utf-8", newline="\n")
    (inside / f"{plate.name}.png").write_bytes(plate.png())
    (inside / f"{plate.name}.csv").write_text(plate.table.to_csv(), encoding="utf-8", newline="\n")


def check(folder: str | Path, overwrite: bool = False) -> Path:
    """The folder as an absolute path, after a look whether it may be written; nothing is changed.

    Raises InputError when it is a file, or holds anything but what an earlier call wrote, or that and
    ``overwrite`` is false.
    """
    target = Path(folder).expanduser().absolute()
    if target.exists() and not target.is_dir():
        raise InputError(f"{target} is a file, not a folder", "Name a folder that does not exist yet.")
    if not target.exists() or not any(target.iterdir()):
        return target
    others = _strangers(target)
    if others:
        shown = ", ".join(others[:3]) + (f" and {len(others) - 3} more" if len(others) > 3 else "")
        raise InputError(
            f"{target} is not empty and holds files that were not written here: {shown}",
            "Name a new or an empty folder; nothing was changed.",
        )
    if not overwrite:
        raise InputError(
            f"{target} already holds an earlier report",
            "Name another folder, or ask for it to be replaced (overwrite=True, --overwrite).",
        )
    return target


def _strangers(folder: Path) -> list[str]:
    """What an earlier save did not write. A folder without results.json was not written by one."""
    inside = [p.relative_to(folder) for p in folder.rglob("*") if not p.is_dir() or p.is_symlink()]
    ours = (folder / RESULTS).is_file()
    return sorted(str(p) for p in inside if not (ours and _written_here(p)))


def _written_here(path: Path) -> bool:
    if len(path.parts) == 1:
        return path.name in FILES
    return len(path.parts) == 2 and path.suffix in SUFFIXES.get(path.parts[0], ())


@contextmanager
def _beside(target: Path) -> Iterator[Path]:
    """A temporary sibling, on the same disk so that a move is one step; removed whatever happens."""
    made = [p for p in (target.parent, *target.parent.parents) if not p.exists()]
    target.parent.mkdir(parents=True, exist_ok=True)
    fresh: Path | None = None
    try:
        fresh = Path(tempfile.mkdtemp(prefix=f".{target.name}-", dir=target.parent))
        yield fresh
    finally:
        if fresh is not None and fresh.exists():
            shutil.rmtree(fresh)
        for parent in made:  # folders made on the way, if nothing came to stand in them
            if parent.is_dir() and not any(parent.iterdir()):
                parent.rmdir()


def _put(fresh: Path, target: Path) -> None:
    """Move the fresh folder into place; an earlier one steps aside first and comes back on failure."""
    fresh.chmod(0o777 & ~_umask())
    if not target.exists() or not any(target.iterdir()):
        if target.exists():
            target.rmdir()
        fresh.rename(target)
        return
    aside = Path(tempfile.mkdtemp(prefix=f".{target.name}-old-", dir=target.parent))
    old = aside / "old"
    target.rename(old)
    try:
        fresh.rename(target)
    except OSError:
        old.rename(target)
        raise
    finally:
        shutil.rmtree(aside)


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask
