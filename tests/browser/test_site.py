"""The demo site in a real browser, from disk: everything a reader does, nothing that reaches out."""

from __future__ import annotations

import csv
import dataclasses
import importlib.resources
import io
import json
import re
from pathlib import Path
from typing import Any

import pytest
from selenium.webdriver import ActionChains, Chrome, Keys
from selenium.webdriver.common.by import By

from campaign.methods.inverse_reading import ReadingModel, read_reference
from campaign.pages import palette
from campaign.pages.brief import brief_bytes, write_brief
from campaign.pages.notes import Notes
from campaign.pages.site import site_frame, site_pages
from tests.browser.chromium import address, messages, outside, requests, wait_for
from tests.pages.small_campaign import Sketch, small_results

pytestmark = pytest.mark.browser

KINDS = (
    "index.html",
    "calibration.html",
    "variance.html",
    "residuals.html",
    "calibration_effort.html",
    "hysteresis.html",
    "drift.html",
    "pressure.html",
    "generations.html",
    "planning.html",
    "recordings.html",
    "method.html",
    "method-lines.html",
    "provenance.html",
    "module-M01.html",
    "sensor-M01-AB.html",
)
"""One page of every kind (notes are added by name)."""

LIVE = "return [...document.querySelectorAll('figure[data-figure]')].map(f => f.dataset.state || '')"


def pages_of(site: Path) -> list[str]:
    return sorted(path.name for path in site.glob("*.html"))


def one_of_every_kind(site: Path) -> list[str]:
    return [*KINDS, *[path.name for path in sorted(site.glob("note-*.html"))[:1]]]


def make_live(browser: Chrome) -> int:
    """Scroll past every figure until all are live; return how many there are."""
    figures = browser.find_elements(By.CSS_SELECTOR, "figure[data-figure]")
    for figure in figures:
        browser.execute_script("arguments[0].scrollIntoView()", figure)
        wait_for(lambda f=figure: f.get_attribute("data-state") == "live", "a live figure")
    return len(figures)


def colour(browser: Chrome, selector: str, name: str) -> str:
    """A computed colour as #rrggbb."""
    script = "return getComputedStyle(document.querySelector(arguments[0])).getPropertyValue(arguments[1])"
    channels = re.findall(r"\d+", browser.execute_script(script, selector, name))[:3]
    return "#" + "".join(f"{int(c):02x}" for c in channels)


def emulate(browser: Chrome, **features: str) -> None:
    listed = [{"name": name.replace("_", "-"), "value": value} for name, value in features.items()]
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"features": listed})


def saved(downloads: Path, ending: str) -> Path:
    """The file that the browser saved, once it is whole."""
    return wait_for(  # type: ignore[no-any-return]
        lambda: next((p for p in downloads.iterdir() if p.name.endswith(ending) and p.stat().st_size), None),
        f"a saved file that ends in {ending}",
    )


def test_every_page_opens_with_no_message_and_asks_for_nothing_outside(browser: Chrome, site: Path) -> None:
    pages = pages_of(site)
    assert len(pages) > 80
    for name in pages:
        browser.get(address(site / name))
        assert browser.find_element(By.TAG_NAME, "h1").text
        assert messages(browser) == [], name
        asked = requests(browser)
        assert any(url.endswith(name) for url in asked)
        assert outside(asked, site) == [], name


@pytest.mark.parametrize(
    "name", [name for name in KINDS if not name.startswith(("recordings", "provenance", "method"))]
)
def test_figures_come_to_life_and_draw_what_the_data_script_holds(
    browser: Chrome, site: Path, name: str
) -> None:
    browser.get(address(site / name))
    count = make_live(browser)
    drawn = browser.execute_script(
        """return [...document.querySelectorAll('figure[data-figure]')].map(function (figure) {
             const spec = window.campaignPage.figures[figure.dataset.figure];
             const live = figure.querySelector('.live');
             const paths = live.querySelectorAll('.trace path, .bars path, .point path').length;
             return [spec.traces.length, live._fullData.length, paths,
                     live.querySelectorAll('.modebar-btn, .modebar a').length];
           })"""
    )
    assert len(drawn) == count
    for written, shown, paths, buttons in drawn:
        assert shown == written
        assert paths > 0
        assert buttons == 0
    assert messages(browser) == []
    assert outside(requests(browser), site) == []


