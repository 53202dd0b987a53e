"""Simulated holds: relaxation, its return, drift, flicker and warmth are read back with numpy alone."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import numpy.typing as npt
import pytest

from campaign.simulation import (
    GenerationTruth,
    HoldPlan,
    HoldTruth,
    LogarithmicRelaxation,
    SampleNoise,
    StandTruth,
    StretchedRelaxation,
    Truth,
    regular_plan,
    simulate_recordings,
)
from campaign.simulation.noise import flicker_noise
from campaign.simulation.recording_text import SyntheticRecording
from campaign.simulation.trial_truths import Relaxation

FloatArray = npt.NDArray[np.float64]

STRETCHED = HoldPlan((("M01", "S1"),), strain=0.25)
RESTING = HoldPlan((("M01", "S1"),), repetition=2, sample_period_s=1.0)
STEP = 64.0 * 0.25
"""Change of signal by the step in pF: 0.80 pF/mm on 80 mm, a quarter longer."""


def _hold(hold: HoldPlan, truth: HoldTruth, seed: int = 5, per_kelvin: float = 0.0) -> SyntheticRecording:
    plan = replace(regular_plan(modules=2, sensors=1, repetitions=1, levels=3), holds=(hold,))
    whole = Truth(
        (GenerationTruth(hold=truth, noise=SampleNoise()),), StandTruth(signal_per_kelvin=per_kelvin)
    )
    return next(file for file in simulate_recordings(plan, whole, seed) if "_hold_" in file.file)


def _since_ramp(hold: HoldPlan, recording: SyntheticRecording) -> tuple[FloatArray, FloatArray]:
    """Time since the end of the ramp and signal, over the hold."""
    since = recording.values("time_s") - hold.before_s - hold.ramp_s
    inside = (since >= 0) & (since <= hold.duration_s)
    return since[inside], recording.values("capacitance_pF")[inside]


def test_a_logarithmic_hold_falls_alike_in_every_decade() -> None:
    recording = _hold(STRETCHED, HoldTruth(LogarithmicRelaxation(0.01, 2.0)))
    since, signal = _since_ramp(STRETCHED, recording)
    slope = np.polyfit(np.log10(1.0 + since / 2.0), signal, 1)[0]
    assert slope == pytest.approx(-0.01 * STEP, rel=1e-6)


def test_a_stretched_exponential_has_lost_its_share_to_one_over_e_at_its_time() -> None:
    recording = _hold(STRETCHED, HoldTruth(StretchedRelaxation(0.03, 200.0, 0.5)))
    since, signal = _since_ramp(STRETCHED, recording)
    assert signal[0] - signal[since == 200.0][0] == pytest.approx(0.03 * STEP * (1 - np.exp(-1)), rel=1e-6)
    assert signal[0] - signal[since == 800.0][0] == pytest.approx(0.03 * STEP * (1 - np.exp(-2)), rel=1e-6)


@pytest.mark.parametrize("relaxation", [LogarithmicRelaxation(0.02), StretchedRelaxation(0.03)])
def test_what_is_left_after_the_hold_comes_back(relaxation: Relaxation) -> None:
    recording = _hold(STRETCHED, HoldTruth(relaxation, left_after=0.4, recovery_s=100.0))
    time_s, signal = recording.values("time_s"), recording.values("capacitance_pF")
    returned = STRETCHED.before_s + STRETCHED.duration_s + 2 * STRETCHED.ramp_s
    gone = float(relaxation.at(np.array([STRETCHED.duration_s]))[0]) * STEP
    zero = signal[time_s < STRETCHED.before_s].mean()
    assert zero - signal[time_s == returned][0] == pytest.approx(0.4 * gone, rel=1e-6)
    assert zero - signal[time_s == returned + 100.0][0] == pytest.approx(0.4 * gone / np.e, rel=1e-6)


def test_sensors_relax_differently_and_each_alike_in_all_its_holds() -> None:
    sensors = tuple((f"M{number:02d}", "S1") for number in range(1, 41))
    holds = tuple(
        HoldPlan(sensors, strain=strain, repetition=number, duration_s=600.0, after_s=0.0)
        for number, strain in ((1, 0.2), (2, 0.4))
    )
    plan = replace(regular_plan(modules=40, sensors=1, repetitions=1, levels=3), holds=holds)
    truth = HoldTruth(LogarithmicRelaxation(0.01), relative_sd=0.2)
    whole = Truth((GenerationTruth(hold=truth),))
    files = [file for file in simulate_recordings(plan, whole, 8) if "_hold_" in file.file]
    shares = []
    for hold, recordings in zip(holds, (files[:40], files[40:]), strict=True):
        falls = [s[0] - s[-1] for _, s in (_since_ramp(hold, file) for file in recordings)]
        shares.append(np.array(falls) / (64.0 * hold.strain))
    assert shares[0] == pytest.approx(shares[1], rel=1e-6)
    assert np.std(shares[0], ddof=1) / np.mean(shares[0]) == pytest.approx(0.2, abs=0.07)


def test_at_rest_nothing_moves_and_the_zero_drifts() -> None:
    recording = _hold(RESTING, HoldTruth(drift_per_hour=0.3))
    time_s, signal = recording.values("time_s"), recording.values("capacitance_pF")
    assert np.ptp(recording.values("stage_mm")) == 0.0
    assert 3600.0 * np.polyfit(time_s, signal, 1)[0] == pytest.approx(0.3, rel=1e-6)


def test_a_room_that_warms_up_moves_the_signal_by_the_coefficient() -> None:
    warmed = replace(RESTING, warming_k=5.0)
    recording = _hold(warmed, HoldTruth(), per_kelvin=0.04)
    ambient, signal = recording.values("ambient_C"), recording.values("capacitance_pF")
    assert ambient[-600:].mean() - ambient[:600].mean() == pytest.approx(5.0, abs=0.2)
    assert np.polyfit(ambient, signal, 1)[0] == pytest.approx(0.04, rel=1e-6)
    assert np.ptp(_hold(RESTING, HoldTruth()).values("ambient_C")) < 0.5


def test_flicker_has_the_stated_allan_deviation_at_every_averaging_time() -> None:
    """Mean over 60 records of the Allan variance, half the mean square of differences of adjoining means."""
    found: dict[int, list[float]] = {8: [], 32: [], 128: []}
    for seed in range(60):
        series = flicker_noise(np.random.default_rng(seed), 2048, 0.5)
        for size, variances in found.items():
            means = series.reshape(-1, size).mean(axis=1)
            variances.append(float(np.mean(np.diff(means) ** 2) / 2))
    assert [np.sqrt(np.mean(v)) for v in found.values()] == pytest.approx([0.5] * 3, rel=0.06)


def test_times_that_are_not_positive_are_refused() -> None:
    with pytest.raises(ValueError, match="positive"):
        HoldPlan((("M01", "S1"),), duration_s=0.0)
