"""A remedy: what it needs, what it prepares once from the design, and what it says of y."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Literal, Protocol

import numpy as np
import numpy.typing as npt

from clingstone.design.design import Design, Term
from clingstone.maths.once import Array
from clingstone.needs import Family, Limits, Needs, Refusal

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

    def abouts(self, design: Design) -> tuple[str, ...]:
        """The levels at which it can be run, the default first; ("",) when there is no choice."""
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
class Refit:
    """One remedy on the user's data; plain numbers and words.

    intervals : a row per coefficient, then per named contrast or mean. covariance : (p, p) of the
    coefficients as nested tuples, None where the remedy has none.
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

    def get(self, term: str) -> Interval:
        return next(row for row in self.intervals if row.term == term)

    def to_frame(self) -> pd.DataFrame:
        import pandas as pd

        return pd.DataFrame([vars(row) for row in self.intervals])


def rows(design: Design) -> tuple[tuple[str, ...], Array]:
    """Names (k,) and weights (k, p) of what a remedy reports: coefficients, then contrasts."""
    eye = np.eye(design.p)
    extra = np.array([c.weights for c in design.contrasts]).reshape(-1, design.p)
    return (*design.names, *(c.name for c in design.contrasts)), np.vstack([eye, extra])


def multi(design: Design) -> tuple[Term, ...]:
    """Terms of two or more coefficients."""
    return tuple(t for t in design.terms if len(t.columns) > 1)
