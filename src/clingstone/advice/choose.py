"""From rules to advice: the last step, after every remedy that the data carry was refitted."""

from __future__ import annotations

import math

from clingstone.advice import headline as say
from clingstone.advice.entries import REPAIRED, Advice, Choice, Reason, Repair, Score, Scores, State
from clingstone.advice.facts import Facts
from clingstone.advice.pick import covers, pick, rank, same, serves
from clingstone.advice.refitted import advised_facts, compared, find, rehearsed_facts
from clingstone.advice.rules import CAVEATS, NO_REMEDY, NOTHING, STATES, Rule
from clingstone.advice.shortlist import Shortlist, shortlist_for
from clingstone.advice.structures import FAMILIES, covered, families, needed
from clingstone.remedies.gls import TOGETHER
from clingstone.remedies.remedy import Refit

__all__ = [
    "REPAIRED",
    "Advice",
    "Choice",
    "Reason",
    "Repair",
    "Score",
    "Scores",
    "Shortlist",
    "State",
    "settle",
    "shortlist_for",
]

SHOWN = 3  # rows of one refit that are named among what is refused; the rest are counted
MORE = "More groups, or more rows, in which it differs would be needed."
SLOPED = ("mixed-slope",)
APART = ("within-between", "fixed-effects")  # tell an effect within groups from one between them
MEAN = ("mean-first", "mean-then-dependence", "season-first", "mean-alone")


def settle(
    shortlist: Shortlist, facts: Facts, refits: tuple[Refit, ...], scores: Scores | None = None
) -> Advice:
    """Choose last: the state, then the remedy, then what to say beside it.

    Without ``scores`` the rule table decides; with them, the narrowest adequate remedy among those
    that cover what has to be covered and estimate the same thing. Where the mean comes first, what is
    left is judged, corrected and cautioned about with the mean repaired.
    """
    state_rule, here = _state_rule(facts)
    state = state_rule.then.what if state_rule is not None else ""
    chosen, rule = None, None
    if state == "mean first":
        chosen = find(refits, REPAIRED)
        rule = shortlist.inner[1] if shortlist.inner is not None else None
    elif not state:
        facts = here = compared(facts, refits)
        chosen, rule = pick(facts, refits, scores, shortlist.reached, shortlist.twins)
        if chosen is None:
            state_rule = NO_REMEDY if needed(facts.ledger) else NOTHING
    need = needed(here.ledger)
    known = {} if state == "mean first" else shortlist.reached
    inner = shortlist.inner[0].remedy if shortlist.inner is not None else ""
    here = here.plus(advised_facts(here, refits, chosen, need, known, inner))
    here = here.plus(rehearsed_facts(scores, chosen))
    beside = _beside(state_rule, here)
    decided = _state(state_rule, beside)
    advised = find(refits, "ordinary") if decided == "nothing found" else chosen
    because = [r for r in (state_rule, rule) if r is not None and r.id != "nothing-to-cover"]
    return _written(shortlist, facts, here, refits, decided, state_rule, because, beside, advised)


def _written(
    shortlist: Shortlist,
    facts: Facts,
    here: Facts,
    refits: tuple[Refit, ...],
    decided: State,
    state_rule: Rule | None,
    because: list[Rule],
    beside: list[Rule],
    advised: Refit | None,
) -> Advice:
    """The advice as plain words; ``here`` are the facts with the mean repaired where it comes first."""
    present, covering = _families(here, "present"), families(here.ledger, needed(here.ledger))
    return Advice(
        state=decided,
        headline=_headline(decided, state_rule, here, refits, advised),
        structures=present,
        levels=_levels(here, advised, shortlist),
        protected=covering - present if advised is not None else frozenset(),
        remedy=advised.remedy if advised is not None else "",
        at=advised.at if advised is not None else "",
        mean_in_doubt=facts.says("mean in doubt"),
        because=(*_design_reason(facts), *(_reason(r, here) for r in because)),
        cautions=tuple(_reason(r, here) for r in beside),
        alternatives=() if decided == "not correctable" else _alternatives(shortlist, refits, advised),
        refused=_refused(shortlist, refits, state_rule, here),
        repair=_repair(facts, shortlist),
    )


