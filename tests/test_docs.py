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
PAGES += sorted((ROOT / "docs").rglob("*.md"))
WITH_PYTHON = [page for page in PAGES if "```python" in page.read_text()]
MAKE = runpy.run_path(str(ROOT / "docs" / "make.py"))
NUMBER = re.compile(r"(?<![\w.])-?\d+(?:\.\d+)?")


def _name(page: Path) -> str:
    return str(page.relative_to(ROOT))


def _blocks(page: Path, language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```", page.read_text(), re.M | re.S)


def _commands() -> list[str]:
    """Every clingstone command line of the docs, continued lines joined."""
    text = "\n".join(block for page in PAGES for block in _blocks(page, "sh")).replace("\\\n", " ")
    found = re.findall(r"(?:^|&& \S*bin/)clingstone (.+)$", text, re.M)
    return [command.split("  #")[0] for command in found]


def _same(told: str, now: str) -> bool:
    """The same words, and numbers that agree but for the last digit shown."""
    told, now = told.replace("\N{MINUS SIGN}", "-"), now.replace("\N{MINUS SIGN}", "-")
    if " ".join(NUMBER.sub("#", told).split()) != " ".join(NUMBER.sub("#", now).split()):
        return False
    pairs = zip(NUMBER.findall(told), NUMBER.findall(now), strict=True)
    return all(abs(float(a) - float(b)) <= 1.01 * 10.0 ** -len(a.partition(".")[2]) for a, b in pairs)


def test_what_counts_as_the_same() -> None:
    assert _same("width \N{MINUS SIGN}0.45 (12 df)", "width -0.46\n(12 df)")
    assert not _same("width 0.45", "width 0.47")
    assert not _same("width 0.45", "length 0.45")


@pytest.mark.parametrize("page", WITH_PYTHON, ids=_name)
def test_python_examples_run_in_reading_order_and_print_what_the_page_says(
    page: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    shutil.copytree(ROOT / "demo_data", tmp_path / "demo_data")
    monkeypatch.chdir(tmp_path)
    said = []
    for example, now in MAKE["examples"](page.read_text()):
        said.append(now)
        if example[2] is not None:
            told = example[2].strip().removeprefix("```text\n").removesuffix("\n```")
            assert _same(told, now.strip()), f"run python docs/make.py; printed now:\n{now}"
    assert "".join(said).strip()
    if "trial-out" in page.read_text():
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
    assert MAKE["main"](True) == 0, capsys.readouterr().out


def test_a_part_out_of_date_or_a_method_without_words_is_a_fault(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    for name in ("make.py", "methods.md", "howto.md"):
        shutil.copy(ROOT / "docs" / name, tmp_path)
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
