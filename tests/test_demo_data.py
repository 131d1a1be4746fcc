"""The demonstration data: made again to the same bytes, as described, and asked the right question."""

from __future__ import annotations

import re
import runpy
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from clingstone import Settings
from clingstone.demo import DEMOS, data_folder, find
from clingstone.needs import InputError

ROOT = Path(__file__).parents[1]
FOLDER = ROOT / "demo_data"
MADE = runpy.run_path(str(FOLDER / "make.py"))


def test_making_again_gives_the_same_bytes(tmp_path: Path) -> None:
    subprocess.run([sys.executable, str(FOLDER / "make.py"), str(tmp_path)], check=True)
    for name in DEMOS:
        assert (tmp_path / f"{name}.csv").read_bytes() == (FOLDER / f"{name}.csv").read_bytes(), name


def test_every_demo_has_its_file_where_the_package_looks() -> None:
    assert set(DEMOS) == set(MADE["MAKERS"])
    for demo in DEMOS.values():
        assert demo.path.is_file()
        assert demo.path.parent == data_folder()


def test_readme_states_the_truth_that_the_script_used() -> None:
    stated = re.findall(r"^\| `([^`]+)` \| (-?[\d.]+) \|", (FOLDER / "README.md").read_text(), re.M)
    used = [(name, str(value)) for truth in MADE["TRUTH"].values() for name, value in truth.items()]
    assert stated == used


@pytest.mark.parametrize("name", list(DEMOS))
def test_arguments_name_columns_of_the_file(name: str) -> None:
    arguments = Settings(**DEMOS[name].arguments)
    columns = set(pd.read_csv(DEMOS[name].path, nrows=1).columns)
    assert arguments.model is not None
    terms = ":".join(arguments.focus or ()).split(":")
    named = set(re.findall(r"\w+", arguments.model)) | set(terms) | set(arguments.coords or ())
    named |= set(str(arguments.group).split("/")) - {"None"}
    assert named <= columns
    assert {"group", "time", "coords"} & set(DEMOS[name].arguments)


def test_unknown_demo_offers_the_near_name() -> None:
    with pytest.raises(InputError, match="'stream'") as caught:
        find("streem")
    assert "trial, lambs, stream, wells, transects" in caught.value.hint


# ---- do the files show what the README says they show? ------------------------------------------


def _residuals(frame: pd.DataFrame, y: str, columns: list[str]) -> np.ndarray:
    X = np.column_stack([np.ones(len(frame)), frame[columns].astype(float)])
    target = frame[y].to_numpy(dtype=float)
    return np.asarray(target - X @ np.linalg.lstsq(X, target, rcond=None)[0])


def test_trial_has_its_sizes_and_roughly_its_icc() -> None:
    frame = pd.read_csv(FOLDER / "trial.csv")
    sizes = frame.groupby("clinic").size()
    assert (len(sizes), sizes.min(), sizes.max(), len(frame)) == (12, 9, 71, 412)
    assert (frame.groupby("clinic")["arm"].nunique() == 1).all()
    assert 0.02 < frame["pressure"].isna().mean() < 0.09
    kept = frame.dropna().assign(visits=lambda d: d["arm"] == "visits")
    e = _residuals(kept, "pressure", ["visits", "baseline", "age"])
    groups = pd.Series(e).groupby(kept["clinic"].to_numpy())
    within = groups.var().mul(groups.size() - 1).sum() / (len(e) - 12)
    between = groups.mean().pow(2).mul(groups.size()).sum() / 10
    n0 = len(e) / 12
    icc = (between - within) / (between + (n0 - 1) * within)
    assert 0.05 < icc < 0.30


def test_lambs_are_numbered_afresh_and_growth_bends() -> None:
    frame = pd.read_csv(FOLDER / "lambs.csv")
    assert frame["flock"].nunique() == 10
    assert frame["lamb"].nunique() < frame.drop_duplicates(["flock", "lamb"]).shape[0] == 85
    assert not frame.duplicated(["flock", "lamb", "day"]).any()
    assert frame["weight"].min() > 1.0
    straight = _residuals(frame, "weight", ["day"])
    curved = _residuals(frame.assign(square=frame["day"] ** 2), "weight", ["day", "square"])
    assert np.sum(curved**2) < 0.85 * np.sum(straight**2)


