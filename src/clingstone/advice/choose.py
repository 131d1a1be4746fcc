"""From rules to advice: the last step, after every remedy that the data carry was refitted."""

from __future__ import annotations

import numpy as np

from clingstone.advice import headline as say
from clingstone.advice.entries import REPAIRED, Advice, Choice, Reason, Score, Scores, State
from clingstone.advice.facts import FAMILIES, Facts, covered
from clingstone.advice.named import Fact, named, words, yes
from clingstone.advice.rules import CAVEATS, NO_REMEDY, PREFER, STATES, Rule
from clingstone.advice.shortlist import Shortlist, shortlist_for
from clingstone.display import listed
from clingstone.remedies.gls import TOGETHER
from clingstone.remedies.remedy import Refit

__all__ = [
    "REPAIRED",
    "Advice",
    "Choice",
    "Reason",
    "Score",
    "Scores",
    "Shortlist",
    "State",
    "settle",
    "shortlist_for",
]

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
    REPAIRED,
)


def settle(
    shortlist: Shortlist, facts: Facts, refits: tuple[Refit, ...], scores: Scores | None = None
) -> Advice:
    """Choose last: the state, then the remedy, then what to say beside it.

    Without ``scores`` the rule table decides; with them, the narrowest adequate remedy among those
    that cover what has to be covered and estimate the same thing.
    """
    state_rule = _first(STATES, facts)
    chosen, rule = (None, None) if _stops(state_rule) else _pick(facts, refits, scores)
    need = _families(facts, "to cover")
    if state_rule is None and chosen is None:
        state_rule = NO_REMEDY
    facts = facts.plus(_advised_facts(facts, refits, chosen, need))
    beside = [r for r in CAVEATS if bool(r.when.read(facts))]
    if state_rule is not None:
        beside = [r for r in beside if r.then.kind == "caution" and r.id != "chosen-after-looking"]
    state = _state(state_rule, beside)
    advised = _advised(state, refits, chosen)
    because = [r for r in (state_rule, rule) if r is not None and r.id != "nothing-to-cover"]
    return Advice(
        state=state,
        headline=_headline(state, state_rule, facts, refits, advised),
        structures=_families(facts, "present"),
        levels=_levels(facts, advised),
        protected=need - _families(facts, "present") if advised is not None else frozenset(),
        remedy=advised.remedy if advised is not None else "",
        at=advised.at if advised is not None else "",
        mean_in_doubt=facts.says("mean in doubt"),
        because=(*_design_reason(facts), *(_reason(r, facts) for r in because)),
        cautions=tuple(_reason(r, facts) for r in beside),
        alternatives=() if state == "not correctable" else _alternatives(shortlist, refits, advised, need),
        refused=_refused(shortlist, refits, state_rule, facts),
    )


def _first(rules: tuple[Rule, ...], facts: Facts) -> Rule | None:
    return next((r for r in rules if bool(r.when.read(facts))), None)


def _stops(rule: Rule | None) -> bool:
    return rule is not None and rule.then.what in ("not correctable", "mean first", "nothing found")


def _families(facts: Facts, what: str) -> frozenset[str]:
    return frozenset(f for f in FAMILIES if facts.says(f"{f} {what}"))


def _pick(facts: Facts, refits: tuple[Refit, ...], scores: Scores | None) -> tuple[Refit | None, Rule | None]:
    """The advised refit and the rule that named it (None when a rehearsal or the fallback did)."""
    need, shown = _families(facts, "to cover"), _families(facts, "present")
    usable = [r for r in refits if r.remedy != REPAIRED and _serves(r, facts)]
    if scores is not None:
        found = _rehearsed([r for r in usable if need <= set(r.covers)], scores)
        if found is not None:
            return found, None
    for rule in PREFER:
        if not bool(rule.when.read(facts)):
            continue
        at = facts.word(rule.then.at) if rule.then.at else ""
        match = [r for r in usable if r.remedy == rule.then.what and at in ("", r.at)]
        if match:
            return match[0], rule
    usable.sort(key=lambda r: ORDER.index(r.remedy) if r.remedy in ORDER else len(ORDER))
    for wanted in (need, shown):
        for fit in usable:
            if wanted and wanted <= set(fit.covers):
                return fit, None
    return None, None


def _serves(fit: Refit, facts: Facts) -> bool:
    """Every focus row has a finite interval."""
    rows = [row for row in fit.intervals if row.term in facts.focus]
    return all(
        np.isfinite(row.low) and np.isfinite(row.high) and not row.status.startswith("unusable")
        for row in rows
    )


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
    return min(near, key=lambda f: ORDER.index(f.remedy) if f.remedy in ORDER else len(ORDER))


