"""What one influence does to every sensor: coefficients with intervals, strain equivalents, compensation."""

from __future__ import annotations

import math
from collections.abc import Hashable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

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
        for key, own in rows.groupby(SENSOR_KEYS, sort=True):
            keys.append((str(key[0]), str(key[1]), str(key[2])))
            sets.append(sweep_set(own, origin))
        fits |= dict(zip(keys, fit_influences(sets), strict=True))
    return fits


def sweep_set(rows: pd.DataFrame, origin: float) -> SweepSet:
    """Return the sweeps of one sensor, x counted from *origin*."""
    return SweepSet(
        rows["x"].to_numpy(float) - origin,
        rows["slope"].to_numpy(float),
        rows["slope_error"].to_numpy(float),
        rows["slope_freedom"].to_numpy(float),
        rows["run"].to_numpy(np.int64),
    )


def signal_slopes(sweeps: pd.DataFrame, calibration: Calibration | None) -> dict[SensorKey, SignalSlope]:
    """Return the slope that turns each sensor's signal into x: its staircases', else its sweeps' levels'."""
    known: dict[SensorKey, SignalSlope] = {}
    if calibration is not None and len(calibration.sensor_lines):
        for row in principal_lines(calibration.sensor_lines).to_dict("records"):
            key = (str(row["generation"]), str(row["module"]), str(row["sensor"]))
            variance, freedom = float(row["var_slope"]), float(row["df"])
            known[key] = SignalSlope(float(row["slope"]), variance, freedom, FROM_STAIRCASES)
    for names, rows in sweeps.groupby(SENSOR_KEYS, sort=True):
        who = (str(names[0]), str(names[1]), str(names[2]))
        if who not in known or not math.isfinite(known[who].slope):
            known[who] = _slope_of_levels(rows)
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
    rows = [
        _row(
            (str(key[0]), str(key[1]), str(key[2])),
            own,
            points[points["number"].isin(own.index)],
            fits,
            slopes,
            origin,
            in_use,
        )
        for key, own in sweeps.groupby(SENSOR_KEYS, sort=True)
    ]
    return pd.DataFrame(rows, columns=list(COEFFICIENT_COLUMNS))


def _row(
    key: SensorKey,
    sweeps: pd.DataFrame,
    points: pd.DataFrame,
    fits: dict[SensorKey, InfluenceFit],
    slopes: dict[SensorKey, SignalSlope],
    origin: float,
    in_use: float,
) -> dict[str, object]:
    fit, slope = fits[key], slopes[key]
    x = sweeps["x"].to_numpy(float)
    known = bool(np.isfinite(x).all())
    low, high = (float(x.min()), float(x.max())) if known else (math.nan, math.nan)
    row: dict[str, object] = dict(zip(SENSOR_KEYS, key, strict=True))
    row |= {name: sweeps[name].iloc[0] for name in ("position", "unit", "influence_unit")}
    row |= {"sweeps": fit.sweeps, "runs": fit.runs, "lengths": fit.lengths}
    row |= {"df": fit.degrees_of_freedom, "variance_source": fit.source, "x_low": low, "x_high": high}
    row |= {
        "influence_low": float(sweeps["influence_low"].min()),
        "influence_high": float(sweeps["influence_high"].max()),
        "zero_signal": _zero_signal(sweeps, origin),
        "slope": slope.slope,
        "slope_source": slope.source,
        "in_use": in_use,
        "label": "; ".join(_labels(fit, low, high, origin, in_use, sweeps)),
    }
    row |= _coefficients(fit)
    row |= _as_x(fit, slope, low - origin, high - origin, in_use if _is_reached(in_use, sweeps) else math.nan)
    row |= _compensation(sweeps, points, origin)
    return row | _loop(sweeps["loop"].to_numpy(float), slope.slope)


def _is_reached(in_use: float, sweeps: pd.DataFrame) -> bool:
    """Whether the value in use lies within the range that was swept, to a tenth."""
    reach = sweeps[["influence_low", "influence_high"]].abs().to_numpy().max()
    return bool(abs(in_use) <= 1.1 * reach)


def _labels(
    fit: InfluenceFit, low: float, high: float, origin: float, in_use: float, sweeps: pd.DataFrame
) -> list[str]:
    labels = [] if fit.has_change else [ONE_LENGTH]
    if fit.has_change and low - origin > 0.1 * (high - low):
        labels.append(EXTRAPOLATED)
    return labels if _is_reached(in_use, sweeps) else [*labels, BEYOND]


def _zero_signal(sweeps: pd.DataFrame, origin: float) -> float:
    """Signal without the influence at the origin of x, from the levels; their mean with one length."""
    x, level = sweeps["x"].to_numpy(float) - origin, sweeps["level"].to_numpy(float)
    if distinct_lengths(x) < 2:
        return float(level.mean())
    return float(np.polynomial.polynomial.polyfit(x, level, 1)[0])


def _reach(variance: float, freedom: float) -> float:
    """Half-width of the 95 % interval; NaN where it is not known."""
    if not (freedom > 0 and variance >= 0):
        return math.nan
    return float(stats.t.ppf(0.975, freedom)) * math.sqrt(variance)


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


def _compensation(sweeps: pd.DataFrame, points: pd.DataFrame, origin: float) -> dict[str, object]:
    """Residual SD about the sweeps' means without, and with what other sweeps give."""
    own = sweep_set(sweeps, origin)
    predicted, by = left_out_slopes(own.x, own.slope, own.run)
    number = np.searchsorted(sweeps.index.to_numpy(), points["number"].to_numpy())
    influence, signal = points["influence"].to_numpy(float), points["signal"].to_numpy(float)
    before = spread_about_sweeps(influence, signal, number, np.zeros(len(sweeps)))
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
