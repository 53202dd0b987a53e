"""An influence swept up and down at kept strains: the common course of pressure and thermal trials."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from datetime import datetime, timedelta

import numpy as np
import numpy.typing as npt

from campaign.simulation.effects import Effects, design_of
from campaign.simulation.mounted_sensor import MountedSensor, drawn_line, remarks, unmounted_sensor
from campaign.simulation.noise import sample_noise
from campaign.simulation.plan import Plan
from campaign.simulation.recording_text import SyntheticColumn, SyntheticRecording
from campaign.simulation.schedule import Schedule
from campaign.simulation.trial_plans import SweepPlan
from campaign.simulation.trial_truths import InfluenceTruth
from campaign.simulation.truth import GenerationTruth, Truth

FloatArray = npt.NDArray[np.float64]

FRAME_KIND = 9
"""Stream of random numbers of what is drawn for a module's mounting in the frame."""


@dataclass(frozen=True)
class SweepKind:
    """A kind of trial in which something is swept.

    Attributes
    ----------
    word
        The lab's word for the kind.
    stream
        Stream of random numbers; the next one gives what is a sensor's or a module's own.
    header, digits, noise
        Column of the influence, its digits, and the SD of its noise, in its unit.
    is_temperature
        Whether the swept column is the ambient temperature itself.
    """

    word: str
    stream: int
    header: str
    digits: int
    noise: float
    is_temperature: bool = False

    def truth(self, generation: GenerationTruth) -> InfluenceTruth:
        """Return what is true of this influence."""
        return generation.thermal if self.is_temperature else generation.pressure


@dataclass(frozen=True)
class SensorInfluence:
    """How the influence p moves one sensor: c, d and the loop (rising minus falling at mid range)."""

    coefficient: float
    per_strain: float
    loop: float


@dataclass(frozen=True, eq=False)
class Course:
    """The clock of a run: shape (rows,) each.

    Attributes
    ----------
    time_s, strain
        Time, and the indicated strain, with straight moves between the kept ones.
    share, rising
        Share of the influence's range, and 1 on the way up, −1 on the way down, 0 during moves.
    """

    time_s: FloatArray
    strain: FloatArray
    share: FloatArray
    rising: FloatArray


