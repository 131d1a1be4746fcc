"""Small designs for tests: groups, series and sites, without the door."""

from __future__ import annotations

from types import MappingProxyType
from typing import Any

import numpy as np

from clingstone.covariance.fits import Fits
from clingstone.design.design import Assignment, Design, Term
from clingstone.design.response import Response
from clingstone.maths.basis import Basis
from clingstone.maths.partition import Partition
from clingstone.run import Run, Settings
from clingstone.structure.group import Groups
from clingstone.structure.neighbours import Neighbours
from clingstone.structure.serial import Series
from clingstone.structure.spatial import Sites


def design(
    columns: dict[str, Any],
    *,
    groups: dict[str, Any] | None = None,
    arrangement: str = "one level",
    series: Any = None,
    tick: Any = None,
    xy: Any = None,
    site: Any = None,
    assigned: dict[str, str] | None = None,
    focus: tuple[str, ...] | None = None,
    root: Any = None,
    known: bool = True,
) -> Design:
    """A constant and named numeric columns; rows must already be in (series, time) order."""
    n = (
        len(next(iter(columns.values())))
        if columns
        else len(tick if tick is not None else next(iter(groups.values())))
    )
    X = np.column_stack([np.ones(n), *(np.asarray(v, float) for v in columns.values())])
    weighted = X if root is None else X * np.asarray(root)[:, None]
    terms = [Term("constant", (0,), "constant")]
    wanted = tuple(columns) if focus is None else focus
    for j, name in enumerate(columns, start=1):
        terms.append(Term(name, (j,), "numeric", (name,), name in wanted))
    grouping = None
    if groups:
        levels = tuple(Partition.of(key, values) for key, values in groups.items())
        grouping = Groups(levels, arrangement)  # type: ignore[arg-type]
    serial = None
    if tick is not None:
        tick = np.asarray(tick, dtype=np.int64)
        part = Partition.of("series", np.zeros(n, int) if series is None else series)
        serial = Series("day", part, tick.astype(float), "day", 1.0, tick, "regular")
    spatial, near = None, ()
    if xy is not None:
        part = Partition.of("site", np.arange(n) if site is None else site)
        spatial = Sites(part, np.asarray(xy, float), "planar", "km")
        near = (_nearest(spatial, 6),)
    return Design(
        basis=Basis.of(weighted),
        names=("constant", *columns),
        terms=tuple(terms),
        group=grouping,
        serial=serial,
        spatial=spatial,
        neighbours=near,
        assignment=Assignment(assigned or {}),
        covariates=MappingProxyType({k: np.asarray(v, float) for k, v in columns.items()}),
        root=None if root is None else np.asarray(root, float),
        known=known,
    )


def _nearest(sites: Sites, k: int) -> Neighbours:
    from scipy import sparse

    _, index = sites.tree.query(sites.points, k=k + 1)
    S = sites.count
    rows = np.repeat(np.arange(S), k)
    W = sparse.csr_array((np.full(S * k, 1 / k), (rows, index[:, 1:].ravel())), shape=(S, S))
    return Neighbours(f"knn:{k}", f"{k} nearest sites", W)


def fits(design: Design, y: Any, **settings: Any) -> Fits:
    return Fits(Response.of(design, np.asarray(y, float)), Run(Settings(**settings)))


def trial(rng: np.random.Generator, G: int = 12, n: int = 20, icc: float = 0.2, effect: float = 0.0) -> Fits:
    """G clinics of n rows, an arm by clinic and a row-level x; total residual variance 1."""
    clinic = np.repeat(np.arange(G), n)
    arm = (clinic % 2).astype(float)
    x = rng.standard_normal(G * n)
    u = np.sqrt(icc) * rng.standard_normal(G)[clinic]
    y = 1 + effect * arm + 0.3 * x + u + np.sqrt(1 - icc) * rng.standard_normal(G * n)
    return fits(design({"arm": arm, "x": x}, groups={"clinic": clinic}, assigned=None), y)


def ar1(rng: np.random.Generator, series: int, length: int, rho: float) -> np.ndarray:
    e = rng.standard_normal((length, series))
    for t in range(1, length):
        e[t] = rho * e[t - 1] + np.sqrt(1 - rho**2) * e[t]
    return e.T.ravel()
