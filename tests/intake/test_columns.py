"""One mask of rows; every loss counted; bad values shown with their rows."""

from __future__ import annotations

import datetime as dt
from collections.abc import Callable
from decimal import Decimal
from typing import Any

import duckdb
import geopandas as gpd
import numpy as np
import pandas as pd
import polars as pl
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from clingstone.intake.columns import Columns, _copies, fingerprint, gather
from clingstone.intake.frames import table
from clingstone.needs import InputError


def flocks(**changed: Any) -> pd.DataFrame:
    columns: dict[str, Any] = {
        "weight": [3.1, 2.9, np.nan, 4.0, 3.3, 3.8],
        "age": [1.0, np.nan, 2.0, 2.0, 3.0, 3.0],
        "flock": ["a", "a", "b", "b", "c", "c"],
        "day": [1, 2, 1, 2, 1, 2],
    }
    return pd.DataFrame(columns | changed)


def read(frame: Any, missing: str = "stop", **roles: tuple[str, ...]) -> Columns:
    given = {"response": ("weight",), "predictor": ("age",), "group": ("flock",), "time": ("day",)} | roles
    return gather(table(frame), given, missing)  # type: ignore[arg-type]


def message(call: Callable[[], Any]) -> tuple[str, str]:
    with pytest.raises(InputError) as caught:
        call()
    return str(caught.value), caught.value.hint


def test_losses_are_counted_once_by_the_first_reason() -> None:
    got = read(flocks(age=[1.0, np.nan, np.nan, 2.0, 3.0, 3.0]))
    assert got.kept.tolist() == [0, 3, 4, 5]
    assert dict(got.dropped) == {"missing weight (response)": 1, "missing age (predictor)": 1}
    assert got.rows_read == 6
    assert got.frame["flock"].tolist() == ["a", "b", "c", "c"]


def test_what_is_counted_under_another_column_is_told() -> None:
    """Ozone in rows 1 to 3, solar in rows 3 to 5: five rows are lost, three of them by ozone."""
    frame = pd.DataFrame({"ozone": [np.nan] * 3 + [1.0, 2, 3], "solar": [1.0, 2] + [np.nan] * 3 + [3.0]})
    got = gather(table(frame), {"response": ["ozone"], "predictor": ["solar"]})
    assert dict(got.dropped) == {"missing ozone (response)": 3, "missing solar (predictor)": 2}
    assert got.notes == ("solar is missing in 3 rows in all; 1 of them is counted under another column.",)


def test_a_missing_id_stops_with_counts() -> None:
    frame = flocks(flock=["a", None, None, "b", None, "c"], day=[1, 2, 1, np.nan, 1, 2])
    said, hint = message(lambda: read(frame))
    # Rows 2 and 3 lack the response or a predictor and are out already.
    assert said.startswith("missing: flock in 1 row (row 5) and day in 1 row (row 4)")
    assert "missing='drop'" in hint
    assert "own-group" in hint


def test_a_missing_id_may_be_dropped_or_stand_alone() -> None:
    frame = flocks(flock=["a", "a", "b", "b", None, "c"])
    assert dict(read(frame, "drop").dropped)["missing flock (group)"] == 1
    got = read(frame, "own-group")
    assert got.frame["flock"].tolist() == ["a", "b", "(row 5)", "c"]
    numbered = read(flocks(flock=[1.0, 1, 2, 2, np.nan, 3]), "own-group")
    assert numbered.frame["flock"].tolist() == [1.0, 2.0, "(row 5)", 3.0]


def test_own_group_does_not_settle_a_missing_time() -> None:
    said, hint = message(lambda: read(flocks(day=[1, 2, 1, 2, None, 2]), "own-group"))
    assert said.startswith("missing: day in 1 row (row 5)")
    assert "own-group" not in hint


def test_blank_text_is_a_missing_id() -> None:
    assert message(lambda: read(flocks(flock=["a", "a", "b", "b", "  ", "c"])))[0].startswith(
        "missing: flock in 1 row"
    )


