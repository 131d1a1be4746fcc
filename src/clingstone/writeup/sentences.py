"""The methods text: data, model and dependence, each sentence with the reporting items that it answers.

Every number comes from Results. What the data cannot know is left as a visible blank in square
brackets, never invented. The items stand in ``items.py``, the rest of the text in ``outcome.py``.
"""

from __future__ import annotations

import math
from collections.abc import Iterable

from clingstone.display import (
    amount,
    count,
    listed,
    number,
    p_value,
    percent,
    percent_bounds,
    sentence,
    significant,
)
from clingstone.ledger.ledger import Parameter, Standing
from clingstone.results import Results
from clingstone.summary import GroupSummary
from clingstone.writeup import strength
from clingstone.writeup.items import ITEMS, Section, Sentence
from clingstone.writeup.naming import groups_of, label_of, lost, noun, noun_at, subject
from clingstone.writeup.outcome import cautions, checks, estimates, sensitivity, software
from clingstone.writeup.plate import many
from clingstone.writeup.read import level_percent

TERMS = 8  # terms of a model named one by one
# What a standing that is plainly present gives as its reason; the p-values beside it say as much.
PLAIN = ("Its own test shows it.", "It shows by its own test and still when the other structures are fitted.")


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


# ---- design and data -------------------------------------------------------------------------


def design(results: Results) -> Iterable[Sentence]:
    case = results.case
    yield Sentence(f"The analysis used {_part(case.n, case.rows_read)} of {case.name}.", ("M2",))
    if case.dropped:
        reasons = listed(f"{count(n, 'row')} ({lost(why)})" for why, n in case.dropped.items())
        yield Sentence(f"Left out were {reasons}.", ("M4",))
    else:
        yield Sentence("No row was left out.", ("M4",))
    if case.group:
        yield Sentence(_groups_words(results), ("M2", "M3"))
        yield from _effective(results)
    yield from _order_and_place(results)
    yield from _assignment(results)


def _part(kept: int, read: int) -> str:
    return f"all {count(read, 'row')}" if kept == read else f"{number(kept, 0)} of the {count(read, 'row')}"


def _sizes(smallest: int, largest: int) -> str:
    if smallest == largest:
        return count(smallest, "row")
    return f"{number(smallest, 0)} to {number(largest, 0)} rows"


def _groups_words(results: Results) -> str:
    """ "The rows belong to 10 flocks of 28 to 67 rows (…) and, within them, to 85 lambs of …"."""
    join = {"nested": "within them", "crossed": "crossed with them"}.get(results.case.arrangement, "")
    parts = [_group_words(g) for g in results.case.group]
    text = f"The rows belong to {parts[0]}"
    for part in parts[1:]:
        text += f" and, {join}, to {part}" if join else f" and to {part}"
    return f"{text}."


def _group_words(g: GroupSummary) -> str:
    name = groups_of(g) if g.count != 1 else noun(g)
    text = f"{number(g.count, 0)} {name} of {_sizes(g.smallest, g.largest)}"
    if g.smallest < g.largest:
        text += f" (median {amount(g.median)}; coefficient of variation of size {number(g.cv, 2)}"
        text += f"; {count(g.singletons, 'single row')})" if g.singletons else ")"
    return text


def _effective(results: Results) -> Iterable[Sentence]:
    told = [g for g in results.case.group if math.isfinite(g.effective) and g.effective < 0.95 * g.count]
    if told:
        words = listed(f"the {g.count} {groups_of(g)} count as {significant(g.effective)}" for g in told)
        yield Sentence(f"Being unequal in size, {words} of equal size.", ("M14",))


def _order_and_place(results: Results) -> Iterable[Sentence]:
    case = results.case
    s, p = case.serial, case.spatial
    if s is not None:
        keys = {g.key: noun(g) for g in case.group}
        within = f"Within each {keys[s.series]}, the rows" if s.series in keys else "The rows"
        found = (
            f"{within} are ordered by {s.time}: {count(s.count, 'series', 'series')} of "
            f"{_sizes(s.shortest, s.longest)} from {s.first} to {s.last}, {_spacing(results)}"
        )
        ties = f"; {count(s.ties, 'row')} share their time with another row" if s.ties else ""
        yield Sentence(f"{found}{ties}.", ("M3",))
    if p is not None:
        far = f"{significant(p.extent, 3)} {many(p.unit)}".rstrip()
        text = f"The rows lie at {count(p.sites, 'site')}"
        if p.rows_per_site > 1:
            text += f", {significant(p.rows_per_site)} rows per site on average,"
        text += f" at most {far} apart"
        if p.neighbours:
            text += f"; as neighbours of a site were taken: {listed(p.neighbours, last='or')}"
        if p.islands:
            text += f"; {count(p.islands, 'site')} had no neighbour"
        yield Sentence(f"{text}.", ("M3", "M7") if p.neighbours else ("M3",))


