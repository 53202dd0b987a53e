"""How wide the settled loops of each sensor are: width curves with intervals, conditioning, softening."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

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
    scatter = {str(g): _scatter(own, width[_places(rows, own)]) for g, own in rows.groupby("generation")}
    sensors: list[dict[str, object]] = []
    curves: list[pd.DataFrame] = []
    for key, own in rows.groupby(SENSOR_KEYS, sort=True):
        found, curve = _one_sensor(own, width[_places(rows, own)], scatter[str(key[0])], table)
        who = dict(zip(SENSOR_KEYS, key, strict=True))
        sensors.append({**who, **found, **_conditioning_of(table, who)})
        curves.append(pd.concat([pd.DataFrame([key] * len(curve), columns=SENSOR_KEYS), curve], axis=1))
    columns = [*SENSOR_KEYS, "fraction", "strain", "width_percent_fso", "low", "high"]
    frame = pd.DataFrame(sensors)
    return frame, pd.concat(curves, ignore_index=True)[columns] if curves else pd.DataFrame(columns=columns)


def _places(rows: pd.DataFrame, own: pd.DataFrame) -> IntArray:
    return np.asarray(rows.index.get_indexer(own.index), dtype=np.int64)


def _scatter(rows: pd.DataFrame, width: FloatArray) -> Scatter:
    """Between runs where enough of them repeat, else between cycles over the usual number of them."""
    runs, codes = _means_by(rows, width, _RUN)
    named = pd.DataFrame(list(runs.index), columns=_RUN)
    sensors: IntArray = np.asarray(named.groupby(SENSOR_KEYS, sort=False).ngroup(), dtype=np.int64)
    means = np.stack(list(runs))
    between, degrees = _pooled(means, sensors)
    if degrees >= FEWEST_DEGREES and between > 0:
        return Scatter(between, degrees, BETWEEN_RUNS)
    within, degrees = _pooled(width, codes)
    if degrees < 1 or not within > 0:
        return Scatter(math.nan, 0.0, UNKNOWN)
    usual = len(codes) / (int(codes.max()) + 1)
    return Scatter(within / usual, degrees, BETWEEN_CYCLES)


def _means_by(rows: pd.DataFrame, width: FloatArray, keys: list[str]) -> tuple[pd.Series, IntArray]:
    """Mean width curve of each group, and the group of every row."""
    groups = rows.groupby(keys, sort=False)
    codes: IntArray = np.asarray(groups.ngroup(), dtype=np.int64)
    names = rows[keys].drop_duplicates().itertuples(index=False, name=None)
    means = [_mean(width[codes == code]) for code in range(int(codes.max()) + 1)]
    return pd.Series(means, index=pd.Index(list(names), tupleize_cols=False)), codes


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
    rows: pd.DataFrame, width: FloatArray, scatter: Scatter, table: LoopTable
) -> tuple[dict[str, object], pd.DataFrame]:
    runs = _means_by(rows, width, _RUN)[0]
    curve = _mean(np.stack(list(runs)))
    error = math.sqrt(scatter.variance / len(runs)) if scatter.degrees_of_freedom > 0 else math.nan
    everywhere, here = _quantiles(scatter.degrees_of_freedom)
    first = rows.iloc[0]
    low, high = float(rows["low"].mean()), float(rows["high"].mean())
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
        "degree_of_hysteresis": float(rows["degree"].mean()),
        "position": first["position"],
        "at_strain": float(places[largest]),
        "width_strain": magnitude * to_strain,
        "mid_width_percent_fso": float(curve[MID]),
        "mid_low": float(curve[MID]) - here * error,
        "mid_high": float(curve[MID]) + here * error,
        "degree_of_whole_signal": float(rows["degree_of_whole_signal"].mean()),
        "runs": len(runs),
        "loops": len(rows),
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
    return found, pd.DataFrame({**frame, "low": curve - reach, "high": curve + reach})


def _quantiles(degrees: float) -> tuple[float, float]:
    """Student's quantiles of 95 % intervals: for all places at once (Šidák), and for one."""
    if not degrees > 0:
        return math.nan, math.nan
    each = 0.5 + 0.5 * 0.95 ** (1.0 / len(FRACTIONS))
    return float(stats.t.ppf(each, degrees)), float(stats.t.ppf(0.975, degrees))


def _conditioning_of(table: LoopTable, who: dict[str, object]) -> dict[str, object]:
    """When the sensor's runs settle, and how much its first loop differs from the settled ones."""
    rows = table.rows
    own = rows[np.logical_and.reduce([rows[k] == v for k, v in who.items()])]
    counted = own[own["counted"]]
    runs = own[own["trial"].isin(counted["trial"])].groupby("trial")
    firsts = [_settled_from(run) for _, run in runs]
    first = own[own["run"] == own["run"].min()]
    whole, settled = first[first["whole"]], first[first["settled"]]
    usual = float(settled["signal_range"].mean()) if len(settled) else math.nan
    softening = 100.0 * (_first(whole["signal_range"]) - usual) / usual
    width = 100.0 * whole["largest_width"].abs() / whole["full_scale_output"]
    return {
        "settled_from_cycle": max(firsts) if all(map(math.isfinite, firsts)) else math.nan,
        "softening_percent": softening,
        "first_width_percent_fso": _first(width),
    }


def _settled_from(rows: pd.DataFrame) -> float:
    settled = rows.loc[rows["settled"], "cycle"]
    return float(settled.iloc[0]) if len(settled) else math.nan


def runs_table(table: LoopTable) -> Iterator[dict[str, object]]:
    """Yield one row a cyclic trial: who, run, rate, cycles, settled from, first and settled figures."""
    for key, own in table.rows.groupby(_RUN, sort=False):
        whole, settled = own[own["whole"]], own[own["settled"]]
        yield {
            **dict(zip(_RUN, key, strict=True)),
            "session": own["session"].iloc[0],
            "repetition": own["repetition"].iloc[0],
            "run": int(own["run"].iloc[0]),
            "rate_per_s": float(own["rate"].median()),
            "cycles": len(own),
            "settled_from_cycle": _settled_from(own),
            "first_zero_signal": _first(whole["zero_signal"]),
            "settled_zero_signal": float(settled["zero_signal"].mean()) if len(settled) else math.nan,
            "first_peak_signal": _first(whole["peak_signal"]),
            "settled_peak_signal": float(settled["peak_signal"].mean()) if len(settled) else math.nan,
            "unit": own["unit"].iloc[0],
        }


def _first(values: pd.Series) -> float:
    return float(values.iloc[0]) if len(values) else math.nan
