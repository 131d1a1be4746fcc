"""How large each structure is: shares of the residual variance, and the parameters readers know."""

from __future__ import annotations

import numpy as np
from scipy import special

from clingstone.covariance.fits import Fits
from clingstone.display import NBSP, significant
from clingstone.ledger.entries import Parameter, Share
from clingstone.ledger.region import Region
from clingstone.maths.once import Array, kept

LEFT_OUT = "not kept in the model; the upper end is that of the fit with every structure"
TIMES = ("second", "minute", "hour", "day", "week", "month", "quarter", "year")
UNITS = "units of time"  # of a time without a unit of its own
AT_LONGEST = "at the end of what is tried: at least so long"
AT_ZERO = "estimated at zero, the edge of its range"


def shares(fits: Fits, kept: Region, full: Region) -> tuple[Share, ...]:
    """Shares in the adequate model, which add to 1; a structure left out is shown with its upper end."""
    held = kept.model.shares()
    every = full.model.shares()
    out: list[Share] = []
    for key, component in fits.components.items():
        family, label = component.family, component.label
        if key in held:
            low, estimate, high = kept.interval(held[key])
            note = AT_ZERO if estimate <= 1e-6 else ""
            out.append(Share(family, key, label, estimate, low, high, note))
        elif key in every:
            high = full.interval(every[key])[2]
            out.append(Share(family, key, label, 0.0, 0.0, high, LEFT_OUT))
    low, estimate, high = kept.interval(held["row"])
    return (*out, Share(None, "row", "single rows", estimate, low, high))


def parameters(fits: Fits, kept: Region, full: Region) -> tuple[Parameter, ...]:
    """ICC and standard deviation per group level, ρ and half-life, practical range."""
    out: list[Parameter] = []
    for key, component in fits.components.items():
        at, note = (kept, "") if key in kept.model.variances else (full, LEFT_OUT)
        if key not in at.model.variances:
            continue
        read = {"group": _group, "serial": _serial, "spatial": _spatial}.get(component.family)
        if read is not None:
            out += read(fits, at, key, note)
        out.append(_deviation(fits, at, key, note))
    out.append(_deviation(fits, kept, "row", ""))
    return tuple(out)


def _deviation(fits: Fits, at: Region, key: str, note: str) -> Parameter:
    low, estimate, high = np.sqrt(variance(at, key, fits.design.m))
    return Parameter(key, "standard deviation", float(estimate), float(low), float(high), "", note)


def variance(at: Region, key: str, m: int) -> tuple[float, float, float]:
    """low, estimate, high of a variance σ²rₖ(θ), with what σ² itself could be.

    The region holds σ² at its best value for each θ. Given θ, the weighted residual sum of squares over
    σ² is χ² with the m residual degrees of freedom; its limits at θ̂ and those over the region move ln σ²rₖ
    by two distances that, for a quadratic log-likelihood, join to the profile limit as the root of their
    sum of squares. Never narrower than what single points of the region allow with the part of the
    likelihood ratio that they leave over. Without θ it is the exact χ² interval.
    """
    values = np.asarray(at.model.variances[key], dtype=float)
    low, estimate, high = at.interval(values)
    if not np.isfinite(estimate):
        return low, estimate, high
    down, up = kept(at, ("limits of the scale", m), lambda: _scale_limits(at, m))
    ends = values * np.minimum(down, 1.0), values * np.maximum(up, 1.0)
    least, most = float(np.nanmin(ends[0])), float(np.nanmax(ends[1]))
    if low > 0:
        least = min(least, estimate * float(np.exp(-np.hypot(np.log(estimate / low), np.log(down[0])))))
    if estimate > 0:
        most = max(most, estimate * float(np.exp(np.hypot(np.log(high / estimate), np.log(up[0])))))
    return least, estimate, most


def _scale_limits(at: Region, m: int) -> tuple[Array, Array]:
    """(P,) each: limits of σ² over its value at each point, with what the point leaves of the ratio."""
    cut = special.chdtri(1, 1 - at.confidence)
    left = np.maximum(cut - 2 * (at.model.loglik[0] - at.model.loglik), 0.0)
    tail = special.chdtrc(1, left) / 2
    return m / special.chdtri(m, tail), m / (2 * special.gammaincinv(m / 2, tail))


def total(at: Region) -> Array:
    """(P,) residual variance of a row."""
    return np.asarray(sum(at.model.variances.values()))


def icc(fits: Fits, at: Region, key: str) -> Array:
    """(P,) correlation of two rows of one group of a level, and so of every level that holds it."""
    variance = at.model.variances
    groups = fits.design.group
    value = np.array(variance[key], dtype=float)
    if groups is not None and groups.arrangement == "nested":
        levels = [f"group:{level.key}" for level in groups.levels]
        outer = levels[: levels.index(key)] if key in levels else []
        value = value + sum((variance[o] for o in outer if o in variance), start=np.zeros_like(value))
    return np.asarray(value / total(at))


def _group(fits: Fits, at: Region, key: str, note: str) -> list[Parameter]:
    low, estimate, high = at.interval(icc(fits, at, key))
    return [Parameter(key, "intraclass correlation", estimate, low, high, "", note or _edge(estimate))]


def _serial(fits: Fits, at: Region, key: str, note: str) -> list[Parameter]:
    series = fits.design.serial
    rho = np.asarray(at.model.shape["serial.rho"], dtype=float)
    low, estimate, high = at.interval(rho)
    step = in_units(series.step, series.unit) if series is not None else "step"
    out = [Parameter(key, "ρ", estimate, low, high, f"per {step}", note or _edge(estimate))]
    if estimate > 0 and series is not None:
        ends = [float(_half_life(np.array(v))) * series.step for v in (low, estimate, high)]
        out.append(Parameter(key, "half-life", ends[1], ends[0], ends[2], series.unit or UNITS, note))
    return out


def _half_life(rho: Array) -> Array:
    """Steps in which a correlation falls to one half; 0 for ρ ≤ 0."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(rho <= 0, 0.0, np.where(rho >= 1, np.inf, np.log(0.5) / np.log(rho)))


def in_units(number: float, unit: str) -> str:
    """ "day", "14 days", "7 units of time", "3 km" """
    words = unit or "unit of time"
    if number == 1:
        return words
    if words == "unit of time":
        words = "units of time"
    elif words in TIMES:
        words += "s"
    return f"{significant(number) if number != round(number) else f'{number:g}'}{NBSP}{words}"


def _spatial(fits: Fits, at: Region, key: str, note: str) -> list[Parameter]:
    if key != "spatial":  # what the rows of one place share has no range
        return []
    sites = fits.design.spatial
    low, estimate, high = at.interval(at.model.shape["spatial.range"])
    # What reaches an end of what is tried has no limit there that the data know of.
    where = at.model.names.index("spatial.log_range")
    tried = fits.algebra(at.model.node).parameters[where]
    reach = at.model.theta[where, np.isfinite(at.model.shape["spatial.range"])]
    if reach.size and reach.max() >= tried.high - 1e-4:
        high, note = np.inf, note or (AT_LONGEST if at.model.theta[where, 0] >= tried.high - 1e-4 else "")
    if reach.size and reach.min() <= tried.low + 1e-4:
        low = 0.0
    unit = sites.unit if sites is not None else ""
    return [Parameter(key, "practical range", estimate, low, high, unit, note)]


def _edge(estimate: float) -> str:
    return AT_ZERO if abs(estimate) <= 1e-6 else ""
