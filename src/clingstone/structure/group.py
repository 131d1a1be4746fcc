"""Groups: one level, nested levels, or crossed factors."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from clingstone.maths.partition import Partition

Arrangement = Literal["one level", "nested", "crossed"]


@dataclass(frozen=True, eq=False)
class Groups:
    """Group levels of the rows.

    levels : partitions, outermost first when nested. A level's ``key`` is the user's own name of
        it: "clinic", or "clinic/ward" for the inner level of a nesting (its cells are pairs).
    arrangement : how the levels stand to each other.
    notes : what a reader should know (recycled labels, singletons), one sentence each.
    """

    levels: tuple[Partition, ...]
    arrangement: Arrangement
    notes: tuple[str, ...] = ()

    @property
    def finest(self) -> Partition:
        return self.levels[-1]

    def __getitem__(self, key: str) -> Partition:
        for level in self.levels:
            if level.key == key:
                return level
        raise KeyError(key)

    def __contains__(self, key: str) -> bool:
        return any(level.key == key for level in self.levels)
