"""The zero of every sensor across sessions and days, and what moves it: mounting, run, slope in time."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

from campaign.analyses.sensor_figures import principal_lines
from campaign.methods.identifiability import label_of
from campaign.methods.nested_inference import satterthwaite
from campaign.methods.nested_model import (
    NestedModel,
    NestedModelFit,
    RandomTerm,
    fit_nested_model,
    profile_intervals,
)
from campaign.trials.readings import SENSOR_KEYS

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

ZERO_SHARE = 0.02
"""A reading counts as zero within this share of the range of its sensor; else its lowest level is taken."""

ZERO_COLUMNS = (
    *("generation", "module", "sensor", "session", "started", "zero_signal", "unit"),
    *("day", "runs", "departure_percent_fso", "departure_low", "departure_high", "at"),
)
"""Columns of the table of zeros: one row a sensor and session (a run where no session is recorded).

``departure_percent_fso`` is from the sensor's first session, with limits from the scatter of runs about their
session, pooled over the generation; ``day`` counts from the generation's first run, NaN where no time is
known; ``at`` says whether it is the zero or the lowest level that was read.
"""

ZERO_MODEL_COLUMNS = (
    *("generation", "term", "called", "estimate", "low", "high", "unit", "degrees_of_freedom", "label"),
)
"""One row a figure: ``slope`` (%FSO a day) and the SDs of ``mounting``, ``session`` and ``run``."""

FEWEST_DAYS = 0.5
"""A slope in time is fitted where the runs of a generation spread over at least so many days."""


@dataclass(frozen=True)
class ZeroOverTime:
    """Zeros of a campaign.

    Attributes
    ----------
    table
        Columns :data:`ZERO_COLUMNS`.
    model
        Columns :data:`ZERO_MODEL_COLUMNS`; empty where no sensor was run in two sessions.
    days
        Span of the days of each generation; NaN where unknown.
    """

    table: pd.DataFrame
    model: pd.DataFrame
    days: dict[str, float]


def zero_over_time(calibration: Calibration | None) -> ZeroOverTime | None:
    """Return how the zero moves, from the first reading at zero of every staircase.

    Returns
    -------
    ZeroOverTime or None
        ``None`` without staircases.

    Notes
    -----
    Model, a generation: zero in %FSO = own mean of each sensor + slope × day + mounting (of the module, where
    sensors share sessions) + sensor × session + run. Its intervals are profile REML.
    """
    if calibration is None or calibration.sensor_lines.empty:
        return None
    runs = _zeros_of_runs(calibration)
    if runs.empty:
        return None
    models = [
        row
        for generation, own in runs.groupby("generation", sort=True)
        for row in _model_rows(str(generation), own)
    ]
    days = {str(g): float(own["day"].max()) for g, own in runs.groupby("generation", sort=True)}
    return ZeroOverTime(_sessions(runs), pd.DataFrame(models, columns=list(ZERO_MODEL_COLUMNS)), days)


def _zeros_of_runs(calibration: Calibration) -> pd.DataFrame:
    """One row a run: its first reading at zero, with day and full-scale output."""
    readings = calibration.readings
    readings = readings[readings["used"] & np.isfinite(readings["x"]) & np.isfinite(readings["signal"])]
    lines = principal_lines(calibration.sensor_lines)[[*SENSOR_KEYS, "full_scale_output"]]
    rows = readings.merge(lines, on=SENSOR_KEYS).dropna(subset=["full_scale_output"])
    own = rows.groupby(SENSOR_KEYS)["x"]
    span = own.transform("max") - own.transform("min")
    zero = (rows["x"].abs() <= ZERO_SHARE * span) & (calibration.reference.name != "length")
    has_zero = zero.groupby([rows[k] for k in SENSOR_KEYS]).transform("any")
    lowest = rows["x"] <= own.transform("min") + ZERO_SHARE * span
    rows = rows[(has_zero & zero) | (~has_zero & lowest)].assign(
        at=np.where(has_zero[(has_zero & zero) | (~has_zero & lowest)], "zero", "lowest level")
    )
    keys = [*SENSOR_KEYS, "session", "repetition", "trial"]
    first: pd.DataFrame = (
        rows.sort_values([*keys, "order"], kind="stable").drop_duplicates(keys).reset_index(drop=True)
    )
    # Without a session every run stands for itself.
    first["mounting"] = first["session"].where(
        first["session"].astype(str) != "", "run " + first["trial"].astype(str)
    )
    first["percent"] = 100.0 * first["signal"] / first["full_scale_output"]
    times = pd.to_datetime(first["started"], errors="coerce", format="ISO8601", utc=True)
    begun = times.groupby(first["generation"]).transform("min")
    first["day"] = (times - begun).dt.total_seconds() / 86400.0
    return first


def _sessions(runs: pd.DataFrame) -> pd.DataFrame:
    keys = [*SENSOR_KEYS, "mounting"]
    table = runs.groupby(keys, sort=True).agg(
        session=("session", "first"),
        started=("started", "min"),
        zero_signal=("signal", "mean"),
        unit=("unit", "first"),
        day=("day", "mean"),
        runs=("signal", "size"),
        percent=("percent", "mean"),
        at=("at", "first"),
    )
    table = table.reset_index().sort_values([*SENSOR_KEYS, "day", "started", "mounting"], kind="stable")
    spread, freedom = _run_scatter(runs)
    first = table.groupby(SENSOR_KEYS, sort=False)[["percent", "runs"]].transform("first")
    departure = table["percent"] - first["percent"]
    error: pd.Series[float] = table["generation"].map(spread) * np.sqrt(
        1.0 / table["runs"] + 1.0 / first["runs"]
    )
    reach = table["generation"].map({g: stats.t.ppf(0.975, f) if f else math.nan for g, f in freedom.items()})
    reach = (error * reach).where(table.groupby(SENSOR_KEYS, sort=False).cumcount() > 0, 0.0)
    table = table.assign(
        departure_percent_fso=departure, departure_low=departure - reach, departure_high=departure + reach
    )
    return table[list(ZERO_COLUMNS)].reset_index(drop=True)


def _run_scatter(runs: pd.DataFrame) -> tuple[dict[str, float], dict[str, int]]:
    """SD of runs about their session in %FSO and its degrees of freedom, a generation."""
    about = runs["percent"] - runs.groupby([*SENSOR_KEYS, "mounting"])["percent"].transform("mean")
    spread, freedom = {}, {}
    for generation, own in runs.groupby("generation"):
        sessions = len(own.drop_duplicates([*SENSOR_KEYS, "mounting"]))
        freedom[str(generation)] = len(own) - sessions
        squares = float((about[own.index] ** 2).sum())
        spread[str(generation)] = (
            math.sqrt(squares / (len(own) - sessions)) if len(own) > sessions else math.nan
        )
    return spread, freedom


# --- the model


def _model_rows(generation: str, runs: pd.DataFrame) -> Iterator[dict[str, object]]:
    runs = runs.reset_index(drop=True)
    sensor = _codes(runs, SENSOR_KEYS)
    session = _codes(runs, [*SENSOR_KEYS, "mounting"])
    mounting = _codes(runs, ["module", "mounting"])
    module = _codes(runs, ["module"])
    sensors, sessions, mountings = (int(c.max()) + 1 for c in (sensor, session, mounting))
    fixed = np.eye(sensors)[sensor]
    names = [f"sensor {i}" for i in range(sensors)]
    days = runs["day"].to_numpy(float)
    timed = bool(np.isfinite(days).all()) and float(np.ptp(days)) >= FEWEST_DAYS
    if timed and _moves_within(days, sensor):
        fixed, names = np.column_stack([fixed, days - days.mean()]), [*names, "slope"]
    shared = mountings < sessions
    modules = int(module.max()) + 1
    degrees = {
        "mounting": mountings - modules if shared else 0,
        "session": sessions - sensors - (mountings - modules if shared else 0),
        "run": len(runs) - sessions,
    }
    if degrees["run"] < 1:
        degrees["run"] = degrees.pop("session")
    entering = {name: freedom for name, freedom in degrees.items() if freedom >= 1}
    if "run" not in entering or len(entering) + ("slope" in names) < 2 or sessions == sensors:
        return
    fit = fit_nested_model(_model(runs, fixed, names, entering, mounting, session))
    yield from _slope_row(generation, fit)
    yield from _component_rows(generation, fit, entering)


def _codes(rows: pd.DataFrame, keys: list[str]) -> IntArray:
    return np.asarray(rows.groupby(keys, sort=True).ngroup(), dtype=np.int64)


def _moves_within(days: FloatArray, sensor: IntArray) -> bool:
    """Whether some sensor was run at different times."""
    means = np.bincount(sensor, days) / np.bincount(sensor)
    return bool(np.any(np.abs(days - means[sensor]) > 0.01))


def _model(
    runs: pd.DataFrame,
    fixed: FloatArray,
    names: list[str],
    entering: dict[str, int],
    mounting: IntArray,
    session: IntArray,
) -> NestedModel:
    one = np.ones((len(runs), 1))
    codes = {"mounting": mounting, "session": session}
    levels = tuple((name, codes[name]) for name in codes if name in entering)
    terms = tuple(RandomTerm(name, name, one) for name in codes if name in entering)
    return NestedModel(runs["percent"].to_numpy(float), fixed, tuple(names), levels, terms)


def _slope_row(generation: str, fit: NestedModelFit) -> Iterator[dict[str, object]]:
    if fit.model.fixed_names[-1] != "slope":
        return
    contrast = np.zeros(len(fit.coefficients))
    contrast[-1] = 1.0
    variance, freedom = satterthwaite(fit, contrast)
    estimate = float(fit.coefficients[-1])
    reach = float(stats.t.ppf(0.975, freedom)) * math.sqrt(variance)
    yield {
        "generation": generation,
        "term": "slope",
        "called": "slope in time",
        "estimate": estimate,
        "low": estimate - reach,
        "high": estimate + reach,
        "unit": "%FSO per day",
        "degrees_of_freedom": freedom,
        "label": "not distinguishable from zero" if abs(estimate) <= reach else "resolved",
    }


def _component_rows(
    generation: str, fit: NestedModelFit, entering: dict[str, int]
) -> Iterator[dict[str, object]]:
    names = {name: "residual" if name == "run" else name for name in entering}
    intervals = profile_intervals(fit, [(name, (1.0,)) for name in names.values()])
    called = {
        "mounting": "mounting of the module",
        "session": "sensor × mounting" if "mounting" in entering else "mounting",
        "run": "run" if "session" in entering or "mounting" in entering else "run and mounting",
    }
    for name, interval in zip(names, intervals, strict=True):
        label = "not distinguishable from zero" if interval.low == 0 else str(label_of(entering[name]))
        yield {
            "generation": generation,
            "term": name,
            "called": called[name],
            "estimate": interval.estimate,
            "low": interval.low,
            "high": interval.high,
            "unit": "%FSO",
            "degrees_of_freedom": entering[name],
            "label": label,
        }
