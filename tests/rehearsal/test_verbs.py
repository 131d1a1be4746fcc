"""The verbs: what examine, with_rehearsal, replay and the command line make of a rehearsal."""

from __future__ import annotations

import json
import math
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

import clingstone
from clingstone.advice.entries import Score, Scores
from clingstone.cli import main
from clingstone.rehearsal.path import Step, walks
from clingstone.rehearsal.tallies import Rehearsal
from clingstone.results import from_json, to_json

ARGUMENTS = {"model": "y ~ arm + x", "group": "clinic", "focus": "arm"}
FEW = ["ordinary", "cluster-robust", "mixed-intercept"]


@pytest.fixture(scope="module")
def table() -> pd.DataFrame:
    rng = np.random.default_rng(5)
    clinic = np.repeat(np.arange(14), 8)
    x = rng.normal(size=112)
    y = 0.7 * rng.normal(size=14)[clinic] + rng.normal(size=112) + 0.5 * x
    arm = np.where(clinic % 2 == 0, "usual", "new")
    return pd.DataFrame({"y": y, "x": x, "arm": arm, "clinic": [f"c{c:02d}" for c in clinic]})


@pytest.fixture(scope="module")
def examined(table: pd.DataFrame) -> clingstone.Examination:
    return clingstone.examine(table, **ARGUMENTS)


def test_examine_rehearses_unless_told_not_to(examined, table):
    found = examined.rehearsal
    assert isinstance(found, Rehearsal)
    assert {t.term for t in found.tallies} == {"arm: usual"}
    assert found.scores.get("mixed-intercept", "clinic") is not None
    assert found.replicates >= 100
    assert "rehearsed" in examined.methods()
    quiet = clingstone.examine(table, **ARGUMENTS, rehearsal="none")
    assert quiet.rehearsal is None
    assert "not rehearsed" in quiet.methods()


def test_the_advice_says_that_it_was_rehearsed(examined):
    advice = examined.advice
    row = examined.rehearsal.scores.get(advice.remedy, advice.at)
    assert examined.rehearsal.scores.adequate(advice.remedy, advice.at)
    why = next(r for r in advice.because if r.rule == "rehearsed")
    assert f"{100 * row.coverage:.1f} %" in why.sentence


def test_what_it_says_is_the_same_every_time(examined, table):
    assert clingstone.examine(table, **ARGUMENTS).rehearsal == examined.rehearsal
    moved = clingstone.examine(table, **ARGUMENTS, seed=1).rehearsal
    assert moved.tallies != examined.rehearsal.tallies


def test_a_long_rehearsal_can_change_the_advice_and_only_that(examined):
    found = clingstone.rehearse(examined, 300, remedies=FEW, stop_early=False)
    assert found.replicates == 300
    assert {t.remedy for t in found.tallies} == set(FEW)
    # Had the mixed model failed on this design, the robust one would have been named.
    rows = (
        Score("ordinary", "", 0.70, 0.01, 1.0),
        Score("cluster-robust", "clinic", 0.95, 0.01, 2.0),
        Score("mixed-intercept", "clinic", 0.85, 0.01, 1.9),
    )
    first = examined.with_rehearsal(replace(found, scores=Scores(rows)))
    assert (first.advice.remedy, first.advice.at) == ("cluster-robust", "clinic")
    rows = (*rows[:2], replace(rows[2], coverage=0.95))
    second = examined.with_rehearsal(replace(found, scores=Scores(rows)))
    assert second.advice.remedy == "mixed-intercept"
    assert second.evidence.findings == examined.evidence.findings
    assert [r.intervals for r in second.refits] == [r.intervals for r in examined.refits]


def test_it_is_saved_read_and_replayed(examined, table, tmp_path):
    assert from_json(to_json(examined.results)).rehearsal == examined.rehearsal
    file = tmp_path / "rows.csv"
    table.to_csv(file, index=False)
    own = clingstone.examine(file, **ARGUMENTS, rehearsal="none")
    found = clingstone.rehearse(own, 100, remedies=FEW)
    own.with_rehearsal(found).save(tmp_path / "out")
    agrees, lines = clingstone.replay(tmp_path / "out")
    assert agrees, lines
    assert any("taken as saved" in line for line in lines)


