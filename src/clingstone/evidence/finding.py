"""What a test says: a Reading in arrays, a Finding in numbers and words."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field, fields
from typing import TYPE_CHECKING, Literal, Protocol, get_args

import numpy as np
import numpy.typing as npt

from clingstone.design.design import Design
from clingstone.display import Column, Table, count
from clingstone.maths.once import Array
from clingstone.needs import Family, Needs

if TYPE_CHECKING:
    import pandas as pd

    from clingstone.covariance.fits import Fits

Verdict = Literal["present", "unclear", "not detected", "not applicable"]
VERDICT_ORDER: tuple[Verdict, ...] = get_args(Verdict)


@dataclass(frozen=True)
class About:
    """At what a test is run: a level, a lag, a neighbourhood, a predictor.

    primary : False for a second look at the same thing (other neighbourhoods), which never decides.
    """

    key: str = ""  # what the code looks up: "clinic", "1", "knn:6", "dose"
    words: str = ""  # what a sentence says: "rows of one clinic", "one day apart"
    primary: bool = True


@dataclass(frozen=True, eq=False)
class Reading:
    """A test read on B columns of y. Every array is (B,); a scalar is the same for all columns.

    estimate, low, high : the size that a reader understands (an ICC, a correlation, a share), with
        its interval at the run's confidence.
    flag : (B,) bool, decides in place of p for a test without a null law (duplicates).
    rows : rows of the design that the reading points at (outliers, duplicates), for column 0.
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
    flag: npt.NDArray[np.bool_] | None = None
    rows: tuple[int, ...] = ()


@dataclass(frozen=True)
class Curve:
    """What a figure draws; plain numbers.

    kind : what the marks are.
        "autocorrelation": x elapsed time (in ``unit``), y correlation, low and high the band in which
        it lies in 95 % of data without dependence, size the number of pairs.
        "group-means": x rank, y mean residual, low and high its interval, size rows, labels groups.
        "variogram": x distance, y semivariance (1 without dependence), low and high a simultaneous
        envelope, size pairs.
        "map": x and y are the coordinates of the sites, size the mean residual there (signed), links
        the neighbours.
        "function": x the covariate, y the mean partial residual in a bin, low and high its interval, size
        rows; the line "repaired" is what a flexible curve gives, "fitted" what the model has.
        "traces": the lines are residuals by elapsed time, one for each series shown; x, y, low and high
        the median and quantiles of all rows by time where not all series are shown.
    x, y, low, high, size : one number per mark; labels per mark.
    lines : further named lines, each a pair of tuples (x, y).
    links : pairs of places of marks that are joined.
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
    links: tuple[tuple[int, int], ...] = ()


@dataclass(frozen=True)
class Finding:
    """One test on the user's data: effect first, then statistic and p.

    rows : places in the user's table, counted from 0, of the rows that it points at (in the design
        until an examination has led them back). more : further curves beside the first.
    """

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
    p_adjusted: float | None  # Holm over its family of tests; None where p is not adjusted
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
    rows: tuple[int, ...] = ()
    more: tuple[Curve, ...] = ()

    @property
    def curves(self) -> tuple[Curve, ...]:
        """All that figures of this finding draw."""
        return (*((self.curve,) if self.curve is not None else ()), *self.more)


@dataclass(frozen=True, repr=False)
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

    def __repr__(self) -> str:
        counts = {v: sum(f.verdict == v for f in self.findings) for v in VERDICT_ORDER}
        told = ", ".join(f"{n} {verdict}" for verdict, n in counts.items() if n)
        return f"<Evidence: {count(len(self.findings), 'finding')}{f' ({told})' if told else ''}>"

    def table(self) -> Table:
        """What every primary test says, and every other that saw something, for a person."""
        shown = [f for f in self.findings if f.primary or f.verdict == "present"]
        columns = (
            Column("structure", "structure"),
            Column("verdict", "verdict"),
            Column("sentence", "finding"),
        )
        return Table.of("Evidence", columns, [[f.structure, f.verdict, f.sentence] for f in shown])

    def _repr_html_(self) -> str:
        return self.table().to_html()

    def to_frame(self) -> pd.DataFrame:
        """One row per finding, without the curves."""
        import pandas as pd

        names = [f.name for f in fields(Finding) if f.name not in ("curve", "more")]
        return pd.DataFrame([{k: getattr(f, k) for k in names} for f in self.findings], columns=names)


class Test(Protocol):
    """A test: what it needs, at what it is run, and how it reads B columns of y.

    ``null`` and ``alternative`` are sentences; ``source`` is a key of the bibliography; ``givens``
    lists the sets of other components that the test knows how to fit first at this place.
    """

    @property
    def id(self) -> str: ...

    @property
    def family(self) -> Family: ...

    @property
    def null(self) -> str: ...

    @property
    def alternative(self) -> str: ...

    @property
    def needs(self) -> Needs: ...

    @property
    def source(self) -> str: ...

    @property
    def primary(self) -> bool: ...

    def abouts(self, design: Design) -> tuple[About, ...]: ...

    def givens(self, fits: Fits, about: About) -> tuple[frozenset[str], ...]: ...

    def read(self, fits: Fits, about: About, given: frozenset[str] = frozenset()) -> Reading: ...

    def curve(self, fits: Fits, about: About) -> Curve | None: ...

    def more(self, fits: Fits, about: About) -> tuple[Curve, ...]: ...

    def sentence(self, reading: Reading, about: About) -> str: ...


def column(value: Array | float | None, b: int = 0) -> float:
    """One number out of a (B,) array or a scalar; NaN for None."""
    if value is None:
        return float("nan")
    array = np.asarray(value, dtype=float)
    return float(array if array.ndim == 0 else array[b if len(array) > 1 else 0])
