"""Channels without a sensor: what stands beside the sensors' capacitance, and what it hides."""

from __future__ import annotations

import math
from collections.abc import Hashable, Mapping
from typing import TYPE_CHECKING, Any

import pandas as pd
from scipy import stats

from campaign.analyses.hold_figures import FittedHold, fit_hold
from campaign.analyses.sensor_figures import principal_lines
from campaign.trials.hold import HoldFeatures
from campaign.trials.readings import SENSOR_KEYS

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration

BLANK_COLUMNS = (
    *("generation", "module", "sensor", "trial", "mean", "low", "high", "standard_error", "unit"),
    *("per_hour", "per_hour_low", "per_hour_high", "duration_s", "temperature"),
)
"""Columns of the blank channels: mean signal and line against time, with 95 % limits."""

PARASITIC_COLUMNS = (
    *("generation", "module", "sensor", "parasitic", "zero_signal", "unit", "stretch_exponent"),
    *("corrected_stretch_exponent", "corrected_low", "corrected_high"),
    *("gauge_factor", "corrected_gauge_factor", "gauge_low", "gauge_high"),
)
"""Columns of what a parasitic capacitance hides: p and GF as seen, and times C/(C − C_p)."""


def blank_table(features: list[HoldFeatures]) -> pd.DataFrame:
    """Return every blank channel, columns :data:`BLANK_COLUMNS`."""
    rows = []
    for own in features:
        for number, hold in enumerate(own.holds, 1):
            one = fit_hold(own.identity, own.unit, number, hold)
            mean, error = _mean_signal(one)
            reach = float(stats.t.ppf(0.975, max(len(hold.means) - 5, 1))) * error
            slope = hold.slope
            hourly = (
                tuple(3600.0 * v for v in (slope.slope, *slope.interval()))
                if slope is not None
                else (0.0, math.nan, math.nan)
            )
            identity = own.identity
            who = (identity.generation, identity.module, identity.sensor, identity.file)
            figures = (mean, mean - reach, mean + reach, error, own.unit, *hourly)
            row = (*who, *figures, hold.duration_s, hold.temperature.state)
            rows.append(dict(zip(BLANK_COLUMNS, row, strict=True)))
    frame = pd.DataFrame(rows, columns=list(BLANK_COLUMNS))
    return frame.sort_values([*SENSOR_KEYS, "trial"], kind="stable", ignore_index=True)


def _mean_signal(one: FittedHold) -> tuple[float, float]:
    """Mean of a blank channel with the standard error of its noise; NaN where that is not known."""
    counts = one.hold.stretches.counts
    weights = counts / counts.sum()
    mean = float(weights @ one.hold.means)
    if one.noise is None:
        return mean, math.nan
    covariance = one.noise.covariance(one.hold.stretches)
    return mean, math.sqrt(float(weights @ covariance @ weights))


def parasitic_table(blanks: pd.DataFrame, calibration: Calibration | None) -> pd.DataFrame:
    """Return what the capacitance of blank channels in the sensors' unit hides, :data:`PARASITIC_COLUMNS`."""
    empty = pd.DataFrame(columns=list(PARASITIC_COLUMNS))
    if blanks.empty or calibration is None or calibration.sensor_lines.empty:
        return empty
    lines = principal_lines(calibration.sensor_lines)
    rows = [
        row
        for line in lines.to_dict("records")
        if (row := _parasitic_row(line, _blanks_beside(blanks, line))) is not None
    ]
    return pd.DataFrame(rows, columns=list(PARASITIC_COLUMNS)) if rows else empty


def _blanks_beside(blanks: pd.DataFrame, line: Mapping[Hashable, Any]) -> pd.DataFrame:
    """Blank channels of the sensor's module, else all; only those in its unit."""
    same_unit = blanks[blanks["unit"] == line["unit"]]
    own = same_unit[same_unit["module"] == line["module"]]
    beside: pd.DataFrame = own if len(own) else same_unit
    return beside


def _parasitic_row(line: Mapping[Hashable, Any], beside: pd.DataFrame) -> dict[str, object] | None:
    zero = float(line["zero_signal"])
    if beside.empty or not math.isfinite(zero):
        return None
    parasitic = float(beside["mean"].mean())
    if not 0.0 < parasitic < zero:
        return None
    factor = zero / (zero - parasitic)
    names = ("stretch_exponent", "stretch_exponent_low", "stretch_exponent_high")
    gauges = ("gauge_factor", "gauge_factor_low", "gauge_factor_high")
    exponent, gauge = ([float(line.get(n, math.nan)) for n in group] for group in (names, gauges))
    return {
        **{name: line[name] for name in ("generation", "module", "sensor", "unit", "zero_signal")},
        "parasitic": parasitic,
        "stretch_exponent": exponent[0],
        "corrected_stretch_exponent": exponent[0] * factor,
        "corrected_low": exponent[1] * factor,
        "corrected_high": exponent[2] * factor,
        "gauge_factor": gauge[0],
        "corrected_gauge_factor": gauge[0] * factor,
        "gauge_low": gauge[1] * factor,
        "gauge_high": gauge[2] * factor,
    }
