"""A folder is written whole or not at all."""

from __future__ import annotations

import csv
import json
import os
from pathlib import Path

import pytest

from clingstone.needs import InputError
from clingstone.results import from_json
from clingstone.writeup import save as module
from clingstone.writeup import script
from clingstone.writeup.draft import shown
from clingstone.writeup.save import FILES, save
from tests.writeup import fixture


@pytest.fixture(scope="module")
def results():
    return fixture.trial()


@pytest.fixture(scope="module")
def saved(results, tmp_path_factory):
    return save(results, tmp_path_factory.mktemp("work") / "clinics-out")


def _nothing_beside(folder: Path) -> None:
    assert [p.name for p in folder.parent.iterdir()] == [folder.name]


def test_everything_is_there(results, saved):
    again = set(script.files(results, saved))
    assert {p.name for p in saved.iterdir()} == ({*FILES, "figures", "tables"} - set(script.FILES)) | again
    assert {p.stem for p in (saved / "tables").iterdir()} == set(shown(results))
    for stem, table in shown(results).items():
        assert (saved / "tables" / f"{stem}.csv").read_text(encoding="utf-8") == table.to_csv()
        assert (saved / "tables" / f"{stem}.tex").read_text(encoding="utf-8") == table.to_latex() + "\n"
    assert (saved / "methods.docx").read_bytes()[:2] == b"PK"
    stems = {p.stem for p in (saved / "figures").iterdir()}
    assert {"intervals", "shares", "levels", "group-means-clinic"} == stems
    for stem in stems:
        assert (saved / "figures" / f"{stem}.png").read_bytes()[:4] == b"\x89PNG"
        assert (saved / "figures" / f"{stem}.svg").read_text(encoding="utf-8").startswith("<svg")
        assert len((saved / "figures" / f"{stem}.csv").read_text(encoding="utf-8").splitlines()) > 1
    _nothing_beside(saved)
    again = from_json((saved / "results.json").read_text(encoding="utf-8"))
    assert again.advice == results.advice
    assert again.refits == results.refits


def test_tables_hold_unrounded_numbers(results, saved):
    with (saved / "intervals.csv").open(encoding="utf-8", newline="") as lines:
        rows = list(csv.DictReader(lines))
    assert list(rows[0])[:4] == ["term", "remedy", "at", "estimate"]
    row = next(r for r in rows if r["remedy"] == "mixed-intercept" and r["term"] == "arm: treated")
    assert float(row["low"]) == results.refits[1].get("arm: treated").low
    with (saved / "evidence.csv").open(encoding="utf-8", newline="") as lines:
        found = list(csv.DictReader(lines))
    assert [f["test"] for f in found] == [f.test for f in results.evidence]


def test_an_empty_folder_is_used(results, tmp_path):
    target = tmp_path / "out"
    target.mkdir()
    save(results, target)
    assert (target / "report.html").is_file()
    _nothing_beside(target)


def test_folders_on_the_way_are_made(results, tmp_path):
    assert save(results, tmp_path / "a" / "b" / "out").is_dir()


def test_an_earlier_report_is_replaced_only_when_asked(results, tmp_path):
    target = save(results, tmp_path / "out")
    (target / "report.html").write_text("old", encoding="utf-8")
    with pytest.raises(InputError, match="already holds an earlier report") as caught:
        save(results, target)
    assert "overwrite" in caught.value.hint
    assert (target / "report.html").read_text(encoding="utf-8") == "old"
    save(results, target, overwrite=True)
    assert (target / "report.html").read_text(encoding="utf-8") != "old"
    _nothing_beside(target)


@pytest.mark.parametrize("name", ["notes.txt", "figures/mine.tif", "figures/deep/a.svg", "results.csv"])
def test_files_of_the_user_are_never_replaced(results, tmp_path, name):
    target = save(results, tmp_path / "out")
    mine = target / name
    mine.parent.mkdir(exist_ok=True)
    mine.write_text("mine", encoding="utf-8")
    with pytest.raises(InputError, match="not written here"):
        save(results, target, overwrite=True)
    assert mine.read_text(encoding="utf-8") == "mine"
    _nothing_beside(target)


def test_a_folder_of_someone_else_is_refused_though_its_names_agree(results, tmp_path):
    target = tmp_path / "out"
    target.mkdir()
    (target / "report.html").write_text("mine", encoding="utf-8")
    with pytest.raises(InputError, match=r"report\.html"):
        save(results, target, overwrite=True)
    assert (target / "report.html").read_text(encoding="utf-8") == "mine"


def test_a_file_in_the_way_is_named(results, tmp_path):
    target = tmp_path / "out"
    target.write_text("a file", encoding="utf-8")
    with pytest.raises(InputError, match="is a file, not a folder"):
        save(results, target)
    with pytest.raises(InputError, match="could not be written"):
        save(results, target / "inside")


def test_a_folder_that_cannot_be_written_is_an_input_error(results, tmp_path, monkeypatch):
    def refuse(*args: object, **kwargs: object) -> str:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(module.tempfile, "mkdtemp", refuse)
    with pytest.raises(InputError, match="Permission denied"):
        save(results, tmp_path / "deep" / "out")
    assert list(tmp_path.iterdir()) == []


@pytest.mark.skipif(os.geteuid() == 0, reason="root may write anywhere")
def test_a_read_only_folder_is_refused(results, tmp_path):
    tmp_path.chmod(0o555)
    try:
        with pytest.raises(InputError, match="could not be written"):
            save(results, tmp_path / "out")
    finally:
        tmp_path.chmod(0o755)


@pytest.mark.parametrize("exists", [False, True])
def test_a_failure_on_the_way_leaves_nothing_half_written(results, tmp_path, monkeypatch, exists):
    target = tmp_path / "out"
    before = {}
    if exists:
        save(results, target)
        before = {p: p.read_bytes() for p in target.rglob("*") if p.is_file()}

    def fails(*args: object) -> str:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(module, "to_json", fails)
    with pytest.raises(InputError, match="No space left on device"):
        save(results, target, overwrite=True)
    assert {p: p.read_bytes() for p in target.rglob("*") if p.is_file()} == before
    assert [p.name for p in tmp_path.iterdir()] == (["out"] if exists else [])


def test_an_earlier_report_comes_back_when_the_move_fails(results, tmp_path, monkeypatch):
    target = save(results, tmp_path / "out")
    before = (target / "report.html").read_bytes()
    rename, calls = Path.rename, []

    def second_fails(self: Path, to: Path) -> Path:
        calls.append(to)
        if len(calls) == 2:
            raise OSError(5, "Input/output error")
        return rename(self, to)

    monkeypatch.setattr(Path, "rename", second_fails)
    with pytest.raises(InputError, match="Input/output error"):
        save(results, target, overwrite=True)
    assert (target / "report.html").read_bytes() == before
    _nothing_beside(target)


def test_progress_is_told(results, tmp_path):
    told = []
    save(results, tmp_path / "out", progress=lambda label, done, total: told.append((label, done, total)))
    assert told[0][0] == "report.html"
    assert told[-1][1] == told[-1][2]


def test_the_saved_bytes_are_the_same_twice(results, saved, tmp_path):
    other = save(results, tmp_path / "out")
    for path in saved.rglob("*"):
        if path.is_file():
            assert path.read_bytes() == (other / path.relative_to(saved)).read_bytes()
    assert json.loads((other / "results.json").read_text(encoding="utf-8"))["schema"] == 1
