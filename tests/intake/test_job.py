"""A job file: every option there and back, paths from its own folder, slips told with what is near."""

from __future__ import annotations

import os
from dataclasses import asdict, fields
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from clingstone.examination import settings_of
from clingstone.intake.job import read, written
from clingstone.needs import InputError
from clingstone.run import Settings

# Every option, away from its default; the command line is asked for the same in tests/test_cli.py.
FULL = Settings(
    model='y ~ x + C(arm) + log("odd")',
    residual="e",
    sheet="readings",
    wide=("bp", "hr"),
    group=("judge", "wine"),
    time="t",
    series="s",
    coords=("lon", "lat"),
    lonlat=True,
    neighbours="knn:6",
    weights="w",
    weights_kind="frequency",
    focus=("x", "arm: late"),
    contrasts={"late − early": {"visit[late]": 1.0, "visit[early]": -1.0}, 'half "x"': {"x": 0.5}},
    means=("visit",),
    unadjusted=True,
    assigned={"arm": "clinic", "dose": {"unit": "ward", "within": "clinic"}},
    sampled="school",
    missing="own-group",
    ties="replicate",
    confidence=0.9,
    alternative="greater",
    material=(0.9, 1.2),
    rehearsal=400,
    seed=7,
)


def saved(folder: Path, text: str) -> Path:
    path = folder / "study.toml"
    path.write_text(text, encoding="utf-8")
    return path


def test_every_option_goes_there_and_back(tmp_path: Path) -> None:
    assert all(getattr(FULL, f.name) != f.default for f in fields(Settings)), "an option is left alone"
    job = read(saved(tmp_path, written(asdict(FULL), "/data/a.csv", tmp_path)))
    assert job.data == Path("/data/a.csv")
    assert settings_of(job.arguments) == FULL


words = st.text(min_size=1, max_size=8)


@given(
    st.fixed_dictionaries(
        {},
        optional={
            "model": words,
            "group": words | st.lists(words, min_size=1, max_size=3).map(tuple),
            "coords": st.tuples(words, words),
            "lonlat": st.booleans(),
            "contrasts": st.dictionaries(words, st.dictionaries(words, st.floats(-1e9, 1e9), min_size=1)),
            "assigned": st.dictionaries(words, words),
            "confidence": st.floats(0.5, 0.999),
            "rehearsal": st.sampled_from(["auto", "none", 40, 2000]),
            "seed": st.integers(0, 2**40),
        },
    )
)
def test_any_words_and_numbers_go_there_and_back(options: dict[str, Any]) -> None:
    import tempfile

    settings = Settings(**options)
    with tempfile.TemporaryDirectory() as folder:
        job = read(saved(Path(folder), written(asdict(settings), "a.csv", Path(folder))))
    assert settings_of(job.arguments) == settings


def test_numbers_of_numpy_are_written(tmp_path: Path) -> None:
    text = written({"seed": np.int64(3), "material": (np.float64(0.9), 1.1)}, "a.csv", tmp_path)
    assert read(saved(tmp_path, text)).arguments == {"seed": 3, "material": (0.9, 1.1)}


def test_left_alone_the_file_says_the_defaults(tmp_path: Path) -> None:
    job = read(saved(tmp_path, written(asdict(Settings()), "a.csv", tmp_path)))
    assert Settings(**job.arguments) == Settings()
    assert {"model", "group"}.isdisjoint(job.arguments)  # what has no value is left out


def test_paths_start_from_the_folder_of_the_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    inner = tmp_path / "jobs"
    inner.mkdir()
    path = saved(inner, 'data = "../data/a.csv"\nout = "report"\nneighbours = "pairs:near.csv"\n')
    job = read(path)
    assert job.data == tmp_path / "data" / "a.csv"
    assert job.out == inner / "report"
    assert job.arguments["neighbours"] == f"pairs:{inner / 'near.csv'}"
    os.chdir("/")
    assert read(path) == job
    # Written beside a report, paths as the user gave them lead back to the same files.
    monkeypatch.chdir(tmp_path)
    text = written({"neighbours": "pairs:jobs/near.csv"}, "data/a.csv", tmp_path / "out")
    (tmp_path / "out").mkdir()
    again = read(saved(tmp_path / "out", text))
    assert 'data = "../data/a.csv"' in text
    assert again.data == tmp_path / "data" / "a.csv"
    assert again.arguments["neighbours"] == f"pairs:{inner / 'near.csv'}"


@pytest.mark.parametrize(
    ("text", "stops", "hint"),
    [
        ('data = "a.csv"\ngruop = "g"', "study.toml has the key ‘gruop’, which is no option", "‘group’"),
        ('model = "y ~ x"', "study.toml names no data", 'Add data = "FILE"'),
        ('data = "a.csv"\nseed = "7"', "study.toml has seed = '7', where a whole number is needed", ""),
        ('data = "a.csv"\ngroup = 3', "group = 3, where text or a list (text) is needed", ""),
        ('data = "a.csv"\ncoords = ["x"]', "coords = ['x'], where a list of 2 (text) is needed", ""),
        ('data = "a.csv"\nunadjusted = 1', "unadjusted = 1, where true or false is needed", ""),
        ('data = "a.csv"\ncontrasts = "late"', "contrasts = 'late', where a table is needed", ""),
        ('data = "a.csv"\n[contrasts.d]\nx = "1"', "where a table is needed", ""),
        ("data = a.csv", "study.toml cannot be read as TOML", "group ="),
        ('data = ["a.csv"]', "data = ['a.csv'], where text is needed", ""),
    ],
)
def test_slips_are_told(tmp_path: Path, text: str, stops: str, hint: str) -> None:
    with pytest.raises(InputError) as caught:
        read(saved(tmp_path, text))
    assert stops in str(caught.value)
    assert hint in caught.value.hint


def test_words_that_an_option_does_not_know_are_told_by_settings(tmp_path: Path) -> None:
    job = read(saved(tmp_path, 'data = "a.csv"\nmissing = "ignore"'))
    with pytest.raises(InputError, match="missing='ignore' is not one of"):
        settings_of(job.arguments)


def test_no_such_file(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="there is no file"):
        read(tmp_path / "study.toml")
