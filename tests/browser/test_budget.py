"""Page 11 in a real browser: what a reader sets changes U to what the program computes."""

from __future__ import annotations

import itertools
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from scipy import stats
from selenium.webdriver import Chrome
from selenium.webdriver.common.by import By
from selenium.webdriver.support.select import Select

from campaign.analyses.budget import Budget
from campaign.analyses.budget_model import (
    PRESSURE,
    TEMPERATURE,
    BudgetPlace,
    Course,
    Effect,
    UseConditions,
    budget_in_use,
    worst_in_use,
)
from campaign.pages import numbers
from campaign.pages.site import build_site
from tests.browser.chromium import address, messages, outside, requests, wait_for
from tests.browser.test_site import axe_violations
from tests.pages.small_campaign import Sketch, small_results

pytestmark = pytest.mark.browser


def influenced(place: BudgetPlace) -> BudgetPlace:
    """The place with what holds and sweeps would have said."""
    effects = {
        PRESSURE: Effect(2e-4 * (1 + place.x), 3e-5, 6.0, 30.0),
        TEMPERATURE: Effect(-3e-4, 8e-5, 4.0, 20.0, inside=0.5),
    }
    return replace(place, effects=effects, course=Course(-0.002 * place.x, 3e-4, 1e-4, 2e-5, 3.0, 12.0, 4e4))


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Budget]:
    """A site whose sensors were held, inflated and warmed, and the budget behind it."""
    results = small_results(tmp_path_factory.mktemp("budget") / "c", Sketch(modules=2))
    assert results.budget is not None
    subjects = tuple(
        replace(subject, places=tuple(influenced(place) for place in subject.places))
        for subject in results.budget.subjects
    )
    use = UseConditions("unknown", 3600.0, 10.0, False, 4.0)
    worst = tuple(worst_in_use(subject, use) for subject in subjects)
    budget = replace(results.budget, subjects=subjects, conditions=use, worst=worst)
    site = tmp_path_factory.mktemp("site") / "budget"
    for name, content in build_site(replace(results, budget=budget)).items():
        (site / name).parent.mkdir(parents=True, exist_ok=True)
        (site / name).write_bytes(content)
    return site, budget


def shown(browser: Chrome) -> str:
    return browser.find_element(By.CSS_SELECTOR, "[data-part='u']").text


def typed(browser: Chrome, **fields: str) -> None:
    for name, text in fields.items():
        field = browser.find_element(By.CSS_SELECTOR, f"[data-part='{name}']")
        field.clear()
        field.send_keys(text)


def chosen(browser: Chrome, name: str) -> Select:
    return Select(browser.find_element(By.CSS_SELECTOR, f"[data-part='{name}']"))


def expected(budget: Budget, number: int, use: UseConditions, place: str = "") -> str:
    subject = budget.subjects[number]
    at = next((p for p in subject.places if p.name == place), None)
    found = worst_in_use(subject, use) if at is None else budget_in_use(subject, at, use)
    least = "at least " if found.is_at_least else ""
    return f"U = {least}{numbers.significant(found.combined.expanded_uncertainty * 100, 2, '%')}"


def test_u_follows_what_a_reader_sets_to_the_shown_digits(browser: Chrome, made: tuple[Path, Budget]) -> None:
    site, budget = made
    browser.get(address(site / "budget.html"))
    wait_for(lambda: shown(browser).startswith("U ="), "a first U")
    assert shown(browser) == expected(budget, 0, budget.conditions)
    cases = (
        (0, {"time": "8", "pressure": "0", "range": "10"}, "rising", "full"),
        (3, {"time": "0.5", "pressure": "25", "range": "0"}, "unknown", "zero"),
        (3, {"time": "", "pressure": "", "range": ""}, "falling", ""),
        (5, {"time": "20", "pressure": "12,5", "range": "3"}, "unknown", "mid"),
        (1, {"time": "2", "pressure": "40", "range": "6", "across": "3"}, "unknown", ""),
    )
    for number, fields, direction, place in cases:
        chosen(browser, "subject").select_by_value(str(number))
        chosen(browser, "place").select_by_value(place)
        chosen(browser, "direction").select_by_value(direction)
        typed(browser, **({"across": "0"} | fields))

        def stated(name: str, scale: float = 1.0, given: dict[str, str] = fields) -> float:
            text = given.get(name, "0").replace(",", ".")
            return float(text) * scale if text else float("nan")

        use = UseConditions(
            direction,
            stated("time", 3600.0),
            stated("pressure"),
            False,
            stated("range"),
            stated("across", 0.01),
        )
        wanted = expected(budget, number, use, place)
        wait_for(lambda w=wanted: shown(browser) == w, f"{wanted}, not {shown(browser)}")
    assert messages(browser) == []
    assert outside(requests(browser), site) == []


