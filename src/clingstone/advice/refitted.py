"""Facts that only the refits can tell: how they compare, and what is to be said of the advised one."""

from __future__ import annotations

from scipy import special

from clingstone.advice.entries import REPAIRED, Scores
from clingstone.advice.facts import Facts
from clingstone.advice.named import Fact, named, words, yes
from clingstone.advice.pick import SECOND, Reached, covers, same
from clingstone.advice.structures import subject
from clingstone.display import listed, percent
from clingstone.ledger.ledger import Ledger
from clingstone.remedies.remedy import Interval, Refit

ROBUST = "cluster-robust"
# The refits that a comparison is made from.
COMPARES = {
    "df of the robust refit": (ROBUST,),
    "mixed refit at its bound": (ROBUST, "mixed-intercept"),
    "robust over mixed standard error": (ROBUST, "mixed-intercept"),
    "slope model settled": (ROBUST, "mixed-slope"),
    "another order fits better": ("arma", "ar1"),
    "robust over ordered standard error": (ROBUST, "joint", "ar1", "car1"),
    "df of the robust refit over places": (ROBUST,),
    "df of the robust refit over whole series": (ROBUST, "joint", "ar1", "car1"),
}
CLEAR = 0.01  # level, over all focus rows, at which an estimate moves by more than chance
NOTHING = 1e-6  # a share that is estimated at zero
ANY_SPREAD = (  # let every row, group or time have its own variance
    "heteroscedasticity-robust",
    "cluster-robust",
    "cluster-jackknife",
    "wild-cluster-bootstrap",
    "multiway-cluster",
    "mixed-robust",
    "group-means",
    "group-t",
    "hac",
    "panel-hac",
    "spatial-hac",
    "region-cluster",
)
ORDERED = ("ar1", "car1", "arma", "joint")


def find(refits: tuple[Refit, ...], remedy: str, at: str = "") -> Refit | None:
    """The refit of a remedy, at a level where one is given."""
    return next((r for r in refits if r.remedy == remedy and at in ("", r.at)), None)


def focus_rows(fit: Refit, facts: Facts) -> list[Interval]:
    return [row for row in fit.intervals if row.term in facts.focus]


def compared(facts: Facts, refits: tuple[Refit, ...]) -> Facts:
    """The facts, and how the robust refit at the level of correction compares with the mixed one."""
    level = facts.word("group level")
    facts = facts.plus({f.name: f for f in (*_order(refits), *_against_order(facts, refits))})
    places = find(refits, ROBUST, facts.word("site level")) if facts.word("site level") else None
    if places is not None:
        over = named("df of the robust refit over places", _least_df(places, facts))
        facts = facts.plus({over.name: over})
    robust = find(refits, ROBUST, level) if level else None
    if robust is None:
        return facts
    out = [named("df of the robust refit", _least_df(robust, facts))]
    mixed = find(refits, "mixed-intercept", facts.word("mixed level"))
    if mixed is not None:
        out.append(yes("mixed refit at its bound", mixed.boundary, "a variance of the mixed refit is zero"))
        out += _ratio("robust over mixed standard error", robust, mixed, facts)
    slope = find(refits, "mixed-slope")
    settled = slope is not None and slope.converged and not slope.boundary
    out.append(yes("slope model settled", settled, "the model with slopes by group has an inner estimate"))
    return facts.plus({f.name: f for f in out})


def _against_order(facts: Facts, refits: tuple[Refit, ...]) -> list[Fact]:
    """The robust refit over groups, or over series without them, against a model of the order in time."""
    level = facts.word("group level") or facts.word("series level")
    robust = find(refits, ROBUST, level) if level else None
    model = next((r for name in ("joint", "ar1", "car1") if (r := find(refits, name)) is not None), None)
    if robust is None or model is None:
        return []
    return [
        *_ratio("robust over ordered standard error", robust, model, facts),
        named("df of the robust refit over whole series", _least_df(robust, facts)),
    ]


def _least_df(fit: Refit, facts: Facts) -> float:
    return min((row.df for row in focus_rows(fit, facts)), default=0.0)


def _ratio(name: str, robust: Refit, model: Refit, facts: Facts) -> list[Fact]:
    """The largest ratio of standard errors over the focus rows of both."""
    known = {row.term: row.se for row in focus_rows(model, facts) if row.se > 0}
    found = [row.se / known[row.term] for row in focus_rows(robust, facts) if row.term in known]
    return [named(name, max(found))] if found else []


def advised_facts(
    facts: Facts,
    refits: tuple[Refit, ...],
    chosen: Refit | None,
    need: frozenset[str],
    reached: Reached,
    inner: str = "",
) -> dict[str, Fact]:
    """What is to be said of the advised refit; nothing without one. inner : the remedy behind a repair."""
    if chosen is None:
        return {}
    missed = need - covers(chosen, facts, reached)
    lost = listed([subject(s) for s in facts.ledger.standing if s.key in missed])
    remedy = inner if chosen.remedy == REPAIRED else chosen.remedy
    bound, settled = chosen.boundary, chosen.converged
    zero = bound and _no_variance(facts, chosen, reached)
    out = [
        yes("plausible structure not covered", bool(lost), f"not covered: {lost or 'nothing'}"),
        words("names not covered", lost),
        yes("advised refit at its bound", bound, "a parameter of the advised refit lies at its bound"),
        yes("advised refit has no variance between groups", zero, "its variance between groups is zero"),
        yes(
            "advised refit models the order in time",
            remedy in ORDERED,
            "the advised refit fits a correlation along time",
        ),
        yes(
            "advised refit sums over each time",
            remedy == "panel-hac",
            "the advised refit lets series move together at one time",
        ),
        yes("advised refit did not converge", not settled, "the advised refit's search did not settle"),
        *_moved(facts, refits, chosen),
        *_second(facts, refits, chosen),
        yes(
            "advised refit allows unequal spread",
            remedy in ANY_SPREAD,
            "the advised refit does not assume equal spread",
        ),
        yes(
            "randomisation stands beside",
            any(r.remedy == "randomisation" and r is not chosen for r in refits),
            "a randomisation test was made",
        ),
    ]
    rows = focus_rows(chosen, facts)
    if rows:
        out.append(named("lowest df of the advised refit", min(row.df for row in rows)))
    level = facts.word("group level") or facts.word("series level")
    robust = find(refits, ROBUST, level) if level else None
    if robust is not None and chosen.remedy in ("mixed-intercept", *ORDERED):
        out += _ratio("robust over advised standard error", robust, chosen, facts)
    return {f.name: f for f in out}


