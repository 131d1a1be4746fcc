"""What every part of the write-up asks of Results: the advised refit, the focus rows, the digits."""

from __future__ import annotations

import math

from clingstone.display import decimals_for, number, shortened
from clingstone.remedies.remedy import Interval, Refit
from clingstone.results import Results

ORDINARY = "ordinary"


def advised(results: Results) -> Refit | None:
    """The refit that the advice names, or None when nothing is advised or it was not fitted."""
    named = [r for r in results.refits if r.remedy == results.advice.remedy]
    return next((r for r in named if r.at == results.advice.at), named[0] if named else None)


def ordinary(results: Results) -> Refit | None:
    return next((r for r in results.refits if r.remedy == ORDINARY), None)


def ordered(results: Results) -> tuple[Refit, ...]:
    """Refits as a reader meets them: advised, ordinary, the alternatives of the advice, the others."""
    named = {(fit.remedy, fit.at): fit for fit in reversed(results.refits)}
    alternatives = [named.get((c.remedy, c.at)) for c in results.advice.alternatives]
    first = [advised(results), ordinary(results), *alternatives]
    chosen = list(dict.fromkeys(id(r) for r in first if r is not None))
    lead = [r for key in chosen for r in results.refits if id(r) == key]
    return (*lead, *(r for r in results.refits if id(r) not in chosen))


ALONE = " [alone]"  # marks the row of a term that was fitted alone with the constant


def distinct(results: Results, name: str) -> tuple[Refit, ...]:
    """Refits with numbers for a row, as a reader meets them, each interval once.

    Two remedies can be one and the same fit (everything together, where there is one structure); the
    first of them stands for both. The ordinary fit always stands for itself.
    """
    out: list[tuple[Refit, Interval]] = []
    for fit in ordered(results):
        row = row_of(fit, name)
        if row is None:
            continue
        if fit is ordinary(results) or not any(_same(row, other) for _, other in out):
            out.append((fit, row))
    return tuple(fit for fit, _ in out)


def _same(a: Interval, b: Interval) -> bool:
    close = 1e-6 * max(a.se, b.se)
    pairs = ((a.estimate, b.estimate), (a.low, b.low), (a.high, b.high))
    return all(abs(x - y) <= close for x, y in pairs)


def alone(results: Results, name: str) -> tuple[Refit, Interval] | None:
    """The row of a coefficient whose term was fitted alone with the constant, where that was asked for."""
    found = ((fit, row_of(fit, name + ALONE)) for fit in results.refits)
    return next(((fit, row) for fit, row in found if row is not None), None)


def term_of(coefficient: str) -> str:
    """ "dose × arm: treated" belongs to the term "dose × arm", "bs(x), part 2" to "bs(x)"."""
    parts = (part.split(": ")[0] for part in coefficient.split(" × "))
    return " × ".join(part.rpartition(", part ")[0] or part for part in parts)


def names_of(results: Results) -> tuple[str, ...]:
    """Every reported row: coefficients, contrasts, means, and parts such as "x [within]"."""
    seen: dict[str, None] = {}
    for fit in results.refits:
        seen.update(dict.fromkeys(row.term for row in fit.intervals if not row.term.endswith(ALONE)))
    return tuple(seen)


def focus_rows(results: Results) -> tuple[str, ...]:
    """Names of the interval rows that the focus asks for, in the order of the focus."""
    names = names_of(results)
    focus = results.case.focus or tuple(t for t in results.case.terms if t != "constant")
    out: dict[str, None] = {}
    for term in focus:
        exact = [n for n in names if n == term or n.startswith(f"{term} [")]
        out.update(dict.fromkeys(exact or [n for n in names if term_of(n) == term]))
    return tuple(out)


def served(results: Results) -> tuple[str, ...]:
    """Focus rows that the advised or the ordinary refit has; parts such as "x [within]" stand in tables."""
    lead = (advised(results), ordinary(results))
    names = focus_rows(results)
    chosen = tuple(n for n in names if any(row_of(fit, n) is not None for fit in lead))
    return chosen or names


def row_of(fit: Refit | None, name: str) -> Interval | None:
    """A row of a refit that has numbers to show, or None."""
    if fit is None:
        return None
    return next((r for r in fit.intervals if r.term == name and math.isfinite(r.estimate)), None)


def has_freedom(fit: Refit) -> bool:
    """Whether degrees of freedom enter its intervals: not where resampling takes the place of a t law."""
    return any(math.isfinite(row.df) for row in fit.intervals)


def account_pairs(fit: Refit) -> tuple[tuple[str, str], ...]:
    """How a refit explains itself, its figures at reading length; a rule that gives no degrees of freedom
    is not called one."""
    named = "degrees of freedom"
    rule = named if has_freedom(fit) or not fit.intervals else "intervals and p-values"
    return tuple((rule if name == named else name, shortened(value)) for name, value in fit.account.pairs())


def decimals(results: Results, name: str) -> int:
    """Decimals for every rung of one row.

    Two significant digits of the advised (else ordinary) standard error, and at least one of the
    smallest, so that no interval is printed with equal ends.
    """
    rows = [row_of(fit, name) for fit in ordered(results)]
    errors = [r.se for r in rows if r is not None and math.isfinite(r.se) and r.se > 0]
    if not errors:
        return 2
    return max(decimals_for(errors[0]), decimals_for(min(errors), 1))


def structure_of(results: Results, key: str) -> str | None:
    """The family of a component key: "group:clinic" is a group, "row" belongs to none."""
    for share in results.ledger.shares:
        if share.key == key:
            return share.structure
    family = key.split(":")[0]
    return family if family in ("group", "serial", "spatial") else None


def level_percent(results: Results) -> str:
    """The confidence level as words: "95 %"."""
    level = 100 * float(
        results.settings.get("confidence", results.refits[0].confidence if results.refits else 0.95)
    )
    return f"{level:g}\u00a0%"


BASES = {"log": math.e, "log2": 2.0, "log10": 10.0}


def as_ratio(results: Results, fit: Refit, row: Interval) -> str:
    """A coefficient of a logarithm as a ratio with its interval: "1.04 (1.01 to 1.07)"; else "".

    Only coefficients are ratios: the constant and named means are levels, not differences.
    """
    base = BASES.get(results.case.transformed)
    if base is None or row.term == "constant" or row.term not in fit.coefficients:
        return ""
    values = [base**v if v * math.log(base) < 700 else math.inf for v in (row.estimate, row.low, row.high)]
    if not math.isfinite(values[0]):
        return ""
    places = decimals_for(values[0] * math.log(base) * row.se)
    estimate, low, high = (number(v, places) for v in values)
    return f"{estimate} ({low} to {high})"
