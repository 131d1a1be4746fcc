"""Every contender read on the same replicates, chunk by chunk, into counts that add up.

A chunk is known by its truth and its number; its random numbers come from those two alone, and counts are
added in the order of the chunks. So the totals are the same bytes however many workers shared the work.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.ledger.ledger import focus_rows
from clingstone.maths import reference
from clingstone.maths.once import Array
from clingstone.needs import NotSupported
from clingstone.rehearsal.truths import Truth, draw, draw_summed, summed
from clingstone.remedies import remedy as remedy_of
from clingstone.remedies.gls import GlsReady
from clingstone.remedies.linear import LinearReady
from clingstone.remedies.refit import at as set_at
from clingstone.remedies.remedy import Ready, Remedy, rows
from clingstone.remedies.sandwich import ClusterReady, OrdinaryReady
from clingstone.run import Progress, Run

MEMORY = 256e6  # bytes of the columns of one chunk
COPIES = 8  # arrays of rows × columns that are alive at once
MOST = 500  # columns of a chunk; more gain nothing
Flags = npt.NDArray[np.bool_]


class Job(NamedTuple):
    """One chunk: the truth, its number among the chunks of that truth, and its columns."""

    truth: int
    chunk: int
    size: int


@dataclass(frozen=True, eq=False)
class Contender:
    """A remedy prepared for the user's design.

    pick : where each focus row stands among the remedy's rows, −1 where it has no interval for it.
    """

    remedy: Remedy
    ready: Ready
    pick: tuple[int, ...]


class Counts(NamedTuple):
    """What is counted of every contender and focus row.

    sums (C, K, F) by ``FIELDS``; apart (C, C, K) : replicates that the first covers and the second misses.
    size : replicates.
    """

    size: int
    sums: Array
    apart: Array

    def plus(self, other: Counts) -> Counts:
        return Counts(self.size + other.size, self.sums + other.sums, self.apart + other.apart)


FIELDS = (
    "held",  # an interval was had
    "covered",  # it holds the true value
    "rejected",  # p below 1 − confidence
    "width",
    "width²",
    "estimate",
    "estimate²",
    "boundary",  # a dependence parameter was estimated at the end of its range
    "unsettled",  # the likelihood search did not settle
)


class Columns(NamedTuple):
    """One contender on B columns, focus rows only: (K, B), and (B,) for the fit as a whole."""

    estimate: Array
    low: Array
    high: Array
    rejected: Flags
    boundary: Flags
    unsettled: Flags


@dataclass(frozen=True, eq=False)
class Study:
    """Truths and contenders over the user's design; all that a worker needs.

    fits : of the user's own y. terms : focus rows, by name. report : who hears of progress, left behind
    when the study is sent to a worker.
    """

    fits: Fits
    truths: tuple[Truth, ...]
    contenders: tuple[Contender, ...]
    terms: tuple[str, ...]
    report: Progress | None = None

    def __getstate__(self) -> dict[str, object]:
        return {**self.__dict__, "report": None}

    @property
    def chunk(self) -> int:
        """Columns of a chunk, from the design alone."""
        n, p = self.fits.design.n, self.fits.design.p
        return int(np.clip(MEMORY // (8 * COPIES * n * max(1.0, p / 8)), 1, MOST))

    def jobs(self, replicates: int) -> tuple[Job, ...]:
        """Chunks of so many replicates per truth, all truths in turn, so that any early stop is fair."""
        whole, rest = divmod(replicates, self.chunk)
        sizes = [self.chunk] * whole + ([rest] if rest else [])
        return tuple(Job(t, c, size) for c, size in enumerate(sizes) for t in range(len(self.truths)))

    def run(self, job: Job) -> Counts:
        """Draw one chunk and read every contender on it."""
        truth = self.truths[job.truth]
        rng = self.fits.run.child(f"rehearsal {truth.name}", job.chunk)
        key = self.summed_by(truth)
        if key is not None:
            response: Response = draw_summed(truth, self.fits, key, rng, job.size)
        else:
            response = draw(truth, self.fits, rng, job.size)
        again = Fits(response, self.fits.run)
        return _counted([read(c, again) for c in self.contenders])

    def summed_by(self, truth: Truth) -> str | None:
        """The partition whose sums and scores are all that any contender asks of y, if there is one."""
        keys = {key for c in self.contenders if (key := _asks(c)) is not None}
        if "rows" in keys:
            return None
        if not keys:
            keys = {k.removeprefix("group:") for k in truth.node if k.startswith("group:")}
        key = next(iter(keys), None)
        return key if key is not None and len(keys) == 1 and summed(truth, self.fits, key) else None

    # ---- on a shelf ----

    kind = "chunks"

    @property
    def identity(self) -> tuple[object, ...]:
        """All that the counts depend on."""
        contenders = [(c.remedy.id, c.remedy.at, c.pick) for c in self.contenders]
        return (*drawn_from(self.fits, self.truths, self.terms), contenders, self.chunk)

    def pack(self, result: Counts) -> dict[str, npt.NDArray[Any]]:
        return {"size": np.array(result.size), "sums": result.sums, "apart": result.apart}

    def unpack(self, job: Job, held: Mapping[str, npt.NDArray[Any]]) -> Counts | None:
        found = Counts(int(held["size"]), held["sums"], held["apart"])
        return found if found.size == job.size and found.sums.shape == self.empty().sums.shape else None

    def empty(self) -> Counts:
        C, K = len(self.contenders), len(self.terms)
        return Counts(0, np.zeros((C, K, len(FIELDS))), np.zeros((C, C, K)))


def drawn_from(fits: Fits, truths: Sequence[Truth], terms: Sequence[str]) -> tuple[object, ...]:
    """What replicates are made of: the design and y's own fit, the truths, the rows read, the seed."""
    settings, response = fits.run.settings, fits.response
    parts = [(key, part.codes.tobytes()) for key, part in sorted(response.design.partitions.items())]
    return (
        response.design.Q,
        response.coef,
        response.ss,
        parts,
        settings.seed,
        settings.confidence,
        tuple(terms),
        [(t.name, t.node, t.theta, t.sigma2, t.different) for t in truths],
    )


