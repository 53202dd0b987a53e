"""Page 8 in a real browser: picking a placement and its lines redraws the shape, and keys alone do it."""

from __future__ import annotations

from pathlib import Path

import pytest
from selenium.webdriver import Chrome
from selenium.webdriver.common.by import By
from selenium.webdriver.common.keys import Keys
from selenium.webdriver.support.select import Select

from campaign.analyses.layout_results import GENERATION_LINE, OWN_LINE, Layout
from campaign.pages.layout_words import placement_sentence
from tests.analyses.layout_campaign import laid
from tests.browser.chromium import address, messages, outside, requests, wait_for
from tests.browser.test_site import axe_violations
from tests.pages.layout_page_alone import site_of

pytestmark = pytest.mark.browser

DRAWN = """
const live = document.querySelector('#figure-shape .live');
const nodes = live.data.find((t) => t.mode === 'markers' && t.marker.symbol === 'circle');
return [live.layout.annotations[0].text, nodes.x];
"""


@pytest.fixture(scope="module")
def laid_out(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Layout]:
    """The page of two braced panels, one edge of one placement slipped, and what it shows."""
    layout = laid("braced", 2).with_signals(-9.0, "QS", "2")
    site = tmp_path_factory.mktemp("site") / "shapes"
    for name, content in site_of(layout).items():
        (site / name).parent.mkdir(parents=True, exist_ok=True)
        (site / name).write_bytes(content)
    return site, layout


def opened(browser: Chrome, site: Path, hash_part: str = "") -> list[Select]:
    browser.get(address(site / "layout.html", hash_part))
    figure = browser.find_element(By.ID, "figure-shape")
    browser.execute_script("arguments[0].scrollIntoView()", figure)
    wait_for(lambda: figure.get_attribute("data-state") == "live", "a live shape")
    return [Select(one) for one in browser.find_elements(By.CSS_SELECTOR, "[data-shapes] select")]


def said(browser: Chrome) -> str:
    return browser.find_element(By.CSS_SELECTOR, "[data-part='said']").text


def said_of(layout: Layout, module: str, name: str, line: str) -> str:
    own = next(p for p in layout.placements if (p.module, p.name, p.line) == (module, name, line))
    return placement_sentence(own, 1.0).split(". ")[1]  # its errors by the datum


def test_picking_a_placement_and_a_line_changes_drawing_and_sentence(
    browser: Chrome, laid_out: tuple[Path, Layout]
) -> None:
    site, layout = laid_out
    modules, placements, lines = opened(browser, site)
    assert (modules.first_selected_option.text, placements.first_selected_option.text) == ("M01", "2")
    head, own = browser.execute_script(DRAWN)
    assert head.startswith("M01, placement 2<br>")
    lines.select_by_index(1)
    wait_for(lambda: said_of(layout, "M01", "2", GENERATION_LINE) in said(browser), "the other line’s errors")
    assert browser.execute_script(DRAWN)[1] != own
    lines.select_by_index(0)
    wait_for(lambda: said_of(layout, "M01", "2", OWN_LINE) in said(browser), "own errors again")
    assert browser.execute_script(DRAWN)[1] == own
    modules.select_by_visible_text("M02")
    wait_for(lambda: browser.execute_script(DRAWN)[0].startswith("M02, placement 2<br>"), "the other module")
    placements.select_by_visible_text("4")
    wait_for(
        lambda: browser.execute_script(DRAWN)[0].startswith("M02, placement 4<br>"), "its fourth placement"
    )
    assert said_of(layout, "M02", "4", OWN_LINE) in said(browser)
    caption = browser.find_element(By.CSS_SELECTOR, "#figure-shape figcaption")
    assert "M02, placement 4, read by each sensor’s own line" in caption.text
    modules.select_by_visible_text("M01")
    placements.select_by_visible_text("2")
    wait_for(lambda: "The tests find a bad length in M01, placement 2" in caption.text, "the first caption")
    assert messages(browser) == []
    assert outside(requests(browser), site) == []


def test_a_choice_made_before_the_script_has_come_is_drawn_as_it_should_be(
    browser: Chrome, laid_out: tuple[Path, Layout]
) -> None:
    opened(browser, laid_out[0])
    browser.execute_script(
        """
        const [module, placement] = document.querySelectorAll('[data-shapes] select');
        for (const [list, value] of [[module, 'M02'], [placement, '2'], [placement, '3']]) {
          list.value = value;
          list.dispatchEvent(new Event('change'));
        }
        """
    )
    wait_for(lambda: browser.execute_script(DRAWN)[0].startswith("M02, placement 4<br>"), "the last choice")
    drawn = "return document.querySelector('#figure-shape .live').data.map((trace) => trace.mode)"
    assert None not in browser.execute_script(drawn)
    assert messages(browser) == []


def test_keys_alone_step_through_the_placements(browser: Chrome, laid_out: tuple[Path, Layout]) -> None:
    site, _ = laid_out
    modules, _, _ = opened(browser, site)
    element = modules._el
    browser.execute_script("arguments[0].focus()", element)
    for _ in range(3):  # over the lists to the first button, then the second
        browser.switch_to.active_element.send_keys(Keys.TAB)
    assert browser.switch_to.active_element.text == "previous placement"
    browser.switch_to.active_element.send_keys(Keys.TAB)
    browser.switch_to.active_element.send_keys(Keys.ENTER)
    wait_for(
        lambda: browser.execute_script(DRAWN)[0].startswith("M01, placement 3<br>"), "the next placement"
    )
    browser.switch_to.active_element.send_keys(Keys.ENTER)
    wait_for(
        lambda: browser.execute_script(DRAWN)[0].startswith("M01, placement 4<br>"), "the last placement"
    )
    buttons = browser.find_elements(By.CSS_SELECTOR, "[data-shapes] button")
    assert [one.is_enabled() for one in buttons] == [True, False]
    assert messages(browser) == []


def test_marking_a_module_anywhere_draws_its_placement(
    browser: Chrome, laid_out: tuple[Path, Layout]
) -> None:
    modules, _, _ = opened(browser, laid_out[0], "#figure-errors?mark=M02")
    wait_for(lambda: modules.first_selected_option.text == "M02", "the marked module")
    figure = browser.find_element(By.ID, "figure-shape")
    browser.execute_script("arguments[0].scrollIntoView()", figure)
    wait_for(lambda: browser.execute_script(DRAWN)[0].startswith("M02, placement 2<br>"), "its placement")


def test_the_still_picture_and_the_sentence_stand_without_scripts(
    browser: Chrome, laid_out: tuple[Path, Layout]
) -> None:
    site, layout = laid_out
    browser.execute_cdp_cmd("Emulation.setScriptExecutionDisabled", {"value": True})
    browser.get(address(site / "layout.html"))
    assert browser.find_element(By.CSS_SELECTOR, "#figure-shape svg").is_displayed()
    assert said_of(layout, "M01", "2", OWN_LINE) in said(browser)
    assert not browser.find_element(By.CSS_SELECTOR, "[data-shapes]").is_displayed()


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_the_page_has_no_accessibility_findings(
    browser: Chrome, laid_out: tuple[Path, Layout], scheme: str
) -> None:
    features = [{"name": "prefers-color-scheme", "value": scheme}]
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"features": features})
    opened(browser, laid_out[0])
    assert axe_violations(browser) == []
