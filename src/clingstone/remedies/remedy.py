"""A remedy: what it needs, what it prepares once from the design, and what it says of y."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar, Literal, NamedTuple, Protocol

import numpy as np
import numpy.typing as npt

from clingstone.design.design import Design, Term
from clingstone.display import (
    Cell,
    Column,
    Table,
    amount,
    bounds,
    decimals_for,
    degrees,
    freedom,
    instead,
    number,
    p_figure,
    p_value,
    span,
)
from clingstone.maths import reference
from clingstone.maths.once import Array
from clingstone.needs import Family, InputError, Limits, Needs, Refusal

if TYPE_CHECKING:
    import pandas as pd

    from clingstone.covariance.fits import ErrorModel, Fits

Flags = npt.NDArray[np.bool_]
Estimand = Literal["pooled", "within", "between", "mean-repaired"]


@dataclass(frozen=True, eq=False)
class Estimates:
    """A remedy read on B columns of y, for k rows (coefficients, then named contrasts).

    All arrays (k, B); df is (k, 1) when the design alone fixes it. ``joint`` holds, per multi-df
    term, (F, df1, df2, p) as (B,) arrays. covariance : (p, p) of the coefficients when B = 1.
    """

    estimate: Array
    se: Array
    df: Array
    low: Array
    high: Array
    p: Array
    covariance: Array | None = None
    joint: Mapping[str, tuple[Array, float, Array | float, Array]] = field(default_factory=dict)
    boundary: Flags | None = None  # (B,)
    converged: Flags | None = None  # (B,)
    notes: tuple[str, ...] = ()  # what only y could tell, one sentence each
    names: tuple[str, ...] = ()  # of the k rows, where they are not those of the design
    ordinary: Array | None = None  # (k, B) ordinary standard errors beside such rows

    def column(self, b: int) -> Estimates:
        """Those of one column of y, without covariance and joint tests."""
        pick = slice(b, b + 1)

        def flags(values: Flags | None) -> Flags | None:
            return None if values is None else values[pick]

        return replace(
            self,
            estimate=self.estimate[:, pick],
            se=self.se[:, pick],
            df=np.broadcast_to(self.df, self.se.shape)[:, pick],
            low=self.low[:, pick],
            high=self.high[:, pick],
            p=self.p[:, pick],
            covariance=None,
            joint={},
            boundary=flags(self.boundary),
            converged=flags(self.converged),
            ordinary=None if self.ordinary is None else self.ordinary[:, pick],
        )

    @classmethod
    def by_t(cls, estimate: Array, se: Array, df: Array, confidence: float) -> Estimates:
        """With Student's t for interval and p."""
        return cls(estimate, se, df, *reference.t_rows(estimate, se, df, confidence))


@dataclass(frozen=True)
class ByBandwidth:
    """Standard errors of one row at several bandwidths of one kernel.

    what : "lags", or "cutoff", in ``unit``. at (k,), se (k,) : bandwidth and standard error; df (k,), or
    empty where they do not change with the bandwidth.
    """

    term: str
    what: str
    unit: str
    at: tuple[float, ...]
    se: tuple[float, ...]
    df: tuple[float, ...] = ()

    def pair(self) -> tuple[str, str]:
        """As an ingredient in words."""
        unit = f" {self.unit}" if self.unit else ""
        words = [f"{se:.4g} at {amount(at)}{unit}" for at, se in zip(self.at, self.se, strict=True)]
        if self.df:
            words = [f"{w} ({df:.1f} df)" for w, df in zip(words, self.df, strict=True)]
        return f"standard error of {self.term} by {self.what}", "; ".join(words)


@dataclass(frozen=True)
class Account:
    """How an interval was reached, each ingredient with its value, in reading order."""

    estimator: str
    covariance: str
    factor: str
    df_rule: str
    reference: str  # "t", "exact", …
    items: tuple[tuple[str, str], ...] = ()  # further (name, value): kernel, bandwidth, λ, …
    source: str = ""  # keys of references, comma separated
    bandwidths: tuple[ByBandwidth, ...] = ()

    def pairs(self) -> tuple[tuple[str, str], ...]:
        """Every ingredient as (name, value), in reading order."""
        return (
            ("estimator", self.estimator),
            ("covariance", self.covariance),
            ("small-sample factor", self.factor),
            ("degrees of freedom", self.df_rule),
            ("reference distribution", self.reference),
            *self.items,
            *(one.pair() for one in self.bandwidths),
        )