@pytest.mark.parametrize("name", ["sensor-M01-AB.html", "index.html", "calibration.html", "hysteresis.html"])
def test_nothing_shifts_as_figures_come_to_life(browser: Chrome, site: Path, name: str) -> None:
    browser.get(address(site / name))
    browser.execute_script(
        """window.shifts = 0;
           new PerformanceObserver(list => { for (const e of list.getEntries()) window.shifts += e.value; })
             .observe({ type: 'layout-shift', buffered: true });"""
    )
    has_figures = browser.execute_script(LIVE)
    wait_for(lambda: not has_figures or "live" in browser.execute_script(LIVE), "a live figure")
    assert browser.execute_script("return window.shifts") < 0.01


def test_a_point_leads_to_its_trial(browser: Chrome, site: Path) -> None:
    browser.get(address(site / "residuals.html"))
    figure = browser.find_element(By.CSS_SELECTOR, "figure[data-figure]")
    browser.execute_script("arguments[0].scrollIntoView({block: 'center'})", figure)
    wait_for(lambda: figure.get_attribute("data-state") == "live", "a live figure")
    place = browser.execute_script(
        """const live = arguments[0].querySelector('.live');
           const data = live._fullData.find(t => t.customdata && t.mode === 'markers');
           const axis = reference => live._fullLayout[reference[0] + 'axis' + reference.slice(1)];
           const x = axis(data.xaxis), y = axis(data.yaxis);
           const box = live.getBoundingClientRect();
           const across = box.left + x._offset + x.d2p(data.x[0]);
           return [across, box.top + y._offset + y.d2p(data.y[0]), data.customdata[0]];""",
        figure,
    )
    assert place[2].startswith("sensor-")
    actions = ActionChains(browser, duration=0)
    actions.w3c_actions.pointer_action.move_to_location(round(place[0]), round(place[1]))
    actions.pause(0.4)
    actions.click().perform()
    wait_for(lambda: "#trial-" in browser.current_url, "the trial's section")
    anchor = browser.current_url.split("#")[1]
    section = browser.find_element(By.ID, anchor)
    assert section.is_displayed()


def test_the_data_table_leads_to_trials_by_keyboard(browser: Chrome, site: Path) -> None:
    browser.get(address(site / "sensor-M01-AB.html"))
    button = browser.find_element(By.XPATH, "//figure//button[text()='data']")
    button.send_keys(Keys.ENTER)
    rows = browser.find_elements(By.CSS_SELECTOR, "figure .data-table tbody tr")
    assert len(rows) > 5
    assert button.get_attribute("aria-expanded") == "true"
    link = browser.find_element(By.CSS_SELECTOR, "figure .data-table a")
    assert "#trial-" in str(link.get_attribute("href"))
    heads = [head.text for head in browser.find_elements(By.CSS_SELECTOR, "figure .data-table th")]
    assert any("%" in head for head in heads)
    assert any("pF" in head for head in heads)


