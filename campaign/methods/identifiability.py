"""What a design can tell apart, counted before anything is fitted.

A component that a design cannot separate is silent in the usual programs: the criterion is the same for every
split of it, and whichever split the optimiser stopped at is printed. Here the degrees of freedom of every
component are counted from the design matrix (ranks of incidence matrices, not numbers of files) and a
component without any does not enter the model: it is named together with the one that it hides in.

Counts follow Searle, Casella & McCulloch, *Variance Components* (1992), ch. 5 (nested classifications), and
the rank of a two-way incidence matrix, rows + columns − connected
parts (Searle, *Linear Models*, 1971, ch. 7).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
Label = Literal["resolved", "weak", "very weak", "not distinguishable from zero", "not identified"]

RESOLVED, WEAK, VERY_WEAK = 10, 4, 2
"""Least degrees of freedom of 'resolved' (limit within 1.8 times the estimate), 'weak' and 'very weak'."""


@dataclass(frozen=True)
class Units:
    """Codes of the units that readings belong to, all of shape (readings,), counted from 0.

    Attributes
    ----------
    generation, batch, module, sensor
        What was built; a batch belongs to a generation, a module to a batch, a sensor to a module.
    session
        A sensor in one mounting.
    run
        A sensor in one run.
    mounting, shared_run
        A module in one mounting, and in one run: shared by its sensors where they ran together.
    place
        A position of a generation, the same in all its modules.
    level, direction
        Level of the reference value (equal values share a code) and branch.
    branch
        −1/2 for rising, +1/2 for falling, 0 for turning readings (these belong to neither branch).
    batches_known
        Whether every module has a batch recorded.
    shared
        Whether most runs carried several sensors of a module.
    """

    generation: IntArray
    batch: IntArray
    module: IntArray
    sensor: IntArray
    session: IntArray
    run: IntArray
    mounting: IntArray
    shared_run: IntArray
    place: IntArray
    level: IntArray
    direction: IntArray
    branch: FloatArray
    batches_known: bool
    shared: bool


@dataclass(frozen=True)
class DesignCounts:
    """Numbers of units of a design, and the degrees of freedom that they leave.

    Attributes
    ----------
    generations, batches, modules, sensors, sessions, runs, readings
        Numbers of units; ``batches`` is 0 where not recorded, ``sessions`` and ``runs`` are counted a sensor.
    mountings, shared_runs
        Numbers of mountings and runs counted a module.
    position_terms
        Independent position contrasts beside the modules; 0 where positions are not a factor.
    sensor_freedom
        Sensors − modules − position terms.
    places_hide_sensors
        Whether positions were recorded but every one of them holds too few sensors to be told from these.
    run_levels
        Distinct levels of the usual (median) run.
    run_readings
        Readings of the usual (median) run.
    level_freedom, direction_freedom, residual_freedom
        Of sensor × level, sensor × direction and what is left.
    session_freedom, repetition_freedom
        Of a sensor's sessions and runs, with what its module's share taken off where runs are shared.
    mounting_freedom, shared_run_freedom
        Of a module's mountings, and of its runs within them.
    shared
        Whether runs carried several sensors of a module.
    channel_of_sensor
        Whether every sensor kept to one readout channel of several, other than by its position.
    """

    generations: int
    batches: int
    modules: int
    sensors: int
    sessions: int
    runs: int
    readings: int
    mountings: int
    shared_runs: int
    position_terms: int
    sensor_freedom: int
    places_hide_sensors: bool
    run_levels: int
    run_readings: int
    level_freedom: int
    direction_freedom: int
    residual_freedom: int
    session_freedom: int
    repetition_freedom: int
    mounting_freedom: int
    shared_run_freedom: int
    shared: bool
    channel_of_sensor: bool


@dataclass(frozen=True)
class Component:
    """One source of spread and what the design allows to say of it.

    Attributes
    ----------
    name
        ``batch``, ``module``, ``mounting``, ``run``, ``sensor``, ``session``, ``repetition``,
        ``sensor_by_level``, ``sensor_by_direction`` or ``residual``.
    called
        What it is called in this design: with the names of all that it cannot be told from.
    degrees_of_freedom
        Counted from the design.
    label
        How much they carry.
    reason
        Why, in a sentence without a final stop.
    enters
        Whether it is a term of the model.
    line
        Whether its effect is a line (intercept and slope) or an intercept alone.
    """

    name: str
    called: str
    degrees_of_freedom: int
    label: Label
    reason: str
    enters: bool
    line: bool


_BRANCH = {"rising": -0.5, "falling": 0.5}


def code_units(readings: pd.DataFrame) -> Units:
    """Return the codes of the units of *readings*.

    Parameters
    ----------
    readings
        One row a reading, with the columns generation, batch, module, sensor, position, session, repetition,
        trial, nominal_level, x and direction of the table of readings.
    """
    known = bool((readings["batch"] != "").all()) and len(readings) > 0
    batch = ["generation", "batch"] if known else ["generation"]
    module = [*batch, "module"]
    sensor = [*module, "sensor"]
    shared_run = _codes(readings, [*module, "session", "trial", "repetition"])
    sensor_code = _codes(readings, sensor)
    return Units(
        generation=_codes(readings, ["generation"]),
        batch=_codes(readings, batch),
        module=_codes(readings, module),
        sensor=sensor_code,
        session=_codes(readings, [*sensor, "session"]),
        run=_codes(readings, [*sensor, "session", "trial", "repetition"]),
        mounting=_codes(readings, [*module, "session"]),
        shared_run=shared_run,
        place=_codes(readings, ["generation", "position"]),
        level=_level_codes(readings),
        direction=_codes(readings, ["direction"]),
        branch=np.asarray(readings["direction"].map(_BRANCH).fillna(0.0), dtype=np.float64),
        batches_known=known,
        shared=_mostly_shared(shared_run, sensor_code),
    )


def _codes(readings: pd.DataFrame, columns: list[str]) -> IntArray:
    return np.asarray(readings.groupby(columns, sort=True, dropna=False).ngroup(), dtype=np.int64)


def _level_codes(readings: pd.DataFrame) -> IntArray:
    """Codes of nominal levels, else of the sensor's own, else of values rounded to 0.1 % of their range."""
    for column in ("nominal_level", "sensor_level"):
        if column in readings and readings[column].notna().all():
            return np.unique(readings[column].to_numpy(float), return_inverse=True)[1].astype(np.int64)
    x = readings["x"].to_numpy(float)
    step = np.ptp(x) * 1e-3
    level = np.round(x / step) if step > 0 else np.zeros_like(x)
    return np.unique(level, return_inverse=True)[1].astype(np.int64)


