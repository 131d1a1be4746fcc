"""Randomisation inference: what was assigned is permuted at the level of assignment."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar, Literal

import numpy as np

from clingstone.design.design import Design, Term, rows_of
from clingstone.maths import assignments
from clingstone.maths.assignments import Ints, Rotated, Units
from clingstone.maths.once import Array
from clingstone.maths.partition import Partition
from clingstone.maths.resample import Curves
from clingstone.needs import Family, Limits, Needs, NotSupported, Refusal
from clingstone.remedies.clusters import clusters, covered
from clingstone.remedies.joint import Joint
from clingstone.remedies.linear import positive_m, reported
from clingstone.remedies.remedy import GROUPED, Account, Estimand, Estimates, Plain, Price
from clingstone.remedies.resampled import ResampledReady

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits

MANY = 9999
SIMULATED = 399  # permutations for each of many columns of y
CELLS = 1e7  # permutations × units, beyond which fewer are drawn, but never fewer than 399
BLOCK = 1_000_000  # permutations × units at once


@dataclass(frozen=True, eq=False)
class Lot:
    """One column that was assigned. column : its place. xi : (G,) its values. strata : (G,) within which
    units change places. ways : distinct assignments. every : all of them are counted out."""

    column: int
    xi: Array
    strata: Ints
    ways: float
    every: bool

    def taken(self, rng: np.random.Generator, P: int) -> Iterator[Ints]:
        """Blocks of (P, G): the unit whose value each unit takes."""
        if self.every:
            yield assignments.every(assignments.levels_of(self.xi), self.strata)
            return
        step = max(1, BLOCK // len(self.xi))
        for start in range(0, P, step):
            yield assignments.drawn(rng, self.strata, min(step, P - start))


@dataclass(frozen=True, eq=False, kw_only=True)
class RandomisationReady(ResampledReady):
    """lots : per assigned column. wholes : per assigned term of several columns, its strata and ways."""

    lots: tuple[Lot, ...]
    terms: tuple[tuple[Term, Ints, float], ...]
    draws: int
    studentised: bool

    def _draws(self, fits: Fits) -> int:
        return self.draws if fits.response.B == 1 else min(self.draws, SIMULATED)

    def fit(self, fits: Fits) -> Estimates:
        plain = super().fit(fits)
        response, alpha, part = fits.response, 1 - fits.run.settings.confidence, self.part
        e, s = response.sums(part), response.scores(part)
        low, high, p = (np.full(plain.se.shape, np.nan) for _ in range(3))
        for lot in self.lots:
            j = lot.column
            rng = fits.run.child(f"randomisation:{self.at}:{self.names[j]}")
            seen = Rotated.of(self._units, self.W[:, j])
            blocks = [
                assignments.curves(seen, lot.xi, taken, e, s, lot.every, self.studentised)
                for taken in lot.taken(rng, self._draws(fits))
            ]
            found = Curves.joined(blocks)
            below, above = found.ends(alpha)
            theta = plain.estimate[j]
            low[j], high[j], p[j] = theta - below, theta + above, found.p(theta)
        joint = {term.name: self._joint(fits, term, strata, ways) for term, strata, ways in self.terms}
        return replace(plain, low=low, high=high, p=p, joint=joint, notes=self.ends(low, high))

    @property
    def _units(self) -> Units:
        design, part = self.design, self.part
        return Units(design.sizes(part), design.sums(part), design.scores(part))

    def _joint(self, fits: Fits, term: Term, strata: Ints, ways: float) -> Joint:
        """All columns of a term permuted together: F of the part they explain, p by permutation."""
        response, pick = fits.response, list(term.columns)
        xi = _values(self.design, self.part)[:, pick]
        W = self.W[:, pick]
        draws = self._draws(fits)
        counted = ways <= draws
        rng = fits.run.child(f"randomisation:{self.at}:{term.name} as a whole")
        codes = assignments.levels_of(xi)
        taken = assignments.every(codes, strata) if counted else assignments.drawn(rng, strata, draws)
        e, theta = response.sums(self.part), W.T @ response.coef
        F, p = np.empty(response.B), np.empty(response.B)
        for b in range(response.B):
            squares = assignments.joint_squares(self._units, W, xi, taken, e[:, b], theta[:, b])
            F[b], p[b] = squares[0] / (len(pick) * response.s2[b]), assignments.tail(squares, counted)
        return F, float(len(pick)), float(self.design.m), p

    def joint(self, wald: Array, columns: tuple[int, ...]) -> Joint | None:
        return None  # joint tests permute too, in ``fit``

    def account(self, fits: Fits) -> Account:
        items = [("units", f"{self.part.count}")]
        for lot in self.lots:
            name = self.names[lot.column]
            how = "all of them" if lot.every else f"{self.draws:,} drawn at random"
            ways = f"{lot.ways:,.0f}" if lot.ways < 1e12 else "more than 10¹²"
            items.append((f"possible assignments of {name}", f"{ways}; used: {how}"))
            strata = len(np.unique(lot.strata))
            if strata > 1:
                items.append((f"strata within which units of {name} change places", f"{strata}"))
        items.append(("interval", "constant effects that are not rejected, found by inverting the test"))
        return Account(
            estimator="ordinary least squares",
            covariance=f"sandwich with one score per {self.at} (CR1), which studentises each permutation",
            factor="G/(G − 1) · (n − 1)/(n − p), in the shown standard error alone: it cancels in t",
            df_rule=self.rule,
            reference=f"permutations of whole units of {self.at}, two-sided"
            + ("" if self.studentised else ", of the coefficient itself"),
            items=tuple(items),
            source="fisher-1935, rosenbaum-2002, chung-romano-2013",
        )


@dataclass(frozen=True)
class Randomisation(Plain):
    """Ordinary estimates; p and interval from permuting what was assigned, unit by unit.

    The tested hypothesis is sharp: the effect is the same for every unit. Under it the permutation
    distribution is exact, whatever hangs together within units. A column of a term of several columns
    changes places only among units that differ in no other of them; so does a column when another
    term was assigned at the same level.
    """

    statistic: Literal["t", "coefficient"] = "t"
    draws: int = MANY
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "randomisation"
    covers: ClassVar[frozenset[Family]] = frozenset({"group", "serial"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = GROUPED
    source: ClassVar[str] = "fisher-1935"
    price: ClassVar[Price | None] = Price(300.0, 2.0)

    @property
    def name(self) -> str:
        return f"randomisation, by {self.at}" if self.at else "randomisation"

    def abouts(self, design: Design) -> tuple[str, ...]:
        """Levels at which something was assigned."""
        return tuple(dict.fromkeys(design.assignment.assigned.values()))

    def lacking(self, design: Design) -> Refusal:
        return Refusal(
            "nothing is known to have been assigned, so there is nothing to permute",
            "Name what was assigned, and at which level, with assigned=.",
        )

    def covering(self, fits: Fits) -> frozenset[Family]:
        return covered(fits.design, fits.design.partitions[self.at])

    def prepare(self, design: Design, working: ErrorModel | None = None) -> RandomisationReady:
        positive_m(design)
        mine = [t for t in design.terms if design.assignment.assigned.get(t.name) == self.at]
        if not mine:
            raise NotSupported(
                f"nothing is known to have been assigned by {self.at or 'any group'}",
                "Name what was assigned, and at which level, with assigned=.",
            )
        part = clusters(design, self.at)
        names, W = reported(design)
        draws = int(min(self.draws, max(SIMULATED, CELLS // part.count)))
        unusable = {
            name: Refusal(
                "it was not assigned, so there is nothing to permute",
                "Only what assigned= names is served.",
            )
            for name in names
        }
        lots, wholes, refused = _lots(design, part, mine, draws, self.at)
        unusable.update({names[j]: refusal for j, refusal in refused.items()})
        for lot in lots:
            del unusable[names[lot.column]]
        if not lots:
            raise unusable[names[mine[0].columns[0]]].error()
        return RandomisationReady(
            design,
            names,
            W,
            np.full((len(names), 1), np.nan),
            "permutation",
            unusable,
            (),
            at=self.at,
            part=part,
            lots=lots,
            terms=wholes,
            draws=draws,
            studentised=self.statistic == "t",
        )

    def conventions(self) -> tuple[tuple[str, Randomisation], ...]:
        return (
            ("permuting the coefficient itself, not its t", replace(self, statistic="coefficient")),
            ("999 permutations", replace(self, draws=999)),
        )


def _lots(
    design: Design, part: Partition, terms: list[Term], draws: int, at: str
) -> tuple[tuple[Lot, ...], tuple[tuple[Term, Ints, float], ...], dict[int, Refusal]]:
    """Columns that can be permuted, terms that can as a whole, and columns that cannot with the reason."""
    X = _values(design, part)
    lots: list[Lot] = []
    wholes: list[tuple[Term, Ints, float]] = []
    refused: dict[int, Refusal] = {}
    for term in terms:
        refusal = _entangled(design, term)
        base = _strata(design, part, term, [o for o in terms if o.name != term.name], X)
        if refusal is None and len(term.columns) > 1:
            ways = assignments.count(assignments.levels_of(X[:, list(term.columns)]), base)
            wholes.append((term, base, ways))
        for j in term.columns:
            lot = _lot(X, term, j, base, draws)
            found = refusal or _too_few(lot, at)
            if found is None:
                lots.append(lot)
            else:
                refused[j] = found
    return tuple(lots), tuple(wholes), refused


def _values(design: Design, part: Partition) -> Array:
    """(G, p) the columns in the first row of each unit."""
    X = rows_of(design, design.Q @ design.basis.R)
    return np.asarray(X[part.first])


def _strata(design: Design, part: Partition, term: Term, others: list[Term], X: Array) -> Ints:
    """(G,) declared strata, crossed with what else was assigned to the same units."""
    keys = [X[:, list(o.columns)] for o in others]
    within = design.assignment.within.get(term.name)
    if within is not None:
        keys.append(part.parent(design.partitions[within])[:, None].astype(float))
    return assignments.levels_of(np.hstack(keys)) if keys else np.zeros(part.count, dtype=np.int64)


def _lot(X: Array, term: Term, j: int, base: Ints, draws: int) -> Lot:
    rest = [i for i in term.columns if i != j]
    keys = np.column_stack([base.astype(float), X[:, rest]])
    strata = assignments.levels_of(keys)
    ways = assignments.count(assignments.levels_of(X[:, j]), strata)
    return Lot(j, X[:, j], strata, ways, ways <= draws)


def _too_few(lot: Lot, at: str) -> Refusal | None:
    if lot.ways > 20:  # below, not one in twenty assignments is as extreme
        return None
    return Refusal(
        f"it could have been assigned to the units of {at} in {lot.ways:.0f} ways only, too few to tell one "
        "from chance",
        "More units in each arm, or wider strata, would be needed.",
    )


def _entangled(design: Design, term: Term) -> Refusal | None:
    """Other terms that would have to change with the assignment."""
    used = set(term.variables)
    tied = [t.name for t in design.terms if t.name != term.name and used & set(t.variables)]
    if not tied:
        return None
    return Refusal(
        f"the model also holds {', '.join(tied)}, which changes with the assignment, so no single effect is "
        "tested",
        f"Leave {', '.join(tied)} out, or use cluster-robust.",
    )
