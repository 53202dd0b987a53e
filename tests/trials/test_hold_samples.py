"""Samples that are kept of a hold: all of a short one; of a long one nothing that a reader would miss."""

from __future__ import annotations

import numpy as np
import pytest

from campaign.trials.hold_samples import FIRST_SAMPLES, MOST_SAMPLES, kept_samples


def drifting(count: int) -> tuple[np.ndarray, np.ndarray]:
    times = np.arange(count) * 0.1
    return times, np.log1p(times) + np.random.default_rng(5).normal(0.0, 0.01, count)


def test_all_samples_of_a_hold_of_usual_length_are_kept() -> None:
    times, signal = drifting(MOST_SAMPLES)
    kept = kept_samples(times, signal)
    assert kept[0] is times
    assert kept[1] is signal


@pytest.mark.parametrize("count", [MOST_SAMPLES + 1, 432_000, 1_000_000])
def test_of_a_long_hold_no_more_are_kept_than_fit_and_no_spike_is_lost(count: int) -> None:
    times, signal = drifting(count)
    spikes = [FIRST_SAMPLES + 3, count // 2, count - 2]
    signal[spikes] = [50.0, -50.0, 60.0]
    kept_times, kept_signal = kept_samples(times, signal)
    assert MOST_SAMPLES / 2 < len(kept_signal) <= MOST_SAMPLES
    np.testing.assert_array_equal(kept_times[:FIRST_SAMPLES], times[:FIRST_SAMPLES])
    assert np.all(np.diff(kept_times) > 0)
    places = np.searchsorted(times, kept_times)
    np.testing.assert_array_equal(kept_signal, signal[places])
    assert set(spikes) <= set(places.tolist())
    assert (kept_signal.min(), kept_signal.max()) == (-50.0, 60.0)
    assert np.max(np.diff(places)) <= 2 * -(-count // ((MOST_SAMPLES - FIRST_SAMPLES) // 2)) + 1
