"""Which findings a reader meets first; the rest stand under them, and none is lost."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from clingstone.evidence.finding import Finding

STRUCTURES = ("group", "serial", "spatial")
# Tests that ask another question than whether there is dependence: their answer changes the reading.
ANOTHER_QUESTION = (
    "break",
    "cluster-level",
    "common-shocks",
    "direction",
    "group-endogeneity",
    "local",
    "slope-variation",
)


def leading(found: Sequence[Finding]) -> list[Finding]:
    """Of the findings of one structure those that come first, the primary ones before the others.

    For a structure: its primary test, alone and with other structures fitted; any reading that tells
    otherwise than the primary one; what is present of another question. For the mean and for look-alikes:
    what is still present by the reading that has most fitted first. Two readings in the same words lead once.
    """
    last = {id(f) for f in with_most_given(found)}
    first = [f for f in found if f.primary or _changes(f, found, id(f) in last)]
    once = {f.sentence: f for f in reversed(first)}
    return sorted((f for f in first if once[f.sentence] is f), key=lambda f: not f.primary)


def _changes(f: Finding, found: Sequence[Finding], last: bool) -> bool:
    seen = f.verdict == "present"
    if f.structure not in STRUCTURES or f.test in ANOTHER_QUESTION:
        return seen and last
    own = [p for p in found if p.primary]
    if not own:
        return seen
    if f.given and any((p.test, p.about) == (f.test, f.about) for p in own):
        return True
    verdicts = {p.verdict for p in own}
    if f.given:
        return f.verdict not in verdicts and f.verdict != "not applicable"
    return seen and "present" not in verdicts


def with_most_given(found: Iterable[Finding]) -> list[Finding]:
    """Of the readings of one test at one place the one with most fitted first: it allows for most."""
    most: dict[tuple[str, str], Finding] = {}
    for f in found:
        held = most.get((f.test, f.about))
        if held is None or len(f.given) >= len(held.given):
            most[f.test, f.about] = f
    return list(most.values())
