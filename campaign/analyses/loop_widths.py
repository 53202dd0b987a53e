"""How wide the settled loops of each sensor are: width curves with intervals, conditioning, softening."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import special

from campaign.analyses.grouped_rows import Columns, at, columns_of, groups_by, places_by
from campaign.analyses.loop_table import SENSOR_KEYS, LoopTable
from campaign.methods.loops import FRACTIONS, MID

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

BETWEEN_RUNS = "between runs, pooled over the sensors of a generation"
BETWEEN_CYCLES = "between cycles of the same runs"
UNKNOWN = "unknown"
"""Where the uncertainty of a settled width comes from."""

FEWEST_DEGREES = 4
"""Runs carry the uncertainty from so many degrees of freedom on; with fewer, cycles do, and it is said."""

_RUN = [*SENSOR_KEYS, "trial"]


@dataclass(frozen=True)
class Scatter:
    """Variance of one run's mean width about its sensor's, at one place: in (%FSO)², a generation."""

    variance: float
    degrees_of_freedom: float
    source: str


def sensor_widths(table: LoopTable) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Return the settled widths of every sensor, and their curves.

    Returns
    -------
    sensors
        One row a sensor: generation, module, sensor, settled_from_cycle, width_percent_fso, low, high,
        degree_of_hysteresis, softening_percent, then position, at_strain, width_strain, width_low, width_high
        (x), mid_width_percent_fso with mid_low and mid_high (signed), degree_of_whole_signal,
        first_width_percent_fso, runs, loops, rate_per_s, full_scale_output, slope, unit, scale,
        standard_uncertainty, degrees_of_freedom, variance_source. The width is the largest magnitude of the
        mean curve; its limits hold wherever that largest place may be.
    curves
        One row a sensor and place: fraction, strain, width_percent_fso (signed), low, high (simultaneous).
    """
    counted = table.rows["counted"].to_numpy(bool)
    rows, width = table.rows[counted], table.width[counted]
    generations = groups_by(rows, ["generation"])
    scatter = {key[0]: _scatter(rows.iloc[places], width[places]) for key, places in generations}
    courses = {own.key: own for own in _groups(table.rows, SENSOR_KEYS)}
    sensors: list[dict[str, object]] = []
    curves: list[dict[str, FloatArray]] = []
    groups = _groups(rows, SENSOR_KEYS)
    for own in groups:
        found, curve = _one_sensor(own, width[own.places], scatter[own.key[0]], table)
        who = dict(zip(SENSOR_KEYS, own.key, strict=True))
        sensors.append({**who, **found, **_conditioning_of(courses[own.key])})
        curves.append(curve)
    columns = [*SENSOR_KEYS, "fraction", "strain", "width_percent_fso", "low", "high"]
    if not curves:
        return pd.DataFrame(sensors), pd.DataFrame(columns=columns)
    whose = {
        name: np.repeat([own.key[place] for own in groups], len(FRACTIONS))
        for place, name in enumerate(SENSOR_KEYS)
    }
    joined = {name: np.concatenate([curve[name] for curve in curves]) for name in curves[0]}
    return pd.DataFrame(sensors), pd.DataFrame({**whose, **joined})[columns]


@dataclass(frozen=True)
class _Loops:
    """The loops of one sensor or run: its key, their places in the table, and the table's columns there."""

    key: tuple[str, ...]
    places: IntArray
    columns: Columns

    def __getitem__(self, name: str) -> Any:
        return self.columns[name]

    def where(self, chosen: npt.NDArray[np.bool_]) -> Columns:
        """The columns of some of its loops."""
        return {name: values[chosen] for name, values in self.columns.items()}


def _groups(rows: pd.DataFrame, keys: list[str], *, sort: bool = True) -> list[_Loops]:
    columns = columns_of(rows, [name for name in _TAKEN if name in rows])
    return [_Loops(key, places, at(columns, places)) for key, places in groups_by(rows, keys, sort=sort)]


