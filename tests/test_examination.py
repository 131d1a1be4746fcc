"""The verbs on real demonstrations: contrasts under a remedy, conventions, rows by name, replay by path."""

from __future__ import annotations

import shutil
from pathlib import Path

import numpy as np
import pytest

from clingstone.demo import DEMOS
from clingstone.examination import Examination, examine, replay
from clingstone.needs import InputError
from clingstone.results import from_json, to_json


@pytest.fixture(scope="module")
def trial() -> Examination:
    demo = DEMOS["trial"]
    return examine(str(demo.path), **demo.arguments, means=["arm"], contrasts={"ten years": {"age": 10}})


def test_a_contrast_of_one_coefficient_is_its_row(trial: Examination) -> None:
    for fit in (trial.refit("ordinary"), trial.refit("cluster-robust"), trial.refit()):
        row, own = trial.contrast({"arm: visits": 1.0}, fit.remedy, fit.at), fit.get("arm: visits")
        for name in ("estimate", "se", "df", "low", "high", "p"):
            assert getattr(row, name) == pytest.approx(getattr(own, name), rel=1e-6), (fit.remedy, name)


def test_a_contrast_scales_and_has_its_own_degrees_of_freedom(trial: Examination) -> None:
    age, ten = trial.refit().get("age"), trial.contrast({"age": 10})
    assert ten.estimate == pytest.approx(10 * age.estimate)
    assert ten.low == pytest.approx(10 * age.low)
    assert ten.p == pytest.approx(age.p)
    both = trial.contrast({"arm: visits": 1, "age": 10}, "cluster-robust")
    fit = trial.refit("cluster-robust")
    place = [fit.coefficients.index(c) for c in ("arm: visits", "age")]
    V = np.array(fit.covariance)[np.ix_(place, place)]
    assert both.estimate == pytest.approx(fit.get("arm: visits").estimate + 10 * fit.get("age").estimate)
    assert both.se == pytest.approx(np.sqrt(np.array([1, 10]) @ V @ np.array([1, 10])))
    # Its df are those of the same combination declared before the fit.
    demo = DEMOS["trial"]
    asked = examine(
        str(demo.path), **demo.arguments, contrasts={"both": {"arm: visits": 1, "age": 10}}
    ).refit("cluster-robust")
    assert both.df == pytest.approx(asked.contrast("both").df, rel=1e-9)
    assert both.df != pytest.approx(fit.get("arm: visits").df, rel=1e-3)


def test_wrong_combinations_are_said(trial: Examination) -> None:
    with pytest.raises(InputError, match="no coefficient ‘arm: visit’") as said:
        trial.contrast({"arm: visit": 1})
    assert "‘arm: visits’" in said.value.hint
    with pytest.raises(InputError, match="weights 0"):
        trial.contrast({"age": 0})
    with pytest.raises(InputError, match="'ar1' is not among the refits made here"):
        trial.contrast({"age": 1}, "ar1")


def test_rows_are_found_by_name(trial: Examination) -> None:
    fit = trial.refit()
    assert [row.term for row in fit.means("arm")] == ["mean of arm: usual", "mean of arm: visits"]
    usual, visits = fit.means("arm")
    assert visits.estimate - usual.estimate == pytest.approx(fit.get("arm: visits").estimate)
    assert fit.contrast("ten years").estimate == pytest.approx(10 * fit.get("age").estimate)
    with pytest.raises(InputError, match="no means of ‘clinic’"):
        fit.means("clinic")
    with pytest.raises(InputError, match="is a coefficient"):
        fit.contrast("age")
    with pytest.raises(InputError, match="no row ‘agee’") as said:
        fit.get("agee")
    assert "‘age’" in said.value.hint


def test_the_ordinary_and_the_advised_refit_carry_their_other_conventions(trial: Examination) -> None:
    best = trial.refit()
    for fit in trial.refits:
        assert bool(fit.conventions) == (fit.remedy == "ordinary" or fit is best), fit.remedy
    normal = trial.refit("ordinary").conventions[0]
    row, own = normal.get("arm: visits"), trial.refit("ordinary").get("arm: visits")
    assert "normal" in normal.words
    # 1.959964: the 0.975 quantile of the standard normal.
    assert row.high - row.low == pytest.approx(2 * 1.959964 * own.se, rel=1e-6)
    assert trial.explain() == best.conventions
    again = from_json(to_json(trial.results)).refits
    assert [fit.conventions for fit in again] == [fit.conventions for fit in trial.refits]


def test_an_interval_explains_itself(trial: Examination) -> None:
    text = trial.refit().explain("arm: visits")
    lines = text.splitlines()
    assert lines[0].startswith("arm: visits: −3.7 (−10.6 to 3.1), 9.9 degrees of freedom, p")
    assert any(line.startswith("  degrees of freedom: Kenward–Roger") for line in lines)
    assert any("normal quantile: −3.7" in line for line in lines)


def test_short_forms_stay_short(trial: Examination) -> None:
    for thing in (trial, trial.case, trial.refit(), trial.ledger, trial.evidence):
        assert len(repr(thing)) < 500, type(thing)
        assert "<table" in thing._repr_html_() or "<svg" in thing._repr_html_(), type(thing)
    assert "advised" in repr(trial) or trial.advice.state in repr(trial)


def test_replay_follows_the_path_as_given(trial: Examination, tmp_path: Path, monkeypatch) -> None:
    folder = trial.save(tmp_path / "saved")
    assert trial.results.case.origin["path"] == str(DEMOS["trial"].path)
    monkeypatch.chdir(tmp_path)  # the name alone leads nowhere from here
    agrees, lines = replay(folder)
    assert agrees, lines
    moved = tmp_path / "trial.csv"
    shutil.copy(DEMOS["trial"].path, moved)
    assert replay(folder, moved)[0]


def test_a_rehearsal_has_as_many_replicates_as_were_asked_for() -> None:
    demo = DEMOS["trial"]
    found = examine(str(demo.path), **demo.arguments, rehearsal=20).rehearsal
    assert found is not None
    assert found.replicates == 20
    assert {t.replicates for t in found.tallies} == {20}
    assert examine(str(demo.path), **demo.arguments, rehearsal="none").rehearsal is None


def test_a_wrong_number_of_replicates_is_said_before_the_data_are_read() -> None:
    with pytest.raises(InputError, match="0 replicates cannot be rehearsed"):
        examine("nowhere.csv", model="y ~ x", rehearsal=0)


def test_saving_reports_its_progress(trial: Examination, tmp_path: Path) -> None:
    seen: list[tuple[str, int, int]] = []
    trial.save(tmp_path / "out", progress=lambda *step: seen.append(step))
    assert seen[-1][1] == seen[-1][2] == len(seen) - 1
    assert seen[0][0] == "report.html"
