"""How smooth the dependence between places is: the likelihood under rougher and smoother kernels."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from clingstone.covariance.layered import Layered, stack
from clingstone.covariance.pieces import SpatialPiece
from clingstone.maths import matern, reml
from clingstone.maths.once import Array, kept
from clingstone.maths.search import Optimum, minimise

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

SMOOTHNESS = (0.5, 1.5, 2.5)
SITES = 300  # places up to which the other kernels are fitted as well
COLD_SITES = 100  # the same where a parameter lies at its bound, so that no start is near


@dataclass(frozen=True, eq=False)
class Kernel:
    """One Matérn kernel fitted by REML.

    smoothness : κ; ½ is the exponential. drop : how much lower its restricted log-likelihood is than the
    best of them. reach : practical range. coef (p,), phi (p, p) : Q'β̂ and its covariance.
    """

    smoothness: float
    drop: float
    reach: float
    coef: Array
    phi: Array


def kernels(fits: Fits, node: frozenset[str]) -> tuple[Kernel, ...]:
    """Kernels of smoothness ½, 3/2 and 5/2 on the first column of y; none where places are many.

    Smoothness is weakly identified, so it is not estimated: what matters is whether it matters.
    """
    return kept(fits.response, ("kernels", node, fits.run.limits), lambda: _kernels(fits, node))


def _kernels(fits: Fits, node: frozenset[str]) -> tuple[Kernel, ...]:
    algebra = fits.algebra(node)
    sites = fits.design.spatial
    if not isinstance(algebra, Layered) or sites is None or sites.count > SITES or algebra.spatial is None:
        return ()
    model = fits[node]
    theta, bound = model.theta[:, 0], model.at_bound[:, 0]
    if bound.any() and sites.count > COLD_SITES:
        return ()
    found = []
    for smoothness in SMOOTHNESS:
        other = _with(fits, algebra, smoothness)
        where = other.slices[algebra.spatial.key].start
        start = theta.copy()
        # The practical range is what stays the same from one kernel to the next.
        start[where] += np.log(matern.PRACTICAL[algebra.spatial.smoothness] / matern.PRACTICAL[smoothness])
        found.append(_fitted(fits, other, smoothness, None if bound.any() else start))
    top = max(value for value, _ in found)
    return tuple(replace(kernel, drop=top - value) for value, kernel in found)


def _with(fits: Fits, algebra: Layered, smoothness: float) -> Layered:
    pieces = tuple(
        replace(piece, smoothness=smoothness) if isinstance(piece, SpatialPiece) else piece
        for piece in algebra.pieces
    )
    other = stack(fits.design, pieces)
    assert other is not None
    return other


def _fitted(fits: Fits, algebra: Layered, smoothness: float, start: Array | None) -> tuple[float, Kernel]:
    column, m = fits.response.column(0), fits.design.m
    assert algebra.spatial is not None

    def value(theta: Array) -> float:
        return float(reml.criterion(algebra.gram(theta, column), m)[0])

    warm = None if start is None else _near(value, start)
    best = minimise(algebra.field(column, m) or value, algebra.parameters, warm=warm)
    gram = algebra.gram(best.theta, column)
    delta, _, _ = reml.reduced(gram)
    s2 = float(reml.scale(gram, m)[0])
    reach = float(np.exp(algebra.own(algebra.spatial, best.theta)[0])) * matern.PRACTICAL[smoothness]
    kernel = Kernel(
        smoothness,
        0.0,
        float(algebra.spatial.sites.along(np.asarray(reach))),
        column.coef[:, 0] + delta[:, 0],
        np.asarray(s2 * np.linalg.inv(gram.QQ)),
    )
    return -best.value / 2, kernel


def _near(value: Callable[[Array], float], start: Array) -> Optimum | None:
    """A start with its curvature, or None where it is not that of a valley."""
    try:
        curvature = reml.hessian(value, start)
    except np.linalg.LinAlgError:
        return None
    if np.linalg.eigvalsh(curvature)[0] <= 0:
        return None
    free = np.zeros(len(start), dtype=bool)
    return Optimum(start, value(start), free, True, (), curvature, start)
