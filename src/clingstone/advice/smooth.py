"""Covariates that run smoothly along time, over the map, or are of groups: curves in them are no proof."""

from __future__ import annotations

import numpy as np

from clingstone.design.design import Design
from clingstone.maths.once import Array
from clingstone.needs import Family
from clingstone.structure.serial import Series

SMOOTH = 0.8  # correlation with the next time, or with the mean of the neighbours
RETURN, AGAIN = 5, 0.5  # steps from which a covariate is said to come back, and its correlation then
LONGEST = 60  # steps within which it has to
FITTED = 0.9  # share of a quadratic of time or place
FEW_TIMES = 8  # mean rows of a series below which smoothness along it is not looked for
FEW_GROUPS = 20  # of a level whose own differences a curve in a covariate of groups can pass for


def smooth_in(design: Design, name: str) -> Family | None:
    """The structure that a curve in this covariate can be mistaken for, or None.

    A covariate that runs smoothly along time, or over the map, bends like a slow error (Yue et al. 2002;
    Hodges & Reich 2010); one that is constant within few groups bends like their differences.
    """
    if name not in design.covariates:
        return None
    x = np.asarray(design.covariates[name], dtype=float)
    if design.serial is not None and along_time(design.serial, x):
        return "serial"
    if over_map(design, x):
        return "spatial"
    return "group" if of_few_groups(design, x) else None


def along_time(series: Series, x: Array) -> bool:
    """Whether x hardly moves from one row of its series to the next, comes back, or is nearly a quadratic."""
    part = series.part
    if part.n / part.count < FEW_TIMES:
        return False
    centred = x - part.means(x)[part.codes]
    total = float(centred @ centred)
    if not total > 1e-18 * float(x @ x):
        return False
    next_one = part.codes[1:] == part.codes[:-1]
    near = float(np.sum((centred[1:] * centred[:-1])[next_one])) / total
    t = series.elapsed
    return near > SMOOTH or _returns(series, centred) or _explained(np.column_stack([t, t * t]), x) > FITTED


def _returns(series: Series, centred: Array) -> bool:
    """Whether a covariate comes back several steps later: then its curve bends like a cycle of the errors."""
    if series.tick is None or series.ties:
        return False
    mean = float(np.mean(centred**2))
    for lag in range(RETURN, min(LONGEST, int(series.part.sizes.max()) // 4) + 1):
        later, earlier = series.pairs(lag)
        if len(later) >= FEW_TIMES and float(np.mean(centred[later] * centred[earlier])) > AGAIN * mean:
            return True
    return False


def over_map(design: Design, x: Array) -> bool:
    """Whether x at a site is much like its neighbours, or nearly a quadratic surface."""
    sites = design.spatial
    if sites is None or not design.neighbours:
        return False
    at = sites.part.means(x)
    if np.ptp(at) == 0 or np.max(np.abs(x - at[sites.part.codes])) > 1e-9 * np.max(np.abs(x)):
        return False
    around = design.neighbours[0].W @ at
    if np.ptp(around) > 0 and float(np.corrcoef(at, around)[0, 1]) > SMOOTH:
        return True
    u, v = sites.points[:, :2].T
    return _explained(np.column_stack([u, v, u * u, u * v, v * v]), at) > FITTED


def of_few_groups(design: Design, x: Array) -> bool:
    """Whether x is constant within the groups of a level of fewer than 20."""
    levels = design.group.levels if design.group is not None else ()
    scale = 1e-9 * float(np.max(np.abs(x)))
    few = [v for v in levels if v.count < min(FEW_GROUPS, v.n)]
    return any(float(np.max(np.abs(x - x[v.first][v.codes]))) <= scale for v in few)


def _explained(Z: Array, x: Array) -> float:
    """R² of x on the columns of Z and a constant."""
    Z, x = Z - Z.mean(axis=0), x - x.mean()
    scale = np.linalg.norm(Z, axis=0)
    Z = Z / np.where(scale > 0, scale, 1.0)
    left = x - Z @ np.linalg.lstsq(Z, x, rcond=None)[0]
    return float(1 - (left @ left) / (x @ x)) if x @ x > 0 else 0.0