def distinct_rows(*codes: IntArray) -> tuple[IntArray, IntArray]:
    """Return the distinct rows of some columns of codes, and which of them each row is.

    Parameters
    ----------
    codes
        Shape (rows,) each, none negative.

    Returns
    -------
    tuple
        Shape (distinct, columns), sorted by the first column, then the second, …; shape (rows,). What
        ``numpy.unique`` returns of rows, in a fifth of its time.
    """
    key = codes[0].astype(np.int64)
    for code in codes[1:]:
        key = np.unique(key, return_inverse=True)[1].ravel() * (int(code.max(initial=0)) + 1) + code
    _, first, own = np.unique(key, return_index=True, return_inverse=True)
    return np.column_stack([code[first] for code in codes]), own.ravel()


def _mostly_shared(shared_run: IntArray, sensor: IntArray) -> bool:
    """Whether more than half of the runs of modules carried two or more sensors."""
    pairs = distinct_rows(shared_run, sensor)[0]
    carried = np.bincount(pairs[:, 0]) if len(pairs) else np.zeros(0)
    return bool(len(carried)) and bool(np.mean(carried >= 2) > 0.5)


def count_design(readings: pd.DataFrame, units: Units) -> DesignCounts:
    """Count a design.

    Parameters
    ----------
    readings
        The readings that are to be fitted, as in :func:`code_units`; ``channel`` is looked at too.
    units
        Their codes.
    """
    sensors = _count(units.sensor)
    terms, freedom, hidden = _position_terms(units)
    sensor_by_session, sensor_by_run = _within_sensors(units)
    level, direction = _sensor_by_cell(units)
    run_levels, run_readings = _usual_run(units)
    return DesignCounts(
        generations=_count(units.generation),
        batches=_count(units.batch) if units.batches_known else 0,
        modules=_count(units.module),
        sensors=sensors,
        sessions=_count(units.session),
        runs=_count(units.run),
        readings=len(units.run),
        mountings=_count(units.mounting),
        shared_runs=_count(units.shared_run),
        position_terms=terms,
        sensor_freedom=freedom,
        places_hide_sensors=hidden,
        run_levels=run_levels,
        run_readings=run_readings,
        level_freedom=level,
        direction_freedom=direction,
        residual_freedom=max(len(units.run) - _spent(units, run_levels, run_readings) - level - direction, 0),
        session_freedom=sensor_by_session,
        repetition_freedom=sensor_by_run,
        mounting_freedom=_count(units.mounting) - _count(units.module),
        shared_run_freedom=_count(units.shared_run) - _count(units.mounting),
        shared=units.shared,
        channel_of_sensor=_sensor_keeps_channel(readings, units),
    )


