"""Which refit: the rules in their order, or a rehearsal, or else the simplest that covers."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import replace

import numpy as np

from clingstone.advice.entries import REPAIRED, Scores
from clingstone.advice.facts import Facts
from clingstone.advice.rules import PREFER, Rule
from clingstone.advice.structures import families, needed
from clingstone.display import percent
from clingstone.remedies.remedy import Interval, Refit

# Without a rule that names one, and among equals in a rehearsal: the simplest first.
ORDER = (
    "ordinary",
    "heteroscedasticity-robust",
    "mixed-intercept",
    "cluster-robust",
    "ar1",
    "hac",
    "spatial-gls",
    "joint",
    "cluster-jackknife",
    "wild-cluster-bootstrap",
    "multiway-cluster",
    "mixed-slope",
    "mixed-robust",
    "unstructured",
    "car1",
    "arma",
    "panel-hac",
    "spatial-error",
    "spatial-hac",
    "spatial-components",
    "region-cluster",
    "randomisation",
    "group-means",
    "group-t",
    "within-between",
    "fixed-effects",
    REPAIRED,
)

# Second opinions stand beside the advised refit; they are advised where no other held in a rehearsal.
SECOND = ("cluster-jackknife", "wild-cluster-bootstrap", "multiway-cluster")

Reached = Mapping[tuple[str, str], frozenset[str]]  # (remedy, at) → keys of the structures it covers


def preferred(facts: Facts) -> Iterator[tuple[Rule, str, str]]:
    """The rules that hold, in order: (rule, remedy id, level or "")."""
    for rule in PREFER:
        if bool(rule.when.read(facts)):
            yield rule, rule.then.what, facts.word(rule.then.at) if rule.then.at else ""


def pick(
    facts: Facts,
    refits: tuple[Refit, ...],
    scores: Scores | None,
    reached: Reached,
    twins: Mapping[str, str],
) -> tuple[Refit | None, Rule | None]:
    """The advised refit and the rule that named it (None when a rehearsal or the fallback did)."""
    need, shown = needed(facts.ledger), needed(facts.ledger, shown=True)
    usable = [r for r in refits if r.remedy != REPAIRED and serves(r, facts)]
    found, rule = _by_rule(facts, usable, twins)
    if scores is not None and not (rule is not None and rule.then.firm and _stands(found, scores)):
        same_question = [r for r in usable if r.estimand == "pooled" and need <= covers(r, facts, reached)]
        first = [r for r in same_question if r.remedy not in SECOND]
        best = _rehearsed(first, scores) or _rehearsed(same_question, scores)
        if best is not None:
            return best, _gave_way(rule, found, scores)
    if found is not None:
        return found, rule
    usable = [r for r in usable if r.estimand == "pooled"]  # only a rule may change the question
    usable.sort(key=lambda r: rank(r.remedy))
    for wanted in (need, shown):
        for fit in usable:
            if wanted and wanted <= covers(fit, facts, reached):
                return fit, None
    for fit in usable:
        if need and families(facts.ledger, need) <= set(fit.covers):
            return fit, None
    return None, None


CLEARLY = 2.0  # Monte-Carlo errors below the floor at which a rehearsal speaks against a firm rule


def _stands(found: Refit | None, scores: Scores) -> bool:
    """Whether the remedy of a firm rule did not fall clearly short in the rehearsal."""
    row = None if found is None else scores.get(found.remedy, found.at)
    return row is None or row.coverage >= scores.floor(row) - CLEARLY * row.mcse


def _gave_way(rule: Rule | None, found: Refit | None, scores: Scores) -> Rule | None:
    """Why the remedy of a firm rule is not the advised one; None where no firm rule spoke."""
    row = None if found is None else scores.get(found.remedy, found.at)
    if rule is None or not rule.then.firm or found is None or row is None:
        return None
    because = (
        f"A rule would prefer {found.name}, but rehearsed on this design its intervals held the true value "
        f"in only {percent(row.coverage)} of replicates under one of the error models tried, and another "
        "kept its promise under all of them."
    )
    return replace(rule, id=f"{rule.id}: gave way", because=because, source="own")


def _by_rule(facts: Facts, usable: list[Refit], twins: Mapping[str, str]) -> tuple[Refit | None, Rule | None]:
    """The refit that the first rule names whose remedy could be fitted."""
    for rule, what, at in preferred(facts):
        name = twins.get(what, what)
        match = [r for r in usable if r.remedy == name and (at in ("", r.at) or name != what)]
        if match:
            return match[0], rule
    return None, None


def rank(remedy: str) -> int:
    return ORDER.index(remedy) if remedy in ORDER else len(ORDER)


def covers(fit: Refit, facts: Facts, reached: Reached) -> frozenset[str]:
    """Keys that a refit covers; by family where the shortlist does not know it better."""
    known = reached.get((fit.remedy, fit.at))
    if known is not None:
        return known
    return frozenset(s.key for s in facts.ledger.standing if s.structure in fit.covers)


def serves(fit: Refit, facts: Facts, *, every: bool = True) -> bool:
    """Every focus row (or at least one) has a finite interval, under its own name."""
    known = {
        row.term
        for row in fit.intervals
        if np.isfinite(row.low) and np.isfinite(row.high) and not row.status.startswith("unusable")
    }
    return all(t in known for t in facts.focus) if every else any(t in known for t in facts.focus)


def _rehearsed(fits: list[Refit], scores: Scores) -> Refit | None:
    """The narrowest adequate one; widths within 1 % are equal and the simpler wins."""
    good = [f for f in fits if scores.adequate(f.remedy, f.at)]
    if not good:
        return None

    def width(fit: Refit) -> float:
        row = scores.get(fit.remedy, fit.at)
        return row.width if row is not None else float("inf")

    least = min(map(width, good))
    near = [f for f in good if width(f) <= 1.01 * least]
    best = min(near, key=lambda f: rank(f.remedy))
    # Of refits with the same numbers the plainest name stands for all, rehearsed or not.
    return min((f for f in fits if same(f, best)), key=lambda f: rank(f.remedy))


SAME = 1e-3  # difference, in standard errors, below which two refits gave the same numbers


def same(one: Refit, other: Refit) -> bool:
    """The same rows with the same numbers."""
    pairs = {row.term: row for row in other.intervals}
    return len(pairs) == len(one.intervals) and all(_equal(row, pairs.get(row.term)) for row in one.intervals)


def _equal(one: Interval, other: Interval | None) -> bool:
    if other is None:
        return False
    pairs = ((one.estimate, other.estimate), (one.low, other.low), (one.high, other.high))
    return all(a == b or abs(a - b) <= SAME * one.se or (np.isnan(a) and np.isnan(b)) for a, b in pairs)