def rehearsed_facts(scores: Scores | None, chosen: Refit | None) -> dict[str, Fact]:
    """What a rehearsal found of the advised refit, and of the best; nothing where it was not rehearsed."""
    if chosen is None:
        return {}
    if scores is None:
        return {}  # no rehearsal was asked for, which is nothing new to who did not ask
    row = scores.get(chosen.remedy, chosen.at)
    if row is None:
        untried = yes("advised refit not rehearsed", chosen.remedy != "ordinary", "no rehearsal tried it")
        return {f.name: f for f in (untried, words("name of the advised refit", chosen.name))}
    held = scores.adequate(row.remedy, row.at)
    some = any(scores.adequate(r.remedy, r.at) for r in scores.rows)
    best = max(r.coverage for r in scores.rows)
    as_fitted = row.fitted >= scores.confidence - 2 * row.mcse - 0.01
    doubt = bool(held) and row.coverage < scores.confidence - 2 * row.mcse
    out = [
        yes("rehearsal leaves a doubt", doubt, f"rehearsed coverage {percent(row.coverage)}"),
        yes("rehearsal fell short", not held, f"rehearsed coverage {percent(row.coverage)}"),
        yes("held as fitted", as_fitted, f"under the error models fitted: {percent(row.fitted)}"),
        words("truth of the rehearsed coverage", row.truth),
        yes("no rehearsed remedy held", not some, f"the best held the true value in {percent(best)}"),
        named("rehearsed coverage", row.coverage, text=percent(row.coverage)),
        named("best rehearsed coverage", best, text=percent(best)),
        named("promised coverage", scores.confidence, text=percent(scores.confidence)),
        words("name of the advised refit", chosen.name),
    ]
    return {f.name: f for f in out}


def _no_variance(facts: Facts, chosen: Refit, reached: Reached) -> bool:
    """A group level that the refit covers by its error model has a share of nothing."""
    keys = covers(chosen, facts, reached)
    found = (facts.ledger.share(key) for key in keys if key.startswith("group:"))
    return any(share is not None and share.share <= NOTHING for share in found)


def _is_moved(ordinary: Interval, chosen: Interval, ledger: Ledger, rows: int) -> bool:
    """Whether an estimate moves by more than its standard error, and by more than weighting alone explains.

    Of two unbiased estimates of which the second is efficient, the difference has the variance of the first
    less that of the second (Hausman 1978); the first's own is the ordinary one times the ledger's factor.
    """
    gap = abs(chosen.estimate - ordinary.estimate)
    factor = ledger.factor(ordinary.term)
    if factor is None or not gap > chosen.se:
        return gap > chosen.se
    chance = max((factor.estimate * ordinary.se) ** 2 - chosen.se**2, 0.0) ** 0.5
    return not gap <= special.ndtri(1 - CLEAR / 2 / rows) * chance


def _moved(facts: Facts, refits: tuple[Refit, ...], chosen: Refit) -> list[Fact]:
    ordinary = find(refits, "ordinary")
    if ordinary is None or chosen.remedy == REPAIRED:  # a part put into the mean may move every estimate
        return []
    before = {row.term: row for row in ordinary.intervals}
    mine = [row for row in focus_rows(chosen, facts) if row.term in before]
    moved = [row.term for row in mine if _is_moved(before[row.term], row, facts.ledger, len(mine))]
    return [
        yes("coefficient moves", bool(moved), f"moves by more than its error: {listed(moved)}"),
        words("term that moves", listed(moved, most=4)),
    ]


def _second(facts: Facts, refits: tuple[Refit, ...], chosen: Refit) -> list[Fact]:
    """The widest jackknife or bootstrap interval at the advised level, over the advised one."""
    if chosen.remedy != ROBUST:
        return []
    base = {row.term: row.high - row.low for row in focus_rows(chosen, facts)}
    found = [
        ((row.high - row.low) / base[row.term], fit.name, row.term)
        for fit in (find(refits, remedy, chosen.at) for remedy in SECOND)
        if fit is not None
        for row in focus_rows(fit, facts)
        if base.get(row.term, 0.0) > 0 and row.high - row.low > 0
    ]
    if not found:
        return []
    ratio, name, term = max(found)
    return [
        named("widest second opinion", ratio),
        words("name of the widest second opinion", f"The {name}"),
        words("term of the widest second opinion", term),
    ]


def _order(refits: tuple[Refit, ...]) -> list[Fact]:
    arma, first = find(refits, "arma"), find(refits, "ar1")
    if arma is None or first is None:
        return []
    return [yes("another order fits better", not same(arma, first), "the ARMA order chosen by AICc")]
