"""Times of any kind as counts that can be subtracted: numbers, periods, dates, datetimes, text."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from clingstone.display import count, listed, quoted, rows
from clingstone.needs import InputError

if TYPE_CHECKING:
    import pandas as pd

MICRO = {"day": 86_400_000_000, "hour": 3_600_000_000, "minute": 60_000_000, "second": 1_000_000}
UNIT_WORDS = {
    "year": "year", "years": "year", "yr": "year", "quarter": "quarter", "month": "month",
    "months": "month", "week": "week", "weeks": "week", "day": "day", "days": "day", "hour": "hour",
    "hours": "hour", "minute": "minute", "minutes": "minute", "second": "second", "seconds": "second",
}  # fmt: skip
PERIODS = (
    ("Q", "quarter"), ("Y", "year"), ("A", "year"), ("W", "week"), ("D", "day"), ("H", "hour"),
    ("MIN", "minute"), ("T", "minute"), ("S", "second"), ("M", "month"),
)  # fmt: skip
SERIAL = (15_000, 80_000)  # spreadsheet day counts of the years 1941 to 2119
UNIX_SERIAL = 25_569  # that of 1970-01-01
ORDINAL_WORDS = {"visit", "wave", "round", "session", "timepoint", "occasion"}
FEW_OCCASIONS = 8  # times 1, 2, 3 … up to which they are asked about
EVEN = (
    "taken as equally far apart. If they were not (as 1, 2, 3 for 0, 3 and 12 months), give time= a column "
    "of the times themselves."
)
MONTHS = ("jan", "feb", "mar", "apr", "may", "jun", "jul", "aug", "sep", "oct", "nov", "dec")


@dataclass(frozen=True, eq=False)
class Clock:
    """Times as counts.

    counts : (n,) int64 where exact, else float64. units : (name, counts in one unit), largest
    first; which one is used depends on the step. show : the time of a row as text.
    """

    counts: npt.NDArray[Any]
    units: tuple[tuple[str, float], ...]
    show: Callable[[int], str]
    notes: tuple[str, ...] = ()

    def unit_for(self, step: float) -> tuple[str, float]:
        """The largest unit that is not longer than a step of so many counts."""
        return next((u for u in self.units if u[1] <= step), self.units[-1])


def read(name: str, values: pd.Series, places: npt.NDArray[np.int64]) -> Clock:
    """Counts from a column without missing values.

    Dates become days, or months, quarters, years when every date falls on the same (or the last)
    day of one, so that steps are equal; datetimes become microseconds, with zones turned to UTC.

    Raises
    ------
    InputError : text that is no time, or that may be day/month or month/day.
    """
    import pandas as pd

    values = values.infer_objects()
    dtype = values.dtype
    if isinstance(dtype, pd.CategoricalDtype):
        if dtype.ordered:
            note = f"{name} is an ordered category: its levels are taken as one step apart, in their order."
            return Clock(values.cat.codes.to_numpy().astype(np.int64), (("", 1.0),), _shown(values), (note,))
        values = values.astype(dtype.categories.dtype)
        dtype = values.dtype
    if isinstance(dtype, pd.PeriodDtype):
        return _periods(name, pd.PeriodIndex(values), values)
    if pd.api.types.is_bool_dtype(dtype):
        raise InputError(
            f"{name} is true or false, not a time", "Name a column of numbers or dates with time=."
        )
    if pd.api.types.is_datetime64_any_dtype(dtype):
        return _datetimes(pd.DatetimeIndex(values), values)
    if pd.api.types.is_timedelta64_dtype(dtype):
        micro = values.to_numpy().astype("timedelta64[us]").astype(np.int64)
        return Clock(micro, tuple((u, float(k)) for u, k in MICRO.items()), _shown(values))
    if pd.api.types.is_numeric_dtype(dtype):
        return _numbers(name, values)
    return _objects(name, values, places)


def _shown(values: pd.Series) -> Callable[[int], str]:
    return lambda i: str(values.iloc[i])


def _numbers(name: str, values: pd.Series) -> Clock:
    """Plain numbers; whole ones stay exact. Eight digits that are all dates are read as dates."""
    import pandas as pd

    number = values.to_numpy(dtype=float)
    whole = bool(np.all(number == np.round(number)) and np.abs(number).max() < 2**53)
    if whole and number.min() >= 1800_01_01 and number.max() <= 2200_12_31:
        text = pd.Series(number.astype(np.int64).astype(str))
        dates = pd.to_datetime(text, format="%Y%m%d", errors="coerce")
        if dates.notna().all():
            clock = _datetimes(pd.DatetimeIndex(dates), values)
            return Clock(
                clock.counts,
                clock.units,
                clock.show,
                (f"{name} holds dates written as YYYYMMDD.", *clock.notes),
            )
    if whole and "date" in name.casefold() and number.min() >= SERIAL[0] and number.max() <= SERIAL[1]:
        micro = (number.astype(np.int64) - UNIX_SERIAL) * MICRO["day"]
        clock = _datetimes(pd.DatetimeIndex(micro.astype("datetime64[us]")), values)
        note = f"{name} holds day counts of a spreadsheet: {number[0]:.0f} is {clock.show(0)}."
        return Clock(clock.counts, clock.units, clock.show, (note, *clock.notes))
    word = name.casefold()
    unit = UNIT_WORDS.get(word, "")
    notes = (f"{name} is counted in {unit}s, after its name.",) if unit else ()
    if ORDINAL_WORDS & set(re.split(r"[\W_\d]+", word)):
        notes = (f"{name} counts occasions: they are {EVEN}",)
    elif whole and not unit and _few_in_a_row(number):
        notes = (
            f"{name} runs from {number.min():.0f} to {number.max():.0f} without a unit: its steps are {EVEN}",
        )
    if whole:
        return Clock(number.astype(np.int64), ((unit, 1.0),), lambda i: f"{number[i]:.0f}", notes)
    return Clock(number, ((unit, 1.0),), lambda i: f"{number[i]:g}", notes)


def _few_in_a_row(number: npt.NDArray[np.float64]) -> bool:
    """A few whole numbers without a hole: they may only count what lies unevenly in time."""
    distinct = np.unique(number)
    return 3 <= len(distinct) <= FEW_OCCASIONS and bool(np.all(np.diff(distinct) == 1))


def _periods(name: str, periods: pd.PeriodIndex, values: pd.Series) -> Clock:
    """Ordinals of pandas periods: steps of equal number, whatever the days in a month."""
    freq = str(periods.freqstr).upper()
    base = re.sub(r"^\d+", "", freq)
    word = next((w for start, w in PERIODS if base.startswith(start)), "")
    return Clock(np.asarray(periods.asi8, dtype=np.int64), ((word, 1.0),), _shown(values))


def _datetimes(stamps: pd.DatetimeIndex, values: pd.Series) -> Clock:
    notes: list[str] = []
    local = stamps.tz_localize(None) if stamps.tz is not None else stamps
    midnight = bool((local == local.normalize()).all())
    if stamps.tz is not None and not midnight:
        local = stamps.tz_convert("UTC").tz_localize(None)
        notes.append(f"Times carry the zone {stamps.tz}; they are compared in UTC.")
    micro = local.to_numpy().astype("datetime64[us]").astype(np.int64)
    if not midnight:
        return Clock(micro, tuple((u, float(k)) for u, k in MICRO.items()), _shown(values), tuple(notes))
    calendar = _calendar(local)
    counts, unit = (micro // MICRO["day"], "day") if calendar is None else calendar
    if unit != "day":
        notes.append(f"All dates fall on one day of their {unit}, so time is counted in {unit}s.")
    return Clock(counts, ((unit, 1.0),), lambda i: f"{local[i]:%Y-%m-%d}", tuple(notes))


def _calendar(days: pd.DatetimeIndex) -> tuple[npt.NDArray[np.int64], str] | None:
    """Months, quarters or years when three dates or more fall on one day of the month, or all end one."""
    distinct = days.unique()
    if len(distinct) < 3 or not (len(set(distinct.day)) == 1 or distinct.is_month_end.all()):
        return None
    ordinal = np.asarray(days.year * 12 + days.month - 1, dtype=np.int64)
    if len(set(distinct.month)) == 1:
        return ordinal // 12, "year"
    if len(set(distinct.month % 3)) == 1:
        return ordinal // 3, "quarter"
    return ordinal, "month"


def _objects(name: str, values: pd.Series, places: npt.NDArray[np.int64]) -> Clock:
    """Text, or a column of Python dates, datetimes, periods or numbers."""
    import datetime as dt
    import numbers

    import pandas as pd

    kinds = {type(v) for v in values}
    if all(issubclass(k, pd.Period) for k in kinds):
        return _periods(name, pd.PeriodIndex(values), values)
    if all(issubclass(k, dt.datetime) for k in kinds):
        aware = {v.tzinfo is not None for v in values}
        if len(aware) > 1:
            raise InputError(
                f"{name} mixes times with a zone and times without one, so they cannot be put in order",
                "Give all of them a zone, or none.",
            )
        return _datetimes(pd.DatetimeIndex(pd.to_datetime(values, utc=aware.pop())), values)
    if all(issubclass(k, (dt.date, np.datetime64)) for k in kinds):
        return _datetimes(pd.DatetimeIndex(pd.to_datetime(values)), values)
    if all(issubclass(k, numbers.Real) and not issubclass(k, bool) for k in kinds):
        return _numbers(name, values.astype(float))
    if all(issubclass(k, str) for k in kinds):
        codes, distinct = pd.factorize(values)
        texts = [str(t).strip() for t in distinct]
        clock = _text(
            name, texts, places[np.unique(codes, return_index=True)[1]], lambda i: places[np.isin(codes, i)]
        )
        return Clock(clock.counts[codes], clock.units, _shown(values), clock.notes)
    odd = sorted({k.__name__ for k in kinds})
    raise InputError(
        f"{name} mixes {listed(odd, most=6)}, which are not times of one kind", "Give numbers or dates."
    )


# ---- text -------------------------------------------------------------------------------------

_ISO = re.compile(
    r"\d{4}-\d{1,2}-\d{1,2}(?:[T ]\d{1,2}:\d{2}(?::\d{2}(?:[.,]\d+)?)?\s*(Z|[+-]\d{2}:?\d{2})?)?"
)
_YEAR_FIRST = re.compile(r"(\d{4})[/.](\d{1,2})[/.](\d{1,2})")
_QUARTER = re.compile(r"(?:(?P<y>\d{4})[-\s]?[Qq](?P<q>[1-4])|[Qq](?P<q2>[1-4])[-/\s]?(?P<y2>\d{4}))")
_MONTH = re.compile(r"(?:(?P<y>\d{4})[-/Mm](?P<m>\d{1,2})|(?P<m2>\d{1,2})[-/.](?P<y2>\d{4}))")
_WEEK = re.compile(r"(\d{4})-?W(\d{2})")
_WORD_MONTH = re.compile(r"([A-Za-z]{3,9})\.?[-\s](\d{4})")
_WORD_DAY = re.compile(
    r"(?:(\d{1,2})\.?[-\s]([A-Za-z]{3,9})\.?[-\s,]+(\d{4})|([A-Za-z]{3,9})\.?\s(\d{1,2}),?\s(\d{4}))"
)
_WORD_SHORT = re.compile(r"[A-Za-z]{3,9}[-\s']\d{2}|\d{2}[-\s][A-Za-z]{3,9}")
_NUMERIC_DAY = re.compile(r"(\d{1,2})[/.-](\d{1,2})[/.-](\d{4}|\d{2})(?:\s.*)?")
_NUMBER = re.compile(r"[+-]?\d+(?:\.\d+)?")


def _readers() -> tuple[tuple[re.Pattern[str], Callable[..., Clock]], ...]:
    """Patterns in the order in which they are tried; the first that fits every text is taken."""
    return (
        (_QUARTER, _quarters),
        (_WEEK, _weeks),
        (_ISO, _iso),
        (_YEAR_FIRST, _year_first),
        (_MONTH, _months),
        (_WORD_MONTH, _word_months),
        (_WORD_DAY, _word_days),
        (_NUMERIC_DAY, _numeric_days),
        (_NUMBER, _plain),
    )


def _text(
    name: str,
    texts: Sequence[str],
    places: npt.NDArray[np.int64],
    every: Callable[[Sequence[int]], npt.NDArray[np.int64]],
) -> Clock:
    """Counts of distinct texts that all follow one pattern.

    places : the first row of each text. every : all rows of some texts.
    """
    best, missed = 0, list(range(len(texts)))
    for pattern, reader in _readers():
        matches = [pattern.fullmatch(t) for t in texts]
        wrong = [i for i, m in enumerate(matches) if m is None]
        if not wrong:
            return reader(name, texts, matches, places)
        if len(texts) - len(wrong) > best:
            best, missed = len(texts) - len(wrong), wrong
    if any(_WORD_SHORT.fullmatch(texts[i]) for i in missed):
        some = next(texts[i] for i in missed if _WORD_SHORT.fullmatch(texts[i]))
        raise InputError(
            f"{name} holds ‘{some}’, which may be a month of a year or a day of a month",
            "Write months as 2019-03 and days as 2019-03-19.",
        )
    raise InputError(
        f"{name} cannot be read as times: {rows(every(missed), 3)} "
        f"{'has' if len(every(missed)) == 1 else 'have'} {quoted((texts[i] for i in missed), 3)}",
        "Use numbers, 2021, 2021-03, 2021Q3, 2021-03-04 or 2021-03-04 13:30, one kind throughout.",
    )


Matches = Sequence[Any]


def _dates(name: str, texts: Sequence[str], parts: Sequence[tuple[int, int, int]], places: Any) -> Clock:
    import datetime as dt

    import pandas as pd

    stamps = []
    for i, (year, month, day) in enumerate(parts):
        try:
            stamps.append(dt.date(year, month, day))
        except ValueError:
            raise InputError(
                f"{name} has ‘{texts[i]}’ in {rows(places[i])}, which is no day of the calendar",
                "Mend the date.",
            ) from None
    days = np.array(stamps, dtype="datetime64[us]")  # microseconds reach beyond the years 1677 to 2262
    return _datetimes(pd.DatetimeIndex(days), pd.Series(list(texts)))


def _iso(name: str, texts: Sequence[str], matches: Matches, places: Any) -> Clock:
    import pandas as pd

    if not any(":" in t for t in texts):
        parts = [t.split("-") for t in texts]
        return _dates(name, texts, [(int(a), int(b), int(c)) for a, b, c in parts], places)
    zoned = [m.group(1) is not None for m in matches]
    if any(zoned) and not all(zoned):
        plain = [i for i, z in enumerate(zoned) if not z]
        raise InputError(
            f"{name} gives a zone in some rows and none in {count(len(plain), 'distinct time')} "
            f"(such as ‘{texts[plain[0]]}’ in {rows(places[plain[0]])})",
            "Give all times a zone, or none.",
        )
    padded = [re.sub(r"^(\d{4})-(\d)-", r"\1-0\2-", t) for t in texts]
    padded = [re.sub(r"^(\d{4}-\d{2})-(\d)(?!\d)", r"\1-0\2", t).replace(",", ".") for t in padded]
    padded = [re.sub(r"([T ])(\d):", r"\g<1>0\2:", t) for t in padded]
    stamps = pd.to_datetime(pd.Series(padded), format="ISO8601", utc=any(zoned), errors="coerce")
    bad = np.flatnonzero(stamps.isna().to_numpy())
    if len(bad):
        raise InputError(
            f"{name} has {quoted((texts[int(i)] for i in bad), 3)} in {rows(places[bad], 3)}, "
            "which is no date of the calendar or time of the clock",
            "Mend these times.",
        )
    return _datetimes(pd.DatetimeIndex(stamps), pd.Series(list(texts)))


def _year_first(name: str, texts: Sequence[str], matches: Matches, places: Any) -> Clock:
    return _dates(name, texts, [(int(m[1]), int(m[2]), int(m[3])) for m in matches], places)


def _numeric_days(name: str, texts: Sequence[str], matches: Matches, places: Any) -> Clock:
    """Day and month in either order: read only if the values themselves decide it."""
    a = np.array([int(m.group(1)) for m in matches])
    b = np.array([int(m.group(2)) for m in matches])
    if any(len(m.group(3)) == 2 for m in matches) or any(":" in t for t in texts):
        raise InputError(
            f"{name} holds ‘{texts[0]}’, whose day, month and year cannot be told apart with certainty",
            "Write dates as 2021-03-04, with the time after a blank if there is one.",
        )
    first, second = bool(np.any(a > 12)), bool(np.any(b > 12))
    if first == second:
        why = (
            "none has a number over 12 to tell"
            if not first
            else "some read only one way and some only the other"
        )
        raise InputError(
            f"{name} holds dates such as ‘{texts[0]}’ that may be day/month or month/day: {why}",
            "Write dates as 2021-03-04.",
        )
    years = [int(m.group(3)) for m in matches]
    day, month, order = (a, b, "day/month/year") if first else (b, a, "month/day/year")
    parts = [(y, int(mo), int(d)) for y, mo, d in zip(years, month, day, strict=True)]
    clock = _dates(name, texts, parts, places)
    told = int(np.sum((a if first else b) > 12))
    note = f"{name} is read as {order}: {count(told, 'distinct date')} can only be read so."
    return Clock(clock.counts, clock.units, clock.show, (note, *clock.notes))


def _word_days(name: str, texts: Sequence[str], matches: Matches, places: Any) -> Clock:
    parts = []
    for i, m in enumerate(matches):
        d, w, y = (m.group(1), m.group(2), m.group(3)) if m.group(1) else (m.group(5), m.group(4), m.group(6))
        parts.append((int(y), _month_number(name, w, texts[i], places[i]), int(d)))
    return _dates(name, texts, parts, places)


def _month_number(name: str, word: str, text: str, place: Any) -> int:
    start = word.casefold()[:3]
    if start not in MONTHS:
        raise InputError(
            f"{name} has ‘{text}’ in {rows(place)}: ‘{word}’ is no English month",
            "Write 2021-03 or 2021-03-04.",
        )
    return MONTHS.index(start) + 1


def _ordinals(texts: Sequence[str], years: Any, parts: Any, per: int, unit: str) -> Clock:
    counts = np.asarray(years, dtype=np.int64) * per + np.asarray(parts, dtype=np.int64) - 1
    return Clock(counts, ((unit, 1.0),), lambda i: texts[i])


def _quarters(name: str, texts: Sequence[str], matches: Matches, places: Any) -> Clock:
    years = [int(m["y"] or m["y2"]) for m in matches]
    return _ordinals(texts, years, [int(m["q"] or m["q2"]) for m in matches], 4, "quarter")


def _months(name: str, texts: Sequence[str], matches: Matches, places: Any) -> Clock:
    months = [int(m["m"] or m["m2"]) for m in matches]
    wrong = [i for i, m in enumerate(months) if not 1 <= m <= 12]
    if wrong:
        raise InputError(
            f"{name} has ‘{texts[wrong[0]]}’ in {rows(places[wrong[0]])}, and no year has such a month",
            "Write months as 2021-03.",
        )
    return _ordinals(texts, [int(m["y"] or m["y2"]) for m in matches], months, 12, "month")


def _word_months(name: str, texts: Sequence[str], matches: Matches, places: Any) -> Clock:
    months = [_month_number(name, m.group(1), texts[i], places[i]) for i, m in enumerate(matches)]
    return _ordinals(texts, [int(m.group(2)) for m in matches], months, 12, "month")


def _weeks(name: str, texts: Sequence[str], matches: Matches, places: Any) -> Clock:
    import datetime as dt

    try:
        days = [dt.date.fromisocalendar(int(m.group(1)), int(m.group(2)), 1).toordinal() for m in matches]
    except ValueError as error:
        raise InputError(
            f"{name} names a week that its year does not have: {error}", "Mend the week."
        ) from error
    return Clock(np.asarray(days, dtype=np.int64) // 7, (("week", 1.0),), lambda i: texts[i])


def _plain(name: str, texts: Sequence[str], matches: Matches, places: Any) -> Clock:
    import pandas as pd

    return _numbers(name, pd.Series([float(t) for t in texts]))
