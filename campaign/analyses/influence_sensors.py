"""What one influence does to every sensor: coefficients with intervals, strain equivalents, compensation."""

from __future__ import annotations

import math
from collections.abc import Hashable
from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import special

from campaign.analyses.grouped_rows import Columns, at, columns_of, groups_by
from campaign.analyses.sensor_figures import principal_lines
from campaign.methods.influence_model import (
    InfluenceFit,
    SweepSet,
    distinct_lengths,
    fit_influences,
    left_out_slopes,
    quotient,
    spread_about_sweeps,
)
from campaign.trials.readings import SENSOR_KEYS

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
SensorKey = tuple[str, str, str]

FROM_STAIRCASES = "the sensor's staircases"
FROM_SWEEPS = "the levels of these sweeps"
NO_LINE = "not known"
"""Where the slope that turns a signal into a strain was taken from."""

ONE_LENGTH = "one length only: a change with strain is not identifiable"
EXTRAPOLATED = "zero strain lies outside the lengths measured"
BEYOND = "the value in use lies beyond the range measured"

COEFFICIENT_COLUMNS = (
    *("generation", "module", "sensor", "position", "unit", "influence_unit"),
    *("coefficient", "low", "high", "per_x", "per_x_low", "per_x_high"),
    *("sweeps", "runs", "lengths", "df", "variance_source"),
    *("influence_low", "influence_high", "x_low", "x_high", "zero_signal", "slope", "slope_source"),
    *("error_per_unit", "error_per_unit_low", "error_per_unit_high"),
    *("error_in_use", "error_in_use_low", "error_in_use_high", "error_in_use_uncertainty", "error_in_use_df"),
    *("in_use", "residual_sd_before", "residual_sd_after", "left_out_by"),
    *("loop_error", "loop_error_low", "loop_error_high", "label"),
)
"""Columns of a table of coefficients: one row a sensor.

``coefficient`` is the signal per unit of the influence at the origin of x (at the one length measured, where
there is one), ``per_x`` its change per unit of x. ``error_per_unit`` is the apparent x per unit of the
influence at the middle of the lengths measured; ``error_in_use`` at the value in use, at that end of the
lengths where it is largest. Residual SDs are in signal units, about each sweep's own mean, without and with
the slope that other sweeps give. ``loop_error`` is rising minus falling at mid range as x, mean over sweeps.
Limits are 95 %; NaN where not identifiable.
"""


@dataclass(frozen=True)
class SignalSlope:
    """Slope of the signal against x with its variance, degrees of freedom and origin."""

    slope: float
    variance: float
    freedom: float
    source: str


def sensor_fits(sweeps: pd.DataFrame, origin: float) -> dict[SensorKey, InfluenceFit]:
    """Fit every sensor's coefficients, x counted from *origin*; scatter is pooled within a generation."""
    fits: dict[SensorKey, InfluenceFit] = {}
    for _, rows in sweeps.groupby(["generation", "influence_unit", "unit"], sort=True):
        keys, sets = [], []
        columns = columns_of(rows, SWEEP_SET_COLUMNS)
        for key, places in groups_by(rows, SENSOR_KEYS):
            keys.append((key[0], key[1], key[2]))
            sets.append(sweep_set(at(columns, places), origin))
        fits |= dict(zip(keys, fit_influences(sets), strict=True))
    return fits


SWEEP_SET_COLUMNS = ("x", "slope", "slope_error", "slope_freedom", "run")
"""Columns of a table of sweeps that :func:`sweep_set` takes."""


def sweep_set(rows: Columns, origin: float) -> SweepSet:
    """Return the sweeps of one sensor, x counted from *origin*; *rows* holds :data:`SWEEP_SET_COLUMNS`."""
    x, slope, error, freedom = (rows[name].astype(np.float64) for name in SWEEP_SET_COLUMNS[:-1])
    return SweepSet(x - origin, slope, error, freedom, rows["run"].astype(np.int64))


def signal_slopes(sweeps: pd.DataFrame, calibration: Calibration | None) -> dict[SensorKey, SignalSlope]:
    """Return the slope that turns each sensor's signal into x: its staircases', else its sweeps' levels'."""
    known: dict[SensorKey, SignalSlope] = {}
    if calibration is not None and len(calibration.sensor_lines):
        for row in principal_lines(calibration.sensor_lines).to_dict("records"):
            key = (str(row["generation"]), str(row["module"]), str(row["sensor"]))
            variance, freedom = float(row["var_slope"]), float(row["df"])
            known[key] = SignalSlope(float(row["slope"]), variance, freedom, FROM_STAIRCASES)
    for (generation, module, sensor), places in groups_by(sweeps, SENSOR_KEYS):
        who = generation, module, sensor
        if who not in known or not math.isfinite(known[who].slope):
            known[who] = _slope_of_levels(sweeps.iloc[places])
    return known


