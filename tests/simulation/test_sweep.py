"""Simulated inflation and warmth: coefficients, loops and the odd sensor are read back with numpy alone."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import numpy.typing as npt
import pytest

from campaign.simulation import (
    GenerationTruth,
    InfluenceTruth,
    StandTruth,
    SweepPlan,
    Truth,
    regular_plan,
    simulate_recordings,
)
from campaign.simulation.recording_text import SyntheticRecording

FloatArray = npt.NDArray[np.float64]

SWEEP = SweepPlan(positions=("S1", "S2"))
BASE = regular_plan(modules=2, sensors=2, repetitions=1, levels=3)
PLAN = replace(BASE, pressure=SWEEP)


def _files(plan_of_sweep: SweepPlan, influence: InfluenceTruth, seed: int = 4) -> list[SyntheticRecording]:
    plan = replace(PLAN, pressure=plan_of_sweep)
    truth = Truth((GenerationTruth(pressure=influence),))
    return [file for file in simulate_recordings(plan, truth, seed) if "_inflate_" in file.file]


def _coefficients(recording: SyntheticRecording, place: str, header: str = "pressure_kPa") -> FloatArray:
    """Least-squares a, b, c, d of y = a + b ε + c p + d ε p."""
    strain = recording.values(f"stage_{place}_mm") / 80.0 - 1.0
    p = recording.values(header)
    design = np.column_stack([np.ones_like(p), strain, p, strain * p])
    found = np.linalg.lstsq(design, recording.values(f"capacitance_{place}_pF"), rcond=None)
    return np.asarray(found[0])


def test_the_coefficients_come_back_from_every_file_and_sensor() -> None:
    truth = InfluenceTruth(coefficient=0.05, per_strain=0.08)
    for recording in _files(SWEEP, truth):
        for place in SWEEP.positions:
            assert _coefficients(recording, place)[2:] == pytest.approx([0.05, 0.08], abs=1.5e-3)


def test_pressure_goes_up_and_down_at_each_kept_strain_and_every_second_run_in_reverse() -> None:
    first, second = _files(SWEEP, InfluenceTruth())[:2]
    for recording, strains in ((first, (0.0, 0.15, 0.30)), (second, (0.30, 0.15, 0.0))):
        time_s, pressure = recording.values("time_s"), recording.values("pressure_kPa")
        strain = recording.values("stage_S1_mm") / 80.0 - 1.0
        for number, kept in enumerate(strains):
            inside = (time_s >= 126 * number) & (time_s <= 126 * number + 120)
            assert strain[inside] == pytest.approx(kept, abs=1e-12)
            assert pressure[inside][[0, 60, 120]] == pytest.approx([0.0, 20.0, 0.0], abs=0.1)


def test_the_loop_lies_rising_above_falling_by_its_width_at_mid_pressure() -> None:
    recording = _files(SWEEP, InfluenceTruth(coefficient=0.05, loop=0.2))[0]
    signal = recording.values("capacitance_S1_pF")
    assert signal[30] - signal[90] == pytest.approx(0.2, abs=1e-9)
    assert signal[0] == pytest.approx(signal[120], abs=1e-9)


def test_spread_between_modules_sensors_and_runs_is_as_planned() -> None:
    plan = replace(
        regular_plan(modules=40, sensors=6, repetitions=1, levels=3),
        pressure=SweepPlan(
            positions=tuple(f"S{n}" for n in range(1, 7)), strains=(0.0, 0.3), sample_period_s=4.0
        ),
    )
    influence = InfluenceTruth(coefficient=0.05, module_sd=0.01, sensor_sd=0.006, run_sd=0.002)
    truth = Truth((GenerationTruth(pressure=influence),))
    files = [file for file in simulate_recordings(plan, truth, 6) if "_inflate_" in file.file]
    c = np.array([[_coefficients(file, f"S{n}")[2] for n in range(1, 7)] for file in files]).reshape(40, 2, 6)
    runs = (c[:, 0] - c[:, 1]) / np.sqrt(2)
    assert np.sqrt(np.mean(runs**2)) == pytest.approx(0.002, rel=0.2)
    sensors = c.mean(axis=1)
    within = np.sqrt(np.mean(np.var(sensors, axis=1, ddof=1)))
    assert within == pytest.approx(np.hypot(0.006, 0.002 / np.sqrt(2)), rel=0.2)
    assert np.std(sensors.mean(axis=1), ddof=1) == pytest.approx(
        np.hypot(0.01, within / np.sqrt(6)), rel=0.35
    )
    assert sensors.mean() == pytest.approx(0.05, abs=0.005)


def test_one_sensor_can_be_given_an_effect_of_its_own_and_one_left_unconnected() -> None:
    plan = replace(SWEEP, missing=frozenset({("M02", "S1")}))
    files = _files(plan, InfluenceTruth(coefficient=0.05, outliers=(("M02", "S2", 0.4),)))
    assert _coefficients(files[0], "S2")[2] == pytest.approx(0.05, abs=1e-3)
    assert _coefficients(files[2], "S2")[2] == pytest.approx(0.4, abs=2e-3)
    headers = [[column.header for column in file.columns] for file in files]
    assert "stage_S1_mm" in headers[0]
    assert "stage_S1_mm" not in headers[2]


def test_warmth_is_counted_from_its_origin() -> None:
    """At 22.5 °C the signal is that of the line alone, in a room of any temperature."""
    sweep = SweepPlan(positions=("S1",), modules=("M01",), strains=(0.0, 0.3), low=12.5, high=32.5)
    influence = InfluenceTruth(coefficient=0.03, per_strain=0.02, origin=22.5)
    plan = replace(BASE, thermal=sweep)
    truth = Truth(
        (GenerationTruth(thermal=influence),), StandTruth(temperature_sd_c=2.0, signal_per_kelvin=0.03)
    )
    files = [file for file in simulate_recordings(plan, truth, 4) if "_warm_" in file.file]
    assert len(files) == sweep.repetitions
    for recording in files:
        a, b, c, d = _coefficients(recording, "S1", "ambient_C")
        assert (c, d) == pytest.approx((0.03, 0.02), abs=1.5e-3)
        assert a + 22.5 * c == pytest.approx(8.0 + 64.0, abs=0.03)
        assert b + 22.5 * d == pytest.approx(64.0, abs=0.15)


@pytest.mark.parametrize("wrong", [{"strains": ()}, {"positions": ()}, {"high": 0.0}, {"leg_s": 0.0}])
def test_a_plan_without_a_sweep_is_refused(wrong: dict[str, object]) -> None:
    with pytest.raises(ValueError, match=r"sweep"):
        replace(SWEEP, **wrong)
