"""One run: every argument, the seed, progress and threads."""

from __future__ import annotations

import zlib
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, field
from numbers import Real
from typing import TYPE_CHECKING, Any, Literal, Protocol, get_args

from clingstone.needs import InputError, Limits, NotSupported

if TYPE_CHECKING:
    import numpy as np

Missing = Literal["stop", "drop", "own-group"]
Ties = Literal["stop", "replicate", "mean"]
Weights = Literal["precision", "frequency", "survey"]
Alternative = Literal["two-sided", "greater", "less"]


@dataclass(frozen=True)
class Settings:
    """Every argument of ``examine``: the source of the Python signature, the options and results.json.

    model : formula such as ``"y ~ x + arm"``.
    residual : column of residuals, when no model is given.
    sheet : sheet of an Excel file or layer of a GeoPackage, the first by default.
    wide : stem of columns that hold one measure at several times ("bp" for bp_1, bp_2 and so on), to be put
        under each other, with columns row and occasion; "none" where numbered columns are no such thing.
    group : column of groups, or nested columns "a/b" from coarse to fine, or several crossed columns.
    time, series : column of time; column that says which rows form one ordered series.
    coords : two columns of coordinates.
    lonlat : whether they are longitude and latitude; left out, names and values decide.
    neighbours : "knn" or "band", with a number after a colon ("knn:6", "band:12.5"), "delaunay", "gabriel",
        "inverse", "contiguity" or "rook" (shapes that touch), or "pairs:FILE".
    weights, weights_kind : column of weights; whether a weight says how exact a row is or counts rows.
    focus : terms whose intervals matter, by default all but the constant.
    contrasts : named linear combinations of coefficients, {name: {coefficient: weight}}.
    means : factors whose level means are wanted.
    unadjusted : also fit each focus term alone.
    assigned : level at which a term was assigned, {term: level} or {term: {"unit": level, "within": level}}.
    sampled : group level that was sampled.
    missing, ties : what to do with a missing id, time or place; what to do with equal times in a series.
    confidence, alternative : level of intervals, from 0.5 up to 1; direction of the primary tests.
    material : band of standard-error factors that do not matter.
    rehearsal : "auto" (a short one), "none", or the number of replicates under each error model.
    seed : start of every random number.
    """

    model: str | None = None
    residual: str | None = None
    sheet: str | None = None
    wide: str | tuple[str, ...] | None = None
    group: str | tuple[str, ...] | None = None
    time: str | None = None
    series: str | None = None
    coords: tuple[str, str] | None = None
    lonlat: bool | None = None
    neighbours: str | None = None
    weights: str | None = None
    weights_kind: Weights = "precision"
    focus: tuple[str, ...] | None = None
    contrasts: Mapping[str, Mapping[str, float]] | None = None
    means: tuple[str, ...] | None = None
    unadjusted: bool = False
    assigned: Mapping[str, Any] | None = None
    sampled: str | None = None
    missing: Missing = "stop"
    ties: Ties = "stop"
    confidence: float = 0.95
    alternative: Alternative = "two-sided"
    material: tuple[float, float] = (0.95, 1.10)
    rehearsal: str | int = "auto"
    seed: int = 0

    def __post_init__(self) -> None:
        for name in ("time", "series", "weights", "sampled"):
            _names(name, getattr(self, name), (str,))
        _names("group", self.group, (str, tuple, list))
        if not isinstance(self.confidence, Real):
            raise InputError(
                f"confidence={self.confidence!r} is not a number", "Write 95 % as confidence=0.95."
            )
        _one_of("missing", self.missing, get_args(Missing))
        _one_of("ties", self.ties, get_args(Ties))
        _one_of("alternative", self.alternative, get_args(Alternative))
        if self.weights_kind == "survey":
            raise NotSupported(
                "survey weights are not supported: no theory here joins them with dependent errors",
                "Use 'precision' if a weight says how exact a row is, 'frequency' if it counts rows.",
            )
        _one_of("weights_kind", self.weights_kind, ("precision", "frequency"))
        if not 0.5 <= self.confidence < 1:
            raise InputError(
                f"confidence={self.confidence} is not a level from 0.5 up to 1",
                "Write 95 % as confidence=0.95.",
            )
        low, high = self.material
        if not 0 < low <= 1 <= high:
            raise InputError(
                f"material=({low}, {high}) must be two positive factors on either side of 1",
                "The default is (0.95, 1.10): standard errors 5 % too wide or 10 % too narrow matter.",
            )
        if isinstance(self.rehearsal, str):
            _one_of("rehearsal", self.rehearsal, ("auto", "none"))
        if self.seed < 0:
            raise InputError(f"seed={self.seed} is negative", "Use a whole number from 0 upwards.")


def _names(name: str, value: object, kinds: tuple[type, ...]) -> None:
    """Whether columns are named, where a person may well have given the column itself."""
    if value is not None and not isinstance(value, kinds):
        raise InputError(
            f"{name}= is given a {type(value).__name__}, and the name of a column is needed",
            f"Make it a column of the data, and write {name}='column'.",
        )


def _one_of(name: str, value: str, choices: tuple[str, ...]) -> None:
    if value not in choices:
        listed = ", ".join(repr(c) for c in choices)
        raise InputError(f"{name}={value!r} is not one of {listed}", f"Choose one of {listed}.")


class Progress(Protocol):
    """What a caller may pass as ``progress``: called with (label, done, total)."""

    def __call__(self, label: str, done: int, total: int) -> None: ...


@dataclass(frozen=True, eq=False)
class Run:
    """Settings, thresholds and the source of every random number."""

    settings: Settings = field(default_factory=Settings)
    limits: Limits = field(default_factory=Limits)
    report: Progress | None = None

    def child(self, purpose: str, index: int = 0) -> np.random.Generator:
        """A generator keyed by (seed, purpose, index).

        Numbers drawn for one purpose do not move when another test, order or worker is added.
        """
        import numpy as np  # the command line reads this file for its options alone

        return np.random.default_rng([self.settings.seed, zlib.crc32(purpose.encode()), index])

    @contextmanager
    def progress(self, label: str, total: int) -> Iterator[Callable[[int], None]]:
        """Yields ``advance(steps)``; silent when nobody listens."""
        done = 0

        def advance(steps: int = 1) -> None:
            nonlocal done
            done += steps
            if self.report is not None:
                self.report(label, done, total)

        if self.report is not None:
            self.report(label, 0, total)
        yield advance


@contextmanager
def one_thread() -> Iterator[None]:
    """One BLAS thread inside, then as many as the caller had: the default of every public verb.

    The factorizations here are small, and two threads make them slower; cores are used by the workers of a
    rehearsal, one thread each. Numbers do not depend on it: sums are added up in the same order.
    """
    from threadpoolctl import threadpool_limits

    with threadpool_limits(limits=1, user_api="blas"):
        yield