class Ready(Protocol):
    """A remedy prepared for one design: live, holds arrays.

    unusable : coefficient or contrast name → why it cannot be served. rule : the df rule in a word or
    two, as a table shows it. notes : what a reader should know of this fit, one sentence each.
    """

    @property
    def unusable(self) -> Mapping[str, Refusal]: ...

    @property
    def rule(self) -> str: ...

    @property
    def notes(self) -> tuple[str, ...]: ...

    def fit(self, fits: Fits) -> Estimates: ...

    def account(self, fits: Fits) -> Account: ...


class Remedy(Protocol):
    """A frozen dataclass of settings; all but ``at`` and the conventions have defaults."""

    @property
    def id(self) -> str: ...

    @property
    def name(self) -> str:
        """As a reader sees it: "cluster-robust, by clinic"."""
        ...

    @property
    def at(self) -> str:
        """The level at which it is run; "" until chosen, and where there is no choice."""
        ...

    @property
    def covers(self) -> frozenset[Family]: ...

    @property
    def estimand(self) -> Estimand: ...

    @property
    def needs(self) -> Needs: ...

    @property
    def source(self) -> str: ...

    @property
    def limits(self) -> Limits: ...

    @property
    def price(self) -> Price | None:
        """Of one column among many, where what is prepared does not tell it: a search, a resampling."""
        ...

    def abouts(self, design: Design) -> tuple[str, ...]:
        """The levels at which it can be run, the default first; ("",) when there is no choice."""
        ...

    def lacking(self, design: Design) -> Refusal:
        """Why it has no level to be run at, where ``abouts`` is empty."""
        ...

    def covering(self, fits: Fits) -> frozenset[Family]:
        """The families that it covers in these data: ``covers``, or fewer."""
        ...

    def working(self, fits: Fits) -> ErrorModel | None:
        """The error model of the user's data that ``prepare`` wants, or None."""
        ...

    def prepare(self, design: Design, working: ErrorModel | None) -> Ready:
        """All that needs no y. Raises NotSupported(reason, hint)."""
        ...

    def conventions(self) -> tuple[tuple[str, Remedy], ...]:
        """The same remedy under the other common settings, each with words for them."""
        ...


KNOWN = Needs(known_design=True)
GROUPED = Needs(parts=frozenset({"group"}), known_design=True)
DATED = Needs(parts=frozenset({"serial"}), known_design=True)
PLACED = Needs(parts=frozenset({"spatial"}), known_design=True)


class Price(NamedTuple):
    """Microseconds of one column of y on an ordinary core: ``fixed``, and ``row`` for each of its rows."""

    fixed: float
    row: float


def no_level(remedy: str) -> Refusal:
    """A remedy that needs a level finds none, and no more can be said."""
    return Refusal(
        f"{remedy} has no level to work at in these data",
        "It needs a partition of the rows in which some cell has two rows or more.",
    )


class Plain:
    """Defaults of a remedy: of the whole table, for the families it names, with nothing fitted first."""

    id: ClassVar[str]
    covers: ClassVar[frozenset[Family]]
    price: ClassVar[Price | None] = None

    def abouts(self, design: Design) -> tuple[str, ...]:
        return ("",)

    def lacking(self, design: Design) -> Refusal:
        return no_level(self.id)

    def covering(self, fits: Fits) -> frozenset[Family]:
        return self.covers

    def working(self, fits: Fits) -> ErrorModel | None:
        return None


@dataclass(frozen=True)
class Interval:
    """One row of ``Examination.intervals``."""

    term: str
    remedy: str
    estimate: float
    se: float
    se_ratio: float  # se over the ordinary se
    df: float
    df_rule: str
    low: float
    high: float
    p: float
    status: str  # "ok", "boundary: …", "caveat: …", "unusable: …"


@dataclass(frozen=True)
class JointTest:
    """One row of ``Examination.terms``: a multi-df term tested at once."""

    term: str
    remedy: str
    F: float
    df1: float
    df2: float
    p: float


@dataclass(frozen=True)
class Convention:
    """What every interval of a refit becomes under another common convention, in words and rows."""

    words: str
    intervals: tuple[Interval, ...]

    def __iter__(self) -> Iterator[str | tuple[Interval, ...]]:
        """So that ``dict(conventions)`` leads from words to rows."""
        return iter((self.words, self.intervals))

    def get(self, term: str) -> Interval | None:
        return next((row for row in self.intervals if row.term == term), None)