def test_the_skin_map_leads_to_sensors_and_modules_and_shows_what_is_picked(
    browser: Chrome, site: Path
) -> None:
    browser.get(address(site / "index.html"))
    before = [e.get_attribute("stroke") for e in browser.find_elements(By.CSS_SELECTOR, "#skin-map .paint")]
    picker = browser.find_element(By.CSS_SELECTOR, "#skin-map select")
    options = picker.find_elements(By.TAG_NAME, "option")
    next(option for option in options if not option.is_selected()).click()
    after = [e.get_attribute("stroke") for e in browser.find_elements(By.CSS_SELECTOR, "#skin-map .paint")]
    assert before != after
    edge = browser.find_element(By.CSS_SELECTOR, "#skin-map a.edge[data-module='M02'][data-sensor='AB']")
    shown = browser.find_element(By.CSS_SELECTOR, "#skin-map option:checked").text
    assert shown in str(browser.find_element(By.ID, "skin-map").get_attribute("aria-label"))
    value = browser.execute_script(
        "const tile = arguments[0].closest('svg');"
        "const at = [...tile.querySelectorAll('.edge')].indexOf(arguments[0]);"
        "return tile.querySelectorAll('.values text')[at].textContent",
        edge,
    )
    assert str(edge.get_attribute("aria-label")).startswith(f"M02 AB: {value}")
    assert str(edge.find_element(By.TAG_NAME, "title").get_attribute("textContent")).endswith(shown)
    edge.send_keys(Keys.ENTER)
    wait_for(lambda: browser.current_url.endswith("sensor-M02-AB.html"), "the sensor's page")
    browser.back()
    browser.find_element(By.CSS_SELECTOR, "#skin-map a.module[data-module='M02'] text").click()
    wait_for(lambda: browser.current_url.endswith("module-M02.html"), "the module's page")
    here = browser.find_element(By.CSS_SELECTOR, ".here a.edge")
    here.send_keys(Keys.ENTER)
    wait_for(lambda: "/sensor-M02-" in browser.current_url, "a sensor's page from the small map")


def test_tables_sort_by_value_and_back(browser: Chrome, site: Path) -> None:
    browser.get(address(site / "calibration.html"))
    table = browser.find_element(By.CSS_SELECTOR, "table[data-table='sensor_lines']")
    heads = table.find_elements(By.CSS_SELECTOR, "thead th")
    column = next(i for i, head in enumerate(heads) if "n" in str(head.get_attribute("class")).split())
    values = f"return [...arguments[0].tBodies[0].rows].map(r => r.cells[{column}].textContent)"
    for way, reverse in (("ascending", False), ("descending", True)):
        heads[column].find_element(By.TAG_NAME, "button").click()
        assert heads[column].get_attribute("aria-sort") == way
        shown = browser.execute_script(values, table)
        found = [re.match(r"[\s\u2007]*([-−]?)([\d.]+)", text) for text in shown]
        numbers = [float(f"{'-' * len(m[1])}{m[2]}") for m in found if m]
        assert len(numbers) > 50  # all rows, also those that the page did not show at first
        assert numbers == sorted(numbers, reverse=reverse)
        assert found[len(numbers) :] == [None] * (len(found) - len(numbers))


def test_tables_and_figures_download_as_csv(browser: Chrome, site: Path, downloads: Path) -> None:
    browser.get(address(site / "calibration.html"))
    link = browser.find_element(By.CSS_SELECTOR, "section.table .tools a[download]")
    browser.execute_script("arguments[0].click()", link)
    whole = saved(downloads, ".csv")
    assert whole.read_bytes() == (site / "tables" / whole.name).read_bytes()
    rows = list(csv.DictReader(io.StringIO(whole.read_text(encoding="utf-8"))))
    assert {row["module"] for row in rows} >= {"M01", "M12"}


def test_figures_are_saved_as_vectors_and_as_a_picture_for_print(
    browser: Chrome, site: Path, downloads: Path
) -> None:
    browser.get(address(site / "sensor-M01-AB.html"))
    wait_for(lambda: "live" in browser.execute_script(LIVE), "a live figure")
    for words, ending in (("SVG", ".svg"), ("PNG", ".png")):
        button = browser.find_element(By.XPATH, f"//figure//button[text()='{words}']")
        browser.execute_script("arguments[0].click()", button)
        content = saved(downloads, ending).read_bytes()
        if ending == ".svg":
            assert content.startswith(b"<svg")
            assert b"Strain" in content
        else:
            assert content.startswith(b"\x89PNG")
            width = int.from_bytes(content[16:20], "big")
            assert abs(width - 2126) <= 2  # 180 mm at 300 dots an inch
    assert messages(browser) == []
    assert outside(requests(browser), site) == []