def _count(codes: IntArray) -> int:
    return len(np.unique(codes))


def two_way_rank(rows: IntArray, columns: IntArray) -> int:
    """Return the rank of the indicator columns of two factors together: levels of both − connected parts."""
    row, column = (np.unique(codes, return_inverse=True)[1] for codes in (rows, columns))
    if not len(row):
        return 0
    height, width = int(row.max()) + 1, int(column.max()) + 1
    graph = coo_matrix((np.ones(len(row)), (row, column + height)), shape=(height + width, height + width))
    return height + width - int(connected_components(graph, directed=False)[0])


def _position_terms(units: Units) -> tuple[int, int, bool]:
    """Position contrasts, degrees of freedom of sensors, and whether places and sensors are one."""
    modules, sensors = _count(units.module), _count(units.sensor)
    terms = two_way_rank(units.module, units.place) - modules
    freedom = sensors - modules - terms
    if terms == 0:
        return 0, sensors - modules, False
    if freedom <= 0:
        return 0, sensors - modules, True
    return terms, freedom, False


def _within_sensors(units: Units) -> tuple[int, int]:
    """Degrees of freedom of sensor × session and sensor × run."""
    sensors, sessions, runs = _count(units.sensor), _count(units.session), _count(units.run)
    if not units.shared:
        return sessions - sensors, runs - sessions
    by_session = sessions - two_way_rank(units.sensor, units.mounting)
    by_run = runs - two_way_rank(units.session, units.shared_run)
    return by_session, by_run


def _sensor_by_cell(units: Units) -> tuple[int, int]:
    """Degrees of freedom of sensor × level beside the sensors' lines, and of sensor × direction.

    Both need runs that repeat: what a sensor does once at a level is not told from noise.
    """
    repeated = distinct_rows(units.sensor, units.run)[0][:, 0]
    if not len(repeated) or np.bincount(repeated).max() < 2:
        return 0, 0
    cells = distinct_rows(units.generation, units.sensor, units.level)[0]
    beyond = np.maximum(np.bincount(cells[:, 1]) - 2, 0).sum()
    levels = np.unique(cells[:, [0, 2]], axis=0)
    common = np.maximum(np.bincount(levels[:, 0]) - 2, 0).sum()
    branches = distinct_rows(units.generation, units.sensor, units.direction)[0]
    own = np.bincount(branches[:, 1])
    both = np.unique(branches[np.isin(branches[:, 1], np.nonzero(own >= 2)[0])][:, :2], axis=0)
    return max(int(beyond - common), 0), max(len(both) - _count(both[:, 0]), 0)


def _usual_run(units: Units) -> tuple[int, int]:
    """Distinct levels and readings of the median run."""
    if not len(units.run):
        return 0, 0
    pairs = distinct_rows(units.run, units.level)[0][:, 0]
    return int(np.median(np.bincount(pairs))), int(np.median(np.bincount(units.run)))


def _spent(units: Units, run_levels: int, run_readings: int) -> int:
    """Parameters of runs, sensors and level means, beside sensor × level and sensor × direction."""
    cells = len(distinct_rows(units.generation, units.level, units.direction)[0])
    generations, sensors, runs = (_count(codes) for codes in (units.generation, units.sensor, units.run))
    if run_readings < 2:
        return sensors
    if run_levels <= 2:
        return runs + (run_levels - 1) * sensors + max(cells - run_levels * generations, 0)
    return 2 * runs + max(cells - 2 * generations, 0)


def _sensor_keeps_channel(readings: pd.DataFrame, units: Units) -> bool:
    channel = readings["channel"].to_numpy()
    if not len(channel) or (channel == "").any():
        return False
    codes = np.unique(channel, return_inverse=True)[1].astype(np.int64)
    pairs = _count_pairs(units.sensor, codes)
    by_place = _count_pairs(units.place, codes) == _count(units.place) and _count(units.place) > 1
    return _count(codes) > 1 and pairs == _count(units.sensor) and not by_place


def _count_pairs(first: IntArray, second: IntArray) -> int:
    return len(distinct_rows(first, second)[0])


