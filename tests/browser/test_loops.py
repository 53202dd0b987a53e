"""Page 5 in a real browser: picking a sensor, a rate and a cycle redraws the loops."""

from __future__ import annotations

import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from selenium.webdriver import Chrome
from selenium.webdriver.common.by import By
from selenium.webdriver.support.select import Select

from tests.analyses.loop_campaign import Truth, cyclic_trial
from tests.browser.chromium import address, messages, outside, requests, wait_for
from tests.browser.test_site import axe_violations

pytestmark = pytest.mark.browser

ROOT = Path(__file__).parents[2]
DESCRIPTION = """\
format = 1
[campaign]
title = "Loops to pick from"
simulated = true
[recordings]
files = "*.csv"
name = "{module}_{sensor}_{kind}_r{repetition}"
"""
DRAWN = """
return document.querySelector('#figure-loops .live').data.map(t => [t.meta.sensor, t.meta.rate, t.meta.cycle])
"""


@pytest.fixture(scope="module")
def loops(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The site of a campaign of two modules with two sensors each, run at two rates."""
    folder = tmp_path_factory.mktemp("loops")
    (folder / "campaign.toml").write_text(DESCRIPTION)
    rng = np.random.default_rng(1)
    for module in ("M01", "M02"):
        for sensor in ("AB", "CD"):
            for repetition, period in enumerate((10.0, 2.0), 1):
                made = cyclic_trial(
                    Truth(softening=0.05), rng, module=module, sensor=sensor, period_s=period, cycles=6
                )
                rows = zip(made.time_s, made.length_mm, made.signal, strict=True)
                text = "time_s,length_mm,capacitance_pF\n" + "".join(f"{t},{x},{y}\n" for t, x, y in rows)
                (folder / f"{module}_{sensor}_cyclic_r{repetition}.csv").write_text(text)
    site = tmp_path_factory.mktemp("site") / "loops"
    command = [sys.executable, "-m", "campaign", "report", str(folder), "--into", str(site)]
    run = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=False)
    assert run.returncode == 0, run.stderr
    return site


def opened(browser: Chrome, site: Path, hash_part: str = "") -> list[Select]:
    """The page with its figure of loops live; the three choices."""
    browser.get(address(site / "hysteresis.html", hash_part))
    figure = browser.find_element(By.ID, "figure-loops")
    browser.execute_script("arguments[0].scrollIntoView()", figure)
    wait_for(lambda: figure.get_attribute("data-state") == "live", "live loops")
    choices = browser.find_elements(By.CSS_SELECTOR, "[data-loops] select")
    wait_for(lambda: len(choices[1].find_elements(By.TAG_NAME, "option")) == 3, "the rates")
    return [Select(choice) for choice in choices]


def test_picking_a_sensor_a_rate_and_a_cycle_draws_just_these_loops(browser: Chrome, loops: Path) -> None:
    sensors, rates, cycles = opened(browser, loops)
    assert [option.text for option in sensors.options] == ["M01 AB", "M01 CD", "M02 AB", "M02 CD"]
    for name in ("M02 CD", "M01 AB"):
        sensors.select_by_visible_text(name)
        wait_for(lambda n=name: {s for s, _, _ in browser.execute_script(DRAWN)} == {n[4:]}, "its loops")
    assert len({rate for _, rate, _ in browser.execute_script(DRAWN)}) == 2
    rates.select_by_index(1)
    wait_for(lambda: len({rate for _, rate, _ in browser.execute_script(DRAWN)}) == 1, "one rate")
    cycles.select_by_visible_text("all drawn")
    wait_for(lambda: len(browser.execute_script(DRAWN)) > 3, "all cycles")
    cycles.select_by_visible_text("2")
    wait_for(lambda: [c for _, _, c in browser.execute_script(DRAWN)] == [2], "one cycle")
    departures = browser.find_element(By.ID, "figure-loop-departures")
    browser.execute_script("arguments[0].scrollIntoView()", departures)
    wait_for(lambda: departures.get_attribute("data-state") == "live", "live departures")
    less = DRAWN.replace("figure-loops", "figure-loop-departures")
    assert [(s, c) for s, _, c in browser.execute_script(less)] == [("AB", 2)]
    link = browser.find_element(By.CSS_SELECTOR, "#figure-loops .tools a").get_attribute("href")
    assert link is not None
    assert link.endswith("figures/sensor-M01-AB_loops.csv")
    assert (loops / "figures" / "sensor-M01-AB_loops.csv").is_file()
    assert messages(browser) == []
    assert outside(requests(browser), loops) == []


def test_marking_a_sensor_anywhere_draws_its_loops(browser: Chrome, loops: Path) -> None:
    sensors, _, _ = opened(browser, loops, "#figure-widths?mark=M02,AB")
    wait_for(lambda: sensors.first_selected_option.text == "M02 AB", "the marked sensor")
    wait_for(lambda: {s for s, _, _ in browser.execute_script(DRAWN)} == {"AB"}, "its loops")


def test_the_page_of_loops_has_no_accessibility_findings(browser: Chrome, loops: Path) -> None:
    browser.get(address(loops / "hysteresis.html"))
    assert len(browser.find_elements(By.CSS_SELECTOR, "[data-loops] select")) == 3
    assert axe_violations(browser) == []