def _slope_of_levels(rows: pd.DataFrame) -> SignalSlope:
    x, level = rows["x"].to_numpy(float), rows["level"].to_numpy(float)
    if distinct_lengths(x) < 2:
        return SignalSlope(math.nan, math.nan, 0.0, NO_LINE)
    centred = x - x.mean()
    square = float(centred @ centred)
    slope = float(centred @ level) / square
    freedom = len(x) - 2
    rest = level - level.mean() - slope * centred
    variance = float(rest @ rest) / freedom / square if freedom else math.nan
    return SignalSlope(slope, variance, float(freedom), FROM_SWEEPS)


def coefficient_table(
    points: pd.DataFrame,
    sweeps: pd.DataFrame,
    fits: dict[SensorKey, InfluenceFit],
    slopes: dict[SensorKey, SignalSlope],
    origin: float,
    in_use: float,
) -> pd.DataFrame:
    """Return one row a sensor, columns of :data:`COEFFICIENT_COLUMNS`.

    Parameters
    ----------
    points, sweeps
        As :mod:`campaign.analyses.influence_sweeps` makes them.
    fits, slopes
        Coefficients, and what turns signals into x.
    origin
        Where x is zero.
    in_use
        Value of the influence in use, its unit.
    """
    known = columns_of(sweeps, _ROW_COLUMNS)
    of_sensors = groups_by(sweeps, SENSOR_KEYS)
    named = sweeps.index.to_numpy()
    signals = columns_of(points, ("number", "influence", "signal"))
    of_points = _places_of_points(signals["number"], [named[places] for _, places in of_sensors])
    rows = [
        _row(
            (key[0], key[1], key[2]),
            at(known, places) | {"number": named[places]},
            at(signals, own),
            fits,
            slopes,
            origin,
            in_use,
        )
        for (key, places), own in zip(of_sensors, of_points, strict=True)
    ]
    return pd.DataFrame(rows, columns=list(COEFFICIENT_COLUMNS))


_ROW_COLUMNS = (
    *("position", "unit", "influence_unit", "influence_low", "influence_high", "level", "loop"),
    *SWEEP_SET_COLUMNS,
)


def _places_of_points(number: IntArray, sensors: list[IntArray]) -> list[IntArray]:
    """Places of the points of every sensor, whose sweeps' numbers are given."""
    owner = np.full(max((int(own.max()) for own in (number, *sensors) if len(own)), default=-1) + 1, -1)
    for code, own in enumerate(sensors):
        owner[own] = code
    found = owner[number]
    order = np.argsort(found, kind="stable")
    bounds = np.searchsorted(found[order], np.arange(len(sensors) + 1))
    return [order[first:last] for first, last in pairwise(bounds.tolist())]


def _row(
    key: SensorKey,
    sweeps: Columns,
    points: Columns,
    fits: dict[SensorKey, InfluenceFit],
    slopes: dict[SensorKey, SignalSlope],
    origin: float,
    in_use: float,
) -> dict[str, object]:
    fit, slope = fits[key], slopes[key]
    x = sweeps["x"].astype(np.float64)
    known = bool(np.isfinite(x).all())
    low, high = (float(x.min()), float(x.max())) if known else (math.nan, math.nan)
    row: dict[str, object] = dict(zip(SENSOR_KEYS, key, strict=True))
    row |= {name: sweeps[name][0] for name in ("position", "unit", "influence_unit")}
    row |= {"sweeps": fit.sweeps, "runs": fit.runs, "lengths": fit.lengths}
    row |= {"df": fit.degrees_of_freedom, "variance_source": fit.source, "x_low": low, "x_high": high}
    reached = _is_reached(in_use, sweeps)
    row |= {
        "influence_low": float(np.nanmin(sweeps["influence_low"])),
        "influence_high": float(np.nanmax(sweeps["influence_high"])),
        "zero_signal": _zero_signal(x - origin, sweeps["level"].astype(np.float64)),
        "slope": slope.slope,
        "slope_source": slope.source,
        "in_use": in_use,
        "label": "; ".join(_labels(fit, low, high, origin, reached)),
    }
    row |= _coefficients(fit)
    row |= _as_x(fit, slope, low - origin, high - origin, in_use if reached else math.nan)
    row |= _compensation(sweeps, points, origin)
    return row | _loop(sweeps["loop"].astype(np.float64), slope.slope)


