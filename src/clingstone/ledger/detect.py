"""What these data could have shown: the smallest dependence that the primary test finds in 80 %."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from clingstone.covariance.components import SITE
from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.evidence.finding import About, Test
from clingstone.ledger.entries import Detectable, Standing
from clingstone.ledger.sizes import in_units
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.needs import NotSupported
from clingstone.structure.serial import Series

POWER = 0.80
DRAWS, FEWEST = 200, 40
ROW_DRAWS = 5e6  # rows × draws in all; fewer draws beyond 25,000 rows
CHUNK = 4e6  # rows × draws held at a time, 32 MB
LEVEL = 0.05  # before it is divided among the primary tests
ACROSS = 1 / 3  # practical range over the map's width of a field whose share is looked for
VISIT = 0.5  # share of what is left over that runs along time, where rows repeat a visit
ROUNDS = 3
SMALLEST, FIRST, LARGEST = 0.001, 0.32, 0.95
DENSE = 3000  # sites of which a field is drawn by a table of all their distances
NAMES = {"group": "intraclass correlation", "serial": "ρ", "spatial": "spatial share"}

Drawer = Callable[[float, np.random.Generator, int], Array]


def detectable(
    fits: Fits, standing: tuple[Standing, ...], tests: tuple[Test, ...], primary: int = 1
) -> tuple[Detectable, ...]:
    """For every structure that was not found: its smallest detectable size, where its test is run.

    primary : the number of tests that Holm's adjustment was made over; the smallest p of so many has to
    be below 5 % divided by it, and that is the level held here.
    """
    level = LEVEL / max(primary, 1)
    out = []
    for one in standing:
        if one.verdict in ("present", "not applicable") or one.p_alone < level:
            continue
        test, about = primary_test(fits, one, tests)
        drawer = _drawer(fits, one)
        if test is None or about is None or drawer is None:
            continue
        value = smallest(fits, test, about, drawer, one.key, level)
        out.append(_entry(fits, one, value))
    return tuple(out)


def _entry(fits: Fits, one: Standing, value: float) -> Detectable:
    name = NAMES[one.structure]
    article = "an" if name[0] in "aeiou" else "a"
    words = f"{article} {name} of {value:.2g} or more" if np.isfinite(value) else f"no {name} up to {LARGEST}"
    where = ""
    if one.structure == "spatial" and fits.design.spatial is not None:
        sites = fits.design.spatial
        reach = in_units(float(f"{ACROSS * sites.extent:.2g}"), sites.unit or "units of place")
        where = f", if it fades over {reach} (a third of the map's width),"
    if one.structure == "serial" and fits.design.serial is not None and fits.design.serial.repeats:
        where = ", if half of what the model leaves over is shared by rows of one time,"
    sentence = f"The test for {one.label} would have found {words}{where} in 80 % of such data."
    return Detectable(one.key, name, value, POWER, sentence)


def primary_test(fits: Fits, one: Standing, tests: tuple[Test, ...]) -> tuple[Test | None, About | None]:
    """The test by which a structure is judged alone, and where it is read; None where none can be."""
    if one.key == SITE:
        return None, None
    for test in tests:
        if test.family != one.structure or not test.primary:
            continue
        if test.needs.check(fits.design) is not None:
            continue
        abouts = test.abouts(fits.design)
        level = one.key.removeprefix("group:")
        chosen = [a for a in abouts if a.key == level] if one.structure == "group" else list(abouts[:1])
        if chosen:
            return test, chosen[0]
    return None, None


# ---- draws -----------------------------------------------------------------------------------


def _drawer(fits: Fits, one: Standing) -> Drawer | None:
    design = fits.design
    if one.structure == "group":
        part = design.partitions.get(one.key.removeprefix("group:"))
        return None if part is None else _groups(part)
    if one.structure == "serial":
        return None if design.serial is None else _series(design.serial)
    return _sites(fits)


def _groups(part: Partition) -> Drawer:
    def draw(share: float, rng: np.random.Generator, B: int) -> Array:
        shared = rng.standard_normal((part.count, B))[part.codes]
        return np.asarray(np.sqrt(share) * shared + np.sqrt(1 - share) * rng.standard_normal((part.n, B)))

    return draw


def _series(series: Series) -> Drawer:
    """A first-order process; under row noise of the same variance where rows share their series and time.

    That share is held, not fitted: where nothing was found the data hardly know it.
    """
    starts = np.flatnonzero(np.isnan(series.steps))
    place = np.arange(series.part.n) - starts[np.cumsum(np.isnan(series.steps)) - 1]
    by_place = [np.flatnonzero(place == k) for k in range(int(place.max()) + 1)]

    def draw(rho: float, rng: np.random.Generator, B: int) -> Array:
        Y = rng.standard_normal((series.part.n, B))
        for row in by_place[1:]:
            r = rho ** series.steps[row][:, None]
            Y[row] = r * Y[row - 1] + np.sqrt(1 - r**2) * Y[row]
        if series.repeats:
            Y = np.sqrt(VISIT) * Y + np.sqrt(1 - VISIT) * rng.standard_normal(Y.shape)
        return Y

    return draw


def _sites(fits: Fits) -> Drawer | None:
    """Exponential field that fades over a third of the map's width, plus row noise.

    The range is held, not fitted: where nothing was found the data hardly know it.
    """
    sites = fits.design.spatial
    if sites is None or sites.count > DENSE:
        return None
    length = ACROSS * sites.extent / 3  # a correlation of exp(−3) is the practical range
    distance = np.linalg.norm(sites.points[:, None] - sites.points[None], axis=2)
    root = np.linalg.cholesky(np.exp(-distance / length) + 1e-10 * np.eye(sites.count))

    def draw(share: float, rng: np.random.Generator, B: int) -> Array:
        field = (root @ rng.standard_normal((sites.count, B)))[sites.part.codes]
        return np.asarray(np.sqrt(share) * field + np.sqrt(1 - share) * rng.standard_normal(field.shape))

    return draw


# ---- search ----------------------------------------------------------------------------------


def power(
    fits: Fits,
    test: Test,
    about: About,
    drawer: Drawer,
    value: float,
    purpose: str,
    level: float = LEVEL,
) -> float:
    """Share of draws in which the test finds a dependence of this size at a level."""
    n = fits.design.n
    draws = int(np.clip(ROW_DRAWS / n, FEWEST, DRAWS))
    size = max(1, int(CHUNK / n))
    found = 0
    for chunk, start in enumerate(range(0, draws, size)):
        B = min(size, draws - start)
        # The same random numbers at every value: the power curve is then smooth in the value.
        rng = fits.run.child(f"detectable {purpose}", chunk)
        again = Fits(Response.of(fits.design, drawer(value, rng, B)), fits.run)
        p = np.broadcast_to(np.asarray(test.read(again, about, frozenset()).p, dtype=float), (B,))
        found += int(np.sum(p < level))
    return found / draws


def smallest(
    fits: Fits, test: Test, about: About, drawer: Drawer, purpose: str, level: float = LEVEL
) -> float:
    """The size at which power reaches 80 %; NaN when none up to 0.95 does.

    Halved from 0.32 until the power falls short, or raised to 0.95; then bisected on the log scale,
    with one linear step. Below 0.001 it is no longer looked for.
    """

    def at(value: float) -> float:
        return power(fits, test, about, drawer, value, purpose, level)

    try:
        high = (FIRST, at(FIRST))
        if high[1] < POWER:
            low, high = high, (LARGEST, at(LARGEST))
            if high[1] < POWER:
                return float("nan")
        else:
            low = (high[0] / 2, at(high[0] / 2))
            while low[1] >= POWER and low[0] > SMALLEST:
                high, low = low, (low[0] / 2, at(low[0] / 2))
            if low[1] >= POWER:
                return low[0]
        for _ in range(ROUNDS):
            middle = float(np.sqrt(low[0] * high[0]))
            found = (middle, at(middle))
            low, high = (found, high) if found[1] < POWER else (low, found)
    except NotSupported:
        return float("nan")
    return low[0] + (high[0] - low[0]) * (POWER - low[1]) / (high[1] - low[1])
