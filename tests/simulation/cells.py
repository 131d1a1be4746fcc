"""Measured sizes and coverages, and the bounds that they must keep.

A *world* is one design and a law of errors; the true coefficients are zero, so that y is its errors. Every
test and refit of a world reads the same B columns of y. A *cell* is what one of them did there.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from zlib import crc32

import numpy as np

from clingstone.covariance.fits import Fits
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.evidence.finding import Test
from clingstone.evidence.gather import read_column
from clingstone.maths.once import Array
from clingstone.needs import NotSupported
from clingstone.remedies.refit import at
from clingstone.remedies.remedy import Estimates, Ready, Remedy
from clingstone.run import Run, Settings, one_thread

LEVEL = 0.05  # of tests; intervals are of 95 %
ERRORS = 4.0  # Monte-Carlo standard errors that a bound gives way
SEED = 20_261_203


@dataclass(frozen=True)
class Bound:
    """What a share should lie between. why : the reason, where it is not simply the nominal level."""

    low: float
    high: float
    why: str = ""

    def holds(self, cell: Cell) -> bool:
        """Within the bounds but for ``ERRORS`` Monte-Carlo errors at the bound itself."""
        below, above = (ERRORS * cell.error(edge) for edge in (self.low, self.high))
        return self.low - below <= cell.value <= self.high + above


COVERS = Bound(0.95, 1.0)  # an interval that is too wide keeps its promise
NOMINAL = Bound(0.95, 0.95)
SIZED = Bound(LEVEL, LEVEL)


@dataclass(frozen=True)
class Cell:
    """k of n columns: rejections of a test, or intervals of a row that hold the truth.

    row : the predictor, "" for a test. draws : of a reference distribution that all columns share, which the
    share is uncertain by as well; 0 where there is none. refused : further columns in which the data could
    not carry the refit, or told too little of how long the interval should be.
    """

    world: str
    method: str
    row: str
    k: int
    n: int
    bound: Bound
    draws: int = 0
    refused: int = 0

    @property
    def value(self) -> float:
        return self.k / self.n

    def error(self, share: float) -> float:
        """Monte-Carlo standard error at a true share; half a count where it would be zero."""
        spread = share * (1 - share)
        more = LEVEL * (1 - LEVEL) / self.draws if self.draws else 0.0
        return float(np.sqrt(spread / self.n + 0.25 / self.n**2 + more))

    def __str__(self) -> str:
        where = f"{self.method} of {self.row}" if self.row else self.method
        return (
            f"{self.world}: {where}: {self.value:.3f} ± {self.error(self.value):.3f} "
            f"({self.n} columns), not in {self.bound.low:.3f} to {self.bound.high:.3f}"
        )


@dataclass(frozen=True, eq=False)
class Sized:
    """A test whose null is true in a world.

    about : the level, lag or neighbourhood; the first if empty. each : read column by column, where a single
    one is referred to draws of its own. quick : part of the ordinary suite.
    """

    test: Test
    about: str = ""
    columns: int = 4000
    draws: int = 0
    bound: Bound = SIZED
    label: str = ""
    each: bool = False
    quick: bool = True

    @property
    def name(self) -> str:
        return self.label or self.test.id

    def cells(self, world: World, Y: Array) -> list[Cell]:
        """One cell; none where these data cannot carry the test."""
        whole = world.fits(Y[:, : self.columns])
        found = [a for a in self.test.abouts(world.design) if self.about in ("", a.key)]
        if not found or self.test.needs.check(world.design) is not None:
            return []
        parts = [whole.column(b) for b in range(whole.response.B)] if self.each else [whole]
        readings = [read_column(fits, self.test, found[0]).reading for fits in parts]
        if any(reading is None for reading in readings):
            return []
        p = np.concatenate([np.atleast_1d(reading.p) for reading in readings if reading is not None])
        return [Cell(world.name, self.name, "", int(np.sum(p <= LEVEL)), len(p), self.bound, self.draws)]


@dataclass(frozen=True, eq=False)
class Covered:
    """A refit of a world.

    bounds : row → what its coverage should be; rows that are not named are not read. draws : of a reference
    distribution that all columns share. quick : part of the ordinary suite.
    """

    remedy: Remedy
    bounds: Mapping[str, Bound]
    at: str = ""
    columns: int = 4000
    draws: int = 0
    label: str = ""
    quick: bool = True

    @property
    def name(self) -> str:
        return self.label or self.remedy.id

    def cells(self, world: World, Y: Array) -> list[Cell]:
        """A cell per row that is served in some column."""
        fits = world.fits(Y[:, : self.columns])
        try:
            one = at(self.remedy, self.at, fits)
        except NotSupported:
            return []
        if one.needs.check(fits.design) is not None:
            return []
        held: Counter[str] = Counter()
        given: Counter[str] = Counter()
        for ready, found in _read(one, fits):
            df = np.broadcast_to(found.df, found.se.shape)
            for j, name in enumerate(found.names or fits.design.names):
                if name not in self.bounds or name in ready.unusable:
                    continue
                served = np.isfinite(found.low[j]) & ~(df[j] < one.limits.df_least)
                inside = (found.low[j] <= 0) & (found.high[j] >= 0)
                given[name] += int(np.sum(served))
                held[name] += int(np.sum(inside & served))
        return [
            Cell(world.name, self.name, x, held[x], n, self.bounds[x], self.draws, fits.response.B - n)
            for x, n in given.items()
            if n > 0
        ]


def _read(one: Remedy, fits: Fits) -> Iterator[tuple[Ready, Estimates]]:
    """All columns at once, or one by one where the refit wants the error model of each; refusals left out."""
    together = one.working(fits.column(0)) is None
    for part in [fits] if together else (fits.column(b) for b in range(fits.response.B)):
        try:
            ready = one.prepare(fits.design, one.working(part) if not together else None)
            yield ready, ready.fit(part)
        except NotSupported:
            continue


@dataclass(frozen=True, eq=False)
class World:
    """draw : (generator, B) → (n, B) errors. fast : read in the ordinary suite too."""

    name: str
    design: Design
    draw: Callable[[np.random.Generator, int], Array]
    methods: Sequence[Sized | Covered]
    fast: bool = False

    def __str__(self) -> str:
        return self.name

    def fits(self, Y: Array) -> Fits:
        return Fits(Response.of(self.design, Y), Run(Settings(seed=SEED)), depth="exact")

    def measured(self, quick: bool = False) -> list[Cell]:
        """Every cell, or those of the methods that are quick."""
        chosen = [m for m in self.methods if m.quick or not quick]
        most = max(m.columns for m in self.methods)
        Y = self.draw(np.random.default_rng([SEED, crc32(self.name.encode())]), most)
        with one_thread():
            return [cell for m in chosen for cell in m.cells(self, Y)]
