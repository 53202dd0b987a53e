"""Cyclic trials: loops that soften at first, and a signal that is logged late."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from datetime import datetime, timedelta

import numpy as np
import numpy.typing as npt

from campaign.simulation.effects import Effects
from campaign.simulation.mounted_sensor import MountedSensor, drawn_line, mounted_sensor, remarks
from campaign.simulation.noise import sample_noise, slow_noise
from campaign.simulation.plan import Plan
from campaign.simulation.recording_text import SyntheticColumn, SyntheticRecording
from campaign.simulation.schedule import Schedule
from campaign.simulation.trial_plans import CyclicPlan
from campaign.simulation.truth import Truth

FloatArray = npt.NDArray[np.float64]

KIND = 2
"""Stream of random numbers of this kind."""

WORD = "loop"
"""The invented lab's word for the kind."""

REST_SHARE = 0.05
"""Rest at either end of every cycle, as a share of the time that the cycle moves."""


@dataclass(frozen=True, eq=False)
class Motion:
    """Where the stage is: shape (times,) each.

    Attributes
    ----------
    share
        Share of the way from the lower to the upper strain.
    cycle
        Number of the cycle from 1.
    falling
        Whether the stage goes down.
    """

    share: FloatArray
    cycle: FloatArray
    falling: npt.NDArray[np.bool_]


def motion(plan: CyclicPlan, rate_per_s: float, time_s: FloatArray) -> Motion:
    """Return the motion at *time_s*, shape (times,): a rest below, the way up, a rest above, the way down.

    Before the first cycle and after the last the stage rests below.
    """
    period = 1.0 + 2.0 * REST_SHARE
    phase = np.clip(time_s / moving_time(plan, rate_per_s), 0.0, plan.cycles * period)
    number = np.minimum(np.floor(phase / period), plan.cycles - 1.0)
    within = phase - number * period
    corners = np.cumsum([REST_SHARE, 0.5, REST_SHARE, 0.5])
    share = np.interp(within, corners, [0.0, 1.0, 1.0, 0.0])
    return Motion(share, number + 1.0, within > corners[1])


def moving_time(plan: CyclicPlan, rate_per_s: float) -> float:
    """Return the time in s that a cycle moves, rests apart."""
    return 2.0 * (plan.high - plan.low) / rate_per_s


def cyclic_recordings(
    plan: Plan, truth: Truth, effects: Effects, schedule: Schedule, seed: int
) -> Iterator[SyntheticRecording]:
    """Yield the log of every cyclic run, one file a run of one sensor; nothing without a plan for them.

    Parameters
    ----------
    plan, truth, effects
        The design, what is true, and what was drawn from it: sensors are those of the staircases.
    schedule
        When modules are mounted.
    seed
        Seed of what belongs to a run, with its sensor and number: files do not depend on each other.
    """
    cyclic = plan.cyclic
    if cyclic is None:
        return
    for module in plan.modules:
        day = schedule.mounting_day(plan, module, cyclic.session)
        start = datetime.combine(day, cyclic.start)
        for place, position in enumerate(cyclic.positions):
            sensor = mounted_sensor(plan, truth, effects, module, position, cyclic.session)
            for turn, rate in enumerate(cyclic.run_rates_per_s):
                slot = turn * len(cyclic.positions) + place
                started = (start + timedelta(minutes=slot * cyclic.run_minutes)).isoformat()
                yield _recording(cyclic, truth, sensor, turn + 1, rate, started, seed)


def _recording(
    plan: CyclicPlan, truth: Truth, sensor: MountedSensor, run: int, rate: float, started: str, seed: int
) -> SyntheticRecording:
    draws = np.random.default_rng([seed, 100 * sensor.number + run, KIND])
    run_sensor = sensor.shifted(drawn_line(sensor.truth.components.repetition, draws))
    step = moving_time(plan, rate) / plan.samples_a_cycle
    rows = int((plan.cycles * (1.0 + 2.0 * REST_SHARE) + REST_SHARE) * plan.samples_a_cycle)
    time_s = step * np.arange(rows, dtype=np.float64)
    run_width = sensor.truth.cyclic.run_sd * float(draws.standard_normal())
    signal = loop_signal(plan, run_sensor, run, rate, run_width, time_s)
    signal = signal + sample_noise(sensor.truth.noise, draws, len(time_s))
    strain = plan.low + (plan.high - plan.low) * motion(plan, rate, time_s).share
    length = sensor.rest_length_mm * (1.0 + strain)
    length = length + truth.stand.length_noise_mm * draws.standard_normal(len(time_s))
    ambient = sensor.temperature_c + 0.05 * slow_noise(draws, len(time_s), 0.99)
    name = f"{sensor.module}_{sensor.place.position}_{WORD}_r{run}_s{plan.session}"
    return SyntheticRecording(
        f"trials/{sensor.module}/{name}.csv",
        remarks(sensor.module, sensor.place.position, started),
        (
            SyntheticColumn("time_s", time_s, 2 if step < 1 else 1),
            SyntheticColumn("stage_mm", length, 3),
            SyntheticColumn(f"capacitance_{truth.unit}", signal, 3),
            SyntheticColumn("ambient_C", ambient, 1),
        ),
    )


def loop_signal(
    plan: CyclicPlan, sensor: MountedSensor, run: int, rate: float, run_width: float, time_s: FloatArray
) -> FloatArray:
    """Return the signal as logged at *time_s*, noise apart: what the sensor gave a delay earlier.

    The loop has the shape of the staircases', 4u(1 − u) of the way u, falling above rising by the sensor's
    width at mid strain; its first cycles are wider and their signal higher.
    """
    cyclic = sensor.truth.cyclic
    moved = motion(plan, rate, time_s - cyclic.delay_s)
    left = cyclic.remaining(moved.cycle, run)
    strain = plan.low + (plan.high - plan.low) * moved.share
    rise = sensor.signal(strain) - sensor.signal(np.full_like(strain, plan.low))
    settled = (sensor.loop_width + run_width) * (
        1.0 + cyclic.width_share_per_decade * np.log10(rate / cyclic.reference_rate_per_s)
    )
    width = settled * (1.0 + cyclic.first_width_share * left)
    half = np.where(moved.falling, 0.5, -0.5) * 4.0 * moved.share * (1.0 - moved.share)
    return np.asarray(sensor.signal(strain) + cyclic.softening_share * left * rise + width * half)