def _spacing(results: Results) -> str:
    s = results.case.serial
    assert s is not None
    if s.spacing == "irregular" or not s.step:
        return "at irregular times"
    step = many(s.unit) if s.unit and s.step != 1 else s.unit
    steps = f"in steps of {amount(s.step)} {step}".rstrip()
    return f"{steps}, {count(s.gaps, 'step')} missing" if s.gaps else f"{steps} without gaps"


def _assignment(results: Results) -> Iterable[Sentence]:
    case = results.case
    for term, level in case.assigned.items():
        unit = noun_at(results, level)
        yield Sentence(
            f"Assignment to {term} was by {unit}, so the {unit} is the unit of analysis for {term}.",
            ("M1", "M2", "M16"),
        )
    if case.sampled:
        yield Sentence(f"The sample was drawn by {noun_at(results, case.sampled)}.", ("M1",))
    if not case.assigned and not case.sampled:
        yield Sentence(
            "[what was sampled and what was assigned, and at which level: to be filled in]",
            ("M1", "M16"),
            True,
        )
    things = [groups_of(g) for g in case.group]
    things += ["sites"] if case.spatial else []
    things += ["times"] if case.serial else []
    if things:
        yield Sentence(f"[why these {listed(things)}: to be filled in]", ("M1",), True)
        yield Sentence(f"[to which other {listed(things)} this applies: to be filled in]", ("M18",), True)


# ---- model -----------------------------------------------------------------------------------


def model(results: Results) -> Iterable[Sentence]:
    case = results.case
    if not case.formula:
        yield Sentence(
            f"Only residuals ({case.response}) were given; the model that left them is not known here.",
            ("M5",),
        )
        yield Sentence("[the model that left the residuals: to be filled in]", ("M5",), True)
        return
    terms = [t for t in case.terms if t != "constant"]
    on = listed(terms) if len(terms) <= TERMS else f"{len(terms)} terms"
    what = f"a linear regression of {case.response} on {on}" if terms else f"the mean of {case.response}"
    yield Sentence(
        f"The model is {what} ({case.formula}), with {count(case.p, 'coefficient')}.",
        ("M5",),
    )
    words = _varies(results, terms)
    if words:
        yield Sentence(words, ("M5",))
    if case.transformed:
        yield Sentence(
            f"The response is a logarithm ({case.transformed}), so shares and correlations are on that scale "
            "and effects are given as ratios too.",
            ("M5",),
        )


def _varies(results: Results, terms: list[str]) -> str:
    """ "Of its terms, arm varies only between clinics; baseline and age vary from row to row."."""
    nouns = {g.key: groups_of(g) for g in results.case.group}
    levels: dict[str, list[str]] = {}
    for term in terms:
        levels.setdefault(results.case.varies.get(term, ""), []).append(term)
    parts = []
    for level, named in levels.items():
        if level in ("", "constant", "all rows"):
            continue
        verb = "varies" if len(named) == 1 else "vary"
        who = listed(named) if len(named) <= TERMS else f"{len(named)} terms"
        where = "from row to row" if level in ("row", "rows") else f"only between {nouns.get(level, level)}"
        parts.append(f"{who} {verb} {where}")
    return f"Of its terms, {'; '.join(parts)}." if parts else ""


# ---- dependence ------------------------------------------------------------------------------


def dependence(results: Results) -> Iterable[Sentence]:
    ledger = results.ledger
    for s in ledger.standing:
        yield Sentence(standing_words(results, s), ("M6", "M12"))
    yield from _error_model(results)
    for key in dict.fromkeys(p.key for p in ledger.parameters):
        found = [p for p in ledger.parameters if p.key == key]
        item = ("M9", "M10") if any(p.name in ("intraclass correlation", "ρ") for p in found) else ("M10",)
        yield Sentence(_parameters(results, key, found), item)
    if any("unit of the response" in p.unit for p in ledger.parameters):
        yield Sentence(f"Standard deviations are in the unit of {results.case.response}.", ("M10",))
    told = [
        f"{s.label} {percent(s.share)}{percent_bounds(s.low, s.high)}"
        for s in ledger.shares
        if math.isfinite(s.share)
    ]
    if told:
        yield Sentence(f"The shares of the residual variance are: {listed(told)}.", ("M10",))
    yield from _repaired(results)
    for d in ledger.detectable:
        yield Sentence(d.sentence, ("M12",))
    for key, reason in ledger.refused:
        why = reason.rstrip(" .")
        yield Sentence(f"Not estimated was {label_of(results, key)}, because {why}.", ("M11",))