def _state_rule(facts: Facts) -> tuple[Rule | None, Facts]:
    """The first state that holds, and the facts that speak: with the mean repaired where it comes first.

    When nothing can correct what is left after the repair, that is the state.
    """
    rule = _first(STATES, facts)
    if rule is None or rule.id not in MEAN or facts.after is None:
        return rule, facts
    after = _first(tuple(r for r in STATES if r.id not in MEAN), facts.after)
    if after is not None and after.then.what == "not correctable":
        return after, facts.after
    return rule, facts.after


def _first(rules: tuple[Rule, ...], facts: Facts) -> Rule | None:
    return next((r for r in rules if bool(r.when.read(facts))), None)


def _families(facts: Facts, what: str) -> frozenset[str]:
    return frozenset(f for f in FAMILIES if facts.says(f"{f} {what}"))


ORDERED = {"caveat": 0, "caution": 1}
STRENGTHS = ("strong", "moderate", "weak", "convention")
AS_WELL = "mean-as-well"  # what "mean first" says already
ALWAYS = (AS_WELL, "mean-in-doubt")  # said also where nothing can be corrected
LAST = "chosen-after-looking"  # true of every choice, so it is read last


def _beside(state_rule: Rule | None, facts: Facts) -> list[Rule]:
    """What lowers the state first, then what warns, the better founded before the others."""
    beside = [r for r in CAVEATS if bool(r.when.read(facts))]
    if state_rule is not None and state_rule.then.what == "mean first":
        beside = [r for r in beside if r.id != AS_WELL]
    elif state_rule is not None:
        beside = [r for r in beside if (r.then.kind == "caution" or r.id in ALWAYS) and r.id != LAST]
    return sorted(beside, key=lambda r: (r.id == LAST, ORDERED[r.then.kind], STRENGTHS.index(r.strength)))


def _state(rule: Rule | None, beside: list[Rule]) -> State:
    if rule is not None:
        return rule.then.what  # type: ignore[return-value]
    return "supported with caveat" if any(r.then.kind == "caveat" for r in beside) else "supported"


def _repair(facts: Facts, shortlist: Shortlist) -> Repair | None:
    missing = facts.missing
    if missing is None or missing.after is None or shortlist.inner is None:
        return None
    inner, after = shortlist.inner[0], missing.after
    return Repair(
        missing.what,
        missing.left,
        missing.goes,
        missing.stays,
        missing.appears,
        inner.remedy,
        inner.at,
        after.standing,
        after.shares,
        after.parameters,
    )


# ---- words ---------------------------------------------------------------------------------------


def _reason(rule: Rule, facts: Facts) -> Reason:
    return Reason(
        say.filled(rule.because, facts),
        rule.id,
        say.read_by(rule.because, rule.when.names, facts),
        rule.source,
        rule.strength,
    )


def _design_reason(facts: Facts) -> tuple[Reason, ...]:
    """What the design says stands first: it outranks the tests."""
    if not facts.says("assigned or sampled by group"):
        return ()
    sentence = f"The design fixes the level: {facts.text('design facts')}."
    return (
        Reason(
            sentence, "design-first", (("design facts", facts.text("design facts")),), "abadie-2023", "strong"
        ),
    )


def _headline(
    state: State, rule: Rule | None, facts: Facts, refits: tuple[Refit, ...], advised: Refit | None
) -> str:
    ledger = facts.ledger
    if state == "nothing found":
        return say.nothing(ledger)
    moved = say.consequence(say.widths(facts, refits, advised), facts.material)
    if state == "mean first":
        what = facts.text("missing part of the mean")
        left = facts.text("dependence left")
        return f"A {what} seems to be missing from the model: with it, {left}. {moved}".strip()
    rows, over = (
        float(facts[name].value) if name in facts else default
        for name, default in (("rows in the longest series", math.inf), ("range over extent", 0.0))
    )
    about = say.dependence(ledger, rows, over) or say.unequal(facts)
    if state == "not correctable" and rule is not None:
        why = "These data cannot carry a correction."  # the reason stands first among those below
        return " ".join(part for part in (about, why, *say.doubts(facts)) if part)
    return " ".join(part for part in (about, moved, *say.doubts(facts)) if part)


