"""Order in time: series, elapsed time, lags."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from clingstone.display import count, listed, rows
from clingstone.maths.once import Array, Codes, frozen, once
from clingstone.maths.partition import Partition
from clingstone.needs import InputError, NotSupported
from clingstone.structure.clock import Clock, read
from clingstone.structure.group import Groups
from clingstone.structure.spacing import Grid, Spacing, judge

if TYPE_CHECKING:
    import pandas as pd

Rows = npt.NDArray[np.int64]
WRITTEN = 2000  # distinct times that are kept as text
WHOLE = "all rows"
NEAR = 8  # lags of which pairs are found by looking ahead row by row


@dataclass(frozen=True, eq=False)
class Series:
    """Rows in time order within series; the rows of a design are stored in this order.

    name : the user's time column.
    part : rows → series, codes nondecreasing; key is the user's series column (or "all rows").
    elapsed : (n,) time since the first time in the table, in ``unit``s.
    unit : "day", "hour", "month" …, or "" for a plain number.
    step : the base step in ``unit``s (the modal or common step); median step when irregular.
    tick : (n,) whole steps since the first time, or None when the spacing is irregular.
    spacing : judged over all series. gaps : number of missing steps inside series.
    ties : rows that share their series and time with an earlier row.
    first, last : earliest and latest time, as the user wrote them. written : every distinct time so, in
    order; empty where they are more than WRITTEN.
    """

    name: str
    part: Partition
    elapsed: Array
    unit: str
    step: float
    tick: Rows | None
    spacing: Spacing
    gaps: int = 0
    ties: int = 0
    notes: tuple[str, ...] = ()
    first: str = ""
    last: str = ""
    written: tuple[str, ...] = ()

    @property
    @once
    def steps(self) -> Array:
        """(n,) elapsed time since the row before in the same series, in base steps; NaN at a start."""
        out = np.full(self.part.n, np.nan)
        same = self.part.codes[1:] == self.part.codes[:-1]
        if self.tick is not None:
            out[1:][same] = np.diff(self.tick)[same]
        else:
            out[1:][same] = (np.diff(self.elapsed) / self.step)[same]
        return out

    @property
    @once
    def times(self) -> tuple[Array, Codes]:
        """Distinct elapsed times (T,), rising, and which of them each row has (n,)."""
        if self.tick is not None:
            place = self.tick - self.tick.min()
            if place.max() < 4 * len(place):  # counted, without a sort
                used = np.bincount(place) > 0
                codes = (np.cumsum(used) - 1)[place].astype(np.int32)
                distinct = np.empty(int(used.sum()))
                distinct[codes] = self.elapsed
                return frozen(distinct), frozen(codes)
        distinct, codes = np.unique(self.elapsed, return_inverse=True)
        return frozen(distinct), frozen(codes.astype(np.int32).ravel())

    @property
    @once
    def repeats(self) -> bool:
        """Whether rows share their series and time: they are repeats of one visit."""
        return bool(np.any(self.steps == 0))

    def pairs(self, lag: int) -> tuple[Rows, Rows]:
        """Rows (earlier, later) of one series exactly ``lag`` base steps apart. Needs ``tick``.

        Where several rows share a series and a time, each of them is paired.
        """
        if self.tick is None:
            raise ValueError("irregular times have no lags in whole steps")
        # Series are laid end to end on one integer line, far enough apart never to meet.
        span = int(self.tick.max() - self.tick.min()) + lag + 1
        place = self.part.codes.astype(np.int64) * span + (self.tick - self.tick.min())
        if lag <= NEAR and not self.repeats:
            partner = np.full(len(place), -1)  # which is at most so many rows ahead
            for ahead in range(1, min(lag, len(place) - 1) + 1):
                rows = np.flatnonzero(place[ahead:] - place[:-ahead] == lag)
                partner[rows] = rows + ahead
            earlier = np.flatnonzero(partner >= 0)
            return earlier, partner[earlier]
        begin = np.searchsorted(place, place + lag)
        found = np.searchsorted(place, place + lag, side="right") - begin
        earlier = np.repeat(np.arange(len(place)), found)
        within = np.arange(len(earlier)) - np.repeat(np.cumsum(found) - found, found)
        return earlier, np.repeat(begin, found) + within

    @property
    @once
    def runs(self) -> Partition:
        """Rows → maximal stretches of one series without a missing step. Needs ``tick``.

        Rows that share a series and a time stay in one stretch.
        """
        if self.tick is None:
            raise ValueError("irregular times have no runs of consecutive steps")
        starts = np.ones(self.part.n, dtype=bool)
        starts[1:] = ~(self.steps[1:] <= 1.0)
        codes = (np.cumsum(starts) - 1).astype(np.int32)
        return Partition("run", codes, tuple(str(i) for i in range(int(codes[-1]) + 1)))

    def take(self, rows: npt.NDArray[Any]) -> Series:
        """The same structure on some rows, in their stored order."""
        tick = None if self.tick is None else self.tick[rows]
        return replace(self, part=self.part.take(rows), elapsed=self.elapsed[rows], tick=tick, written=())


def build(
    name: str,
    values: pd.Series,
    series: Partition | None = None,
    groups: Groups | None = None,
    ties: str = "stop",
    places: Rows | None = None,
) -> tuple[Series, Rows]:
    """Series from a column of times without missing values, and the order of rows that goes with it.

    Parameters
    ----------
    name, values : the column, (n,).
    series : rows → series where the user named them. Without it: the finest group level within
        which time is unique (levels of one row per cell are passed over), else the whole table.
    ties : "stop", or "replicate" to keep and count rows that share series and time.
    places : (n,) positions in the user's table, for messages.

    Returns
    -------
    The Series in (series, time) order, and the order: row i of the series is row order[i] of the
    input. Tied rows keep the order of the table.

    Raises
    ------
    InputError : times that cannot be read; tied times under "stop". NotSupported : ties="mean".
    """
    places = np.arange(len(values)) if places is None else places
    clock = read(name, values, places)
    if ties == "mean":
        raise NotSupported(
            "ties='mean' is not carried out here: averaging rows of unequal number changes their weights",
            "Average such rows before, with their number as precision weight, or use ties='replicate'.",
        )
    part, notes = (series, []) if series is not None else _default(name, clock, groups, ties, places)
    tied = _tied(clock, part)
    if len(tied) and ties == "stop":
        raise _tie_error(name, clock, part, tied, places, groups)
    order = _in_order(clock, part, ties=len(tied) > 0)
    found = part.take(order)
    grid = judge(clock.counts[order], found.codes)
    unit, per = clock.unit_for(grid.step)
    counts = clock.counts[order]
    if len(tied):
        notes.append(
            f"{count(len(tied), 'row')} share their series and time with another row; they are replicates."
        )
    notes.extend(_grid_notes(name, grid, found, unit, per))
    made = Series(
        name=name,
        part=found,
        elapsed=frozen(np.asarray((counts - counts.min()) / per, dtype=float)),
        unit=unit,
        step=grid.step / per,
        tick=None if grid.tick is None else frozen(grid.tick),
        spacing=grid.spacing,
        gaps=grid.gaps,
        ties=len(tied),
        notes=(*clock.notes, *notes),
        first=clock.show(int(np.argmin(clock.counts))),
        last=clock.show(int(np.argmax(clock.counts))),
    )
    return replace(made, written=_written(made, clock, order)), order


def _written(series: Series, clock: Clock, order: Rows) -> tuple[str, ...]:
    distinct, codes = series.times
    if len(distinct) > WRITTEN:
        return ()
    row = np.zeros(len(distinct), dtype=np.int64)
    row[codes] = order
    return tuple(clock.show(int(one)) for one in row)


def _line(clock: Clock, part: Partition) -> Rows | None:
    """(n,) places of the rows on one line of whole numbers, series after series; None where none is made."""
    counts = clock.counts
    if not np.issubdtype(counts.dtype, np.integer):
        return None
    span = int(counts.max()) - int(counts.min()) + 1
    if span * part.count >= 2**62:
        return None
    return np.asarray(part.codes * np.int64(span) + (counts - counts.min()), dtype=np.int64)


def _in_order(clock: Clock, part: Partition, ties: bool = True) -> Rows:
    """(n,) rows by series and time; equal times stay in the table's order."""
    line = _line(clock, part)
    if line is None:
        return np.lexsort((clock.counts, part.codes)).astype(np.int64)
    return np.argsort(line, kind="stable" if ties else None)


