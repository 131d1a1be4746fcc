"""The page for readers who hear it, walk it by keyboard, or hold a phone; and on paper.

The rules are those of axe-core (its stable rules and its best practices), run inside the page with
everything unfolded. A page is also walked by the tab key alone.
"""

from __future__ import annotations

import base64
import importlib.util
import io
import re
from itertools import pairwise
from pathlib import Path

import pytest

from clingstone.writeup.report import report
from tests.writeup import fixture
from tests.writeup.test_browser import open_page

UNFOLD = "document.querySelectorAll('details').forEach(d => d.open = true);"


PAGES = [pytest.param("wells", marks=pytest.mark.slow), "trial", "stream", "hostile"]


@pytest.fixture(scope="module", params=PAGES)
def page(request, tmp_path_factory):
    path = tmp_path_factory.mktemp("page") / f"{request.param}.html"
    path.write_text(report(getattr(fixture, request.param)()), encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def axe():
    """The text of axe.min.js, as the test dependency axe-core-python carries it."""
    found = importlib.util.find_spec("axe_core_python")
    if found is None or found.submodule_search_locations is None:
        pytest.skip("axe-core-python is not installed")
    return (Path(next(iter(found.submodule_search_locations))) / "axe.min.js").read_text(encoding="utf-8")


def _broken(browser, axe: str) -> list[str]:
    """Every rule that the open page breaks, with the elements."""
    browser.execute_script(axe)
    browser.set_script_timeout(120)
    found = browser.execute_async_script(
        "const done = arguments[0]; axe.run(document).then(r => done(r.violations.map("
        "v => v.id + ': ' + v.help + ' — ' + v.nodes.slice(0, 5).map("
        "n => n.html.slice(0, 160) + ' ' + n.any.map(a => a.message).join('; ')).join(' | '))));"
    )
    return list(found)


@pytest.mark.parametrize(("width", "dark"), [(1180, False), (390, True)], ids=["wide-light", "phone-dark"])
def test_no_rule_of_axe_is_broken(browser, axe, page, width, dark):
    open_page(browser, page, width, dark=dark)
    browser.execute_script(UNFOLD)
    assert _broken(browser, axe) == []


def test_the_tab_key_walks_the_whole_page_in_order_and_shows_where_it_is(browser, page):
    """Every link, fold, table that scrolls and button is reached once, downwards, with a visible outline."""
    from selenium.webdriver.common.keys import Keys

    open_page(browser, page, 1180)
    expected = browser.execute_script(
        "return Array.from(document.querySelectorAll('a[href], summary, button, [tabindex=\"0\"]'))"
        ".filter(e => e.checkVisibility({contentVisibilityAuto: true}) && e.getClientRects().length).length"
    )
    where = (
        "const e = document.activeElement, b = e.getBoundingClientRect(), s = getComputedStyle(e);"
        "return [e.tagName, b.top + window.scrollY, s.outlineStyle, parseFloat(s.outlineWidth)]"
    )
    reached: list[list[object]] = []
    for _ in range(expected + 1):
        browser.switch_to.active_element.send_keys(Keys.TAB)
        reached.append(browser.execute_script(where))
        if reached[-1][0] == "BODY":
            break
    stops = [r for r in reached if r[0] != "BODY"]
    assert len(stops) == expected
    assert all(style != "none" and thick >= 2 for _, _, style, thick in stops)
    tops = [float(top) for _, top, _, _ in stops[1:]]  # the first is the link that skips, above the page
    assert all(after >= before - 40 for before, after in pairwise(tops))


def test_a_fold_opens_by_keyboard(browser, page):
    from selenium.webdriver.common.keys import Keys

    open_page(browser, page, 390)
    fold = browser.find_element("css selector", "summary")
    fold.send_keys(Keys.ENTER)
    assert browser.execute_script("return document.querySelector('details').open")


# ---- paper -----------------------------------------------------------------------------------


def _printed(browser, page: Path):
    pypdf = pytest.importorskip("pypdf")
    open_page(browser, page, 1180)
    paper = {"paperWidth": 8.27, "paperHeight": 11.69, "printBackground": True}  # A4 in inches
    data = browser.execute_cdp_cmd("Page.printToPDF", paper)["data"]
    return pypdf.PdfReader(io.BytesIO(base64.b64decode(data)))


def test_paper_carries_the_text_and_no_button(browser, page):
    pdf = _printed(browser, page)
    text = re.sub(r"\s+", " ", " ".join(leaf.extract_text() for leaf in pdf.pages))
    for heading in browser.find_elements("css selector", "h1, h2, h3"):
        said = heading.get_property("textContent")
        if said.isascii():  # fonts that carry other scripts give them back in an order of their own
            assert re.sub(r"\s+", " ", said) in text
    assert "Copy these sentences" not in text
    assert "Copy the methods text" not in text
    assert "To the answer" not in text
    assert "Everything that was looked at" in text
    assert 3 <= len(pdf.pages) <= 40
    assert all(leaf.extract_text().strip() for leaf in pdf.pages)  # none is left blank


def test_paper_is_white_and_its_figures_are_whole(browser, page):
    """No figure, box or row is cut by the end of a page of A4, 190 by 277 mm within its margins."""
    open_page(browser, page, 718)
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "print"})
    try:
        seen = browser.execute_script(
            "const of = (q, k) => Array.from(document.querySelectorAll(q))"
            ".map(e => getComputedStyle(e)[k]);"
            "return [of('figure, .box, tr', 'breakInside'), of('h2, h3, figcaption', 'breakAfter'),"
            "getComputedStyle(document.body).backgroundColor,"
            "Array.from(document.querySelectorAll('button, nav, .narrow')).filter("
            "e => e.getClientRects().length).length,"
            "Math.max(...Array.from(document.querySelectorAll('figure')).map(e => e.offsetHeight))]"
        )
    finally:
        browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": ""})
    inside, after, paper, left, tallest = seen
    assert set(inside) == {"avoid"}
    assert set(after) == {"avoid"}
    assert paper == "rgb(255, 255, 255)"
    assert left == 0
    assert 0 < tallest < 277 / 25.4 * 96
