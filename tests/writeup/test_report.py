"""The page: whole, safe, alone, and readable by machines that read to people."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET
from dataclasses import replace
from html.parser import HTMLParser
from itertools import pairwise

import pytest

from clingstone.display import sentence
from clingstone.writeup.methods import report_this
from clingstone.writeup.report import CONTENTS, STATES, fragment, report
from clingstone.writeup.sentences import sections
from clingstone.writeup.tables import intervals
from tests.writeup import fixture

VOID = {"meta", "link", "br", "img", "hr", "input"}
HOSTILE = "</td></script><script>alert('x')</script>\"' onload=\"alert(1)"


class Page(HTMLParser):
    """Collects what the checks ask for, and fails on tags that do not close in order."""

    def __init__(self, text: str) -> None:
        super().__init__(convert_charrefs=True)
        self.open: list[str] = []
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.words: list[str] = []
        self.scripts = 0
        self.feed(text)
        self.close()
        assert not self.open

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))
        self.scripts += tag == "script"
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag):
        assert self.open
        assert self.open[-1] == tag, f"</{tag}> closes <{self.open[-1]}>"
        self.open.pop()

    def handle_data(self, data):
        if not {"script", "style"} & set(self.open):
            self.words.append(data)

    @property
    def text(self) -> str:
        return re.sub(r"\s+", " ", " ".join(self.words)).replace("\u00a0", " ")

    def all(self, attribute: str) -> list[str]:
        return [a[attribute] or "" for _, a in self.tags if attribute in a]


@pytest.fixture(scope="module", params=["trial", "stream", "wells"])
def case(request):
    results = getattr(fixture, request.param)()
    return results, Page(report(results))


def test_tags_close_in_order_and_ids_are_unique(case):
    _, page = case
    ids = page.all("id")
    assert len(ids) == len(set(ids))


def test_every_reference_inside_the_page_is_answered(case):
    _, page = case
    ids = set(page.all("id"))
    asked = [i for words in page.all("aria-labelledby") for i in words.split()]
    asked += [h[1:] for h in page.all("href") if h.startswith("#")]
    asked += page.all("data-copies")
    asked += [u for s in page.all("style") for u in re.findall(r"url\(#([^)]+)\)", s)]
    asked += [h[1:] for h in page.all("xlink:href")]
    assert asked
    assert set(asked) <= ids


def test_nothing_is_asked_of_a_network(case):
    results, page = case
    assert all(h.startswith(("#", "data:")) for h in page.all("href") + page.all("src"))
    text = report(results)
    assert not re.search(r"@import|url\((?!#)|fetch\(|XMLHttpRequest", text)
    assert "default-src 'none'" in text
    assert page.scripts == 1


def test_headings_do_not_skip_a_level(case):
    _, page = case
    levels = [int(tag[1]) for tag, _ in page.tags if re.fullmatch(r"h[1-6]", tag)]
    assert levels[0] == 1
    assert levels.count(1) == 1
    assert all(after - before <= 1 for before, after in pairwise(levels))


def test_landmarks_scopes_and_buttons(case):
    _, page = case
    names = [tag for tag, _ in page.tags]
    for landmark in ("header", "main", "nav", "footer"):
        assert names.count(landmark) == 1
    assert all(a.get("scope") in ("col", "row") for tag, a in page.tags if tag == "th")
    assert all("hidden" in a for tag, a in page.tags if tag == "button")  # shown by the script only
    regions = [a for tag, a in page.tags if tag == "div" and "scroll" in (a.get("class") or "")]
    assert regions
    assert all(a.get("tabindex") == "0" and a.get("aria-label") is not None for a in regions)
    assert dict(page.tags[0][1])["lang"] == "en"


def test_the_answer_leads(case):
    results, page = case
    text = page.text
    order = [
        " ".join(results.advice.headline.split()),
        STATES[results.advice.state],
        "Report this",
        "How sure",
        *(title for _, title in CONTENTS[:1]),
    ]
    places = [text.index(words) for words in order]
    assert places == sorted(places)


def test_nothing_a_reviewer_would_ask_for_is_missing(case):
    results, page = case
    text = page.text
    for f in results.evidence:
        assert " ".join(f.sentence.split()).replace("\u00a0", " ") in text
    for fit in results.refits:
        assert fit.account.estimator in text
        assert fit.account.df_rule in text
    for remedy, reason, needed in results.advice.refused:
        assert remedy.replace("-", " ") in text
        assert sentence(reason) in text
        assert sentence(needed) in text
    for part in sections(results):
        for s in part.sentences:
            assert " ".join(s.text.split()).replace("\u00a0", " ") in text
    assert results.case.origin["fingerprint"] in text
    assert report_this(results).replace("\u00a0", " ") in text


def test_page_and_table_show_the_same_numbers():
    results = fixture.trial()
    page = Page(report(results))
    for row in intervals(results, "arm: treated").rows:
        for shown in row[1:6]:
            assert shown.text.replace("\u00a0", " ").strip() in page.text


def test_labels_of_a_stranger_cannot_become_markup():
    page = Page(report(fixture.trial(HOSTILE)))
    assert page.scripts == 1
    assert not page.all("onload")
    assert "alert('x')" in page.text


def test_the_same_results_give_the_same_bytes():
    assert report(fixture.trial()) == report(fixture.trial())


def test_a_case_with_nothing_in_it_still_makes_a_page():
    base = fixture.trial()
    ledger = replace(
        base.ledger,
        model=(),
        standing=(),
        shares=(),
        parameters=(),
        inflation=(),
        tipping=(),
        detectable=(),
        history=(),
    )
    empty = dict.fromkeys(("because", "cautions", "alternatives", "refused"), ())
    advice = replace(base.advice, structures=frozenset(), remedy="", at="", state="nothing found", **empty)
    bare = replace(base, ledger=ledger, advice=advice, refits=(), evidence=())
    assert STATES["nothing found"] in Page(report(bare)).text


def test_the_notebook_shows_the_answer_alone():
    html = fragment(fixture.trial(HOSTILE))
    page = Page(html)
    assert page.scripts == 0
    assert "hang together" in page.text
    assert html.count("<svg") == 2
    for svg in re.findall(r"<svg.*?</svg>", html, re.S):
        ET.fromstring(svg)


def test_a_label_from_right_to_left_is_set_apart_from_the_figures_after_it():
    page = report(fixture.hostile())
    assert "\u2068\u05d2\u05d9\u05dc\u2069 7" in page
    assert "\u202e" not in page  # what would turn the rest of a line round is taken out of a label
    assert page.count("\u2068") == page.count("\u2069")