_TAKEN = (
    *("trial", "session", "repetition", "run", "cycle", "counted", "whole", "settled", "rate"),
    *("low", "high", "degree", "degree_of_whole_signal", "largest_width", "full_scale_output", "slope"),
    *("zero_signal", "peak_signal", "signal_range", "unit", "scale", "position"),
)
"""Columns of loops that are looked at sensor by sensor or run by run."""


def _known_mean(values: FloatArray) -> float:
    """Mean of what is known; NaN where nothing is."""
    known = ~np.isnan(values)
    return float(np.where(known, values, 0.0).sum() / known.sum()) if known.any() else math.nan


def _scatter(rows: pd.DataFrame, width: FloatArray) -> Scatter:
    """Between runs where enough of them repeat, else between cycles over the usual number of them."""
    codes: IntArray = np.asarray(rows.groupby(_RUN, sort=False).ngroup(), dtype=np.int64)
    runs = places_by(codes)
    means = np.stack([_mean(width[places]) for places in runs])
    first = rows.iloc[[places[0] for places in runs]]
    sensors: IntArray = np.asarray(first.groupby(SENSOR_KEYS, sort=False).ngroup(), dtype=np.int64)
    between, degrees = _pooled(means, sensors)
    if degrees >= FEWEST_DEGREES and between > 0:
        return Scatter(between, degrees, BETWEEN_RUNS)
    within, degrees = _pooled(width, codes)
    if degrees < 1 or not within > 0:
        return Scatter(math.nan, 0.0, UNKNOWN)
    usual = len(codes) / (int(codes.max()) + 1)
    return Scatter(within / usual, degrees, BETWEEN_CYCLES)


def _mean(values: FloatArray) -> FloatArray:
    """Mean over rows of what is known, NaN where nothing is."""
    known = np.isfinite(values)
    held = known.sum(axis=0)
    total = np.where(known, values, 0.0).sum(axis=0)
    return np.asarray(np.divide(total, held, out=np.full(values.shape[1], np.nan), where=held > 0))


def _pooled(values: FloatArray, codes: IntArray) -> tuple[float, float]:
    """Variance about the groups' means, averaged over places, with the degrees of freedom of one place."""
    count = int(codes.max()) + 1
    known = np.isfinite(values)
    filled = np.where(known, values, 0.0)
    held = np.stack(
        [np.bincount(codes, known[:, k], minlength=count) for k in range(values.shape[1])], axis=1
    )
    sums = np.stack(
        [np.bincount(codes, filled[:, k], minlength=count) for k in range(values.shape[1])], axis=1
    )
    means = np.divide(sums, held, out=np.zeros_like(sums), where=held > 0)
    squares = np.where(known, (filled - means[codes]) ** 2, 0.0).sum(axis=0)
    degrees = np.maximum(held - 1, 0).sum(axis=0)
    usable = degrees > 0
    if not usable.any():
        return math.nan, 0.0
    return float(np.sum(squares[usable]) / np.sum(degrees[usable])), float(degrees[usable].mean())


