"""Small designs and responses for the tests of the remedies, made without intake."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from clingstone.covariance.fits import Fits
from clingstone.design.design import Contrast, Design, Term
from clingstone.design.response import Response
from clingstone.maths.basis import Basis
from clingstone.maths.partition import Partition
from clingstone.run import Run, Settings
from clingstone.structure.group import Groups
from clingstone.structure.serial import Series
from clingstone.structure.spatial import Sites


def design(
    X,
    names: Sequence[str] | None = None,
    *,
    group=None,
    outer=None,
    tick=None,
    series=None,
    elapsed=None,
    xy=None,
    terms: Sequence[Term] | None = None,
    contrasts: Sequence[Contrast] = (),
    root=None,
) -> Design:
    """A design of n rows. ``tick``: whole steps per row; ``elapsed``: irregular times instead."""
    X = np.asarray(X, dtype=float)
    n, p = X.shape
    names = tuple(names or ["constant", *(f"x{j}" for j in range(1, p))])
    terms = terms or [Term(names[0], (0,), "constant")] + [
        Term(names[j], (j,), "numeric", focus=True) for j in range(1, p)
    ]
    groups = None
    if group is not None:
        inner = Partition.of("clinic", group)
        if outer is None:
            groups = Groups((inner,), "one level")
        else:
            ward = Partition.of("ward", group)
            district = Partition.of("district", outer)
            groups = Groups((district, ward.within(district, "district/ward")), "nested")
    order = None
    if tick is not None or elapsed is not None:
        part = Partition.of("series", np.zeros(n, dtype=int) if series is None else series)
        if tick is not None:
            tick = np.asarray(tick, dtype=np.int64)
            order = Series("day", part, tick.astype(float), "day", 1.0, tick, "regular")
        else:
            order = Series("day", part, np.asarray(elapsed, dtype=float), "day", 1.0, None, "irregular")
    sites = None
    if xy is not None:
        places, codes = np.unique(np.asarray(xy, dtype=float), axis=0, return_inverse=True)
        sites = Sites(Partition.of("site", codes.ravel()), places, "planar")
    scaled = X if root is None else X * np.asarray(root)[:, None]
    return Design(
        basis=Basis.of(scaled),
        names=names,
        terms=tuple(terms),
        group=groups,
        serial=order,
        spatial=sites,
        contrasts=tuple(contrasts),
        root=None if root is None else np.asarray(root, dtype=float),
    )


def fits(of: Design, Y, confidence: float = 0.95) -> Fits:
    return Fits(Response.of(of, np.asarray(Y, dtype=float)), Run(Settings(confidence=confidence)))


def clustered(G: int = 12, seed: int = 3, sizes=(3, 9), p: int = 3):
    """X (constant, a row covariate, an arm by cluster), groups, and y of intraclass correlation 0.2."""
    rng = np.random.default_rng(seed)
    group = np.repeat(np.arange(G), rng.integers(*sizes, G))
    n = len(group)
    arm = (group % 2).astype(float)
    X = np.column_stack([np.ones(n), rng.normal(size=n) + 0.5 * rng.normal(size=G)[group], arm])[:, :p]
    y = 1 + X[:, 1] + 0.5 * rng.normal(size=G)[group] + rng.normal(size=n)
    return X, group, y


def ar1(n: int, rho: float, B: int, rng: np.random.Generator):
    """(n, B) stationary AR(1) of unit variance."""
    out = np.empty((n, B))
    out[0] = rng.normal(size=B)
    for t in range(1, n):
        out[t] = rho * out[t - 1] + np.sqrt(1 - rho**2) * rng.normal(size=B)
    return out