@dataclass(frozen=True)
class Refit:
    """One remedy on the user's data; plain numbers and words.

    intervals : a row per coefficient, then per named contrast or mean. covariance : (p, p) of the
    coefficients as nested tuples, None where the remedy has none. conventions : the same remedy under
    the other common settings, where they were asked for.
    """

    remedy: str
    name: str
    at: str  # group level, series or sites at which it was run
    covers: tuple[Family, ...]
    estimand: Estimand
    intervals: tuple[Interval, ...]
    terms: tuple[JointTest, ...]
    account: Account
    coefficients: tuple[str, ...] = ()
    estimate: tuple[float, ...] = ()
    covariance: tuple[tuple[float, ...], ...] | None = None
    confidence: float = 0.95
    notes: tuple[str, ...] = ()
    boundary: bool = False
    converged: bool = True
    conventions: tuple[Convention, ...] = ()

    def get(self, term: str) -> Interval:
        """The row of a coefficient, contrast or mean. Raises InputError with the near names."""
        found = next((row for row in self.intervals if row.term == term), None)
        if found is None:
            names = [row.term for row in self.intervals]
            raise InputError(f"there is no row ‘{term}’ in this refit", instead(term, names))
        return found

    def contrast(self, name: str) -> Interval:
        """The row of a contrast that was named with ``contrasts=`` before the fit.

        For a new combination ask :meth:`clingstone.Examination.contrast`, which refits: degrees of
        freedom belong to the combination and cannot be read off those of the coefficients.
        """
        if name in self.coefficients:
            raise InputError(f"‘{name}’ is a coefficient, not a contrast", "Ask get(name) for its row.")
        return self.get(name)

    def means(self, factor: str) -> tuple[Interval, ...]:
        """The rows of the means of a factor ("arm", or "arm:visit" for cells) asked for with ``means=``."""
        parts = factor.replace(" ", "").split(":")
        found = tuple(row for row in self.intervals if _factors(row.term) == parts)
        if not found:
            raise InputError(f"no means of ‘{factor}’ were asked for", f"Fit again with means=[{factor!r}].")
        return found

    def explain(self, term: str) -> str:
        """How the interval of a row was reached, and what it becomes under other conventions, as text."""
        row = self.get(term)
        lines = [f"{term}: {_said(row)}"]
        lines += [f"  {name}: {value}" for name, value in self.account.pairs()]
        for other in self.conventions:
            changed = other.get(term)
            if changed is not None:
                lines.append(f"  {other.words}: {_said(changed)}")
        return "\n".join(lines)

    def __repr__(self) -> str:
        shown = [f"{row.term} {_said(row)}" for row in self.intervals if row.term != "constant"]
        more = f"; {len(shown) - 3} more rows" if len(shown) > 3 else ""
        return f"<Refit: {self.name}; {'; '.join(shown[:3])}{more}>"

    def table(self) -> Table:
        """The rows as one table, for a person."""
        level = f"{100 * self.confidence:g} % interval"
        columns = (
            Column("term", "row"),
            Column("estimate", "estimate", "right"),
            Column("interval", level, "right"),
            Column("df", "degrees of freedom", "right"),
            Column("p", "p", "right"),
        )
        return Table.of(self.name, columns, [_cells(row) for row in self.intervals])

    def _repr_html_(self) -> str:
        return self.table().to_html()

    def to_frame(self) -> pd.DataFrame:
        import pandas as pd

        return pd.DataFrame([vars(row) for row in self.intervals])


def _factors(term: str) -> list[str]:
    """ "mean of arm: visits × visit: 3" belongs to the factors arm and visit; [] for other rows."""
    if not term.startswith("mean of "):
        return []
    return [part.split(": ")[0] for part in term.removeprefix("mean of ").split(" × ")]


def _said(row: Interval) -> str:
    """ "−3.7 (−10.6 to 3.1), 9.9 degrees of freedom, p = 0.25" """
    if not math.isfinite(row.estimate):
        return row.status
    places = decimals_for(row.se)
    df = f", {freedom(row.df)}" if math.isfinite(row.df) else ""
    return f"{number(row.estimate, places)}{bounds(row.low, row.high, places)}{df}, {p_value(row.p)}"


def _cells(row: Interval) -> list[Cell]:
    if not math.isfinite(row.estimate):
        return [Cell(row.term), Cell("not given"), Cell(""), Cell(""), Cell("")]
    places = decimals_for(row.se)
    return [
        Cell(row.term, row.term),
        Cell(number(row.estimate, places), row.estimate),
        Cell(span(row.low, row.high, places)),
        Cell(degrees(row.df), row.df),
        Cell(p_figure(row.p), row.p),
    ]


def rows(design: Design) -> tuple[tuple[str, ...], Array]:
    """Names (k,) and weights (k, p) of what a remedy reports: coefficients, then contrasts."""
    eye = np.eye(design.p)
    extra = np.array([c.weights for c in design.contrasts]).reshape(-1, design.p)
    return (*design.names, *(c.name for c in design.contrasts)), np.vstack([eye, extra])


def multi(design: Design) -> tuple[Term, ...]:
    """Terms of two or more coefficients."""
    return tuple(t for t in design.terms if len(t.columns) > 1)
