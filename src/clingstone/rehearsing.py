"""The verbs of rehearsal: how would each remedy have done on a design like this one?"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from clingstone.examination import Examination, examined
from clingstone.ledger.ledger import focus_rows
from clingstone.needs import InputError
from clingstone.rehearsal.engine import Engine, Name
from clingstone.rehearsal.plan import Basics, Plan, Varies, stated
from clingstone.rehearsal.plan import planned as plan_sizes
from clingstone.rehearsal.rehearsal import LONG, checked, planned
from clingstone.rehearsal.rehearsal import rehearse as run_plan
from clingstone.rehearsal.tallies import Rehearsal
from clingstone.remedies import remedy as remedy_of
from clingstone.remedies.remedy import rows as all_rows
from clingstone.run import Progress, Run, Settings, one_thread

if TYPE_CHECKING:
    from clingstone.case import Case


def rehearse(
    subject: Case | Examination,
    replicates: int = LONG,
    *,
    remedies: Sequence[str] | None = None,
    engine: Name = "here",
    workers: int | None = None,
    scheduler: str | None = None,
    folder: str | Path | None = None,
    stop_early: bool = True,
    whole_path: int = 0,
    progress: Progress | None = None,
) -> Rehearsal:
    """Simulate y on a design many times and read every remedy on the same replicates.

    Parameters
    ----------
    subject : a case, or an examination of one.
    replicates : per error model, at the most.
    remedies : ids to rehearse; by default every one that was refitted.
    engine : "here" (this process), "cores" (processes on this machine) or "dask" (a cluster). The
        numbers are the same in all three.
    workers : processes of "cores"; all cores when left out. scheduler : address of the Dask scheduler.
    folder : where finished chunks are kept; the same call goes on from there after a stop.
    stop_early : look at 1,000, 2,000, 4,000 … replicates and stop once every remedy is clearly adequate or
        clearly not.
    whole_path : replicates per error model in which the whole examination is repeated (detect, advise,
        refit): what choosing by test costs. Each takes as long as an examination.
    progress : called with (label, done, total).

    Returns
    -------
    Rehearsal

    Raises
    ------
    InputError : a number, an id or a folder cannot be used, or no scheduler answers.
    NotSupported : nothing can be rehearsed on this design.
    """
    examination = _examined(subject, progress)
    fits = examination.fits
    run = Run(fits.run.settings, fits.run.limits, progress)
    choices = [(r.remedy, r.at) for r in examination.refits]
    for id in remedies or ():
        remedy_of(id)
    if remedies is not None:
        choices = [c for c in choices if c[0] in remedies]
        if not choices:
            raise InputError(
                f"none of {', '.join(remedies)} was refitted on these data",
                f"Refitted were: {', '.join(dict.fromkeys(r.remedy for r in examination.refits))}.",
            )
    with one_thread():
        made = planned(fits, examination.ledger, tuple(dict.fromkeys(choices)), checked(replicates))
        made = replace(made, study=replace(made.study, report=run.report))
        where = Path(folder) if folder is not None else None
        return run_plan(
            made,
            engine=Engine(engine, workers, scheduler),
            folder=where,
            stop_early=stop_early,
            whole_path=whole_path,
        )


def _examined(subject: Case | Examination, progress: Progress | None) -> Examination:
    if isinstance(subject, Examination):
        return subject
    return examined(subject, Run(replace(subject.settings, rehearsal="none"), report=progress))


def plan(
    subject: Case | Examination | None = None,
    *,
    term: str | None = None,
    groups: Sequence[int] | None = None,
    rows: Sequence[float] | None = None,
    icc: float | None = None,
    rho: float | None = None,
    range: float | None = None,
    sd: float = 1.0,
    varies: Varies = "unit",
    cost_group: float | None = None,
    cost_row: float | None = None,
    confidence: float | None = None,
) -> Plan:
    """The interval width to expect with other numbers of groups (series, places) and of rows in each.

    Parameters
    ----------
    subject : an examination or a case, whose design and fitted error model are enlarged; left out, two
        arms of equal size are planned from stated numbers.
    term : coefficient or contrast; by default the first in focus.
    groups, rows : numbers to compare. From stated numbers the first of each is the size to start from.
    icc, rho, range : one of them, without a subject: correlation of two rows of a group; of neighbouring
        visits; practical range on a square map of side 1.
    sd : standard deviation of one row. varies : whether the arm differs between units or between rows.
    cost_group, cost_row : what one more group and one more row cost.

    Raises
    ------
    InputError : an argument cannot be used. NotSupported : the design cannot be enlarged.
    """
    if subject is None:
        given = stated(*_start(groups, rows), icc=icc, rho=rho, reach=range, sd=sd, varies=varies)
        run = Run(Settings(confidence=0.95 if confidence is None else confidence))
    else:
        if any(v is not None for v in (icc, rho, range)):
            raise InputError(
                "icc, rho and range are stated where there are no data",
                "Leave them out: the fitted error model is used.",
            )
        given, run = _from_examination(_examined(subject, None), term)
        if confidence is not None:
            run = Run(replace(run.settings, confidence=confidence), run.limits)
    with one_thread():
        return plan_sizes(given, run, groups, rows, cost_group, cost_row)


def _start(groups: Sequence[int] | None, rows: Sequence[float] | None) -> tuple[int, int]:
    if not groups or not rows:
        raise InputError(
            "a plan from stated numbers needs groups and rows", "Such as groups=[20], rows=[10]."
        )
    return int(groups[0]), int(rows[0])


def _from_examination(examination: Examination, term: str | None) -> tuple[Basics, Run]:
    fits = examination.fits
    known = focus_rows(fits)
    names = all_rows(fits.design)[0] if fits.design.known else ()
    wanted = term if term is not None else next(iter(known), "")
    if wanted not in names:
        raise InputError(
            f"there is no coefficient {wanted!r} to plan for", f"Choose one of {', '.join(names)}."
        )
    node = frozenset(examination.ledger.model) or fits.full_node
    model = fits[node]
    said = (
        "The error model is the one fitted to the data at hand; its own uncertainty is not shown.",
        "New units are like those at hand, taken in turn, and new rows repeat the predictors of their group.",
    )
    theta = np.asarray(model.theta[:, 0])
    held = tuple(int(i) for i in np.flatnonzero(model.at_bound[:, 0]))
    return Basics(fits.design, model.node, theta, float(model.sigma2[0]), wanted, said, held), fits.run
