"""What a terminal shows: the answer in 80 columns, the intervals that move, why, and what is not settled."""

from __future__ import annotations

import math

from clingstone.display import (
    COLUMNS,
    clean,
    columns_of,
    count,
    degrees,
    listed,
    number,
    pad,
    sentence,
    significant,
    span,
    wrapped,
)
from clingstone.remedies.remedy import Interval, Refit
from clingstone.results import Results
from clingstone.writeup.naming import lost, noun, with_rows
from clingstone.writeup.read import advised, decimals, distinct, level_percent, ordinary, row_of, served

ROWS = 6  # focus rows shown
REFITS = 6  # refits shown for each
NOTES = 4  # notes on the reading shown


def terminal(results: Results, width: int = COLUMNS) -> str:
    """The answer as plain text of at most ``width`` columns."""
    parts = [
        wrapped(case_line(results), width),
        wrapped(results.advice.headline, width),
        _intervals(results, width),
        _why(results, width),
        _unsettled(results, width),
        _noticed(results, width),
    ]
    return "\n\n".join("\n".join(lines) for lines in parts if lines)


def case_line(results: Results) -> str:
    """ "clinics.csv · 412 rows, 12 clinics of 9 to 71 rows, arm assigned by clinic"."""
    case = results.case
    parts = [count(case.n, "row")]
    for g in case.group:
        name = noun(g)
        sizes = (
            f" of {g.smallest} to {g.largest} rows"
            if g.smallest < g.largest
            else f" of {count(g.smallest, 'row')}"
        )
        parts.append(count(g.count, name) + sizes)
    if case.serial is not None:
        s = case.serial
        parts.append(f"{count(s.count, 'series', 'series')} in {s.time}, {s.spacing}")
    if case.spatial is not None:
        extent = f"{significant(case.spatial.extent)} {case.spatial.unit}".rstrip()
        parts.append(f"{count(case.spatial.sites, 'site')} over {extent}")
    parts += [f"{term} assigned by {level}" for term, level in case.assigned.items()]
    dropped = sum(case.dropped.values())
    if dropped:
        reasons = listed(
            f"{lost(why)} in {number(n, 0)}" if len(case.dropped) > 1 else lost(why)
            for why, n in case.dropped.items()
        )
        parts.append(f"{count(dropped, 'row')} left out ({reasons})")
    return f"{case.name} · {', '.join(parts)}"


def _intervals(results: Results, width: int) -> list[str]:
    """Per focus row, the refits one under the other, advised first after the ordinary fit."""
    names = served(results)
    lines: list[str] = []
    for name in names[:ROWS]:
        found = [(fit, row_of(fit, name)) for fit in _order(results, name)]
        shown = [(fit, row) for fit, row in found if row is not None][:REFITS]
        if lines and shown:
            lines.append("")
        lines += _block(results, name, shown, width)
    if len(names) > ROWS:
        more = len(names) - ROWS
        stand = "more focus row stands" if more == 1 else "more focus rows stand"
        lines += ["", *wrapped(f"{more} {stand} in the report.", width, "  ")]
    if lines:
        key = f"Intervals at {level_percent(results)}; df: degrees of freedom."
        lines += ["", *wrapped(key, width, "  ")]
    return lines


def _order(results: Results, name: str) -> tuple[Refit, ...]:
    """The ordinary fit first, so that the eye moves from what was to what is advised."""
    base = ordinary(results)
    return (*((base,) if base else ()), *(f for f in distinct(results, name) if f is not base))


def _block(results: Results, name: str, shown: list[tuple[Refit, Interval]], width: int) -> list[str]:
    places, best = decimals(results, name), advised(results)
    labels = [("advised: " if fit is best else "") + clean(fit.name) for fit, _ in shown]
    figures = [_figures(row, places) for _, row in shown]
    ends = [max(map(columns_of, column)) for column in zip(*figures, strict=True)] if figures else []
    tail = sum(ends) + 2 * len(ends)
    title = clean(name)
    left = max(columns_of(title), 4)
    room = width - 2 - left - 2 - tail
    if room < 24:  # the name of the row stands on a line of its own
        lines, left, title, room = [*wrapped(title, width, "  ")], 2, "", width - 6 - tail
    else:
        lines = []
    label_room = min(room, max(map(columns_of, labels), default=0))
    for k, (label, cells) in enumerate(zip(labels, figures, strict=True)):
        body = "  ".join(pad(c, w, True) for c, w in zip(cells, ends, strict=True))
        if room < 12:  # a narrow window: figures under their refit
            lines += [*wrapped(label, width, "    "), *wrapped("  ".join(cells), width, "      ")]
            continue
        words = wrapped(label, label_room, "", "  ")
        head = pad(title if k == 0 else "", left)
        lines.append(f"  {head}  {pad(words[0], label_room)}  {body}".rstrip())
        lines += [f"  {' ' * left}  {more}" for more in words[1:]]
    return lines


def _figures(row: Interval, places: int) -> tuple[str, str, str]:
    if not math.isfinite(row.low) and not math.isfinite(row.high):
        return number(row.estimate, places), "(no interval)", ""  # the reason is in the report
    df = f"{degrees(row.df)} df" if math.isfinite(row.df) else ""
    return number(row.estimate, places), f"({span(row.low, row.high, places)})", df


def _why(results: Results, width: int) -> list[str]:
    advice = results.advice
    said = [r.sentence for r in advice.because]
    if advice.state == "not correctable":
        whole = [entry for entry in advice.refused if entry[0] == "every correction"]
        for _, why, needed in whole or advice.refused[:2]:  # single refits stand in the report
            said += [sentence(why), sentence(needed)]
    if not advice.structures:
        said += [d.sentence for d in results.ledger.detectable]
    once = dict.fromkeys(words for words in said if words)
    return [line for words in once for line in wrapped(words, width)]


def _unsettled(results: Results, width: int) -> list[str]:
    cautions = [with_rows(results, r.sentence, r.rule) for r in results.advice.cautions]
    told = {r.rule for r in results.advice.cautions} & {"mean-in-doubt", "after-the-repair"}
    if results.advice.mean_in_doubt and not told:
        cautions.append("The mean itself is in doubt; see the curve and trend checks in the report.")
    return [line for c in cautions for line in wrapped(f"Not settled: {c}", width, "", "  ")]


def _noticed(results: Results, width: int) -> list[str]:
    """What was taken for granted or looked odd while reading: a sentinel, a code taken for a number."""
    notes = [f"Noticed: {clean(note)}" for note in results.case.notes[:NOTES]]
    more = len(results.case.notes) - NOTES
    if more > 0:
        notes.append(f"{count(more, 'more note')} on the reading in the report.")
    return [line for note in notes for line in wrapped(note, width, "", "  ")]
