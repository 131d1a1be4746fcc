"""The job file and the script beside a report: each makes the study again, number by number."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from clingstone.examination import examine
from clingstone.results import compare, from_json
from clingstone.writeup.script import FILES


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with data, a file of neighbours, and a saved report, made from relative paths."""
    folder = tmp_path_factory.mktemp("study")
    rng = np.random.default_rng(4)
    n = 60
    frame = pd.DataFrame(
        {
            "yield": rng.normal(5, 1, n) + np.repeat(rng.normal(0, 1, 12), 5),
            "rain": rng.normal(0, 1, n),
            "soil": np.tile(["clay", "sand", 'it\'s "mixed"'], 20),
            "field": np.repeat([f"f{i}" for i in range(12)], 5),
            "east_km": np.repeat(np.arange(12.0), 5),
            "north_km": np.repeat(np.arange(12.0) % 3, 5),
        }
    )
    frame.to_csv(folder / "fields.csv", index=False)
    near = pd.DataFrame({"field": [f"f{i}" for i in range(11)], "next": [f"f{i + 1}" for i in range(11)]})
    near.to_csv(folder / "near.csv", index=False)
    here = Path.cwd()
    os.chdir(folder)
    try:
        examine(
            "fields.csv",
            model="`yield` ~ rain + soil",
            group="field",
            coords=("east_km", "north_km"),
            neighbours="pairs:near.csv",
            contrasts={"sand − mixed": {"soil: sand": 1, 'soil: it\'s "mixed"': -1}},
            focus=["rain"],
            rehearsal="none",
            seed=3,
        ).save("report")
    finally:
        os.chdir(here)
    return folder


def ran(*words: str, cwd: Path) -> subprocess.CompletedProcess[str]:
    return subprocess.run([sys.executable, *words], cwd=cwd, capture_output=True, text=True)


def test_the_script_gets_every_number_again_from_anywhere(study: Path, tmp_path: Path) -> None:
    done = ran(str(study / "report" / "replay.py"), cwd=tmp_path)
    assert (done.returncode, done.stderr) == (0, ""), done.stdout
    assert done.stdout.endswith("every number agrees\n")


def test_the_script_takes_data_that_were_moved_and_sees_a_change(study: Path, tmp_path: Path) -> None:
    changed = pd.read_csv(study / "fields.csv")
    changed.loc[0, "yield"] += 1e-6
    changed.to_csv(tmp_path / "moved.csv", index=False)
    done = ran(str(study / "report" / "replay.py"), "moved.csv", cwd=tmp_path)
    assert done.returncode == 1
    assert "case.origin.fingerprint" in done.stdout
    assert "differ" in done.stdout


def test_the_job_file_makes_the_same_results(study: Path, tmp_path: Path) -> None:
    done = ran("-m", "clingstone", "examine", str(study / "report" / "study.toml"), "--json", cwd=tmp_path)
    assert (done.returncode, done.stderr) == (0, "")
    saved = from_json((study / "report" / "results.json").read_text())
    differences = compare(saved, from_json(done.stdout))
    # The file of neighbours is told by the path that led to it, which is another from here.
    assert [line for line in differences if not line.startswith("settings.neighbours")] == []


def test_a_table_in_memory_has_neither(tmp_path: Path) -> None:
    rng = np.random.default_rng(1)
    frame = pd.DataFrame({"y": rng.normal(size=30), "x": rng.normal(size=30), "g": np.arange(30) % 6})
    folder = examine(frame, model="y ~ x", group="g", rehearsal="none").save(tmp_path / "out")
    assert not any((folder / name).exists() for name in FILES)
