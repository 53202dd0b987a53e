"""The calculator's script agrees with Python: the same record, signal and number of readings, to 1e-9."""

from __future__ import annotations

import json
import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from campaign.analyses.calibration import CalibrationRecord
from campaign.analyses.sensor_figures import expanded_uncertainty
from campaign.methods.inverse_reading import read_reference
from campaign.pages.calculator import calculator_data, record_files, record_href
from tests.browser.chromium import MISSING, chromium, driver_path, started

SCRIPT = Path(__file__).parents[2] / "site_templates" / "js" / "calculator.js"

RECORD = CalibrationRecord(
    generation="first",
    module="M01",
    sensor="AB",
    branch="both",
    unit="pF",
    reference_name="strain",
    reference_unit="mm/mm",
    intercept=74.57,
    slope=65.76,
    var_intercept=0.0225,
    var_slope=0.0576,
    cov_intercept_slope=-0.011,
    run_var_intercept=0.09,
    run_var_slope=0.31,
    run_cov=-0.05,
    residual_variance=0.0231,
    lack_of_fit_variance=0.012,
    direction_half_width=0.21,
    degrees_of_freedom=11.0,
    t_quantile_975=2.200985160082949,
    variance_source="this sensor's runs",
    signal_low=74.57,
    signal_high=100.87,
    x_low=0.0,
    x_high=0.4,
    zero_signal=74.57,
    rest_length_mm=96.15,
    rest_length_uncertainty_mm=0.12,
    runs=6,
    conditions={"temperature": "not recorded"},
    date="2025-02-15",
    files=("trials/a.csv",),
    sha256=("0" * 64,),
)
WEAK = replace(RECORD, var_slope=2000.0)
ONE_RUN = replace(
    RECORD, run_var_intercept=math.nan, run_var_slope=math.nan, run_cov=math.nan, t_quantile_975=math.nan
)


def vectors() -> list[tuple[CalibrationRecord, float, int]]:
    """Signals inside, at the ends of and outside the calibrated range, for one reading and for means."""
    signals = [60.0, 74.57, 74.58, 87.7, 100.8, 100.87, 101.0]
    return [(r, s, m) for r in (RECORD, WEAK, ONE_RUN) for s in signals for m in (1, 2, 10, 1000)]


@pytest.fixture(scope="module")
def answers(tmp_path_factory: pytest.TempPathFactory) -> list[dict[str, object]]:
    """What the script answers in Chromium, one answer a vector."""
    if chromium() is None or driver_path() is None:
        pytest.fail(MISSING, pytrace=False)
    folder = tmp_path_factory.mktemp("calculator")
    page = folder / "page.html"
    page.write_text(f"<!DOCTYPE html><title>t</title><script>{SCRIPT.read_text(encoding='utf-8')}</script>")
    driver = started(folder)
    try:
        driver.get(page.as_uri())
        given_vectors = [[calculator_data([r])["records"][0], s, m] for r, s, m in vectors()]
        call = "return arguments[0].map((v) => window.campaignCalculator.inverseReading(v[0], v[1], v[2]));"
        return driver.execute_script(call, given_vectors)
    finally:
        driver.quit()


@pytest.mark.browser
def test_script_and_python_agree_on_every_vector(answers):
    assert len(answers) == len(vectors()) == 84
    for (record, signal, readings), answer in zip(vectors(), answers, strict=True):
        expected = read_reference(
            record.reading_model,
            signal,
            readings,
            signal_low=record.signal_low,
            signal_high=record.signal_high,
        )
        assert answer["status"] == expected.status, (signal, readings)
        if expected.status == "inside calibration":
            for key, value in {"x": expected.estimate, "low": expected.low, "high": expected.high}.items():
                assert answer[key] == pytest.approx(value, abs=1e-9)


@pytest.mark.browser
def test_without_run_to_run_error_or_with_an_uncertain_slope_no_interval_is_given(answers):
    inside = [
        answer["status"]
        for (record, signal, _), answer in zip(vectors(), answers, strict=True)
        if record is not RECORD and 74.57 <= signal <= 100.87
    ]
    assert set(inside) == {"no interval"}


def test_record_file_holds_everything_that_the_calculator_evaluates_and_the_caution():
    files = record_files([RECORD, ONE_RUN])
    written = json.loads(files[record_href(RECORD)])
    assert record_href(RECORD) == "records/sensor-M01-AB-both.json"
    assert written["slope"] == RECORD.slope
    assert written["t_quantile_975"] is None  # the later record of the same name: one run, nothing to say
    assert "one reading in twenty" in written["caution"]


@given(
    x=st.floats(0.0, 0.4),
    readings=st.integers(1, 100),
    residual=st.floats(1e-6, 1.0),
)
@settings(max_examples=60, deadline=None)
def test_first_order_half_width_is_that_of_the_exact_interval_where_the_slope_is_sharp(x, readings, residual):
    record = replace(RECORD, var_slope=1e-6, run_var_slope=1e-6, cov_intercept_slope=0.0, run_cov=0.0)
    record = replace(record, residual_variance=residual, signal_low=-1e9, signal_high=1e9)
    signal = record.intercept + record.slope * x
    exact = read_reference(record.reading_model, signal, readings, signal_low=-1e9, signal_high=1e9)
    assert expanded_uncertainty(record, x, readings) == pytest.approx((exact.high - exact.low) / 2, rel=1e-4)


def test_a_mean_of_many_readings_keeps_the_runs_own_error():
    many = expanded_uncertainty(RECORD, 0.2, 10**9)
    without_noise = expanded_uncertainty(replace(RECORD, residual_variance=0.0), 0.2)
    assert many == pytest.approx(without_noise)
    assert np.isnan(expanded_uncertainty(ONE_RUN, 0.2))
