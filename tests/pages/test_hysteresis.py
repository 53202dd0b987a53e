"""Page 5 and the sections of sensors: what a reader of loops is shown, in strain and in millimetres."""

from __future__ import annotations

import csv
import io
import json
import re
import shutil
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import plotly.graph_objects as go
import pytest

from campaign.analyses.endurance import analyse_endurance
from campaign.analyses.hysteresis import LOOP_COLUMNS, analyse_hysteresis
from campaign.analyses.loop_findings import SettledLoops, loop_findings
from campaign.analyses.results import CampaignResults
from campaign.pages.contract_columns import CONTRACT_COLUMNS
from campaign.pages.hysteresis import hysteresis_page
from campaign.pages.loop_figures import departures, loop_scripts
from campaign.pages.page_data import unfolded_traces, unpacked_lists
from campaign.pages.site import build_site
from campaign.pipeline import analyse, read_campaign
from campaign.trials.endurance import features_of_endurance
from tests.analyses.loop_campaign import Truth, cyclic_campaign
from tests.trials.test_cyclic import endurance

REAL = Path(__file__).parents[1] / "campaigns" / "real"


@pytest.fixture(scope="module")
def seals() -> CampaignResults:
    return analyse(read_campaign(REAL / "pneumatic_seals"))


@pytest.fixture(scope="module")
def site(seals: CampaignResults) -> dict[str, bytes]:
    return build_site(seals)


@pytest.fixture(scope="module")
def many(seals: CampaignResults) -> CampaignResults:
    """The same campaign with the loops of 60 sensors at two rates, and endurance."""
    features = cyclic_campaign(Truth(softening=0.03), 1, modules=12, sensors=5, runs=1, periods=(10.0, 2.0))
    found, lasted = (
        analyse_hysteresis(features, None),
        analyse_endurance([features_of_endurance(endurance(900.0))]),
    )
    assert found is not None
    findings = replace(seals.findings, findings=loop_findings(found, lasted, seals.limits))
    return replace(seals, hysteresis=found, endurance=lasted, findings=findings)


def script(content: bytes) -> Mapping[str, Any]:
    text = content.decode("utf-8")
    return json.loads(
        text[text.index("] = ") + 4 if text.startswith("(") else text.index("= ") + 2 :].rstrip(";\n")
    )


def test_the_seal_has_a_page_of_loops_in_millimetres(site: dict[str, bytes]) -> None:
    page = site["hysteresis.html"].decode("utf-8")
    assert "Elongation / mm" in page
    assert "% of range" in page
    assert "a time shift between the channels" in page
    assert re.search(r"\bnan\b", page, re.IGNORECASE) is None
    rows = list(csv.DictReader(io.StringIO(site["tables/loops.csv"].decode("utf-8"))))
    assert len(rows) == 20
    assert {"width_elongation_mm", "at_elongation_mm", "rate_per_s"} <= set(rows[0])
    assert [row["unit"] for row in rows] == ["N"] * 20


def test_findings_say_how_wide_and_lead_to_the_page(site: dict[str, bytes]) -> None:
    page = site["index.html"].decode("utf-8")
    assert "Settled loops are" in page
    assert 'href="hysteresis.html"' in page
    assert "not yet analysed" not in page


def test_a_run_set_aside_by_the_register_is_put_back_to_compare(tmp_path: Path) -> None:
    folder = shutil.copytree(REAL / "pneumatic_seals", tmp_path / "seals")
    whole = analyse(read_campaign(folder)).hysteresis
    assert whole is not None
    (folder / "trials.csv").write_text(
        "file,use,reason\n1_O-ring257_1bar.csv,no,set aside to see it put back\n"
    )
    results = analyse(read_campaign(folder))
    assert results.hysteresis is not None
    assert set(results.hysteresis.loops["repetition"]) == {3}
    [facts] = [finding.facts for finding in results.findings.findings if finding.kind == "loops"]
    [fact] = facts
    assert isinstance(fact, SettledLoops)
    assert fact.figure.put_back == whole.sensors["width_percent_fso"].item()
    assert fact.figure.mean == results.hysteresis.sensors["width_percent_fso"].item()
    words = re.sub(r"\s+", " ", re.sub(r"<[^>]+>", "", build_site(results)["index.html"].decode("utf-8")))
    assert "With everything that was set aside put back the mean is" in words


