"""Staircases as logs over time: a stage that steps, a signal that settles, noise on both."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.simulation.effects import Effects, design_of
from campaign.simulation.noise import sample_noise, slow_noise
from campaign.simulation.plan import Plan, StaircasePlan
from campaign.simulation.readings import plateaus, reading_signals, trial_path
from campaign.simulation.recording_text import SyntheticColumn, SyntheticRecording
from campaign.simulation.schedule import Schedule
from campaign.simulation.truth import GenerationTruth, Settling, Truth

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

KIND = "staircase"


@dataclass(frozen=True, eq=False)
class StepTiming:
    """The clock of one staircase.

    Attributes
    ----------
    time_s
        Shape (rows,), from the start of the run.
    plateau
        Shape (rows,), number of the plateau that is held or approached.
    progress
        Shape (rows,), share of the move to it that is done, 0 to 1.
    since_step_s
        Shape (rows,), time since the end of the move, negative while it lasts.
    """

    time_s: FloatArray
    plateau: IntArray
    progress: FloatArray
    since_step_s: FloatArray


def step_timing(staircase: StaircasePlan) -> StepTiming:
    """Return the clock of a staircase: a move before every plateau but the first, then the dwell."""
    period = staircase.dwell_s + staircase.step_s
    count = len(staircase.visits)
    rows = int(np.ceil((count * period - staircase.step_s) / staircase.sample_period_s))
    time_s = np.arange(rows, dtype=np.float64) * staircase.sample_period_s
    shifted = time_s + staircase.step_s
    plateau = np.minimum(np.floor(shifted / period).astype(np.int64), count - 1)
    since = shifted - plateau * period - staircase.step_s
    progress = np.clip(1.0 + since / staircase.step_s, 0.0, 1.0) if staircase.step_s > 0 else np.ones(rows)
    return StepTiming(time_s, plateau, progress, since)


def staircase_recordings(
    plan: Plan,
    truth: Truth,
    effects: Effects,
    generator: np.random.Generator,
    schedule: Schedule,
    seed: int,
) -> Iterator[SyntheticRecording]:
    """Yield the log of every staircase run, one file a run.

    Parameters
    ----------
    plan, truth, effects
        The design, what is true, and what was drawn from it.
    generator
        The generator that drew the effects: the plateaus' residuals come next from it, as in the readings.
    schedule
        When runs are made.
    seed
        Seed of the samples' noise, with the run's number: files do not depend on each other.
    """
    signals = reading_signals(plan, truth, effects, generator)
    for runs in files_of_runs(plan):
        yield _recording(plan, truth, effects, signals, runs, schedule, seed)


def files_of_runs(plan: Plan) -> list[list[int]]:
    """Return the runs that share a file: one each, or all sensors of a shared run."""
    design = design_of(plan)
    if not plan.shared_runs:
        return [[run] for run in range(len(design.run_sensor))]
    order = np.argsort(design.run_shared, kind="stable")
    shared = design.run_shared[order]
    return [group.tolist() for group in np.split(order, np.flatnonzero(np.diff(shared)) + 1)]


def _recording(
    plan: Plan,
    truth: Truth,
    effects: Effects,
    signals: FloatArray,
    runs: list[int],
    schedule: Schedule,
    seed: int,
) -> SyntheticRecording:
    design = design_of(plan)
    timing = step_timing(plan.staircase)
    noise = np.random.default_rng([seed, runs[0]])
    mounting = int(design.run_mounting[runs[0]])
    module = plan.modules[int(design.mounting_module[mounting])]
    columns = [SyntheticColumn("time_s", timing.time_s, 1)]
    for run in runs:
        columns += _channel(plan, truth, effects, signals[run], run, timing, noise)
    warmth = effects.temperature_c[mounting] + 0.05 * slow_noise(noise, len(timing.time_s), 0.99)
    columns.append(SyntheticColumn("ambient_C", warmth, 1))
    preamble = [
        ("Invented data made by campaign.simulation; nothing was measured", ""),
        ("module", module),
        ("started", schedule.run_start(plan, runs[0]).isoformat()),
    ]
    if not plan.shared_runs:
        preamble.insert(2, ("sensor", _position(plan, runs[0])))
    return SyntheticRecording(trial_path(plan, runs[0]), tuple(preamble), tuple(columns))


def _channel(
    plan: Plan,
    truth: Truth,
    effects: Effects,
    signals: FloatArray,
    run: int,
    timing: StepTiming,
    noise: np.random.Generator,
) -> list[SyntheticColumn]:
    """Length and signal of one sensor; in a shared run the headers name it."""
    design = design_of(plan)
    sensor = int(design.run_sensor[run])
    generation = truth.of(int(design.sensor_generation[sensor]))
    index, _ = plateaus(plan)
    levels = np.array(plan.staircase.levels)[index]
    length = effects.rest_length_mm[sensor] * (1.0 + _stepped(levels, timing))
    length = length + truth.stand.length_noise_mm * noise.standard_normal(len(length))
    signal = settling_signal(signals, timing, generation) + sample_noise(generation.noise, noise, len(length))
    name = f"_{_position(plan, run)}" if plan.shared_runs else ""
    return [
        SyntheticColumn(f"stage{name}_mm", length, 3),
        SyntheticColumn(f"capacitance{name}_{truth.unit}", signal, 3),
    ]


def _position(plan: Plan, run: int) -> str:
    design = design_of(plan)
    return plan.places[int(design.sensor_place[design.run_sensor[run]])].position


def _stepped(values: FloatArray, timing: StepTiming) -> FloatArray:
    """Values of the plateaus over time, with straight moves between them."""
    before = values[np.maximum(timing.plateau - 1, 0)]
    return np.asarray(before + (values[timing.plateau] - before) * timing.progress)


def settling_signal(signals: FloatArray, timing: StepTiming, truth: GenerationTruth) -> FloatArray:
    """Return the signal over time: plateaus joined by moves, each step's last share coming late."""
    steps = np.diff(signals, prepend=signals[:1])
    settling: Settling = truth.settling
    late = np.exp(-np.maximum(timing.since_step_s, 0.0) / settling.time_s) * timing.progress
    return np.asarray(_stepped(signals, timing) - settling.share * steps[timing.plateau] * late)
