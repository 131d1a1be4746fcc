"""The verbs of rehearsal: how would each remedy have done on a design like this one?"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from clingstone.advice.choose import settle, shortlist_for
from clingstone.advice.facts import facts as gather_facts
from clingstone.needs import InputError
from clingstone.rehearsal.engine import Engine, Name
from clingstone.rehearsal.rehearsal import LONG, checked, planned
from clingstone.rehearsal.rehearsal import rehearse as run_plan
from clingstone.rehearsal.tallies import Rehearsal
from clingstone.rehearsal.verdict import heeded
from clingstone.remedies import remedy as remedy_of
from clingstone.run import Progress, Run, one_thread

if TYPE_CHECKING:
    from clingstone.case import Case
    from clingstone.examination import Examination


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
    from clingstone.examination import Examination, examined

    if isinstance(subject, Examination):
        return subject
    return examined(subject, Run(replace(subject.settings, rehearsal="none"), report=progress))


def heed(examination: Examination, found: Rehearsal) -> Examination:
    """A new examination whose advice has heard the rehearsal."""
    fits = examination.fits
    with one_thread():
        facts = gather_facts(fits, examination.evidence, examination.ledger)
        shortlist = shortlist_for(facts, fits)
        whole = tuple(r for r in examination.refits if r.coefficients or not r.intervals)
        first = settle(shortlist, facts, whole, None)
        advice = heeded(found, facts, shortlist, whole, first)
    return examination.rewritten(advice, found)