def _is_reached(in_use: float, sweeps: Columns) -> bool:
    """Whether the value in use lies within the range that was swept, to a tenth."""
    reach = max(np.abs(sweeps[name]).max() for name in ("influence_low", "influence_high"))
    return bool(abs(in_use) <= 1.1 * reach)


def _labels(fit: InfluenceFit, low: float, high: float, origin: float, reached: bool) -> list[str]:
    labels = [] if fit.has_change else [ONE_LENGTH]
    if fit.has_change and low - origin > 0.1 * (high - low):
        labels.append(EXTRAPOLATED)
    return labels if reached else [*labels, BEYOND]


def _zero_signal(x: FloatArray, level: FloatArray) -> float:
    """Signal without the influence at the origin of x, from the levels; their mean with one length."""
    if distinct_lengths(x) < 2:
        return float(level.mean())
    return float(np.polynomial.polynomial.polyfit(x, level, 1)[0])


def _reach(variance: float, freedom: float) -> float:
    """Half-width of the 95 % interval; NaN where it is not known."""
    if not (freedom > 0 and variance >= 0):
        return math.nan
    return float(special.stdtrit(freedom, 0.975)) * math.sqrt(variance)


def _coefficients(fit: InfluenceFit) -> dict[str, object]:
    found: dict[str, object] = {}
    for number, name in enumerate(("coefficient", "per_x")):
        value = float(fit.coefficients[number])
        reach = _reach(float(fit.covariance[number, number]), fit.degrees_of_freedom)
        prefix = "" if name == "coefficient" else "per_x_"
        found |= {name: value, f"{prefix}low": value - reach, f"{prefix}high": value + reach}
    return found


def _as_x(fit: InfluenceFit, slope: SignalSlope, low: float, high: float, in_use: float) -> dict[str, object]:
    """Apparent x per unit at the middle of the lengths, and at the value in use where it is largest."""
    middle = (low + high) / 2.0
    places = [p for p in (low, middle, high) if math.isfinite(p)] or [0.0]
    worst = max(places, key=lambda place: abs(fit.at(place)[0]))
    found: dict[str, object] = {}
    for name, place, factor in (
        ("error_per_unit", middle if math.isfinite(middle) else 0.0, 1.0),
        ("error_in_use", worst, in_use),
    ):
        value, variance = fit.at(place)
        freedoms = {"value": fit.degrees_of_freedom, "divisor": slope.freedom}
        ratio, uncertainty, freedom = quotient(value, variance, slope.slope, slope.variance, freedoms)
        reach = _reach(uncertainty**2, freedom) * abs(factor)
        found |= {
            name: ratio * factor,
            f"{name}_low": ratio * factor - reach,
            f"{name}_high": ratio * factor + reach,
        }
        if name == "error_in_use":
            found |= {f"{name}_uncertainty": uncertainty * abs(factor), f"{name}_df": freedom}
    return found


def _compensation(sweeps: Columns, points: Columns, origin: float) -> dict[str, object]:
    """Residual SD about the sweeps' means without, and with what other sweeps give."""
    own = sweep_set(sweeps, origin)
    predicted, by = left_out_slopes(own.x, own.slope, own.run)
    number = np.searchsorted(sweeps["number"], points["number"])
    influence, signal = points["influence"].astype(np.float64), points["signal"].astype(np.float64)
    before = spread_about_sweeps(influence, signal, number, np.zeros(len(own.x)))
    after = spread_about_sweeps(influence, signal, number, predicted)
    return {"residual_sd_before": before, "residual_sd_after": after, "left_out_by": by}


def _loop(loops: FloatArray, slope: float) -> dict[str, object]:
    known = loops[np.isfinite(loops)] / slope if slope else np.zeros(0)
    mean = float(known.mean()) if len(known) else math.nan
    reach = math.nan
    if len(known) > 1:
        reach = _reach(float(known.var(ddof=1)) / len(known), len(known) - 1.0)
    return {"loop_error": mean, "loop_error_low": mean - reach, "loop_error_high": mean + reach}


def sensor_key(row: dict[Hashable, Any]) -> SensorKey:
    """Return (generation, module, sensor) of a row."""
    return str(row["generation"]), str(row["module"]), str(row["sensor"])
