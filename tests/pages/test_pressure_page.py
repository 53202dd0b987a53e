"""Page 7 and what follows from it on other pages, from a small folder read as any other."""

from __future__ import annotations

import re
import shutil
from dataclasses import replace
from html import unescape
from pathlib import Path

import numpy as np
import plotly.graph_objects as go
import pytest

from campaign.pages.figures import (
    LARGEST_NUMBER_OF_LINE_POINTS,
    LARGEST_NUMBER_OF_MARKERS,
    line_point_count,
    marker_count,
)
from campaign.pages.pressure import pressure_page
from campaign.pages.site import build_site
from campaign.pipeline import analyse, read_campaign

DESCRIPTION = """
format = 1
[campaign]
title = "Invented panels under pressure"
[recordings]
name = ["{module}_{sensor}_{kind}_r{repetition}", "{module}_{kind}_r{repetition}"]
[recordings.same]
generation = "first"
[use]
pressure = "15 kPa"
[limits]
pressure_error = "0.01"
"""

SENSORS = (("M01", "AB", 0.05), ("M01", "BC", 0.06), ("M02", "AB", 0.05), ("M02", "BC", 0.20))


def write(folder: Path, name: str, **columns: np.ndarray) -> None:
    text = ",".join(columns) + "\n"
    rows = np.column_stack(list(columns.values()))
    text += "\n".join(",".join(f"{value:.5f}" for value in row) for row in rows)
    (folder / "trials" / name).write_text(text + "\n")


