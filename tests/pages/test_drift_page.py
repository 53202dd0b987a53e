"""Page 6: a campaign with a hold of 100,000 samples is drawn thin, said whole, and quickly."""

from __future__ import annotations

import re
import time
from dataclasses import replace
from io import StringIO
from pathlib import Path

import numpy as np
import pandas as pd
import plotly.graph_objects as go
import pytest

from campaign.analyses.results import CampaignResults
from campaign.pages.drawing import ready
from campaign.pages.drift import drift_page, largest_hold
from campaign.pages.drift_figures import fewer_stretches, hold_figure, time_words
from campaign.pages.figures import line_point_count
from campaign.pages.page import Page
from campaign.pages.site import build_site
from campaign.pipeline import analyse, read_campaign

from .small_campaign import Sketch, write_campaign

REAL = Path(__file__).parents[1] / "campaigns" / "real"
SAMPLES = 100_000
SPIKE = 71_000


def write_holds(folder: Path) -> None:
    """Add a stretched hold with one spike and a hold at rest, both of the first sensor, to a campaign."""
    rng = np.random.default_rng(1)
    t = np.arange(SAMPLES) * 0.1
    for repetition, stretch in ((1, 12.0), (2, 0.0)):
        x = np.interp(t, [0.0, 20.0, 22.0], [0.0, 0.0, stretch])
        signal = 20.0 + 0.4 * x + 0.004 * rng.normal(size=SAMPLES)
        if stretch:
            signal -= 0.1 * np.log1p(np.maximum(t - 22.0, 0.0) / 5.0)
            signal[SPIKE] += 2.0
        frame = pd.DataFrame({"time_s": t, "x_mm": 60.0 + x, "C": signal, "temperature_C": 23.0})
        name = f"hold_{repetition}.csv"
        frame.to_csv(folder / "trials" / name, index=False, float_format="%.5f")
        with (folder / "trials.csv").open("a", encoding="utf-8") as register:
            register.write(f'"trials/{name}",hold,M1,AB,S1,{repetition}\n')


@pytest.fixture(scope="module")
def results(tmp_path_factory) -> CampaignResults:
    sketch = Sketch(generations=("first",), limits='drift_1h = "1 %FSO"')
    folder = write_campaign(tmp_path_factory.mktemp("holds") / "campaign", sketch)
    write_holds(folder)
    return analyse(read_campaign(folder))


@pytest.fixture(scope="module")
def page(results) -> Page:
    made = drift_page(results)
    assert made is not None
    return made


@pytest.fixture(scope="module")
def site(results) -> dict[str, bytes]:
    return build_site(results)


def test_every_figure_is_valid_and_thin(page):
    assert [f.name for f in page.figures] == ["holds", "hold", "decades", "zero", "allan"]
    for figure in page.figures:
        go.Figure(data=list(figure.traces), layout=figure.layout)
        assert line_point_count(figure) <= 10_000


def test_a_long_hold_is_drawn_well_under_a_second_with_its_spike(results):
    curve = largest_hold(results.drift)
    begun = time.perf_counter()
    figure = ready(hold_figure(curve, results.drift.reference, "hold"))
    assert time.perf_counter() - begun < 1.0
    envelope, mean = figure.traces[:2]
    assert len(mean["x"]) < 600
    assert max(envelope["y"]) - max(mean["y"]) > 0.5
    assert curve.high.max() > 1.0


@pytest.mark.parametrize("most", [1, 7, 60, 10_000])
def test_fewer_stretches_keep_the_extremes(results, most):
    curve = max(results.drift.curves, key=lambda c: len(c.times_s))
    drawn = fewer_stretches(curve, most)
    assert len(drawn.times_s) <= most
    assert len(drawn.times_s) == len(drawn.low) == len(drawn.mean)
    assert (drawn.low.min(), drawn.high.max()) == (curve.low.min(), curve.high.max())
    assert (np.diff(drawn.times_s) > 0).all()
    assert curve.times_s[0] <= drawn.times_s[0] <= drawn.times_s[-1] <= curve.times_s[-1]


