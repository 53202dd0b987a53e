"""A drifting plateau is found although its drift looks like slow noise; settled ones are seldom accused."""

from __future__ import annotations

import numpy as np
import pytest

from campaign.methods.autocorrelation import stretch_means
from campaign.recordings.recording import Trial, TrialIdentity
from campaign.simulation import (
    Components,
    GenerationTruth,
    SampleNoise,
    Truth,
    regular_plan,
    simulate_recordings,
)
from campaign.trials.staircase import readings_of_staircase

NOISE = SampleNoise(white=0.03, slow=0.015, slow_correlation=0.5)
IDENTITY = TrialIdentity(
    "a.csv",
    "staircase",
    "one",
    "",
    "M01",
    "S1",
    "S1",
    1,
    "",
    "",
    "",
    rest_length_mm=80.0,
    rest_length_uncertainty_mm=0.1,
)


def _trial(seed: int, fall: float) -> Trial:
    """Nine plateaus of 26 samples; the signal of the fifth falls by *fall* pF while the stage stands."""
    plan = regular_plan(modules=1, sensors=1, repetitions=1, levels=9)
    truth = Truth((GenerationTruth(components=Components(), noise=NOISE),))
    recording = simulate_recordings(plan, truth, seed)[0]
    time = recording.values("time_s")
    signal = recording.values("capacitance_pF").copy()
    since = time - 4 * 14.0
    signal -= np.where((since >= 0) & (since < 13.0), fall * since / 13.0, 0.0)
    return Trial(IDENTITY, signal, "pF", time_s=time, length_mm=recording.values("stage_mm"))


def test_a_clear_drift_is_always_found_and_only_there() -> None:
    for seed in range(20):
        settled = readings_of_staircase(_trial(seed, 0.9)).readings.frame["settled"].tolist()
        assert settled[4] is False
        assert sum(settled) >= 7


def test_settled_trials_are_seldom_noted() -> None:
    noted = [
        not readings_of_staircase(_trial(seed, 0.0)).readings.frame["settled"].all() for seed in range(100)
    ]
    assert np.mean(noted) <= 0.06


@pytest.mark.parametrize("count", [12, 20, 40])
def test_standard_errors_of_slopes_are_their_spread(count: int) -> None:
    """Independent samples: the spread of 2,000 simulated slopes is the answer."""
    generator = np.random.default_rng(count)
    values = generator.standard_normal(2000 * count)
    means = stretch_means(values, np.tile(np.arange(float(count)), 2000), np.full(2000, count))
    assert np.median(means.slope_standard_errors) == pytest.approx(means.slopes.std(), rel=0.15)
    assert means.slope_degrees_of_freedom == pytest.approx(count - 2.0, rel=0.15)
