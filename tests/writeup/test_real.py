"""The write-up of real examinations: two demonstration data sets, from the file to the folder."""

from __future__ import annotations

import pytest

from clingstone.demo import DEMOS
from clingstone.display import columns_of, number
from clingstone.examination import examine
from clingstone.writeup.bibliography import sources, used
from clingstone.writeup.methods import methods_text, report_this
from clingstone.writeup.read import advised, decimals, focus_rows
from clingstone.writeup.report import report
from clingstone.writeup.save import save
from clingstone.writeup.terminal import terminal
from tests.writeup.test_report import Page


@pytest.fixture(scope="module", params=["trial", "stream"])
def results(request):
    demo = DEMOS[request.param]
    return examine(str(demo.path), **demo.arguments).results


def test_the_advised_row_reads_the_same_everywhere(results):
    best = advised(results)
    name = focus_rows(results)[0]
    row, places = best.get(name), decimals(results, name)
    shown = f"{number(row.low, places)} to {number(row.high, places)}"
    for text in (terminal(results), methods_text(results), report_this(results), Page(report(results)).text):
        assert shown in " ".join(text.split())


def test_the_terminal_fits(results):
    assert max(columns_of(line) for line in terminal(results).splitlines()) <= 80


def test_every_source_is_known(results):
    assert set(used(results)) <= set(sources())


def test_the_page_is_whole(results):
    page = Page(report(results))
    assert len(page.all("id")) == len(set(page.all("id")))
    for f in results.evidence:
        assert " ".join(f.sentence.split()).replace("\u00a0", " ") in page.text


def test_the_folder_is_written(results, tmp_path):
    folder = save(results, tmp_path / "out")
    assert (folder / "methods.md").read_text(encoding="utf-8") == results.methods
    assert len(list((folder / "figures").glob("*.svg"))) >= 4
