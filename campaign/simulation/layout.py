"""Layout trials: a module pinned by its nodes at known places, all sensors logged at once."""

from __future__ import annotations

from collections.abc import Iterator
from datetime import datetime, timedelta

import numpy as np
import numpy.typing as npt

from campaign.simulation.effects import Effects
from campaign.simulation.mounted_sensor import MountedSensor, drawn_line, remarks
from campaign.simulation.noise import sample_noise
from campaign.simulation.plan import Plan
from campaign.simulation.recording_text import SyntheticColumn, SyntheticRecording
from campaign.simulation.schedule import Schedule
from campaign.simulation.sweep import framed_sensor
from campaign.simulation.trial_plans import LayoutPlan
from campaign.simulation.truth import Truth

FloatArray = npt.NDArray[np.float64]

SUPPORT_KIND, KIND = 11, 12
"""Streams of random numbers of the support points, and of the signals."""

WORD = "layout"
"""The invented lab's word for the kind."""


def layout_recordings(
    plan: Plan, truth: Truth, effects: Effects, schedule: Schedule, seed: int
) -> Iterator[SyntheticRecording]:
    """Yield the log of every layout run, one wide file a run of a module; nothing without a plan for them.

    The columns of nodes hold what is stated of the support points; the sensors feel where the nodes truly
    were.
    """
    layout = plan.layout
    if layout is None:
        return
    for module in layout.modules or plan.modules:
        sensors = [
            framed_sensor(plan, truth, effects, module, place.position, seed)
            for place in plan.places
            if (module, place.position) not in layout.missing
        ]
        begun = datetime.combine(schedule.mounting_day(plan, module, plan.sessions[0]), layout.start)
        for run in range(1, layout.repetitions + 1):
            started = (begun + timedelta(minutes=(run - 1) * layout.run_minutes)).isoformat()
            name = f"{module}_{WORD}_r{run}_s{layout.session}"
            columns = _columns(layout, truth, sensors, run, seed)
            yield SyntheticRecording(f"trials/{module}/{name}.csv", remarks(module, "", started), columns)


def true_places_mm(layout: LayoutPlan, truth: Truth, module_number: int, run: int, seed: int) -> FloatArray:
    """Return where the nodes truly were, in mm, shape (placements, nodes, 2), in the order of the run.

    Parameters
    ----------
    layout, truth
        The stated places, and the SD of the support points about them.
    module_number, run
        Number of the module in its plan from 0, and of the run from 1.
    seed
        Of the campaign.
    """
    stated = np.array([layout.placements[index] for index in layout.order(run)])
    draws = np.random.default_rng([seed, 100 * module_number + run, SUPPORT_KIND])
    return np.asarray(stated + truth.stand.node_mm * draws.standard_normal(stated.shape))


def lengths_between_mm(layout: LayoutPlan, places: FloatArray, start: str, end: str) -> FloatArray:
    """Return the distance of two nodes in mm, shape (placements,), from places (placements, nodes, 2)."""
    first, second = layout.nodes.index(start), layout.nodes.index(end)
    return np.asarray(np.linalg.norm(places[:, second] - places[:, first], axis=1))


def _columns(
    layout: LayoutPlan, truth: Truth, sensors: list[MountedSensor], run: int, seed: int
) -> tuple[SyntheticColumn, ...]:
    order = layout.order(run)
    stated = np.repeat(np.array([layout.placements[index] for index in order]), layout.samples, axis=0)
    within = layout.sample_period_s * np.arange(layout.samples)
    time_s = (layout.placement_s * np.arange(len(order))[:, np.newaxis] + within).ravel()
    number = np.repeat(np.array(order, dtype=np.float64) + 1.0, layout.samples)
    columns = [SyntheticColumn("time_s", time_s, 0), SyntheticColumn("placement", number, 0)]
    for index, node in enumerate(layout.nodes):
        for axis, letter in enumerate("xy"):
            columns.append(SyntheticColumn(f"{node}_{letter}_mm", stated[:, index, axis], 2))
    module = sensors[0].module_number
    places = true_places_mm(layout, truth, module, run, seed)
    draws = np.random.default_rng([seed, 100 * module + run, KIND])
    for sensor in sensors:
        signal = np.repeat(_placement_signals(layout, sensor, places, run, draws), layout.samples)
        signal = signal + sample_noise(sensor.truth.noise, draws, len(signal))
        columns.append(SyntheticColumn(f"capacitance_{sensor.place.position}_{truth.unit}", signal, 3))
    ambient = np.full(len(time_s), sensors[0].temperature_c) + 0.02 * draws.standard_normal(len(time_s))
    return (*columns, SyntheticColumn("ambient_C", ambient, 1))


def _placement_signals(
    layout: LayoutPlan, sensor: MountedSensor, places: FloatArray, run: int, draws: np.random.Generator
) -> FloatArray:
    """Mean signal of one sensor at every placement, shape (placements,), in the order of the run."""
    parts, own = sensor.truth.components, sensor.truth.layout
    length = lengths_between_mm(layout, places, sensor.place.start, sensor.place.end)
    length = length + own.seat_mm * draws.standard_normal(len(length))
    slips = [own.slip_mm(sensor.module, sensor.place.position, run, index + 1) for index in layout.order(run)]
    length = length + np.array(slips)
    signal = sensor.shifted(drawn_line(parts.repetition, draws)).signal_at_length(length)
    signal = signal + parts.residual * draws.standard_normal(len(length))
    return np.asarray(signal + _loop(sensor, length))


def _loop(sensor: MountedSensor, length: FloatArray) -> FloatArray:
    """Half the staircase's loop, by whether the sensor came from a shorter or a longer length."""
    span = float(np.ptp(sensor.levels)) or 1.0
    share = np.clip((sensor.indicated_strain(length) - sensor.levels.min()) / span, 0.0, 1.0)
    came_down = -np.sign(np.diff(length, prepend=sensor.true_rest_length_mm))
    return np.asarray(0.5 * came_down * sensor.loop_width * 4.0 * share * (1.0 - share))
