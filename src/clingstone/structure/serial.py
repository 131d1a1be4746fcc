"""Order in time: series, elapsed time, lags."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition

Spacing = Literal["regular", "regular with gaps", "irregular"]
Rows = npt.NDArray[np.int64]


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

    @once
    def pairs(self, lag: int) -> tuple[Rows, Rows]:
        """Rows (earlier, later) of one series exactly ``lag`` base steps apart. Needs ``tick``."""
        if self.tick is None:
            raise ValueError("irregular times have no lags in whole steps")
        # Series are laid end to end on one integer line, far enough apart never to meet.
        span = int(self.tick.max() - self.tick.min()) + lag + 1
        place = self.part.codes.astype(np.int64) * span + (self.tick - self.tick.min())
        later = np.searchsorted(place, place + lag)
        ok = later < len(place)
        ok[ok] = place[later[ok]] == place[ok] + lag
        earlier = np.flatnonzero(ok)
        return earlier, later[ok]

    @property
    @once
    def runs(self) -> Partition:
        """Rows → maximal stretches of one series without a missing step. Needs ``tick``."""
        if self.tick is None:
            raise ValueError("irregular times have no runs of consecutive steps")
        starts = np.ones(self.part.n, dtype=bool)
        starts[1:] = ~(self.steps[1:] == 1.0)
        codes = (np.cumsum(starts) - 1).astype(np.int32)
        return Partition("run", codes, tuple(str(i) for i in range(int(codes[-1]) + 1)))

    def take(self, rows: npt.NDArray[Any]) -> Series:
        """The same structure on some rows, in their stored order."""
        tick = None if self.tick is None else self.tick[rows]
        return Series(
            self.name,
            self.part.take(rows),
            self.elapsed[rows],
            self.unit,
            self.step,
            tick,
            self.spacing,
            self.gaps,
            self.ties,
            self.notes,
        )
