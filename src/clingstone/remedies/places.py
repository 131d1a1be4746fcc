"""What remedies for places share: what they ask for, effective numbers, and confounding."""

from __future__ import annotations

from collections.abc import Container
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from clingstone.covariance.components import SITE
from clingstone.covariance.smoothness import kernels
from clingstone.design.design import Design
from clingstone.display import significant
from clingstone.maths import reml
from clingstone.maths.once import Array
from clingstone.maths.vecchia import NEIGHBOURS
from clingstone.needs import NotSupported
from clingstone.remedies.linear import positive_m
from clingstone.remedies.remedy import Plain
from clingstone.structure.spatial import Sites

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits

MOVED = 2.0  # standard deviations of the difference at which an estimate is said to have moved
SHIFTED = 0.25  # relative change that counts when the predictor is smooth over the map
SMOOTH = 0.5  # share of a predictor that a cubic surface of place explains


def site_keys(design: Design, found: Container[str]) -> list[str]:
    """Of the components found, what rows of one place share, where places repeat."""
    if SITE in found:
        return [SITE]
    if design.spatial is None or design.group is None:
        return []
    same = (v for v in design.group.levels if v.relation(design.spatial.part) == "same")
    return [f"group:{v.key}" for v in same if f"group:{v.key}" in found]


def spatial_node(fits: Fits) -> frozenset[str] | None:
    """Components of the map alone: places, and what rows of one place share."""
    if "spatial" not in fits.components:
        return None
    return frozenset([*site_keys(fits.design, fits.components)[:1], "spatial"])


class OnMap(Plain):
    """A remedy for places that asks for the fitted covariance of the map."""

    def working(self, fits: Fits) -> ErrorModel | None:
        """The fitted spatial covariance, with what rows of one place share where places repeat."""
        node = spatial_node(fits)
        return None if node is None else fits[node]


def enough_sites(design: Design, least: int, need: str) -> Sites:
    """The places. Raises NotSupported where there are fewer than ``least``; need : "regions need"."""
    positive_m(design)
    sites = design.spatial
    if sites is None:
        raise NotSupported("no places were declared", "Name coords=.")
    if sites.count < least:
        raise NotSupported(f"{sites.count} distinct places; {need} {least}", "More places would be needed.")
    return sites


def length(value: float, unit: str, digits: int = 3) -> str:
    """A length on the map, in the unit of the places: "2.4 km"."""
    return f"{significant(value, digits)} {unit}"


@dataclass(frozen=True, eq=False)
class Spread:
    """The fitted covariance V of the rows as the basis sees it.

    QVQ, QIQ (p, p) : Q'VQ and Q'V⁻¹Q on the scale of y. total : mean variance of a row.
    """

    design: Design
    QVQ: Array
    QIQ: Array
    total: float

    def items(self) -> tuple[tuple[str, str], ...]:
        """How many independent rows would know as much of the mean, and of each coefficient in focus.

        For the mean of the rows n²/1'R1, and 1'R⁻¹1 for its best estimate (Griffith 2005; Vallejos &
        Osorio 2014); for a coefficient n·σ²a'a/a'Va, which may lie above n: dependence hurts a
        coefficient only as far as its predictor shares the pattern.
        """
        design, n = self.design, self.design.n
        out = []
        if design.root is None and np.sum(design.Q.sum(axis=0) ** 2) > n * (1 - 1e-8):
            q = design.Q.sum(axis=0)
            plain = n**2 * self.total / float(q @ self.QVQ @ q)
            best = self.total * float(q @ self.QIQ @ q)
            out.append(("rows, for the mean", f"{n:,} rows know it as well as {plain:.4g} independent ones"))
            out.append(("the same for the best estimate of the mean", f"{best:.4g}"))
        w = design.basis.contrast(np.eye(design.p))
        for term in design.focus():
            for j in term.columns:
                a = w[:, j]
                count = n * self.total * float(a @ a) / float(a @ self.QVQ @ a)
                out.append((f"rows, for {design.names[j]} by least squares", f"{count:.4g}"))
        return tuple(out)

    def confounded(self, ordinary: Array, moved: Array) -> tuple[str, ...]:
        """A sentence per coefficient that place and predictor contest (Hodges & Reich 2010).

        ordinary, moved (p,) : β̂ by least squares and by generalised least squares, in the basis. Under
        a correct mean their difference has variance Var(β̂_OLS) − Var(β̂_GLS), exact for this V
        (Hausman 1978).
        """
        design = self.design
        w = design.basis.contrast(np.eye(design.p))
        gap = self.QVQ - np.linalg.inv(self.QIQ)
        out = []
        for term in design.focus():
            for j in term.columns:
                a = w[:, j]
                one, two = float(a @ ordinary), float(a @ moved)
                sd = np.sqrt(max(float(a @ gap @ a), 0.0))
                far = sd > 0 and abs(two - one) > MOVED * sd
                shifted = one != 0 and abs(two / one - 1) > SHIFTED
                if not (far or shifted):
                    continue
                share = smoothness(design, j)
                if far or share > SMOOTH:
                    out.append(
                        f"Place and {design.names[j]} carry the same pattern (a smooth surface explains "
                        f"{share:.0%} of what is left of {design.names[j]} beside the other predictors): the "
                        "estimate moves with the error model, and these data cannot split the two."
                    )
        return tuple(out)


