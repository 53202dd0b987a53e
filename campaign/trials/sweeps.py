"""Sweeps of an influence at kept lengths: what pressure, temperature and the like are reduced to.

A trial is cut where its length is kept; every such stretch in which the influence goes through a good part of
its range is a sweep. A sweep that dwells becomes one point a dwell, one that moves all the time one point a
step of equal width on every leg up or down, so that both branches weigh alike.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.notices import Notice
from campaign.recordings.recording import Trial, TrialIdentity
from campaign.trials.plateaus import expand, find_plateaus

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

POINT_COLUMNS: dict[str, str] = {
    "sweep": "integer from 0, number of the sweep in its trial, in the order taken",
    "leg": "integer from 0, number of the way up or down in its sweep",
    "influence": "float, mean of the influence, its unit",
    "signal": "float, mean signal",
    "branch": "integer: 1 rising, -1 falling, 0 neither",
    "time_s": "float, mean time since the trial's start; NaN where not recorded",
    "dwell_s": "float, time that the point covers; NaN where not recorded",
    "count": "integer, samples averaged",
    "strain": "float, mean strain; NaN where not known",
    "elongation_mm": "float, mean elongation; NaN where not known",
    "length_mm": "float, mean length; NaN where not known",
    "temperature_c": "float, mean temperature; NaN where not recorded",
}
"""Columns of :attr:`SweepFeatures.points`."""

REFERENCES = ("strain", "elongation_mm", "length_mm")

STEPS = 12
"""Points a leg of a sweep that moves all the time."""

SMALLEST_SWEEP = 0.3
"""A kept length whose influence covers less than this share of the trial's range is no sweep."""

TURN_SHARE = 0.15
"""A way back counts as a new leg from this share of the sweep's range on."""

TABLE_ROWS = 60
"""Up to so many rows, or without time, every row is a point of its own."""

KEPT_STRAIN = 0.005
KEPT_MM = 0.25
"""What a kept length may wander."""

STEP = "step"
"""Unit of an influence of which only a level column says what was done."""

CURVE_POINTS = 160
TRACE_POINTS = 150

Series = FloatArray | None
Columns = dict[str, npt.NDArray[Any]]


@dataclass(frozen=True)
class Influence:
    """What is swept in a kind of trial.

    Attributes
    ----------
    name, unit
        ``pressure`` in kPa, ``temperature`` in °C, ``transverse`` in mm/mm, ….
    values
        Gives the series of a trial and its unit; ``None`` where the trial does not record it.
    smallest
        Least range that counts as a sweep, in the unit.
    moves_length
        Whether the recorded length is the influence itself, so that the trial has no kept length.
    """

    name: str
    unit: str
    values: Callable[[Trial], tuple[Series, str]]
    smallest: float = 0.0
    moves_length: bool = False


@dataclass(frozen=True)
class Trace:
    """A trial thinned to means of equally many rows, shape (blocks,) each: for what moves beside it.

    ``reference`` holds the length in the quantity that the stand recorded, NaN where it is not this sensor's.
    """

    signal: FloatArray
    influence: FloatArray
    reference: FloatArray
    quantity: str


@dataclass(frozen=True)
class SweepFeatures:
    """What one trial of an influence is reduced to.

    Attributes
    ----------
    identity
        Whose trial it is.
    influence, unit, signal_unit
        Name and unit of the influence, and the signal's unit.
    points
        Columns of :data:`POINT_COLUMNS`; empty where there is no sweep.
    curves
        Sweep number → (influence, signal), thinned for drawing; never computed from.
    trace
        The trial thinned over its rows; ``None`` where the influence is not recorded.
    notices
        What a reader should know about the trial.
    """

    identity: TrialIdentity
    influence: str
    unit: str
    signal_unit: str
    points: pd.DataFrame
    curves: dict[int, tuple[FloatArray, FloatArray]] = field(default_factory=dict)
    trace: Trace | None = None
    notices: tuple[Notice, ...] = ()