def test_no_such_column_offers_near_names() -> None:
    assert message(lambda: read(flocks(), group=("Flok",))) == (
        "there is no column ‘Flok’ (group)",
        "Did you mean ‘flock’?",
    )
    assert message(lambda: read(flocks(), group=("zzz",)))[1].startswith("Choose from ‘weight’, ‘age’")


def test_text_where_numbers_are_needed_shows_rows_and_values() -> None:
    frame = flocks(w=["1", "2", "<0.1", "n.a.", "5", "6"])
    said, _ = message(
        lambda: gather(table(frame), {"response": ("weight",), "weight": ("w",)}, numeric=("w",))
    )
    assert said == "w holds text where numbers are needed: rows 3 and 4 have ‘<0.1’ and ‘n.a.’"
    frame = flocks(w=["01", "02", "03", "04", "05", "06"])
    said, _ = message(
        lambda: gather(table(frame), {"response": ("weight",), "weight": ("w",)}, numeric=("w",))
    )
    assert said == "w holds numbers stored as text, such as ‘01’ in row 1"


def test_row_numbers_are_those_of_the_table_when_rows_are_already_lost() -> None:
    held = table(flocks()).take(np.array([0, 3, 4, 5]))
    frame = flocks(flock=["a", "a", "b", "b", None, "c"])
    said, _ = message(lambda: gather(table(frame).take(np.array([0, 3, 4, 5])), {"group": ("flock",)}))
    assert said.startswith("missing: flock in 1 row (row 5)")
    assert held.places.tolist() == [0, 3, 4, 5]
    assert held.take(np.array([1, 3])).places.tolist() == [3, 5]


def test_infinite_values_are_named() -> None:
    said, _ = message(lambda: read(flocks(age=[1.0, np.inf, 2, -np.inf, 1, 1])))
    assert said.startswith("age is infinite in rows 2 and 4")


def test_nothing_left() -> None:
    said, _ = message(lambda: read(flocks(weight=[np.nan] * 3 + [1.0] * 3, age=[1.0] * 3 + [np.nan] * 3)))
    assert said == "no row is left of 6 (missing weight (response): 3 and missing age (predictor): 3)"


def test_weights() -> None:
    got = read(flocks(w=[1, 2, 3, 0, 1, 1]), weight=("w",))
    assert dict(got.dropped)["weight 0 (w)"] == 1
    assert message(lambda: read(flocks(w=[1, 2, 3, -1, 1, 1]), weight=("w",)))[0].startswith(
        "w is negative in row 4"
    )


def test_repeated_column_names_in_a_frame() -> None:
    frame = pd.DataFrame([[1, 2]], columns=["y", "y"])
    assert message(lambda: table(frame))[0] == "column names occur more than once: ‘y’ (columns 1 and 2)"


def test_no_rows_and_no_table() -> None:
    assert message(lambda: table(flocks().iloc[:0]))[0] == "the table has no rows"
    assert message(lambda: table(7))[0] == "int is no table that is known here"
    assert message(lambda: table({"a": [1], "b": [1, 2]}))[0].startswith("these columns make no table")
    two = pd.DataFrame([[1]], columns=pd.MultiIndex.from_tuples([("a", "b")]))
    assert message(lambda: table(two))[0] == "the column names have 2 levels"


def test_index_levels_are_columns() -> None:
    got = read(flocks().set_index(["flock", "day"]))
    assert got.frame["day"].tolist() == [1, 2, 1, 2]


KINDS = ("polars", "lazy", "arrow", "duckdb", "map", "mapping", "object", "nullable", "categorical")


