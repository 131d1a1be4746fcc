"""The only judge of structures: alone, given all the others, and what the two together say."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from scipy import stats

from clingstone.covariance.components import SITE
from clingstone.covariance.fits import Fits
from clingstone.evidence.finding import Evidence, Finding, Verdict
from clingstone.ledger.consequence import Parts
from clingstone.ledger.entries import Standing
from clingstone.ledger.region import Region
from clingstone.needs import Family, NotSupported

LEVEL = 0.05  # of the tests, alone and given
MASKED = 0.01  # a structure seen only when the others are fitted needs more than LEVEL
UNITS = 30  # independent units from which a boundary mixture of χ² is used
MOST = 20.0  # a standard-error factor beyond this is told as more than that
DRAWS = 199  # of the parametric bootstrap
GRIDDED = 2  # working parameters up to which many columns are fitted on one shared grid, and so fast
LATER_LAGS = "hang together several steps apart, not from one step to the next"
SMALL = 1.0  # a statistic below this has p > 0.15 under every reference here; the mixture says enough


@dataclass(frozen=True)
class Seen:
    """What is known of one component before the table is read."""

    key: str
    family: Family
    label: str
    p_alone: float
    p_adjusted: float  # Holm over structures, where the test was primary
    p_given: float
    given: tuple[str, ...]
    p_method: str
    matters: bool
    worst: float
    worst_term: str
    widens: bool = False
    later: str = ""  # lags at which alone its rows hang together, in words

    @property
    def alone(self) -> bool | None:
        """Seen by its own test; None when no test was made."""
        return None if np.isnan(self.p_adjusted) else self.p_adjusted < LEVEL

    @property
    def held(self) -> bool | None:
        """Seen when all the others are fitted; None when there is no other."""
        return None if np.isnan(self.p_given) else self.p_given < LEVEL


# ---- alone -----------------------------------------------------------------------------------


def own_finding(evidence: Evidence, key: str, family: Family) -> Finding | None:
    """The test by which a component is judged alone: the primary one, at its own level."""
    found = [f for f in evidence.of(family) if not f.given and np.isfinite(f.p)]
    if key == SITE:
        found = [f for f in found if f.test == "site-f"]
    elif key.startswith("group:"):
        level = key.removeprefix("group:")
        found = [f for f in found if f.about == level and f.test != "group-endogeneity"]
        found.sort(key=lambda f: (not f.primary, f.test != "group-f"))
    else:
        found = [f for f in found if f.primary]
    return found[0] if found else None


def adjusted_tests(evidence: Evidence) -> int:
    """How many primary tests Holm's adjustment was made over."""
    return sum(f.primary and f.p_adjusted is not None for f in evidence)


def later_lags(evidence: Evidence) -> Finding | None:
    """Ljung and Box's second look, where it shows what is several steps apart; None where it does not."""
    found = [f for f in evidence.of("serial") if f.test == "ljung-box" and np.isfinite(f.p)]
    seen = [f for f in found if not f.primary and f.p * (1 + adjusted_tests(evidence)) < LEVEL]
    return min(seen, key=lambda f: f.p) if seen else None


# ---- given all the others ----------------------------------------------------------------------


def restricted_lr(fits: Fits, key: str) -> tuple[float, str]:
    """p of the restricted likelihood ratio of one component given all the others, and how it was got.

    χ²₁ for ρ, which lies inside its range. For a variance ½χ²₀ + ½χ²₁ (Self & Liang 1987; Stram & Lee
    1994), exact in the limit of many units and conservative with few; below 30 units a parametric
    bootstrap where the models are small. For a spatial variance, whose range does not exist under the
    null (Davies 1987), ½χ²₀ + ½χ²₂: no limit law, but conservative in simulations (about 3 % at 5 %).
    A bootstrap of 199 draws cannot say less than 0.005: where the mixture does, its p stands, an upper
    bound that the draws would only repeat.
    """
    rest = fits.full_node - {key}
    try:
        without = fits[rest]
    except NotSupported as error:
        return float("nan"), f"not available: {error}"
    statistic = max(0.0, 2 * float(fits.full.loglik[0] - without.loglik[0]))
    one, two = float(stats.chi2.sf(statistic, 1)), float(stats.chi2.sf(statistic, 2))
    if key == "serial":
        return one, "χ² with 1 df"
    if key == "spatial":
        return (0.5 * two if statistic > 0 else 1.0), "½χ²₀ + ½χ²₂, conservative"
    part = fits.design.partitions.get(fits.components[key].part)
    many = part is not None and part.count >= UNITS
    drawn = statistic >= SMALL and 0.5 * one >= 1 / (1 + DRAWS)
    if not many and drawn and len(fits.full.names) <= GRIDDED:
        return _bootstrap(fits, key, rest, statistic)
    return (0.5 * one if statistic > 0 else 1.0), "½χ²₀ + ½χ²₁" + ("" if many else ", conservative")


