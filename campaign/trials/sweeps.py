"""Sweeps of an influence at kept lengths: what pressure, temperature and the like are reduced to.

A trial is cut where its length is kept; every such stretch in which the influence goes through a good part of
its range is a sweep. A sweep that dwells becomes one point a dwell, one that moves all the time one point a
step of equal width on every leg up or down, so that both branches weigh alike.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.methods.medians import middle_value
from campaign.notices import Notice
from campaign.recordings.recording import Trial, TrialIdentity
from campaign.trials.plateaus import find_plateaus
from campaign.trials.sweep_points import (
    Series,
    SweepRows,
    curve_blocks,
    extremes_in,
    means_over,
    rows_of_sweep,
)

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

SMALLEST_SWEEP = 0.3
"""A kept length whose influence covers less than this share of the trial's range is no sweep."""

KEPT_STRAIN = 0.005
KEPT_MM = 0.25
"""What a kept length may wander."""

STEP = "step"
"""Unit of an influence of which only a level column says what was done."""

TRACE_POINTS = 150

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
    columns
        By the names of :data:`POINT_COLUMNS`, an array of shape (points,) each; empty where there is no
        sweep.
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
    columns: Columns
    curves: dict[int, tuple[FloatArray, FloatArray]] = field(default_factory=dict)
    trace: Trace | None = None
    notices: tuple[Notice, ...] = ()

    @cached_property
    def points(self) -> pd.DataFrame:
        """The columns as a table: made where it is wanted, since that costs as much as finding them."""
        return pd.DataFrame(self.columns)


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
    span, noise = _span_and_noise(trial, values, rows)
    if len(rows) < 4 or span <= max(influence.smallest, 8.0 * noise):
        return _nothing(trial, influence, unit, *notices, _said(trial, *_CONSTANT, what=influence.name))
    stretches = [rows] if influence.moves_length else list(_kept_lengths(trial, rows, by_level=unit != STEP))
    if not stretches:
        return _nothing(trial, influence, unit, *notices, _said(trial, *_NOT_KEPT))
    wide = [part for part in stretches if np.ptp(values[part]) >= SMALLEST_SWEEP * span]
    notices += _too_small(trial, len(stretches) - len(wide), influence.name)
    found = [_sweep(trial, values, part) for part in wide]
    sweeps = [sweep for sweep in found if len(sweep.counts) >= 3]
    notices += _remarks(trial, values, sweeps, influence)
    points = _points(trial, values, sweeps, influence.moves_length)
    curves = {number: _curve(trial, values, sweep) for number, sweep in enumerate(sweeps)}
    trace = _trace(trial, values)
    return SweepFeatures(
        trial.identity, influence.name, unit, trial.signal_unit, points, curves, trace, tuple(notices)
    )


def _span_and_noise(trial: Trial, values: FloatArray, rows: IntArray) -> tuple[float, float]:
    """Range of the influence over *rows* and its noise."""

    def find() -> tuple[float, float]:
        own = values[rows]
        return (float(np.ptp(own)) if len(own) else 0.0), _noise(own)

    return find() if len(rows) < len(values) else trial.once_a_file("span", (values,), find)


# --- where the length is kept


def _recorded(trial: Trial) -> Series:
    """The length as the stand recorded it; ``None`` where it did not."""
    recorded = {"length": trial.length_mm, "elongation": trial.elongation_mm, "strain": trial.strain}
    values = recorded.get(trial.reference)
    return values if values is not None and np.isfinite(values).any() else None


def _wander(trial: Trial, reference: FloatArray) -> float:
    """What the length may wander while kept, in the unit in which it is recorded."""
    if trial.reference == "strain":
        return KEPT_STRAIN
    length = trial.length_mm if trial.length_mm is not None else reference
    return max(KEPT_MM, KEPT_STRAIN * middle_value(np.abs(length[np.isfinite(length)])))


def _kept_lengths(trial: Trial, rows: IntArray, *, by_level: bool) -> Iterator[IntArray]:
    """Rows of every stretch at one kept length; all rows where the length stands still or is not known."""
    reference = _recorded(trial)
    known = np.zeros(0, dtype=np.int64) if reference is None else rows[np.isfinite(reference[rows])]
    wander = _wander(trial, reference) if reference is not None else 0.0
    if reference is None or len(known) == 0 or np.ptp(reference[known]) <= wander:
        yield from _levels(trial, rows) if by_level else (rows,)
        return
    own = reference[known]
    starts, stops = find_plateaus(own)
    if len(starts) < 2:
        moves = np.flatnonzero(np.abs(np.diff(own)) > wander) + 1
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


def _noise(values: FloatArray) -> float:
    """Standard deviation of the noise of a series, robust, from second differences."""
    if len(values) < 4:
        return 0.0
    return middle_value(np.abs(np.diff(values, n=2))) / float(0.6745 * np.sqrt(6.0))


# --- points


