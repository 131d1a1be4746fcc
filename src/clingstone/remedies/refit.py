"""From a remedy to a Refit: rows with their status, joint tests, and the same under other conventions."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING, Any, cast

import numpy as np

from clingstone.design.design import Design
from clingstone.maths.once import Array
from clingstone.needs import NotSupported
from clingstone.remedies.remedy import (
    Account,
    Convention,
    Estimates,
    Interval,
    JointTest,
    Ready,
    Refit,
    Remedy,
    multi,
    rows,
)

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

PERFECT = 1e-24  # e'e below this part of y'y: the model fits every row and leaves no spread


def at(remedy: Remedy, level: str, fits: Fits) -> Remedy:
    """The remedy set to run at a level ("" for its default), under the run's thresholds.

    Raises NotSupported when the design has no such level for it.
    """
    choices = remedy.abouts(fits.design)
    if not choices:
        raise remedy.lacking(fits.design).error()
    chosen = level or choices[0]
    known = {*choices, *fits.design.partitions, ""}
    if chosen not in known:
        raise NotSupported(f"{remedy.id} cannot be run at {chosen!r}", f"It can at: {', '.join(choices)}.")
    return cast(Remedy, replace(cast(Any, remedy), at=chosen, limits=fits.run.limits))


def refit(remedy: Remedy, level: str, fits: Fits) -> Refit:
    """Run a remedy at a level on one column of y. Raises NotSupported(reason, hint)."""
    remedy, ready, found = _run(remedy, level, fits)
    design = fits.design
    plain = read(remedy, ready, found, fits)
    notes = ready.notes + found.notes
    if not plain.converged:
        notes += ("The likelihood search stopped before it settled.",)
    names = _coefficients(found, design)
    return replace(
        plain,
        terms=_terms(remedy, found),
        account=ready.account(fits),
        coefficients=names,
        estimate=_floats(found.estimate[: len(names), 0]),
        covariance=None if found.covariance is None else tuple(map(_floats, found.covariance)),
        notes=notes + _unjoined(ready, found, design),
    )


def read(remedy: Remedy, ready: Ready, found: Estimates, fits: Fits) -> Refit:
    """A Refit of one column with nothing but its rows: no account, no joint tests, no notes.

    remedy : set to its level. found : estimates of that column alone.
    """
    return Refit(
        remedy=remedy.id,
        name=remedy.name,
        at=remedy.at,
        covers=tuple(sorted(remedy.covering(fits))),
        estimand=remedy.estimand,
        intervals=_intervals(remedy, ready, found, fits),
        terms=(),
        account=Account("", "", "", "", ""),
        confidence=fits.run.settings.confidence,
        boundary=bool(found.boundary[0]) if found.boundary is not None else False,
        converged=bool(found.converged[0]) if found.converged is not None else True,
    )


def explain(remedy: Remedy, level: str, fits: Fits) -> tuple[Convention, ...]:
    """What every interval becomes under the other common conventions, those refused left out."""
    out = []
    for words, other in remedy.conventions():
        try:
            chosen, ready, found = _run(other, level or remedy.at, fits)
            out.append(Convention(words, _intervals(chosen, ready, found, fits)))
        except NotSupported:
            continue  # a convention that these data cannot carry has no number to compare with
    return tuple(out)


def _run(remedy: Remedy, level: str, fits: Fits) -> tuple[Remedy, Ready, Estimates]:
    """The remedy set to its level, prepared, and what it finds in one column of y. Raises NotSupported."""
    if fits.response.B != 1:
        raise ValueError("a Refit is made of one column of y; read many columns with Ready.fit")
    refusal = remedy.needs.check(fits.design)
    if refusal is not None:
        raise refusal.error()
    _stop_if_perfect(fits)
    chosen = at(remedy, level, fits)
    ready = chosen.prepare(fits.design, chosen.working(fits))
    return chosen, ready, ready.fit(fits)


def _stop_if_perfect(fits: Fits) -> None:
    response = fits.response
    total = float(response.ss[0] + np.sum(response.coef[:, 0] ** 2))
    if float(response.ss[0]) <= PERFECT * total:
        raise NotSupported(
            "the model fits every row exactly, so there is no spread to judge an interval by",
            "Look for a predictor that is the response in other units.",
        )


def _coefficients(found: Estimates, design: Design) -> tuple[str, ...]:
    """Names of the rows that ``covariance`` is of."""
    if not found.names or found.covariance is None:
        return design.names
    return found.names[: len(found.covariance)]


def _intervals(remedy: Remedy, ready: Ready, found: Estimates, fits: Fits) -> tuple[Interval, ...]:
    names, weights = rows(fits.design)
    ordinary = np.sqrt(fits.response.s2[0]) * np.linalg.norm(fits.design.basis.contrast(weights), axis=0)
    if found.names and found.ordinary is not None:
        names, ordinary = found.names, found.ordinary[:, 0]
    df = np.broadcast_to(found.df, found.se.shape)[:, 0]
    out = []
    for j, name in enumerate(names):
        se = float(found.se[j, 0])
        out.append(
            Interval(
                term=name,
                remedy=remedy.id,
                estimate=float(found.estimate[j, 0]),
                se=se,
                se_ratio=se / float(ordinary[j]),
                df=float(df[j]),
                df_rule=ready.rule,
                low=float(found.low[j, 0]),
                high=float(found.high[j, 0]),
                p=float(found.p[j, 0]),
                status=_status(name, float(df[j]), ready, found, remedy),
            )
        )
    return tuple(out)


def _status(name: str, df: float, ready: Ready, found: Estimates, remedy: Remedy) -> str:
    if name in ready.unusable:
        return f"unusable: {ready.unusable[name].reason}"
    if df < remedy.limits.df_least:
        few = f"{df:.1f} degrees of freedom, below {remedy.limits.df_least:g}"
        return f"unusable: with {few}, the data cannot tell how long its interval should be"
    if found.boundary is not None and bool(found.boundary[0]):
        return "boundary: a dependence parameter was estimated at the end of its range"
    if round(df, 1) < remedy.limits.df_floor:  # as it is printed: 3.99996 are 4.0
        return f"caveat: {df:.1f} degrees of freedom, below {remedy.limits.df_floor:g}"
    return "ok"


def _terms(remedy: Remedy, found: Estimates) -> tuple[JointTest, ...]:
    return tuple(
        JointTest(term, remedy.id, _first(F), float(df1), _first(df2), _first(p))
        for term, (F, df1, df2, p) in found.joint.items()
    )


def _unjoined(ready: Ready, found: Estimates, design: Design) -> tuple[str, ...]:
    """A sentence per multi-df term that has no joint test."""
    return tuple(
        f"There is no joint test of {term.name}: the covariance of its {len(term.columns)} coefficients "
        "leaves it no degrees of freedom."
        for term in multi(design)
        if not any(name == term.name or name.startswith(f"{term.name} [") for name in found.joint)
        and not all(design.names[j] in ready.unusable for j in term.columns)
    )


def _first(value: Array | float) -> float:
    return float(np.ravel(value)[0])


def _floats(row: Array) -> tuple[float, ...]:
    return tuple(float(v) for v in row)
