"""Dependence structures as components of V = Σ σ²ₖKₖ(φₖ) + σ²I, and which of them a design can carry."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import count
from clingstone.maths.basis import Gram
from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Limits, NotSupported, Refusal

MOST_PLACES = 300_000  # beyond, one evaluation of the nearest-neighbour likelihood takes many seconds
SITE = "group:site"  # key of the unstructured part of places that repeat


@dataclass(frozen=True)
class Component:
    """One dependence structure that a design declares.

    key : "group:<level>", "serial" or "spatial". part : key of its partition in the design.
    label : how a sentence names it ("clinic", "time within patient", "place").
    repeats : rows of one series and time are repeats of a visit, so that the process along time stands
        beside row noise; without them it is the noise of the rows itself.
    """

    key: str
    family: Family
    part: str
    label: str
    repeats: bool = False


@dataclass(frozen=True)
class Parameter:
    """One working parameter of an algebra: name, bounds on the working scale, starting values.

    scan : uniform nodes over the region in which an estimate can be told from its neighbours.
    vanishes : ``low`` stands for a component that is not there (a variance of zero).
    """

    name: str
    low: float
    high: float
    starts: tuple[float, ...]
    scan: tuple[float, ...] = ()
    vanishes: bool = False


class Algebra(Protocol):
    """V⁻¹ and ln|V| of one set of components over one design, V on the scale where σ² = 1."""

    parameters: tuple[Parameter, ...]

    def gram(self, theta: Array, response: Response) -> Gram:
        """[Q, e]'V⁻¹[Q, e] at one θ (d,), for all B columns."""
        ...

    def variances(self, theta: Array, sigma2: Array) -> Mapping[str, Array]:
        """Variance of each component and of "row" noise; θ (d, B), σ² (B,)."""
        ...

    def shape(self, theta: Array) -> Mapping[str, Array]:
        """What readers know: "serial.rho" per base step, "spatial.range" the practical
        range in the sites' unit."""
        ...

    def spread(self, key: str, theta: Array) -> Array:
        """(p, p) Q'KQ of one component ("row" gives Q'Q or Q'Ω⁻¹Q), at one θ (d,); K has unit variance."""
        ...

    def draw(self, theta: Array, sigma2: float, rng: np.random.Generator, B: int) -> Array:
        """(n, B) errors drawn from V, on the scale of the basis (√weights applied)."""
        ...

    def whiten(self, theta: Array, block: Array) -> Array:
        """L⁻¹ block with LL' = V, or any equivalent square root: (n, k) → (n, k)."""
        ...


@once
def declared(design: Design, limits: Limits) -> tuple[Mapping[str, Component], Mapping[str, Refusal]]:
    """Components that these data can carry, in building order, and why the others cannot be had.

    Every declared structure gives one component per group level, one for order and one for place.
    Places that repeat and are not a declared group level give one more, ``group:site``: what the rows
    of one place share beyond what neighbouring places share.
    """
    found: dict[str, Component] = {}
    refused: dict[str, Refusal] = {}
    levels: list[Partition] = []
    groups = design.group
    for level in groups.levels if groups is not None else ():
        key = f"group:{level.key}"
        no = _group(design, level, levels, limits)
        if no is None and groups is not None:
            found[key] = Component(key, "group", level.key, groups.title(level.key))
            levels.append(level)
        elif no is not None:
            refused[key] = no
    if design.spatial is not None:
        part = design.spatial.part
        declared_too = any(level.relation(part) == "same" for level in levels)
        if not declared_too and _group(design, part, levels, limits) is None:
            found[SITE] = Component(SITE, "spatial", "site", "place, unstructured")
    if design.serial is not None:
        no = _serial(design, limits)
        within = "" if design.serial.part.count == 1 else f" within {design.serial.part.key}"
        if no is None:
            label = f"{design.serial.name}{within}"
            found["serial"] = Component("serial", "serial", "series", label, design.serial.repeats)
        else:
            refused["serial"] = no
    if design.spatial is not None:
        no = _spatial(design, limits)
        if no is None:
            found["spatial"] = Component("spatial", "spatial", "site", "place")
        else:
            refused["spatial"] = no
    return found, refused


# Keys of slopes that vary between groups: "slope:<level>:<covariate>".
SLOPE, APART = "slope:", "slope-apart:"


def slope_key(level: str, x: str, apart: bool = False) -> str:
    """Key of the slope of a covariate that varies between the groups of a level.

    apart : uncorrelated with the intercept of the level.
    """
    return f"{APART if apart else SLOPE}{level}:{x}"