def _sweep(trial: Trial, values: FloatArray, rows: IntArray) -> SweepRows:
    """Legs and points of one sweep; sensors of one file mostly share them."""
    first, last = int(rows[0]), int(rows[-1])
    which = (first, last, b"" if last - first + 1 == len(rows) else rows.tobytes())
    columns = (values, trial.time_s)
    ordered = trial.time_is_ordered
    return trial.once_a_file(
        ("sweep", which), columns, lambda: rows_of_sweep(values, trial.time_s, rows, ordered=ordered)
    )


def _points(trial: Trial, values: FloatArray, sweeps: list[SweepRows], moves_length: bool) -> Columns:
    """The points of all sweeps of a trial, numbered; empty with the right kinds of column."""
    if not sweeps:
        whole = ("sweep", "leg", "branch", "count")
        return {name: np.zeros(0, np.int64 if name in whole else np.float64) for name in POINT_COLUMNS}
    chosen = np.concatenate([sweep.chosen for sweep in sweeps])
    counts = np.concatenate([sweep.counts for sweep in sweeps])
    unknown = np.full(len(counts), np.nan)

    def mean(series: Series) -> FloatArray:
        return means_over(series, chosen, counts) if series is not None else unknown

    def of_file(series: Series) -> FloatArray:
        key = ("means", *map(id, sweeps))
        return trial.once_a_file(key, (series,), lambda: (sweeps, mean(series)))[1]

    begun = float(trial.time_s[0]) if trial.time_s is not None and trial.time_is_ordered else 0.0
    references = (trial.strain, trial.elongation_mm, trial.length_mm)
    means = [mean(series) if not moves_length else unknown for series in references]
    return {
        "sweep": np.repeat(np.arange(len(sweeps)), [len(sweep.counts) for sweep in sweeps]),
        "leg": np.concatenate([sweep.leg for sweep in sweeps]),
        "influence": of_file(values),
        "signal": mean(trial.signal),
        "branch": np.concatenate([sweep.branch for sweep in sweeps]),
        "time_s": np.concatenate([sweep.time_s for sweep in sweeps]) - begun,
        "dwell_s": np.concatenate([sweep.dwell_s for sweep in sweeps]),
        "count": counts,
        **dict(zip(REFERENCES, means, strict=True)),
        "temperature_c": of_file(trial.temperature_c),
    }


def _curve(trial: Trial, values: FloatArray, sweep: SweepRows) -> tuple[FloatArray, FloatArray]:
    """The loop of one sweep thinned over its rows, with the extremes of both in every block."""
    influence, signal = values[sweep.rows], trial.signal[sweep.rows]
    blocks = trial.once_a_file(("curve", id(sweep)), (values,), lambda: (sweep, curve_blocks(influence)))[1]
    if blocks is None:
        return influence, signal
    chosen = np.unique(np.concatenate([blocks.kept, extremes_in(signal, blocks.places)]))
    return influence[chosen], signal[chosen]


def _trace(trial: Trial, values: FloatArray) -> Trace:
    reference = _recorded(trial)
    influence = trial.once_a_file("trace", (values,), lambda: _block_means(values))
    unknown = np.full(len(influence), np.nan)
    kept = unknown if reference is None else _block_means(reference)
    return Trace(_block_means(trial.signal), influence, kept, trial.reference)


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
    none = _points(trial, np.zeros(0), [], influence.moves_length)
    return SweepFeatures(
        trial.identity, influence.name, unit, trial.signal_unit, none, notices=tuple(notices)
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


def _remarks(trial: Trial, values: FloatArray, sweeps: list[SweepRows], influence: Influence) -> list[Notice]:
    """Sweeps one way, pauses and clipping, each said once a trial."""
    sensor = trial.identity.sensor
    found = []
    if sweeps and all(sweep.legs == 1 for sweep in sweeps):
        found.append(_said(trial, *_ONE_WAY, sensor=sensor, what=influence.name))
    pause = max((sweep.pause_s for sweep in sweeps), default=0.0)
    if pause:
        found.append(_said(trial, *_GAP, sensor=sensor, value=f"{pause:.3g}"))
    stuck = max((_stuck_share(values, trial.signal, sweep.rows) for sweep in sweeps), default=0.0)
    if stuck > 0.1:
        found.append(_said(trial, *_CLIPPED, sensor=sensor, what=influence.name, value=f"{100 * stuck:.0f}"))
    return found


def _stuck_share(influence: FloatArray, series: FloatArray, rows: IntArray) -> float:
    """Share of the influence's range that passes while the signal stays at its lowest or highest value."""
    signal = series[rows]
    low, high = signal.min(), signal.max()
    if len(signal) <= 8 or low == high:
        return 0.0
    shares = []
    for extreme in (low, high):
        there = signal == extreme
        if np.count_nonzero(there) < 5:
            continue
        swept = influence[rows]
        edges = np.diff(np.concatenate([[0], there.astype(np.int8), [0]]))
        for start, stop in zip(np.flatnonzero(edges == 1), np.flatnonzero(edges == -1), strict=True):
            if stop - start >= 5:
                shares.append(float(np.ptp(swept[start:stop]) / np.ptp(swept)))
    return max(shares, default=0.0)
