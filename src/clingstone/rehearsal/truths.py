"""What y may have come from: error models that the data do not reject, and one that nobody fitted.

A rehearsal at the estimate alone misleads: with ten groups the estimate may be far off, and the coverage of
an interval that ignores the groups moves with it. So y is simulated at the estimate, at the 10 % and 90 %
points (profile likelihood) of the two parameters that move the focus standard errors most, and once from a
structure that no remedy here fits.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from scipy import stats

from clingstone.covariance.components import slope_key
from clingstone.covariance.fits import Fits
from clingstone.covariance.pieces import SerialPiece, SpatialPiece
from clingstone.covariance.sloped import Sloped
from clingstone.covariance.vecchia import NearestPiece
from clingstone.design.response import Response
from clingstone.display import number, significant
from clingstone.evidence.slopes import SlopeVariation, sloping
from clingstone.ledger.consequence import parts
from clingstone.ledger.ledger import Ledger, focus_rows
from clingstone.ledger.region import Region, loglik, region
from clingstone.maths import matern
from clingstone.maths.once import Array, kept
from clingstone.needs import NotSupported
from clingstone.rehearsal.drawn import Drawn
from clingstone.rehearsal.drawn import draw as draw_sums

INNER = 0.80  # the 10 % and 90 % points are the ends of the 80 % interval
MOST = 2  # parameters that are moved
SEEN = 0.05  # level, over the slopes looked at, from which slopes that differ are simulated
BISECTIONS = 12
AR_PART = 0.8  # of the noisy series' variance; the rest is row noise
MOST_RHO = 0.97  # of the process below that noise
PER_SD = 2.0  # times a row's variance per standard deviation of its fitted value: it doubles
FURTHEST = 2.0  # standard deviations beyond which it grows no more

Different = Literal["as fitted", "noisy series", "smooth field", "unequal spread"]
DIFFERENT: tuple[str, ...] = ("noisy series", "smooth field", "unequal spread")  # truths nobody fitted


@dataclass(frozen=True)
class Truth:
    """One error model from which y is simulated; plain.

    name : a word or two. words : a sentence for a reader. node, theta, sigma2 : the error model.
    different : how it departs from every fitted structure.
    """

    name: str
    words: str
    node: tuple[str, ...]
    theta: tuple[float, ...]
    sigma2: float
    different: Different = "as fitted"


# ---- the plausible set -------------------------------------------------------------------------


def truths(fits: Fits, ledger: Ledger) -> tuple[Truth, ...]:
    """The estimate, the ends of the most influential parameters, and one different truth.

    Raises NotSupported when no error model can be fitted.
    """
    node = frozenset(ledger.model) or fits.full_node
    inside = region(fits, node, fits.run.settings.confidence)
    best = inside.model.theta[:, 0]
    at = [_truth(fits, node, best, "estimate")]
    for words, values in _influential(fits, inside)[:MOST]:
        seen = np.where(np.isfinite(values), values, np.nan)
        for end, column in (("low", int(np.nanargmin(seen))), ("high", int(np.nanargmax(seen)))):
            if abs(values[column] - values[0]) > 1e-3 * max(abs(values[0]), 0.01):
                theta = _inwards(fits, node, best, inside.model.theta[:, column])
                at.append(_truth(fits, node, theta, f"{words} {end}"))
    more = (_slopes(fits, node), _different(fits, at[0]))
    return (*dict.fromkeys(at), *(truth for truth in more if truth is not None))


def _inwards(fits: Fits, node: frozenset[str], best: Array, outer: Array) -> Array:
    """From the end of the ledger's interval towards the estimate, to where the inner interval ends."""
    algebra = fits.algebra(node)
    floor = loglik(algebra, best, fits.response)[0] - float(stats.chi2.isf(1 - INNER, 1)) / 2
    if loglik(algebra, outer, fits.response)[0] >= floor:
        return outer  # stopped by the bounds of the parameter
    near, far = 0.0, 1.0
    for _ in range(BISECTIONS):
        middle = (near + far) / 2
        inside = loglik(algebra, best + middle * (outer - best), fits.response)[0] >= floor
        near, far = (middle, far) if inside else (near, middle)
    return np.asarray(best + near * (outer - best))