def _state(rule: Rule | None, beside: list[Rule]) -> State:
    if rule is not None:
        return rule.then.what  # type: ignore[return-value]
    return "supported with caveat" if any(r.then.kind == "caveat" for r in beside) else "supported"


def _advised(state: State, refits: tuple[Refit, ...], chosen: Refit | None) -> Refit | None:
    wanted = {"nothing found": "ordinary", "mean first": REPAIRED}.get(state)
    if wanted is None:
        return chosen
    return next((r for r in refits if r.remedy == wanted), None)


def _advised_facts(
    facts: Facts, refits: tuple[Refit, ...], chosen: Refit | None, need: frozenset[str]
) -> dict[str, Fact]:
    if chosen is None:
        return {}
    rows = [row for row in chosen.intervals if row.term in facts.focus]
    lost = sorted(need - set(chosen.covers))
    out = [
        yes("plausible structure not covered", bool(lost), f"not covered: {listed(lost) or 'nothing'}"),
        words("names not covered", f"{listed(lost)} dependence"),
        yes(
            "advised refit at its bound",
            chosen.boundary,
            "a parameter of the advised refit lies at its bound",
        ),
        yes(
            "advised refit did not converge",
            not chosen.converged,
            "the advised refit's search did not settle",
        ),
    ]
    if rows:
        out.append(named("lowest df of the advised refit", min(row.df for row in rows)))
    ordinary = next((r for r in refits if r.remedy == "ordinary"), None)
    if ordinary is not None:
        before = {row.term: row for row in ordinary.intervals}
        moved = [
            row.term
            for row in rows
            if row.term in before and abs(row.estimate - before[row.term].estimate) > row.se
        ]
        out.append(yes("coefficient moves", bool(moved), f"moves by more than its error: {listed(moved)}"))
        out.append(words("term that moves", listed(moved)))
    return {f.name: f for f in out}


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
    if state == "mean first":
        what = facts.text("missing part of the mean")
        return f"A {what} seems to be missing from the model: with it, {facts.text('dependence left')}."
    about = say.dependence(ledger)
    if state == "not correctable" and rule is not None:
        return f"{about} These data cannot carry a correction: {_lower(say.filled(rule.because, facts))}"
    return f"{about} {say.consequence(say.widths(facts, refits, advised), facts.material)}".strip()


def _lower(text: str) -> str:
    return text[0].lower() + text[1:]


def _levels(facts: Facts, advised: Refit | None) -> tuple[str, ...]:
    """Where the advised remedy works: its own level, or those of every structure that it covers."""
    if advised is None or advised.remedy in ("ordinary", REPAIRED):
        return ()
    if advised.at:
        return tuple(advised.at.split(TOGETHER))
    keys = [s for s in facts.ledger.standing if covered(s) and s.structure in advised.covers]
    names = {"serial": facts.word("series level") or "series", "spatial": "site"}
    return tuple(dict.fromkeys(names.get(s.key, s.key.removeprefix("group:")) for s in keys))


def _alternatives(
    shortlist: Shortlist, refits: tuple[Refit, ...], advised: Refit | None, need: frozenset[str]
) -> tuple[Choice, ...]:
    """Refits that cover what has to be covered; with nothing to cover, every correction by the design."""
    covers = {(r.remedy, r.at): set(r.covers) for r in refits}
    best = (advised.remedy, advised.at) if advised is not None else None
    return tuple(
        c
        for c in shortlist.candidates
        if (c.remedy, c.at) in covers
        and (c.remedy, c.at) != best
        and c.remedy != "ordinary"
        and (c.remedy == REPAIRED or ((need or covers[c.remedy, c.at]) and need <= covers[c.remedy, c.at]))
    )


def _refused(
    shortlist: Shortlist, refits: tuple[Refit, ...], rule: Rule | None, facts: Facts
) -> tuple[tuple[str, str, str], ...]:
    made = {r.remedy for r in refits}
    lost = [
        (c.remedy, "it could not be fitted to these data", "")
        for c in shortlist.candidates
        if c.remedy not in made
    ]
    first = []
    if rule is not None and rule.then.needed:
        first = [("every correction", say.filled(rule.because, facts), f"Needed: {rule.then.needed}.")]
    return tuple(dict.fromkeys((*first, *shortlist.refused, *lost)))
