"""Times of every kind become counts that can be subtracted, or stop with the reason."""

from __future__ import annotations

import datetime as dt
from typing import Any

import numpy as np
import pandas as pd
import pytest

from clingstone.needs import InputError
from clingstone.structure.clock import Clock, read


def clock(values: Any, name: str = "t") -> Clock:
    column = values if isinstance(values, pd.Series) else pd.Series(values)
    return read(name, column, np.arange(len(column)))


def elapsed(values: Any, name: str = "t") -> tuple[list[float], str]:
    """Counts since the first, in the unit of steps of one."""
    found = clock(values, name)
    unit, per = found.units[-1] if len(found.units) == 1 else found.units[0]
    return [float(c) for c in (found.counts - found.counts.min()) / per], unit


@pytest.mark.parametrize(
    ("values", "counts", "unit"),
    [
        ([3, 1, 2], [2, 0, 1], ""),
        ([0.5, 0.25, 1.0], [0.25, 0, 0.75], ""),
        (["2021Q3", "2021Q4", "2022Q1"], [0, 1, 2], "quarter"),
        (["2021-Q3", "2021 q4", "2022Q1"], [0, 1, 2], "quarter"),
        (["Q3 2021", "Q4/2021", "Q1-2022"], [0, 1, 2], "quarter"),
        (["2021-11", "2021-12", "2022-01"], [0, 1, 2], "month"),
        (["2021M11", "2021/12", "01/2022"], [0, 1, 2], "month"),
        (["Nov 2021", "December 2021", "Jan-2022"], [0, 1, 2], "month"),
        (["2020-W53", "2021-W01", "2021W02"], [0, 1, 2], "week"),
        (["2021-03-04", "2021-03-07", "2021-3-5"], [0, 3, 1], "day"),
        (["2021/03/04", "2021/03/07", "2021.3.5"], [0, 3, 1], "day"),
        (["4 Mar 2021", "7 March 2021", "5-Mar-2021"], [0, 3, 1], "day"),
        (["Mar 4, 2021", "Mar 7, 2021", "March 5 2021"], [0, 3, 1], "day"),
        (["13/02/2021", "14/02/2021", "01/03/2021"], [0, 1, 16], "day"),
        (["02/13/2021", "02/14/2021", "03/01/2021"], [0, 1, 16], "day"),
        ([20210304, 20210307, 20210305], [0, 3, 1], "day"),
        (["01", "02", "10"], [0, 1, 9], ""),
        ([dt.date(2021, 3, 4), dt.date(2021, 3, 7), dt.date(2021, 3, 5)], [0, 3, 1], "day"),
        # Calendar steps: months of 31, 28 and 31 days are one step each.
        (["2021-01-01", "2021-02-01", "2021-03-01"], [0, 1, 2], "month"),
        (["2021-01-31", "2021-02-28", "2021-03-31"], [0, 1, 2], "month"),
        (["2021-01-15", "2021-02-15", "2021-04-15"], [0, 1, 3], "month"),
        (["2021-01-01", "2021-04-01", "2021-10-01"], [0, 1, 3], "quarter"),
        (["2021-03-31", "2021-06-30", "2021-12-31"], [0, 1, 3], "quarter"),
        (["2019-12-31", "2020-12-31", "2022-12-31"], [0, 1, 3], "year"),
        (["2021-01-01", "2021-01-02", "2021-02-01"], [0, 1, 31], "day"),
    ],
)
def test_what_is_read(values: list[Any], counts: list[float], unit: str) -> None:
    assert elapsed(values) == (counts, unit)


@pytest.mark.parametrize(
    ("freq", "start", "unit"),
    [("M", "2021-01", "month"), ("Q", "2021Q1", "quarter"), ("Y", "2001", "year"), ("D", "2021-01-30", "day"),
     ("W", "2021-01-04", "week"), ("h", "2021-01-01 00:00", "hour"), ("min", "2021-01-01", "minute")],
)  # fmt: skip
def test_periods(freq: str, start: str, unit: str) -> None:
    periods = pd.period_range(start, periods=4, freq=freq)
    assert elapsed(pd.Series(periods)) == ([0, 1, 2, 3], unit)
    assert elapsed(pd.Series(list(periods), dtype=object)) == ([0, 1, 2, 3], unit)


def test_datetimes_pick_their_unit_from_the_step() -> None:
    hours = clock(pd.Series(pd.to_datetime(["2021-03-04 10:00", "2021-03-04 12:00", "2021-03-04 13:00"])))
    assert hours.unit_for(float(np.diff(np.sort(hours.counts)).min())) == ("hour", 3.6e9)
    assert hours.unit_for(9e10) == ("day", 8.64e10)
    assert hours.unit_for(5e5) == ("second", 1e6)


def test_zones_are_compared_in_utc() -> None:
    texts = ["2021-03-04T10:00+02:00", "2021-03-04T10:00Z", "2021-03-04T13:00-01:00"]
    found = clock(texts)
    assert ((found.counts - found.counts.min()) / 3.6e9).tolist() == [0, 2, 6]
    aware = pd.Series(
        pd.to_datetime(["2021-10-31 00:30", "2021-10-31 01:30"], utc=True).tz_convert("Europe/London")
    )
    both = clock(aware)  # the same clock time twice, an hour apart
    assert np.diff(both.counts).tolist() == [3_600_000_000]
    assert "Europe/London" in both.notes[0]
    objects = pd.Series(
        [dt.datetime(2021, 1, 1, 5, tzinfo=dt.timezone(dt.timedelta(hours=h))) for h in (0, 2)], dtype=object
    )
    assert np.diff(clock(objects).counts).tolist() == [-7_200_000_000]


