"""What stops the work, and what the data must carry: errors, refusals, thresholds."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Literal

Family = Literal["group", "serial", "spatial", "mean", "lookalike"]


class InputError(ValueError):
    """The input or the call is wrong and the user can mend it.

    ``str(error)`` says what was found, where and why it stops; ``hint`` says what to do.
    """

    def __init__(self, message: str, hint: str = "") -> None:
        super().__init__(message)
        self.hint = hint


class NotSupported(ValueError):  # noqa: N818 - the data cannot carry it; nothing went wrong
    """These data cannot carry what was asked. ``hint`` says what would be needed."""

    def __init__(self, message: str, hint: str = "") -> None:
        super().__init__(message)
        self.hint = hint


@dataclass(frozen=True)
class Refusal:
    """Why something is not done, and what would be needed."""

    reason: str
    hint: str = ""

    def error(self) -> NotSupported:
        return NotSupported(self.reason, self.hint)


@dataclass(frozen=True)
class Limits:
    """What the data must carry, one home for every threshold.

    Each is a default by judgement of the published evidence beside it; none is a law.
    """

    # Counts of groups: variance components need 5-6 levels (convention); few-cluster inference
    # is unreliable below about 10 even with small-sample df (Cameron & Miller 2015).
    groups_test: int = 2
    groups_estimate: int = 5
    groups_easy: int = 10
    # Degrees of freedom below which a t interval is not to be trusted: 4 is convention
    # (Tipton 2015; Pustejovsky & Tipton 2018).
    df_floor: float = 4.0
    # Below 2 the variance of a t interval's own length does not exist: no interval is advised there.
    df_least: float = 2.0
    # Clusters in the smaller arm: below the first no resampling of clusters can be trusted, below the second
    # it leans on equal variances in both arms (MacKinnon & Webb 2017, 2018).
    treated_least: int = 3
    treated_easy: int = 6
    # Serial: rows in one series, or many short ones (Krone et al. 2016; Park & Mitchell 1980).
    serial_test_rows: int = 8
    serial_test_series: int = 8
    serial_estimate_rows: int = 20
    serial_estimate_series: int = 8
    serial_estimate_short: int = 5
    serial_easy_rows: int = 50
    # Periods that all series share, as the theory lets their number grow; convention.
    periods_estimate: int = 20
    periods_easy: int = 50
    # Spatial: distinct sites (Webster & Oliver; common practice for variograms).
    sites_test: int = 8
    sites_verdict: int = 20
    sites_estimate: int = 20
    sites_easy: int = 50
    ranges_across: float = 2.0
    # Largest dense problem, in rows or sites, that is factored without asking.
    dense_sites: int = 1500
    dense_rows: int = 1000


@dataclass(frozen=True)
class Needs:
    """What a test or a remedy asks of a design.

    parts : structures that must be declared ("group", "serial", "spatial").
    counts : smallest counts, e.g. {"groups": 2, "sites": 8}; the names are those of
        ``Design.counts``.
    known_design : True when the columns of the model must be known (not residuals alone).
    unweighted : True when precision weights cannot be carried.
    """

    parts: frozenset[str] = frozenset()
    counts: Mapping[str, int] = field(default_factory=dict)
    known_design: bool = False
    unweighted: bool = False

    def check(self, design: Any) -> Refusal | None:
        """The first need that this design does not meet, or None."""
        for part in sorted(self.parts):
            if getattr(design, part) is None:
                return Refusal(f"no {part} structure was declared", _DECLARE[part])
        if self.known_design and not design.known:
            return Refusal(
                "only residuals were given, so the model's columns are unknown",
                "Give the data and the model formula, or a fitted model with its data.",
            )
        if self.unweighted and design.root is not None:
            return Refusal(
                "precision weights cannot be carried through this method",
                "Leave the weights out, or use a remedy for grouped rows, which carries them.",
            )
        have = design.counts
        for name, least in self.counts.items():
            if have.get(name, 0) < least:
                return Refusal(
                    f"{have.get(name, 0)} {name} found; this needs at least {least}",
                    f"More {name} would be needed.",
                )
        return None


_DECLARE = {
    "group": "Name the grouping column with group=.",
    "serial": "Name the time column with time=.",
    "spatial": "Name the two coordinate columns with coords=.",
}


def memory(bytes_needed: float, what: str) -> None:
    """Raise NotSupported if an allocation would not fit in half of the free memory."""
    try:
        with open("/proc/meminfo", encoding="ascii") as lines:
            free = next(float(line.split()[1]) * 1024 for line in lines if line.startswith("MemAvailable"))
    except (OSError, StopIteration):
        free = 4e9  # not Linux: assume a small machine
    if bytes_needed > free / 2:
        raise NotSupported(
            f"{what} needs {bytes_needed / 1e9:.1f} GB and {free / 1e9:.1f} GB are free",
            "Use fewer rows or sites, or a machine with more memory.",
        )