def standing_words(results: Results, s: Standing) -> str:
    """How a structure was judged, by which p-values, and why."""
    known = []
    if math.isfinite(s.p_alone):
        known.append(f"{p_value(s.p_alone)} by its own test")
    if s.given and math.isfinite(s.p_given):
        known.append(f"{p_value(s.p_given)} with {listed(s.given)} fitted as well")
    figures = f" ({'; '.join(known)})" if known else ""
    verdict = {
        "present": "was judged present",
        "unclear": "was judged unclear",
        "not detected": "was not detected",
        "not applicable": "could not be tested",
    }[s.verdict]
    plain = s.verdict == "present" and known and s.because.startswith(PLAIN)
    because = "" if plain else f" {sentence(s.because)}"
    return f"Dependence between {subject(results, s.key)} {verdict}{figures}.{because}"


def _error_model(results: Results) -> Iterable[Sentence]:
    ledger = results.ledger
    if not ledger.shares:
        return
    kept = [_component(results, key) for key in ledger.model]
    holds = f"{listed(kept)} besides the noise of single rows" if kept else "the noise of single rows alone"
    yield Sentence(
        f"The model of the dependence, fitted by restricted maximum likelihood, holds {holds}.", ("M6", "M11")
    )
    equation = _equation(results)
    if equation:
        yield Sentence(equation, ("M5",))
    refused = {key for key, _ in ledger.refused}
    known = {s.key for s in ledger.shares}
    gone = [s for s in ledger.standing if s.key in known - set(ledger.model) - refused]
    if gone:
        names = listed(subject(results, s.key) for s in gone)
        yield Sentence(
            f"Dependence between {names} was fitted first as well, and left out because it was neither "
            "detected nor able to matter.",
            ("M11",),
        )


# Family of a component → its letter in the equation, and what that letter is.
DRAWN = {
    "group": ("u[{}]", "one normal draw for each {}"),
    "serial": ("s[{}]", "a stationary normal series whose correlation falls by a factor ρ a step of time"),
    "spatial": ("f[{}]", "a normal field over the map whose correlation falls exponentially with distance"),
}


def _equation(results: Results) -> str:
    """ "As an equation: pressure = b0 + b1 (arm: visits) + u[clinic] + e, where u[clinic] is …"."""
    names = results.case.coefficients
    if not names or len(names) > TERMS or any(k.split(":")[0] not in DRAWN for k in results.ledger.model):
        return ""
    mean = [f"b{k}" if name == "constant" else f"b{k} ({name})" for k, name in enumerate(names)]
    random, words = [], []
    for key in results.ledger.model:
        family, _, level = key.partition(":")
        what = noun_at(results, level) if family == "group" else {"serial": "time"}.get(family, "place")
        letter, meaning = (part.format(what) for part in DRAWN[family])
        random.append(letter)
        words.append(f"{letter} is {meaning}")
    words.append("e is independent normal noise of single rows")
    right = " + ".join([*mean, *random, "e"])
    return f"As an equation: {results.case.response} = {right}, where {'; '.join(words)}."


def _repaired(results: Results) -> Iterable[Sentence]:
    """What the dependence becomes once a missing part of the mean is in."""
    repair = results.advice.repair
    if repair is None:
        return
    told = [f"{s.label} {percent(s.share)}{percent_bounds(s.low, s.high)}" for s in repair.shares]
    words = f" the shares are: {listed(told)}" if told else " no dependence model could be fitted"
    yield Sentence(f"With a {repair.what} added to the model{words}.", ("M10", "M12"))


def _component(results: Results, key: str) -> str:
    family, _, level = key.partition(":")
    if key == "group:site":
        return "an intercept of each place"
    if family == "group":
        return f"a random intercept of {noun_at(results, level)}"
    if family == "serial":
        return "a first-order autoregression in time"
    if family == "spatial":
        return "an exponential correlation over the map"
    return label_of(results, key)


def _parameters(results: Results, key: str, found: list[Parameter]) -> str:
    """All that is known of one component in one sentence, intervals named once."""
    parts, notes = [], []
    for k, p in enumerate(found):
        parts.append(parameter_words(results, p, named=k == 0))
        notes += [p.note] if p.note and p.note not in notes else []
    note = f" ({'; '.join(notes)})" if notes else ""
    who = subject(results, key)
    if key == "row":
        return f"Single rows have {listed(parts)}{note}."
    return f"For {who} the fit gives {listed(parts)}{note}."


def parameter_words(results: Results, p: Parameter, named: bool = True) -> str:
    """ "an intraclass correlation of 0.19 (95 % interval 0.08 to 0.42)"."""
    own = "" if p.unit == "unit of the response" else f" {many(p.unit)}".rstrip()
    article = "an" if p.name[0] in "aeiou" else "a"
    name = "a correlation ρ" if p.name == "ρ" else f"{article} {p.name}"
    ends = strength.interval(results, p)
    told = f" ({level_percent(results)} interval {ends})" if named else f" ({ends})"
    return f"{name} of {strength.figure(results, p, p.estimate)}{own}{told if ends else ''}"
