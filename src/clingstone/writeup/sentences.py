"""The sentences of the methods text, each with the reporting items that it answers.

Every number comes from Results. What the data cannot know is left as a visible blank in square
brackets, never invented. The items stand in ``items.py``.
"""

from __future__ import annotations

import math
from collections.abc import Iterable

from clingstone.case import GroupSummary
from clingstone.display import (
    count,
    degrees,
    listed,
    number,
    p_value,
    percent,
    percent_span,
    plural_of,
    significant,
    span,
)
from clingstone.remedies.remedy import Refit
from clingstone.results import Results
from clingstone.writeup.bibliography import with_source
from clingstone.writeup.items import ITEMS, Section, Sentence
from clingstone.writeup.read import (
    advised,
    as_ratio,
    decimals,
    focus_rows,
    label_of,
    level_percent,
    ordered,
    ordinary,
    row_of,
)
from clingstone.writeup.tables import parameter_decimals, test_words


def sections(results: Results) -> tuple[Section, ...]:
    """The methods text in order; an item that no sentence answers ends as a blank of its own."""
    parts = [
        Section("Design and data", tuple(design(results))),
        Section("Model", tuple(model(results))),
        Section("Dependence between rows", tuple(dependence(results))),
        Section("Checks", tuple(checks(results))),
        Section("Estimates", tuple(estimates(results))),
        Section("Sensitivity", tuple(sensitivity(results))),
        Section("Software", tuple(software(results))),
        Section("Cautions", tuple(cautions(results))),
    ]
    answered = {item for part in parts for s in part.sentences for item in s.items}
    if not results.case.group:
        answered.add("M14")  # asks for the influence of groups
    missing = tuple(
        Sentence(f"[{words}: to be filled in]", (item,), True)
        for item, words in ITEMS.items()
        if item not in answered
    )
    if missing:
        parts.append(Section("Still to be filled in", missing))
    return tuple(p for p in parts if p.sentences)


def noun(g: GroupSummary) -> str:
    return g.key.split("/")[-1]


def design(results: Results) -> Iterable[Sentence]:
    case = results.case
    yield Sentence(
        f"The analysis rests on {_part(case.n, case.rows_read)} read from {case.name}.",
        ("M2",),
    )
    if case.dropped:
        reasons = listed(f"{number(n, 0)} for {why}" for why, n in case.dropped.items())
        yield Sentence(f"Rows left out: {reasons}.", ("M4",))
    else:
        yield Sentence("No row was left out.", ("M4",))
    for g in case.group:
        yield Sentence(_group_words(g), ("M2", "M3"))
    yield from _order_and_place(results)
    yield from _assignment(results)


def _units(step: float, unit: str) -> str:
    return unit if step == 1 or not unit.isalpha() else plural_of(unit)


def _part(kept: int, read: int) -> str:
    return f"all {count(read, 'row')}" if kept == read else f"{number(kept, 0)} of the {count(read, 'row')}"


def _sizes(smallest: int, largest: int) -> str:
    if smallest == largest:
        return count(smallest, "row")
    return f"{number(smallest, 0)} to {number(largest, 0)} rows"


def _group_words(g: GroupSummary) -> str:
    inside = f" within {g.parent}" if g.parent else ""
    text = (
        f"Rows are grouped by {g.key}{inside}: {count(g.count, noun(g))} of {_sizes(g.smallest, g.largest)} "
        f"(median {g.median:g}, coefficient of variation of size {number(g.cv, 2)})"
    )
    return text + (f", {g.singletons} of them with a single row." if g.singletons else ".")


def _order_and_place(results: Results) -> Iterable[Sentence]:
    s, p = results.case.serial, results.case.spatial
    if s is not None:
        step = f", one step being {s.step:g} {_units(s.step, s.unit)}".rstrip() if s.step else ""
        gaps = f"; {count(s.gaps, 'step')} missing inside series" if s.gaps else ""
        ties = f"; {count(s.ties, 'row')} at a time already taken" if s.ties else ""
        yield Sentence(
            f"Order in time is given by {s.time} within {s.series}: {count(s.count, 'series', 'series')} of "
            f"{_sizes(s.shortest, s.longest)} from {s.first} to {s.last}, spacing {s.spacing}"
            f"{step}{gaps}{ties}.",
            ("M3",),
        )
    if p is not None:
        text = (
            f"Rows lie at {count(p.sites, 'distinct site')} ({significant(p.rows_per_site)} rows per site on "
            f"average), at most {significant(p.extent, 3)} {p.unit}".rstrip()
            + " apart"
        )
        if p.neighbours:
            text += f"; neighbours: {listed(p.neighbours)}"
        if p.islands:
            text += f"; {count(p.islands, 'site')} without a neighbour"
        yield Sentence(text + ".", ("M3", "M7") if p.neighbours else ("M3",))


