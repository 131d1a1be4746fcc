"""Many columns of y examined as the user's own: what is read of all at once, and what is decided of each.

Tests, error models and likelihood regions are read for the whole batch; a column takes its slice, is judged
and described by the very code that judges the user's data, and asks for refits only where a rule asks for
them. A refit is made for every column when the first asks. Columns in which the mean comes first, or that
no rule names a remedy for, go the whole way alone.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field, replace
from typing import NamedTuple

from clingstone.advice.choose import settle
from clingstone.advice.facts import Facts
from clingstone.advice.facts import facts as gather_facts
from clingstone.advice.named import Fact
from clingstone.advice.pick import serves
from clingstone.advice.refitted import COMPARES, compared
from clingstone.advice.rules import PREFER, STATES
from clingstone.advice.shortlist import Shortlist, shortlist_for
from clingstone.advice.structures import families, needed
from clingstone.covariance.each import each
from clingstone.covariance.fits import Fits
from clingstone.evidence import TESTS
from clingstone.evidence.gather import Columns, read_columns, told
from clingstone.ledger.ledger import Ledger, focus_rows, judged
from clingstone.maths.once import once
from clingstone.needs import NotSupported
from clingstone.remedies import refit, remedy
from clingstone.remedies.gls import GlsReady
from clingstone.remedies.linear import LinearReady
from clingstone.remedies.refit import at as set_at
from clingstone.remedies.refit import read
from clingstone.remedies.remedy import Estimates, Ready, Refit, Remedy

Named = tuple[str, str]  # a remedy and its level
# Tests that speak only in cautions: no state and no remedy hangs on them.
ASIDE = ("cluster-level", "group-influence", "outliers", "normality", "duplicates")
ORDINARY: Named = ("ordinary", "")
SUPPORTED = "supported"


class Seen(NamedTuple):
    """What an examination says of one column.

    state : as in ``Advice``, but "supported" with or without a caveat. refit : the advised one, or None.
    ledger : with the model as it was declared. structures, protected : families, as in ``Advice``.
    """

    state: str
    refit: Refit | None
    ordinary: Refit
    ledger: Ledger
    structures: frozenset[str]
    protected: frozenset[str]
    mean_in_doubt: bool


@dataclass(eq=False)
class Many:
    """B columns of y on one design, each examined by the rules alone.

    fits : of all of them, at depth "exact", so that each is fitted as if it were alone.
    """

    fits: Fits
    _made: dict[Named, Batch | None] = field(default_factory=dict)
    _listed: dict[tuple[str, ...], Shortlist] = field(default_factory=dict)

    @property
    @once
    def columns(self) -> Columns:
        return read_columns(self.fits, tuple(t for t in TESTS if t.id not in ASIDE), given=True)

    def advised(self, b: int) -> tuple[Refit | None, Refit]:
        """The refit that is advised for one column (None for none), and the ordinary one."""
        seen = self.seen(b)
        return seen.refit, seen.ordinary

    def seen(self, b: int) -> Seen:
        """What is read of one column, and what is advised."""
        fits = self.fits.column(b)
        evidence = told(self.columns, fits, b)
        known = gather_facts(fits, evidence, judged(fits, evidence, focus_rows(fits)))
        state = next((r.then.what for r in STATES if bool(r.when.read(known.known))), "")
        ordinary = self.refit(ORDINARY, b, fits)
        assert ordinary is not None
        if state == "nothing found":
            found: Refit | None = ordinary
        elif state == "not correctable":
            found = None
        else:
            found = None if state else self._ruled(known, b, fits)
            if found is None:
                return alone(known, fits, ordinary)
            state = SUPPORTED
        ledger, covers = known.ledger, families(known.ledger, needed(known.ledger))
        present = families(ledger, needed(ledger, shown=True))
        protected = covers - present if found is not None else frozenset()
        return Seen(state, found, ordinary, ledger, present, protected, known.says("mean in doubt"))

    def _ruled(self, known: Facts, b: int, fits: Fits) -> Refit | None:
        """The refit of the first rule that holds whose remedy serves every focus row."""
        listed = self._shortlist(known, fits)
        names = [(c.remedy, c.at) for c in listed.candidates]
        held: dict[Named, Refit | None] = {}

        def made(what: str, level: str) -> Iterator[Refit]:
            """Refits of a remedy: at a level, or at every one that is a candidate."""
            name = listed.twins.get(what, what)
            for one in names:
                if one[0] == name and (level in ("", one[1]) or name != what):
                    if one not in held:
                        held[one] = self.refit(one, b, fits)
                    found = held[one]
                    if found is not None:
                        yield found

        asked = Asked(known, made)
        for rule in PREFER:
            if bool(rule.when.read(asked)):
                level = known.word(rule.then.at) if rule.then.at else ""
                for found in made(rule.then.what, level):
                    if serves(found, known):
                        return found
        return None

    def _shortlist(self, known: Facts, fits: Fits) -> Shortlist:
        """The candidates, which hang on y only by the levels at which the rules would correct."""
        key = tuple(known.word(name) for name in ("group level", "mixed level", "series level"))
        if key not in self._listed:
            self._listed[key] = shortlist_for(replace(known, missing=None, after=None), fits)
        return self._listed[key]

    def refit(self, name: Named, b: int, fits: Fits) -> Refit | None:
        """One remedy on one column, read for all where it can be; None where it cannot be fitted."""
        if name not in self._made:
            self._made[name] = Batch.of(name, self.fits)
        batch = self._made[name]
        if batch is not None:
            return read(batch.remedy, batch.ready, batch.found.column(b), fits)
        try:
            return refit(remedy(name[0]), name[1], fits)
        except NotSupported:
            return None


@dataclass(frozen=True, eq=False)
class Batch:
    """A remedy read on every column at once."""

    remedy: Remedy
    ready: Ready
    found: Estimates

    @classmethod
    def of(cls, name: Named, fits: Fits) -> Batch | None:
        """None where it prepares by the y of each column, or searches column by column."""
        try:
            one = set_at(remedy(name[0]), name[1], fits)
            if one.working(fits) is not None:
                return None
            ready = one.prepare(fits.design, None)
            return cls(one, ready, ready.fit(fits)) if together(ready, fits) else None
        except NotSupported:
            return None


def together(ready: Ready, fits: Fits) -> bool:
    """Whether all columns cost little more than one."""
    if isinstance(ready, GlsReady):
        return each(fits.algebra(ready.remedy.node(fits)), fits.response) is not None
    return isinstance(ready, LinearReady) and type(ready).fit is LinearReady.fit


class Asked(dict[str, Fact]):
    """Facts of one column, and those that only refits can tell, made when a rule reads them."""

    def __init__(self, known: Facts, made: Callable[[str, str], Iterator[Refit]]) -> None:
        super().__init__(known.known)
        self.facts, self.made = known, made
        self.done: set[tuple[str, ...]] = set()

    def __missing__(self, name: str) -> Fact:
        needs = COMPARES.get(name)
        if needs is None or needs in self.done:
            raise KeyError(name)
        self.done.add(needs)
        refits = tuple(found for what in needs for found in self.made(what, ""))
        # Of what these refits tell only what is asked of them: without the others they say "no" of the rest.
        found = compared(self.facts, refits).known
        self.update({k: v for k, v in found.items() if COMPARES.get(k) == needs})
        return self[name]


def alone(known: Facts, fits: Fits, ordinary: Refit) -> Seen:
    """What is advised for one column from every candidate's refit."""
    shortlist = shortlist_for(known, fits)
    refits = shortlist.refit(fits)
    advice = settle(shortlist, known, refits, None)
    found = next((r for r in refits if (r.remedy, r.at) == (advice.remedy, advice.at)), None)
    state = SUPPORTED if advice.state.startswith(SUPPORTED) else advice.state
    told_of = advice.structures, advice.protected, advice.mean_in_doubt
    return Seen(state, found, ordinary, known.ledger, *told_of)