def label_of(degrees_of_freedom: int) -> Label:
    """Return how much *degrees_of_freedom* carry, before the estimate is looked at."""
    if degrees_of_freedom >= RESOLVED:
        return "resolved"
    if degrees_of_freedom >= WEAK:
        return "weak"
    return "very weak" if degrees_of_freedom >= 1 else "not identified"


def ladder(counts: DesignCounts) -> tuple[Component, ...]:
    """Return every component of spread with what the design can say of it, widest unit first.

    Parameters
    ----------
    counts
        Numbers of units and degrees of freedom.

    Returns
    -------
    tuple of Component
        Components that do not enter the model have no degrees of freedom and say which one holds them. The
        lowest component that enters and the residual are never the same thing.
    """
    entering = _entering(counts)
    return tuple(
        _component(name, counts, freedom, entering, called)
        for name, freedom, called in _names_and_freedoms(counts, entering)
    )


def _entering(counts: DesignCounts) -> tuple[str, ...]:
    """Names of the terms of the model."""
    several_readings = counts.run_readings >= 2
    repeats = counts.repetition_freedom > 0
    own_runs = several_readings and (repeats or counts.session_freedom > 0)
    several_sensors = counts.sensors > counts.modules
    readings_a_sensor = counts.readings > counts.sensors
    chosen = {
        "batch": counts.batches > counts.generations and counts.modules > counts.batches,
        "module": _modules_in_groups(counts) > 0 and several_sensors,
        "mounting": counts.shared and counts.mounting_freedom > 0,
        "run": counts.shared and counts.shared_run_freedom > 0,
        "sensor": counts.sensors > counts.generations and _sensors_spread(counts) > 0 and readings_a_sensor,
        "session": counts.session_freedom > 0 and repeats,
        "repetition": own_runs,
        "sensor_by_level": counts.level_freedom > 0 and counts.run_levels >= 3,
        "sensor_by_direction": counts.direction_freedom > 0,
        "residual": counts.residual_freedom > 0,
    }
    return tuple(name for name, enters in chosen.items() if enters)


def _modules_in_groups(counts: DesignCounts) -> int:
    """Modules − batches where these are a level of the model, else modules − generations."""
    groups = counts.batches if counts.batches > counts.generations else counts.generations
    return counts.modules - groups


def _sensors_spread(counts: DesignCounts) -> int:
    """Degrees of freedom of sensors; with one sensor a module, those of the modules."""
    return counts.sensor_freedom if counts.sensors > counts.modules else _modules_in_groups(counts)


def _names_and_freedoms(counts: DesignCounts, entering: tuple[str, ...]) -> list[tuple[str, int, str]]:
    rows = [("batch", max(counts.batches - counts.generations, 0), "batch")]
    rows.append(("module", max(_modules_in_groups(counts), 0), _module_name(counts, entering)))
    if counts.shared:
        single = counts.shared_run_freedom == 0
        rows.append(("mounting", counts.mounting_freedom, "mounting + run" if single else "mounting"))
        rows.append(("run", counts.shared_run_freedom, "run shared by the sensors of a module"))
    return [
        *rows,
        ("sensor", max(_sensors_spread(counts), 0), _sensor_name(counts, entering)),
        ("session", counts.session_freedom, "sensor × session" if counts.shared else "session"),
        ("repetition", _repetition_freedom(counts), _repetition_name(counts, entering)),
        ("sensor_by_level", counts.level_freedom, "sensor × level"),
        ("sensor_by_direction", counts.direction_freedom, "sensor × direction"),
        ("residual", counts.residual_freedom, _residual_name(counts, entering)),
    ]


def _module_name(counts: DesignCounts, entering: tuple[str, ...]) -> str:
    parts = []
    if counts.batches > counts.generations and "batch" not in entering:
        parts.append("batch")
    parts.append("module")
    if counts.mounting_freedom == 0:
        parts.append("mounting")
        if counts.shared and counts.shared_run_freedom == 0:
            parts.append("run")
    return " + ".join(parts)


def _sensor_name(counts: DesignCounts, entering: tuple[str, ...]) -> str:
    parts = []
    if counts.sensors == counts.modules and counts.modules > counts.generations:
        parts += _module_name(counts, entering).split(" + ")
    parts.append("sensor")
    if counts.places_hide_sensors:
        parts.append("position")
    if counts.channel_of_sensor:
        parts.append("channel")
    if counts.runs == counts.sensors:
        parts.append("repetition")
    return " + ".join(parts)


