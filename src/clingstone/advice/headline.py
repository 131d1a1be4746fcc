"""The headline: what hangs together, how strongly, and what it does to a focus interval."""

from __future__ import annotations

import numpy as np

from clingstone.advice.facts import Facts
from clingstone.advice.structures import covered, subject
from clingstone.covariance.components import SITE
from clingstone.display import NBSP, listed, percent, percent_span, significant
from clingstone.ledger.ledger import Ledger, Parameter, Share, Standing
from clingstone.ledger.sizes import TIMES
from clingstone.remedies.remedy import Refit


def dependence(ledger: Ledger, rows: float = np.inf, over: float = 0.0) -> str:
    """One sentence per structure to be covered: those present first, then by share.

    rows : of the longest series; a correlation not halved within them is said to hardly fade.
    over : practical range over the width of the map.
    """
    chosen = [s for s in ledger.standing if covered(s)]
    chosen.sort(key=lambda s: (s.verdict != "present", -_share(ledger, s)))
    return " ".join(_sentence(ledger, s, rows, over) for s in chosen)


def unequal(facts: Facts) -> str:
    """What has to be allowed for where no dependence has: slopes that differ, or unequal spread."""
    if facts.says("slopes differ"):
        what = f"slopes of {facts.text('name of the slope')} differ between groups"
    elif facts.says("unequal variances"):
        what = f"the residuals spread unequally with {facts.text('what the spread goes with')}"
    else:
        return ""
    ledger = facts.ledger
    if not any(_tested(s) for s in ledger.standing):
        return f"{nothing(ledger)} But {what}."
    rest = _not_ruled_out(ledger)
    return f"No dependence between rows was detected that could widen a focus interval, but {what}.{rest}"


def doubts(facts: Facts) -> list[str]:
    """What a reader of the headline alone should know before the interval is used."""
    out = []
    if facts.says("group to cover") and facts.says("slopes differ"):
        level = facts.text("level of the slopes").split("/")[-1]
        out.append(f"Slopes of {facts.text('name of the slope')} differ from {level} to {level}.")
    if facts.says("group to cover") and facts.says("between differs from within"):
        out.append(f"The pooled coefficient of {_named(facts.text('term that differs'))} mixes two effects, ")
        out[-1] += "one within groups and one between them."
    if facts.says("mean in doubt"):
        out.append(f"A {facts.text('missing part of the mean')} could explain the same pattern.")
    return out


def _share(ledger: Ledger, standing: Standing) -> float:
    share = ledger.share(standing.key)
    return share.share if share is not None else -1.0


def _sentence(ledger: Ledger, s: Standing, rows: float, over: float) -> str:
    if s.key == "serial":
        return _serial(ledger, s, rows)
    if s.key == "spatial":
        return _spatial(ledger, s, over)
    named = subject(s)
    start = f"The {named}" if s.key != SITE else "Rows of one place"
    share = ledger.share(s.key)
    if share is None:
        return _unsized(start, s)
    if s.verdict != "present":
        return _unsettled(start, s, *_room(share))
    return f"{start} hang together: they share {_amount(share)} of what the model leaves over."


def _serial(ledger: Ledger, s: Standing, rows: float) -> str:
    rho = ledger.parameter(s.key, "ρ")
    start = "Rows that follow each other in time"
    if rho is None:
        return _unsized(start, s)
    if s.verdict != "present":
        first = f"their correlation is estimated at {_near_one(rho.estimate)} {rho.unit}"
        return _unsettled(start, s, first, f" and could be up to {_near_one(rho.high)}")
    half = ledger.parameter(s.key, "half-life")
    reach = f", half of it gone after {_with_unit(half)}" if half is not None and half.estimate > 0 else ""
    if rho.estimate > 0.5 ** (1 / rows):
        reach = ", hardly fading within these data"
    return f"{start} hang together: correlation {_figure(rho)} {rho.unit}{reach}."