def _one_sensor(
    rows: _Loops, width: FloatArray, scatter: Scatter, table: LoopTable
) -> tuple[dict[str, object], dict[str, FloatArray]]:
    runs = places_by(pd.factorize(rows["trial"])[0].astype(np.int64))
    curve = _mean(np.stack([_mean(width[places]) for places in runs]))
    error = math.sqrt(scatter.variance / len(runs)) if scatter.degrees_of_freedom > 0 else math.nan
    everywhere, here = _quantiles(scatter.degrees_of_freedom)
    first = {name: values[0] for name, values in rows.columns.items()}
    low, high = _known_mean(rows["low"]), _known_mean(rows["high"])
    places = low + FRACTIONS * (high - low)
    known = np.isfinite(curve)
    largest = int(np.argmax(np.where(known, np.abs(curve), -1.0)))
    magnitude = abs(float(curve[largest]))
    to_strain = float(first["full_scale_output"]) / 100.0 / abs(float(first["slope"]))
    limits = max(magnitude - everywhere * error, 0.0), magnitude + everywhere * error
    found: dict[str, object] = {
        "width_percent_fso": magnitude,
        "low": limits[0] if math.isfinite(error) else math.nan,
        "high": limits[1],
        "degree_of_hysteresis": _known_mean(rows["degree"]),
        "position": first["position"],
        "at_strain": float(places[largest]),
        "width_strain": magnitude * to_strain,
        "mid_width_percent_fso": float(curve[MID]),
        "mid_low": float(curve[MID]) - here * error,
        "mid_high": float(curve[MID]) + here * error,
        "degree_of_whole_signal": _known_mean(rows["degree_of_whole_signal"]),
        "runs": len(runs),
        "loops": len(width),
        "rate_per_s": table.rate,
        "full_scale_output": float(first["full_scale_output"]),
        "slope": float(first["slope"]),
        "unit": first["unit"],
        "scale": first["scale"],
        "standard_uncertainty": error,
        "degrees_of_freedom": scatter.degrees_of_freedom,
        "variance_source": scatter.source,
    }
    reach = everywhere * error
    frame = {"fraction": FRACTIONS, "strain": places, "width_percent_fso": curve}
    return found, {**frame, "low": curve - reach, "high": curve + reach}


def _quantiles(degrees: float) -> tuple[float, float]:
    """Student's quantiles of 95 % intervals: for all places at once (Šidák), and for one."""
    if not degrees > 0:
        return math.nan, math.nan
    each = 0.5 + 0.5 * 0.95 ** (1.0 / len(FRACTIONS))
    return float(special.stdtrit(degrees, each)), float(special.stdtrit(degrees, 0.975))


def _conditioning_of(own: _Loops) -> dict[str, object]:
    """When the sensor's runs settle, and how much its first loop differs from the settled ones."""
    trial, counted = own["trial"], own["counted"].astype(bool)
    settled, first = own["settled"].astype(bool), own["run"] == own["run"].min()
    firsts = [
        _settled_from(own["cycle"][trial == name], settled[trial == name])
        for name in dict.fromkeys(trial[counted])
    ]
    whole = own.where(first & own["whole"].astype(bool))
    ranges = own["signal_range"][first & settled]
    usual = _known_mean(ranges) if len(ranges) else math.nan
    softening = 100.0 * (_first(whole["signal_range"]) - usual) / usual
    width = 100.0 * np.abs(whole["largest_width"]) / whole["full_scale_output"]
    return {
        "settled_from_cycle": max(firsts) if all(map(math.isfinite, firsts)) else math.nan,
        "softening_percent": softening,
        "first_width_percent_fso": _first(width),
    }


def _settled_from(cycle: IntArray, settled: npt.NDArray[np.bool_]) -> float:
    return _first(cycle[settled])


def runs_table(table: LoopTable) -> Iterator[dict[str, object]]:
    """Yield one row a cyclic trial: who, run, rate, cycles, settled from, first and settled figures."""
    for own in _groups(table.rows, _RUN, sort=False):
        chosen = own["settled"].astype(bool)
        whole, settled = own.where(own["whole"].astype(bool)), own.where(chosen)
        rates = own["rate"][~np.isnan(own["rate"])]
        yield {
            **dict(zip(_RUN, own.key, strict=True)),
            "session": own["session"][0],
            "repetition": own["repetition"][0],
            "run": int(own["run"][0]),
            "rate_per_s": float(np.median(rates)) if len(rates) else math.nan,
            "cycles": len(own.places),
            "settled_from_cycle": _settled_from(own["cycle"], chosen),
            "first_zero_signal": _first(whole["zero_signal"]),
            "settled_zero_signal": _known_mean(settled["zero_signal"]),
            "first_peak_signal": _first(whole["peak_signal"]),
            "settled_peak_signal": _known_mean(settled["peak_signal"]),
            "unit": own["unit"][0],
        }


def _first(values: npt.NDArray[Any]) -> float:
    return float(values[0]) if len(values) else math.nan
