"""Tables in partitions: a folder of Parquet files, or a Dask data frame. Nothing statistical is here."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any, TypeVar

from clingstone.display import instead
from clingstone.needs import InputError, NotSupported, memory

T = TypeVar("T")
COPIES = 14  # times the numeric columns: the peak of an examination with group and time, at a million rows


def is_parted(data: Any) -> bool:
    """A Dask data frame, or the path of a folder."""
    if isinstance(data, (str, Path)):
        return Path(data).is_dir()
    return type(data).__module__.partition(".")[0].startswith("dask") and hasattr(data, "map_partitions")


def opened(data: Any) -> Any:
    """A Dask data frame. Raises InputError where Dask is missing or the folder holds no Parquet file."""
    if not isinstance(data, (str, Path)):
        return data
    if not list(Path(data).glob("**/*.parquet")):
        raise InputError(
            f"the folder {data} holds no .parquet file", "Give a folder of Parquet files, or one file."
        )
    try:
        import dask.dataframe as dd
    except ImportError as error:
        raise InputError(
            "a folder of Parquet files is read with Dask, which is not installed",
            'pip install "clingstone[dask]"',
        ) from error
    return dd.read_parquet(str(data))


def named(table: Any, columns: Sequence[str]) -> Any:
    """Those columns. Raises InputError where one is missing."""
    have = [str(c) for c in table.columns]
    for name in columns:
        if name not in have:
            raise InputError(f"there is no column ‘{name}’", instead(name, have))
    return table[list(dict.fromkeys(columns))]


def gathered(data: Any) -> Any:
    """The whole table in memory, if it fits.

    Raises NotSupported with what can be done where it does not.
    """
    table = opened(data)
    rows = int(table.map_partitions(len).sum().compute())
    try:
        memory(
            8.0 * COPIES * rows * len(table.columns), f"a table of {rows:,} rows in {table.npartitions} parts"
        )
    except NotSupported as stop:
        raise NotSupported(
            str(stop),
            "clingstone.examine_parts(…) does what can be done partition by partition; or examine a sample "
            "of whole groups that fits in memory, or keep fewer columns.",
        ) from stop
    return table.compute().reset_index(drop=True)


def levels(table: Any, column: str) -> list[Any]:
    """Distinct values of a column in the order of a factor's levels."""
    found = table[column].drop_duplicates().compute().dropna()
    return sorted(found.unique(), key=lambda v: (str(type(v)), str(v)))


def together(table: Any, column: str) -> Any:
    """The same rows with all those of one value in one partition."""
    return table.shuffle(on=column)


def over(table: Any, work: Callable[[Any], T], join: Callable[[T, T], T]) -> T:
    """``work`` on every partition that has rows, and the results joined pairwise up one tree.

    The tree depends on the number of partitions alone, so the numbers do not depend on who works.
    """
    from dask.base import compute
    from dask.delayed import delayed

    made = [delayed(_worked)(work, part) for part in table.to_delayed()]
    while len(made) > 1:
        pairs = [delayed(_joined)(join, *made[i : i + 2]) for i in range(0, len(made) - 1, 2)]
        made = pairs + (made[-1:] if len(made) % 2 else [])
    (found,) = compute(made[0])  # type: ignore[no-untyped-call]
    if found is None:
        raise InputError("the table has no rows", "Give a table with at least one row.")
    result: T = found
    return result


def _worked(work: Callable[[Any], T], part: Any) -> T | None:
    return work(part) if len(part) else None


def _joined(join: Callable[[T, T], T], a: T | None, b: T | None) -> T | None:
    return b if a is None else a if b is None else join(a, b)