def slope_of(design: Design, key: str) -> tuple[Partition, str, bool] | None:
    """Level, covariate and whether it stands apart, of a slope's key; None for any other key."""
    head = next((h for h in (SLOPE, APART) if key.startswith(h)), None)
    if head is None or design.group is None:
        return None
    rest = key.removeprefix(head)
    for level in design.group.levels:
        x = rest.removeprefix(f"{level.key}:")
        if rest.startswith(f"{level.key}:") and x in design.covariates:
            return level, x, head == APART
    return None


@once
def on_request(design: Design, key: str, limits: Limits) -> Component:
    """A component that is fitted only when asked for by its key: slopes. Raises NotSupported."""
    found = slope_of(design, key)
    if found is None:
        raise NotSupported(
            f"no component {key!r} was declared", "Declare the structure with group=, time= or coords=."
        )
    level, x, _ = found
    no = _group(design, level, [], limits) or _slope(design, level, x, limits)
    if no is not None:
        raise no.error()
    return Component(key, "group", level.key, f"slope of {x} within {level.key}")


def _slope(design: Design, level: Partition, x: str, limits: Limits) -> Refusal | None:
    """Groups in which a slope can be seen: three rows or more, over two values of x or more."""
    values = np.asarray(design.covariates[x], dtype=float)
    inside = values - level.means(values)[level.codes]
    size = float(np.abs(values).max())
    moves = level.sums((np.abs(inside) > 1e-9 * size).astype(float)) > 0
    if not moves.any():
        return Refusal(
            f"{x} does not vary within any {level.key}, so its slope cannot vary between them",
            f"A predictor that varies within {level.key} would be needed.",
        )
    able = int(np.sum(moves & (level.sizes >= 3)))
    if able < limits.groups_estimate:
        return Refusal(
            f"{able} of {level.count:,} groups of {level.key} have three rows or more over which {x} varies; "
            f"a variance of slopes needs {limits.groups_estimate}",
            "More rows in each group would be needed.",
        )
    return None


def _group(design: Design, level: Partition, kept: list[Partition], limits: Limits) -> Refusal | None:
    name = level.key
    if design.swept:
        return Refusal(
            "group means were swept out of this model, and with them what groups share",
            "Fit error models to the model itself.",
        )
    if level.count < limits.groups_estimate:
        return Refusal(
            f"{name}: {count(level.count, 'group')}; "
            f"a variance between groups needs {limits.groups_estimate} or more",
            "With few groups, give each its own level in the model (a factor) instead.",
        )
    if level.count == level.n:
        return Refusal(
            f"{name}: every group has a single row, so groups and rows cannot be told apart",
            "Repeated rows per group would be needed.",
        )
    same = next((k for k in kept if k.relation(level) == "same"), None)
    if same is not None:
        return Refusal(
            f"{name} and {same.key} divide the rows alike, so only one of them can be estimated",
            f"Read the variance of {same.key} as that of both.",
        )
    total = design.sizes(level)
    left = float(total.sum()) - float(np.sum(design.sums(level) ** 2))
    if left <= 1e-9 * float(total.sum()):
        return Refusal(
            f"the model already has its own level for every {name}",
            f"Leave the columns of {name} out of the model to estimate a variance between groups.",
        )
    return None


def _serial(design: Design, limits: Limits) -> Refusal | None:
    series = design.serial
    assert series is not None
    if design.swept:
        return Refusal(
            "group means were swept out of this model; its rows no longer follow an AR(1) process",
            "Fit error models to the model itself.",
        )
    sizes = series.part.sums((~(series.steps == 0)).astype(float))  # rows of one time count once
    longest, enough = int(sizes.max()), int(np.sum(sizes >= limits.serial_estimate_short))
    if longest < limits.serial_estimate_rows and enough < limits.serial_estimate_series:
        return Refusal(
            f"the longest series has {count(longest, 'time')}; "
            f"series of {limits.serial_estimate_short} times or more: {enough}",
            f"One series of {limits.serial_estimate_rows} times, or {limits.serial_estimate_series} series "
            f"of {limits.serial_estimate_short}, would be needed.",
        )
    return None


def _spatial(design: Design, limits: Limits) -> Refusal | None:
    sites = design.spatial
    assert sites is not None
    if design.swept:
        return Refusal(
            "group means were swept out of this model, and with them what neighbouring places share",
            "Fit error models to the model itself.",
        )
    if sites.count < limits.sites_estimate:
        return Refusal(
            f"{sites.count} distinct places; a spatial covariance needs at least {limits.sites_estimate}",
            "More places would be needed.",
        )
    if sites.count > MOST_PLACES:
        return Refusal(
            f"{sites.count:,} distinct places; the covariance of places is made for {MOST_PLACES:,} or fewer",
            "Average rows over larger places, or take a sample of places.",
        )
    return None
