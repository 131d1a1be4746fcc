"""docs/sizes.md: every size and coverage, measured anew.

python -m tests.simulation.write [WORKERS]
"""

from __future__ import annotations

import sys
from collections.abc import Iterable
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context
from pathlib import Path

from tests.simulation.cells import COVERS, ERRORS, LEVEL, SEED, Cell
from tests.simulation.worlds import KINDS, WORLDS

PAGE = Path(__file__).parents[2] / "docs" / "sizes.md"

HEAD = f"""# Sizes and coverages

What each test and each refit does by itself on invented designs whose truth is known; for what the whole
examination does see [Validation](validation.md). Every figure was measured by `tests/simulation/`.

*Size* is the share of columns of y in which a test of a true null gives p up to {LEVEL:g}. *Coverage* is the
share of 95 % intervals that hold the true coefficient. The number after ± is the Monte-Carlo standard error.
*Refused* is the share of columns in which the data could not carry the refit, or left too few degrees of
freedom; the coverage is that of the others. *Held to* is what the tests of this package demand, give or take
{ERRORS:g} Monte-Carlo errors; a reason stands where that is not simply the nominal level.
"""


def measured(name: str) -> list[Cell]:
    """The cells of a world, by its name."""
    print(name, file=sys.stderr, flush=True)
    return next(world for world in WORLDS if world.name == name).measured()


def page(cells: dict[str, list[Cell]]) -> str:
    """The page from the cells of each world."""
    out, reasons = [HEAD], {}
    for kind, worlds in KINDS.items():
        mine = [cell for world in worlds for cell in cells[world.name]]
        for cell in mine:
            if cell.bound.why:
                reasons.setdefault(cell.bound.why, f"{len(reasons) + 1}")
        sizes, covers = [c for c in mine if not c.row], [c for c in mine if c.row]
        out.append(f"\n## {kind}: sizes\n\n" + _table(("world", "test", "size", "held to"), sizes, reasons))
        head = ("world", "refit", "row", "coverage", "refused", "held to")
        out.append(f"\n## {kind}: coverages\n\n" + _table(head, covers, reasons))
    out.append(
        "\n## Reasons\n\n" + "".join(f"{n}. {why[0].upper()}{why[1:]}.\n" for why, n in reasons.items())
    )
    out.append(f"\n## How it was made\n\nSeed {SEED}.\n\n```text\npython -m tests.simulation.write\n```\n")
    return "".join(out)


def _table(head: tuple[str, ...], cells: Iterable[Cell], reasons: dict[str, str]) -> str:
    lines = ["| " + " | ".join(head) + " |", "|" + "---|" * len(head)]
    for cell in cells:
        share = f"{cell.value:.3f} ± {cell.error(cell.value):.3f}"
        held = _held(cell) + (f" (reason {reasons[cell.bound.why]})" if cell.bound.why else "")
        refused = f"{cell.refused / (cell.n + cell.refused):.2f}" if cell.refused else "0"
        row = (cell.row, share, refused) if cell.row else (share,)
        lines.append("| " + " | ".join((cell.world, cell.method, *row, held)) + " |")
    return "\n".join(lines) + "\n"


def _held(cell: Cell) -> str:
    low, high = cell.bound.low, cell.bound.high
    if low == high:
        return f"{low:g}"
    if high == COVERS.high:
        return f"{low:g} or more" if low else "nothing"
    return f"{low:g} to {high:g}" if low else f"{high:g} or less"


def main(workers: int) -> None:
    names = [world.name for world in WORLDS]
    with ProcessPoolExecutor(workers, get_context("spawn")) as pool:
        cells = dict(zip(names, pool.map(measured, names), strict=True))
    PAGE.write_text(page(cells), encoding="utf-8")
    for faults in ([c for c in found if not c.bound.holds(c)] for found in cells.values()):
        for cell in faults:
            print(cell)


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 1)
