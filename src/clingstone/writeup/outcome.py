"""The methods text, second half: checks, estimates, sensitivity, software, cautions."""

from __future__ import annotations

import math
from collections.abc import Iterable

from clingstone.display import degrees, freedom, listed, number, p_value, sentence, shortened, span
from clingstone.evidence.finding import Curve, Finding
from clingstone.remedies.remedy import Convention, Refit
from clingstone.results import Results
from clingstone.writeup.bibliography import cite, with_source
from clingstone.writeup.items import Sentence
from clingstone.writeup.leading import STRUCTURES, with_most_given
from clingstone.writeup.naming import (
    label_of,
    name_of_test,
    named,
    noun_at,
    pointed_at,
    remedy_words,
    with_rows,
    words_of_test,
)
from clingstone.writeup.read import (
    ALONE,
    advised,
    alone,
    as_ratio,
    decimals,
    distinct,
    focus_rows,
    has_freedom,
    level_percent,
    ordered,
    ordinary,
    row_of,
    served,
)
from clingstone.writeup.rehearsed import methods_words

SPOKEN = 6  # focus rows told in sentences; every row stands in intervals.csv


# ---- checks ----------------------------------------------------------------------------------


def checks(results: Results) -> Iterable[Sentence]:
    """Primary tests in full; the others that saw something; the rest in one list; what was not run."""
    run = [f for f in results.evidence if f.verdict != "not applicable"]
    first = [f for f in run if f.primary]
    for f in first:
        yield Sentence(_told(results, f), ("M12",))
    if first:
        yield Sentence(_how(results, first), ("M12",))
    given = [f for f in run if not f.primary and f.given and f.structure in STRUCTURES]
    alike: dict[str, list[str]] = {}  # two tests may come to one statistic, each from its own source
    for f in given:
        alike.setdefault(f.sentence, []).append(f.source)
    for said, sources in alike.items():
        yield Sentence(with_source(said, ", ".join(dict.fromkeys(sources))), ("M12",))
    rest = [f for f in run if not f.primary and f not in given]
    seen = [f for f in with_most_given(rest) if f.verdict in ("present", "unclear")]
    if seen:
        yield Sentence("Further checks, exploratory and not adjusted, saw the following.", ("M12",))
    for f in seen:
        yield Sentence(_told(results, f), ("M12",))
    quiet = [f for f in with_most_given(rest) if f.verdict == "not detected"]
    if quiet:
        words = "; ".join(f"{words_of_test(results, f)}{_bracketed_p(f)}" for f in quiet)
        yield Sentence(f"Exploratory checks in which nothing was detected: {words}.", ("M12",))
    skipped = {name_of_test(f): _reason(f) for f in results.evidence if f.verdict == "not applicable"}
    if skipped:
        words = "; ".join(f"{name} ({why})" for name, why in skipped.items())
        yield Sentence(f"Not run: {words}.", ("M12",))
    if run:
        yield Sentence("Every test with its statistic stands in evidence.csv.", ())


def _told(results: Results, f: Finding) -> str:
    """A finding with its source, the rows that it points at, and what to keep in mind."""
    said = with_source(f.sentence, f.source)
    where = pointed_at(results, f)
    if where and f.verdict in ("present", "unclear"):
        said += f" It is in {where}." if len(f.rows) == 1 else f" They are in {where}."
    return " ".join([said, *map(sentence, f.caveats)])


def _how(results: Results, first: list[Finding]) -> str:
    """How the p-values of the primary tests were got and adjusted."""
    methods: dict[str, list[str]] = {}
    for f in first:
        if f.p_method and math.isfinite(f.p):
            methods.setdefault(f.p_method, []).append(f.about_words or label_of(results, f.structure))
    told = [m if len(methods) == 1 else f"{m} ({listed(who)})" for m, who in methods.items()]
    text = f"P-values of the primary tests: {'; '.join(told)}" if told else "P-values were not available"
    adjusted = [f for f in first if f.p_adjusted is not None and math.isfinite(f.p_adjusted)]
    if len(adjusted) > 1:
        figures = dict.fromkeys(p_value(float(f.p_adjusted or 0.0)) for f in adjusted)
        text += f"; adjusted for their number (Holm) they are {listed(figures)}"
        text += " in this order" if len(figures) == len(adjusted) else ""
    return f"{text}."


def _bracketed_p(f: Finding) -> str:
    return f" ({p_value(f.p)})" if math.isfinite(f.p) else ""


def _reason(f: Finding) -> str:
    """The words of a refusal without the head that a finding puts before them."""
    _, colon, rest = f.sentence.partition("): ")
    return (rest if colon else f.sentence).rstrip(" .")


