"""Readings straight from a plan and a truth: the short way, with no files between."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.simulation.effects import Effects, design_of, draw_effects, run_lines, true_strain
from campaign.simulation.plan import Plan
from campaign.simulation.truth import Truth

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


def simulate_readings(plan: Plan, truth: Truth, seed: int) -> pd.DataFrame:
    """Return the readings of a synthetic campaign of staircases.

    Parameters
    ----------
    plan
        What is run.
    truth
        What is true.
    seed
        Seed of all random numbers; the same three arguments give the same table.

    Returns
    -------
    pandas.DataFrame
        One row a reading with the columns of the table of readings (strain in mm/mm, lengths in mm, signal
        in ``truth.unit``, times in s), sorted by generation, module, sensor, session, repetition and order.
        ``x`` is strain. Where the truth has no sample noise, ``standard_error`` is NaN as in a table with one
        row a step, and the SD of a reading is ``residual`` exactly.
    """
    generator = np.random.default_rng(seed)
    effects = draw_effects(plan, truth, generator)
    signal = reading_signals(plan, truth, effects, generator)
    error = _standard_errors(plan, truth)
    noise = generator.standard_normal(signal.shape) * np.nan_to_num(error)[:, np.newaxis]
    return _table(plan, truth, effects, signal + noise, error)


def reading_signals(plan: Plan, truth: Truth, effects: Effects, generator: np.random.Generator) -> FloatArray:
    """Return the true mean signal of every plateau, residual included, shape (runs, plateaus)."""
    design = design_of(plan)
    index, direction = plateaus(plan)
    strain = true_strain(
        plan, effects, np.tile(np.array(plan.staircase.levels)[index], (len(design.run_sensor), 1))
    )
    lines = run_lines(plan, effects)
    warmth = effects.temperature_c[design.run_mounting] - truth.stand.temperature_c
    signal = (
        mean_signals(plan, truth, strain)
        + lines[:, :1]
        + lines[:, 1:] * strain
        + effects.sensor_by_level[design.run_sensor][:, index]
        + effects.loop_width[design.run_sensor][:, np.newaxis] * loop_shape(plan)[index] * direction
        + truth.stand.signal_per_kelvin * warmth[:, np.newaxis]
    )
    return np.asarray(signal + _residuals(plan, truth, generator))


def plateaus(plan: Plan) -> tuple[IntArray, FloatArray]:
    """Return level index and direction of every plateau: −1/2 rising, 0 turning, +1/2 falling."""
    visits = plan.staircase.visits
    halves = {"rising": -0.5, "turning": 0.0, "falling": 0.5}
    if not plan.staircase.descending:
        halves["rising"] = 0.0  # with one branch there is no loop: its width is not told from the line
    return np.array([index for index, _ in visits]), np.array([halves[direction] for _, direction in visits])


def loop_shape(plan: Plan) -> FloatArray:
    """Return the loop's shape at every level: 4u(1 − u), u the share of the range; 1 in the middle."""
    levels = np.array(plan.staircase.levels)
    span = float(np.ptp(levels)) or 1.0
    share = (levels - levels.min()) / span
    return np.asarray(4.0 * share * (1.0 - share))


def mean_signals(plan: Plan, truth: Truth, strain: FloatArray) -> FloatArray:
    """Return the law's signal for every run at *strain*, shape (runs, …)."""
    design = design_of(plan)
    nominal = np.array([place.rest_length_mm for place in plan.places])[
        design.sensor_place[design.run_sensor]
    ]
    generation = design.sensor_generation[design.run_sensor]
    signal = np.empty_like(strain)
    for g in range(len(plan.generations)):
        rows = generation == g
        rest = nominal[rows].reshape((-1,) + (1,) * (strain.ndim - 1))
        signal[rows] = truth.of(g).law.signal(strain[rows], rest)
    return signal


