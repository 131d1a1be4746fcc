"""The whole path inside each replicate: detect, advise, refit, then the advised interval.

Reporting the interval of whatever remedy the tests led to has a price that no single remedy's coverage
shows. Here every replicate is examined as the user's own y was, by the rules alone, and the interval that it
would have reported is held against the true value. Inference after selection has no uniform guarantee (Leeb
& Pötscher 2005); this is a statement about the error models that were simulated.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from clingstone.covariance.each import each
from clingstone.covariance.fits import Fits
from clingstone.design.response import Response
from clingstone.maths.once import once
from clingstone.rehearsal.many import Many
from clingstone.rehearsal.study import MEMORY, Job, Study, drawn_from
from clingstone.rehearsal.tallies import Chosen, Walk, binomial
from clingstone.rehearsal.truths import Truth, errors
from clingstone.remedies.remedy import Refit, rows

CHUNK = 100  # replicates examined together at the most
ALONE = 5  # … where every one is fitted by itself
ALIVE = 40  # arrays of rows × replicates that are alive at once


class Step(NamedTuple):
    """One replicate: the remedy that was advised ("" for none), and per term: covered, relative width."""

    remedy: str
    at: str
    covered: tuple[bool, ...]
    relative: tuple[float, ...]


@dataclass(frozen=True, eq=False)
class Paths:
    """Replicates to be examined like the user's y; what a worker needs."""

    fits: Fits
    truths: tuple[Truth, ...]
    terms: tuple[str, ...]

    @property
    def chunk(self) -> int:
        """Replicates of a chunk, from the design alone; few where each is fitted by itself."""
        fits = self.fits
        algebra = fits.algebra(fits.full_node)
        if len(algebra.parameters) and each(algebra, fits.response) is None:
            return ALONE
        return int(np.clip(MEMORY // (8 * ALIVE * fits.design.n), 1, CHUNK))

    def jobs(self, replicates: int) -> tuple[Job, ...]:
        whole, rest = divmod(replicates, self.chunk)
        sizes = [self.chunk] * whole + ([rest] if rest else [])
        return tuple(Job(t, c, size) for c, size in enumerate(sizes) for t in range(len(self.truths)))

    def run(self, job: Job) -> tuple[Step, ...]:
        fits, truth = self.fits, self.truths[job.truth]
        rng = fits.run.child(f"whole path {truth.name}", job.chunk)
        E = errors(truth, fits, rng, job.size)
        # The mean of the user's own fit: tests of the mean look along fitted values.
        Y = fits.design.Q @ fits.response.coef[:, :1] + E
        e = fits.design.basis.project(Y)
        response = Response(fits.design, fits.design.Q.T @ Y, e, np.einsum("ij,ij->j", e, e))
        many = Many(Fits(response, fits.run, depth="exact"))
        return tuple(self._step(*many.advised(b)) for b in range(job.size))

    # ---- on a shelf ----

    kind = "paths"

    @property
    def identity(self) -> tuple[object, ...]:
        """All that the steps depend on."""
        return (*drawn_from(self.fits, self.truths, self.terms), self.fits.run.settings.material, self.chunk)

    def pack(self, result: tuple[Step, ...]) -> dict[str, npt.NDArray[Any]]:
        return {
            "remedy": np.array([step.remedy for step in result]),
            "at": np.array([step.at for step in result]),
            "covered": np.array([step.covered for step in result]),
            "relative": np.array([step.relative for step in result]),
        }

    def unpack(self, job: Job, held: Mapping[str, npt.NDArray[Any]]) -> tuple[Step, ...] | None:
        parts = (held[name].tolist() for name in ("remedy", "at", "covered", "relative"))
        found = tuple(
            Step(remedy, at, tuple(covered), tuple(relative))
            for remedy, at, covered, relative in zip(*parts, strict=True)
        )
        return found if len(found) == job.size else None

    def _step(self, chosen: Refit | None, ordinary: Refit) -> Step:
        if chosen is None:
            none = float("nan")
            return Step("", "", (False,) * len(self.terms), (none,) * len(self.terms))
        covered, relative = [], []
        have = {row.term: row for row in chosen.intervals}
        plain = {row.term: row for row in ordinary.intervals}
        for term in self.terms:
            row, base = have.get(term), plain[term]
            covered.append(row is not None and row.low <= self._true[term] <= row.high)
            width = float("nan") if row is None else (row.high - row.low) / (base.high - base.low)
            relative.append(width)
        return Step(chosen.remedy, chosen.at, tuple(covered), tuple(relative))

    @property
    @once
    def _true(self) -> Mapping[str, float]:
        names, weights = rows(self.fits.design)
        values = self.fits.design.basis.contrast(weights).T @ self.fits.response.coef[:, 0]
        return dict(zip(names, values.tolist(), strict=True))


def paths(study: Study) -> Paths:
    return Paths(study.fits, study.truths, study.terms)


def walks(terms: Sequence[str], steps: Sequence[Step]) -> tuple[Walk, ...]:
    """Per focus row: coverage and width of what was reported, and how often each remedy was."""
    out = []
    names = sorted({(s.remedy, s.at) for s in steps}, key=lambda n: (-_count(steps, n), n))
    for k, term in enumerate(terms):
        told = [s for s in steps if s.remedy]
        coverage = _share(told, k)
        widths = np.array([s.relative[k] for s in told])
        chosen = []
        for name in names:
            own = [s for s in steps if (s.remedy, s.at) == name]
            c = _share(own, k)
            chosen.append(Chosen(*name, len(own) / len(steps), c, binomial(c, len(own))))
        relative = float(np.nanmean(widths)) if np.isfinite(widths).any() else float("nan")
        mcse = binomial(coverage, len(told)) if told else float("nan")
        out.append(Walk(len(steps), term, coverage, mcse, relative, tuple(chosen)))
    return tuple(out)


def _count(steps: Sequence[Step], name: tuple[str, str]) -> int:
    return sum((s.remedy, s.at) == name for s in steps)


def _share(steps: Sequence[Step], k: int) -> float:
    return float(np.mean([s.covered[k] for s in steps])) if steps else float("nan")
