"""The site as it is handed on: every kind of page, for every reader, from an unpacked zip, offline."""

from __future__ import annotations

import re
import zipfile
from pathlib import Path

import pytest
from selenium.webdriver import Chrome, Keys
from selenium.webdriver.common.by import By

from tests.browser.chromium import address, messages, outside, requests, wait_for
from tests.browser.test_site import axe_violations, emulate, one_of_every_kind

pytestmark = pytest.mark.browser

FIRST = ("index", "calibration", "calibration_effort", "variance", "residuals", "hysteresis", "drift")
FURTHER = ("pressure", "layout", "generations", "planning", "budget", "recordings", "method", "provenance")


def kinds(site: Path) -> list[str]:
    """One page of every kind: all of the strip, a module, a sensor, a note and a section of the method."""
    listed = [f"{name}.html" for name in (*FIRST, *FURTHER)]
    found = list(dict.fromkeys([*listed, *one_of_every_kind(site)]))
    assert [name for name in found if not (site / name).is_file()] == []
    return found


def make_all_live(browser: Chrome) -> int:
    """Scroll to every figure until it lives; return how many there are."""
    figures = browser.find_elements(By.CSS_SELECTOR, "figure[data-figure]")
    for figure in figures:
        browser.execute_script("arguments[0].scrollIntoView()", figure)
        wait_for(lambda f=figure: f.get_attribute("data-state") == "live", "a live figure")
    return len(figures)


@pytest.mark.parametrize(("width", "scheme"), [(390, "dark"), (1440, "light")])
def test_axe_finds_nothing_once_all_figures_live(
    browser: Chrome, site: Path, width: int, scheme: str
) -> None:
    emulate(browser, prefers_color_scheme=scheme)
    size = {"width": width, "height": 1000, "deviceScaleFactor": 1, "mobile": width < 500}
    browser.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", size)
    found = {}
    for name in kinds(site):
        browser.get(address(site / name))
        make_all_live(browser)
        if violations := axe_violations(browser):
            found[name] = violations
    assert found == {}


FOCUSED = """
  const e = document.activeElement;
  const style = getComputedStyle(e);
  const ringed = style.outlineStyle !== 'none' && parseFloat(style.outlineWidth) > 0;
  return [e.tagName, ringed, e.getBoundingClientRect().width > 0, Boolean(e.closest('[aria-hidden="true"]')),
          [...document.querySelectorAll('*')].indexOf(e)];
"""


@pytest.mark.parametrize("name", ["calibration.html", "planning.html", "sensor-M01-AB.html"])
def test_the_keyboard_walks_through_the_page_in_order_and_sees_where_it_is(
    browser: Chrome, site: Path, name: str
) -> None:
    browser.get(address(site / name))
    make_all_live(browser)
    browser.execute_script("scrollTo(0, 0)")
    body = browser.find_element(By.TAG_NAME, "body")
    places = []
    body.send_keys(Keys.TAB)
    for _ in range(60):
        tag, ringed, seen, hidden, place = browser.execute_script(FOCUSED)
        if tag == "BODY":
            break
        assert ringed, (tag, place)
        assert seen, (tag, place)
        assert not hidden, (tag, place)
        places.append(place)
        browser.switch_to.active_element.send_keys(Keys.TAB)
    assert len(places) > 20
    assert places == sorted(set(places))


def test_nothing_moves_for_those_who_ask_for_stillness(browser: Chrome, site: Path) -> None:
    emulate(browser, prefers_reduced_motion="reduce")
    browser.get(address(site / "calibration.html"))
    make_all_live(browser)
    moving = browser.execute_script(
        """return [...document.querySelectorAll('*')].filter(e => {
             const s = getComputedStyle(e);
             return s.scrollBehavior === 'smooth' || s.animationName !== 'none' ||
               s.transitionDuration.split(',').some(t => parseFloat(t) > 0);
           }).map(e => e.tagName + '.' + e.className)"""
    )
    assert [element for element in moving if "live" not in element and "Plotly" not in element] == []
    assert browser.execute_script("return document.getAnimations().length") == 0