def _residuals(plan: Plan, truth: Truth, generator: np.random.Generator) -> FloatArray:
    """Residuals of all readings, (runs, plateaus): a first-order sequence a run, SD growing with strain."""
    design = design_of(plan)
    index, _ = plateaus(plan)
    generation = design.sensor_generation[design.run_sensor]
    parts = [truth.of(g).components for g in range(len(plan.generations))]
    rho = np.array([part.residual_correlation for part in parts])[generation]
    normal = generator.standard_normal((len(generation), len(index)))
    sequence = np.empty_like(normal)
    sequence[:, 0] = normal[:, 0]
    for order in range(1, normal.shape[1]):
        sequence[:, order] = rho * sequence[:, order - 1] + np.sqrt(1.0 - rho**2) * normal[:, order]
    levels = np.array(plan.staircase.levels)[index]
    share = levels / (np.abs(levels).max() or 1.0)
    growth = np.array([part.residual_growth for part in parts])[generation]
    sd = np.array([part.residual for part in parts])[generation]
    return np.asarray(sequence * sd[:, np.newaxis] * (1.0 + growth[:, np.newaxis] * share))


def _standard_errors(plan: Plan, truth: Truth) -> FloatArray:
    """Standard error of a reading's mean for every run, shape (runs,); NaN where there is no sample noise."""
    design = design_of(plan)
    count = samples_averaged(plan)
    errors = np.array(
        [truth.of(g).noise.standard_error(count) or float("nan") for g in range(len(plan.generations))]
    )
    return np.asarray(errors[design.sensor_generation[design.run_sensor]])


