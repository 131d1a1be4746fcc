"""What every remedy that works on clusters asks of them: their partition, their arms, their number."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from clingstone.design.design import Design, rows_of
from clingstone.maths.partition import Partition
from clingstone.needs import Family, Limits, NotSupported, Refusal
from clingstone.remedies.remedy import Plain

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

WITHIN = ("same", "nests")


def called(design: Design, at: str) -> str:
    """What a sentence calls the clusters: the level's own name, with the one around it where labels recur."""
    groups = design.group
    return groups.title(at) if groups is not None and at in groups else at


def clusters(design: Design, at: str) -> Partition:
    """The partition named ``at``. Raises NotSupported when its cells cannot serve as clusters."""
    part = design.partitions.get(at)
    if not design.partitions:
        raise NotSupported(
            "no groups, series or sites were declared, so there are no clusters",
            "Name the grouping column with group=.",
        )
    if part is None:
        known = ", ".join(design.partitions) or "none"
        raise NotSupported(f"the design has no partition named {at!r}", f"Known: {known}.")
    if part.count < 2:
        raise NotSupported(
            f"there is one {called(design, at)}; clusters are compared with each other, so at least two "
            "are needed",
            "Use a remedy for dependence inside one series or one map, or a finer level.",
        )
    if part.count == design.n:
        raise NotSupported(
            f"every row is a {called(design, at)} of its own, so clusters hold no repeated rows",
            "Repeated rows would be needed; for single rows there is heteroscedasticity-robust.",
        )
    return part


def levels(design: Design) -> tuple[str, ...]:
    """Partitions of two cells or more that are not one row per cell; equal ones once."""
    found: dict[str, Partition] = {}
    for key, part in design.partitions.items():
        if not 2 <= part.count < design.n:
            continue
        if all(part.relation(other) != "same" for other in found.values()):
            found[key] = part
    return tuple(found)


def group_levels(design: Design) -> tuple[str, ...]:
    """Those of ``levels`` that are group levels."""
    groups = design.group
    return () if groups is None else tuple(key for key in levels(design) if key in groups)


def covered(design: Design, part: Partition) -> frozenset[Family]:
    """The families whose dependence lies wholly within the clusters."""
    out: set[Family] = set()
    if design.group is not None and any(part.relation(g) in WITHIN for g in design.group.levels):
        out.add("group")
    if design.serial is not None and part.relation(design.serial.part) in WITHIN:
        out.add("serial")
    return frozenset(out)


class OverClusters(Plain):
    """A remedy run over any partition of the rows; it covers what lies wholly within the clusters."""

    at: str

    def abouts(self, design: Design) -> tuple[str, ...]:
        return levels(design)

    def lacking(self, design: Design) -> Refusal:
        """No level can serve as clusters: what stops the first of them, or that there is none."""
        try:
            clusters(design, next(iter(design.partitions), ""))
        except NotSupported as stop:
            return Refusal(str(stop), stop.hint)
        return super().lacking(design)

    def covering(self, fits: Fits) -> frozenset[Family]:
        return covered(fits.design, clusters(fits.design, self.at))


class OverGroups(OverClusters):
    """The same over group levels only."""

    def abouts(self, design: Design) -> tuple[str, ...]:
        return group_levels(design)


def sizes_of(part: Partition) -> tuple[tuple[str, str], ...]:
    """What every account of clusters says of them."""
    return (
        ("clusters", f"{part.count}"),
        ("rows per cluster", f"{part.sizes.min()} to {part.sizes.max()}"),
    )


def arms(design: Design, part: Partition) -> dict[str, int]:
    """For each two-valued column: clusters that hold the rarer of its values."""
    X = rows_of(design, design.Q @ design.basis.R)
    out = {}
    for j, name in enumerate(design.names):
        low, high = X[:, j].min(), X[:, j].max()
        near = 1e-9 * max(abs(low), abs(high))
        upper = X[:, j] >= high - near
        if high - low > near and np.all(upper | (X[:, j] <= low + near)):
            held = (np.bincount(part.codes[rows], minlength=part.count) for rows in (upper, ~upper))
            out[name] = min(int(np.count_nonzero(each)) for each in held)
    return out


def few_treated(
    design: Design, part: Partition, at: str, limits: Limits
) -> tuple[dict[str, Refusal], tuple[str, ...]]:
    """Coefficients that too few clusters carry, and sentences on those that few do."""
    refused, notes, level = {}, [], called(design, at)
    for name, held in arms(design, part).items():
        if held < limits.treated_least:
            refused[name] = Refusal(
                f"only {held} of {part.count} clusters of {level} hold the rarer value of it, and resampling "
                "clusters says nothing about so few",
                "Permuting what was assigned (randomisation, with assigned=), or means of each group, are "
                "still possible.",
            )
        elif held < min(limits.treated_easy, part.count / 2):
            notes.append(
                f"Only {held} of {part.count} clusters of {level} hold the rarer value of {name}: its "
                "interval leans on equal variances in both kinds of cluster."
            )
    return refused, tuple(notes)


def rank_note(part: Partition, p: int) -> tuple[str, ...]:
    """A sentence where the clusters are too few for the covariance of all coefficients at once."""
    if part.count > p:
        return ()
    return (
        f"{part.count} clusters cannot carry the covariance of {p} coefficients at once: it has deficient "
        f"rank. Single intervals stand; a joint test of {part.count} coefficients or more does not.",
    )
