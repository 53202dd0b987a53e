"""Holds: a strain kept for long, the rest length kept as long, and a room that warms up meanwhile."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from datetime import datetime

import numpy as np
import numpy.typing as npt

from campaign.simulation.effects import Effects
from campaign.simulation.mounted_sensor import MountedSensor, drawn_line, mounted_sensor, remarks
from campaign.simulation.noise import flicker_noise, slow_noise
from campaign.simulation.plan import Plan
from campaign.simulation.recording_text import SyntheticColumn, SyntheticRecording
from campaign.simulation.schedule import Schedule
from campaign.simulation.trial_plans import HoldPlan
from campaign.simulation.truth import Truth

FloatArray = npt.NDArray[np.float64]

KIND = 3
"""Stream of random numbers of this kind."""

SENSOR_KIND = 4
"""Stream of what is a sensor's own."""

WORD = "hold"

WARMING_S = 240.0
"""Time constant with which a room takes its new temperature, in s."""


@dataclass(frozen=True)
class SensorAging:
    """What time does to one sensor: relaxation relative to its generation's, and drift in units an hour."""

    relaxation: float
    drift_per_hour: float


def sensor_aging(sensor: MountedSensor, seed: int) -> SensorAging:
    """Draw what is a sensor's own: the same in all its holds."""
    draws = np.random.default_rng([seed, sensor.number, SENSOR_KIND]).standard_normal(2)
    hold = sensor.truth.hold
    return SensorAging(
        1.0 + hold.relative_sd * float(draws[0]), hold.drift_per_hour + hold.drift_sd * float(draws[1])
    )


def hold_recordings(
    plan: Plan, truth: Truth, effects: Effects, schedule: Schedule, seed: int
) -> Iterator[SyntheticRecording]:
    """Yield the log of every hold, one file a hold of one sensor; arguments as for the cyclic ones."""
    for hold in plan.holds:
        for module, position in hold.sensors:
            sensor = mounted_sensor(plan, truth, effects, module, position, hold.session)
            day = schedule.mounting_day(plan, module, hold.session)
            yield _recording(hold, truth, sensor, datetime.combine(day, hold.start).isoformat(), seed)


def strain_over_time(plan: HoldPlan, time_s: FloatArray) -> FloatArray:
    """Return the kept strain at *time_s*, shape (times,), with straight moves to it and back."""
    if plan.at_rest:
        return np.zeros_like(time_s)
    reached = plan.before_s + plan.ramp_s
    left = reached + plan.duration_s
    corners = [0.0, plan.before_s, reached, left, left + plan.ramp_s]
    return np.asarray(np.interp(time_s, corners, [0.0, 0.0, plan.strain, plan.strain, 0.0]))


def hold_signal(plan: HoldPlan, sensor: MountedSensor, aging: SensorAging, time_s: FloatArray) -> FloatArray:
    """Return the signal at *time_s*, shape (times,), noise and temperature apart.

    The step relaxes from the end of the ramp; what is gone by the end of the hold comes back after it. At
    rest the zero drifts.
    """
    truth = sensor.truth.hold
    signal = sensor.signal(strain_over_time(plan, time_s))
    if plan.at_rest:
        return np.asarray(signal + aging.drift_per_hour * (time_s - time_s[0]) / 3600.0)
    rest, held = sensor.signal(np.array([0.0, plan.strain]))
    since = time_s - plan.before_s - plan.ramp_s
    back = since - plan.duration_s - plan.ramp_s
    gone = aging.relaxation * truth.relaxation.at(np.clip(since, 0.0, plan.duration_s))
    left = np.interp(back, [-plan.ramp_s, 0.0], [1.0, truth.left_after])
    left = left * np.exp(-np.maximum(back, 0.0) / truth.recovery_s)
    return np.asarray(signal - (held - rest) * gone * left)


def _recording(
    plan: HoldPlan, truth: Truth, sensor: MountedSensor, started: str, seed: int
) -> SyntheticRecording:
    draws = np.random.default_rng([seed, 100 * sensor.number + plan.repetition, KIND])
    run_sensor = sensor.shifted(drawn_line(sensor.truth.components.repetition, draws))
    total = plan.duration_s if plan.at_rest else _stretched_time(plan)
    time_s = plan.sample_period_s * np.arange(int(total / plan.sample_period_s) + 1, dtype=np.float64)
    count = len(time_s)
    ambient = sensor.temperature_c + 0.05 * slow_noise(draws, count, 0.99) + warming(plan, time_s)
    signal = hold_signal(plan, run_sensor, sensor_aging(sensor, seed), time_s)
    signal = signal + truth.stand.signal_per_kelvin * (ambient - sensor.temperature_c)
    signal = signal + sensor.truth.noise.white * draws.standard_normal(count)
    signal = signal + flicker_noise(draws, count, sensor.truth.hold.flicker)
    length = sensor.rest_length_mm * (1.0 + strain_over_time(plan, time_s))
    length = length + truth.stand.length_noise_mm * draws.standard_normal(count)
    name = f"{sensor.module}_{sensor.place.position}_{WORD}_r{plan.repetition}_s{plan.session}"
    return SyntheticRecording(
        f"trials/{sensor.module}/{name}.csv",
        remarks(sensor.module, sensor.place.position, started),
        (
            SyntheticColumn("time_s", time_s, 0 if plan.sample_period_s % 1 == 0 else 1),
            SyntheticColumn("stage_mm", length, 3),
            SyntheticColumn(f"capacitance_{truth.unit}", signal, 3),
            SyntheticColumn("ambient_C", ambient, 1),
        ),
    )


def _stretched_time(plan: HoldPlan) -> float:
    return plan.before_s + plan.duration_s + plan.after_s + 2.0 * plan.ramp_s


def warming(plan: HoldPlan, time_s: FloatArray) -> FloatArray:
    """Return the step of the room's temperature at *time_s* in K: half-way, taken with a time constant."""
    since = np.maximum(time_s - 0.5 * plan.duration_s, 0.0)
    return np.asarray(plan.warming_k * (1.0 - np.exp(-since / WARMING_S)))
