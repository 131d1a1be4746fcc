"""Reading a file: python -m tests.benchmarks bench_reading"""

from __future__ import annotations

import tempfile
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from clingstone.intake import files
from tests.benchmarks.pairs import OURS, Row, Way

WANTED = ["id", "day", "y", "x", "z"]


@cache
def written(n: int, suffix: str) -> Path:
    """A file of n rows: an id of text, whole days, three columns that are used and three that are not."""
    rng = np.random.default_rng(1)
    made = {name: rng.standard_normal(n) for name in ("y", "x", "z", "a", "b", "c")}
    ids = np.char.add("p", rng.integers(0, n // 20, n).astype(str))
    frame = pd.DataFrame({"id": ids, "day": rng.integers(0, 400, n), **made})
    path = Path(tempfile.mkdtemp(prefix="reading-")) / f"big.{suffix}"
    frame.to_csv(path, index=False) if suffix == "csv" else frame.to_parquet(path)
    return path


def numbers(frame: pd.DataFrame) -> Any:
    return frame[WANTED[1:]].to_numpy(dtype=float).sum(axis=0)


def text() -> list[Way]:
    path = written(1_000_000, "csv")
    return [
        Way(OURS, lambda: numbers(files.source(path).read(WANTED)[0])),
        Way("pandas read_csv of those columns, as it is", lambda: numbers(pd.read_csv(path, usecols=WANTED))),
        Way(
            "pandas read_csv of all columns as text, then numbers",
            lambda: numbers(pd.read_csv(path, dtype=str)[WANTED].astype(dict.fromkeys(WANTED[1:], float))),
        ),
    ]


def parquet() -> list[Way]:
    path = written(1_000_000, "parquet")
    return [
        Way(OURS, lambda: numbers(files.source(path).read(WANTED)[0])),
        Way("pandas read_parquet of those columns", lambda: numbers(pd.read_parquet(path, columns=WANTED))),
    ]


SIZE = "1e6 rows, 5 of 8 columns"
NOTE = (
    "Ours also finds out encoding, separator and decimal mark, checks that every line has as many fields "
    "as the header, and keeps codes with leading zeros."
)
ROWS = (
    Row("read-csv", "Reading delimited text", SIZE, text, NOTE),
    Row("read-parquet", "Reading Parquet", SIZE, parquet),
)