def test_a_link_opens_exactly_the_view_and_the_marks(browser: Chrome, site: Path) -> None:
    browser.get(address(site / "calibration.html"))
    figure = browser.find_element(By.CSS_SELECTOR, "figure[data-figure]")
    wait_for(lambda: figure.get_attribute("data-state") == "live", "a live figure")
    browser.execute_script(
        "window.Plotly.relayout(arguments[0].querySelector('.live'), {'xaxis.range': [5, 21.5]})", figure
    )
    browser.execute_script("window.campaign.choose('M03', '')")
    browser.execute_script("arguments[0].click()", figure.find_element(By.XPATH, ".//button[text()='link']"))
    link = browser.current_url
    assert "x=5,21.5" in link
    browser.get("about:blank")
    browser.get(link)
    figure = browser.find_element(By.CSS_SELECTOR, "figure[data-figure]")
    wait_for(lambda: figure.get_attribute("data-state") == "live", "a live figure")
    shown = browser.execute_script("return arguments[0].querySelector('.live').layout.xaxis.range", figure)
    assert shown == [5, 21.5]
    assert browser.find_element(By.CSS_SELECTOR, ".chooser select").get_attribute("value") == "M03"


def test_choosing_a_module_marks_it_in_tables_and_figures(browser: Chrome, site: Path) -> None:
    browser.get(address(site / "calibration.html"))
    figure = browser.find_element(By.CSS_SELECTOR, "figure[data-figure]")
    wait_for(lambda: figure.get_attribute("data-state") == "live", "a live figure")
    chooser = browser.find_element(By.CSS_SELECTOR, ".chooser select")
    chooser.find_element(By.CSS_SELECTOR, "option[value='M02']").click()
    rows = browser.find_elements(By.CSS_SELECTOR, "table[data-table='sensor_lines'] tbody tr")
    for row in rows:
        marked = "marked" in str(row.get_attribute("class"))
        assert marked == (row.get_attribute("data-module") == "M02")
    opacities = browser.execute_script(
        """return arguments[0].querySelector('.live')._fullData.filter(t => t.meta)
             .map(t => [t.meta.module, t.opacity])""",
        figure,
    )
    assert {module for module, opacity in opacities if opacity > 0.5} == {"M02"}


def record_of(site: Path) -> dict[str, Any]:
    return json.loads((site / "records" / "sensor-M01-AB-both.json").read_text(encoding="utf-8"))  # type: ignore[no-any-return]


def read_reference_of(record: dict[str, Any], signal: float, readings: int) -> tuple[float, float, float]:
    """What the record says of a signal: x and its 95 % limits."""
    names = {field.name for field in dataclasses.fields(ReadingModel)} - {"t"}
    model = ReadingModel(**{name: record[name] for name in names}, t=record["t_quantile_975"])
    limits = (record["signal_low"], record["signal_high"])
    read = read_reference(model, signal, readings, signal_low=limits[0], signal_high=limits[1])
    return read.estimate, read.low, read.high


def shown_interval(text: str) -> tuple[float, float, float]:
    found = re.findall(r"-?\d+\.?\d*", text.replace("\u2212", "-"))
    return float(found[0]), float(found[1]), float(found[2])