# ---- estimates -------------------------------------------------------------------------------


def estimates(results: Results) -> Iterable[Sentence]:
    best = advised(results)
    if best is None:
        yield Sentence(f"No refit is reported ({results.advice.state}): {results.advice.headline}", ("M6",))
        return
    yield from _fit_words(best, results)
    told = [(n, words) for n in focus_rows(results) if (words := estimate_words(results, best, n))]
    if len(told) == 1:
        yield Sentence(f"The estimate of {named(told[0][0])} is {told[0][1]}.", ("M8", "M13"))
    elif told:
        listing = "; ".join(f"{named(name)} {words}" for name, words in told[:SPOKEN])
        more = f"; the other {len(told) - SPOKEN} stand in intervals.csv" if len(told) > SPOKEN else ""
        yield Sentence(f"The estimates are: {listing}{more}.", ("M8", "M13"))
    for t in best.terms:
        yield Sentence(
            f"Tested as a whole, {t.term} gives F = {number(t.F, 2)} on {freedom(t.df1, t.df2)}, "
            f"{p_value(t.p)}.",
            ("M8", "M13"),
        )
    if best.boundary:
        yield Sentence("A variance was estimated at its bound of zero in this refit.", ("M11",))
    if not best.converged:
        yield Sentence("The search for the variances of this refit did not converge.", ("M11",))
    yield from _choice(results)


def _fit_words(best: Refit, results: Results) -> Iterable[Sentence]:
    account = best.account
    sources = cite(account.source)
    yield Sentence(
        f"The estimates are by {estimator_words(best)}{f' {sources}' if sources else ''}.",
        ("M6", "M7"),
    )
    parts = [f"covariance: {account.covariance}", f"small-sample factor: {account.factor}"]
    parts += [f"{name}: {shortened(value)}" for name, value in account.items]
    clusters = any("cluster" in name for name, _ in account.items)
    yield Sentence(sentence("; ".join(parts)), ("M7", "M14") if clusters else ("M7",))
    law = f"Intervals at {level_percent(results)} and p-values come from {law_words(account.reference)}"
    rule = f"with degrees of freedom by this rule: {account.df_rule}"
    yield Sentence(f"{law}, {rule if has_freedom(best) else 'without degrees of freedom'}.", ("M8",))


LAWS = {"t": "the t distribution", "normal": "the normal distribution"}


def law_words(reference: str) -> str:
    """A reference distribution as a sentence names it."""
    if reference in LAWS:
        return LAWS[reference]
    law = reference.partition(" ")[0] in ("exact", "fixed-b")
    return f"the {reference}" if law else reference


def estimator_words(fit: Refit) -> str:
    """The estimator, with the name of the refit where it says more."""
    estimator = fit.account.estimator
    return estimator if fit.name == "ordinary" or fit.name in estimator else f"{estimator} ({fit.name})"


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
    if results.advice.because:
        reasons = " ".join(with_source(r.sentence, r.source) for r in results.advice.because)
        yield Sentence(f"The reasons for this refit are these. {reasons}", ("M6", "M11"))
    case = results.case
    if case.assigned or case.sampled:
        levels = dict.fromkeys([*case.assigned.values(), *filter(None, [case.sampled])])
        units = listed(noun_at(results, level) for level in levels)
        yield Sentence(
            f"That rows be clustered at {units} follows from the design, not from a test.",
            ("M11",),
        )
    yield Sentence(
        "The refit was chosen after the data were seen, by rules fixed beforehand; this is a post-hoc choice "
        "unless the analysis plan named it.",
        ("M11",),
    )
    yield Sentence(
        "[what the analysis plan had laid down, and where it is registered: to be filled in]", ("M11",), True
    )


# What refits say of single clusters, by the name under which their account says it.
HEALTH = ("largest part one cluster has in a variance", "largest move when one cluster is left out")


def leaning(results: Results) -> Iterable[str]:
    """How much the result leans on single groups: what leaving each out does, and what clusters carry."""
    for f in results.evidence:
        for curve in f.curves:
            if curve.kind == "left-out" and curve.y:
                yield _without_each(results, curve)
    drawn = any(curve.kind == "left-out" for f in results.evidence for curve in f.curves)
    for asked in HEALTH[:1] if drawn else HEALTH:
        told = [(fit, v) for fit in ordered(results) for name, v in fit.account.items if name == asked]
        if told:
            fit, value = told[0]
            yield f"{sentence(asked).rstrip('.')} ({fit.name}): {shortened(value)}."


