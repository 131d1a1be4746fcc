"""Cases made straight from arrays, for the tests of the error models."""

from __future__ import annotations

from typing import Any

import numpy as np

from clingstone.covariance.fits import Fits
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.maths.basis import Basis
from clingstone.maths.partition import Partition
from clingstone.needs import Limits
from clingstone.run import Run
from clingstone.structure.group import Groups
from clingstone.structure.serial import Series
from clingstone.structure.spatial import Sites


def fits(
    y: Any,
    *columns: Any,
    groups: dict[str, Any] | None = None,
    series: Any = None,
    time: Any = None,
    whole: bool = True,
    xy: Any = None,
    lonlat: bool = False,
    limits: Limits | None = None,
    constant: bool = True,
    weights: Any = None,
) -> Fits:
    """A case in (series, time) order, straight from arrays."""
    y = np.asarray(y, dtype=float)
    n = len(y)
    order = np.arange(n)
    if time is not None:
        code = np.zeros(n, int) if series is None else np.unique(np.asarray(series), return_inverse=True)[1]
        order = np.lexsort((np.asarray(time, dtype=float), code))
    X = np.column_stack(([np.ones(n)] if constant else []) + [np.asarray(c, dtype=float) for c in columns])
    group = serial = sites = None
    if groups:
        levels = tuple(Partition.of(k, np.asarray(v)[order]) for k, v in groups.items())
        group = Groups(levels, "one level" if len(levels) == 1 else "nested")
    if time is not None:
        t = np.asarray(time, dtype=float)[order]
        part = Partition.of("series", code[order])
        tick = np.round(t - t.min()).astype(np.int64) if whole else None
        serial = Series("t", part, t - t.min(), "", 1.0, tick, "regular" if whole else "irregular")
    if xy is not None:
        where, place = np.unique(np.asarray(xy, dtype=float)[order], axis=0, return_inverse=True)
        part = Partition.of("site", place.ravel())
        sites = Sites(part, where, "lonlat" if lonlat else "planar")
    root = None if weights is None else np.sqrt(np.asarray(weights, dtype=float)[order])
    X = X[order] if root is None else X[order] * root[:, None]
    names = tuple(f"b{j}" for j in range(X.shape[1]))
    design = Design(Basis.of(X), names, (), group=group, serial=serial, spatial=sites, root=root)
    run = Run() if limits is None else Run(limits=limits)
    return Fits(Response.of(design, y[order]), run)


def printed(f: Fits, node: set[str]) -> float:
    """The restricted log-likelihood as lme4 and nlme print it."""
    return float(f[node].loglik[0]) - np.linalg.slogdet(f.design.basis.R)[1]


def coefficients(f: Fits, node: set[str]) -> tuple[np.ndarray, np.ndarray]:
    model = f[node]
    gram = f.algebra(node).gram(model.theta[:, 0], f.response)
    delta, _, _ = reml.reduced(gram)
    inverse = f.design.basis.inverse
    beta = inverse @ (f.response.coef + delta)[:, 0]
    V = float(model.sigma2[0]) * inverse @ np.linalg.inv(gram.QQ) @ inverse.T
    return beta, np.sqrt(np.diag(V))
