"""Allan deviation against printed values, intervals against simulation, gaps, and what averaging buys."""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from campaign.methods.allan import (
    equivalent_degrees_of_freedom,
    evenly_sampled,
    noise_floors,
    overlapping_allan_deviation,
)

ALLAN = Path(__file__).parents[1] / "reference" / "allan"

PRINTED_1000 = {1: 0.2922319, 10: 0.09159953, 100: 0.03241343}
"""NIST SP 1065, 12.4 (1000-point test suite), overlapping Allan deviation; seven printed digits."""

PRINTED_NBS14 = {1: 91.22945, 2: 85.95287}
"""NIST SP 1065, 12.4 (NBS Monograph 140 test suite), overlapping Allan deviation."""


def table(name: str) -> pd.DataFrame:
    return pd.read_csv(ALLAN / f"{name}.csv", comment="#")


def test_thousand_point_set_to_printed_digits_from_frequency_and_from_phase():
    frequency = table("nist1065_1000point")["freq"].to_numpy()
    phase = np.concatenate([[0.0], np.cumsum(frequency)])
    factors = np.array(list(PRINTED_1000))
    for values, kind in ((frequency, "frequency"), (phase, "phase")):
        found = overlapping_allan_deviation(values, 1.0, kind=kind, factors=factors)
        for factor, deviation in zip(found.factors, found.deviations, strict=True):
            assert float(f"{deviation:.7g}") == PRINTED_1000[int(factor)]


def test_nbs14_set_to_printed_digits_from_frequency_and_from_phase():
    rows = table("nbs14_10point")
    for values, kind in ((rows["freq_to_next"].dropna(), "frequency"), (rows["phase"], "phase")):
        found = overlapping_allan_deviation(values.to_numpy(), 1.0, kind=kind, factors=np.array([1, 2]))
        assert [float(f"{v:.7g}") for v in found.deviations] == pytest.approx(
            list(PRINTED_NBS14.values()), abs=1.1e-5
        )


@pytest.mark.parametrize("exponent", [2, 0, -2])
@pytest.mark.parametrize("factor", [3, 20])
def test_degrees_of_freedom_are_those_of_simulated_noise(exponent, factor):
    """2 E²/Var of 800 simulated variances; its own scatter is about 5 %, four times that is allowed."""
    rng = np.random.default_rng(5)
    white = rng.normal(size=(800, 301))
    noise = {2: np.diff(white), 0: white[:, 1:], -2: np.cumsum(white[:, 1:], axis=1)}[exponent]
    sums = np.concatenate([np.zeros((800, 1)), np.cumsum(noise, axis=1)], axis=1)
    differences = sums[:, 2 * factor :] - 2 * sums[:, factor:-factor] + sums[:, : -2 * factor]
    variances = np.mean(differences**2, axis=1)
    simulated = 2 * variances.mean() ** 2 / variances.var()
    given_freedom = equivalent_degrees_of_freedom(exponent, factor, differences.shape[1])
    assert given_freedom == pytest.approx(simulated, rel=0.2)


def test_intervals_of_white_noise_cover_the_truth():
    rng = np.random.default_rng(6)
    covered = []
    for _ in range(200):
        found = overlapping_allan_deviation(rng.normal(size=400), 1.0, factors=np.array([1, 8, 40]))
        truth = 1.0 / np.sqrt(found.factors)
        covered.append((found.low <= truth) & (truth <= found.high))
    assert np.mean(covered, axis=0).min() > 0.89


def test_noise_types_are_told_apart():
    white = np.random.default_rng(7).normal(size=4000)
    for noise, exponent in ((white, 0), (np.cumsum(white), -2), (np.diff(white), 2)):
        assert overlapping_allan_deviation(noise, 1.0).noise_exponents[0] == exponent


def test_white_noise_has_a_level_and_no_floor():
    floors = noise_floors(overlapping_allan_deviation(np.random.default_rng(8).normal(size=20_000), 0.5))
    assert floors.white_low < np.sqrt(0.5) < floors.white_high
    assert not floors.reached
    assert np.isnan(floors.flicker)


def test_drifting_noise_has_a_best_averaging_time():
    """White noise of SD 1 and a random walk of step k: the least deviation is at √3/k samples."""
    rng = np.random.default_rng(9)
    step = 0.03
    series = rng.normal(size=60_000) + np.cumsum(step * rng.normal(size=60_000))
    floors = noise_floors(overlapping_allan_deviation(series, 1.0))
    assert floors.reached
    assert np.sqrt(3) / step / 2 < floors.best_averaging_time_s < np.sqrt(3) / step * 2
    assert floors.flicker_low < floors.flicker < floors.flicker_high


def test_missing_samples_are_left_out_and_cost_degrees_of_freedom():
    series = np.random.default_rng(10).normal(size=2000)
    holed = series.copy()
    holed[500:520] = np.nan
    whole, found = (overlapping_allan_deviation(v, 1.0, factors=np.array([1, 16])) for v in (series, holed))
    assert found.deviations == pytest.approx(whole.deviations, rel=0.05)
    assert (found.degrees_of_freedom < whole.degrees_of_freedom).all()
    assert found.differences[1] == whole.differences[1] - (20 + 2 * 16 - 1)


def test_samples_are_put_on_their_grid_and_uneven_sampling_is_refused():
    times = np.arange(50) * 0.2
    kept = np.delete(np.arange(50), [7, 8])
    found = evenly_sampled(times[kept], times[kept])
    assert found is not None
    grid, interval = found
    assert interval == pytest.approx(0.2)
    assert np.flatnonzero(np.isnan(grid)).tolist() == [7, 8]
    assert evenly_sampled(np.cumsum(np.random.default_rng(1).uniform(0.5, 3.0, 60)), times) is None


@settings(max_examples=40, deadline=None)
@given(st.lists(st.floats(-1e3, 1e3), min_size=12, max_size=60), st.floats(-1e3, 1e3), st.floats(0.1, 10))
def test_a_constant_added_changes_nothing_and_a_factor_scales(values, offset, factor):
    series = np.array(values) + np.arange(len(values)) % 3
    first = overlapping_allan_deviation(series, 1.0)
    moved = overlapping_allan_deviation(series * factor + offset, 1.0)
    assert moved.deviations == pytest.approx(first.deviations * factor, rel=1e-6, abs=1e-6)