def _spatial(ledger: Ledger, s: Standing, over: float) -> str:
    share, reach = ledger.share(s.key), ledger.parameter(s.key, "practical range")
    if share is None:
        return _unsized("Near places", s)
    if s.verdict != "present":
        return _unsettled("Near places", s, *_room(share))
    out = "" if reach is None or not np.isfinite(reach.estimate) else f", out to about {_with_unit(reach)}"
    if over > 1:
        out = ", hardly fading within the map"
    return f"Near places hang together: they share {_amount(share)} of what the model leaves over{out}."


def _amount(share: Share) -> str:
    return f"{percent(share.share)} ({percent_span(share.low, share.high)})"


def _room(share: Share) -> tuple[str, str]:
    """How large a share that was not seen is estimated, and how large it could be."""
    if share.share < 0.005:
        none = "none of what the model leaves over is estimated to be theirs"
        return none, f", but {_up_to(share)} could be"
    return (
        f"their share of what the model leaves over is estimated at {percent(share.share)}",
        f" and could be {_up_to(share)}",
    )


def _up_to(share: Share) -> str:
    return f"up to {percent(share.high)}"


def _unsettled(start: str, s: Standing, estimate: str, room: str) -> str:
    """A structure that is covered although it was not seen: because it could matter, or by design."""
    if s.fixed and not s.widens:
        return f"{start} were not seen to hang together, but the design fixes that level: {estimate}{room}."
    return f"Whether {_lower(start)} hang together is not settled: {estimate}{room}."


def _unsized(start: str, s: Standing) -> str:
    if s.verdict == "present":
        return f"{start} hang together; how strongly cannot be sized."
    return f"Whether {_lower(start)} hang together is not settled, and how strongly cannot be sized."


def _lower(text: str) -> str:
    return text[0].lower() + text[1:]


def _figure(q: Parameter) -> str:
    return f"{_near_one(q.estimate)} ({_near_one(q.low)} to {_near_one(q.high)})"


def _near_one(rho: float) -> str:
    """Two digits, and "more than 0.99" where they would read 1.0."""
    return "more than 0.99" if rho > 0.995 else significant(rho)


def _with_unit(q: Parameter) -> str:
    text = significant(q.estimate)
    unit = f"{q.unit}s" if q.unit in TIMES and text not in ("1", "1.0") else q.unit
    return f"{text}{NBSP}{unit}".strip()


# ---- consequence -----------------------------------------------------------------------------


def widths(facts: Facts, refits: tuple[Refit, ...], advised: Refit | None) -> list[tuple[str, float]]:
    """Per focus row, the width of the advised interval over that of the ordinary one.

    The ratio holds both the standard error and the quantile: with few degrees of freedom an interval
    is wider than its standard error alone would say.
    """
    ordinary = next((r for r in refits if r.remedy == "ordinary"), None)
    if advised is None or ordinary is None or advised is ordinary:
        return []
    out = []
    base = {row.term: row.high - row.low for row in ordinary.intervals}
    for row in advised.intervals:
        wide = row.high - row.low
        if row.term in facts.focus and np.isfinite(wide) and base.get(row.term, 0.0) > 0:
            out.append((row.term, wide / base[row.term]))
    return out


def consequence(found: list[tuple[str, float]], material: tuple[float, float]) -> str:
    """What it does to the focus interval that moves most, a widening before a narrowing; and the others."""
    if not found:
        return ""
    wider = [pair for pair in found if pair[1] > material[1]]
    term, factor = max(wider or found, key=lambda pair: abs(np.log(pair[1])))
    if material[0] <= factor <= material[1]:
        return f"It moves the intervals of {listed(_named(t) for t, _ in found[:3])} little."
    others = [(t, f) for t, f in found if t != term and not material[0] <= f <= material[1]]
    wide = f"the advised interval is {_times(factor)} the ordinary one"
    return f"It matters for {_named(term)}: {wide}{_more(others)}."