def test_loops_that_do_not_settle_are_not_called_settled() -> None:
    words = build_site(analyse(read_campaign(REAL / "pneumatic_seals_3bar")))["index.html"].decode("utf-8")
    assert "No run settles, and the last cycles stand in" in words
    assert "Settled loops are" not in words


def test_the_sensor_has_a_section_with_its_loops(site: dict[str, bytes]) -> None:
    [name] = [n for n in site if n.startswith("sensor-") and n.endswith(".html")]
    page = site[name].decode("utf-8")
    assert "Its loops" in page
    assert 'data-figure="loops"' in page


def test_tables_keep_the_contract() -> None:
    assert LOOP_COLUMNS[: len(CONTRACT_COLUMNS["loops"])] == CONTRACT_COLUMNS["loops"]


def test_every_loop_drawn_can_be_picked_and_is_a_sound_figure(many: CampaignResults) -> None:
    page = hysteresis_page(many)
    assert page is not None
    scripts = loop_scripts(many.hysteresis)
    assert len(scripts) == 60
    picker: Any = page.data["loops"]
    assert sorted(entry["script"] for entry in picker["sensors"]) == sorted(scripts)
    for content in list(scripts.values())[:3]:
        loops = script(content)
        assert len(loops["rates"]) == 2
        traces, lists = unfolded_traces(loops), unpacked_lists(loops)
        assert {trace["meta"]["cycle"] for trace in traces} == set(loops["cycles"])
        go.Figure(data=traces)
        assert [len(lists[place]) for place in loops["departures"]] == [len(trace["x"]) for trace in traces]
        assert len(content) < 30_000
    for figure in page.figures:
        go.Figure(data=list(figure.traces), layout=figure.layout)


def test_departures_open_a_loop_and_keep_its_width(many: CampaignResults) -> None:
    found = many.hysteresis
    assert found is not None
    curves = [c for c in found.outlines if (c.module, c.sensor) == (found.outlines[0].module, "A")] or [
        found.outlines[0]
    ]
    own = found.sensors.query("module == @curves[0].module and sensor == @curves[0].sensor").iloc[0]
    for curve, left in zip(curves, departures(found, curves), strict=True):
        # a straight line off, and nothing else: what remains plus the line is the signal, up to a constant
        back = left.signal * own["full_scale_output"] / 100 + own["slope"] * curve.x - curve.signal
        assert np.ptp(back) < 1e-9
        assert np.ptp(left.signal) < 100 * np.ptp(curve.signal) / own["full_scale_output"]


def test_the_page_stays_small_with_many_sensors(many: CampaignResults) -> None:
    site = build_site(many)
    assert len(site["data/hysteresis.js"]) < 200_000
    assert len(site["hysteresis.html"]) < 200_000
    page = site["hysteresis.html"].decode("utf-8")
    for words in ("late by", "Thousands of cycles", "Width against rate", "failed"):
        assert words in page
    assert "1 of 1 sensor failed" in site["index.html"].decode("utf-8").replace("\u202f", " ").replace(
        "\xa0", " "
    )


def test_extremes_of_drawn_loops_are_those_of_all_samples(many: CampaignResults) -> None:
    assert many.hysteresis is not None
    for curve in many.hysteresis.outlines[:20]:
        assert curve.x.max() == pytest.approx(0.4)
        assert np.all(np.isfinite(curve.signal))


def test_no_page_where_nothing_was_cycled(seals: CampaignResults) -> None:
    assert hysteresis_page(replace(seals, hysteresis=None)) is None
