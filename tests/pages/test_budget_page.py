"""Page 11 and what follows from it on other pages, from small folders read as any other."""

from __future__ import annotations

import re
from dataclasses import replace
from html import unescape

import orjson
import plotly.graph_objects as go
import pytest

from campaign.pages.budget import budget_page, conditions_in_words, sensor_budget
from campaign.pages.budget_data import budget_scripts
from campaign.pages.site import build_site
from tests.pages.small_campaign import Sketch, small_results


@pytest.fixture(scope="module")
def results(tmp_path_factory):
    return small_results(tmp_path_factory.mktemp("budget") / "c", Sketch())


@pytest.fixture(scope="module")
def site(results):
    return build_site(results)


def words(page: bytes) -> str:
    return re.sub(r"\s+", " ", unescape(re.sub(r"<[^>]+>", " ", page.decode())))


def test_the_page_says_u_its_factor_its_degrees_and_what_is_missing(results, site):
    text = words(site["budget.html"])
    fact = next(f for f in results.findings.findings if f.kind == "budget").facts[0]
    assert f"{fact.new * 100:.2g}" in text
    assert "at least" in text
    assert "Not known, and so not in it: drift or creep, pressure" in text
    assert "k = " in text
    assert "effective degrees of freedom" in text
    assert "Before using these figures." in text
    for word in ("safe", "certified", "approved"):
        assert word not in text.split()


def test_the_finding_leads_to_the_page_and_the_sensors_page_adds_it_up(results, site):
    index = words(site["index.html"])
    assert "In use, a new sensor is read to at least ±" in index
    assert "budget.html" in site["index.html"].decode()
    own = sensor_budget(results, "M1", "AB")
    assert own is not None
    assert sum(share for _, share in own["shares"]) == pytest.approx(1.0, abs=0.05)
    page = words(site["sensor-M1-AB.html"])
    assert "Shares of its variance:" in page
    assert "not known: drift or creep" in page
    assert sensor_budget(results, "M1", "nobody") is None


def test_every_source_leads_to_a_page_that_is_there(site):
    links = re.findall(r'data-source="([^"]+)" href="([^"#]+)(#[^"]*)?"', site["budget.html"].decode())
    assert len(links) == 14
    for _, page, anchor in links:
        assert page in site
        assert not anchor or f'id="{anchor[1:]}"' in site[page].decode()


def test_figures_are_in_the_librarys_schema_and_parts_add_up_to_u(results):
    page = budget_page(results)
    assert page is not None
    for figure in page.figures:
        go.Figure(data=list(figure.traces), layout=figure.layout)
    new = page.figures[0]
    ends: dict[float, float] = {}
    for trace in new.traces:
        for y, base, length in zip(trace["y"], trace["base"], trace["x"], strict=True):
            ends[y] = max(ends.get(y, 0.0), base + length)
    expected = [found.combined.expanded_uncertainty * 100 for found in results.budget.of_new_sensors()]
    assert [ends[float(i)] for i in range(len(expected))] == pytest.approx(expected, rel=0.03)


def test_scripts_of_modules_hold_every_sensor(results):
    scripts = budget_scripts(results.budget)
    assert sorted(scripts) == sorted(f"data/budget-module-M{n}.js" for n in range(1, 7))
    content = scripts["data/budget-module-M1.js"]
    held = orjson.loads(content[content.index(b"] = ") + 4 : -2])
    assert set(held) == {"AB", "BC"}
    place = held["AB"]["places"][1]
    own = next(s for s in results.budget.subjects if (s.module, s.sensor) == ("M1", "AB"))
    lines = own.places[1].fixed["unknown"].lines
    assert [line[1] for line in place["fixed"]["unknown"][0]] == pytest.approx(
        [line.contribution for line in lines], rel=1e-6
    )
    assert budget_scripts(None) == {}


def test_tables_are_files(site):
    head = site["tables/budget.csv"].decode().splitlines()[0]
    assert head.startswith(
        "generation,module,sensor,source,standard_uncertainty,distribution,divisor,sensitivity,"
        "contribution_strain,df,"
    )
    assert site["tables/budget_totals.csv"]


def test_conditions_are_said_in_words(results):
    use = replace(
        results.budget.conditions,
        direction="rising",
        time_since_zero_s=28800.0,
        pressure_kpa=20.0,
        rate_per_s=0.1,
    )
    said = dict(conditions_in_words(use, results.budget.reference))
    assert said["Direction of approach"] == "known: from below"
    assert said["Time since zeroing, up to"] == "8.0\u202fh"
    assert said["Pressure, up to"] == "20.0\u202fkPa"
    assert said["Range of temperature"] == "not stated"
    assert said["Rate of stretch"] == "10.0\u202f%/s"


def test_a_campaign_in_millimetres_and_one_sensor_have_their_page(tmp_path):
    sketch = Sketch(generations=("g",), modules=1, sensors=("AB",), rest_length=False)
    results = small_results(tmp_path / "c", sketch)
    site = build_site(results)
    text = words(site["budget.html"])
    assert "mm" in text
    assert "By its own line the one sensor has" in text
    assert "mm/mm" not in text


def test_without_a_line_there_is_no_page(results):
    assert budget_page(replace(results, budget=None)) is None