def _without_each(results: Results, curve: Curve) -> str:
    """ "With one clinic at a time left out, the ordinary coefficient of arm lies between −3.6 and −2.2 …"."""
    term = curve.y_name.removeprefix("coefficient of ").removesuffix(" without it")
    digits, group = decimals(results, term), noun_at(results, curve.x_name)
    low, high = (number(v, digits) for v in (min(curve.y), max(curve.y)))
    text = f"With one {group} at a time left out, the ordinary coefficient of {named(term)} "
    text += f"lies between {low} and {high}"
    whole = next((y[0] for _, y in curve.lines.values()), None)
    if whole is None:
        return f"{text}."
    furthest = max(range(len(curve.y)), key=lambda k: abs(curve.y[k] - whole))
    who = f"{group} {curve.labels[furthest]}"
    return f"{text} (with all {number(whole, digits)}; furthest from that without {who})."


# ---- sensitivity -----------------------------------------------------------------------------


def sensitivity(results: Results) -> Iterable[Sentence]:
    """Single groups, the other refits for every focus row, other conventions, where a result would turn."""
    if results.case.group:
        leans = [Sentence(words, ("M14",)) for words in leaning(results)]
        blank = Sentence("[how much the result leans on single groups: to be filled in]", ("M14",), True)
        yield from leans or [blank]
    best, level = advised(results), level_percent(results)
    names = served(results)
    for name in names[:SPOKEN]:
        fits = [fit for fit in distinct(results, name) if fit is not best]
        others = listed(_other(results, fit, name) for fit in fits[:SPOKEN])
        if others:
            yield Sentence(f"Under the other refits the {level} interval of {name} is {others}.", ("M15",))
        by_itself = alone(results, name)
        if by_itself is not None:
            words = estimate_words(results, by_itself[0], name + ALONE)
            yield Sentence(f"With the constant alone beside it, {name} is {words}.", ("M15",))
    if names:
        yield Sentence("Every refit of every row stands in intervals.csv.", ("M15",))
    for words in methods_words(results):
        yield Sentence(words, ("M12", "M15"))
    if best is not None and best.conventions and names:
        told = [w for c in best.conventions if (w := _under(results, c, names[0]))]
        if told:
            yield Sentence(
                f"Under other conventions the reported interval of {names[0]} is {listed(told)}.", ("M15",)
            )
    for turning in tipping_words(results):
        yield Sentence(turning, ("M15",))
    for words in alternatives(results):
        yield Sentence(words, ("M15",))


def alternatives(results: Results) -> tuple[str, ...]:
    """The alternatives of the advice, those of one reason in one sentence."""
    reasons: dict[str, list[str]] = {}
    for choice in results.advice.alternatives:
        fit = remedy_words(results, choice.remedy, choice.at)
        reasons.setdefault(choice.because.rstrip(" ."), []).append(fit)
    return tuple(
        f"{'An alternative' if len(named) == 1 else 'Alternatives'}{f' ({why})' if why else ''}: "
        f"{'; '.join(named)}."
        for why, named in reasons.items()
    )


def _other(results: Results, fit: Refit, name: str) -> str:
    row = row_of(fit, name)
    assert row is not None
    plain = ", as if rows were independent" if fit is ordinary(results) else ""
    return f"{span(row.low, row.high, decimals(results, name))} ({fit.name}{plain})"


def _under(results: Results, c: Convention, name: str) -> str:
    row = c.get(name)
    if row is None or not math.isfinite(row.low + row.high):
        return ""
    return f"{span(row.low, row.high, decimals(results, name))} ({c.words})"


def tipping_words(results: Results) -> tuple[str, ...]:
    """The values at which a focus interval would turn; what reads alike for several rows is said once."""
    found = results.ledger.tipping
    alike: dict[str, list[str]] = {}
    for t in found:
        named = f"“{t.term}”" if f"“{t.term}”" in t.sentence else t.term
        shape = t.sentence.replace(named, "\0") if t.value is None else t.sentence
        terms = alike.setdefault(shape, [])
        terms += [named] if named not in terms else []
    return tuple(shape.replace("\0", listed(terms, "or")) for shape, terms in alike.items())


# ---- software and cautions -------------------------------------------------------------------


def software(results: Results) -> Iterable[Sentence]:
    others = listed(f"{name} {v}" for name, v in results.versions.items() if name != "clingstone")
    versions = f" ({others})" if others else ""
    seed = results.settings.get("seed")
    with_seed = f" The seed of every random number was {seed}." if seed is not None else ""
    yield Sentence(
        f"All numbers were computed with clingstone {results.clingstone}{versions}.{with_seed}",
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
        yield Sentence(with_source(with_rows(results, reason.sentence, reason.rule), reason.source), item)
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