def _bootstrap(fits: Fits, key: str, rest: frozenset[str], statistic: float) -> tuple[float, str]:
    again = fits.redraw(rest, DRAWS, f"restricted-lr {key}")
    drawn = 2 * (again[fits.full_node].loglik - again[rest].loglik)
    drawn = drawn[np.isfinite(drawn)]
    # The fits of the redraws are interpolated: a tie is a tie up to that error.
    p = (1 + int(np.sum(drawn >= statistic - 1e-6))) / (1 + drawn.size)
    return p, f"parametric bootstrap, {drawn.size} draws"


# ---- consequence ---------------------------------------------------------------------------------


@dataclass(frozen=True)
class Reach:
    """How far the interval of a structure reaches for a focus row.

    matters : outside the band on either side. widens : above it, the one rule by which what is not
    seen is called unclear: an interval that is too short misleads, one that is too long only costs.
    worst : the furthest factor, of the row ``term``; above the band where one is.
    """

    matters: bool = False
    widens: bool = False
    worst: float = float("nan")
    term: str = ""


def consequence(
    found: Parts, region: Region, key: str, focus: tuple[str, ...], material: tuple[float, float]
) -> Reach:
    """Could the structure matter for a focus row, anywhere inside its interval?"""
    if key not in found.variance or not focus:
        return Reach()
    due = found.due_to(key)
    worst, term, widest, widest_term = 1.0, "", 1.0, ""
    for k, name in enumerate(found.terms):
        if name not in focus:
            continue
        low, _, high = region.interval(due[k])
        if high >= widest:
            widest, widest_term = high, name
        for value in (low, high):
            if abs(np.log(value)) > abs(np.log(worst)):
                worst, term = value, name
    if widest > material[1]:
        return Reach(True, True, widest, widest_term)
    return Reach(bool(worst < material[0]), False, worst, term)


# ---- reading the table -----------------------------------------------------------------------------


def judge(seen: tuple[Seen, ...]) -> tuple[Standing, ...]:
    """Read the table of alone × given all the others."""
    return tuple(_judge(one, tuple(o for o in seen if o.key != one.key)) for one in seen)


def _judge(one: Seen, others: tuple[Seen, ...]) -> Standing:
    verdict, because = _read(one, others)
    return Standing(
        structure=one.family,
        key=one.key,
        label=one.label,
        verdict=verdict,
        p_alone=one.p_alone,
        p_given=one.p_given,
        given=one.given,
        because=because,
        p_method=one.p_method,
        matters=one.matters,
        worst=one.worst,
        worst_term=one.worst_term,
        widens=one.widens,
    )


def _read(one: Seen, others: tuple[Seen, ...]) -> tuple[Verdict, str]:
    alone, held = one.alone, one.held
    if one.later:
        return "present", f"Rows {LATER_LAGS}: over lags {one.later} its residuals are correlated."
    if alone is None and held is None:
        return _quiet(one, "No test of its own was made")
    if alone is None:
        if held:
            return "present", "It shows when the other structures are fitted; no test of its own was made."
        return _quiet(one, "It does not show when the other structures are fitted")
    if held is None:
        return (
            ("present", "Its own test shows it.") if alone else _quiet(one, "Its own test does not show it")
        )
    if alone and held:
        return "present", "It shows by its own test and still when the other structures are fitted."
    if alone:
        return _lost(one, others)
    if held:
        if one.p_given * (1 + len(others)) < MASKED:
            return "present", "Its own test misses it, but the joint fit shows it clearly: others masked it."
        return "unclear", "Only the joint fit shows it; its own test does not."
    return _quiet(one, "Neither its own test nor the joint fit shows it")


