"""Docs that run: every Python example, every command line, every link, every generated part."""

from __future__ import annotations

import re
import runpy
import shlex
import shutil
import sys
from pathlib import Path

import pytest

from clingstone import cli
from test_cli import Verbs

ROOT = Path(__file__).parents[1]
PAGES = [ROOT / "README.md", ROOT / "DEVELOPERS.md", ROOT / "demo_data" / "README.md"]
PAGES += sorted((ROOT / "docs").glob("*.md"))
WITH_PYTHON = [page for page in PAGES if "```python" in page.read_text()]


def _name(page: Path) -> str:
    return str(page.relative_to(ROOT))


def _blocks(page: Path, language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```", page.read_text(), re.M | re.S)


def _commands() -> list[str]:
    """Every clingstone command line of the docs, continued lines joined."""
    text = "\n".join(block for page in PAGES for block in _blocks(page, "sh")).replace("\\\n", " ")
    found = re.findall(r"(?:^|&& \S*bin/)clingstone (.+)$", text, re.M)
    return [command.split("  #")[0] for command in found]


@pytest.mark.parametrize("page", WITH_PYTHON, ids=_name)
def test_python_examples_run_in_reading_order(
    page: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    shutil.copytree(ROOT / "demo_data", tmp_path / "demo_data")
    monkeypatch.chdir(tmp_path)
    names: dict[str, object] = {}
    blocks = _blocks(page, "python")
    for number, block in enumerate(blocks, start=1):
        exec(compile(block, f"{_name(page)}, example {number}", "exec"), names)
    assert capsys.readouterr().out.strip()
    assert (tmp_path / "trial-out" / "report.html").stat().st_size > 10_000


def test_there_are_commands_to_check() -> None:
    assert len(_commands()) >= 3


@pytest.mark.parametrize("command", _commands())
def test_every_command_line_is_understood(
    command: str, monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    verbs = Verbs()
    monkeypatch.setitem(sys.modules, "clingstone.examination", verbs)  # type: ignore[arg-type]
    monkeypatch.chdir(tmp_path)
    with pytest.raises(SystemExit) as stopped:
        cli.main(shlex.split(command))
    assert not stopped.value.code
    assert len(verbs.calls) == 1


@pytest.mark.parametrize("page", PAGES, ids=_name)
def test_every_link_leads_somewhere(page: Path) -> None:
    for target in re.findall(r"\]\(([^)#]+)(?:#[^)]*)?\)", page.read_text()):
        assert not target.startswith("http"), "pages stand alone"
        assert (page.parent / target).exists(), target


def test_generated_parts_and_list_of_methods_are_up_to_date(capsys: pytest.CaptureFixture[str]) -> None:
    make = runpy.run_path(str(ROOT / "docs" / "make.py"))
    assert make["main"](True) == 0, capsys.readouterr().out


def test_a_part_out_of_date_or_a_method_without_words_is_a_fault(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    for page in (ROOT / "docs").glob("*.*"):
        shutil.copy(page, tmp_path)
    make = runpy.run_path(str(tmp_path / "make.py"))
    methods = tmp_path / "methods.md"
    fresh = methods.read_text()
    stale = fresh.replace("### `moran`", "### `moron`").replace(
        "| `groups_easy` | 10 |", "| `groups_easy` | 11 |"
    )
    assert stale != fresh
    methods.write_text(stale)
    assert make["main"](True) == 1
    said = capsys.readouterr().out
    assert "does not describe moran" in said
    assert "describes moron, which is not registered" in said
    assert "methods.md is out of date" in said
    assert make["main"](False) == 1  # the table is mended, the heading cannot be
    assert "| `groups_easy` | 10 |" in methods.read_text()


@pytest.mark.parametrize("name", ["demo", "tests"])
def test_the_two_commands_of_the_readme_are_one_line_each(name: str) -> None:
    found = re.findall(
        rf"<!-- command: {name} -->\n```sh\n(.*?)\n```", (ROOT / "README.md").read_text(), re.S
    )
    assert len(found) == 1
    assert "\n" not in found[0]