def _tied(clock: Clock, part: Partition) -> Rows:
    """Rows whose series and time an earlier row of the table has already."""
    line = _line(clock, part)
    if line is not None and np.all(np.diff(np.sort(line))):
        return np.zeros(0, dtype=np.int64)
    order = _in_order(clock, part)
    again = (np.diff(part.codes[order]) == 0) & (np.diff(clock.counts[order]) == 0)
    return np.sort(order[1:][again])


def _default(
    name: str, clock: Clock, groups: Groups | None, ties: str, places: Rows
) -> tuple[Partition, list[str]]:
    """Which rows form a series when nobody said."""
    whole = Partition(WHOLE, frozen(np.zeros(len(places), dtype=np.int32)), (WHOLE,))
    levels = () if groups is None else tuple(g for g in groups.levels if g.count < g.n)
    fine_first: Sequence[Partition] = sorted(levels, key=lambda g: -g.count)
    for level in (*fine_first, whole):
        if not len(_tied(clock, level)):
            note = f"Each {level.key} is one series." if level.key != WHOLE else "All rows form one series."
            return level, [f"{note} To choose another, name it with series=."]
    candidates = [*fine_first, whole]
    best = min(candidates, key=lambda level: len(_tied(clock, level)))
    if ties == "replicate":
        return best, [f"Each {best.key} is one series." if best.key != WHOLE else "All rows form one series."]
    raise _tie_error(name, clock, best, _tied(clock, best), places, groups)