def _influential(fits: Fits, inside: Region) -> list[tuple[str, Array]]:
    """Parameters a reader knows, with their values over the region, by how far they move a focus factor."""
    found: list[tuple[str, Array]] = []
    shares = inside.model.shares()
    for key in inside.model.node:
        component = fits.components[key]
        if key == "serial":
            found.append((f"ρ of {component.label}", np.asarray(inside.model.shape["serial.rho"])))
            if not component.repeats:
                continue
        found.append((f"share of {component.label}", np.asarray(shares[key])))
        if key == "spatial":
            found.append(("range of place", np.asarray(inside.model.shape["spatial.range"])))
    if not fits.design.known or not found:
        return found
    seen = parts(fits, inside)
    rows = [k for k, name in enumerate(seen.terms) if name in focus_rows(fits)]
    factor = np.log(seen.factor()[rows])

    def moved(values: Array) -> float:
        good = np.where(np.isfinite(values), values, np.nan)
        if np.all(np.isnan(good)):
            return 0.0
        change = factor[:, int(np.nanargmax(good))] - factor[:, int(np.nanargmin(good))]
        return float(np.max(np.abs(change), initial=0.0))

    return sorted(found, key=lambda item: -moved(item[1]))


def _truth(fits: Fits, node: frozenset[str], theta: Array, name: str) -> Truth:
    algebra = fits.algebra(node)
    sigma2 = loglik(algebra, theta, fits.response)[1]
    variances = algebra.variances(theta[:, None], np.array([sigma2]))
    shape = {key: float(v[0]) for key, v in algebra.shape(theta[:, None]).items()}
    total = sum(float(v[0]) for v in variances.values())
    keys = tuple(key for key in fits.components if key in node)
    said = []
    for key in keys:
        label = fits.components[key].label
        if key == "serial":
            said.append(f"ρ of {label} {number(shape['serial.rho'], 2)}")
            if not fits.components[key].repeats:
                continue
        said.append(f"share of {label} {number(float(variances[key][0]) / total, 2)}")
        sites = fits.design.spatial
        if key == "spatial" and sites is not None and np.isfinite(shape["spatial.range"]):
            said.append(f"practical range {significant(shape['spatial.range'])} {sites.unit}")
    words = "; ".join(said) if said else "independent rows"
    return Truth(name, words, keys, tuple(float(v) for v in theta), sigma2)


def _slopes(fits: Fits, node: frozenset[str]) -> Truth | None:
    """Groups whose slopes differ as fitted, where the clearest test of them speaks; None where none does.

    An order in time and places are left out of it: groups with lines of their own are another account of
    what hangs together there.
    """
    test, found = SlopeVariation(), []
    design, looked = fits.design, sloping(fits.design)
    for (part, term), about in zip(looked, test.abouts(design), strict=True):
        if term.variables and term.variables[0] in design.covariates:
            found.append((float(test.read(fits, about).p[0]), part.key, term.variables[0]))
    p, level, x = min(found, default=(1.0, "", ""))
    if not p * len(found) < SEEN:
        return None
    key = slope_key(level, x)
    wider = {k for k in node if k.startswith("group:")} | {f"group:{level}", key}
    try:
        algebra, model = fits.algebra(wider), fits[wider]
    except NotSupported:
        return None
    if not isinstance(algebra, Sloped) or bool(model.at_bound[algebra.slices[key].start, 0]):
        return None
    theta, sigma2 = model.theta[:, 0], float(model.sigma2[0])
    bundle = algebra.bundle(level)
    where = [piece.key for piece in bundle.pieces].index(key)
    sd = float(np.sqrt(bundle.covariance(algebra.joined(bundle, theta), sigma2)[where, where]))
    words = f"slopes of {x} differ between {level} with a standard deviation of {significant(sd)}"
    return Truth("differing slopes", words, model.node, tuple(float(v) for v in theta), sigma2)


def _different(fits: Fits, estimate: Truth) -> Truth | None:
    """The same sizes under a structure that was not fitted."""
    algebra = fits.algebra(estimate.node)
    if not hasattr(algebra, "pieces"):
        return None
    if "serial" in estimate.node and not fits.components["serial"].repeats:
        what: Different = "noisy series"
        words = f"{1 - AR_PART:.0%} of the series' variance is row noise, with ρ between neighbours kept"
    elif "spatial" in estimate.node:
        what, words = "smooth field", "the field is smooth (Matérn 3/2) with the same practical range"
    else:
        what = "unequal spread"
        words = "a row's variance doubles with each standard deviation of its fitted value"
    return replace(estimate, name=what, words=f"{words}; otherwise as estimated", different=what)


# ---- drawing -----------------------------------------------------------------------------------


