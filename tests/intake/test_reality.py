"""Every row of the table of what arrives in practice, and the wide form in full."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from clingstone.case import Case
from clingstone.needs import InputError, NotSupported
from clingstone.run import Settings
from clingstone.summary import CaseSummary
from tests.intake.reality import TABLE, Row, blood, csv, frame


@pytest.mark.parametrize("row", TABLE, ids=lambda row: row.what)
def test_every_row_gets_its_answer(row: Row, tmp_path: Path) -> None:
    def case() -> Case:
        settings = Settings(model=row.model or None, **row.options)
        return Case.of(row.data(tmp_path), settings)

    if row.stops:
        with pytest.raises((InputError, NotSupported)) as caught:
            case()
        assert row.stops in str(caught.value)
        assert row.hint in caught.value.hint
        return
    made = case()
    for words in row.says:
        assert any(words in note for note in made.notes), made.notes
    summary = made.summary()
    for path, value in row.facts.items():
        assert _fact(summary, path) == value, path
    assert row.says or row.facts, "a row must ask for something"


def _fact(summary: CaseSummary, path: str) -> Any:
    found: Any = summary
    for part in path.split("."):
        found = (
            found[int(part)]
            if isinstance(found, tuple)
            else found[part]
            if isinstance(found, Mapping)
            else getattr(found, part)
        )
    return found


def test_no_two_rows_are_called_the_same() -> None:
    assert len({row.what for row in TABLE}) == len(TABLE)


def test_decimal_commas_give_the_same_case(tmp_path: Path) -> None:
    settings = Settings(model="y ~ x", group="farm", time="day")
    plain = Case.of(frame(), settings)
    other = Case.of(csv(";", ",")(tmp_path), settings)
    assert other.origin["fingerprint"] == plain.origin["fingerprint"]
    assert other.response.ss == pytest.approx(plain.response.ss, rel=1e-12)


def test_wide_form_is_what_pandas_makes_of_it(tmp_path: Path) -> None:
    """pandas.wide_to_long is the outside way."""
    wide = blood(tmp_path)
    long = pd.wide_to_long(wide, "bp", i="patient", j="month", sep="_").reset_index()
    ours = Case.of(wide, Settings(model="bp ~ arm + occasion", wide="bp", group="patient", time="occasion"))
    theirs = Case.of(long, Settings(model="bp ~ arm + month", group="patient", time="month"))
    assert ours.response.residual == pytest.approx(theirs.response.residual, abs=1e-10)
    assert ours.summary().group[0].count == theirs.summary().group[0].count == 20
    (tmp_path / "wide.csv").write_text(wide.to_csv(index=False))
    read = Case.of(tmp_path / "wide.csv", Settings(model="bp ~ arm", wide=("bp",), group="row"))
    assert read.design.n == 60
    assert read.design.group is not None
    assert read.design.group.finest.count == 20


@pytest.mark.parametrize(
    ("stems", "stops"),
    [
        (("pb",), "wide='pb' names 0 columns with a number behind it"),
        (("bp", "hr"), "the columns of ‘hr’ are numbered 0 and 3, and those of ‘bp’ 0, 3 and 12"),
        (("hr", "bp"), "the columns of ‘bp’ are numbered 0, 3 and 12, and those of ‘hr’ 0 and 3"),
    ],
)
def test_wide_stems_that_do_not_go_together(tmp_path: Path, stems: tuple[str, ...], stops: str) -> None:
    made = blood(tmp_path).assign(hr_0=1.0, hr_3=2.0)
    with pytest.raises(InputError) as caught:
        Case.of(made, Settings(model="bp ~ arm", wide=stems))
    assert stops in str(caught.value)


def test_names_that_wide_form_would_make_must_be_free(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="‘occasion’ would be made by wide= and is in the data already"):
        Case.of(blood(tmp_path).assign(occasion=1), Settings(model="bp ~ arm", wide="bp"))