def test_correcting_for_pressure_leaves_what_is_not_known_of_it(
    browser: Chrome, made: tuple[Path, Budget]
) -> None:
    site, budget = made
    browser.get(address(site / "budget.html"))
    chosen(browser, "subject").select_by_value("4")
    typed(browser, pressure="28")
    browser.find_element(By.CSS_SELECTOR, "[data-part='corrected']").click()
    use = replace(budget.conditions, pressure_kpa=28.0, pressure_corrected=True)
    wait_for(lambda: shown(browser) == expected(budget, 4, use), "the corrected U")
    less = expected(budget, 4, replace(use, pressure_corrected=False))
    assert shown(browser) != less


_EVERY = """
const done = arguments[0];
const data = window.campaignPage.values.budget;
const scripts = [...new Set(data.subjects.map((s) => s.script).filter(Boolean))];
Promise.all(scripts.map((src) => new Promise((then) => {
  const script = document.createElement("script");
  script.src = src;
  script.onload = then;
  document.head.append(script);
}))).then(() => done(data.subjects.map((s) => {
  const own = s.own || window.campaignBudgets[s.script][s.sensor];
  return own.places.map((place) => {
    const found = window.campaignBudget.budgetOf(data, own, data.conditions, place.name);
    return [found.u, found.degrees, found.k, found.missing];
  });
})));
"""


def test_the_script_computes_every_budget_as_the_program_does(
    browser: Chrome, made: tuple[Path, Budget]
) -> None:
    site, budget = made
    browser.get(address(site / "budget.html"))
    found: list[list[Any]] = browser.execute_async_script(_EVERY)
    for subject, places in zip(budget.subjects, found, strict=True):
        for place, (standard, degrees, factor, missing) in zip(subject.places, places, strict=True):
            own = budget_in_use(subject, place, budget.conditions)
            assert standard == pytest.approx(own.combined.standard_uncertainty, rel=1e-5)
            assert degrees == pytest.approx(own.combined.degrees_of_freedom, rel=1e-4)
            assert factor == pytest.approx(own.combined.coverage_factor, rel=1e-5)
            assert tuple(missing) == own.unknown


def test_the_quantile_of_students_t_is_that_of_scipy(browser: Chrome, made: tuple[Path, Budget]) -> None:
    browser.get(address(made[0] / "budget.html"))
    degrees = [d * s for d, s in itertools.product((1.0, 1.7, 3.0, 6.3, 9.9), (0.6, 1, 10, 1e3, 1e6))]
    script = "return arguments[0].map((d) => window.campaignBudget.coverageFactor(d))"
    found = browser.execute_script(script, degrees)
    assert found == pytest.approx([stats.t.ppf(0.975, d) for d in degrees], rel=1e-8)


def test_marking_a_sensor_anywhere_shows_its_budget(browser: Chrome, made: tuple[Path, Budget]) -> None:
    site, budget = made
    browser.get(address(site / "budget.html", "#figure-budget-sensors?mark=M2,BC"))
    number = next(i for i, s in enumerate(budget.subjects) if (s.module, s.sensor) == ("M2", "BC"))
    wait_for(lambda: chosen(browser, "subject").first_selected_option.text == "M2 BC", "the marked sensor")
    wait_for(lambda: shown(browser) == expected(budget, number, budget.conditions), "its U")


def test_the_budget_page_has_no_accessibility_findings(browser: Chrome, made: tuple[Path, Budget]) -> None:
    browser.get(address(made[0] / "budget.html"))
    wait_for(lambda: shown(browser).startswith("U ="), "a first U")
    assert axe_violations(browser) == []
