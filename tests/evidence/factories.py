"""Small designs straight from arrays, and the slow obvious twins that tests compare with."""

from __future__ import annotations

from typing import Any

import numpy as np
from scipy import sparse
from scipy.spatial import cKDTree

from clingstone.covariance.fits import Fits
from clingstone.design.design import Design, Term
from clingstone.design.response import Response
from clingstone.maths.basis import Basis
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.run import Run, Settings
from clingstone.structure.group import Groups
from clingstone.structure.neighbours import Neighbours
from clingstone.structure.serial import Series
from clingstone.structure.spatial import Sites


def series(time: Any, who: Any = None, whole: bool = True, unit: str = "day") -> Series:
    """Rows must already be in (series, time) order."""
    t = np.asarray(time, dtype=float)
    part = Partition.of("series", np.zeros(len(t)) if who is None else who)
    same = part.codes[1:] == part.codes[:-1]
    steps = np.diff(t)[same]
    gaps = int(np.sum(steps[steps > 1] - 1)) if whole else 0
    ties = int(np.sum(steps == 0))
    spacing = "irregular" if not whole else "regular with gaps" if gaps else "regular"
    step = 1.0 if whole else float(np.median(steps[steps > 0]))
    tick = np.round(t).astype(np.int64) if whole else None
    return Series("time", part, t, unit, step, tick, spacing, gaps, ties)  # type: ignore[arg-type]


def knn(xy: Array, k: int) -> Neighbours:
    """Row-standardised k nearest sites."""
    S = len(xy)
    near = cKDTree(xy).query(xy, k=k + 1)[1][:, 1:]
    W = sparse.csr_array((np.full(S * k, 1.0 / k), (np.repeat(np.arange(S), k), near.ravel())), shape=(S, S))
    return Neighbours(f"knn:{k}", f"{k} nearest sites", W)


def design(
    *columns: Any,
    n: int | None = None,
    groups: dict[str, Any] | None = None,
    time: Any = None,
    who: Any = None,
    whole: bool = True,
    xy: Any = None,
    site: Any = None,
    neighbours: tuple[Neighbours, ...] | None = None,
    weights: Any = None,
    known: bool = True,
) -> Design:
    """A constant and numeric columns x1, x2, …; xy has one row per site, site names each row's."""
    rows = n or len(next(iter(columns or (time,))))
    X = np.column_stack([np.ones(rows), *(np.asarray(c, dtype=float) for c in columns)])
    root = None if weights is None else np.sqrt(np.asarray(weights, dtype=float))
    names = ("constant", *(f"x{j + 1}" for j in range(len(columns))))
    terms = tuple(
        Term(name, (j,), "constant" if j == 0 else "numeric", () if j == 0 else (name,), j > 0)
        for j, name in enumerate(names)
    )
    sites, near = None, neighbours or ()
    if xy is not None:
        xy = np.asarray(xy, dtype=float)
        sites = Sites(Partition.of("site", np.arange(rows) if site is None else site), xy, "planar", "km")
        near = neighbours or (knn(xy, 4),)
    levels = tuple(Partition.of(k, v) for k, v in (groups or {}).items())
    return Design(
        basis=Basis.of(X if root is None else X * root[:, None]),
        names=names,
        terms=terms,
        group=Groups(levels, "one level" if len(levels) == 1 else "nested") if levels else None,
        serial=None if time is None else series(time, who, whole),
        spatial=sites,
        neighbours=near,
        covariates={f"x{j + 1}": np.asarray(c, dtype=float) for j, c in enumerate(columns)},
        root=root,
        known=known,
    )


def fits(made: Design, y: Any, **settings: Any) -> Fits:
    return Fits(Response.of(made, np.asarray(y, dtype=float)), Run(Settings(**settings)))


def hat(made: Design) -> Array:
    """M = I − QQ', dense."""
    return np.asarray(np.eye(made.n) - made.Q @ made.Q.T)


def imhof(A: Array, t: float) -> float:
    """P(e'Ae/e'e > t) for z'Az/z'z on the range of a projected form, by Imhof's integral: slow twin.

    A must already be restricted to the residual space (an orthonormal complement on both sides).
    """
    from scipy.integrate import quad

    lam = np.linalg.eigvalsh(A) - t

    def integrand(u: float) -> float:
        theta = 0.5 * np.sum(np.arctan(lam * u))
        rho = np.exp(0.25 * np.sum(np.log1p((lam * u) ** 2)))
        return float(np.sin(theta) / (u * rho))

    return 0.5 + quad(integrand, 1e-12, np.inf, limit=500)[0] / np.pi


def residual_space(*blocks: Array) -> Array:
    """(n, m) orthonormal complement of the columns."""
    X = np.column_stack(blocks)
    Q, _ = np.linalg.qr(X)
    rank = np.linalg.matrix_rank(X)
    if rank < X.shape[1]:
        u, _, _ = np.linalg.svd(X, full_matrices=True)
        return np.asarray(u[:, rank:])
    full, _ = np.linalg.qr(np.column_stack([Q, np.eye(len(X))]))
    return np.asarray(full[:, X.shape[1] : len(X)])


def ar1(rho: float, shape: tuple[int, ...], rng: np.random.Generator) -> Array:
    """Stationary first-order processes along axis 0, unit variance."""
    e = rng.standard_normal(shape)
    for t in range(1, shape[0]):
        e[t] = rho * e[t - 1] + np.sqrt(1 - rho**2) * e[t]
    return e