def features_of_sweeps(trial: Trial, influence: Influence) -> SweepFeatures:
    """Reduce one trial to the sweeps of its influence.

    Parameters
    ----------
    trial
        A log over time or a table with one row a step, at one kept length or several in turn.
    influence
        What is swept.

    Returns
    -------
    SweepFeatures
        Without points, and with a notice, where nothing usable is found; input is never altered.
    """
    values, unit = influence.values(trial)
    if values is None or not np.isfinite(values).any():
        return _nothing(trial, influence, unit, _said(trial, *_NOT_RECORDED, what=influence.name))
    rows = np.flatnonzero(np.isfinite(values) & np.isfinite(trial.signal))
    notices = _missing(trial, len(values) - len(rows), influence.name)
    span = float(np.ptp(values[rows])) if len(rows) else 0.0
    if len(rows) < 4 or span <= max(influence.smallest, 8.0 * _noise(values[rows])):
        return _nothing(trial, influence, unit, *notices, _said(trial, *_CONSTANT, what=influence.name))
    stretches = [rows] if influence.moves_length else list(_kept_lengths(trial, rows, by_level=unit != STEP))
    if not stretches:
        return _nothing(trial, influence, unit, *notices, _said(trial, *_NOT_KEPT))
    sweeps = [part for part in stretches if np.ptp(values[part]) >= SMALLEST_SWEEP * span]
    notices += _too_small(trial, len(stretches) - len(sweeps), influence.name)
    legs = [_legs(values[part]) for part in sweeps]
    points = [_points_of(trial, values, part, own) for part, own in zip(sweeps, legs, strict=True)]
    kept = [number for number, part in enumerate(points) if len(part["leg"]) >= 3]
    notices += _remarks(trial, values, [sweeps[n] for n in kept], [legs[n] for n in kept], influence)
    table = _table([points[n] for n in kept])
    if influence.moves_length:
        table[list(REFERENCES)] = np.nan
    curves = {place: _curve(values[sweeps[n]], trial.signal[sweeps[n]]) for place, n in enumerate(kept)}
    trace = _trace(trial, values)
    return SweepFeatures(
        trial.identity, influence.name, unit, trial.signal_unit, table, curves, trace, tuple(notices)
    )


# --- where the length is kept


def _reference(trial: Trial) -> tuple[Series, float]:
    """The length as the stand recorded it, and what it may wander while kept."""
    recorded = {"length": trial.length_mm, "elongation": trial.elongation_mm, "strain": trial.strain}
    values = recorded.get(trial.reference)
    if values is None or not np.isfinite(values).any():
        return None, 0.0
    if trial.reference == "strain":
        return values, KEPT_STRAIN
    length = trial.length_mm if trial.length_mm is not None else values
    return values, max(KEPT_MM, KEPT_STRAIN * float(np.nanmedian(np.abs(length))))


def _kept_lengths(trial: Trial, rows: IntArray, *, by_level: bool) -> Iterator[IntArray]:
    """Rows of every stretch at one kept length; all rows where the length stands still or is not known."""
    reference, wander = _reference(trial)
    known = np.zeros(0, dtype=np.int64) if reference is None else rows[np.isfinite(reference[rows])]
    if reference is None or len(known) == 0 or np.ptp(reference[known]) <= wander:
        yield from _levels(trial, rows) if by_level else (rows,)
        return
    starts, stops = find_plateaus(reference[known])
    if len(starts) < 2:
        moves = np.flatnonzero(np.abs(np.diff(reference[known])) > wander) + 1
        starts, stops = np.concatenate([[0], moves]), np.concatenate([moves, [len(known)]])
    for start, stop in zip(starts, stops, strict=True):
        part = known[start:stop]
        if stop - start >= 4 and np.ptp(reference[part]) <= 4.0 * wander:
            yield part


def _levels(trial: Trial, rows: IntArray) -> Iterator[IntArray]:
    """Stretches of the level column where that tells steps of an unknown length; else all rows."""
    if trial.level is None or not np.isfinite(trial.level[rows]).all():
        yield rows
        return
    changes = np.flatnonzero(np.diff(trial.level[rows]) != 0) + 1
    parts = np.split(rows, changes)
    if len(parts) > 1 and min(map(len, parts)) >= 8:
        yield from parts
    else:
        yield rows


# --- legs and points


def _noise(values: FloatArray) -> float:
    """Standard deviation of the noise of a series, robust, from second differences."""
    if len(values) < 4:
        return 0.0
    return float(np.median(np.abs(np.diff(values, n=2))) / (0.6745 * np.sqrt(6.0)))