def draw(truth: Truth, fits: Fits, rng: np.random.Generator, B: int) -> Response:
    """B columns of y with a mean of zero: the coverage of every interval here is the same whatever the mean.

    fits : of the user's own y; its design, algebras and fitted values are read.
    """
    Y = errors(truth, fits, rng, B)
    design = fits.design
    e = design.basis.project(Y)
    return Response(design, design.Q.T @ Y, e, np.einsum("ij,ij->j", e, e))


def errors(truth: Truth, fits: Fits, rng: np.random.Generator, B: int) -> Array:
    """(n, B) errors on the scale of the basis."""
    algebra, theta = fits.algebra(truth.node), np.array(truth.theta)
    if truth.different == "as fitted":
        return algebra.draw(theta, truth.sigma2, rng, B)
    n = fits.design.n
    serial = any(isinstance(piece, SerialPiece) for piece in algebra.pieces)
    total = np.zeros((n, B)) if serial else rng.standard_normal((n, B))
    if truth.different == "unequal spread":
        total *= _spread(fits)[:, None]
    for piece in algebra.pieces:
        own = algebra.own(piece, theta)
        if isinstance(piece, SerialPiece) and truth.different == "noisy series":
            rho = float(piece.rho(own))
            part = max(AR_PART, min(1.0, abs(rho) / MOST_RHO))
            white = rng.standard_normal((n, B))
            total += np.sqrt(part) * piece.links.colour(rho / part, white)
            total += np.sqrt(1 - part) * rng.standard_normal((n, B))
        elif isinstance(piece, SpatialPiece) and truth.different == "smooth field":
            total += _smooth(piece, own, rng, B)
        else:
            total += piece.draw(own, rng, B)
    return np.asarray(np.sqrt(truth.sigma2) * total)


def _spread(fits: Fits) -> Array:
    """(n,) deviations of rows relative to σ, with a mean square of one."""

    def make() -> Array:
        design = fits.design
        fitted = design.Q @ fits.response.coef[:, 0]
        if design.root is not None:
            fitted = fitted / design.root
        z = fitted - fitted.mean()
        size = float(np.sqrt(np.mean(z**2)))
        z = np.clip(z / size, -FURTHEST, FURTHEST) if size > 0 else np.zeros_like(z)
        variance = PER_SD**z
        return np.asarray(np.sqrt(variance / variance.mean()))

    return kept(fits.response, ("unequal spread",), make)


def _smooth(piece: SpatialPiece, own: Array, rng: np.random.Generator, B: int) -> Array:
    """A Matérn 3/2 field with the variance and the practical range of the piece."""
    size = float(np.sqrt(piece.variance(own[:, None])[0]))
    reach = float(np.exp(own[0])) * matern.PRACTICAL[piece.smoothness] / matern.PRACTICAL[1.5]

    if isinstance(piece, NearestPiece):  # beyond the dense limit: each place given earlier ones near to it
        smooth = kept(piece.design, ("smooth field", reach), lambda: replace(piece, smoothness=1.5))
        return smooth.draw(np.array([np.log(reach), own[1]]), rng, B)

    def make() -> Array:
        R = matern.kernel(piece.distance, reach, 1.5)
        # Smooth fields are all but singular: a nugget of 1e-8 changes no draw that could be seen.
        return np.asarray(np.linalg.cholesky(R + 1e-8 * np.eye(len(R))), dtype=float)

    L = kept(piece.design, ("smooth field", reach), make)
    rows = (size * (L @ rng.standard_normal((piece.sites.count, B))))[piece.sites.part.codes]
    return rows if piece.design.root is None else rows * piece.design.root[:, None]


def summed(truth: Truth, fits: Fits, key: str) -> bool:
    """Whether y can be drawn as sums and scores over the cells of one partition."""
    return (
        truth.different == "as fitted"
        and set(truth.node) <= {f"group:{key}"}
        and key in fits.design.partitions
    )


def draw_summed(truth: Truth, fits: Fits, key: str, rng: np.random.Generator, B: int) -> Drawn:
    """As ``draw``, without rows."""
    design = fits.design
    tau2 = 0.0
    if truth.node:
        algebra = fits.algebra(truth.node)
        found = algebra.variances(np.array(truth.theta)[:, None], np.array([truth.sigma2]))
        tau2 = float(found[f"group:{key}"][0])
    return draw_sums(design, design.partitions[key], tau2, truth.sigma2, rng, B)
