"""Simulated loops: their widths, their first cycles and their delay are read back with numpy alone."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import numpy.typing as npt
import pytest

from campaign.simulation import (
    CyclicPlan,
    CyclicTruth,
    GenerationTruth,
    LoopWidth,
    Plan,
    SampleNoise,
    Settling,
    StandTruth,
    Truth,
    regular_plan,
    simulate_readings,
    simulate_recordings,
)
from campaign.simulation.recording_text import SyntheticRecording, recording_bytes

FloatArray = npt.NDArray[np.float64]

CYCLIC = CyclicPlan(positions=("S1",), cycles=6, repetitions=1)
PLAN = replace(regular_plan(modules=1, sensors=2, repetitions=1, levels=9, descending=True), cyclic=CYCLIC)
LAW_SLOPE = 64.0
"""0.80 pF/mm on the 80 mm of a regular plan, in pF per mm/mm."""


def _loops(plan: Plan, truth: Truth, seed: int = 3) -> list[SyntheticRecording]:
    return [file for file in simulate_recordings(plan, truth, seed) if "_loop_" in file.file]


def _truth(cyclic: CyclicTruth, noise: SampleNoise | None = None) -> Truth:
    return Truth(
        (GenerationTruth(loop=LoopWidth(0.8, 0.0), cyclic=cyclic, noise=noise or SampleNoise()),),
        StandTruth(),
    )


def _branches(recording: SyntheticRecording) -> list[tuple[FloatArray, FloatArray]]:
    """Strain and signal of every way up or down, in order, rests left out."""
    strain = recording.values("stage_mm") / 80.0 - 1.0
    signal = recording.values("capacitance_pF")
    moving = (strain > 0.004) & (strain < 0.396)
    edges = np.flatnonzero(np.diff(np.concatenate([[False], moving, [False]]).astype(int)))
    return [(strain[a:b], signal[a:b]) for a, b in zip(edges[::2], edges[1::2], strict=True)]


def _mid_widths(recording: SyntheticRecording) -> FloatArray:
    """Falling minus rising at mid strain, one a cycle."""
    mids = [np.interp(0.2, *(c[np.argsort(s)] for c in (s, y))) for s, y in _branches(recording)]
    return np.array(mids[1::2]) - np.array(mids[0::2])


def _signal_at_mid(recording: SyntheticRecording) -> FloatArray:
    mids = [np.interp(0.2, *(c[np.argsort(s)] for c in (s, y))) for s, y in _branches(recording)]
    return (np.array(mids[0::2]) + np.array(mids[1::2])) / 2


def test_every_run_has_its_cycles_and_its_rate() -> None:
    slow, fast = _loops(PLAN, _truth(CyclicTruth()))
    for recording, rate in ((slow, 0.01), (fast, 0.1)):
        branches = _branches(recording)
        assert len(branches) == 2 * CYCLIC.cycles
        step = float(np.diff(recording.values("time_s"))[0])
        assert [abs(np.polyfit(np.arange(len(s)) * step, s, 1)[0]) for s, _ in branches] == pytest.approx(
            [rate] * 12
        )


def test_the_settled_loop_is_that_of_the_staircases() -> None:
    readings = simulate_readings(PLAN, _truth(CyclicTruth()), 3).query(
        "sensor == 'S1' and nominal_level == 0.2"
    )
    by_direction = readings.groupby("direction")["signal"].mean()
    assert by_direction["falling"] - by_direction["rising"] == pytest.approx(0.8, abs=0.3)
    for recording in _loops(PLAN, _truth(CyclicTruth())):
        assert _mid_widths(recording) == pytest.approx([0.8] * 6, abs=2e-3)


def test_a_delay_widens_loops_by_twice_slope_times_rate_times_delay() -> None:
    slow, fast = _loops(PLAN, _truth(CyclicTruth(delay_s=0.05)))
    assert np.mean(_mid_widths(slow)) == pytest.approx(0.8 + 2 * LAW_SLOPE * 0.01 * 0.05, abs=2e-3)
    assert np.mean(_mid_widths(fast)) == pytest.approx(0.8 + 2 * LAW_SLOPE * 0.1 * 0.05, abs=2e-3)


def test_a_rate_dependent_loop_grows_by_its_share_a_decade() -> None:
    slow, fast = _loops(PLAN, _truth(CyclicTruth(width_share_per_decade=0.25)))
    assert np.mean(_mid_widths(slow)) == pytest.approx(0.8, abs=2e-3)
    assert np.mean(_mid_widths(fast)) == pytest.approx(1.0, abs=2e-3)


def test_first_cycles_are_wider_and_softer_and_part_of_it_comes_back() -> None:
    cyclic = CyclicTruth(first_width_share=0.5, softening_share=0.04, conditioning_cycles=1.0, recovered=0.25)
    first, second = _loops(PLAN, _truth(cyclic))
    left = np.exp(-np.arange(6.0))
    assert _mid_widths(first) == pytest.approx(0.8 * (1 + 0.5 * left), abs=3e-3)
    assert _mid_widths(second) == pytest.approx(0.8 * (1 + 0.5 * 0.25 * left), abs=3e-3)
    softened = _signal_at_mid(first) - _signal_at_mid(first)[-1]
    assert softened == pytest.approx(0.04 * 0.2 * LAW_SLOPE * (left - left[-1]), abs=3e-3)


def test_a_cyclic_run_is_of_the_same_sensor_as_its_staircases() -> None:
    """Over modules, levels of loops and of staircases agree but for the spread from run to run."""
    plan = replace(
        regular_plan(modules=8, sensors=2, repetitions=1, levels=9, descending=True), cyclic=CYCLIC
    )
    truth = Truth(
        (
            GenerationTruth(
                components=replace(
                    GenerationTruth().components,
                    module=replace(GenerationTruth().components.module, intercept=3.0),
                    sensor=replace(GenerationTruth().components.sensor, intercept=2.0, slope=4.0),
                    residual=0.05,
                )
            ),
        ),
        StandTruth(zero_mm=0.1, rest_length_mm=0.1, build_mm=0.0),
    )
    readings = simulate_readings(plan, truth, 9).query("sensor == 'S1' and nominal_level == 0.2")
    stairs = readings.groupby("module")["signal"].mean()
    loops = [_signal_at_mid(file).mean() for file in _loops(plan, truth, 9) if "_r1_" in file.file]
    assert np.std(stairs) > 1.5
    assert loops == pytest.approx(stairs.to_numpy(), abs=0.12)


def test_a_late_share_of_steps_changes_no_loop() -> None:
    """It is drawn in staircases only, as the page of the truth says."""
    still = _truth(CyclicTruth())
    late = Truth((replace(still.generations[0], settling=Settling(0.1, 2.0)),), still.stand)
    assert [recording_bytes(f) for f in _loops(PLAN, still)] == [
        recording_bytes(f) for f in _loops(PLAN, late)
    ]


@pytest.mark.parametrize(
    "wrong",
    [{"rates_per_s": ()}, {"rates_per_s": (0.0,)}, {"high": 0.0}, {"cycles": 0}, {"samples_a_cycle": 4}],
)
def test_a_plan_without_motion_is_refused(wrong: dict[str, object]) -> None:
    with pytest.raises(ValueError, match=r"rates|cycle"):
        replace(CYCLIC, **wrong)
