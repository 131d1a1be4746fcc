"""Rehearse: y simulated on the user's own design, every remedy read on the same replicates."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from clingstone.advice.entries import Advice, Reason, Scores
from clingstone.covariance.fits import Fits
from clingstone.display import number
from clingstone.ledger.ledger import Ledger
from clingstone.needs import InputError, NotSupported
from clingstone.rehearsal import cost
from clingstone.rehearsal.engine import Engine
from clingstone.rehearsal.path import Step, paths, walks
from clingstone.rehearsal.shelf import Shelf, results
from clingstone.rehearsal.study import Counts, Job, Study, study, without
from clingstone.rehearsal.tallies import Left, Rehearsal, Walk, pairs, scores, tallies
from clingstone.rehearsal.truths import truths
from clingstone.remedies import remedy as remedy_of
from clingstone.run import Run

LONG = 10_000  # replicates per truth of a long rehearsal, at the most
FIRST = 1_000  # the first look at the ranking; later looks at twice as many each time
SURE = 0.0025  # Monte-Carlo error at which a coverage is known well enough whatever it is
TOO_LARGE = "these data are too large for a short rehearsal"
BUILT = ("repaired-mean",)  # advice that is no remedy of its own

Choices = Iterable[tuple[str, str]]


@dataclass(frozen=True)
class Plan:
    """What is about to be run: a study, the replicates per truth, and who is not in it."""

    study: Study
    replicates: int
    left: tuple[tuple[str, str, str], ...]


def planned(fits: Fits, ledger: Ledger, choices: Choices, replicates: str | int = "auto") -> Plan:
    """Truths, contenders and the number of replicates.

    replicates : "auto" gives a short rehearsal, its size from a cost formula; a number is per truth, and
    no remedy is left out for its cost.

    Raises NotSupported when nothing can be rehearsed.
    """
    if not fits.design.known:
        raise NotSupported(
            "only residuals were given, so there is no model to rehearse intervals on",
            "Give the data and the model formula, or a fitted model with its data.",
        )
    choices = tuple(choices)
    short = not isinstance(replicates, int)
    if not short:
        checked(int(replicates))
    seen = truths(fits, ledger)
    if short and not cost.drawable(Study(fits, seen, (), ())):
        raise NotSupported(TOO_LARGE, "Run clingstone rehearse.")
    wanted = [c for c in choices if c[0] not in BUILT]
    found, left = study(fits, seen, wanted)
    found = replace(found, report=fits.run.report)
    left += [
        (id, at, "it is built from another remedy on a wider model") for id, at in choices if id in BUILT
    ]
    if not found.terms or not found.contenders:
        raise NotSupported("no remedy has an interval for a term in focus", "Name terms with focus=.")
    if isinstance(replicates, int):
        return Plan(found, replicates, tuple(left))
    kept, dear, count = cost.affordable(found)
    if not kept:
        raise NotSupported(TOO_LARGE, "Run clingstone rehearse.")
    return Plan(without(found, kept), count, (*left, *dear))


def rehearse(
    plan: Plan,
    *,
    engine: Engine | None = None,
    folder: Path | None = None,
    stop_early: bool = False,
    whole_path: int = 0,
) -> Rehearsal:
    """Run a plan.

    whole_path : replicates per truth in which the user's whole examination is repeated.
    folder : where finished chunks of both are put, and found again by a later run of the same plan.
    stop_early : look at the ranking at fixed numbers of replicates and stop once it is settled.

    Raises InputError when the folder holds the chunks of another plan.
    """
    found = plan.study
    run = Run(found.fits.run.settings, found.fits.run.limits, found.report)
    jobs = found.jobs(plan.replicates)
    counts: dict[int, Counts] = {t: found.empty() for t in range(len(found.truths))}
    stopped = f"after the {plan.replicates:,} replicates per truth that were planned"
    shelf = Shelf(folder, found) if folder is not None else None
    with (engine or Engine()).open(found) as pool, run.progress("rehearsing", len(jobs)) as advance:
        for stage in stages(jobs, found.chunk, stop_early):
            # Counts are added in the order of the jobs, whoever made them and whenever.
            for job, one in results(pool, stage, shelf):
                counts[job.truth] = counts[job.truth].plus(one)
                advance(1)
            if stop_early and stage[-1] != jobs[-1] and settled(found, counts):
                stopped = f"after {counts[0].size:,} replicates per truth, when the ranking was settled"
                break
    result = told(plan, counts, stopped)
    if not whole_path:
        return result
    return replace(result, walks=walked(plan, engine or Engine(), whole_path, folder))


def walked(plan: Plan, engine: Engine, replicates: int, folder: Path | None = None) -> tuple[Walk, ...]:
    """The whole path in so many replicates per truth."""
    work = paths(plan.study)
    run = Run(work.fits.run.settings, work.fits.run.limits, plan.study.report)
    jobs: Sequence[Job] = work.jobs(replicates)
    steps: list[Step] = []
    shelf = Shelf(folder, work) if folder is not None else None
    with engine.open(work) as pool, run.progress("whole paths", len(jobs)) as advance:
        for _, some in results(pool, jobs, shelf):
            steps += some
            advance(1)
    return walks(work.terms, steps)


def told(plan: Plan, counts: Mapping[int, Counts], stopped: str) -> Rehearsal:
    """The counts as a plain Rehearsal."""
    found = plan.study
    settings = found.fits.run.settings
    rows = tallies(found, counts)
    return Rehearsal(
        truths=found.truths,
        tallies=rows,
        pairs=pairs(found, counts),
        scores=scores(rows, settings.confidence),
        walks=(),
        left_out=tuple(Left(*each) for each in plan.left),
        replicates=counts[0].size,
        confidence=settings.confidence,
        seed=settings.seed,
        stopped=stopped,
    )


# ---- when the ranking is settled -----------------------------------------------------------------


def stages(jobs: Sequence[Job], chunk: int, stop_early: bool) -> list[tuple[Job, ...]]:
    """The jobs cut at the looks: 1,000, 2,000, 4,000 … replicates per truth, by whole chunks."""
    if not stop_early:
        return [tuple(jobs)]
    out, start, look = [], 0, FIRST
    while start < len(jobs):
        last = max(1, -(-look // chunk))
        end = next((i for i, job in enumerate(jobs) if job.chunk >= last), len(jobs))
        if end > start:
            out.append(tuple(jobs[start:end]))
        start, look = end, 2 * look
    return out


def settled(found: Study, counts: Mapping[int, Counts]) -> bool:
    """Every remedy is clearly adequate or clearly not, so more replicates would not change who is named."""
    table = scores(tallies(found, counts), found.fits.run.settings.confidence)
    floor = table.confidence - 0.01

    def clear(coverage: float, mcse: float) -> bool:
        return mcse <= SURE or coverage - mcse >= floor or coverage + 2 * mcse < floor

    return all(clear(row.coverage, row.mcse) for row in table.rows)


# ---- into the advice -----------------------------------------------------------------------------


def scores_for(found: Rehearsal, advice: Advice) -> Scores | None:
    """The scores that may move an advice reached by the rules, or None when they may not.

    Only remedies with the advised one's estimand compete, and only when the advised one was rehearsed
    itself: an advice is not given up for a remedy that happens to be cheap to simulate.
    """
    if found.scores.get(advice.remedy, advice.at) is None:
        return None
    estimand = remedy_of(advice.remedy).estimand
    rows = tuple(r for r in found.scores.rows if remedy_of(r.remedy).estimand == estimand)
    return replace(found.scores, rows=rows)


def reason(found: Rehearsal, advice: Advice, named: str) -> Reason | None:
    """Why the rehearsal stands behind an advice; None where the advised remedy was not rehearsed or fails."""
    row = found.scores.get(advice.remedy, advice.at)
    if row is None or not found.scores.adequate(advice.remedy, advice.at):
        return None
    narrower = [r for r in found.scores.rows if r.width < 0.99 * row.width]
    best = not any(found.scores.adequate(r.remedy, r.at) for r in narrower)
    alone = ", and no other remedy that did as well was narrower by more than 1 %" if best else ""
    return Reason(
        f"Rehearsed on this design, the intervals of {named} held the true value in at least "
        f"{number(100 * row.coverage, 1)} % of replicates under each of {len(found.truths)} error models "
        f"(Monte-Carlo error {number(100 * row.mcse, 1)} points){alone}.",
        "rehearsed",
        (("smallest coverage", number(row.coverage, 3)), ("replicates per truth", f"{found.replicates:,}")),
        "",
        "measured",
    )


def checked(replicates: int) -> int:
    """A number of replicates that can be asked for. Raises InputError."""
    if not 1 <= replicates <= 10_000_000:
        raise InputError(
            f"{replicates} replicates cannot be rehearsed", "Use a number from 1 to 10,000,000 per truth."
        )
    return replicates
