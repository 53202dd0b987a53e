"""Means of autocorrelated samples: their standard errors must mean what they say."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import signal as filters
from scipy import stats

from campaign.methods.autocorrelation import stretch_means


def noise(rng, rho: float, white: float, stretches: int, samples: int):
    """Slow first-order noise of unit variance, white noise on top, mean zero."""
    start = rng.normal(0.0, 1.0, stretches)
    innovations = np.sqrt(1 - rho**2) * rng.normal(0.0, 1.0, (stretches, samples))
    slow = filters.lfilter([1.0], [1.0, -rho], innovations, axis=1, zi=rho * start[:, None])[0]
    return slow + white * rng.normal(0.0, 1.0, (stretches, samples))


def coverage(rho: float, white: float, samples: int) -> tuple[float, float]:
    rng = np.random.default_rng(41)
    ours, independent = [], []
    for _ in range(40):
        y = noise(rng, rho, white, 12, samples)
        found = stretch_means(y.ravel(), np.tile(np.arange(samples), 12).astype(float), np.full(12, samples))
        quantile = stats.t.ppf(0.975, np.maximum(found.effective_counts - 1, 1))
        ours.append(np.abs(found.means) <= quantile * found.standard_errors)
        independent.append(np.abs(found.means) <= 1.98 * y.std(axis=1, ddof=1) / np.sqrt(samples))
    return float(np.mean(ours)), float(np.mean(independent))


def test_autocorrelated_samples_keep_their_coverage():
    # common practice loses it: with a lag-1 correlation of 0.8 intervals from independent samples cover half
    ours, independent = coverage(0.8, 0.0, 100)
    assert 0.87 <= ours <= 0.99
    assert independent <= 0.6


def test_white_noise_on_slow_noise_keeps_its_coverage():
    ours, independent = coverage(0.95, 1.0, 150)
    assert 0.85 <= ours <= 0.99
    assert independent <= 0.5


def test_independent_samples_are_not_punished():
    rng = np.random.default_rng(42)
    y = rng.normal(5.0, 0.2, (30, 60))
    found = stretch_means(y.ravel(), np.tile(np.arange(60.0), 30), np.full(30, 60))
    assert found.autocorrelation_time <= 1.4
    assert np.median(found.standard_errors) == pytest.approx(0.2 / np.sqrt(60), rel=0.15)


def test_repeated_values_of_a_slow_instrument_count_once():
    rng = np.random.default_rng(43)
    fresh = rng.normal(0.0, 1.0, (8, 20))
    repeated = np.repeat(fresh, 10, axis=1)
    found = stretch_means(repeated.ravel(), np.tile(np.arange(200.0), 8), np.full(8, 200))
    assert (found.effective_counts <= 20).all()
    assert np.median(found.standard_errors) == pytest.approx(1.0 / np.sqrt(20), rel=0.35)


def test_a_standard_error_is_never_below_the_resolution():
    # GUM F.2.2.1: resolution over the square root of 12
    found = stretch_means(np.full(60, 3.25), np.arange(60.0), np.array([30, 30]), resolution=0.01)
    assert found.standard_errors == pytest.approx(np.full(2, 0.01 / np.sqrt(12)))
    assert found.effective_counts.tolist() == [1.0, 1.0]


def test_a_slope_is_found_with_an_error_that_respects_autocorrelation():
    rng = np.random.default_rng(44)
    t = np.tile(np.arange(80) * 0.5, 10)
    significant = []
    for _ in range(60):
        y = noise(rng, 0.8, 0.0, 10, 80).ravel()
        found = stretch_means(y, t, np.full(10, 80))
        significant.append(np.abs(found.slopes / found.slope_standard_errors) > 3.0)
    assert np.mean(significant) < 0.05
    found = stretch_means(y + 0.5 * t, t, np.full(10, 80))
    assert np.median(found.slopes) == pytest.approx(0.5, abs=0.05)
    assert (found.slopes / found.slope_standard_errors > 4.0).all()


def test_stretches_of_any_length_down_to_one_sample():
    rng = np.random.default_rng(45)
    counts = np.array([1, 2, 3, 40, 7])
    found = stretch_means(rng.normal(1.0, 0.1, 53), np.arange(53.0), counts)
    assert np.isfinite(found.standard_errors).all()
    assert np.isnan(found.slopes[:2]).all()
