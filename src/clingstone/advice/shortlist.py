"""Which remedies these data carry, and their refits."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from clingstone.advice.entries import REPAIRED, Choice
from clingstone.advice.expressions import Expression, fact
from clingstone.advice.facts import Facts
from clingstone.advice.pick import Reached, preferred, rank
from clingstone.advice.rules import Rule
from clingstone.advice.structures import needed, reach
from clingstone.covariance.components import SITE
from clingstone.covariance.fits import Fits
from clingstone.design.design import Design
from clingstone.display import listed
from clingstone.needs import NotSupported
from clingstone.remedies import REMEDIES, remedy
from clingstone.remedies.gls import Gls
from clingstone.remedies.refit import at as set_at
from clingstone.remedies.refit import refit as run_remedy
from clingstone.remedies.remedy import Refit, Remedy

LEVELS = 4  # levels at which one of the plain remedies is refitted at the most
PLAIN = ("ordinary", "heteroscedasticity-robust", "cluster-robust", "mixed-intercept", "ar1", "hac", "joint")
# Second opinions and other questions are refitted at the level of the correction alone, and where these
# facts of the design make them worth reading.
WORTH: dict[str, Expression] = {
    "group-means": fact("focus at group level"),
    "group-t": ~fact("focus at group level"),
    "fixed-effects": ~fact("focus at group level"),
    "within-between": ~fact("focus at group level"),
}


@dataclass(frozen=True)
class Shortlist:
    """Candidates to refit, the ordinary fit first, and what these data cannot carry.

    reached : keys of the structures that each candidate covers. twins : an id that would give the
    same fit as another one here → the one that is kept. inner : the remedy behind the repaired mean,
    and the rule that named it.
    """

    candidates: tuple[Choice, ...]
    refused: tuple[tuple[str, str, str], ...]
    facts: Facts
    reached: Reached = field(default_factory=dict)
    twins: Mapping[str, str] = field(default_factory=dict)
    inner: tuple[Choice, Rule | None] | None = None

    def refit(self, fits: Fits) -> tuple[Refit, ...]:
        """Every candidate refitted on the first column of y, in the order of the shortlist."""
        out = []
        for choice in self.candidates:
            try:
                if choice.remedy == REPAIRED and self.inner is not None:
                    out.append(_repaired(self.facts, self.inner[0], fits))
                elif choice.remedy != REPAIRED:
                    out.append(run_remedy(remedy(choice.remedy), choice.at, fits))
            except NotSupported:
                continue  # settle() says of a candidate without a refit that it could not be fitted
        return tuple(out)


# ---- before the refits -------------------------------------------------------------------------


def shortlist_for(facts: Facts, fits: Fits) -> Shortlist:
    """Every registered remedy that the declared structures and the data carry.

    Candidates do not depend on the tests: the ordinary fit and the correction that the design implies
    are always among them. Of two that are the same fit, only one is kept.
    """
    design = fits.design
    made: list[tuple[Choice, Remedy]] = []
    refused: list[tuple[str, str, str]] = []
    for one in REMEDIES:
        if not one.needs.parts <= _declared(design):
            continue  # nothing to refuse: the structure was not declared
        if one.id == "joint" and len(fits.components) + len(fits.refused) < 2:
            continue  # one structure alone needs no joint model
        refusal = one.needs.check(design)
        if refusal is not None:
            refused.append((one.id, refusal.reason, refusal.hint))
            continue
        if one.id in WORTH and not bool(WORTH[one.id].read(facts)):
            continue
        for level in _levels(one, facts, design):
            try:
                ready = _prepared(one, level, fits, facts)
            except NotSupported as error:
                refused.append((one.id, str(error), error.hint))
                continue
            made.append((Choice(one.id, level, _purpose(ready, level, fits)), ready))
    kept, twins = _without_twins(made, fits)
    candidates = [choice for choice, _ in kept]
    inner = _inner(facts)
    if inner is not None and facts.missing is not None:
        words = f"the same with {facts.missing.what} in the mean"
        candidates.append(Choice(REPAIRED, facts.missing.about, words))
    candidates.sort(key=lambda c: c.remedy != "ordinary")
    reached = {(choice.remedy, choice.at): reach(ready, fits) for choice, ready in kept}
    return Shortlist(tuple(candidates), tuple(dict.fromkeys(refused)), facts, reached, twins, inner)


def _levels(one: Remedy, facts: Facts, design: Design) -> tuple[str, ...]:
    """Where a remedy is refitted: the plain ones at every level, the others at one."""
    abouts = one.abouts(design)
    if one.id in PLAIN:
        return abouts[:LEVELS]
    level = facts.word("group level")
    return (level,) if level in abouts else abouts[:1]


def _prepared(one: Remedy, level: str, fits: Fits, facts: Facts) -> Remedy:
    """The remedy set to a level, once it is known that these data carry it for some focus row.

    Raises NotSupported(reason, hint).
    """
    ready = set_at(one, level, fits)
    lost = ready.prepare(fits.design, ready.working(fits)).unusable
    if facts.focus and set(facts.focus) <= set(lost):
        refusal = lost[facts.focus[0]]
        raise NotSupported(refusal.reason, refusal.hint)
    return ready


def _declared(design: Design) -> frozenset[str]:
    parts = {"group": design.group, "serial": design.serial, "spatial": design.spatial}
    return frozenset(name for name, part in parts.items() if part is not None)


def _purpose(one: Remedy, level: str, fits: Fits) -> str:
    if one.id == "ordinary":
        return "the ordinary fit, for comparison"
    declared = _declared(fits.design)
    found = sorted(one.covering(fits) & declared)
    if not found and SITE in reach(one, fits):
        return "covers what rows of one place share"
    if not found:
        return "for rows of unequal spread"
    where = f" at the level of {level}" if level else ""
    return f"covers {listed(found)} dependence{where}"


def _without_twins(
    made: list[tuple[Choice, Remedy]], fits: Fits
) -> tuple[list[tuple[Choice, Remedy]], dict[str, str]]:
    """Of the error models of the same structures one: that whose name says what it covers."""
    models: dict[frozenset[str], tuple[Choice, Gls]] = {}
    twins: dict[str, str] = {}
    lost: set[Choice] = set()
    for choice, one in made:
        if not isinstance(one, Gls):
            continue
        node = one.node(fits)
        if node not in models:
            models[node] = (choice, one)
            continue
        earlier, model = models[node]
        if model.covers == model.covering(fits):
            lost.add(choice)
            twins[choice.remedy] = earlier.remedy
        else:
            lost.add(earlier)
            twins[earlier.remedy] = choice.remedy
            models[node] = (choice, one)
    return [pair for pair in made if pair[0] not in lost], twins


# ---- the repaired mean ---------------------------------------------------------------------------


def _inner(facts: Facts) -> tuple[Choice, Rule | None] | None:
    """The remedy for what is left once the part is in the mean: by the same rules, read again there."""
    missing, after = facts.missing, facts.after
    if missing is None or missing.again is None or after is None:
        return None
    again, need = missing.again, needed(after.ledger)
    for rule, what, level in preferred(after):
        if _carries(remedy(what), level, again, after):
            return Choice(what, level), rule
    if not need:
        return Choice("ordinary"), None
    for one in sorted(REMEDIES, key=lambda r: rank(r.id)):
        if one.needs.check(again.design) is not None or one.estimand != "pooled":
            continue
        for level in _levels(one, after, again.design):
            if _carries(one, level, again, after) and need <= reach(set_at(one, level, again), again):
                return Choice(one.id, level), None
    return Choice("ordinary"), None


def _carries(one: Remedy, level: str, fits: Fits, facts: Facts) -> bool:
    """These data carry it, for every focus row."""
    if one.needs.check(fits.design) is not None:
        return False
    try:
        ready = set_at(one, level, fits)
        unusable = ready.prepare(fits.design, ready.working(fits)).unusable
    except NotSupported:
        return False
    return not set(unusable) & set(facts.focus)


def _repaired(facts: Facts, inner: Choice, fits: Fits) -> Refit:
    """The inner remedy with the missing part of the mean put in. Raises NotSupported."""
    missing = facts.missing
    if missing is None or missing.again is None:
        raise NotSupported("no part of the mean seems to be missing")
    found = run_remedy(remedy(inner.remedy), inner.at, missing.again)
    naive = {row.term: row.se for row in run_remedy(remedy("ordinary"), "", fits).intervals}
    rows = tuple(
        replace(row, remedy=REPAIRED, se_ratio=row.se / naive.get(row.term, np.nan))
        for row in found.intervals
    )
    return replace(
        found,
        remedy=REPAIRED,
        name=f"{found.name}, with {missing.what.rstrip(',')}",
        at=missing.about,
        estimand="mean-repaired",
        intervals=rows,
        terms=tuple(replace(row, remedy=REPAIRED) for row in found.terms),
    )