def _levels(facts: Facts, advised: Refit | None, shortlist: Shortlist) -> tuple[str, ...]:
    """Where the advised remedy works: its own level, or those of every structure that it covers."""
    if advised is None or advised.remedy == "ordinary":
        return ()
    at = advised.at
    if advised.remedy == REPAIRED:
        at = shortlist.inner[0].at if shortlist.inner is not None else ""
    if at:
        return tuple(at.split(TOGETHER))
    keys = [s for s in facts.ledger.standing if covered(s) and s.structure in advised.covers]
    names = {"serial": facts.word("series level") or "series", "spatial": "site"}
    return tuple(dict.fromkeys(names.get(s.key, s.key.removeprefix("group:")) for s in keys))


def _alternatives(
    shortlist: Shortlist, refits: tuple[Refit, ...], advised: Refit | None
) -> tuple[Choice, ...]:
    """Refits that cover what has to be covered; with nothing to cover, every correction by the design.

    The repaired mean first, where a part seems to be missing; then the model of slopes, where they differ
    between groups; then, where groups differ otherwise than their rows do, the refits that tell the two
    apart; then the simpler ones first. Of refits with the same numbers one stands for all.
    """
    whole, need = shortlist.facts, needed(shortlist.facts.ledger)
    made = {(r.remedy, r.at): r for r in refits}
    kept: list[Refit] = [advised] if advised is not None else []
    out = []
    mixed = whole.says("between differs from within") or whole.says("predictors differ together")
    slopes = SLOPED if whole.says("slopes differ") else ()
    order = (REPAIRED, *slopes, *(APART if mixed else ()))
    ranked = sorted(
        shortlist.candidates,
        key=lambda c: (order.index(c.remedy) if c.remedy in order else len(order), rank(c.remedy)),
    )
    for choice in ranked:
        fit = made.get((choice.remedy, choice.at))
        if fit is None or fit is advised or choice.remedy == "ordinary":
            continue
        enough = bool(need or fit.covers) and need <= covers(fit, whole, shortlist.reached)
        if choice.remedy not in order and not (enough and serves(fit, whole, every=False)):
            continue
        if any(same(fit, other) for other in kept):
            continue
        kept.append(fit)
        out.append(choice)
    return tuple(out)


def _refused(
    shortlist: Shortlist, refits: tuple[Refit, ...], rule: Rule | None, facts: Facts
) -> tuple[tuple[str, str, str], ...]:
    made = {r.remedy for r in refits}
    lost = [
        (c.remedy, "it could not be fitted to these data", "")
        for c in shortlist.candidates
        if c.remedy not in made
    ]
    lost += [(f.remedy, reason, MORE) for f in refits for reason in _unusable(f, facts.focus)]
    first = []
    if rule is not None and rule.then.needed:
        first = [("every correction", say.filled(rule.because, facts), f"Needed: {rule.then.needed}.")]
    return tuple(dict.fromkeys((*first, *shortlist.refused, *lost)))


def _unusable(fit: Refit, focus: tuple[str, ...]) -> list[str]:
    """Rows in focus that a refit cannot serve, each with the reason, a long list cut short."""
    found = [
        f"{row.term}: {row.status.removeprefix('unusable: ')}"
        for row in fit.intervals
        if row.term in focus and row.status.startswith("unusable")
    ]
    rest = len(found) - SHOWN
    if rest > 1:
        found = [*found[: SHOWN - 1], f"{found[SHOWN - 1]}; {rest} more rows likewise"]
    return found
