"""Conformity by JCGM 106:2012, spreads by the χ² distribution, predictions by simulation."""

import math

import numpy as np
import pytest
from scipy import stats

from campaign.methods.conformity import (
    conformity_of_estimate,
    conformity_of_spread,
    predict_new_member,
    spread_interval,
    verdict_of,
)


def test_breakdown_voltage_of_jcgm_106_example():
    # JCGM 106:2012, example 1 in 7.3.2 (breakdown voltage of a Zener diode): estimate -5.47 V, u = 0.05 V,
    # upper limit -5.40 V, p_c = Φ(1.40) = 0.92; normal distribution: infinite degrees of freedom
    assert conformity_of_estimate(-5.47, 0.05, math.inf, -5.40) == pytest.approx(0.92, abs=0.005)


def test_estimate_on_the_limit_is_a_toss_up_whatever_the_uncertainty():
    assert conformity_of_estimate(2.0, 0.3, 4, 2.0) == pytest.approx(0.5)
    assert verdict_of(0.5) == "not decided"


def test_unknown_uncertainty_decides_nothing():
    probability = conformity_of_estimate(1.0, math.nan, 4, 2.0)
    assert math.isnan(probability)
    assert verdict_of(probability) == "not decided"


def test_verdicts_at_their_edges():
    assert [verdict_of(p) for p in (0.95, 0.9499, 0.0501, 0.05)] == [
        "met",
        "not decided",
        "not decided",
        "not met",
    ]


def test_spread_probability_agrees_with_its_interval():
    low, high = spread_interval(0.8, 6)
    assert conformity_of_spread(0.8, 6, high) == pytest.approx(0.975)
    assert conformity_of_spread(0.8, 6, low) == pytest.approx(0.025)


def test_spread_interval_of_ten_readings():
    # χ²(9) quantiles 2.700 and 19.023 (NIST/SEMATECH handbook 1.3.6.7.4): factors 0.688 and 1.826
    low, high = spread_interval(1.0, 9)
    assert (low, high) == (pytest.approx(0.688, abs=5e-4), pytest.approx(1.826, abs=5e-4))


def test_prediction_covers_a_new_sensor_of_a_new_module():
    rng = np.random.default_rng(20261201)
    hits = 0
    for _ in range(2000):
        modules = rng.normal(0, 1.0, 7)
        values = np.repeat(modules[:6], 5) + rng.normal(0, 0.7, 30)
        new = modules[6] + rng.normal(0, 0.7)
        prediction = predict_new_member(values, np.repeat(np.arange(6), 5))
        assert prediction is not None
        reach = stats.t.ppf(0.975, prediction.degrees_of_freedom) * prediction.standard_deviation
        hits += abs(new - prediction.estimate) <= reach
    assert 0.93 <= hits / 2000 <= 0.97


def test_prediction_from_one_module_says_so_and_from_one_sensor_does_not_exist():
    one_module = predict_new_member(np.array([1.0, 2.0, 3.0]), np.zeros(3, dtype=np.int64))
    assert one_module is not None
    assert one_module.groups == 1
    assert one_module.standard_deviation == pytest.approx(math.sqrt(1 + 1 / 3))
    assert predict_new_member(np.array([1.0]), np.zeros(1, dtype=np.int64)) is None
