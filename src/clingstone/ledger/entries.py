"""What a ledger holds: standings, shares, parameters, consequences. Plain numbers and words."""

from __future__ import annotations

from dataclasses import dataclass

from clingstone.display import Column, Table, percent, percent_bounds
from clingstone.evidence.finding import Verdict
from clingstone.needs import Family


@dataclass(frozen=True)
class Standing:
    """One structure judged: alone, given the others, and the verdict. The only judge of structures."""

    structure: Family
    key: str  # "group:clinic", "serial", "spatial"
    label: str
    verdict: Verdict
    p_alone: float
    p_given: float  # restricted likelihood ratio given all the others; NaN when there is no other
    given: tuple[str, ...]
    because: str
    p_method: str = ""  # how p_given was got
    matters: bool = False  # an end of its interval would move a focus interval beyond the band
    fixed: bool = False  # the design fixes this level: assigned or sampled
    worst: float = float("nan")  # furthest standard-error factor of a focus term inside its interval
    worst_term: str = ""
    widens: bool = False  # the upper end of its interval would widen a focus interval beyond the band


@dataclass(frozen=True)
class Share:
    """Share of the residual variance, 0 … 1, with its interval. ``key`` "row" is row noise."""

    structure: Family | None
    key: str
    label: str
    share: float
    low: float
    high: float
    note: str = ""  # "not kept in the model: the interval is that of the fit with every structure"


@dataclass(frozen=True)
class Parameter:
    """A dependence parameter that readers know: ICC, ρ per step, half-life, practical range."""

    key: str  # "group:clinic"
    name: str  # "intraclass correlation", "ρ", "half-life", "practical range", "standard deviation"
    estimate: float
    low: float
    high: float
    unit: str = ""
    note: str = ""  # "at its bound", …


@dataclass(frozen=True)
class Inflation:
    """What one structure adds to the variance of an ordinary coefficient.

    low, estimate, high : the structure's part of Var(β̂)/Var_ordinary(β̂), at the ends of its
        parameter's interval; parts add up over structures (and "row") to the square of the total
        factor. The row with ``key`` "total" holds standard-error factors instead.
    """

    term: str
    key: str
    low: float
    estimate: float
    high: float


@dataclass(frozen=True)
class Tipping:
    """The parameter value at which a focus interval would take in zero, or None.

    Of two structures together ``key`` and ``parameter`` name both, ``value`` is that of the second with the
    first at its estimate, and ``border`` holds the pairs at which the interval meets zero.
    """

    term: str
    key: str
    parameter: str
    value: float | None
    sentence: str
    border: tuple[tuple[float, float], ...] = ()


@dataclass(frozen=True)
class Detectable:
    """The smallest parameter that the primary test would have found in 80 % of such data."""

    key: str
    parameter: str
    value: float
    power: float
    sentence: str


@dataclass(frozen=True, repr=False)
class Ledger:
    """Structures, their sizes, and their consequence."""

    model: tuple[str, ...]  # the adequate set of components
    standing: tuple[Standing, ...]
    shares: tuple[Share, ...]
    parameters: tuple[Parameter, ...]
    inflation: tuple[Inflation, ...]
    tipping: tuple[Tipping, ...]
    detectable: tuple[Detectable, ...]
    refused: tuple[tuple[str, str], ...] = ()  # (key, reason) of structures not estimated
    history: tuple[str, ...] = ()
    method: str = ""  # how the intervals of shares, parameters and factors were got

    def __repr__(self) -> str:
        told = [f"{s.label} {s.verdict}{self._share_words(s.key)}" for s in self.standing]
        return f"<Ledger: {'; '.join(told) or 'no structure declared'}>"

    def table(self) -> Table:
        """Each structure with its verdict and its share of what the model leaves over, for a person."""
        columns = (
            Column("structure", "structure"),
            Column("verdict", "verdict"),
            Column("share", "share of the residual variance", "right"),
            Column("because", "because"),
        )
        shares = {s.key: self._share_words(s.key).removeprefix(", ") for s in self.standing}
        rows = [(s.label, s.verdict, shares[s.key], s.because) for s in self.standing]
        return Table.of("Ledger", columns, rows)

    def _repr_html_(self) -> str:
        return self.table().to_html()

    def _share_words(self, key: str) -> str:
        found = self.share(key)
        return "" if found is None else f", {percent(found.share)}{percent_bounds(found.low, found.high)}"

    def factor(self, term: str) -> Inflation | None:
        """Standard-error factors of a coefficient: low, estimate, high."""
        return next((i for i in self.inflation if i.term == term and i.key == "total"), None)

    def of(self, key: str) -> Standing | None:
        """The standing of one component, or None."""
        return next((s for s in self.standing if s.key == key), None)

    def share(self, key: str) -> Share | None:
        """The share of one component, or None."""
        return next((s for s in self.shares if s.key == key), None)

    def parameter(self, key: str, name: str) -> Parameter | None:
        """One dependence parameter, or None."""
        return next((q for q in self.parameters if q.key == key and q.name == name), None)