def _lost(one: Seen, others: tuple[Seen, ...]) -> tuple[Verdict, str]:
    """Seen alone, gone when the others are fitted."""
    takers = [o.label for o in others if o.held]
    if takers:
        names = _and(takers)
        verb = "may be" if one.widens else "is"
        return _quiet(one, f"Its own test shows it, but its signal {verb} explained by {names}")
    rivals = [o.label for o in others if o.alone]
    if rivals:
        return (
            "present",
            f"It and {_and(rivals)} show alone and neither shows given the other: something hangs together, "
            "and these data cannot say which. Use a remedy that covers both.",
        )
    return "present", "Its own test shows it; the joint fit has too little to tell it from the others."


def _quiet(one: Seen, reason: str) -> tuple[Verdict, str]:
    if one.widens:
        return (
            "unclear",
            f"{reason}; its interval reaches a standard error of {one.worst_term} {_times(one.worst)} "
            "that without it.",
        )
    return "not detected", f"{reason}."


def _times(factor: float) -> str:
    if not factor <= MOST:  # near a random walk the factor says no more than that it is large
        return f"more than {MOST:g} times"
    return f"{factor:.2g} times"


def _and(names: list[str]) -> str:
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " and " + names[-1]


# ---- from findings and fits ------------------------------------------------------------------------


def examine(
    fits: Fits, evidence: Evidence, found: Parts | None, region: Region | None, focus: tuple[str, ...]
) -> tuple[Standing, ...]:
    """Standing of every component, and of every declared structure that could not be estimated."""
    material = fits.run.settings.material
    seen: list[Seen] = []
    node = fits.full_node if found is not None else frozenset()
    for key, component in fits.components.items():
        if key not in node:
            continue
        finding = own_finding(evidence, key, component.family)
        p = finding.p if finding is not None else float("nan")
        adjusted = p if finding is None or finding.p_adjusted is None else finding.p_adjusted
        if key == SITE:  # one more structure than the primary tests have adjusted for
            adjusted = min(1.0, p * (1 + adjusted_tests(evidence)))
        later = later_lags(evidence) if key == "serial" and not adjusted < LEVEL else None
        if later is not None:
            p, adjusted = later.p, min(1.0, later.p * (1 + adjusted_tests(evidence)))
        others = tuple(k for k in node if k != key)
        p_given, method = restricted_lr(fits, key) if others else (float("nan"), "")
        reach = Reach()
        if found is not None and region is not None:
            reach = consequence(found, region, key, focus, material)
        if not fits.design.known:
            unclear = finding is not None and finding.verdict == "unclear"
            reach = Reach(unclear, unclear)
        seen.append(
            Seen(
                key,
                component.family,
                component.label,
                p,
                adjusted,
                p_given,
                tuple(fits.components[k].label for k in fits.components if k in others),
                method,
                reach.matters,
                reach.worst,
                reach.term,
                reach.widens,
                later.about_words if later is not None else "",
            )
        )
    levels = {f"group:{level}" for level in fits.design.assignment.levels}
    judged = tuple(replace(s, fixed=s.key in levels) for s in judge(tuple(seen)))
    return judged + _unfitted(fits, evidence, {s.key for s in judged})


def _unfitted(fits: Fits, evidence: Evidence, done: set[str]) -> tuple[Standing, ...]:
    """Declared structures without a fitted component: judged by their test alone."""
    design = fits.design
    groups = design.group.levels if design.group is not None else ()
    declared: list[tuple[str, Family, str]] = [(f"group:{g.key}", "group", g.key) for g in groups]
    if design.serial is not None:
        declared.append(("serial", "serial", design.serial.name))
    if design.spatial is not None:
        declared.append(("spatial", "spatial", "place"))
    fixed = {f"group:{level}" for level in design.assignment.levels}
    out = []
    for key, family, label in declared:
        if key in done:
            continue
        finding = own_finding(evidence, key, family)
        label = fits.components[key].label if key in fits.components else label
        refusal = fits.refused.get(key) or fits.left_out.get(key)
        reason = f" Its size is not estimated: {refusal.reason}." if refusal is not None else ""
        out.append(_unsized(key, family, label, finding, _beside(evidence, finding), reason, key in fixed))
    return tuple(out)