def test_stream_errors_follow_an_ar1_with_gaps() -> None:
    frame = pd.read_csv(FOLDER / "stream.csv", parse_dates=["date"])
    steps = frame["date"].diff().dt.days.to_numpy()[1:]
    assert steps.min() == 1
    assert np.sum(steps > 5) == 3
    e = _residuals(frame, "nitrate", ["strip", "rain", "year", "winter", "spring"])
    together = steps == 1
    assert 0.6 < np.corrcoef(e[1:][together], e[:-1][together])[0, 1] < 0.75


def test_wells_near_each_other_are_alike() -> None:
    frame = pd.read_csv(FOLDER / "wells.csv")
    assert frame["well"].nunique() == 60
    assert (frame.groupby("well")[["east_km", "north_km", "road_km", "depth_m"]].nunique() == 1).all().all()
    e = _residuals(frame, "chloride", ["road_km", "depth_m", "wet"])
    sites = frame.assign(e=e).groupby("well")[["east_km", "north_km", "e"]].mean().to_numpy()
    apart = np.hypot(*(sites[:, None, :2] - sites[None, :, :2]).transpose(2, 0, 1))
    upper = np.triu_indices(len(sites), 1)
    semivariance = (0.5 * (sites[:, None, 2] - sites[None, :, 2]) ** 2)[upper]
    near, far = semivariance[apart[upper] < 1.5].mean(), semivariance[apart[upper] > 9].mean()
    assert near < 0.7 * far


def test_transects_have_most_birds_half_way_up() -> None:
    frame = pd.read_csv(FOLDER / "transects.csv")
    walks = frame.groupby("transect").size()
    assert (len(walks), walks.min(), walks.max()) == (38, 3, 9)
    assert (frame.groupby("transect")[["elevation", "grazed"]].nunique() == 1).all().all()
    e = frame.assign(grazed=frame["grazed"] == "yes", square=frame["elevation"] ** 2)
    straight = _residuals(e, "log_birds", ["elevation", "grazed", "wind"])
    curved = _residuals(e, "log_birds", ["elevation", "square", "grazed", "wind"])
    assert np.sum(curved**2) < 0.85 * np.sum(straight**2)


def test_visits_are_at_weeks_of_their_own_and_near_ones_are_alike() -> None:
    frame = pd.read_csv(FOLDER / "visits.csv")
    assert not frame.duplicated(["patient", "week"]).any()
    assert frame.groupby("patient")["care"].nunique().max() == 1
    assert frame.drop_duplicates("patient")["care"].value_counts().tolist() == [30, 30]
    new = (frame["care"] == "new").astype(float)
    e = _residuals(frame.assign(new=new, fall=new * frame["week"]), "pain", ["start", "week", "new", "fall"])
    pairs = frame.assign(e=e).merge(frame.assign(e=e), on="patient", suffixes=("", "_"))
    gap = pairs["week_"] - pairs["week"]
    near = pairs[(gap > 0) & (gap < 2)][["e", "e_"]].corr().iloc[0, 1]
    far = pairs[gap > 12][["e", "e_"]].corr().iloc[0, 1]
    assert far + 0.1 < near < 0.85


def test_plots_hold_every_variety_in_every_block_and_near_ones_are_alike() -> None:
    frame = pd.read_csv(FOLDER / "plots.csv")
    assert (frame.groupby(["block", "variety"]).size() == 12).all()
    e = pd.Series(frame["tonnes"] - frame.groupby(["variety"])["tonnes"].transform("mean"))
    grid = np.full((12, 20), np.nan)
    grid[frame["north_m"] // 6, frame["east_m"] // 3] = e
    beside = np.corrcoef(grid[:, 1:].ravel(), grid[:, :-1].ravel())[0, 1]
    apart = np.corrcoef(grid[:, 8:].ravel(), grid[:, :-8].ravel())[0, 1]
    assert apart + 0.2 < beside < 0.75


def test_survey_has_one_spending_a_land_and_lands_that_differ() -> None:
    frame = pd.read_csv(FOLDER / "survey.csv")
    assert frame["land"].nunique() == 24
    assert (frame.groupby("land")["spending"].nunique() == 1).all()
    e = _residuals(frame, "trust", ["spending", "school", "age"])
    means = pd.Series(e).groupby(frame["land"].to_numpy()).mean()
    assert 0.3 < means.std() < 0.6
