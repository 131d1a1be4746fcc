"""What goes on within groups: the process in time beside row noise, and finer levels, to whiten rows by.

Apparent slopes of a group are as large as its slowest errors make them. A process alone, without row noise,
is fitted where neighbouring rows differ most and so fades too fast; with row noise beside it, it does not.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import partial

import numpy as np

from clingstone.covariance.algebras import Chosen, choose
from clingstone.covariance.fits import Fits, Node
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.maths.once import Array, kept
from clingstone.maths.partition import Partition
from clingstone.maths.search import Optimum, minimise
from clingstone.needs import NotSupported

NOISE_ROWS = 5_000  # rows up to which row noise is fitted beside the process


def inner_node(fits: Fits, part: Partition) -> Node:
    """Structures that stay within the groups of a level and can make slopes there; empty if none can."""
    design = fits.design
    series = design.serial
    found = {k for k in fits.components if k.startswith("group:") and _inside(fits, k, part)}
    finer = {k for k in found if design.partitions[fits.components[k].part].count > part.count}
    ordered = "serial" in fits.components and series is not None and _holds(part, series.part)
    return frozenset(found | ({"serial"} if ordered else set())) if finer or ordered else frozenset()


def _inside(fits: Fits, key: str, part: Partition) -> bool:
    inner = fits.design.partitions.get(fits.components[key].part)
    return inner is not None and _holds(part, inner)


def _holds(part: Partition, inner: Partition) -> bool:
    return part.relation(inner) in ("same", "nests")


@dataclass(frozen=True, eq=False)
class Models:
    """Error models of B columns of y: one algebra, θ (d, B)."""

    algebra: Chosen
    theta: Array

    def white(self, b: int, block: Array) -> Array:
        """(n, k) rows whitened by the model of one column."""
        return np.asarray(self.algebra.whiten(self.theta[:, b], block))


def inner_models(fits: Fits, node: Node) -> Models:
    """The error models of a node by REML, row noise beside a process in time where that can be had."""
    return kept(fits.response, ("within groups", node, fits.run.limits), partial(_models, fits, node))


def _models(fits: Fits, node: Node) -> Models:
    algebra = _noisy(fits, node)
    if algebra is None:
        return Models(fits.algebra(node), fits[node].theta)
    first: Optimum | None = None
    theta = []
    for b in range(fits.response.B):
        found = minimise(_criterion(algebra, fits.response.column(b)), algebra.parameters, warm=first)
        first = first or found
        theta.append(found.theta)
    return Models(algebra, np.stack(theta, axis=1))


def _criterion(algebra: Chosen, one: Response) -> Callable[[Array], float]:
    return lambda theta: float(reml.criterion(algebra.gram(theta, one), one.design.m)[0])


def _noisy(fits: Fits, node: Node) -> Chosen | None:
    if "serial" not in node or fits.design.n > NOISE_ROWS:
        return None
    parts = [fits.component(key) for key in fits.ordered(node)]
    wide = tuple(replace(c, repeats=True) if c.key == "serial" else c for c in parts)
    limits = fits.run.limits
    try:
        return kept(fits.design, ("within groups", node, limits), lambda: choose(fits.design, wide, limits))
    except NotSupported:
        return None
