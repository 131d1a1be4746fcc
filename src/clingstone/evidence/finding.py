"""What a test says: a Reading in arrays, a Finding in numbers and words."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field, fields
from typing import TYPE_CHECKING, Literal, Protocol

import numpy as np

from clingstone.design.design import Design
from clingstone.maths.once import Array
from clingstone.needs import Family, Needs

if TYPE_CHECKING:
    import pandas as pd

    from clingstone.covariance.fits import Fits

Verdict = Literal["present", "unclear", "not detected", "not applicable"]


@dataclass(frozen=True)
class About:
    """At what a test is run: a level, a lag, a neighbourhood, a predictor."""

    key: str = ""  # what the code looks up: "clinic", "1", "knn:6", "dose"
    words: str = ""  # what a sentence says: "rows of one clinic", "one day apart"


@dataclass(frozen=True, eq=False)
class Reading:
    """A test read on B columns of y. Every array is (B,); a scalar is the same for all columns.

    effect : the size that a reader understands (an ICC, a correlation, a share), with an interval.
    """

    statistic: Array
    p: Array
    df: float | None = None
    df2: float | None = None
    estimate: Array | None = None
    low: Array | None = None
    high: Array | None = None
    p_method: str = ""
    statistic_name: str = ""
    estimate_name: str = ""
    n_used: int = 0
    caveats: tuple[str, ...] = ()
    log_p: Array | None = None


@dataclass(frozen=True)
class Curve:
    """What a figure draws; plain numbers.

    kind : "autocorrelation", "group-means", "variogram", "map", "function", "network".
    x, y, low, high, size : one number per mark (size: pairs or rows behind it); labels per mark.
    lines : further named lines, each a pair of tuples (x, y).
    """

    kind: str
    x: tuple[float, ...]
    y: tuple[float, ...]
    low: tuple[float, ...] = ()
    high: tuple[float, ...] = ()
    size: tuple[float, ...] = ()
    labels: tuple[str, ...] = ()
    x_name: str = ""
    y_name: str = ""
    unit: str = ""
    note: str = ""
    lines: Mapping[str, tuple[tuple[float, ...], tuple[float, ...]]] = field(default_factory=dict)


@dataclass(frozen=True)
class Finding:
    """One test on the user's data: effect first, then statistic and p."""

    structure: Family
    test: str
    about: str  # About.key
    about_words: str
    statistic: float
    statistic_name: str
    df: float | None
    df2: float | None
    alternative: str
    p: float
    p_method: str
    p_adjusted: float | None  # Holm over the primary tests; None for exploratory ones
    estimate: float
    estimate_name: str
    low: float
    high: float
    n_used: int
    verdict: Verdict
    caveats: tuple[str, ...]
    sentence: str
    source: str
    null: str
    given: tuple[str, ...] = ()  # structures fitted first
    primary: bool = False
    curve: Curve | None = None


@dataclass(frozen=True)
class Evidence:
    """All findings, in the order in which the tests are registered."""

    findings: tuple[Finding, ...]

    def __iter__(self) -> Iterator[Finding]:
        return iter(self.findings)

    def __len__(self) -> int:
        return len(self.findings)

    def of(self, structure: Family) -> tuple[Finding, ...]:
        return tuple(f for f in self.findings if f.structure == structure)

    def get(self, test: str, about: str | None = None) -> Finding | None:
        """The first finding of a test (at one level, lag or neighbourhood), or None."""
        return next(
            (f for f in self.findings if f.test == test and (about is None or f.about == about)), None
        )

    def to_frame(self) -> pd.DataFrame:
        """One row per finding, without the curves."""
        import pandas as pd

        names = [f.name for f in fields(Finding) if f.name != "curve"]
        return pd.DataFrame([{k: getattr(f, k) for k in names} for f in self.findings], columns=names)


class Test(Protocol):
    """A test: what it needs, at what it is run, and how it reads B columns of y."""

    id: str
    family: Family
    null: str
    alternative: str
    needs: Needs
    source: str
    primary: bool

    def abouts(self, design: Design) -> tuple[About, ...]: ...

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading: ...

    def curve(self, fits: Fits, about: About) -> Curve | None: ...

    def sentence(self, reading: Reading, about: About) -> str: ...


def column(value: Array | float | None, b: int = 0) -> float:
    """One number out of a (B,) array or a scalar; NaN for None."""
    if value is None:
        return float("nan")
    array = np.asarray(value, dtype=float)
    return float(array if array.ndim == 0 else array[b])
