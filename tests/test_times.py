"""Times in a bad state, through ``examine`` and the command line: asked or refused, never guessed."""

from __future__ import annotations

import shlex
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import clingstone
from clingstone import cli
from clingstone.needs import InputError, NotSupported


def table(series: int, times: int, **columns: Any) -> pd.DataFrame:
    rng = np.random.default_rng(7)
    n = series * times
    made = {
        "plot": np.repeat([f"p{i}" for i in range(series)], times),
        "t": np.tile(np.arange(times), series),
        "x": rng.normal(size=n),
        "y": rng.normal(size=n),
    }
    return pd.DataFrame(made | columns)


def both(
    frame: pd.DataFrame, folder: Path, capsys: pytest.CaptureFixture[str], model: str, **options: str
) -> tuple[Any, str]:
    """What ``examine`` gives or raises, and all that the command line says, which must end alike."""
    frame.to_csv(folder / "rows.csv", index=False)
    try:
        found: Any = clingstone.examine(frame, model=model, rehearsal="none", **options)
    except InputError as stop:
        found = stop
    words = " ".join(f"--{k} {shlex.quote(v)}" for k, v in options.items())
    line = f"examine {folder / 'rows.csv'} --model '{model}' --rehearsal none --overwrite "
    line += f"--out {folder / 'out'} {words}"
    with pytest.raises(SystemExit) as ended:
        cli.main(shlex.split(line))
    out, err = capsys.readouterr()
    assert int(ended.value.code or 0) == (2 if isinstance(found, InputError) else 0)
    return found, " ".join((out + err).split())


TWICE = pd.concat([table(10, 8), table(10, 8)])
LOCAL = ["2021-10-31 01:30", "2021-10-31 02:30", "2021-10-31 02:30", "2021-10-31 03:30"]  # 02:30 twice
DOUBT = [f"0{d}/0{m}/2021" for m in (1, 2) for d in range(1, 10)]
STOPS: list[tuple[str, pd.DataFrame, Mapping[str, str], str]] = [
    ("ties", TWICE, {"series": "plot"}, "t is not unique within plot: 80 rows share series and time"),
    ("a constant", table(10, 8, t=5), {"series": "plot"}, "t is 5 in every row, so it puts no two of them"),
    ("an hour twice", table(1, 4, t=LOCAL), {}, "1 row shares series and time with an earlier row"),
    ("day or month", table(1, 18, t=DOUBT), {}, "may be day/month or month/day"),
    (
        "zones and none",
        table(1, 18, t=[f"2021-03-{d:02d}T10:00{'Z' if d % 2 else ''}" for d in range(1, 19)]),
        {},
        "t gives a zone in some rows and none in 9 distinct times",
    ),
]


@pytest.mark.parametrize(("frame", "options", "said"), [s[1:] for s in STOPS], ids=[s[0] for s in STOPS])
def test_it_stops_and_says_what_to_do(frame, options, said, tmp_path, capsys) -> None:
    found, told = both(frame, tmp_path, capsys, "y ~ x", time="t", **options)
    assert isinstance(found, InputError)
    assert said in str(found)
    assert found.hint
    assert said in told
    assert found.hint.split("=")[0].rpartition(" ")[0] in told  # options are written as the shell has them


def test_zones_that_differ_are_one_clock(tmp_path, capsys) -> None:
    # 10:00 in Lisbon's winter is 11:00 in Rome: the hours of the two alternate without a gap.
    hours = [f"2021-01-04T{h + h % 2:02d}:00+{'01' if h % 2 else '00'}:00" for h in range(20)]
    found, _ = both(table(1, 20, t=hours), tmp_path, capsys, "y ~ x", time="t")
    serial = found.results.case.serial
    assert (serial.spacing, serial.step, serial.unit) == ("regular", 1.0, "hour")


def test_repeats_are_carried_where_they_are_named(tmp_path, capsys) -> None:
    found, _ = both(TWICE, tmp_path, capsys, "y ~ x", time="t", series="plot", ties="replicate")
    assert "serial" in found.ledger.model or any(s.key == "serial" for s in found.ledger.standings)
    assert found.refit("car1").intervals


def test_waves_are_asked_about(tmp_path, capsys) -> None:
    frame = table(30, 3)
    frame["wave"] = frame.t + 1
    frame["month"] = frame.t.map({0: 0, 1: 3, 2: 12})
    found, _ = both(frame, tmp_path, capsys, "y ~ x", time="wave", group="plot")
    assert any("taken as equally far apart" in note for note in found.results.case.notes)
    declared = clingstone.examine(frame, model="y ~ x", time="month", group="plot", rehearsal="none")
    assert not any("equally far apart" in note for note in declared.results.case.notes)
    # Nine months are three times three: steps of three months with missing ones between.
    assert declared.results.case.serial.unit == "month"


def test_series_of_one_row_tell_nothing_of_order(tmp_path, capsys) -> None:
    frame = table(40, 1, t=np.arange(40))
    found, _ = both(frame, tmp_path, capsys, "y ~ x", time="t", series="plot")
    assert any("40 series of one row" in note for note in found.results.case.notes)
    assert found.advice.remedy.startswith("ordinary")


def test_series_too_short_for_a_remedy_say_so(tmp_path, capsys) -> None:
    found, _ = both(table(6, 3), tmp_path, capsys, "y ~ x", time="t", series="plot")
    case = found.case
    for remedy in ("ar1", "car1", "arma"):
        with pytest.raises(NotSupported, match="the longest series has 3 times") as stop:
            clingstone.refit(case, remedy)
        assert "would be needed" in stop.value.hint


def test_time_among_the_predictors_is_a_trend_and_twice_is_too_often(tmp_path, capsys) -> None:
    frame = table(1, 60)
    frame["trend"] = 2 * frame.t + 3
    found, _ = both(frame, tmp_path, capsys, "y ~ x + t", time="t")
    assert {i.term for i in found.refit("ar1").intervals} >= {"x", "t"}
    stopped, told = both(frame, tmp_path, capsys, "y ~ t + trend", time="t")
    assert "trend follows exactly from constant and t" in str(stopped)
    assert "trend follows exactly from constant and t" in told