def _repetition_freedom(counts: DesignCounts) -> int:
    return counts.repetition_freedom if counts.repetition_freedom > 0 else counts.session_freedom


def _repetition_name(counts: DesignCounts, entering: tuple[str, ...]) -> str:
    own = "sensor × run" if counts.shared else "repetition"
    merged = counts.session_freedom > 0 and "session" not in entering
    return f"session + {own}" if merged else own


def _residual_name(counts: DesignCounts, entering: tuple[str, ...]) -> str:
    hidden = counts.run_readings < 2 and counts.repetition_freedom + counts.session_freedom > 0
    return "repetition + residual" if hidden and "repetition" not in entering else "residual"


def _component(
    name: str, counts: DesignCounts, freedom: int, entering: tuple[str, ...], called: str
) -> Component:
    enters = name in entering
    label = label_of(freedom) if enters else "not identified"
    reason = _reason_in(name, counts, freedom) if enters else _reason_out(name, counts)
    return Component(name, called, freedom, label, reason, enters, _has_line(name, counts, entering))


def _has_line(name: str, counts: DesignCounts, entering: tuple[str, ...]) -> bool:
    """Whether a component's slope can be told: two levels at least, three for the lowest component of all."""
    if name in ("sensor_by_level", "sensor_by_direction", "residual"):
        return False
    nested = [n for n in entering if n in ("batch", "module", "sensor", "session", "repetition")]
    lowest = bool(nested) and name == nested[-1]
    return counts.run_levels >= (3 if lowest else 2)


def _many(number: int, thing: str) -> str:
    plural = f"{thing}es" if thing.endswith("ch") else f"{thing}s"
    return f"{number} {thing if number == 1 else plural}"


def _reason_in(name: str, counts: DesignCounts, freedom: int) -> str:
    count = {
        "batch": f"{_many(counts.batches, 'batch')} of {_many(counts.generations, 'generation')}",
        "module": _many(counts.modules, "module"),
        "mounting": f"{_many(counts.mountings, 'mounting')} of {_many(counts.modules, 'module')}",
        "run": f"{_many(counts.shared_runs, 'run')} of {_many(counts.mountings, 'mounting')}",
        "sensor": f"{counts.sensors} sensors, {counts.modules} modules, {counts.position_terms} place terms",
        "session": f"{_many(counts.sessions, 'session')} of {_many(counts.sensors, 'sensor')}",
        "repetition": f"{_many(counts.runs, 'run')} of {_many(counts.sessions, 'session')} of sensors",
        "sensor_by_level": f"{_many(counts.run_levels, 'level')} of {_many(counts.sensors, 'sensor')}, "
        "run repeatedly",
        "sensor_by_direction": f"both branches of {_many(counts.sensors, 'sensor')}, run repeatedly",
        "residual": f"{counts.readings} readings",
    }[name]
    words = f"{count}: {freedom} degree{'s' if freedom != 1 else ''} of freedom"
    if freedom == 1:
        return f"{words}, an upper limit only"
    return f"{words}, limits only" if freedom < WEAK else words


def _reason_out(name: str, counts: DesignCounts) -> str:
    reasons = {
        "batch": _why_no_batch(counts),
        "module": "one sensor a module: it is inside 'module + sensor'"
        if counts.modules > counts.generations and counts.sensors == counts.modules
        else "one module a generation: conclusions hold for this module only, totals are lower bounds",
        "mounting": "one session a module: it is inside 'module + mounting'",
        "run": "one run a mounting: it is inside the mounting",
        "sensor": "one sensor: the spread between sensors is not estimated"
        if counts.sensors <= counts.generations
        else "no sensor is left to be compared with another at its place",
        "session": "one session a sensor: repetition is repeatability without remounting"
        if counts.session_freedom == 0
        else "one run a session: it is inside 'session + repetition'",
        "repetition": "one reading a run: it is inside the residual"
        if counts.run_readings < 2 and counts.runs > counts.sensors
        else "one repetition: it is inside 'sensor + repetition'",
        "sensor_by_level": "needs two repetitions of several sensors at three or more common levels",
        "sensor_by_direction": "needs both branches of several sensors, run repeatedly",
        "residual": "no reading is left after the lines of the runs",
    }
    return reasons[name]


def _why_no_batch(counts: DesignCounts) -> str:
    if counts.batches == 0:
        return "batches are not recorded"
    if counts.batches == counts.generations:
        return "one batch a generation: a difference is between these batches, not between processes"
    return "one module a batch: it is inside 'batch + module'"