def _unsized(
    key: str,
    family: Family,
    label: str,
    finding: Finding | None,
    beside: Finding | None,
    reason: str,
    fixed: bool,
) -> Standing:
    """A structure without a fitted component. beside : its own test with groups taken into account."""
    verdict: Verdict = "not applicable"
    because, matters, widens = "No test could be made.", False, False
    if finding is not None:
        p = finding.p if finding.p_adjusted is None else finding.p_adjusted
        verdict, matters = finding.verdict, _unsized_matters(finding)
        widens = matters
        because = "Its own test shows it." if p < LEVEL else "Its own test does not show it."
        if beside is not None and p < LEVEL:
            names = _and([name.removeprefix("group:") for name in beside.given])
            if beside.p < LEVEL:
                because = f"Its own test shows it, and still with {names} taken into account."
            else:
                verdict = beside.verdict
                matters = widens = verdict == "unclear"
                verb = "may be" if widens else "is"
                because = f"Its own test shows it, but its signal {verb} explained by {names}."
    return Standing(
        family,
        key,
        label,
        verdict,
        finding.p if finding is not None else float("nan"),
        beside.p if beside is not None else float("nan"),
        () if beside is None else tuple(name.removeprefix("group:") for name in beside.given),
        because + reason,
        "" if beside is None else beside.p_method,
        matters=matters,
        fixed=fixed,
        widens=widens,
    )


def _beside(evidence: Evidence, finding: Finding | None) -> Finding | None:
    """The same test read with other structures taken into account; None where it was not."""
    if finding is None:
        return None
    same = [f for f in evidence if f.test == finding.test and f.about == finding.about and f.given]
    return next((f for f in same if np.isfinite(f.p)), None)


def _unsized_matters(finding: Finding | None) -> bool:
    """A structure without a size matters when its test shows it, or when its own interval says it could.

    Only an intraclass correlation has an exact interval with few units; a silent test of a short
    series or of few sites says little either way, and a caution says that.
    """
    if finding is None:
        return False
    p = finding.p if finding.p_adjusted is None else finding.p_adjusted
    return p < LEVEL or (finding.structure == "group" and finding.verdict == "unclear")


# ---- the adequate set ------------------------------------------------------------------------------


def adequate(fits: Fits, standing: tuple[Standing, ...]) -> tuple[frozenset[str], tuple[str, ...]]:
    """The full set without what is neither present, plausible nor fixed by the design; and the path."""
    node = fits.full_node
    history = [f"every structure: {_names(fits, node)}; 2ℓ_R = {2 * float(fits[node].loglik[0]):.2f}"]
    idle = [
        s
        for s in standing
        if s.key in node
        and not s.fixed
        and (s.verdict == "not detected" or (s.verdict == "unclear" and not s.widens))
    ]
    idle.sort(key=lambda s: -(s.p_given if np.isfinite(s.p_given) else s.p_alone))
    for s in idle:
        try:
            smaller = fits[node - {s.key}]
        except NotSupported as error:
            history.append(f"{s.label} kept: the model without it cannot be fitted ({error})")
            continue
        drop = 2 * float(fits[node].loglik[0] - smaller.loglik[0])
        node = node - {s.key}
        history.append(
            f"left out {s.label}: {s.verdict}, and it could not move a focus interval beyond the band "
            f"({s.worst:.2f} times at the most); 2ℓ_R falls by {max(drop, 0.0):.2f}"
        )
    return node, tuple(history)


def _names(fits: Fits, node: frozenset[str]) -> str:
    return ", ".join(c.label for key, c in fits.components.items() if key in node) or "none"