@pytest.mark.parametrize("share", [0.05, 0.5, 0.95])
def test_the_calculator_agrees_with_the_record(browser: Chrome, site: Path, share: float) -> None:
    record = record_of(site)
    signal = record["signal_low"] + share * (record["signal_high"] - record["signal_low"])
    browser.get(address(site / "sensor-M01-AB.html"))
    calculator = browser.find_element(By.CSS_SELECTOR, "[data-calculator]")
    field = calculator.find_element(By.CSS_SELECTOR, "[data-part='signal']")
    field.clear()
    field.send_keys(repr(signal))
    for part, readings in (("one-x", 1), ("mean-x", 10)):
        expected = read_reference_of(record, signal, readings)
        text = calculator.find_element(By.CSS_SELECTOR, f"[data-part='{part}']").text
        decimals = len(re.findall(r"\d+\.(\d+)", text)[0])
        for value, wanted in zip(shown_interval(text), expected, strict=True):
            assert abs(value - 100 * wanted) <= 0.51 * 10.0**-decimals


def test_the_ends_of_the_range_that_the_calculator_shows_are_inside(browser: Chrome, site: Path) -> None:
    browser.get(address(site / "sensor-M01-AB.html"))
    calculator = browser.find_element(By.CSS_SELECTOR, "[data-calculator]")
    field = calculator.find_element(By.CSS_SELECTOR, "[data-part='signal']")
    for end in re.findall(r"[\d.]+", calculator.find_element(By.CSS_SELECTOR, "[data-part='range']").text):
        field.clear()
        field.send_keys(end)
        assert "[" in calculator.find_element(By.CSS_SELECTOR, "[data-part='one-x']").text


def test_the_calculator_says_when_a_signal_lies_outside(browser: Chrome, site: Path) -> None:
    record = record_of(site)
    browser.get(address(site / "sensor-M01-AB.html"))
    field = browser.find_element(By.CSS_SELECTOR, "[data-calculator] [data-part='signal']")
    field.clear()
    field.send_keys(str(record["signal_high"] + 10))
    assert browser.find_element(By.CSS_SELECTOR, "[data-part='one-x']").text == "outside calibration"


def test_with_scripts_off_text_tables_pictures_and_files_remain(browser: Chrome, site: Path) -> None:
    browser.execute_cdp_cmd("Emulation.setScriptExecutionDisabled", {"value": True})
    for name in one_of_every_kind(site):
        browser.get(address(site / name))
        assert browser.find_element(By.TAG_NAME, "h1").text
        assert browser.find_elements(By.CSS_SELECTOR, ".tools button, .live") == []
        for figure in browser.find_elements(By.CSS_SELECTOR, "figure[data-figure]"):
            picture = figure.find_element(By.CSS_SELECTOR, ".plot > svg[role='img']")
            assert picture.is_displayed()
            assert picture.get_attribute("aria-label")
            target = str(figure.find_element(By.CSS_SELECTOR, ".tools a").get_dom_attribute("href"))
            assert (site / target).is_file()
    browser.get(address(site / "index.html"))
    assert browser.find_elements(By.CSS_SELECTOR, "#skin-map a.edge")


FOCUSABLE_IN_LIVE = ", ".join(
    f".live {kind}" for kind in ("a[href]", "button", "input", "select", "textarea", "[tabindex]")
)


def axe_violations(browser: Chrome, **options: Any) -> list[str]:
    """What axe-core finds on the page that is open, live pictures left out: they are hidden from readers.

    Nothing in them may be reached by keys, which is asked of the page itself: it costs nothing, while axe
    would look at each of thousands of marks.
    """
    reached = "return document.querySelectorAll(arguments[0]).length"
    assert browser.execute_script(reached, FOCUSABLE_IN_LIVE) == 0
    package = importlib.resources.files("axe_selenium_python")
    browser.execute_script((package / "node_modules" / "axe-core" / "axe.min.js").read_text(encoding="utf-8"))
    found = browser.execute_async_script(
        """const done = arguments[arguments.length - 1];
           const said = v => v.id + ': ' + v.help + ' at ' + v.nodes.slice(0, 3).map(n => n.target).join(' ');
           axe.run({exclude: [['.live > *']]}, arguments[0])
             .then(r => done(r.violations.map(said)), e => done([String(e)]));""",
        {"preload": False, "resultTypes": ["violations"], **options},
    )
    return list(found)