def _times(factor: float) -> str:
    """ "2.3 times as wide as", "narrower, 0.81 times as wide as" """
    shown = significant(factor)
    return f"{'narrower, ' if factor < 1 else ''}{shown} times as wide as"


def _more(others: list[tuple[str, float]]) -> str:
    """ "; that of x is narrower too", "; those of x and z are wider too" """
    if not others:
        return ""
    if len(others) > 2:
        return f"; those of {len(others)} more focus rows change as well"
    parts = [f"that of {_named(t)} is {significant(f)} times as wide" for t, f in others]
    return f"; {listed(parts)}"


def _named(term: str) -> str:
    """A level of a factor holds a colon of its own."""
    return f"“{term}”" if ":" in term else term


def nothing(ledger: Ledger) -> str:
    """The headline when nothing was found, with what these data could have shown."""
    could = [d for d in ledger.detectable if np.isfinite(d.value)]
    if not ledger.standing:
        return "No structure was declared, so no dependence between rows could be looked for."
    if not any(_tested(s) for s in ledger.standing):
        untested = _untested(ledger)
        return f"Dependence between rows could not be tested ({'; '.join(untested)}): none is ruled out."
    words = [
        f"{_article(d.parameter)} {d.parameter} of {significant(d.value)} or more ({_label(ledger, d.key)})"
        for d in could
    ]
    end = f"; these data could have shown {listed(words, 'or')}" if words else ""
    rest = _not_ruled_out(ledger) + _without_a_size(ledger)
    return f"No dependence was detected that could widen a focus interval{end}.{rest}"


def _tested(s: Standing) -> bool:
    return s.verdict != "not applicable"


def _not_ruled_out(ledger: Ledger) -> str:
    untested = _untested(ledger)
    return f" What could not be tested is not ruled out: {'; '.join(untested)}." if untested else ""


def _without_a_size(ledger: Ledger) -> str:
    """Structures that were tested and not found, of which no size can be named that would have shown."""
    sizes = {d.key: d.value for d in ledger.detectable}
    quiet = [s for s in ledger.standing if s.verdict in ("unclear", "not detected")]
    blind = listed([subject(s) for s in quiet if s.key in sizes and not np.isfinite(sizes[s.key])])
    open_ = listed([subject(s) for s in quiet if s.key not in sizes])
    out = f" Not even the strongest between {blind} would have shown in most such data." if blind else ""
    return out + (f" How weak a one would have shown between {open_} is not known." if open_ else "")


def _untested(ledger: Ledger) -> list[str]:
    """Each structure that no test could look at, with why."""
    why = dict(ledger.refused)
    out = []
    for s in (s for s in ledger.standing if not _tested(s)):
        reason = why.get(s.key, "").removeprefix(f"{s.key.removeprefix('group:')}: ").rstrip(".")
        reason = reason.replace("1 groups", "1 group") if reason.startswith("1 groups") else reason
        out.append(f"{s.label}: {reason}" if reason else s.label)
    return out


def _article(name: str) -> str:
    return "an" if name[0] in "aeiou" else "a"


def _label(ledger: Ledger, key: str) -> str:
    found = ledger.of(key)
    return found.label if found is not None else key


def filled(text: str, facts: Facts) -> str:
    """A rule's words with {fact names} replaced by what the facts say."""
    out, rest = "", text
    while "{" in rest:
        head, tail = rest.split("{", 1)
        name, rest = tail.split("}", 1)
        out += head + facts.text(name)
    return out + rest


def read_by(text: str, names: tuple[str, ...], facts: Facts) -> tuple[tuple[str, str], ...]:
    """(name, words) of the facts that a rule read, in its condition or in its words."""
    inside = [part.split("}")[0] for part in text.split("{")[1:]]
    wanted = dict.fromkeys((*names, *inside))
    return tuple((name, facts.text(name)) for name in wanted if name in facts)
