"""How the width of loops depends on their rate, and what a time shift between channels would make of it.

A signal that is late by τ against the length is, at speed v, read v τ too far back on the way up and as much
too far ahead on the way down: the width in units of length changes by −2 τ v. So a width that grows linearly
with rate cannot be told from a delay; what is left at rate zero can.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

from campaign.analyses.loop_table import SENSOR_KEYS, LoopTable

FloatArray = npt.NDArray[np.float64]

RATE_COLUMNS = (
    *SENSOR_KEYS,
    "rates",
    "slowest_per_s",
    "fastest_per_s",
    "strain_at_rest",
    "strain_at_rest_low",
    "strain_at_rest_high",
    "delay_s",
    "delay_low_s",
    "delay_high_s",
    "percent_fso_per_decade",
    "low",
    "high",
    "degrees_of_freedom",
)
"""Columns of :attr:`RateDependence.sensors`."""

LEVEL_COLUMNS = (*SENSOR_KEYS, "rate_per_s", "runs", "mid_width_percent_fso", "standard_uncertainty")
"""Columns of :attr:`RateDependence.levels`."""

DELAY_COLUMNS = ("generation", "sensors", "modules", "delay_s", "low", "high")
"""Columns of :attr:`RateDependence.delays`."""


@dataclass(frozen=True)
class RateDependence:
    """Width at mid range against rate.

    Attributes
    ----------
    levels
        One row a sensor and rate: mean signed width of its settled loops, columns :data:`LEVEL_COLUMNS`.
    sensors
        One row a sensor that was run at two rates or more, columns :data:`RATE_COLUMNS`: its width as
        constant + delay × rate (``strain_at_rest`` is the constant, a width in x) and per decade of
        rate, with 95 % limits.
    delays
        One row a generation: mean delay over its modules, columns :data:`DELAY_COLUMNS`.
    """

    levels: pd.DataFrame
    sensors: pd.DataFrame
    delays: pd.DataFrame


def rate_dependence(table: LoopTable) -> RateDependence:
    """Fit the settled widths of every sensor against rate.

    Settled whole loops of every rate enter, one mean a run and rate. The scatter of such means about the
    sensor's mean at a rate is pooled over all sensors; where no rate was repeated, that of loops is.
    """
    rows = _settled_rows(table)
    runs = _run_means(rows)
    variance, degrees = _scatter(rows, runs)
    groups = runs.groupby(SENSOR_KEYS, sort=True)
    fits = [_fit(key, own, variance, degrees) for key, own in groups if own["rate_level"].nunique() > 1]
    sensors = pd.DataFrame(fits, columns=list(RATE_COLUMNS))
    return RateDependence(_levels(runs, variance), sensors, _delays(sensors))


def _settled_rows(table: LoopTable) -> pd.DataFrame:
    """Settled loops at every rate, with their width at mid range in %FSO and in x."""
    rows = table.rows[table.rows["whole"] & table.rows["settled"] & table.rows["rate_level"].notna()]
    return rows.assign(
        percent=100.0 * rows["mid_width"] / rows["full_scale_output"],
        length=rows["mid_width"] / rows["slope"],
    ).dropna(subset=["percent", "length"])


def _run_means(rows: pd.DataFrame) -> pd.DataFrame:
    keys = [*SENSOR_KEYS, "trial", "rate_level"]
    means = rows.groupby(keys, sort=True)[["percent", "length", "rate"]].mean()
    factor = rows.groupby(keys, sort=True)["full_scale_output"].first() / 100.0
    slope = rows.groupby(keys, sort=True)["slope"].first()
    return means.assign(to_length=factor / slope).reset_index()


def _scatter(rows: pd.DataFrame, runs: pd.DataFrame) -> tuple[float, float]:
    """Variance of a run's mean in (%FSO)² and its degrees of freedom."""
    cells = runs.groupby([*SENSOR_KEYS, "rate_level"])["percent"]
    degrees = float(len(runs) - cells.ngroups)
    if degrees >= 4:
        return float(((runs["percent"] - cells.transform("mean")) ** 2).sum() / degrees), degrees
    loops = rows.groupby([*SENSOR_KEYS, "trial", "rate_level"])["percent"]
    degrees = float(len(rows) - loops.ngroups)
    if degrees < 1:
        return math.nan, 0.0
    square = float(((rows["percent"] - loops.transform("mean")) ** 2).sum() / degrees)
    return square / (len(rows) / loops.ngroups), degrees


def _levels(runs: pd.DataFrame, variance: float) -> pd.DataFrame:
    means = runs.groupby([*SENSOR_KEYS, "rate_level"], sort=True).agg(
        runs=("percent", "size"), mid_width_percent_fso=("percent", "mean")
    )
    means["standard_uncertainty"] = np.sqrt(variance / means["runs"])
    return means.reset_index().rename(columns={"rate_level": "rate_per_s"})[list(LEVEL_COLUMNS)]


def _fit(key: tuple[object, ...], runs: pd.DataFrame, variance: float, degrees: float) -> dict[str, object]:
    """Two straight lines of one sensor: against rate (in x) and against its logarithm (in %FSO)."""
    quantile = float(stats.t.ppf(0.975, degrees)) if degrees > 0 else math.nan
    to_length = float(runs["to_length"].iloc[0])
    rate = runs["rate"].to_numpy(float)
    constant, slope, error_constant, error_slope = _line(rate, runs["length"].to_numpy(float))
    spread = math.sqrt(variance) * abs(to_length) * quantile
    _, decade, _, error_decade = _line(np.log10(rate), runs["percent"].to_numpy(float))
    reach = math.sqrt(variance) * quantile * error_decade
    delay, delay_reach = -slope / 2.0, spread * error_slope / 2.0
    return {
        **dict(zip(SENSOR_KEYS, key, strict=True)),
        "rates": int(runs["rate_level"].nunique()),
        "slowest_per_s": float(rate.min()),
        "fastest_per_s": float(rate.max()),
        "strain_at_rest": constant,
        "strain_at_rest_low": constant - spread * error_constant,
        "strain_at_rest_high": constant + spread * error_constant,
        "delay_s": delay,
        "delay_low_s": delay - delay_reach,
        "delay_high_s": delay + delay_reach,
        "percent_fso_per_decade": decade,
        "low": decade - reach,
        "high": decade + reach,
        "degrees_of_freedom": degrees,
    }


def _line(x: FloatArray, y: FloatArray) -> tuple[float, float, float, float]:
    """Intercept and slope by least squares, and their standard errors for a standard deviation of one."""
    middle = float(x.mean())
    square = float(np.sum((x - middle) ** 2))
    slope = float(np.sum((x - middle) * y) / square)
    error = math.sqrt(1.0 / len(x) + middle**2 / square)
    return float(y.mean()) - slope * middle, slope, error, 1.0 / math.sqrt(square)


def _delays(sensors: pd.DataFrame) -> pd.DataFrame:
    """Mean delay of each generation with Student's t, modules as the unit (sensors where there is one)."""
    rows = []
    for generation, own in sensors.groupby("generation", sort=True):
        modules = own.groupby("module")["delay_s"].mean()
        values = (modules if len(modules) > 1 else own["delay_s"]).to_numpy(float)
        reach = math.nan
        if len(values) > 1:
            reach = float(stats.t.ppf(0.975, len(values) - 1) * values.std(ddof=1) / math.sqrt(len(values)))
        mean = float(values.mean())
        rows.append((generation, len(own), len(modules), mean, mean - reach, mean + reach))
    return pd.DataFrame(rows, columns=list(DELAY_COLUMNS))