def study(
    fits: Fits, truths: Sequence[Truth], wanted: Iterable[tuple[str, str]]
) -> tuple[Study, list[tuple[str, str, str]]]:
    """A study of remedies (id, level), and those that are left out with the reason."""
    quiet = Fits(fits.response, Run(fits.run.settings, fits.run.limits))
    quiet._models.update(fits._models)
    terms = focus_rows(fits)
    names = rows(fits.design)[0]
    contenders, left = [], []
    for id, level in wanted:
        try:
            chosen = set_at(remedy_of(id), level, quiet)
            ready = chosen.prepare(fits.design, chosen.working(quiet))
        except NotSupported as error:
            left.append((id, level, str(error)))
            continue
        here = getattr(ready, "names", names)
        pick = tuple(here.index(t) if t in here and t not in ready.unusable else -1 for t in terms)
        if all(j < 0 for j in pick):
            left.append((id, level, "it has no interval for a term in focus"))
            continue
        contenders.append(Contender(chosen, ready, pick))
    return Study(quiet, tuple(truths), tuple(contenders), terms), left


def _asks(contender: Contender) -> str | None:
    """The partition through which a contender sees y; "rows" when by more; None when by Q'y and y'y alone."""
    ready = contender.ready
    if type(ready) is OrdinaryReady:
        return None
    if type(ready) is ClusterReady:
        return ready.part.key
    if type(ready) is GlsReady and contender.remedy.id == "mixed-intercept" and len(ready.components) == 1:
        return ready.components[0].part
    return "rows"


# ---- one contender -----------------------------------------------------------------------------


def read(contender: Contender, fits: Fits) -> Columns:
    """Estimates and intervals of the focus rows on every column of y."""
    ready, pick = contender.ready, np.array(contender.pick)
    if isinstance(ready, LinearReady) and _plain(ready, fits):
        return _linear(ready, pick, fits)
    try:
        return _fitted(ready, pick, fits)
    except (NotSupported, np.linalg.LinAlgError):
        if fits.response.B == 1:
            nothing = np.full((len(pick), 1), np.nan)
            no = np.zeros(1, dtype=bool)
            return Columns(nothing, nothing, nothing, np.zeros_like(nothing, dtype=bool), no, no)
        # One column that cannot be fitted must not lose the others.
        alone = [read(contender, Fits(fits.response.column(b), fits.run)) for b in range(fits.response.B)]
        return Columns(*(np.concatenate(parts, axis=-1) for parts in zip(*alone, strict=True)))


def _plain(ready: LinearReady, fits: Fits) -> bool:
    """Student's t on this very design, read as every linear remedy is."""
    kind = type(ready)
    same = kind.refer is LinearReady.refer and kind.fit is LinearReady.fit
    return same and ready.design is fits.response.design


def _linear(ready: LinearReady, pick: npt.NDArray[np.int64], fits: Fits) -> Columns:
    """Ordinary estimates with a t interval of known df: no p-value is worked out to be compared with α."""
    response, B = fits.response, fits.response.B
    estimate = (ready.W.T @ response.coef)[pick]
    se = np.sqrt(ready.variance(response))[pick]
    se = np.where((se > 0) & (pick >= 0)[:, None], se, np.nan)
    half = reference.t_quantile(1 - fits.run.settings.confidence, ready.df)[pick] * se
    no = np.zeros(B, dtype=bool)
    return Columns(estimate, estimate - half, estimate + half, np.abs(estimate) > half, no, no)


def _fitted(ready: Ready, pick: npt.NDArray[np.int64], fits: Fits) -> Columns:
    found = ready.fit(fits)
    B = fits.response.B
    gone = (pick < 0)[:, None]
    low, high = np.where(gone, np.nan, found.low[pick]), np.where(gone, np.nan, found.high[pick])
    p = np.where(gone, np.nan, found.p[pick])
    no = np.zeros(B, dtype=bool)
    return Columns(
        found.estimate[pick],
        low,
        high,
        p < 1 - fits.run.settings.confidence,
        no if found.boundary is None else found.boundary,
        no if found.converged is None else ~found.converged,
    )


def _counted(read: list[Columns]) -> Counts:
    K, B = read[0].estimate.shape
    sums = np.empty((len(read), K, len(FIELDS)))
    covered = np.empty((len(read), K, B))
    for c, one in enumerate(read):
        held = np.isfinite(one.low) & np.isfinite(one.high)
        covered[c] = held & (one.low <= 0) & (one.high >= 0)
        width = np.where(held, one.high - one.low, 0.0)
        estimate = np.where(held, one.estimate, 0.0)
        each = (
            held,
            covered[c],
            held & one.rejected,
            width,
            width**2,
            estimate,
            estimate**2,
            held & one.boundary,
            held & one.unsettled,
        )
        sums[c] = np.stack([value.sum(axis=1) for value in each], axis=1)
    apart = np.einsum("akb,ckb->ack", covered, 1.0 - covered)
    return Counts(B, sums, apart)


def without(found: Study, kept: Sequence[int]) -> Study:
    """The study of some of its contenders."""
    return replace(found, contenders=tuple(found.contenders[i] for i in kept))