def test_the_dark_scheme_is_followed_by_page_and_pictures(browser: Chrome, site: Path) -> None:
    emulate(browser, prefers_color_scheme="dark")
    browser.get(address(site / "calibration.html"))
    assert colour(browser, "body", "background-color") == palette.DARK[palette.PAPER]
    first = palette.GENERATION_STYLES[0].colour
    assert colour(browser, f"figure svg [stroke='{first}']", "stroke") == palette.DARK[first]
    figure = browser.find_element(By.CSS_SELECTOR, "figure[data-figure]")
    wait_for(lambda: figure.get_attribute("data-state") == "live", "a live figure")
    used = browser.execute_script("return JSON.stringify(arguments[0].querySelector('.live').data)", figure)
    assert palette.DARK[first] in used
    assert first not in used


@pytest.mark.parametrize("width", [390, 2560])
def test_no_page_scrolls_sideways(browser: Chrome, site: Path, width: int) -> None:
    size = {"width": width, "height": 900, "deviceScaleFactor": 1, "mobile": width < 500}
    browser.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", size)
    for name in one_of_every_kind(site):
        browser.get(address(site / name))
        assert browser.execute_script("return document.documentElement.scrollWidth") <= width, name


def test_keyboard_alone_reaches_content_first(browser: Chrome, site: Path) -> None:
    browser.get(address(site / "calibration.html"))
    browser.find_element(By.TAG_NAME, "body").send_keys(Keys.TAB)
    skip = browser.switch_to.active_element
    assert skip.text == "Skip to the content"
    assert skip.is_displayed()
    skip.send_keys(Keys.ENTER)
    assert browser.current_url.endswith("#content")


def test_print_shows_the_still_pictures_and_no_tools(browser: Chrome, site: Path) -> None:
    browser.get(address(site / "sensor-M01-AB.html"))
    wait_for(lambda: "live" in browser.execute_script(LIVE), "a live figure")
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": "print"})
    assert not any(e.is_displayed() for e in browser.find_elements(By.CSS_SELECTOR, ".tools, .strip, .live"))
    opacity = browser.find_element(By.CSS_SELECTOR, ".plot > svg").value_of_css_property("opacity")
    assert float(opacity) == 1.0
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"media": ""})


def test_the_policy_stops_what_is_not_the_sites_own(browser: Chrome, site: Path) -> None:
    browser.get(address(site / "index.html"))
    browser.execute_script(
        """const script = document.createElement('script');
           script.textContent = 'window.ran = 1';
           document.body.append(script);
           const picture = new Image();
           picture.src = 'https://example.invalid/x.png';
           document.body.append(picture);
           document.body.insertAdjacentHTML('beforeend', '<b id=dressed style="color: red">x</b>');"""
    )
    wait_for(lambda: any("Content Security Policy" in message for message in messages(browser)), "a refusal")
    assert browser.execute_script("return window.ran") is None
    assert colour(browser, "#dressed", "color") != "#ff0000"


BUDGET_PAGE, BUDGET_DATA, BUDGET_SITE = 60_000, 120_000, 40_000_000


def test_the_site_keeps_its_budgets(site: Path) -> None:
    assert sum(path.stat().st_size for path in site.rglob("*") if path.is_file()) < BUDGET_SITE
    for folder, pattern, budget in (("", "*.html", BUDGET_PAGE), ("data", "*.js", BUDGET_DATA)):
        sizes = {path.stem: path.stat().st_size for path in (site / folder).glob(pattern)}
        assert {name: size for name, size in sizes.items() if size >= budget} == {}


MEAN_BYTES_OF_A_SENSOR = {".": 42_000, "data": 28_000, "figures": 24_000}
"""Largest mean size of what a sensor's page adds to a site, by folder: a large site grows by this."""


