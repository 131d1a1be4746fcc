"""Order in time: one series of 20 to 400 steps, a trend beside an x without one; panels, short and long."""

from __future__ import annotations

from functools import cache

import numpy as np

from clingstone.design.design import Design
from clingstone.evidence.registry import by_id
from clingstone.maths.once import Array
from clingstone.remedies import remedy
from clingstone.remedies.longrun import Hac
from clingstone.remedies.periods import PanelHac
from tests.remedies import cases
from tests.simulation.cells import COVERS, NOMINAL, SIZED, Bound, Covered, Sized, World

LENGTHS = (20, 40, 100, 400)
RHOS = (0.0, 0.3, 0.6, 0.9)
DRAWN = 999  # reference draws of Breusch–Godfrey and Ljung–Box, shared by all columns


@cache
def design(T: int) -> Design:
    """A constant, a trend, and an x of autocorrelation 0.5 that has no trend."""
    x = cases.ar1(T, 0.5, 1, np.random.default_rng(T))[:, 0]
    X = np.column_stack([np.ones(T), np.arange(T) / T, x])
    return cases.design(X, ["constant", "trend", "x"], tick=np.arange(T))


def series(T: int, rho: float) -> World:
    def draw(rng: np.random.Generator, B: int) -> Array:
        return cases.ar1(T, rho, B, rng)

    fast = (T, rho) in ((20, 0.0), (40, 0.6), (400, 0.3))
    return World(f"{T} steps, ρ {rho:g}", design(T), draw, methods(T, rho), fast)


SHORT = "a short series says little of ρ, least beside a trend (Park & Mitchell 1980)"
# What autoregressive errors fall short by, by (T, ρ) for trend and x.
AR1 = {
    (20, 0.6): (0.89, 0.91),
    (20, 0.9): (0.80, 0.93),
    (40, 0.9): (0.87, 0.93),
    (100, 0.9): (0.91, 0.94),
}
LIMIT = (
    "fixed-b critical values are a limit for many steps and an x without trend (Kiefer & Vogelsang 2005); "
    "the default of hac is the exact law of cosines"
)
# The same for the Bartlett kernel with fixed-b critical values, by ρ, from 20 steps on.
FIXED = {0.0: (0.90, 0.92), 0.3: (0.86, 0.90), 0.6: (0.80, 0.88), 0.9: (0.60, 0.85)}
IGNORED = Bound(0.0, 0.92, "dependence along time is ignored")
NORMAL = Bound(0.0, 0.94, "normal quantiles with few steps (Kiefer & Vogelsang 2005)")


def methods(T: int, rho: float) -> list[Sized | Covered]:
    both = {"trend": COVERS, "x": COVERS}
    found: list[Sized | Covered] = []
    if rho == 0:
        found += [
            Sized(by_id("durbin-watson")),
            Sized(by_id("breusch-godfrey"), draws=DRAWN),
            Sized(by_id("ljung-box"), draws=DRAWN if T <= 200 else 0),
        ]
    wide = Hac(kernel="bartlett", law="fixed-b", bandwidth="wide")
    narrow = Hac(kernel="bartlett", law="normal")
    found += [
        Covered(remedy("ordinary"), dict.fromkeys(both, NOMINAL if rho == 0 else IGNORED)),
        Covered(remedy("ar1"), short(AR1[T, rho], SHORT) if (T, rho) in AR1 else both, columns=2000),
        Covered(remedy("hac"), both, columns=60 if T >= 40 else 10, quick=False),
        Covered(wide, short(FIXED[rho], LIMIT), label="hac, Bartlett with fixed-b"),
    ]
    if T <= 100:
        old = dict.fromkeys(both, NORMAL)
        found.append(Covered(narrow, old, label="hac, Bartlett with a normal quantile"))
    return found


