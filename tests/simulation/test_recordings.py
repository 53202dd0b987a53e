"""Simulated recordings tell of the same runs as simulated readings."""

from __future__ import annotations

import csv
import io

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from campaign.simulation import (
    GenerationTruth,
    LoopWidth,
    SampleNoise,
    Settling,
    StaircasePlan,
    Truth,
    regular_plan,
    simulate_readings,
    simulate_recordings,
)
from campaign.simulation.recording_text import MARKED, PLAIN, SEMICOLON, Dialect, recording_bytes
from campaign.simulation.recordings import FIRST_DAY
from campaign.simulation.schedule import Schedule
from campaign.simulation.schedule import testing_order as order_of_testing
from campaign.simulation.staircase import step_timing

TRUTH = Truth(
    (GenerationTruth(loop=LoopWidth(0.5, 0.1), noise=SampleNoise(0.02, 0.02), settling=Settling(0.05, 1.0)),)
)


@pytest.mark.parametrize("shared", [False, True])
def test_settled_means_of_the_logs_are_the_readings(shared: bool) -> None:
    plan = regular_plan(modules=2, sensors=3, repetitions=2, levels=4, descending=True, shared_runs=shared)
    quiet = Truth((GenerationTruth(loop=LoopWidth(0.5, 0.1)),))
    readings = simulate_readings(plan, quiet, 7)
    timing = step_timing(plan.staircase)
    settled = timing.since_step_s > plan.staircase.dwell_s / 2
    for recording in simulate_recordings(plan, TRUTH, 7):
        rows = readings[readings["trial"] == recording.file]
        for sensor, of_sensor in rows.groupby("sensor"):
            name = f"capacitance_{sensor}_pF" if shared else "capacitance_pF"
            signal = recording.values(name)
            means = [signal[settled & (timing.plateau == k)].mean() for k in range(len(of_sensor))]
            assert means == pytest.approx(of_sensor["signal"].to_numpy(), abs=0.06)


def test_same_seed_same_bytes_and_another_seed_others() -> None:
    plan = regular_plan(modules=1, sensors=2, repetitions=1, levels=3)
    first, again, other = (
        [recording_bytes(recording) for recording in simulate_recordings(plan, TRUTH, seed)]
        for seed in (1, 1, 2)
    )
    assert first == again
    assert all(one != another for one, another in zip(first, other, strict=True))


@given(
    st.integers(1, 6),
    st.booleans(),
    st.floats(2.0, 20.0),
    st.floats(0.5, 3.0),
    st.sampled_from([0.25, 0.5, 1.0]),
)
def test_the_clock_of_a_staircase_holds_every_plateau_for_its_dwell(
    levels: int, descending: bool, dwell: float, step: float, period: float
) -> None:
    staircase = StaircasePlan(tuple(0.1 * k for k in range(levels)), descending, dwell, step, period)
    timing = step_timing(staircase)
    held = timing.since_step_s >= 0
    for plateau in range(len(staircase.visits)):
        count = int((held & (timing.plateau == plateau)).sum())
        assert abs(count - dwell / period) <= 1.0 + 1e-9
    assert np.all(timing.progress[held] == 1.0)
    assert np.all(np.diff(timing.plateau) >= 0)


def test_the_missing_share_of_a_step_comes_with_its_time_constant() -> None:
    plan = regular_plan(modules=1, sensors=1, repetitions=1, levels=2)
    still = simulate_recordings(plan, Truth(), 1)[0].values("capacitance_pF")
    late = simulate_recordings(plan, Truth((GenerationTruth(settling=Settling(0.1, 2.0)),)), 1)[0]
    timing = step_timing(plan.staircase)
    second = (timing.plateau == 1) & (timing.since_step_s >= 0)
    missing = (still - late.values("capacitance_pF"))[second]
    step = still[second][0] - still[0]
    assert missing == pytest.approx(0.1 * step * np.exp(-timing.since_step_s[second] / 2.0), rel=1e-9)


@pytest.mark.parametrize("dialect", [PLAIN, SEMICOLON, MARKED])
def test_a_dialect_changes_signs_and_no_value(dialect: Dialect) -> None:
    recording = simulate_recordings(regular_plan(modules=1, sensors=1, repetitions=1, levels=2), TRUTH, 5)[0]
    data = recording_bytes(recording, dialect)
    assert data.startswith(b"\xef\xbb\xbf") == dialect.byte_order_mark
    text = data.decode("utf-8-sig")
    lines = [line for line in text.split(dialect.line_end) if line and not line.startswith("#")]
    rows = list(csv.reader(io.StringIO("\n".join(lines)), delimiter=dialect.separator))
    assert rows[0] == [column.header for column in recording.columns]
    table = np.array([[float(field.replace(dialect.decimal, ".")) for field in row] for row in rows[1:]])
    assert table[:, 1] == pytest.approx(recording.values("stage_mm"), abs=5.01e-4)


def test_generations_take_turns_and_no_two_runs_start_together() -> None:
    plan = regular_plan(generations=2, modules=3, sensors=2, sessions=2, repetitions=2)
    assert order_of_testing(plan) == ("M01", "M04", "M02", "M05", "M03", "M06")
    diary = Schedule(FIRST_DAY)
    starts = [diary.run_start(plan, run) for run in range(6 * 2 * 2 * 2)]
    assert len(set(starts)) == len(starts)
    assert max(starts).date() == diary.last_day(plan)