def test_a_sensor_adds_no_more_than_its_share_to_a_site(site: Path) -> None:
    sensors = len(list(site.glob("sensor-*.html")))
    assert sensors > 50
    added = {
        folder: sum(path.stat().st_size for path in (site / folder).glob("sensor-*")) / sensors
        for folder in MEAN_BYTES_OF_A_SENSOR
    }
    assert {f: size for f, size in added.items() if size >= MEAN_BYTES_OF_A_SENSOR[f]} == {}
    chosen = [*(site / "data").glob("loops-*.js"), *(site / "data").glob("residuals_*.js")]
    assert max(path.stat().st_size for path in chosen) < 50_000


def test_a_long_table_shows_its_other_rows_when_asked_and_when_sorted(browser: Chrome, site: Path) -> None:
    browser.get(address(site / "calibration.html"))
    section = browser.find_element(By.ID, "table-sensor_lines")
    rows = "return arguments[0].querySelectorAll('tbody tr').length"
    few = browser.execute_script(rows, section)
    button = section.find_element(By.CSS_SELECTOR, ".tools button")
    more = int(re.findall(r"\d+", button.text)[0])
    browser.execute_script("arguments[0].click()", button)
    assert browser.execute_script(rows, section) == few + more
    assert section.find_elements(By.CSS_SELECTOR, ".tools button") == []
    first, last = (section.find_elements(By.CSS_SELECTOR, "tbody tr")[i] for i in (0, -1))
    assert [c.tag_name for c in first.find_elements(By.CSS_SELECTOR, "*")] == [
        c.tag_name for c in last.find_elements(By.CSS_SELECTOR, "*")
    ]
    browser.get(address(site / "variance.html"))
    section = browser.find_element(By.ID, "table-variance_components")
    few = browser.execute_script(rows, section)
    browser.execute_script("arguments[0].click()", section.find_element(By.CSS_SELECTOR, "thead button"))
    assert browser.execute_script(rows, section) > few


def test_an_old_address_of_a_definition_leads_on_to_it(browser: Chrome, site: Path) -> None:
    browser.get(address(site / "method.html") + "#lack-of-fit")
    entry = browser.find_element(By.ID, "lack-of-fit")
    assert entry.is_displayed()
    browser.get(entry.find_element(By.TAG_NAME, "a").get_attribute("href"))
    assert browser.find_element(By.ID, "lack-of-fit").tag_name == "section"


@pytest.fixture(scope="session")
def brief(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The brief of a small campaign."""
    folder = tmp_path_factory.mktemp("mail")
    results = small_results(folder / "campaign", Sketch(modules=2, runs=2))
    file = folder / "brief of the campaign.html"
    write_brief(brief_bytes(site_frame(results), site_pages(results, Notes())), file)
    return file


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_the_brief_opens_with_its_style_and_asks_for_nothing(
    browser: Chrome, brief: Path, scheme: str
) -> None:
    emulate(browser, prefers_color_scheme=scheme)
    browser.get(address(brief))
    assert messages(browser) == []
    assert len(requests(browser)) == 1
    paper = palette.DARK[palette.PAPER] if scheme == "dark" else palette.PAPER
    assert colour(browser, "body", "background-color") == paper
    assert len(browser.find_elements(By.CSS_SELECTOR, "figure svg[role='img']")) >= 3
    assert browser.execute_script("return document.links.length + document.scripts.length") == 0
    assert browser.execute_script("return document.documentElement.scrollWidth") <= 1440


def test_the_brief_is_clean_for_axe_and_fits_a_telephone(browser: Chrome, brief: Path) -> None:
    size = {"width": 390, "height": 900, "deviceScaleFactor": 1, "mobile": True}
    browser.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", size)
    browser.get(address(brief))
    assert browser.execute_script("return document.documentElement.scrollWidth") <= 390
    assert axe_violations(browser) == []
