"""Page 10 in a real browser: its controls answer as Python does, and without script the tables stand."""

from __future__ import annotations

from dataclasses import replace
from itertools import product
from pathlib import Path

import pytest
from selenium.webdriver import Chrome
from selenium.webdriver.common.by import By
from selenium.webdriver.support.select import Select

from campaign.analyses.planning import variance_with_limits
from campaign.methods.campaign_design import (
    Costs,
    Design,
    best_design,
    cheapest_design,
    freedom_of_difference,
    half_width_of_difference,
    power_of_difference,
)
from campaign.pages.output import write_folder
from campaign.pages.planning import planning_data
from campaign.pages.site import build_site
from tests.browser.chromium import address, messages, outside, requests, wait_for
from tests.browser.test_site import axe_violations
from tests.pages.small_campaign import Sketch, small_results

pytestmark = pytest.mark.browser

LIMITS = 'strain_error = "0.02"\n[costs]\nmodule = 7\nsensor = 0.6\nrepetition = 0.15\n'
SKETCH = Sketch(limits=LIMITS)


@pytest.fixture(scope="module")
def planned(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, object]:
    """The site of a small campaign of two generations, and what its plans rest on."""
    results = small_results(tmp_path_factory.mktemp("planned") / "small", SKETCH)
    site = tmp_path_factory.mktemp("site") / "planned"
    write_folder(build_site(results), site)
    assert results.planning is not None
    return site, results.planning


def test_script_and_python_agree(browser: Chrome, planned) -> None:
    site, planning = planned
    browser.get(address(site / "planning.html"))
    designs = [Design(*sizes) for sizes in product((2, 4, 7, 20), (1, 3, 6), (1, 5), (1, 2))]
    one = planning.components[0]
    asked = [
        {"modules": d.modules, "sensors": d.sensors, "repetitions": d.repetitions, "sessions": d.sessions}
        for d in designs
    ]
    answers = browser.execute_script(
        """
        const data = window.campaignPage.values.planning, p = window.campaignPlanning, c = data.components[0];
        return arguments[0].map((d) => {
          const v = p.variance(c, d);
          return [v.estimate, v.low, v.high, p.halfWidth(data, v.estimate, d.modules),
            p.power(data, 0.02, v.estimate, d.modules), p.cost(data.costs, d)];
        });
        """,
        asked,
    )
    assert len(answers) == len(designs) == 48
    for design, (estimate, low, high, width, power, cost) in zip(designs, answers, strict=True):
        expected = variance_with_limits(one, design)
        freedom = freedom_of_difference(design.modules)
        assert estimate == pytest.approx(expected.estimate, rel=1e-9)
        assert (low is None) == (not expected.low >= 0)
        if low is not None:
            assert (low, high) == pytest.approx((expected.low, expected.high), rel=1e-9, abs=1e-15)
        assert width == pytest.approx(half_width_of_difference(expected.estimate, freedom), rel=1e-7)
        assert power == pytest.approx(power_of_difference(0.02, expected.estimate, freedom), abs=1e-3)
        assert cost == pytest.approx(planning.costs.of(design))


def test_searches_of_script_and_python_agree(browser: Chrome, planned) -> None:
    site, planning = planned
    browser.get(address(site / "planning.html"))
    strata, reach = planning.components[0].strata, planning.reach
    for prices, target, budget in (
        ((7, 0.6, 0.15), 0.02, 100.0),
        ((1, 5, 2), 0.01, 60.0),
        ((1, 1, 1), 1e-9, 1.0),
    ):
        costs = Costs(*prices)
        found = browser.execute_script(
            """
            const data = window.campaignPage.values.planning, p = window.campaignPlanning;
            const c = data.components[0];
            const costs = { module: arguments[0], sensor: arguments[1], repetition: arguments[2] };
            return [p.cheapest(data, c, costs, arguments[3], 1), p.best(data, c, costs, arguments[4], 1)];
            """,
            *prices,
            target,
            budget,
        )
        expected = (
            cheapest_design(strata, costs, target, reach),
            best_design(strata, costs, budget, reach),
        )
        for answer, design in zip(found, expected, strict=True):
            assert (answer is None) == (design is None)
            if design is not None:
                assert Design(**answer["design"]) == design


def test_controls_answer_at_once(browser: Chrome, planned) -> None:
    site = planned[0]
    browser.get(address(site / "planning.html"))
    place = browser.find_element(By.CSS_SELECTOR, "[data-planning]")
    wait_for(place.is_displayed, "the controls")

    def part(name: str):
        return place.find_element(By.CSS_SELECTOR, f"[data-part='{name}']")

    def typed(name: str, text: str) -> None:
        part(name).clear()
        part(name).send_keys(text)

    assert float(part("difference").get_attribute("value") or "nan") == 2.0
    before = part("half-width").text
    typed("modules", "20")
    wait_for(lambda: part("half-width").text != before, "another half-width")
    power = part("power").text
    typed("difference", "0,1")
    wait_for(lambda: part("power").text != power, "another power")
    typed("cost-module", "")
    wait_for(lambda: part("cost").text == "state all three costs", "the costs asked for")
    typed("cost-module", "70")
    wait_for(lambda: part("cost").text not in ("", "state all three costs"), "a cost")
    own = part("half-width").text
    Select(part("components")).select_by_visible_text("second")
    wait_for(lambda: part("half-width").text != own, "the other components")
    assert messages(browser) == []
    assert outside(requests(browser), site) == []


@pytest.mark.parametrize("page", ["planning", "generations"])
def test_the_pages_have_no_accessibility_findings(browser: Chrome, planned, page: str) -> None:
    browser.get(address(planned[0] / f"{page}.html"))
    assert browser.find_elements(By.CSS_SELECTOR, "figure.figure")
    assert axe_violations(browser) == []


def test_without_script_table_and_figures_stand_and_the_controls_do_not(browser: Chrome, planned) -> None:
    browser.execute_cdp_cmd("Emulation.setScriptExecutionDisabled", {"value": True})
    browser.get(address(planned[0] / "planning.html"))
    assert not browser.find_element(By.CSS_SELECTOR, "[data-planning]").is_displayed()
    assert len(browser.find_elements(By.CSS_SELECTOR, "figure.figure svg")) == 3
    assert len(browser.find_elements(By.CSS_SELECTOR, "#table-planning tbody tr")) == 10
    assert "the file has all of them" in browser.find_element(By.CSS_SELECTOR, "#table-planning .tools").text
    assert browser.find_element(By.CSS_SELECTOR, "#table-planning .tools a").is_displayed()


def test_data_of_the_page_hold_no_number_that_json_cannot_say(planned) -> None:
    planning = planned[1]
    data = planning_data(replace(planning, costs=None))
    assert data["costs"] is None
