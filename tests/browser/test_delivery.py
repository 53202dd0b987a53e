"""The site as it is handed on: every kind of page, for every reader, from an unpacked zip, offline."""

from __future__ import annotations

import json
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


CONTRAST = {"type": "rule", "values": ["color-contrast", "link-in-text-block"]}
"""Rules that a scheme changes; the others depend on the page's width at most."""
WIDTHS, SCHEMES = (1440, 390), ("light", "dark")


def seen_as(browser: Chrome, width: int, scheme: str, media: str = "") -> None:
    """Show the open page at a width, in a scheme, on the screen or on paper."""
    features = [{"name": "prefers-color-scheme", "value": scheme}]
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": media, "features": features})
    size = {"width": width, "height": 1000, "deviceScaleFactor": 1, "mobile": width < 500}
    browser.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", size)


def redrawn(browser: Chrome) -> None:
    """Wait until figures have been drawn again after a change of width or scheme."""
    wanted = "getComputedStyle(document.documentElement).getPropertyValue('--c-0072b2').trim() || '#0072b2'"
    script = f"""return [...document.querySelectorAll('.live')].every(l => !l.data ||
        JSON.stringify(l.data).indexOf('#0072b2') < 0 || {wanted} === '#0072b2')"""
    wait_for(lambda: browser.execute_script(script), "figures in the colours of the scheme")


def test_axe_finds_nothing_on_live_pages_in_both_schemes(browser: Chrome, site: Path) -> None:
    """Every kind of page by every rule, and by contrast in the other scheme; the widths take turns."""
    found = {}
    for turn, name in enumerate(kinds(site)):
        width, scheme, other = WIDTHS[turn % 2], SCHEMES[turn // 2 % 2], SCHEMES[1 - turn // 2 % 2]
        seen_as(browser, width, scheme)
        browser.get(address(site / name))
        make_all_live(browser)
        if violations := axe_violations(browser):
            found[f"{name} {width} {scheme}"] = violations
        seen_as(browser, width, other)
        redrawn(browser)
        if violations := axe_violations(browser, runOnly=CONTRAST):
            found[f"{name} {width} {other}"] = violations
    assert found == {}


def test_axe_finds_nothing_without_scripts_at_the_other_width_and_on_paper(
    browser: Chrome, site: Path
) -> None:
    found = {}
    for turn, name in enumerate(kinds(site)):
        width, scheme = WIDTHS[1 - turn % 2], SCHEMES[turn // 2 % 2]
        browser.execute_cdp_cmd("Emulation.setScriptExecutionDisabled", {"value": True})
        seen_as(browser, width, scheme)
        browser.get(address(site / name))
        browser.execute_cdp_cmd("Emulation.setScriptExecutionDisabled", {"value": False})
        assert browser.find_elements(By.CSS_SELECTOR, ".tools button") == []
        if violations := axe_violations(browser):
            found[f"{name} {width} {scheme}"] = violations
        for what, media in (("the other scheme", ""), ("paper", "print")):
            seen_as(browser, width, SCHEMES[1 - turn // 2 % 2], media)
            if violations := axe_violations(browser, runOnly=CONTRAST):
                found[f"{name} {width} {what}"] = violations
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


def test_every_column_of_every_table_has_a_meaning(site: Path) -> None:
    package = json.loads((site / "tables" / "schema.json").read_text("utf-8"))
    fields = [(r["name"], field) for r in package["resources"] for field in r["schema"]["fields"]]
    assert len(fields) > 800
    assert [(table, field["name"]) for table, field in fields if not field.get("description")] == []


UNIT_OF_ENDING = {
    "_percent_fso": "%FSO",
    "_mm": "mm",
    "_mm2": "mm²",
    "_kpa": "kPa",
    "_per_s": "1/s",
    "_range_k": "K",
    "_time_s": "s",
    "_per_decade": "%FSO per decade",
}


def test_a_column_whose_name_ends_in_a_unit_has_that_unit(site: Path) -> None:
    package = json.loads((site / "tables" / "schema.json").read_text("utf-8"))
    fields = [field for r in package["resources"] for field in r["schema"]["fields"]]
    units = {f["name"]: f.get("unit", "") for f in fields if f["name"] not in SIGNALS_OWN_UNIT}
    for ending, unit in UNIT_OF_ENDING.items():
        named = {name: found for name, found in units.items() if name.endswith(ending)}
        assert named, ending
        assert {name: found for name, found in named.items() if found != unit} == {}


SIGNALS_OWN_UNIT = {"drift_per_s", "per_kpa", "strain_error_per_kpa"}
"""Columns per second and per kilopascal whose unit has that of the signal, or strain, before it."""


def test_a_tall_figure_and_its_caption_share_a_sheet_and_heads_repeat(browser: Chrome, site: Path) -> None:
    browser.get(address(site / "calibration.html"))
    make_all_live(browser)
    seen_as(browser, 700, "light", "print")
    heights = browser.execute_script(
        "return [...document.querySelectorAll('.plot > svg')].map(s => s.getBoundingClientRect().height)"
    )
    assert 0 < max(heights) <= 205 / 25.4 * 96 + 1
    buttons = browser.find_elements(By.CSS_SELECTOR, "th button")
    assert {button.value_of_css_property("display") for button in buttons} == {"contents"}


def test_titles_of_panels_do_not_meet_on_a_telephone(browser: Chrome, site: Path) -> None:
    seen_as(browser, 390, "light")
    browser.get(address(site / "calibration.html"))
    make_all_live(browser)
    titles = browser.execute_script(
        """return [...document.querySelectorAll('.live .annotation-text')].map(e => {
             const box = e.getBoundingClientRect();
             return [box.left, box.right, box.top + scrollY, e.textContent];
           })"""
    )
    assert len(titles) > 14
    for left, right, top, words in titles:
        beside = [t for t in titles if t[0] > left and abs(t[2] - top) < 2 and t[0] < right]
        assert beside == [], words
