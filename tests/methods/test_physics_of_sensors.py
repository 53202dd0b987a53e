"""Stretch exponent, electrode resistance, uncertainty of the reference, and a balanced one-way analysis."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from campaign.methods.electrode_resistance import capacitance_seen, omega_rc_of_error
from campaign.methods.one_way_analysis import one_way_analysis
from campaign.methods.reference_uncertainty import (
    covariance_between_readings,
    covariance_of_line,
    shared_sources,
)
from campaign.methods.stretch_exponent import LAWS, apparent_exponent, capacitance_ratio, run_exponents

REFERENCE = Path(__file__).parents[1] / "reference" / "calibration"


def test_ideal_laws_at_half_again_the_length():
    # λ = 1.5: 1.5, 2.25, 5.0625 (closed forms)
    seen = {name: float(capacitance_ratio(np.array([0.5]), p)[0]) for name, p in LAWS.items()}
    assert seen == pytest.approx({"free uniaxial": 1.5, "width kept": 2.25, "equibiaxial": 5.0625})


@given(st.floats(0.3, 4.0), st.floats(1.0, 500.0))
def test_the_exponent_of_each_run_is_found(exponent, zero_signal):
    strain = np.tile(np.linspace(0.0, 0.5, 6), 2)
    run = np.repeat([0, 1], 6)
    found = run_exponents(strain, zero_signal * (1.0 + strain) ** exponent, run, 2)
    assert found.exponents == pytest.approx([exponent, exponent], rel=1e-9)


def test_parasitic_capacitance_lowers_the_exponent_seen():
    strain = np.linspace(0.0, 0.01, 5)
    seen = run_exponents(strain, 20.0 + 60.0 * (1.0 + strain) ** 2, np.zeros(5, dtype=np.int64), 1)
    assert seen.exponents[0] == pytest.approx(apparent_exponent(2.0, 60.0, 20.0), rel=0.01)


def test_distributed_resistance_against_a_ladder_of_4000_sections():
    # closed forms checked against a ladder of 4000 sections, worked out beside this collection
    omega_rc = np.array([0.01, 0.1, 0.3, 1, 3, 10])
    parallel = [0.999987, 0.998669, 0.988175, 0.885451, 0.514793, 0.219782]
    series = [0.999998, 0.999778, 0.998006, 0.978461, 0.84438, 0.45997]
    assert capacitance_seen(omega_rc, "parallel") == pytest.approx(parallel, abs=1e-6)
    assert capacitance_seen(omega_rc, "series") == pytest.approx(series, abs=1e-6)


def test_one_per_cent_limits():
    # 0.276 (parallel model) and 0.676 (series model)
    assert omega_rc_of_error(0.01, "parallel") == pytest.approx(0.2755614150, rel=1e-9)
    assert omega_rc_of_error(0.01, "series") == pytest.approx(0.6756634536, rel=1e-9)


def test_gum_h5():
    # JCGM 100:2008, H.5: s_a 128 µV, s_b 85 µV, F 2.25 (2.2615 unrounded), s_B 43 µV, 18 µV on 9, 13 µV on 49
    data = pd.read_csv(REFERENCE / "gum_h5_zener.csv", comment="#")
    found = one_way_analysis(data["mean_V"].to_numpy(), data["sd_uV"].to_numpy() * 1e-6, 5)
    assert found.mean == pytest.approx(10.000097, abs=5e-7)
    assert found.from_means_sd == pytest.approx(128e-6, abs=0.5e-6)
    assert found.within_sd == pytest.approx(85e-6, abs=0.5e-6)
    assert found.statistic == pytest.approx(2.2615, abs=5e-4)
    assert 0.025 < found.p < 0.05
    assert found.between_sd == pytest.approx(43e-6, abs=0.5e-6)
    assert found.mean_error == pytest.approx(18e-6, abs=0.5e-6)
    assert found.mean_error_without == pytest.approx(13e-6, abs=0.5e-6)


STRAIN = np.linspace(0.0, 0.4, 9)
REST = 60.0


def sources(**stated):
    known = dict.fromkeys(
        ["scale_relative", "zero_mm", "backlash_mm", "rest_length_uncertainty_mm"], float("nan")
    )
    return shared_sources(
        recorded=stated.pop("recorded", "length"),
        quantity="strain",
        length_mm=REST * (1 + STRAIN),
        elongation_mm=REST * STRAIN,
        rest_length_mm=REST,
        direction=stated.pop("direction", np.ones(9)),
        session=stated.pop("session", np.zeros(9, dtype=np.int64)),
        **(known | stated),
    )


def test_half_a_millimetre_of_rest_length_is_eight_tenths_of_a_per_cent():
    # statistics of the reference: dε/dL0 = −(1 + ε)/L0, 0.5 mm on 60 mm
    (source,) = sources(rest_length_uncertainty_mm=0.5)
    assert source.sensitivities[0, 0] == pytest.approx(-0.5 / 60.0)
    assert source.sensitivities[-1, 0] == pytest.approx(-1.4 * 0.5 / 60.0)
    assert sources(rest_length_uncertainty_mm=0.5, recorded="elongation")[0].sensitivities[0, 0] == 0.0
    assert sources(rest_length_uncertainty_mm=0.5, recorded="strain") == ()


def test_a_scale_error_of_elongation_moves_the_slope_alone():
    covariance = covariance_of_line(sources(scale_relative=0.001, recorded="elongation"), STRAIN, 80.0)
    assert covariance == pytest.approx(np.array([[0.0, 0.0], [0.0, (80.0 * 0.001) ** 2]]), abs=1e-15)


def test_a_zero_error_moves_the_intercept_alone_and_sessions_share_it_no_longer():
    one = covariance_of_line(sources(zero_mm=0.06), STRAIN, 80.0)
    assert one == pytest.approx(np.diag([(80.0 * 0.001) ** 2, 0.0]), abs=1e-15)
    two = covariance_of_line(sources(zero_mm=0.06, session=np.array([0, 1] * 4 + [0])), STRAIN, 80.0)
    assert two[0, 0] < one[0, 0]


def test_repetition_does_not_reduce_a_shared_error():
    stated = {"scale_relative": 0.001, "rest_length_uncertainty_mm": 0.3}
    once = covariance_of_line(sources(**stated), STRAIN, 80.0)
    found = shared_sources(
        recorded="length",
        quantity="strain",
        length_mm=np.tile(REST * (1 + STRAIN), 5),
        elongation_mm=np.tile(REST * STRAIN, 5),
        rest_length_mm=REST,
        direction=np.ones(45),
        session=np.zeros(45, dtype=np.int64),
        zero_mm=float("nan"),
        backlash_mm=float("nan"),
        **stated,
    )
    assert covariance_of_line(found, np.tile(STRAIN, 5), 80.0) == pytest.approx(once, rel=1e-9)


def test_backlash_turns_with_direction():
    direction = np.array([1.0, 1, 1, 1, 0, -1, -1, -1, -1])
    between = covariance_between_readings(sources(backlash_mm=0.06, direction=direction))
    assert between[0, 1] == pytest.approx((0.5 * 0.001) ** 2)
    assert between[0, 8] == pytest.approx(-((0.5 * 0.001) ** 2))
    assert between[4, 4] == 0.0


def test_propagation_agrees_with_drawing_the_errors():
    rng = np.random.default_rng(23)
    found = sources(scale_relative=0.002, zero_mm=0.1, rest_length_uncertainty_mm=0.2)
    stacked = np.hstack([source.sensitivities for source in found])
    errors = rng.normal(0.0, 1.0, (4000, stacked.shape[1])) @ stacked.T
    signal = 80.0 + 80.0 * (STRAIN + errors)
    design = np.column_stack([np.ones(9), STRAIN])
    lines = np.linalg.lstsq(design, signal.T, rcond=None)[0]
    assert np.cov(lines) == pytest.approx(covariance_of_line(found, STRAIN, 80.0), rel=0.08)
