"""Slope of a slow series: the NIST standard resistor, and coverage where ordinary least squares fails."""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from campaign.methods.drift_slope import drift_slope

REFERENCE = Path(__file__).parents[1] / "reference" / "calibration"


@pytest.fixture(scope="module")
def resistor():
    values = pd.read_csv(REFERENCE / "standard_resistor_drift.csv", comment="#")["resistance"].to_numpy()
    return drift_slope(np.arange(1.0, len(values) + 1.0), values)


def test_standard_resistor_line_and_autocorrelation(resistor):
    """NIST/SEMATECH e-Handbook 1.4.2.7: intercept, slope, residual SD, lag-1; lag-1 of residuals 0.731."""
    assert resistor.intercept == pytest.approx(27.9114, abs=5e-5)
    assert resistor.slope == pytest.approx(0.00020967, abs=5e-9)
    assert resistor.ordinary_standard_error == pytest.approx(2.09207819e-06, rel=1e-6)
    assert resistor.residual_sd == pytest.approx(0.0191, abs=5e-5)
    assert resistor.lag_one_of_values == pytest.approx(0.972, abs=5e-4)
    assert resistor.lag_one_of_residuals == pytest.approx(0.731, abs=5e-4)


def test_standard_resistor_interval_widens_against_ordinary_least_squares(resistor):
    """With lag-1 0.731 alone the error is √((1 + 0.731)/(1 − 0.731)) = 2.5 times the ordinary one."""
    assert resistor.widening > 2.5
    low, high = resistor.interval()
    assert high - low > 2.5 * 2 * 1.96 * resistor.ordinary_standard_error


def test_interval_covers_where_ordinary_least_squares_does_not():
    covered, ordinary = 0, 0
    for seed in range(150):
        rng = np.random.default_rng(seed)
        noise = rng.normal(size=400)
        for i in range(1, 400):
            noise[i] += 0.8 * noise[i - 1]
        found = drift_slope(np.arange(400.0), noise)
        low, high = found.interval()
        covered += low < 0 < high
        ordinary += abs(found.slope) < 1.96 * found.ordinary_standard_error
    assert covered >= 132
    assert ordinary < 100


def test_independent_noise_keeps_the_ordinary_error():
    rng = np.random.default_rng(1)
    found = drift_slope(np.arange(2000.0), 0.01 * np.arange(2000.0) + rng.normal(size=2000))
    assert found.widening == pytest.approx(1.0, abs=0.15)
    assert found.slope == pytest.approx(0.01, rel=0.05)