def _tie_error(
    name: str, clock: Clock, part: Partition, tied: Rows, places: Rows, groups: Groups | None
) -> InputError:
    if bool(np.all(clock.counts == clock.counts[0])):
        return InputError(
            f"{name} is {clock.show(0)} in every row, so it puts no two of them in order",
            "Name the column in which time runs, or leave time= out.",
        )
    row = int(tied[0])
    twins = np.flatnonzero((part.codes == part.codes[row]) & (clock.counts == clock.counts[row]))
    where = "in the whole table" if part.key == WHOLE else f"within {part.key}"
    example = f"{name} {clock.show(row)}" + (
        "" if part.key == WHOLE else f" of {part.key} {part.labels[part.codes[row]]}"
    )
    hint = "Name the column that tells the series apart with series="
    hint += " or group=" if groups is None else ""
    hint += ", or, if these rows are repeats of one occasion, use ties='replicate'."
    if any(unit == "hour" for unit, _ in clock.units):
        hint += " Local clock times without a zone repeat an hour in autumn: give times with their zone."
    return InputError(
        f"{name} is not unique {where}: {count(len(tied), 'row')} "
        f"{'shares' if len(tied) == 1 else 'share'} series and time with an earlier row "
        f"(for instance {example}: {rows(places[twins])}), so their order is unknown",
        hint,
    )


def _grid_notes(name: str, grid: Grid, part: Partition, unit: str, per: float) -> list[str]:
    step = f"{grid.step / per:g}" + (f" {unit}{'' if grid.step == per else 's'}" if unit else "")
    alone = int(np.sum(part.sizes == 1))
    notes = []
    if grid.spacing == "regular with gaps":
        total = part.n + grid.gaps
        notes.append(
            f"{name} runs in steps of {step} with {count(grid.gaps, 'missing step')} "
            f"({100 * grid.gaps / total:.2g} % of {total:,}); no lag is formed across one."
        )
    elif grid.spacing == "irregular" and alone < part.count:
        notes.append(f"{name} is irregular: the median step is {step}, and lags are elapsed times.")
    if grid.near > 0:
        notes.append(
            f"Times lie within {100 * grid.near:.2g} % of a step of a regular grid and are put on it."
        )
    if alone:
        named = listed([part.labels[i] for i in np.flatnonzero(part.sizes == 1)], most=3)
        notes.append(f"{count(alone, 'series', 'series')} of one row ({named}) tell nothing of order.")
    return notes