def test_an_unpacked_zip_opens_with_the_network_off(browser: Chrome, site: Path, tmp_path: Path) -> None:
    packed = tmp_path / "site.zip"
    with zipfile.ZipFile(packed, "w", zipfile.ZIP_DEFLATED) as archive:
        for path in sorted(site.rglob("*")):
            if path.is_file():
                archive.write(path, f"A campaign (ünïcode) 50%/{path.relative_to(site).as_posix()}")
    with zipfile.ZipFile(packed) as archive:
        archive.extractall(tmp_path / "unpacked")
    folder = next((tmp_path / "unpacked").iterdir())
    browser.execute_cdp_cmd("Network.enable", {})
    off = {"offline": True, "latency": 0, "downloadThroughput": 0, "uploadThroughput": 0}
    browser.execute_cdp_cmd("Network.emulateNetworkConditions", off)
    try:
        for name in ("index.html", "calibration.html", "sensor-M01-AB.html"):
            browser.get(address(folder / name))
            assert make_all_live(browser) > 0 or name == "index.html"
            assert messages(browser) == []
            assert outside(requests(browser), folder) == []
    finally:
        on = {"offline": False, "latency": 0, "downloadThroughput": -1, "uploadThroughput": -1}
        browser.execute_cdp_cmd("Network.emulateNetworkConditions", on)


FORBIDDEN = {
    "fetch": r"\bfetch\(",
    "XMLHttpRequest": r"\bXMLHttpRequest\b",
    "import": r"^\s*import\b|\bimport\(",
    "export": r"^\s*export\b",
    "storage across files": r"\b(?:localStorage|sessionStorage|indexedDB|caches)\b|document\.cookie",
    "workers from files": r"\bnew (?:Shared)?Worker\(|serviceWorker",
    "other windows": r"\bwindow\.open\(|\.postMessage\(|\bopener\b",
    "history of other addresses": r"history\.pushState\(",
    "markup from text": r"\b(?:innerHTML|outerHTML|insertAdjacentHTML|document\.write|eval)\b|new Function",
}
"""What pages opened as ``file://`` may not do, and what would turn a text into markup.

Firefox counts every file as an origin of its own since version 68 (developer.mozilla.org, 'Same-origin
policy', section 'File origins'; 'Reason: CORS request not HTTP'): fetch, XMLHttpRequest, modules, workers and
``integrity`` on local files fail, and storage is not shared between files. Safari does the same unless
'Disable local file restrictions' is set (webkit.org, 'Safari 10 release notes' and WKWebView's
``allowFileAccessFromFileURLs``, off as a rule). Classic scripts, style sheets and pictures beside the page
are loaded in both, and a change of the address after ``#`` is allowed. (Stated from memory of those pages.)
"""


def test_the_sites_own_scripts_do_nothing_that_files_may_not_do(site: Path) -> None:
    scripts = [path for path in (site / "assets").glob("*.js") if path.name != "plot_library.js"]
    assert len(scripts) > 3
    for path in scripts:
        text = re.sub(r"/\*.*?\*/", "", path.read_text(encoding="utf-8"), flags=re.DOTALL)
        for what, pattern in FORBIDDEN.items():
            assert not re.search(pattern, text, re.MULTILINE), f"{path.name}: {what}"


def test_pages_load_classic_scripts_beside_them_and_nothing_else(site: Path) -> None:
    for path in site.glob("*.html"):
        text = path.read_text(encoding="utf-8")
        for tag in re.findall(r"<(?:script|link)\b[^>]*>", text):
            assert not re.search(r"\b(?:type|integrity|crossorigin|async)\b", tag), (path.name, tag)
            target = re.search(r'(?:src|href)="([^"]*)"', tag)
            assert target is not None
            assert target[1] == "data:," or (site / target[1]).is_file(), (path.name, tag)
