"""Which remedies these data carry, and their refits."""

from __future__ import annotations

from dataclasses import dataclass, replace

from clingstone.advice.entries import REPAIRED, Choice
from clingstone.advice.facts import Facts
from clingstone.covariance.fits import Fits
from clingstone.design.design import Design
from clingstone.display import listed
from clingstone.needs import NotSupported
from clingstone.remedies import REMEDIES, remedy
from clingstone.remedies.refit import at as set_at
from clingstone.remedies.refit import refit as run_remedy
from clingstone.remedies.remedy import Refit, Remedy

LEVELS = 4  # levels at which one remedy is refitted at the most


@dataclass(frozen=True)
class Shortlist:
    """Candidates to refit, the ordinary fit first, and what these data cannot carry."""

    candidates: tuple[Choice, ...]
    refused: tuple[tuple[str, str, str], ...]
    facts: Facts

    def refit(self, fits: Fits) -> tuple[Refit, ...]:
        """Every candidate refitted on the first column of y, in the order of the shortlist."""
        out = []
        for choice in self.candidates:
            try:
                if choice.remedy == REPAIRED:
                    out.append(repaired(self.facts, fits))
                else:
                    out.append(run_remedy(remedy(choice.remedy), choice.at, fits))
            except NotSupported:
                continue  # settle() says of a candidate without a refit that it could not be fitted
        return tuple(out)


# ---- before the refits -------------------------------------------------------------------------


def shortlist_for(facts: Facts, fits: Fits) -> Shortlist:
    """Every registered remedy that the declared structures and the data carry.

    Candidates do not depend on the tests: the ordinary fit and the correction that the design implies
    are always among them.
    """
    design = fits.design
    candidates: list[Choice] = []
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
        for level in one.abouts(design)[:LEVELS]:
            try:
                ready = set_at(one, level, fits)
                ready.prepare(design, ready.working(fits))
            except NotSupported as error:
                refused.append((one.id, str(error), error.hint))
                continue
            candidates.append(Choice(one.id, level, _purpose(one, level)))
    if facts.missing is not None and facts.missing.wider is not None:
        candidates.append(
            Choice(REPAIRED, facts.missing.about, f"the same with {facts.missing.what} in the mean")
        )
    candidates.sort(key=lambda c: c.remedy != "ordinary")
    return Shortlist(tuple(candidates), tuple(dict.fromkeys(refused)), facts)


def _declared(design: Design) -> frozenset[str]:
    parts = {"group": design.group, "serial": design.serial, "spatial": design.spatial}
    return frozenset(name for name, part in parts.items() if part is not None)


def _purpose(one: Remedy, level: str) -> str:
    if one.id == "ordinary":
        return "the ordinary fit, for comparison"
    if not one.covers:
        return "for rows of unequal spread"
    where = f" at the level of {level}" if level else ""
    return f"covers {listed(sorted(one.covers))} dependence{where}"


def repaired(facts: Facts, fits: Fits) -> Refit:
    """The ordinary fit with the missing part of the mean put in. Raises NotSupported."""
    missing = facts.missing
    if missing is None or missing.wider is None:
        raise NotSupported("no part of the mean seems to be missing")
    found = run_remedy(remedy("ordinary"), "", fits.onto(missing.wider))
    rows = tuple(replace(row, remedy=REPAIRED) for row in found.intervals)
    return replace(
        found,
        remedy=REPAIRED,
        name=f"ordinary, with {missing.what}",
        at=missing.about,
        estimand="mean-repaired",
        intervals=rows,
        terms=tuple(replace(row, remedy=REPAIRED) for row in found.terms),
    )