def test_a_case_can_be_rehearsed_without_an_examination(table):
    from clingstone.run import Settings

    case = clingstone.Case.of(table, Settings(model="y ~ x", group="clinic"))
    found = clingstone.rehearse(case, 50, remedies=["ordinary"])
    assert [t.remedy for t in found.tallies] == ["ordinary"] * len(found.truths)


def test_a_remedy_that_was_not_refitted_is_refused(examined):
    with pytest.raises(clingstone.InputError, match="none of ar1 was refitted"):
        clingstone.rehearse(examined, 50, remedies=["ar1"])
    with pytest.raises(clingstone.InputError, match="no remedy named"):
        clingstone.rehearse(examined, 50, remedies=["arima"])


# ---- the whole path ------------------------------------------------------------------------------


def test_whole_paths_are_added_up_by_hand():
    steps = [
        Step("ar1", "", (True,), (2.0,)),
        Step("ar1", "", (False,), (3.0,)),
        Step("ordinary", "", (True,), (1.0,)),
        Step("", "", (False,), (math.nan,)),
    ]
    (walk,) = walks(["x"], steps)
    assert walk.replicates == 4
    assert walk.coverage == pytest.approx(2 / 3)  # of the three that had an interval
    assert walk.relative == 2.0
    shares = {(c.remedy, c.at): (c.share, c.coverage) for c in walk.chosen}
    assert shares[("ar1", "")] == (0.5, 0.5)
    assert shares[("", "")][0] == 0.25


def test_the_whole_path_is_walked_in_every_replicate(table):
    small = clingstone.examine(table, **ARGUMENTS, rehearsal="none")
    found = clingstone.rehearse(small, 20, remedies=["ordinary"], whole_path=2)
    (walk,) = found.walks
    assert walk.replicates == 2 * len(found.truths)
    assert sum(c.share for c in walk.chosen) == pytest.approx(1.0)
    assert 0 <= walk.coverage <= 1
    again = clingstone.rehearse(small, 20, remedies=["ordinary"], whole_path=2)
    assert again.walks == found.walks


# ---- the command ---------------------------------------------------------------------------------


def call(*words: str) -> int:
    with pytest.raises(SystemExit) as end:
        main(list(words))
    return int(end.value.code or 0)


def test_the_command_writes_into_a_saved_folder(table, tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    table.to_csv("rows.csv", index=False)
    words = ["rehearse", "rows.csv", "--model", "y ~ arm + x", "--group", "clinic", "--focus", "arm"]
    picked = ["--remedy", "ordinary", "--remedy", "mixed-intercept", "--replicates", "100"]
    assert call(*words, *picked, "--out", "saved") == 0
    shown = capsys.readouterr().out
    assert "smallest coverage" in shown
    assert "unequal spread" in shown
    before = json.loads((tmp_path / "saved" / "results.json").read_text())["rehearsal"]
    assert before["replicates"] == 100
    assert call("rehearse", "saved", *picked) == 0
    after = json.loads((tmp_path / "saved" / "results.json").read_text())["rehearsal"]
    assert after == before
    assert (tmp_path / "saved-chunks").is_dir()


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("--replicates", "0"), "cannot be rehearsed"),
        (("--engine", "fast"), "not one of 'here', 'cores', 'dask'"),
        (("--engine", "dask"), "no scheduler was named"),
        (("--remedy", "arima"), "no remedy named 'arima'"),
    ],
)
def test_the_command_says_what_is_wrong(table, tmp_path, monkeypatch, capsys, words, said):
    monkeypatch.chdir(tmp_path)
    table.to_csv("rows.csv", index=False)
    assert call("rehearse", "rows.csv", "--model", "y ~ arm", "--group", "clinic", *words) == 2
    assert said in capsys.readouterr().err
    assert not list(tmp_path.glob("rows-clingstone*"))
