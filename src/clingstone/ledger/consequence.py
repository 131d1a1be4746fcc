"""What dependence does to the ordinary fit: parts of each variance, and total factors.

Var(c'β̂) of ordinary least squares under V = Σ σ²ₖKₖ is Σ σ²ₖ w'Q'KₖQw with w = R⁻ᵀc, and what the
ordinary fit believes it to be is E s²·‖w‖² with E s² = tr(MV)/m. Both are linear in V, so the parts
of the structures add up.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import partial

import numpy as np
from scipy.interpolate import CubicSpline

from clingstone.covariance.algebras import Chosen
from clingstone.covariance.fits import Fits
from clingstone.design.design import Design
from clingstone.ledger.entries import Inflation
from clingstone.ledger.region import Region
from clingstone.maths.once import Array, kept
from clingstone.remedies.remedy import rows

ALONG = 256  # steps of the grid of a series' parameter at which Q'KQ is worked out where it is needed
NODES = 17  # values of a shape parameter at which Q'KQ is worked out; linear between them


@dataclass(frozen=True, eq=False)
class Parts:
    """Parts of Var(β̂)/Var_ordinary(β̂) over the columns of a region.

    terms (k,) : coefficients, then named contrasts. part : key → (k, P). mean : key → (P,) the
    part of E s² per unit variance; variance : key → (P,) σ²ₖ.
    """

    terms: tuple[str, ...]
    plain: Mapping[str, Array]  # key → (k, P), w'Q'KₖQw/‖w‖² for unit variance
    mean: Mapping[str, Array]  # key → (P,), tr(MKₖ)/m
    variance: Mapping[str, Array]  # key → (P,)

    def expected(self, variance: Mapping[str, Array] | None = None) -> Array:
        """E s², (P,)."""
        v = self.variance if variance is None else variance
        return np.asarray(sum(v[key] * self.mean[key] for key in v))

    def part(self, key: str) -> Array:
        """(k, P) the structure's part of the variance ratio."""
        return np.asarray(self.variance[key] * self.plain[key] / self.expected())

    def factor(self, variance: Mapping[str, Array] | None = None) -> Array:
        """(k, P) standard-error factors, the root of all parts."""
        v = self.variance if variance is None else variance
        total = sum(v[key] * self.plain[key] for key in v)
        return np.asarray(np.sqrt(total / self.expected(v)))

    def due_to(self, key: str) -> Array:
        """(k, P) factor with the structure over the factor if its variance were row noise."""
        without = dict(self.variance)
        without["row"] = without["row"] + without[key]
        without[key] = np.zeros_like(without[key])
        return np.asarray(self.factor() / self.factor(without))


def parts(fits: Fits, region: Region) -> Parts:
    """Parts of every coefficient and named contrast over a likelihood region."""
    design, model = fits.design, region.model
    names, weights = rows(design)
    W = design.basis.contrast(weights)  # (p, k)
    size = np.einsum("pk,pk->k", W, W)
    plain: dict[str, Array] = {}
    mean: dict[str, Array] = {}
    algebra = fits.algebra(frozenset(model.node))
    for key in model.variances:
        spread, trace = _spreads(design, algebra, region, key)
        plain[key] = np.einsum("pk,Bpq,qk->kB", W, spread, W) / size[:, None]
        mean[key] = (trace - np.einsum("Bpp->B", spread)) / design.m
    return Parts(names, plain, mean, model.variances)


def trace_of(design: Design, key: str) -> float:
    """tr K of one component of unit variance on the basis scale: n, or the total precision weight.

    Weights scale the row noise alone; a serial process is the row noise itself, but for rows that repeat.
    """
    repeats = design.serial is not None and design.serial.repeats
    if key == "row" or (key == "serial" and not repeats) or design.root is None:
        return float(design.n)
    return float(np.sum(design.root**2))


def _spreads(design: Design, algebra: Chosen, region: Region, key: str) -> tuple[Array, float]:
    """(P, p, p) Q'KQ at every column of the region, or (1, p, p) where it does not move; and tr K."""
    p, model = design.p, region.model
    if key == "row":
        return np.eye(p)[None], float(design.n)
    trace = trace_of(design, key)
    if p == 0:
        return np.zeros((1, 0, 0)), trace
    shape = _moving(model.shape, key)
    if shape is None:
        return algebra.spread(key, model.theta[:, 0])[None], trace
    if key == "serial" and len(model.theta[algebra.slices[key]]) == 1:
        return _along(design, algebra, model.theta, np.abs(shape)), trace
    at = np.log(shape) if key == "spatial" else shape
    if not np.any(np.isfinite(at)):
        return np.eye(p)[None], trace  # of no variance anywhere: K is never used
    at = np.where(np.isfinite(at), at, np.nanmin(at))
    chosen = _nodes(at)
    known = np.array([algebra.spread(key, model.theta[:, i]).ravel() for i in chosen])
    out = np.empty((len(at), p * p))
    for j in range(p * p):
        out[:, j] = np.interp(at, at[chosen], known[:, j])
    return out.reshape(-1, p, p), trace


def _along(design: Design, algebra: Chosen, theta: Array, size: Array) -> Array:
    """(P, p, p) Q'KQ of a series at θ (d, P), by splines through a grid that belongs to the design.

    size (P,) : |ρ|. |ρ|(K − I) is smooth where K itself jumps, between ρ below and above zero.
    """
    where = algebra.slices["serial"].start
    axis = algebra.parameters[where]
    step = (axis.high - axis.low) / ALONG
    at = theta[where]
    first = int(np.clip(np.floor((at.min() - axis.low) / step) - 2, 0, ALONG - 4))
    last = int(np.clip(np.ceil((at.max() - axis.low) / step) + 2, first + 4, ALONG))
    eye = np.eye(design.p)

    def node(k: int) -> Array:
        here = theta[:, 0].copy()
        here[where] = axis.low + k * step
        rho = float(np.abs(algebra.shape(here[:, None])["serial.rho"][0]))
        return np.asarray(rho * (algebra.spread("serial", here) - eye))

    chosen = range(first, last + 1)
    known = np.array([kept(design, ("spread", axis.name, k), partial(node, k)) for k in chosen])
    smooth = CubicSpline(axis.low + step * np.arange(first, last + 1), known)(at)
    return np.asarray(eye + smooth / np.maximum(size, 1e-8)[:, None, None])


def _moving(shape: Mapping[str, Array], key: str) -> Array | None:
    return next((np.asarray(v, dtype=float) for name, v in shape.items() if name.split(".")[0] == key), None)


def _nodes(at: Array) -> list[int]:
    """Columns whose shape values cover the range evenly; the ends and the estimate are among them."""
    aims = np.linspace(at.min(), at.max(), NODES)
    near = {int(np.argmin(np.abs(at - aim))) for aim in aims} | {0}
    order = sorted(near, key=lambda i: at[i])
    kept: list[int] = []
    for i in order:
        if not kept or at[i] > at[kept[-1]]:
            kept.append(i)
    return kept


def inflation(found: Parts, region: Region) -> tuple[Inflation, ...]:
    """The inflation table: per coefficient or contrast a row per structure, "row", and "total"."""
    out: list[Inflation] = []
    factor = found.factor()
    pieces = {key: found.part(key) for key in found.variance}
    for k, term in enumerate(found.terms):
        for key, piece in pieces.items():
            low, estimate, high = region.interval(piece[k])
            out.append(Inflation(term, key, low, estimate, high))
        low, estimate, high = region.interval(factor[k])
        out.append(Inflation(term, "total", low, estimate, high))
    return tuple(out)
