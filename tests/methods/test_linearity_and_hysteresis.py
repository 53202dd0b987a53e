"""Linearity by four definitions, hysteresis of steps, repeatability."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import optimize, stats

from campaign.methods.linearity import linearity
from campaign.methods.repeatability import repeatability
from campaign.methods.step_hysteresis import step_hysteresis

REFERENCE = Path(__file__).parents[1] / "reference" / "calibration"
FULL_SCALE_OUTPUT = 10.945
"""Observed end-point output of the textbook table: mean of both branches at 10 less that at 0."""


@pytest.fixture(scope="module")
def gauge() -> pd.DataFrame:
    return pd.read_csv(REFERENCE / "up_down_example.csv", comment="#")


def test_one_table_gives_four_linearities(gauge):
    # worked out beside the published table: 1.042, 1.197, 1.119, 0.951 %FSO on the mean over directions
    found = linearity(
        gauge["x_ref"].to_numpy(float), gauge[["y_up", "y_down"]].mean(axis=1).to_numpy(), FULL_SCALE_OUTPUT
    )
    assert found.least_squares == pytest.approx(1.0424020931, rel=1e-9)
    assert found.terminal == pytest.approx(1.1968935587, rel=1e-9)
    assert found.zero_based == pytest.approx(1.1192325262, rel=1e-9)
    assert found.independent == pytest.approx(0.9507766103, rel=1e-9)


def test_hysteresis_of_the_same_table(gauge):
    # 0.61 of 10.945: 5.573 %FSO, at x = 6
    found = step_hysteresis((gauge["y_up"] - gauge["y_down"]).to_numpy()[None, :])
    assert 100.0 * found.largest / FULL_SCALE_OUTPUT == pytest.approx(5.573321151, rel=1e-9)
    assert gauge["x_ref"][found.largest_level] == 6
    assert np.isnan(found.p)  # one run and no noise stated: no interval, no test


def _curves():
    points = st.lists(st.floats(-5.0, 5.0), min_size=3, max_size=9)
    return points.map(lambda y: (np.linspace(0.0, 1.0, len(y)), np.round(np.array(y), 6)))


@given(
    _curves(), st.floats(0.01, 100.0), st.floats(-50.0, 50.0), st.floats(-30.0, 30.0), st.floats(-9.0, 9.0)
)
def test_linearity_does_not_change_with_origin_scale_or_an_added_line(curve, stretch, shift, offset, slope):
    x, y = curve
    plain = linearity(x, y, 1.0)
    moved = linearity(stretch * x + shift, y + offset + slope * x, 1.0)
    for name in ("least_squares", "terminal", "zero_based", "independent"):
        assert getattr(moved, name) == pytest.approx(getattr(plain, name), abs=1e-6)


@given(_curves())
def test_each_definition_is_as_close_as_its_constraint_allows(curve):
    x, y = curve
    found = linearity(x, y, 1.0)
    assert found.independent <= found.zero_based + 1e-9
    assert found.zero_based <= found.terminal + 1e-9
    assert found.independent <= found.least_squares + 1e-9


@given(_curves())
def test_independent_linearity_is_the_answer_of_linear_programming(curve):
    x, y = curve
    ones = np.ones(len(x))
    bounds = np.vstack([np.column_stack([ones, x, -ones]), np.column_stack([-ones, -x, -ones])])
    answer = optimize.linprog([0, 0, 1], A_ub=bounds, b_ub=np.concatenate([y, -y]), bounds=[(None, None)] * 3)
    assert linearity(x, y, 100.0).independent == pytest.approx(answer.fun, abs=1e-7)


def test_a_largest_difference_exceeds_its_null_quantile_as_often_as_stated():
    rng = np.random.default_rng(17)
    exceeded = []
    for _ in range(2000):
        found = step_hysteresis(rng.normal(0.0, 1.0, (3, 8)))
        exceeded.append((found.largest > found.null_quantile, found.p < 0.05))
    share = np.mean(exceeded, axis=0)
    assert (share >= 0.035).all()
    assert (share <= 0.065).all()


def test_simultaneous_limits_hold_for_all_levels_at_once():
    rng = np.random.default_rng(18)
    true = np.array([0.0, 0.4, 0.7, 0.4, 0.0])
    held = []
    for _ in range(1000):
        found = step_hysteresis(true + rng.normal(0.0, 0.3, (3, 5)))
        held.append(np.all((found.low <= true) & (true <= found.high)))
    assert 0.93 <= np.mean(held) <= 0.97


def test_a_level_that_one_run_missed_keeps_its_other_runs():
    differences = np.array([[0.1, 0.5, np.nan], [0.2, 0.6, 0.1], [0.0, 0.7, 0.2]])
    found = step_hysteresis(differences)
    assert found.runs.tolist() == [3, 3, 2]
    assert found.differences == pytest.approx([0.1, 0.6, 0.15])
    assert found.degrees_of_freedom == 5


def test_the_width_is_not_raised_by_noise():
    rng = np.random.default_rng(19)
    widths = [step_hysteresis(rng.normal(0.4, 0.5, (4, 9))).mean_square_width for _ in range(1500)]
    assert np.mean(widths) == pytest.approx(0.4**2, rel=0.05)


def test_repeatability_of_two_cells():
    signals, cell = np.array([1.0, 1.2, 1.4, 5.0, 5.0, 5.6]), np.array([0, 0, 0, 1, 1, 1])
    found = repeatability(signals, cell, np.zeros(6, dtype=np.int64))
    assert found.standard_deviations == pytest.approx([0.2, np.std([5.0, 5.0, 5.6], ddof=1)])
    assert found.ranges == pytest.approx([0.4, 0.6])
    assert found.pooled_sd == pytest.approx(np.sqrt((0.04 + 0.12) / 2))
    alone = repeatability(np.array([3.0]), np.array([0]), np.array([0]))
    assert np.isnan([alone.standard_deviations[0], alone.ranges[0], alone.pooled_sd]).all()


def test_repeatability_is_within_one_mounting():
    signals = np.array([1.0, 1.2, 7.0, 7.4])
    found = repeatability(signals, np.zeros(4, dtype=np.int64), np.array([4, 4, 9, 9]))
    assert found.standard_deviations == pytest.approx([np.sqrt((0.02 + 0.08) / 2)])
    assert found.ranges == pytest.approx([0.4])
    assert (found.counts[0], found.degrees_of_freedom[0]) == (4, 2)
    apart = repeatability(signals, np.zeros(4, dtype=np.int64), np.arange(4))
    assert np.isnan(apart.standard_deviations[0])


def test_a_difference_without_repeats_uses_the_noise_that_is_known():
    found = step_hysteresis(np.array([[0.3, -0.1]]), noise_variance=0.02, noise_degrees=12.0)
    quantile = stats.t.ppf(0.5 + 0.5 * 0.95**0.5, 12)
    assert found.high - found.differences == pytest.approx(np.full(2, quantile * np.sqrt(0.02)))