def _assignment(results: Results) -> Iterable[Sentence]:
    case = results.case
    levels = {g.key: noun(g) for g in case.group}
    for term, level in case.assigned.items():
        unit = levels.get(level, level)
        yield Sentence(
            f"{term} was assigned by {unit}, so the {unit} is the unit of analysis for {term}.",
            ("M1", "M2", "M16"),
        )
    if case.sampled:
        yield Sentence(f"The sample was drawn by {case.sampled}.", ("M1",))
    if not case.assigned and not case.sampled:
        yield Sentence(
            "[what was sampled and what was assigned, and at which level: to be filled in]",
            ("M1", "M16"),
            True,
        )
    things = [f"{noun(g)} groups" if noun(g).endswith("s") else count(2, noun(g))[2:] for g in case.group]
    things += ["sites"] if case.spatial else []
    things += ["times"] if case.serial else []
    if things:
        yield Sentence(f"[why these {listed(things)}: to be filled in]", ("M1",), True)
        yield Sentence(f"[to which other {listed(things)} this applies: to be filled in]", ("M18",), True)


def model(results: Results) -> Iterable[Sentence]:
    case = results.case
    if case.formula:
        yield Sentence(
            f"{case.response} was modelled by linear regression, {case.formula}, with "
            f"{count(case.p, 'coefficient')}.",
            ("M5",),
        )
    else:
        yield Sentence("Only residuals were given; the model that left them is not known here.", ("M5",))
    varies = {t: level for t, level in case.varies.items() if level not in ("constant", "all rows")}
    if varies:
        words = listed(f"{t} between {_between(level)}" for t, level in varies.items())
        yield Sentence(f"Where each term varies: {words}.", ("M5",))
    if case.transformed:
        yield Sentence(
            f"The response is a {case.transformed}, so shares and correlations below are on that scale.",
            ("M5",),
        )


def _between(level: str) -> str:
    return "rows" if level in ("row", "rows", "") else f"values of {level}"


def dependence(results: Results) -> Iterable[Sentence]:
    ledger = results.ledger
    for s in ledger.standing:
        given = (
            f"; given {listed(s.given)}, {p_value(s.p_given)}" if s.given and math.isfinite(s.p_given) else ""
        )
        alone = f" ({p_value(s.p_alone)} alone{given})" if math.isfinite(s.p_alone) else ""
        yield Sentence(f"{s.label}, judged {s.verdict}{alone}. {_upper(_no_stop(s.because))}.", ("M6", "M12"))
    for p in ledger.parameters:
        places = parameter_decimals(p)
        unit = f" {p.unit}" if p.unit else ""
        bounds = (
            f" ({level_percent(results)} interval {span(p.low, p.high, places)})"
            if math.isfinite(p.low + p.high)
            else ""
        )
        note = f", {p.note}" if p.note else ""
        icc = p.name in ("intraclass correlation", "ρ")
        yield Sentence(
            f"{label_of(results, p.key)}: {p.name} {number(p.estimate, places)}{unit}{bounds}{note}.",
            ("M9", "M10") if icc else ("M10",),
        )
    told = [
        f"{s.label} {percent(s.share)}"
        + (f" ({percent_span(s.low, s.high)})" if math.isfinite(s.low + s.high) else "")
        for s in ledger.shares
        if math.isfinite(s.share)
    ]
    if told:
        yield Sentence(f"Shares of the residual variance: {listed(told)}.", ("M10",))
    for d in ledger.detectable:
        yield Sentence(d.sentence, ("M12",))
    for step in ledger.history:
        yield Sentence(f"Choice of the dependence model: {_no_stop(step)}.", ("M11",))
    for key, reason in ledger.refused:
        yield Sentence(f"Not estimated: {label_of(results, key)}, because {_no_stop(reason)}.", ("M11",))


def _no_stop(text: str) -> str:
    return text.rstrip(" .")


def checks(results: Results) -> Iterable[Sentence]:
    """Findings, primary ones first; how p was reached and adjusted; what was not run."""
    run = [f for f in results.evidence if f.verdict != "not applicable"]
    for f in sorted(run, key=lambda f: not f.primary):
        adjusted = f.p_adjusted
        how = f" P-value: {f.p_method}." if f.p_method and math.isfinite(f.p) else ""
        holm = (
            f" Adjusted over its family of tests (Holm): {p_value(adjusted)}."
            if adjusted is not None and not math.isnan(adjusted)
            else ""
        )
        caveats = "".join(f" Caveat: {_no_stop(c)}." for c in f.caveats)
        said = with_source(f.sentence, f.source)
        label = "" if f.primary else " (exploratory)"
        yield Sentence(f"{_upper(test_words(results, f))}{label}: {said}{how}{holm}{caveats}", ("M12",))
    skipped = [f for f in results.evidence if f.verdict == "not applicable"]
    if skipped:
        words = "; ".join(f"{test_words(results, f)} ({_no_stop(f.sentence)})" for f in skipped)
        yield Sentence(f"Not run: {words}.", ("M12",))


def _upper(text: str) -> str:
    return text[:1].upper() + text[1:]


