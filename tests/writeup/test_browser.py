"""The report in a real browser: quiet console, no request, no sideways scrolling on a phone."""

from __future__ import annotations

import base64
import io
import json
import re
from pathlib import Path

import pytest

from clingstone.writeup.report import report
from tests.writeup import fixture


@pytest.fixture(scope="module", params=["trial", "stream", "wells"])
def page(request, tmp_path_factory):
    path = tmp_path_factory.mktemp("page") / f"{request.param}.html"
    path.write_text(report(getattr(fixture, request.param)()), encoding="utf-8")
    return path


def open_page(browser, page: Path, width: int, *, dark: bool = False, script: bool = True) -> None:
    scheme = {"name": "prefers-color-scheme", "value": "dark" if dark else "light"}
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"features": [scheme]})
    browser.execute_cdp_cmd("Emulation.setScriptExecutionDisabled", {"value": not script})
    size = {"width": width, "height": 900, "deviceScaleFactor": 1, "mobile": width < 500}
    browser.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", size)
    for kind in ("browser", "performance"):
        browser.get_log(kind)
    browser.get(page.as_uri())


@pytest.mark.parametrize("width", [1180, 360])
def test_console_is_quiet_and_no_request_leaves_the_file(browser, page, width):
    open_page(browser, page, width)
    assert browser.get_log("browser") == []
    events = [json.loads(e["message"])["message"] for e in browser.get_log("performance")]
    urls = [e["params"]["request"]["url"] for e in events if e["method"] == "Network.requestWillBeSent"]
    assert page.as_uri() in urls
    assert all(url.startswith(("file:", "data:")) for url in urls)


@pytest.mark.parametrize("width", [360, 320, 768, 1180])
def test_the_page_never_scrolls_sideways(browser, page, width):
    open_page(browser, page, width)
    browser.execute_script("document.querySelectorAll('details').forEach(d => d.open = true)")
    seen = browser.execute_script("return document.documentElement.scrollWidth")
    assert seen <= width


def test_a_phone_gets_figures_drawn_for_it(browser, page):
    open_page(browser, page, 360)
    shown = browser.execute_script(
        "return Array.from(document.querySelectorAll('figure svg'))"
        ".filter(s => s.getClientRects().length).map(s => s.viewBox.baseVal.width)"
    )
    assert shown
    assert set(shown) == {336}
    least = browser.execute_script(
        "return Math.min(...Array.from(document.querySelectorAll('.narrow text'))"
        ".filter(t => t.getClientRects().length).map(t => parseFloat(getComputedStyle(t).fontSize)))"
    )
    assert least >= 11


def test_light_and_dark_differ_and_neither_is_blank(browser, page):
    from PIL import Image

    pictures = {}
    for dark in (False, True):
        open_page(browser, page, 1000, dark=dark)
        png = base64.b64decode(browser.execute_cdp_cmd("Page.captureScreenshot", {"format": "png"})["data"])
        pictures[dark] = Image.open(io.BytesIO(png)).convert("RGB")
    light, dark = pictures[False], pictures[True]
    assert sum(light.getpixel((5, 5))) > 600
    assert sum(dark.getpixel((5, 5))) < 150
    for picture in (light, dark):
        assert len(picture.getcolors(maxcolors=10**6)) > 50


def test_the_button_copies_the_two_sentences(browser, page):
    from selenium.webdriver.common.keys import Keys

    open_page(browser, page, 1000)
    browser.execute_script(
        "Object.defineProperty(navigator, 'clipboard', {value: {writeText: t => {window.copied = t;"
        "return Promise.resolve()}}}); Object.defineProperty(window, 'isSecureContext', {value: true});"
    )
    button = browser.find_element("css selector", "button[data-copies='report-this']")
    assert button.is_displayed()
    button.send_keys(Keys.ENTER)  # the keyboard is enough
    copied = browser.execute_script("return window.copied")
    assert copied == browser.find_element("id", "report-this").get_property("textContent").strip()


def test_without_scripts_all_is_there_and_no_dead_button(browser, page):
    open_page(browser, page, 1000, script=False)
    assert all(not b.is_displayed() for b in browser.find_elements("css selector", "button"))
    assert browser.find_element("id", "methods-text").is_displayed()
    assert len(browser.find_elements("css selector", "details summary")) > 5
    open_page(browser, page, 1000)


def test_print_unfolds_what_is_folded(browser, page):
    open_page(browser, page, 1000)
    pdf = base64.b64decode(browser.execute_cdp_cmd("Page.printToPDF", {})["data"])
    assert pdf[:5] == b"%PDF-"
    before = browser.execute_script("return document.querySelectorAll('details[open]').length")
    total = browser.execute_script(
        "window.dispatchEvent(new Event('beforeprint'));"
        "const count = s => document.querySelectorAll(s).length, n = count('details[open]');"
        "window.dispatchEvent(new Event('afterprint'));"
        "return [n, count('details:not(.data)'), count('details[open]')]"
    )
    assert total == [total[1], total[1], before]


def test_the_keyboard_reaches_the_answer_first(browser, page):
    from selenium.webdriver.common.keys import Keys

    open_page(browser, page, 1000)
    browser.find_element("tag name", "body").send_keys(Keys.TAB)
    focused = browser.switch_to.active_element
    assert re.search(r"answer", focused.get_attribute("href") or "")
    assert focused.rect["x"] >= 0