@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_of_frame_gives_the_same_columns(kind: str) -> None:
    frame = flocks()
    made: Any = {
        "polars": lambda: pl.DataFrame(frame.to_dict("list"), strict=False).with_columns(
            pl.col(pl.Float64).fill_nan(None)
        ),
        "lazy": lambda: pl.LazyFrame(frame.to_dict("list")).with_columns(pl.col(pl.Float64).fill_nan(None)),
        "arrow": lambda: pa.Table.from_pandas(frame),
        "duckdb": lambda: duckdb.from_arrow(pa.Table.from_pandas(frame)).filter("day < 9"),
        "map": lambda: gpd.GeoDataFrame(frame, geometry=gpd.points_from_xy(range(6), range(6)), crs=3035),
        "mapping": lambda: frame.to_dict("list"),
        "object": lambda: frame.astype(object),
        "nullable": lambda: frame.convert_dtypes(),
        "categorical": lambda: frame.astype({"flock": "category"}),
    }[kind]()
    plain, other = read(frame), read(made)
    assert other.kept.tolist() == plain.kept.tolist()
    assert other.frame["weight"].to_numpy(dtype=float).tolist() == plain.frame["weight"].tolist()
    assert other.frame["flock"].astype(str).tolist() == plain.frame["flock"].tolist()
    assert other.fingerprint == plain.fingerprint


def test_decimals_and_true_false_with_gaps() -> None:
    frame = flocks(age=[Decimal("1.5"), None, Decimal(2), Decimal(3), Decimal(4), Decimal(5)])
    assert read(frame).frame["age"].tolist() == [1.5, 3.0, 4.0, 5.0]
    frame = flocks(age=pd.array([True, None, False, True, False, True], dtype="boolean"))
    assert read(frame).frame["age"].dtype == bool


def test_fingerprint_sees_values_and_missing_places() -> None:
    frame = flocks()
    mark = fingerprint(frame)
    assert mark == fingerprint(frame.copy())
    assert mark != fingerprint(flocks(age=[1.0, 2.0, 2.0, 2.0, 3.0, 3.0]))
    assert mark != fingerprint(frame.rename(columns={"age": "old"}))
    assert fingerprint(flocks(day=[-0.0] * 6)) == fingerprint(flocks(day=[0] * 6))
    one = pd.DataFrame({"s": ["ab", "c"]})
    assert fingerprint(one) != fingerprint(pd.DataFrame({"s": ["a", "bc"]}))
    zoned = pd.to_datetime(pd.Series(["2021-03-04T10:00+02:00"]))
    plain = pd.Series([dt.datetime(2021, 3, 4, 8)])
    assert fingerprint(pd.DataFrame({"t": zoned})) == fingerprint(pd.DataFrame({"t": plain}))


# ---- notes ----------------------------------------------------------------------------------------


def test_copies_of_rows_are_counted_and_kept() -> None:
    frame = pd.concat([flocks(), flocks().iloc[[3, 4]]], ignore_index=True)
    got = read(frame)
    assert len(got.kept) == 6
    assert got.notes[0].startswith("2 rows equal another row in every column used (rows 7 and 8)")
    one = read(pd.concat([flocks(), flocks().iloc[[3]]], ignore_index=True))
    assert one.notes[0] == (
        "1 row equals another row in every column used (row 7); it is kept. If it is a copy, n is too large."
    )


@given(
    st.lists(
        st.tuples(st.sampled_from([1.0, 2.0, np.nan]), st.sampled_from(["a", "b", None]), st.integers(0, 1)),
        max_size=8,
    )
)
def test_copies_found_column_by_column_are_those_of_whole_rows(rows: list[tuple[Any, ...]]) -> None:
    frame = pd.DataFrame(rows, columns=["y", "g", "t"])
    assert _copies(frame).tolist() == frame.duplicated(keep="first").tolist()


@pytest.mark.parametrize(
    ("values", "told"),
    [
        ([1.0, 2.0, 3.0, 4.0, -999.0, 2.5], True),
        ([21.0, 22.0, 23.0, 24.0, 9999.0, 9999.0], True),
        ([950.0, 980.0, 999.0, 970.0, 960.0, 940.0], False),
        ([-900.0, -999.0, -950.0, 10.0, 20.0, 30.0], False),
        ([1.0, 2.0, 3.0, 4.0, -998.0, 2.5], False),
    ],
)
def test_codes_for_missing_that_stand_apart(values: list[float], told: bool) -> None:
    notes = read(flocks(age=values, weight=[1.0, 2, 3, 4, 5, 6])).notes
    assert any("often a code for missing" in n for n in notes) is told