def course(plan: SweepPlan, run: int) -> Course:
    """Return the clock of *run* (from 1): up and down at one strain, a move, up and down at the next, ....

    Every second run takes the strains in reverse, so that what changes over a run is no change with strain.
    """
    period = 2.0 * plan.leg_s + plan.move_s
    count = int((len(plan.strains) * period - plan.move_s) / plan.sample_period_s) + 1
    time_s = plan.sample_period_s * np.arange(count, dtype=np.float64)
    number = np.minimum(time_s // period, len(plan.strains) - 1)
    within = time_s - number * period
    share = np.clip(1.0 - np.abs(within / plan.leg_s - 1.0), 0.0, 1.0)
    rising = np.where(within <= plan.leg_s, 1.0, np.where(within <= 2.0 * plan.leg_s, -1.0, 0.0))
    corners, values = [], []
    for place, strain in enumerate(plan.strains if run % 2 else plan.strains[::-1]):
        corners += [place * period, place * period + 2.0 * plan.leg_s]
        values += [strain, strain]
    return Course(time_s, np.interp(time_s, corners, values), share, rising)


def sensor_influence(kind: SweepKind, sensor: MountedSensor, seed: int) -> SensorInfluence:
    """Draw what is a sensor's own, the same in all its runs: c shared in part with its module, d, loop."""
    truth = kind.truth(sensor.truth)
    own = np.random.default_rng([seed, 1000 + sensor.number, kind.stream + 1]).standard_normal(3)
    shared = float(np.random.default_rng([seed, sensor.module_number, kind.stream + 1]).standard_normal())
    drawn = truth.coefficient + truth.module_sd * shared + truth.sensor_sd * float(own[0])
    named = {(module, place): value for module, place, value in truth.outliers}
    return SensorInfluence(
        named.get((sensor.module, sensor.place.position), drawn),
        truth.per_strain + truth.per_strain_sd * float(own[1]),
        truth.loop + truth.loop_sd * float(own[2]),
    )


def framed_sensor(
    plan: Plan, truth: Truth, effects: Effects, module: str, position: str, seed: int
) -> MountedSensor:
    """Return a sensor in the frame: the sensor of the staircases, in a mounting of its module's own."""
    sensor = unmounted_sensor(plan, truth, effects, module, position)
    shared = np.random.default_rng([seed, sensor.module_number, FRAME_KIND])
    zero = truth.stand.zero_mm * float(shared.standard_normal())
    temperature = truth.stand.temperature_c + truth.stand.temperature_sd_c * float(shared.standard_normal())
    own = np.random.default_rng([seed, 1000 + sensor.number, FRAME_KIND])
    parts = sensor.truth.components
    return replace(
        sensor.shifted(drawn_line(parts.mounting, shared) + drawn_line(parts.session, own)),
        zero_error_mm=zero,
        temperature_c=temperature,
        warmth=truth.stand.signal_per_kelvin * (temperature - truth.stand.temperature_c),
    )


def sweep_recordings(
    plan: Plan,
    sweep: SweepPlan,
    kind: SweepKind,
    truth: Truth,
    effects: Effects,
    schedule: Schedule,
    seed: int,
) -> Iterator[SyntheticRecording]:
    """Yield the log of every run of a kind, one wide file a run of a module."""
    design = design_of(plan)
    for module in sweep.modules or plan.modules:
        number = plan.modules.index(module)
        sensors = [
            framed_sensor(plan, truth, effects, module, position, seed)
            for position in sweep.positions
            if (module, position) not in sweep.missing
        ]
        day = schedule.mounting_day(plan, module, plan.sessions[0])
        for run in range(1, sweep.repetitions + 1):
            begun = datetime.combine(day, sweep.start) + timedelta(minutes=(run - 1) * sweep.run_minutes)
            generation = truth.of(int(design.module_generation[number]))
            draws = np.random.default_rng([seed, 100 * number + run, kind.stream])
            columns = _columns(sweep, kind, truth, generation, sensors, course(sweep, run), draws, seed)
            name = f"{module}_{kind.word}_r{run}_s{sweep.session}"
            yield SyntheticRecording(
                f"trials/{module}/{name}.csv", remarks(module, "", begun.isoformat()), columns
            )


def _columns(
    plan: SweepPlan,
    kind: SweepKind,
    truth: Truth,
    generation: GenerationTruth,
    sensors: list[MountedSensor],
    clock: Course,
    draws: np.random.Generator,
    seed: int,
) -> tuple[SyntheticColumn, ...]:
    count = len(clock.time_s)
    influence = plan.low + (plan.high - plan.low) * clock.share
    logged = influence + kind.noise * draws.standard_normal(count)
    columns = [
        SyntheticColumn("time_s", clock.time_s, 0 if plan.sample_period_s % 1 == 0 else 1),
        SyntheticColumn(kind.header, logged, kind.digits),
    ]
    for sensor in sensors:
        length = sensor.rest_length_mm * (1.0 + clock.strain)
        length = length + truth.stand.length_noise_mm * draws.standard_normal(count)
        run_sensor = sensor.shifted(drawn_line(sensor.truth.components.repetition, draws))
        run_change = kind.truth(generation).run_sd * float(draws.standard_normal())
        own = sensor_influence(kind, sensor, seed)
        own = replace(own, coefficient=own.coefficient + run_change)
        signal = swept_signal(plan, kind, run_sensor, own, clock)
        signal = signal + sample_noise(generation.noise, draws, count)
        place = sensor.place.position
        columns += [
            SyntheticColumn(f"stage_{place}_mm", length, 3),
            SyntheticColumn(f"capacitance_{place}_{truth.unit}", signal, 3),
        ]
    if not kind.is_temperature:
        ambient = np.full(count, sensors[0].temperature_c) + 0.02 * draws.standard_normal(count)
        columns.append(SyntheticColumn("ambient_C", ambient, 1))
    return tuple(columns)


def swept_signal(
    plan: SweepPlan, kind: SweepKind, sensor: MountedSensor, own: SensorInfluence, clock: Course
) -> FloatArray:
    """Return the signal over a run, shape (rows,), noise apart."""
    influence = plan.low + (plan.high - plan.low) * clock.share - kind.truth(sensor.truth).origin
    slope = own.coefficient + own.per_strain * clock.strain
    loop = own.loop * 0.5 * clock.rising * 4.0 * clock.share * (1.0 - clock.share)
    signal = sensor.signal(clock.strain) - (sensor.warmth if kind.is_temperature else 0.0)
    return np.asarray(signal + slope * influence + loop)