def pressed(c: float, run: int, rng: np.random.Generator) -> dict[str, np.ndarray]:
    t = np.arange(0.0, 120.0, 1.0)
    strains = np.array([0.0, 0.3])[:: 1 if run == 1 else -1]
    x, p = strains[(t // 60).astype(int)], 20.0 * (1.0 - np.abs((t % 60) / 30.0 - 1.0))
    y = 100.0 + 80.0 * x + (c + 0.05 * x) * p + rng.normal(0.0, 0.02, len(t))
    return {"time_s": t, "length_mm": 60.0 * (1.0 + x), "pressure_kPa": p, "capacitance_pF": y}


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    folder = tmp_path_factory.mktemp("panels")
    (folder / "trials").mkdir()
    (folder / "campaign.toml").write_text(DESCRIPTION)
    register = [f"{m},{s},60 mm" for m, s, _ in SENSORS]
    (folder / "sensors.csv").write_text("\n".join(["module,sensor,rest_length", *register]) + "\n")
    rng = np.random.default_rng(1)
    for module, sensor, c in SENSORS:
        for run in (1, 2):
            write(folder, f"{module}_{sensor}_pressure_r{run}.csv", **pressed(c, run, rng))
        t = np.arange(0.0, 100.0, 1.0)
        warm = 23.0 + 8.0 * np.sin(2.0 * np.pi * t / 100.0)
        length = np.full(100, 60.0)
        y = 100.0 + 0.03 * (warm - 23.0) + rng.normal(0.0, 0.01, 100)
        write(
            folder,
            f"{module}_{sensor}_thermal_r1.csv",
            time_s=t,
            length_mm=length,
            temperature_C=warm,
            capacitance_pF=y,
        )
    t = np.arange(0.0, 60.0, 0.1)
    x, p = 0.3 * (1.0 - np.abs((t % 10.0) / 5.0 - 1.0)), 10.0 + 8.0 * np.sin(t / 7.0)
    y = 100.0 + 80.0 * x + (0.2 + 0.05 * x) * p
    write(
        folder,
        "M02_BC_cyclic_r1.csv",
        time_s=t,
        length_mm=60.0 * (1.0 + x),
        pressure_kPa=p,
        capacitance_pF=y,
    )
    return folder


@pytest.fixture(scope="module")
def results(folder):
    return analyse(read_campaign(folder))


@pytest.fixture(scope="module")
def site(results) -> dict[str, str]:
    return {
        name: data.decode() for name, data in build_site(results).items() if name.endswith(("html", "csv"))
    }


def words(html: str) -> str:
    return re.sub(r"\s+", " ", unescape(re.sub(r"<[^>]+>", " ", html)))


def test_the_page_answers_what_it_asks(site):
    page = words(site["pressure.html"])
    assert "7.1 Signal against pressure" in page
    assert "swept over 0–20 kPa" in page
    assert "15.0 kPa, the pressure that the campaign’s description names" in page
    assert "M02 BC most" in page
    assert "No. Its" in page
    assert "bow the skin and lengthen it truly" in page
    assert "is not a burst test" in page
    assert "Trials of other kinds logged pressure too" in page
    assert "Temperature (first)" in page
    assert not re.search(r"\bnan\b|None|inf\b", page)


def test_findings_and_limits_name_the_sensor_that_pressure_moves(site):
    page = words(site["index.html"])
    assert "15.0 kPa in the actuators reads as up to 4.0 % strain" in page
    assert "exceeds the limit of 1.0 %" in page or "exceed the limit of 1.0 %" in page
    assert "Pressure error of a new sensor of first" in page
    assert 'href="sensor-M02-BC.html"' in site["index.html"]


def test_pages_of_sensors_and_modules_carry_it(site):
    page = words(site["sensor-M02-BC.html"])
    assert "Pressure and other influences" in page
    assert "pF/kPa" in page
    assert "% of zero signal/K" in page
    assert "figure-pressure" in site["module-M02.html"]


def test_tables_are_files_with_their_columns(site):
    pressure = site["tables/pressure.csv"].splitlines()
    assert pressure[0].startswith(
        "generation,module,sensor,per_kpa,low,high,per_kpa_strain,strain_error_per_kpa,"
        "residual_sd_before,residual_sd_after,"
    )
    assert len(pressure) == 5
    assert [row.split(",")[:3] for row in pressure[1:]] == [["first", m, s] for m, s, _ in SENSORS]
    influences = site["tables/influences.csv"].splitlines()
    assert influences[0].startswith(
        "generation,module,sensor,influence,coefficient,low,high,unit,strain_equivalent,"
    )
    for name in ("pressure_sweeps", "pressure_spread", "pressure_corrections", "pressure_compensated"):
        assert f"tables/{name}.csv" in site


def test_every_figure_is_valid_and_light(results):
    page = pressure_page(results)
    names = [figure.name for figure in page.figures]
    assert names[:4] == ["sweeps", "worst", "pressure-hysteresis", "sensitivity"]
    for figure in page.figures:
        go.Figure(data=list(figure.traces), layout=figure.layout)
        assert line_point_count(figure) <= LARGEST_NUMBER_OF_LINE_POINTS
        assert marker_count(figure) <= LARGEST_NUMBER_OF_MARKERS
        assert figure.alternative
        assert figure.data is not None or figure.table


def test_a_campaign_without_influences_has_no_page_7(results):
    assert pressure_page(replace(results, pressure=None, influences=None)) is None


def test_pressure_at_one_unknown_length_is_told_in_signal_units(tmp_path):
    (tmp_path / "trials").mkdir()
    (tmp_path / "campaign.toml").write_text(DESCRIPTION.replace('[limits]\npressure_error = "0.01"', ""))
    rng = np.random.default_rng(2)
    columns = pressed(0.05, 1, rng)
    del columns["length_mm"]
    columns = {name: values[:60] for name, values in columns.items()}
    write(tmp_path, "M01_AB_pressure_r1.csv", **columns)
    found = analyse(read_campaign(tmp_path))
    page = words(build_site(found)["pressure.html"].decode())
    assert "no slope of signal against length is known" in page
    assert "too little to tell a difference by" in page
    assert "not identifiable from this design" in page
    assert not re.search(r"\bnan\b|None|inf\b", page)


NODES = """
[[columns]]
header = "{node}_x"
quantity = "node_x"
unit = "mm"
[[columns]]
header = "{node}_y"
quantity = "node_y"
unit = "mm"
[[columns]]
header = "C_{sensor}"
quantity = "signal"
unit = "pF"
"""


def test_a_layout_trial_that_logs_pressure_is_shown_before_and_after(folder, tmp_path):
    panels = tmp_path / "panels"
    shutil.copytree(folder, panels)
    (panels / "campaign.toml").write_text(DESCRIPTION + NODES)
    ends = {"AB": ("A", "B"), "BC": ("B", "C")}
    register = [f"{m},{s},60 mm,{ends[s][0]},{ends[s][1]}" for m, s, _ in SENSORS]
    (panels / "sensors.csv").write_text("\n".join(["module,sensor,rest_length,from,to", *register]) + "\n")
    t = np.arange(0.0, 60.0)
    x, p = 0.1 + 0.1 * np.sin(t / 9.0), 10.0 + 8.0 * np.cos(t / 3.0)
    length, still = 60.0 * (1.0 + x), np.zeros(len(t))
    places = {"A_x": still, "A_y": still, "B_x": length, "B_y": still, "C_x": length, "C_y": length}
    signals = {f"C_{s}": 100.0 + 80.0 * x + (c + 0.05 * x) * p for m, s, c in SENSORS if m == "M01"}
    write(panels, "M01_layout_r1.csv", time_s=t, pressure_kPa=p, **places, **signals)
    results = analyse(read_campaign(panels))
    assert results.findings.scope.not_analysed == ()
    assert results.layout is None
    assert "no-geometry" in {notice.code for notice in results.notices}
    assert results.pressure is not None
    shown = results.pressure.compensated.set_index(["kind", "sensor"]).loc["layout"]
    assert sorted(shown.index) == ["AB", "BC"]
    # without noise, what is left is what the coefficients are uncertain by
    assert (shown["before"] > 0.2).all()
    assert (shown["after"] < 0.1 * shown["before"]).all()
    assert "layout" in words(build_site(results)["pressure.html"].decode())