def test_local_midnights_are_days_whatever_the_length_of_the_day() -> None:
    stamps = pd.Series(pd.date_range("2021-03-27", periods=3, freq="D", tz="Europe/Berlin"))
    assert elapsed(stamps) == ([0, 1, 2], "day")


def test_dates_far_back() -> None:
    assert elapsed(["1500-01-01", "1500-01-03", "1620-01-01"])[0][:2] == [0, 2]


def test_units_and_occasions_after_the_name() -> None:
    assert clock([1, 2, 3], "Days").units[0][0] == "day"
    assert clock([1, 2, 3], "year").notes == ("year is counted in years, after its name.",)
    assert "taken as equally far apart" in clock([1, 2, 3], "visit").notes[0]
    assert "taken as equally far apart" in clock([1, 2, 3], "wave_nr").notes[0]
    asked = clock([3, 1, 2], "x").notes[0]
    assert asked.startswith("x runs from 1 to 3 without a unit: its steps are taken as equally far apart")
    assert "give time= a column of the times themselves" in asked
    # Times that already lie unevenly, two of them, many of them, or with a unit, leave nothing to ask.
    for values, name in (([0, 3, 12], "x"), ([1, 2], "x"), (range(20), "x"), ([1, 2, 3], "week")):
        assert not any("equally far apart" in note for note in clock(values, name).notes)


def test_ordered_categories_are_steps() -> None:
    wave = pd.Series(
        pd.Categorical(["before", "after", "before"], categories=["before", "after"], ordered=True)
    )
    found = clock(wave)
    assert found.counts.tolist() == [0, 1, 0]
    assert "one step apart" in found.notes[0]
    plain = pd.Series(pd.Categorical(["2021Q1", "2021Q2"]))
    assert clock(plain).units[0][0] == "quarter"


def test_what_decided_day_and_month_is_told() -> None:
    note = clock(["13/02/2021", "01/03/2021"]).notes[0]
    assert note == "t is read as day/month/year: 1 distinct date can only be read so."


def test_times_are_shown_as_written() -> None:
    assert clock(["2021Q3", "2021Q4"]).show(1) == "2021Q4"
    assert clock([3.0, 4.0]).show(0) == "3"
    assert clock(pd.Series(pd.to_datetime(["2021-03-04", "2021-03-05"]))).show(0) == "2021-03-04"


@pytest.mark.parametrize(
    ("values", "said"),
    [
        (
            ["01/02/2021", "02/02/2021"],
            "t holds dates such as ‘01/02/2021’ that may be day/month or month/day",
        ),
        (
            ["13/02/2021", "02/13/2021"],
            "t holds dates such as ‘13/02/2021’ that may be day/month or month/day: some",
        ),
        (["04/13/21", "04/14/21"], "t holds ‘04/13/21’, whose day, month and year cannot be told apart"),
        (["Mar-19", "Apr-19"], "t holds ‘Mar-19’, which may be a month of a year or a day of a month"),
        (["2021-03-04", "soon", "2021-03-05"], "t cannot be read as times: row 2 has ‘soon’"),
        (["2021-02-30", "2021-03-01"], "t has ‘2021-02-30’ in row 1, which is no day of the calendar"),
        (
            ["2021-02-30 10:00", "2021-03-01 10:00"],
            "t has ‘2021-02-30 10:00’ in row 1, which is no date of the calendar",
        ),
        (["30/02/2021", "01/03/2021"], "t has ‘30/02/2021’ in row 1, which is no day of the calendar"),
        (["2021-13", "2021-12"], "t has ‘2021-13’ in row 1, and no year has such a month"),
        (["2021-W54"], "t names a week that its year does not have"),
        (["4 Mai 2021", "5 Mai 2021"], "t has ‘4 Mai 2021’ in row 1: ‘Mai’ is no English month"),
        (
            ["2021-03-04T10:00Z", "2021-03-04T11:00"],
            "t gives a zone in some rows and none in 1 distinct time",
        ),
        ([True, False], "t is true or false, not a time"),
        ([1, "2021-03-04", dt.date(2021, 1, 1)], "t mixes date, int and str"),
    ],
)
def test_what_cannot_be_read(values: list[Any], said: str) -> None:
    with pytest.raises(InputError) as caught:
        clock(pd.Series(values, dtype=object) if any(not isinstance(v, str) for v in values[1:]) else values)
    assert str(caught.value).startswith(said)
    assert caught.value.hint


def test_day_counts_of_a_spreadsheet_are_dates_where_the_column_says_date() -> None:
    # 43831 is 2020-01-01 in every spreadsheet that counts from 1900.
    days = pd.Series([43831, 43862, 43891])
    clock = read("sample_date", days, np.arange(3))
    assert [clock.show(i) for i in range(3)] == ["2020-01-01", "2020-02-01", "2020-03-01"]
    assert clock.units == (("month", 1.0),)
    assert clock.notes[0] == "sample_date holds day counts of a spreadsheet: 43831 is 2020-01-01."
    assert read("depth", days, np.arange(3)).counts.tolist() == [43831, 43862, 43891]
