"""Groups one by one: which stands out, which the coefficients lean on, how many count."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
from scipy import special

from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import decimals_for, number, p_value, percent
from clingstone.evidence.finding import About, Curve, Reading, column
from clingstone.evidence.groups import level_name, levels, repeats
from clingstone.evidence.read import Plain, degenerate, floats
from clingstone.maths import reml
from clingstone.maths.once import Array, kept, once
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Needs

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

LEVEL = 0.05  # below which, after all looks, a group is said to stand out
HEAVY = 4.0  # times an even share of the information on a coefficient
ALONE = 1e-10  # 1 − λ below this: a coefficient that one group alone decides
CURVE_GROUPS = 200


@dataclass(frozen=True)
class GroupInfluence(Plain):
    """The most outlying group, with p after as many looks as there are groups.

    Where a variance between groups is fitted, û_g over its own standard deviation, its distribution normal;
    else the t of a shift of the whole group, exact under independence. Beside it, from
    :class:`Influence`: what each coefficient becomes without each group, how the information on it is
    spread, and to how many equal groups that amounts (Carter, Schnepel & Steigerwald 2017).
    """

    id: str = "group-influence"
    family: Family = "lookalike"
    null: str = "No group stands apart from the others."
    alternative: str = "Some group stands apart from the others."
    needs: Needs = field(default=Needs(frozenset({"group"}), {"groups": 3}, known_design=True))
    source: str = "cook-weisberg-1982"
    primary: bool = False

    def abouts(self, design: Design) -> tuple[About, ...]:
        return tuple(About(a.key, f"one {level_name(a.key)} against the others") for a in levels(design))

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading:
        design, response = fits.design, fits.response
        part = repeats(design, about)
        z, shift, p, how = outlying(fits, part)
        p = np.where(np.isnan(p), 1.0, p)
        lost = degenerate(response)
        worst = np.nanargmax(np.where(np.isnan(z), -1.0, np.abs(z)), axis=0)
        at = np.arange(response.B)
        least = np.minimum(p[worst, at] * part.count, 1.0)
        least = np.where(lost, np.nan, least)
        return Reading(
            statistic=np.where(lost, np.nan, np.abs(z[worst, at])),
            statistic_name=f"largest standardised {how}",
            p=least,
            p_method=f"{'normal' if how == 'group effect' else 'exact t'}, times {part.count:,} groups",
            estimate=np.where(lost, np.nan, shift[worst, at]),
            estimate_name="shift of the most outlying group",
            n_used=design.n,
            caveats=_caveats(design, response, part, int(worst[0])) if response.B == 1 else (),
            flag=np.asarray(least < LEVEL),
        )

    def curve(self, fits: Fits, about: About) -> Curve | None:
        return left_out_curve(fits.response, repeats(fits.design, about))

    def sentence(self, reading: Reading, about: About) -> str:
        shift = column(reading.estimate)
        way = "above" if shift > 0 else "below"
        name = level_name(about.key)
        return (
            f"The {name} that stands out most lies {number(abs(shift), decimals_for(abs(shift)))} {way} what "
            f"the model expects of it, {number(column(reading.statistic), 1)} standard deviations "
            f"({p_value(column(reading.p))} after looking at every {name})."
        )


def outlying(fits: Fits, part: Partition) -> tuple[Array, Array, Array, str]:
    """Standardised effects z, their size on the scale of y, two-sided p, each (G, B), and what they are."""
    key = f"group:{part.key}"
    if key in fits.components:
        model = fits[{key}]
        tau2 = model.variances[key]
        if np.all(tau2 > 0):
            return (*_predicted(fits, part, tau2, model.variances["row"]), "group effect")
    return (*_shifted(fits.response, part), "group shift")


def _shifted(response: Response, part: Partition) -> tuple[Array, Array, Array]:
    """The t of a shift of one group, left out of σ̂: exact t_{m−1} for each under independence."""
    design = response.design
    n, t = design.sizes(part), design.sums(part)
    v = n - np.sum(t**2, axis=1)
    seen = v > 1e-9 * n
    v = np.where(seen, v, np.nan)
    e = response.sums(part)
    q = e**2 / v[:, None]
    rest = (response.ss - q) / (design.m - 1)
    with np.errstate(invalid="ignore", divide="ignore"):
        z = np.sign(e) * np.sqrt(q / rest)
    p = 2 * special.stdtr(design.m - 1, -np.abs(z))
    return z, e / v[:, None], p


def _predicted(fits: Fits, part: Partition, tau2: Array, sigma2: Array) -> tuple[Array, Array, Array]:
    """û_g/√Var(û_g) under the fitted intercepts: û = τ²z_g'(y − Xβ̂)/u with u = σ² + τ²n_g.

    Var(û_g) = τ⁴[n_g/u − t_g'(Q'V⁻¹Q)⁻¹t_g/u²], t_g the group sums of Q.
    """
    design, response = fits.design, fits.response
    n, t = design.sizes(part), design.sums(part)
    algebra, model = fits.algebra({f"group:{part.key}"}), fits[{f"group:{part.key}"}]
    z, size = np.empty((part.count, response.B)), np.empty((part.count, response.B))
    for b in range(response.B):
        one = response if response.B == 1 else response.column(b)
        gram = algebra.gram(model.theta[:, b], one)
        delta = reml.reduced(gram)[0][:, 0]
        u = float(sigma2[b]) + float(tau2[b]) * n
        size[:, b] = float(tau2[b]) * (one.sums(part)[:, 0] - t @ delta) / u
        phi = float(sigma2[b]) * np.linalg.inv(gram.QQ)
        variance = float(tau2[b]) ** 2 * (n / u - np.einsum("gp,pq,gq->g", t, phi, t) / u**2)
        seen = variance > 1e-9 * float(tau2[b]) ** 2 * n / u
        z[:, b] = size[:, b] / np.sqrt(np.where(seen, variance, np.nan))
    return z, size, np.asarray(2 * special.ndtr(-np.abs(z)))


# ---- what the coefficients lean on ----


@dataclass(frozen=True, eq=False)
class Influence:
    """Leverage of groups on the coefficients of one design.

    leverage (G,) : tr M_g, M_g = Q_g'Q_g; they add up to p. partial (G, p) : the share of the information on
    each coefficient that a group holds; each column adds up to one.
    """

    design: Design
    part: Partition

    @property
    @once
    def leverage(self) -> Array:
        return np.asarray(np.einsum("gii->g", self.design.scores(self.part)))

    @property
    @once
    def partial(self) -> Array:
        W = self.design.basis.contrast(np.eye(self.design.p))
        inside = np.einsum("pk,gpq,qk->gk", W, self.design.scores(self.part), W)
        return np.asarray(inside / np.sum(W**2, axis=0))

    def effective(self, icc: float = 0.0) -> Array:
        """(p,) G/(1 + Γ) for each coefficient, Γ the squared coefficient of variation of γ_g.

        γ_g = (1 − ρ)w'M_gw + ρ(w't_g)²; ρ = 1 is the worst case (Carter, Schnepel & Steigerwald 2017).
        """
        W = self.design.basis.contrast(np.eye(self.design.p))
        inside = np.einsum("pk,gpq,qk->gk", W, self.design.scores(self.part), W)
        gamma = (1 - icc) * inside + icc * (self.design.sums(self.part) @ W) ** 2
        mean = gamma.mean(axis=0)
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.asarray(self.part.count / (1 + np.mean((gamma - mean) ** 2, axis=0) / mean**2))

    def left_out(self, response: Response) -> Array:
        """(G, p) coefficients without each group, the first column of y; NaN where they are not known.

        β_(g) = β − R⁻¹(I − M_g)⁻¹Q_g'e_g: no refit is made.
        """
        M, basis = self.design.scores(self.part), self.design.basis
        size, U = np.linalg.eigh(M)
        alone = 1 - size < ALONE
        s = np.einsum("gij,gi->gj", U, response.scores(self.part)[:, :, 0])
        move = np.einsum("gij,gj->gi", U, s / np.where(alone, 1.0, 1 - size))
        out = basis.coefficients(response.coef[:, :1])[:, 0] - move @ basis.inverse.T
        # A direction that only this group shows leaves every coefficient with a part in it unknown.
        touched = np.einsum("gij,gj,pi->gp", U**2, alone.astype(float), basis.inverse**2) > 1e-12
        return np.asarray(np.where(touched, np.nan, out))


def influence(design: Design, part: Partition) -> Influence:
    return kept(design, ("influence", part.key), lambda: Influence(design, part))


def _focus(design: Design) -> tuple[int, ...]:
    return tuple(j for t in design.focus() for j in t.columns)


def _moved(response: Response, part: Partition) -> tuple[int, Array] | None:
    """The coefficient in focus that leaving a group out moves furthest, in standard errors; its values."""
    design = response.design
    columns = _focus(design)
    if not columns:
        return None
    left = influence(design, part).left_out(response)[:, list(columns)]
    here = design.basis.coefficients(response.coef[:, :1])[list(columns), 0]
    se = np.sqrt(float(response.s2[0])) * np.linalg.norm(design.basis.inverse[list(columns)], axis=1)
    move = np.abs(left - here) / se
    if np.all(np.isnan(move)):
        return None
    k = int(np.nanargmax(np.nanmax(np.where(np.isnan(move), -1.0, move), axis=0)))
    return columns[k], left[:, k]


def _caveats(design: Design, response: Response, part: Partition, worst: int) -> tuple[str, ...]:
    """Which group it is, what leaving one out moves most, and coefficients that few groups carry."""
    name = level_name(part.key)
    out = [f"It is {name} {part.labels[worst]}, with {part.sizes[worst]:,} of {design.n:,} rows."]
    found = _moved(response, part)
    if found is not None:
        j, left = found
        here = float(design.basis.coefficients(response.coef[:, :1])[j, 0])
        g = int(np.nanargmax(np.abs(left - here)))
        decimals = decimals_for(abs(float(left[g]) - here)) if left[g] != here else 2
        out.append(
            f"Without {name} {part.labels[g]} the ordinary coefficient of {design.names[j]} moves from "
            f"{number(here, decimals)} to {number(float(left[g]), decimals)}, more than without any other."
        )
    seen = influence(design, part)
    effective, share = seen.effective(), seen.partial
    for j in _focus(design):
        g = int(share[:, j].argmax())
        if share[g, j] > HEAVY / part.count and effective[j] < part.count / 2:
            out.append(
                f"Of the information on {design.names[j]}, {name} {part.labels[g]} holds "
                f"{percent(share[g, j])}; all groups together amount to {number(effective[j], 1)} equal ones."
            )
    return tuple(out)


def left_out_curve(response: Response, part: Partition) -> Curve | None:
    """The coefficient that moves furthest, without each group in turn: kind "left-out".

    x rank, y the coefficient without the group, size its rows, labels the groups; the line "all groups" is
    the coefficient itself.
    """
    found = _moved(response, part)
    if found is None:
        return None
    j, left = found
    here = float(response.design.basis.coefficients(response.coef[:, :1])[j, 0])
    order: npt.NDArray[np.intp] = np.argsort(np.where(np.isnan(left), np.inf, left), kind="stable")
    order = order[: int(np.sum(~np.isnan(left)))]
    note = ""
    if len(order) > CURVE_GROUPS:
        ends = np.r_[order[: CURVE_GROUPS // 2], order[-CURVE_GROUPS // 2 :]]
        note = f"the {CURVE_GROUPS} of {part.count:,} groups that move it furthest down and up"
        order = ends
    x = np.arange(1, len(order) + 1)
    return Curve(
        kind="left-out",
        x=floats(x),
        y=floats(left[order]),
        size=floats(part.sizes[order]),
        labels=tuple(part.labels[g] for g in order),
        x_name=level_name(part.key),
        y_name=f"coefficient of {response.design.names[j]} without it",
        note=note,
        lines={"all groups": (floats(x[[0, -1]]), (here, here))},
    )