def samples_averaged(plan: Plan) -> int:
    """Return how many samples of a plateau are averaged: the second half of the dwell."""
    return max(1, int(plan.staircase.dwell_s / plan.staircase.sample_period_s) // 2)


@lru_cache(maxsize=16)
def _frame_of_design(plan: Plan) -> pd.DataFrame:
    """The columns that do not depend on the truth, one row a reading in run order."""
    design = design_of(plan)
    index, _ = plateaus(plan)
    count = len(index)
    run = np.repeat(np.arange(len(design.run_sensor)), count)
    sensor = design.run_sensor[run]
    module = design.sensor_module[sensor]
    batches = np.array([b.name for g in plan.generations for b in g.batches], dtype=object)
    positions = np.array([place.position for place in plan.places], dtype=object)
    levels = np.array(plan.staircase.levels)[index]
    trials = np.array([trial_path(plan, number) for number in range(len(design.run_sensor))], dtype=object)
    return pd.DataFrame(
        {
            "generation": np.array([g.name for g in plan.generations], dtype=object)[
                design.sensor_generation[sensor]
            ],
            "batch": batches[design.module_batch[module]],
            "module": np.array(plan.modules, dtype=object)[module],
            "sensor": positions[design.sensor_place[sensor]],
            "position": positions[design.sensor_place[sensor]],
            "session": np.array(plan.sessions, dtype=object)[design.run_session_name[run]],
            "repetition": design.run_repetition[run],
            "trial": trials[run],
            "order": np.tile(np.arange(1, count + 1), len(trials)),
            "started": "",
            "direction": np.tile(
                np.array([name for _, name in plan.staircase.visits], dtype=object), len(trials)
            ),
            "nominal_level": np.tile(levels, len(trials)),
            "largest_x_before": np.tile(np.maximum.accumulate(np.r_[levels[0], levels[:-1]]), len(trials)),
        }
    )


def trial_path(plan: Plan, run: int) -> str:
    """Return the path of a run's recording from the campaign folder; sensors of a shared run share it."""
    design = design_of(plan)
    sensor = int(design.run_sensor[run])
    module = plan.modules[int(design.sensor_module[sensor])]
    position = plan.places[int(design.sensor_place[sensor])].position
    session = plan.sessions[int(design.run_session_name[run])]
    parts = [module] if plan.shared_runs else [module, position]
    parts += ["cal", f"r{design.run_repetition[run]}"] + ([f"s{session}"] if session else [])
    return f"trials/{module}/{'_'.join(parts)}.csv"


def _table(plan: Plan, truth: Truth, effects: Effects, signal: FloatArray, error: FloatArray) -> pd.DataFrame:
    design = design_of(plan)
    frame = _frame_of_design(plan)
    shape = signal.shape
    rest = np.repeat(effects.rest_length_mm[design.run_sensor], shape[1])
    strain = frame["nominal_level"].to_numpy()
    dwell, step = plan.staircase.dwell_s, plan.staircase.step_s
    order = frame["order"].to_numpy()
    known = np.isfinite(error)
    count = np.where(known, samples_averaged(plan), 1)
    table = frame.assign(
        strain=strain,
        elongation_mm=rest * strain,
        length_mm=rest * (1.0 + strain),
        x=strain,
        signal=signal.reshape(-1),
        unit=truth.unit,
        standard_error=np.repeat(error, shape[1]),
        count=np.repeat(count, shape[1]),
        effective_count=np.repeat(np.where(known, _effective_counts(plan, truth), 1.0), shape[1]),
        time_s=np.where(np.repeat(known, shape[1]), (order - 1) * (dwell + step) + 0.75 * dwell, np.nan),
        time_since_motion_s=np.where(np.repeat(known, shape[1]), 0.75 * dwell, np.nan),
        temperature_c=np.repeat(_temperatures(plan, truth, effects), shape[1]),
        humidity_percent=np.nan,
        pressure_kpa=np.nan,
        channel="",
        settled=True,
        used=True,
    )
    keys = ["generation", "module", "sensor", "session", "repetition", "order"]
    return table.sort_values(keys, kind="stable", ignore_index=True)[list(COLUMNS)]


def _effective_counts(plan: Plan, truth: Truth) -> FloatArray:
    design = design_of(plan)
    effective = []
    for g in range(len(plan.generations)):
        noise = truth.of(g).noise
        error = noise.standard_error(samples_averaged(plan))
        effective.append((noise.white**2 + noise.slow**2) / error**2 if error else 1.0)
    return np.asarray(np.array(effective)[design.sensor_generation[design.run_sensor]])


def _temperatures(plan: Plan, truth: Truth, effects: Effects) -> FloatArray:
    """Temperature of every run in °C; NaN where the truth has no temperature spread (not recorded)."""
    mountings = design_of(plan).run_mounting
    if truth.stand.temperature_sd_c == 0.0:
        return np.full(len(mountings), np.nan)
    return np.asarray(effects.temperature_c[mountings])


COLUMNS: tuple[str, ...] = (
    "generation",
    "batch",
    "module",
    "sensor",
    "position",
    "session",
    "repetition",
    "trial",
    "order",
    "started",
    "direction",
    "nominal_level",
    "strain",
    "elongation_mm",
    "length_mm",
    "x",
    "signal",
    "unit",
    "standard_error",
    "count",
    "effective_count",
    "time_s",
    "time_since_motion_s",
    "largest_x_before",
    "temperature_c",
    "humidity_percent",
    "pressure_kpa",
    "channel",
    "settled",
    "used",
)
"""Columns of the table of readings, in its order (the trials room defines them; a test compares the two)."""


def sensor_register(plan: Plan, truth: Truth, seed: int) -> pd.DataFrame:
    """Return the register of sensors that belongs to ``simulate_readings`` with the same arguments.

    Returns
    -------
    pandas.DataFrame
        One row a sensor: module, sensor, position, from, to, rest_length (mm), rest_length_uncertainty (mm,
        standard), fate (empty).
    """
    design = design_of(plan)
    effects = draw_effects(plan, truth, np.random.default_rng(seed))
    places = [plan.places[place] for place in design.sensor_place]
    return pd.DataFrame(
        {
            "module": [plan.modules[module] for module in design.sensor_module],
            "sensor": [place.position for place in places],
            "position": [place.position for place in places],
            "from": [place.start for place in places],
            "to": [place.end for place in places],
            "rest_length": effects.rest_length_mm,
            "rest_length_uncertainty": truth.stand.rest_length_mm,
            "fate": "",
        }
    )