def short(low: tuple[float, float], why: str) -> dict[str, Bound]:
    """Bounds of trend and x below the nominal level."""
    return {name: Bound(edge, 1.0, why) for name, edge in zip(("trend", "x"), low, strict=True)}


@cache
def panel(N: int, T: int) -> Design:
    """N series of T steps; x differs between series and steps, z between steps only."""
    rng = np.random.default_rng([N, T])
    who, tick = np.repeat(np.arange(N), T), np.tile(np.arange(T), N)
    z = cases.ar1(T, 0.5, 1, rng)[tick, 0]
    X = np.column_stack([np.ones(N * T), rng.standard_normal(N * T), z])
    return cases.design(X, ["constant", "x", "z"], tick=tick, series=who)


def levels(N: int, T: int) -> World:
    """Series that differ in level, with a spread that grows along time and no serial dependence."""
    made = panel(N, T)

    def draw(rng: np.random.Generator, B: int) -> Array:
        own = np.repeat(rng.standard_normal((N, B)), T, axis=0)
        grows = np.linspace(1.0, 2.0, T)[np.tile(np.arange(T), N)][:, None]
        return np.asarray(own + grows * rng.standard_normal((N * T, B)))

    found: list[Sized | Covered] = [
        Sized(by_id("panel-serial"), "robust", label="panel-serial, whatever the variances")
    ]
    return World(f"{N} series of {T}, levels and growing spread", made, draw, found)


FEW_TIMES = Bound(0.03, 0.05, "correlations over eight times are not yet normal (Pesaran 2015)")


def even(N: int, T: int) -> World:
    """Independent rows of one spread in a panel."""
    made = panel(N, T)

    def draw(rng: np.random.Generator, B: int) -> Array:
        return rng.standard_normal((N * T, B))

    found: list[Sized | Covered] = [
        Sized(by_id("panel-durbin-watson")),
        Sized(by_id("panel-serial"), "robust", label="panel-serial, whatever the variances"),
        Sized(by_id("panel-serial"), "within means", label="panel-serial, around series means"),
        Sized(by_id("common-shocks"), bound=SIZED if T >= 40 else FEW_TIMES),
    ]
    return World(f"{N} series of {T}, independent", made, draw, found)


PERIODS = "fixed-b critical values are a limit for many periods (Vogelsang 2012); 20 are the fewest served"
SHARED = Bound(0.0, 0.6, "clusters by series know nothing of a shock that all series share")
FEW_PERIODS = Bound(0.0, 0.94, "normal quantiles with few periods (Vogelsang 2012)")


def shocks(N: int, T: int, rho: float) -> World:
    """Half of the variance is a shock that all series share, with memory ρ."""
    made = panel(N, T)
    tick = np.tile(np.arange(T), N)

    def draw(rng: np.random.Generator, B: int) -> Array:
        common = cases.ar1(T, rho, B, rng)[tick]
        return np.asarray(np.sqrt(0.5) * (common + rng.standard_normal((N * T, B))))

    few = T == 20
    both = {
        "x": Bound(0.93, 1.0, PERIODS) if few else COVERS,
        "z": Bound(0.86 if few else 0.93, 1.0, PERIODS),
    }
    narrow = PanelHac(law="normal", bandwidth="textbook", corrected=False)
    found: list[Sized | Covered] = [
        Covered(remedy("cluster-robust"), {"z": SHARED}, at="series"),
        Covered(remedy("panel-hac"), both),
        Covered(narrow, {"z": FEW_PERIODS}, label="panel-hac, normal quantile"),
    ]
    return World(f"{N} series of {T}, shared shocks of ρ {rho:g}", made, draw, found, (T, rho) == (40, 0.3))


WORLDS = (
    *(series(T, rho) for T in LENGTHS for rho in RHOS),
    *(make(N, T) for make in (even, levels) for N, T in ((20, 8), (40, 5), (10, 40))),
    *(shocks(10, T, rho) for T in (20, 40, 100) for rho in (0.0, 0.3, 0.6)),
)
