"""Runs within mountings: components of their spread, and a line that knows which runs share a mounting."""

from __future__ import annotations

import numpy as np
import pytest

from campaign.methods.run_spread import line_of_mountings, scatter_in_mountings, spread_of_runs

WITHIN = np.tile(np.diag([0.01, 0.05]), (6, 1, 1))
MOUNTING = np.array([0, 0, 0, 1, 1, 1])


def draw(rng, mounting_sd: float, run_sd: float, mounting=MOUNTING):
    means = rng.normal(0.0, mounting_sd, (mounting.max() + 1, 2))
    noise = rng.normal(0.0, 1.0, (len(mounting), 2)) * np.sqrt([0.01, 0.05])
    return means[mounting] + rng.normal(0.0, run_sd, (len(mounting), 2)) + noise


def pooled(rng, mounting_sd, run_sd, sensors, mounting=MOUNTING):
    within = np.tile(WITHIN[0], (len(mounting), 1, 1))
    parts = [
        scatter_in_mountings(draw(rng, mounting_sd, run_sd, mounting), within, mounting)
        for _ in range(sensors)
    ]
    return sum(parts[1:], parts[0])


def test_components_are_recovered():
    spread = spread_of_runs(pooled(np.random.default_rng(51), 0.5, 0.3, 2000))
    assert np.sqrt(np.diag(spread.mounting)) == pytest.approx([0.5, 0.5], rel=0.06)
    assert np.sqrt(np.diag(spread.run)) == pytest.approx([0.3, 0.3], rel=0.06)


def test_unequal_mountings_are_not_biased():
    mounting = np.array([0, 0, 0, 0, 1, 2, 2])
    spread = spread_of_runs(pooled(np.random.default_rng(52), 0.5, 0.3, 2000, mounting))
    assert np.sqrt(np.diag(spread.mounting)) == pytest.approx([0.5, 0.5], rel=0.06)


@pytest.mark.parametrize("mounting", [np.zeros(6, dtype=int), np.arange(6)], ids=["one", "one run each"])
def test_without_repeated_mountings_there_is_one_component(mounting):
    spread = spread_of_runs(pooled(np.random.default_rng(53), 0.0, 0.4, 300, mounting))
    assert np.all(spread.mounting == 0.0)
    assert np.sqrt(np.diag(spread.run)) == pytest.approx([0.4, 0.4], rel=0.08)
    assert spread.degrees_of_freedom == 1500


def test_the_line_of_two_mountings_is_as_sure_as_two_mountings_make_it():
    rng = np.random.default_rng(54)
    spread = spread_of_runs(pooled(rng, 0.5, 0.2, 1000))
    found = [line_of_mountings(draw(rng, 0.5, 0.2), WITHIN, MOUNTING, spread, 0.0) for _ in range(2000)]
    scatter = np.cov(np.array([line.coefficients for line in found]).T)
    assert found[0].covariance == pytest.approx(scatter, abs=0.15 * scatter[0, 0])
    assert found[0].covariance[0, 0] > 0.9 * 0.5**2 / 2
    assert found[0].run_covariance == pytest.approx(spread.mounting + spread.run)


def test_degrees_of_freedom_lie_between_those_of_the_strata():
    rng = np.random.default_rng(55)
    degrees = [spread_of_runs(pooled(rng, sd, 0.2, 10)).degrees_of_freedom for sd in (0.0, 0.1, 5.0)]
    assert all(10.0 <= d <= 50.0 for d in degrees)
    assert degrees[2] == pytest.approx(10.0, rel=0.1)