def fitted_spread(fits: Fits, node: frozenset[str]) -> Spread:
    """The covariance of a fitted node, for the first column of y."""
    model, algebra = fits[node], fits.algebra(node)
    theta = model.theta[:, 0]
    design = fits.design
    QVQ = np.zeros((design.p, design.p))
    total = 0.0
    for key, variance in model.variances.items():
        QVQ += float(variance[0]) * algebra.spread(key, theta)
        total += float(variance[0])
    gram = algebra.gram(theta, fits.response.column(0))
    return Spread(design, QVQ, gram.QQ / float(reml.scale(gram, design.m)[0]), total)


def map_items(fits: Fits, node: frozenset[str]) -> tuple[tuple[str, str], ...]:
    """What an account of a fit over places adds: other kernels, effective numbers, what is approximate."""
    sites = fits.design.spatial
    if "spatial" not in node or sites is None:
        return ()
    out = list(fitted_spread(fits, node).items())
    focus = [j for t in fits.design.focus() for j in t.columns]
    w = fits.design.basis.contrast(np.eye(fits.design.p))
    for kernel in kernels(fits, node):
        name = {0.5: "exponential", 1.5: "Matérn 3/2", 2.5: "Matérn 5/2"}[kernel.smoothness]
        reach = length(kernel.reach, sites.unit)
        words = f"log-likelihood {kernel.drop:.2f} below the best, practical range {reach}"
        for j in focus[:3]:
            se = float(np.sqrt(w[:, j] @ kernel.phi @ w[:, j]))
            words += f", {fits.design.names[j]} {float(w[:, j] @ kernel.coef):.6g} with SE {se:.6g}"
        out.append((f"{name} correlation", words))
    if sites.count > fits.run.limits.dense_sites:
        out.append(
            ("likelihood", f"each place given {NEIGHBOURS} nearest earlier ones; the constant is approximate")
        )
    return tuple(out)


def map_notes(fits: Fits, node: frozenset[str], moved: Array) -> tuple[str, ...]:
    """Coefficients that place and predictor contest, for the first column of y; moved (p,) Q'β̂."""
    if "spatial" not in node or fits.design.spatial is None:
        return ()
    return fitted_spread(fits, node).confounded(fits.response.coef[:, 0], moved)


def smoothness(design: Design, j: int) -> float:
    """Share of a predictor, beside the other predictors, that a cubic surface of place explains."""
    assert design.spatial is not None
    a = design.Q @ design.basis.contrast(np.eye(design.p))[:, j]
    surface = _surface(design.spatial.points)[design.spatial.part.codes]
    if design.root is not None:
        surface = surface * design.root[:, None]
    others = np.delete(np.eye(design.p), j, axis=0) @ design.basis.R.T
    X = design.Q @ others.T
    rest = surface - X @ np.linalg.lstsq(X, surface, rcond=None)[0] if X.shape[1] else surface
    fitted = rest @ np.linalg.lstsq(rest, a, rcond=1e-8)[0]
    return float(np.clip(fitted @ fitted / (a @ a), 0.0, 1.0))


def _surface(points: Array) -> Array:
    """(S, ·) all products of the coordinates up to the third degree."""
    unit = (points - points.mean(axis=0)) / np.maximum(points.std(axis=0), 1e-300)
    powers = np.indices((4,) * unit.shape[1]).reshape(unit.shape[1], -1).T
    return np.column_stack([np.prod(unit**power, axis=1) for power in powers if power.sum() <= 3])