def test_a_hold_of_which_samples_are_left_out_says_how_many(results):
    curve = largest_hold(results.drift)
    whole = ready(hold_figure(curve, results.drift.reference, "hold"))
    longer = replace(curve, recorded_samples=3_000_000)
    thinned = ready(hold_figure(longer, results.drift.reference, "hold"))
    assert "the CSV holds every sample" in whole.note
    assert f"holds {SAMPLES - 220:,} of 3,000,000 samples".replace(",", "\u202f") in thinned.note


def test_page_and_sensor_page_say_what_was_found(site, results):
    html = site["drift.html"].decode()
    assert "relaxation" in html
    assert "Allan deviation" in html
    assert not re.search(r"\bnan\b", html, re.IGNORECASE)
    (sensor,) = (name for name in site if name.startswith("sensor-M1") and "-AB" in name.upper())
    text = site[sensor].decode()
    assert "Its holds" in text
    assert 'data-figure="hold-1"' in text
    assert "holds" in [f.kind for f in results.findings.findings]
    assert "Held still, the signal changes by" in site["index.html"].decode()


def test_the_file_of_a_hold_holds_every_sample(site):
    whole = pd.read_csv(StringIO(site["figures/drift_hold.csv"].decode()))
    samples = whole[whole["curve"] == "samples"]
    assert len(samples) == SAMPLES - 220
    assert samples["signal"].max() - samples["signal"].median() > 1.9
    assert len(site["data/drift.js"]) < 120_000


PROMISED = {
    "holds": "generation module sensor trial strain duration_s form change_1min_percent_fso "
    "change_10min_percent_fso change_1h_percent_fso percent_fso_per_decade low high "
    "creep_20_30min_percent_fso zero_return_percent_fso verdict",
    "allan": "generation module sensor trial averaging_time_s deviation_strain low high",
    "zero_over_time": "generation module sensor session started zero_signal unit",
}


@pytest.mark.parametrize(("name", "rows"), [("holds", 2), ("allan", 30), ("zero_over_time", 12)])
def test_tables_are_whole_and_keep_the_promised_columns(site, name, rows):
    table = pd.read_csv(StringIO(site[f"tables/{name}.csv"].decode()))
    promised = PROMISED[name].split()
    assert list(table.columns[: len(promised)]) == promised
    assert len(table) == rows


def test_every_term_leads_to_its_definition(site):
    used = re.findall(r'href="(method-[a-z-]+\.html)#([a-z0-9-]+)"', site["drift.html"].decode())
    assert used
    for page, anchor in used:
        assert f' id="{anchor}"' in site[page].decode()


def test_the_real_pressure_decay_has_a_drift_page_in_per_cent_of_its_first_signal():
    results = analyse(read_campaign(REAL / "pressure_decay"))
    html = build_site(results)["drift.html"].decode()
    assert "per cent of the first settled signal" in html
    assert "relaxation or drift" in html
    assert not re.search(r"\bnan\b", html, re.IGNORECASE)


def test_a_campaign_without_holds_and_sessions_has_no_page(results):
    assert drift_page(replace(results, drift=None)) is None


@pytest.mark.parametrize(
    ("seconds", "words"), [(0.5, "0.50"), (59.9, "1.0"), (600.0, "10"), (7200.0, "2.0"), (172800.0, "2.0")]
)
def test_times_are_said_in_units_that_people_use(seconds, words):
    unit = {0.5: "s", 59.9: "min", 600.0: "min", 7200.0: "h", 172800.0: "d"}[seconds]
    assert time_words(seconds) == f"{words}\u202f{unit}"


def test_the_file_of_a_hold_on_a_sensor_page_holds_what_is_drawn(site):
    (name,) = (n for n in site if n.startswith("figures/sensor-M1") and n.endswith("_hold-1.csv"))
    drawn = pd.read_csv(StringIO(site[name].decode()))
    stretches = drawn[drawn["curve"] == "mean of samples"]
    assert 50 < len(stretches) <= 100
    assert (stretches["low"] <= stretches["change_percent"]).all()
    assert (stretches["change_percent"] <= stretches["high"]).all()
    assert len(site[name]) < 25_000