def estimates(results: Results) -> Iterable[Sentence]:
    best = advised(results)
    if best is None:
        yield Sentence(f"No refit is advised ({results.advice.state}): {results.advice.headline}", ("M6",))
        return
    account = best.account
    ingredients = (
        f"The advised refit is: {best.name}. Estimator: {account.estimator}; covariance: "
        f"{account.covariance}; small-sample factor: {account.factor}{_items(best)}"
    )
    yield Sentence(
        with_source(ingredients, account.source),
        ("M6", "M7", "M14") if _has_clusters(best) else ("M6", "M7"),
    )
    yield Sentence(
        f"Intervals at {level_percent(results)} and p-values come from the same reference distribution "
        f"({account.reference}), with degrees of freedom by this rule: {account.df_rule}.",
        ("M8",),
    )
    for name in focus_rows(results):
        words = estimate_words(results, best, name)
        if words:
            yield Sentence(f"{name}: {words}.", ("M8", "M13"))
    for t in best.terms:
        yield Sentence(
            f"{t.term} as a whole: F = {number(t.F, 2)} on {degrees(t.df1)} and {degrees(t.df2)} degrees of "
            f"freedom, {p_value(t.p)}.",
            ("M8", "M13"),
        )
    if best.boundary:
        yield Sentence("A variance was estimated at its bound of zero in this refit.", ("M11",))
    if not best.converged:
        yield Sentence("The search for the variances of this refit did not converge.", ("M11",))
    yield from _choice(results)


def _items(fit: Refit) -> str:
    return "".join(f"; {name}: {value}" for name, value in fit.account.items)


def _has_clusters(fit: Refit) -> bool:
    return any("cluster" in name for name, _ in fit.account.items)


def estimate_words(results: Results, fit: Refit, name: str) -> str:
    """ "−3.1 (95 % interval −6.4 to 0.2; 10.4 degrees of freedom; p = 0.063)"; "" when not given."""
    row = row_of(fit, name)
    if row is None:
        return ""
    places = decimals(results, name)
    df = f"; {degrees(row.df)} degrees of freedom" if math.isfinite(row.df) else ""
    ratio = as_ratio(results, fit, row)
    factor = f", as a ratio {ratio}" if ratio else ""
    return (
        f"{number(row.estimate, places)} ({level_percent(results)} interval "
        f"{span(row.low, row.high, places)}{df}; {p_value(row.p)}){factor}"
    )


def _choice(results: Results) -> Iterable[Sentence]:
    for reason in results.advice.because:
        yield Sentence(f"Why this refit: {with_source(reason.sentence, reason.source)}", ("M6", "M11"))
    if results.case.assigned or results.case.sampled:
        level = listed(
            dict.fromkeys([*results.case.assigned.values(), *filter(None, [results.case.sampled])])
        )
        yield Sentence(
            f"That rows be clustered at {level} follows from the design, not from a test.", ("M11",)
        )
    yield Sentence(
        "The refit itself was chosen after the data were seen, by rules fixed beforehand; this is a post-hoc "
        "choice unless the analysis plan named it.",
        ("M11",),
    )
    yield Sentence(
        "[what the analysis plan had laid down, and where it is registered: to be filled in]", ("M11",), True
    )


def sensitivity(results: Results) -> Iterable[Sentence]:
    """The other refits for every focus row, and the values of dependence at which a result would turn."""
    best = advised(results)
    for name in focus_rows(results):
        others = [
            f"{fit.name}{' (taken as if rows were independent)' if fit is ordinary(results) else ''} {words}"
            for fit in ordered(results)
            if fit is not best and (words := estimate_words(results, fit, name))
        ]
        if others:
            yield Sentence(f"{name} under the other refits: {'; '.join(others)}.", ("M15",))
    for t in results.ledger.tipping:
        yield Sentence(t.sentence, ("M15",))
    for choice in results.advice.alternatives:
        if choice.because:
            at = f" at {choice.at}" if choice.at else ""
            yield Sentence(
                f"Alternative: {choice.remedy.replace('-', ' ')}{at}. {_no_stop(choice.because)}.", ("M15",)
            )


def software(results: Results) -> Iterable[Sentence]:
    others = listed(f"{name} {v}" for name, v in results.versions.items() if name != "clingstone")
    versions = f" ({others})" if others else ""
    seed = results.settings.get("seed")
    with_seed = f" The seed of every random number was {seed}." if seed is not None else ""
    yield Sentence(
        f"Computed with clingstone {results.clingstone}{versions}.{with_seed}",
        ("M17",),
    )


USUAL = (
    "This text is an aid to, not a substitute for, a statistician's judgement.",
    "A prespecified analysis plan outranks a choice driven by the data.",
    "Clinical, safety and regulatory uses follow their own guidance.",
)


def cautions(results: Results) -> Iterable[Sentence]:
    for reason in results.advice.cautions:
        item = ("M14",) if "cluster" in reason.rule or "group" in reason.rule else ("M12",)
        yield Sentence(with_source(reason.sentence, reason.source), item)
    if results.advice.mean_in_doubt:
        yield Sentence(
            "Whether the mean or the dependence between rows makes the pattern is not settled.", ("M12",)
        )
    if results.rehearsal is None:
        yield Sentence(
            "The coverage of these intervals was not rehearsed on this design; the advice rests on published "
            "rules.",
            ("M12",),
        )
    for words in USUAL:
        yield Sentence(words, ())
