"""Draws from the truth: one value for every batch, module, sensor, mounting and run of a plan."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from campaign.simulation.plan import Plan, RunKey
from campaign.simulation.truth import Components, GenerationTruth, LineSpread, Truth

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Design:
    """A plan as index arrays, so that effects are gathered and not looked up.

    Attributes
    ----------
    batch_generation
        Shape (batches,).
    module_batch, module_generation
        Shape (modules,).
    sensor_module, sensor_place, sensor_generation
        Shape (sensors of all modules,).
    run_sensor, run_mounting, run_session, run_shared, run_repetition
        Shape (runs of one sensor,): its sensor, mounting of the module, mounting of the sensor, run of the
        module that it would share, and number of the repetition from 1.
    mounting_module
        Shape (modules × sessions,); ``session_sensor`` is the like for sensors, ``shared_module`` for runs.
    run_session_name
        Shape (runs of one sensor,): index of the session in the plan.
    """

    batch_generation: IntArray
    module_batch: IntArray
    module_generation: IntArray
    sensor_module: IntArray
    sensor_place: IntArray
    sensor_generation: IntArray
    mounting_module: IntArray
    session_sensor: IntArray
    shared_module: IntArray
    run_sensor: IntArray
    run_mounting: IntArray
    run_session: IntArray
    run_shared: IntArray
    run_repetition: IntArray
    run_session_name: IntArray


@lru_cache(maxsize=64)
def design_of(plan: Plan) -> Design:
    """Return the index arrays of *plan*, omitted runs left out."""
    batches = [
        (index, batch) for index, generation in enumerate(plan.generations) for batch in generation.batches
    ]
    module_batch = np.array([number for number, (_, batch) in enumerate(batches) for _ in batch.modules])
    batch_generation = np.array([index for index, _ in batches])
    module_generation = batch_generation[module_batch]
    modules, places, sessions = len(module_batch), len(plan.places), len(plan.sessions)
    sensor_module = np.repeat(np.arange(modules), places)
    grid = np.indices((modules * places, sessions, plan.repetitions)).reshape(3, -1)
    if plan.omitted:
        grid = grid[:, [_run_key(plan, *column) not in plan.omitted for column in grid.T.tolist()]]
    sensor, session, repetition = grid
    mounting = sensor_module[sensor] * sessions + session
    return Design(
        batch_generation=batch_generation,
        module_batch=module_batch,
        module_generation=module_generation,
        sensor_module=sensor_module,
        sensor_place=np.tile(np.arange(places), modules),
        sensor_generation=module_generation[sensor_module],
        mounting_module=np.repeat(np.arange(modules), sessions),
        session_sensor=np.repeat(np.arange(modules * places), sessions),
        shared_module=np.repeat(np.arange(modules), sessions * plan.repetitions),
        run_sensor=sensor,
        run_mounting=mounting,
        run_session=sensor * sessions + session,
        run_shared=mounting * plan.repetitions + repetition,
        run_repetition=repetition + 1,
        run_session_name=session,
    )


def _run_key(plan: Plan, sensor: int, session: int, repetition: int) -> RunKey:
    places = len(plan.places)
    place = plan.places[sensor % places].position
    return RunKey(plan.modules[sensor // places], place, plan.sessions[session], repetition + 1)


@dataclass(frozen=True, eq=False)
class Effects:
    """Everything random that is common to more than one reading.

    Attributes
    ----------
    batch, module, sensor, mounting, session, shared_run, repetition
        Lines (intercept, slope), shape (units, 2), in signal units and signal units per mm/mm.
    sensor_by_level
        Shape (sensors, levels), in signal units.
    loop_width
        Shape (sensors,): falling minus rising at mid strain, in signal units.
    scale_error
        Relative error of the length scale, one number.
    zero_error_mm, temperature_c
        Shape (mountings,).
    rest_length_mm, rest_length_error_mm
        Shape (sensors,): as measured, and measured minus true.
    """

    batch: FloatArray
    module: FloatArray
    sensor: FloatArray
    mounting: FloatArray
    session: FloatArray
    shared_run: FloatArray
    repetition: FloatArray
    sensor_by_level: FloatArray
    loop_width: FloatArray
    scale_error: float
    zero_error_mm: FloatArray
    temperature_c: FloatArray
    rest_length_mm: FloatArray
    rest_length_error_mm: FloatArray


def draw_effects(plan: Plan, truth: Truth, generator: np.random.Generator) -> Effects:
    """Draw all effects of *plan* under *truth*.

    The draws are made in one fixed order and for every unit, also where an SD is zero, so that changing one
    SD changes nothing else of a campaign with the same seed.
    """
    design = design_of(plan)
    sensors = len(design.sensor_module)
    run_generation = design.sensor_generation[design.run_sensor]

    def lines(select: Callable[[Components], LineSpread], generation: IntArray) -> FloatArray:
        factors = np.array([select(truth.of(g).components).factor for g in range(len(plan.generations))])
        normal = generator.standard_normal((len(generation), 2))
        return np.asarray(np.einsum("uij,uj->ui", factors[generation], normal))

    def scaled(select: Callable[[GenerationTruth], float], shape: tuple[int, ...]) -> FloatArray:
        factors = np.array([select(truth.of(g)) for g in range(len(plan.generations))])
        normal = generator.standard_normal(shape)
        return np.asarray((factors[design.sensor_generation] * normal.T).T)

    batch = lines(lambda c: c.batch, design.batch_generation)
    module = lines(lambda c: c.module, design.module_generation)
    sensor = lines(lambda c: c.sensor, design.sensor_generation)
    mounting = lines(lambda c: c.mounting, design.module_generation[design.mounting_module])
    session = lines(lambda c: c.session, design.sensor_generation[design.session_sensor])
    shared_run = lines(lambda c: c.shared_run, design.module_generation[design.shared_module])
    repetition = lines(lambda c: c.repetition, run_generation)
    by_level = scaled(lambda t: t.components.sensor_by_level, (sensors, len(plan.staircase.levels)))
    loop_mean = np.array([truth.of(g).loop.mean for g in range(len(plan.generations))])
    loop_width = loop_mean[design.sensor_generation] + scaled(lambda t: t.loop.sd, (sensors,))
    mountings = len(design.mounting_module)
    nominal = np.array([place.rest_length_mm for place in plan.places])[design.sensor_place]
    stand = truth.stand
    return Effects(
        batch=batch,
        module=module,
        sensor=sensor,
        mounting=mounting,
        session=session,
        shared_run=shared_run,
        repetition=repetition,
        sensor_by_level=by_level,
        loop_width=loop_width,
        scale_error=stand.scale * float(generator.standard_normal()),
        zero_error_mm=stand.zero_mm * generator.standard_normal(mountings),
        temperature_c=stand.temperature_c + stand.temperature_sd_c * generator.standard_normal(mountings),
        rest_length_mm=np.round(nominal + stand.build_mm * generator.standard_normal(sensors), 2),
        rest_length_error_mm=stand.rest_length_mm * generator.standard_normal(sensors),
    )


def run_lines(plan: Plan, effects: Effects) -> FloatArray:
    """Return the random line of every run, shape (runs, 2): the sum of what it shares and what is its own."""
    design = design_of(plan)
    module = design.sensor_module[design.run_sensor]
    lines = (
        effects.batch[design.module_batch[module]]
        + effects.module[module]
        + effects.sensor[design.run_sensor]
        + effects.mounting[design.run_mounting]
        + effects.session[design.run_session]
        + effects.repetition
    )
    return np.asarray(lines + effects.shared_run[design.run_shared] if plan.shared_runs else lines)


def true_strain(plan: Plan, effects: Effects, indicated: FloatArray) -> FloatArray:
    """Return the strain that every run truly had where the stand indicated *indicated*, shape (runs, …).

    The indicated strain is (L − L₀)/L₀ with the measured rest length; length scale, zero and rest length
    carry their errors (all zero: the indicated strain is returned).
    """
    design = design_of(plan)
    shape = (-1,) + (1,) * (indicated.ndim - 1)
    rest = effects.rest_length_mm[design.run_sensor].reshape(shape)
    rest_true = rest - effects.rest_length_error_mm[design.run_sensor].reshape(shape)
    zero = effects.zero_error_mm[design.run_mounting].reshape(shape)
    length = rest * (1.0 + indicated) * (1.0 + effects.scale_error) + zero
    return np.asarray(length / rest_true - 1.0)