def _legs(values: FloatArray) -> IntArray:
    """Number of the leg of every row: cut at turns of more than a share of the range (shape (rows,)).

    Long logs are first averaged over blocks of rows, so that the walk from turn to turn stays short.
    """
    size = max(len(values) // 1500, 1)
    blocks = np.add.reduceat(values, np.arange(0, len(values), size))
    blocks /= np.diff(np.append(np.arange(0, len(values), size), len(values)))
    turns = _turns(blocks, TURN_SHARE * float(np.ptp(values)))
    at = np.array(turns, dtype=np.int64) * size
    return np.searchsorted(at, np.arange(len(values)), side="right").astype(np.int64)


def _turns(values: FloatArray, least: float) -> list[int]:
    """Places where the series turns and then comes back by more than *least*."""
    turns: list[int] = []
    best, sign = _first_leg(values, least)
    extreme = float(values[best])
    for place, value in enumerate(values[best:].tolist(), best):
        if sign * (value - extreme) > 0:
            best, extreme = place, value
        elif sign * (extreme - value) > least:
            turns.append(best)
            best, extreme, sign = place, value, -sign
    return turns


def _first_leg(values: FloatArray, least: float) -> tuple[int, int]:
    """Return the place from which the series is known to rise (1) or fall (−1), and which; 0 for neither."""
    lowest, highest = np.minimum.accumulate(values), np.maximum.accumulate(values)
    wide = np.flatnonzero(highest - lowest > least)
    if not len(wide):
        return len(values) - 1, 0
    place = int(wide[0])
    return place, 1 if values[place] == highest[place] else -1


def _points_of(trial: Trial, values: FloatArray, rows: IntArray, legs: IntArray) -> Columns:
    """The points of one sweep, in the order taken."""
    signs = _leg_signs(values[rows], legs)
    if trial.time_s is None or len(rows) <= TABLE_ROWS:
        starts = np.arange(len(rows))
        return _turns_apart(_averaged(trial, values, rows, starts, starts + 1, legs, signs))
    starts, stops = find_plateaus(values[rows])
    if len(starts) >= 3 and float(np.sum(stops - starts)) >= 0.5 * len(rows):
        settled = starts + (stops - starts) // 3
        return _turns_apart(_averaged(trial, values, rows, settled, stops, legs, signs))
    return _stepped(trial, values, rows, legs, signs)


def _turns_apart(points: Columns) -> Columns:
    """Points of dwells or of a table, in which the one at a turn belongs to neither branch."""
    turning = np.concatenate([[False], np.diff(points["leg"]) != 0])
    return points | {"branch": np.where(turning, 0, points["branch"])}


def _stepped(trial: Trial, values: FloatArray, rows: IntArray, legs: IntArray, signs: IntArray) -> Columns:
    """Points of a sweep that never rests: means of equal steps of the influence on every leg."""
    parts = []
    for _, start, stop in _each_leg(legs):
        own = np.arange(start, stop)
        swept = values[rows[start:stop]]
        low, high = float(swept.min()), float(swept.max())
        if high <= low:
            continue
        step = np.minimum(((swept - low) / (high - low) * STEPS).astype(np.int64), STEPS - 1)
        order = np.argsort(step, kind="stable")
        edges = np.flatnonzero(np.diff(step[order])) + 1
        starts, stops = np.concatenate([[0], edges]), np.concatenate([edges, [len(own)]])
        parts.append(_averaged(trial, values, rows[own[order]], starts, stops, legs[own[order]], signs))
    points = _one_after_another(parts)
    if not np.isfinite(points["time_s"]).all():
        return points
    in_order = np.lexsort([points["time_s"], points["leg"]])
    return {name: column[in_order] for name, column in points.items()}


def _one_after_another(parts: list[Columns]) -> Columns:
    return {name: np.concatenate([part[name] for part in parts]) for name in POINT_COLUMNS}


def _averaged(
    trial: Trial,
    values: FloatArray,
    rows: IntArray,
    starts: IntArray,
    stops: IntArray,
    legs: IntArray,
    signs: IntArray,
) -> Columns:
    """Means over stretches of *rows*, with branch and leg."""
    places, owner = expand(np.asarray(starts, dtype=np.int64), np.asarray(stops, dtype=np.int64))
    counts = np.bincount(owner, minlength=len(starts))
    chosen = rows[places]

    def mean(series: Series) -> FloatArray:
        if series is None:
            return np.full(len(starts), np.nan)
        return np.asarray(np.bincount(owner, series[chosen], minlength=len(starts)) / counts)

    timed = trial.time_s is not None and trial.time_is_ordered
    seconds = mean(trial.time_s if timed else None)
    begun = float(trial.time_s[0]) if timed and trial.time_s is not None else 0.0
    leg = legs[places[np.cumsum(counts) - 1]] if len(places) else np.zeros(0, dtype=np.int64)
    unknown = np.full(len(starts), np.nan)
    return {
        "sweep": np.zeros(len(starts), dtype=np.int64),
        "leg": leg,
        "influence": mean(values),
        "signal": mean(trial.signal),
        "branch": signs[leg],
        "time_s": seconds - begun,
        "dwell_s": _dwell(trial, chosen, owner, len(starts)) if timed else unknown,
        "count": counts,
        "strain": mean(trial.strain),
        "elongation_mm": mean(trial.elongation_mm),
        "length_mm": mean(trial.length_mm),
        "temperature_c": mean(trial.temperature_c),
    }


def _dwell(trial: Trial, chosen: IntArray, owner: IntArray, points: int) -> FloatArray:
    assert trial.time_s is not None
    first, last = np.full(points, np.inf), np.full(points, -np.inf)
    np.minimum.at(first, owner, trial.time_s[chosen])
    np.maximum.at(last, owner, trial.time_s[chosen])
    return np.asarray(last - first)


def _each_leg(legs: IntArray) -> list[tuple[int, int, int]]:
    """Number, first row and one past the last of every leg."""
    stops = np.append(np.flatnonzero(np.diff(legs)) + 1, len(legs)).tolist()
    return [(int(legs[start]), start, stop) for start, stop in zip([0, *stops[:-1]], stops) if stop > start]


def _leg_signs(values: FloatArray, legs: IntArray) -> IntArray:
    """1 for every leg that rises over its rows, −1 for one that falls; shape (legs,)."""
    signs = np.zeros(int(legs.max(initial=0)) + 1, dtype=np.int64)
    for leg, start, stop in _each_leg(legs):
        own = values[start:stop]
        if len(own) > 1:
            signs[leg] = int(np.sign(np.dot(np.arange(len(own)) - (len(own) - 1) / 2.0, own)))
        else:
            signs[leg] = -signs[leg - 1] if leg else 0
    return signs


def _table(sweeps: list[Columns]) -> pd.DataFrame:
    """The points of all sweeps of a trial, numbered; empty with the right kinds of column."""
    if not sweeps:
        whole = ("sweep", "leg", "branch", "count")
        return pd.DataFrame({c: np.zeros(0, np.int64 if c in whole else np.float64) for c in POINT_COLUMNS})
    numbered = [part | {"sweep": np.full(len(part["leg"]), n)} for n, part in enumerate(sweeps)]
    return pd.DataFrame(_one_after_another(numbered))


def _curve(influence: FloatArray, signal: FloatArray) -> tuple[FloatArray, FloatArray]:
    """The loop of one sweep thinned over its rows, with the extremes of both in every block."""
    if len(influence) <= CURVE_POINTS:
        return influence.copy(), signal.copy()
    edges = np.linspace(0, len(influence), CURVE_POINTS // 4 + 1).astype(np.int64)
    starts, stops = edges[:-1, None], edges[1:, None]
    places = np.minimum(starts + np.arange(int((stops - starts).max())), stops - 1)  # the last one repeated
    found = [
        starts[:, 0] + at
        for series in (influence[places], signal[places])
        for at in (series.argmin(axis=1), series.argmax(axis=1))
    ]
    chosen = np.unique(np.concatenate([[0, len(influence) - 1], *found]))
    return influence[chosen], signal[chosen]


def _trace(trial: Trial, values: FloatArray) -> Trace:
    reference, _ = _reference(trial)
    unknown = np.full(len(values), np.nan)
    blocks = [
        _block_means(series) for series in (trial.signal, values, unknown if reference is None else reference)
    ]
    return Trace(blocks[0], blocks[1], blocks[2], trial.reference)


def _block_means(series: FloatArray) -> FloatArray:
    blocks = min(TRACE_POINTS, len(series))
    code = np.arange(len(series)) * blocks // len(series)
    known = np.isfinite(series)
    counts = np.bincount(code[known], minlength=blocks)
    sums = np.bincount(code[known], series[known], minlength=blocks)
    return np.asarray(np.divide(sums, counts, out=np.full(blocks, np.nan), where=counts > 0))


# --- remarks

_NOT_RECORDED = (
    "influence-not-recorded",
    "{what} is not recorded in this trial",
    "no coefficient is taken from it",
    "name its column in [[columns]]",
)
_CONSTANT = (
    "influence-constant",
    "{what} does not vary beyond its noise in this trial",
    "no coefficient is taken from it",
    "sweep it over the range of use",
)
_NOT_KEPT = (
    "length-not-kept",
    "the length is nowhere kept in this trial",
    "no coefficient is taken from it",
    "keep one length while the influence is swept, then the next",
)
_ONE_WAY = (
    "no-return",
    "sensor {sensor}: {what} is swept one way only",
    "no loop width is given, and any drift is part of its slope",
    "sweep it up and down again",
)
_GAP = (
    "sweep-gap",
    "sensor {sensor}: the longest pause between samples is {value} s of a sweep",
    "points on both sides are kept",
    "",
)
_CLIPPED = (
    "sweep-clipped",
    "sensor {sensor}: the signal stays at its extreme while {what} goes through {value} % of its range",
    "points are kept; the slope is too small if the readout was at its end",
    "use a wider range of the readout",
)


def _said(trial: Trial, code: str, found: str, done: str, remedy: str, /, **words: object) -> Notice:
    return Notice(code, "noted", trial.file, None, None, found.format(**words), done, remedy)


def _nothing(trial: Trial, influence: Influence, unit: str, *notices: Notice) -> SweepFeatures:
    table = _table([])
    return SweepFeatures(
        trial.identity, influence.name, unit, trial.signal_unit, table, notices=tuple(notices)
    )


def _missing(trial: Trial, missing: int, what: str) -> list[Notice]:
    if not missing:
        return []
    found = f"{missing} rows without {what} or signal"
    return [
        Notice("missing-values", "noted", trial.file, None, None, found, "left out of sweeps", "", missing)
    ]


def _too_small(trial: Trial, number: int, what: str) -> list[Notice]:
    if not number:
        return []
    found = f"at {number} kept lengths {what} covers less than {SMALLEST_SWEEP:.0%} of the trial's range"
    done = "these stretches give no slope"
    return [Notice("sweep-too-small", "noted", trial.file, None, None, found, done, "", number)]


def _remarks(
    trial: Trial, values: FloatArray, sweeps: list[IntArray], legs: list[IntArray], influence: Influence
) -> list[Notice]:
    """Sweeps one way, pauses and clipping, each said once a trial."""
    sensor = trial.identity.sensor
    found = []
    if sweeps and all(own.max() == 0 for own in legs):
        found.append(_said(trial, *_ONE_WAY, sensor=sensor, what=influence.name))
    pause = max((_pause(trial, rows) for rows in sweeps), default=0.0)
    if pause:
        found.append(_said(trial, *_GAP, sensor=sensor, value=f"{pause:.3g}"))
    stuck = max((_stuck_share(values[rows], trial.signal[rows]) for rows in sweeps), default=0.0)
    if stuck > 0.1:
        found.append(_said(trial, *_CLIPPED, sensor=sensor, what=influence.name, value=f"{100 * stuck:.0f}"))
    return found


def _pause(trial: Trial, rows: IntArray) -> float:
    """The longest pause between samples where it is far longer than usual; else 0."""
    if trial.time_s is None or not trial.time_is_ordered or len(rows) <= TABLE_ROWS:
        return 0.0
    steps = np.diff(trial.time_s[rows])
    longest = float(steps.max())
    return longest if longest > max(20.0 * float(np.median(steps)), 0.05 * float(steps.sum())) else 0.0


def _stuck_share(influence: FloatArray, signal: FloatArray) -> float:
    """Share of the influence's range that passes while the signal stays at its lowest or highest value."""
    if len(signal) <= 8 or np.ptp(signal) == 0:
        return 0.0
    shares = []
    for extreme in (signal.min(), signal.max()):
        edges = np.diff(np.concatenate([[0], (signal == extreme).astype(np.int8), [0]]))
        for start, stop in zip(np.flatnonzero(edges == 1), np.flatnonzero(edges == -1), strict=True):
            if stop - start >= 5:
                shares.append(float(np.ptp(influence[start:stop]) / np.ptp(influence)))
    return max(shares, default=0.0)
