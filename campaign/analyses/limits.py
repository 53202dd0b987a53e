"""Which limits of the campaign are met: every figure judged with its own uncertainty, never bare.

A limit is judged for every sensor and for a new sensor of each generation. The probability of conformity
decides (JCGM 106:2012): from 95 % on a limit is met in this campaign, from 5 % down it is not met, between
the two nothing is decided. Where the description names no decision rule, simple acceptance is stated beside
it.
"""

from __future__ import annotations

import math
from collections.abc import Hashable, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
from scipy import stats

from campaign.methods.conformity import (
    conformity_of_estimate,
    conformity_of_spread,
    predict_new_member,
    spread_interval,
    verdict_of,
)
from campaign.recordings.description import Description

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration, CalibrationRecord

LIMIT_COLUMNS = (
    "limit",
    "value",
    "unit",
    "subject",
    "estimate",
    "expanded_uncertainty",
    "verdict",
    "probability",
    "generation",
    "module",
    "sensor",
    "low",
    "high",
    "degrees_of_freedom",
    "accepted",
    "reason",
)
"""Columns of :attr:`Limits.table`; the first eight are the table's fixed part."""

JUDGED = ("linearity", "hysteresis", "repeatability", "strain_error")
"""Limits that staircases can answer, in the order in which pages show them."""

UNKNOWN = "uncertainty unknown"
TOO_FEW = "too few sensors"
ONE_MODULE = "one module"
CONDITIONS = "conditions of use not measured"
"""Reasons for which nothing is decided although the bare estimate may lie far from the limit."""

_SENSOR = ["generation", "module", "sensor"]
_CONDITIONS = ("time_since_zero", "temperature_range", "pressure", "rate")


@dataclass(frozen=True)
class Limits:
    """Verdicts on all limits of the description.

    Attributes
    ----------
    table
        One row a limit and subject, columns of :data:`LIMIT_COLUMNS`. ``value``, ``estimate``,
        ``expanded_uncertainty`` (half the 95 % interval), ``low`` and ``high`` are in ``unit``;
        ``probability`` is that of conformity, NaN where no uncertainty is known; ``accepted`` says whether
        the bare estimate would pass (simple acceptance, JCGM 106:2012, 8.2); ``reason`` names why nothing
        was decided, or is empty.
    not_judged
        Limits of the description that nothing measured so far can answer.
    conditions_not_measured
        Keys of ``[use]`` that name an influence no analysis covers yet: with one of them an error in use is
        'at least' what was found, and its limit can fail but not be met.
    decision_rule
        The rule that ``accepted`` follows.
    """

    table: pd.DataFrame
    not_judged: tuple[str, ...]
    conditions_not_measured: tuple[str, ...]
    decision_rule: str = "simple acceptance"

    def of_new_sensors(self) -> pd.DataFrame:
        """Return the rows that judge a new sensor of a generation."""
        return self.table[self.table["sensor"] == ""]

    def of_sensors(self) -> pd.DataFrame:
        """Return the rows that judge one measured sensor."""
        return self.table[self.table["sensor"] != ""]


def judge_limits(description: Description, calibration: Calibration | None) -> Limits:
    """Judge every limit of *description* that *calibration* can answer.

    Parameters
    ----------
    description
        Limits, range and conditions of use.
    calibration
        Lines, run lines, level differences and records; ``None`` where no staircase was read.

    Returns
    -------
    Limits
        An empty table where there are no limits or no calibration.
    """
    conditions = tuple(key for key in _CONDITIONS if key in description.use)
    judged = [name for name in JUDGED if name in description.limits] if calibration is not None else []
    rows: list[dict[str, object]] = []
    if calibration is not None:
        for name in judged:
            value, unit = description.limits[name]
            figures = _FIGURES[name](calibration, description)
            rows += _judge_sensors(name, value, unit, figures)
            rows += _judge_new_sensors(name, value, unit, figures)
    table = pd.DataFrame(rows, columns=list(LIMIT_COLUMNS))
    if conditions:
        table = _withhold_met(table)
    absent = tuple(name for name in description.limits if name not in judged)
    return Limits(table, absent, conditions)


def linearity_figures(calibration: Calibration, description: Description) -> pd.DataFrame:
    """Return each sensor's least-squares linearity in %FSO with its standard uncertainty.

    The uncertainty is that of the mean over runs at one level: the mean square of level × run about the
    runs' own lines, divided by the number of runs.
    """
    lines = _both(calibration)
    scatter = _level_by_run(calibration)
    table = lines.merge(scatter, on=_SENSOR, how="left")
    full_scale = [_full_scale(row, description) for _, row in table.iterrows()]
    uncertainty = np.sqrt(table["mean_square"] / table["runs"]) / np.array(full_scale) * 100
    figures = table[_SENSOR].assign(
        estimate=table["linearity_least_squares_percent_fso"],
        standard_uncertainty=uncertainty.where(table["runs"] > 1),
        degrees_of_freedom=table["freedom"],
    )
    return figures.assign(kind="estimate")


def hysteresis_figures(calibration: Calibration, description: Description) -> pd.DataFrame:  # noqa: ARG001
    """Return each sensor's largest difference between branches in %FSO, from its simultaneous intervals.

    The half-width of a simultaneous 95 % interval is wider than that of a single one; dividing it by 1.96
    overstates the standard uncertainty and so keeps more limits undecided, never fewer.
    """
    levels = calibration.level_hysteresis
    if levels.empty:
        return _no_figures()
    rows = levels.loc[levels["percent_fso"].abs().groupby([levels[k] for k in _SENSOR]).idxmax()]
    scale = (rows["percent_fso"] / rows["difference"]).abs()
    return rows[_SENSOR].assign(
        estimate=rows["percent_fso"].abs(),
        standard_uncertainty=(rows["high"] - rows["low"]) / 2 / stats.norm.ppf(0.975) * scale,
        degrees_of_freedom=math.inf,
        kind="estimate",
    )


def repeatability_figures(calibration: Calibration, description: Description) -> pd.DataFrame:  # noqa: ARG001
    """Return each sensor's repeatability SD in %FSO with the degrees of freedom of its runs.

    Readings of one run share the run's zero and slope, so that the runs, not the levels, are counted: R − 1.
    """
    lines = _both(calibration)
    return lines[_SENSOR].assign(
        estimate=lines["repeatability_percent_fso"],
        standard_uncertainty=math.nan,
        degrees_of_freedom=(lines["runs"] - 1).astype(float),
        kind="spread",
    )


def strain_error_figures(calibration: Calibration, description: Description) -> pd.DataFrame:
    """Return each sensor's 95 % expanded uncertainty of one reading in a new run, with its own line.

    The largest over the calibrated range, for the branch that ``[use] direction`` names (both where
    unknown), in the unit of the limit (mm/mm or mm).
    """
    branch = description.use.get("direction", "unknown")
    wanted = branch if branch in ("rising", "falling") else "both"
    rows = [_record_error(record) for record in calibration.records if record.branch == wanted]
    return pd.DataFrame(rows).assign(kind="spread") if rows else _no_figures()


_FIGURES = {
    "linearity": linearity_figures,
    "hysteresis": hysteresis_figures,
    "repeatability": repeatability_figures,
    "strain_error": strain_error_figures,
}


def expanded_uncertainty(record: CalibrationRecord, x: float, readings: int = 1) -> float:
    """Return the 95 % half-width of an inverse reading at *x*, first order, in units of x.

    *readings* is the number of readings averaged in one new run; only the residual variance is divided by it.
    NaN where the record has no run-to-run error or no slope. Source: statistics of ISO 28037:2010, 6.4.
    """
    variance = (
        record.var_intercept
        + 2 * x * record.cov_intercept_slope
        + x * x * record.var_slope
        + record.run_var_intercept
        + 2 * x * record.run_cov
        + x * x * record.run_var_slope
        + record.lack_of_fit_variance
        + record.direction_half_width**2
        + record.residual_variance / readings
    )
    if not (math.isfinite(variance) and variance >= 0 and record.slope):
        return math.nan
    return record.t_quantile_975 * math.sqrt(variance) / abs(record.slope)


def _record_error(record: CalibrationRecord) -> dict[str, object]:
    reach = [expanded_uncertainty(record, x) for x in np.linspace(record.x_low, record.x_high, 11)]
    return {
        "generation": record.generation,
        "module": record.module,
        "sensor": record.sensor,
        "estimate": max(reach) if all(map(math.isfinite, reach)) else math.nan,
        "standard_uncertainty": math.nan,
        "degrees_of_freedom": record.degrees_of_freedom,
    }


def _both(calibration: Calibration) -> pd.DataFrame:
    lines = calibration.sensor_lines
    return lines[lines["branch"] == "both"].reset_index(drop=True)


def _no_figures() -> pd.DataFrame:
    return pd.DataFrame(columns=[*_SENSOR, "estimate", "standard_uncertainty", "degrees_of_freedom", "kind"])


def _full_scale(line: pd.Series, description: Description) -> float:
    """Signal over the rated range of the own line, or over the measured range where that is shorter."""
    rated = (
        description.range_strain
        if math.isfinite(description.range_strain)
        else description.range_elongation_mm
    )
    reach = rated if line["strain_high"] >= rated * (1 - 1e-9) else line["strain_high"] - line["strain_low"]
    return abs(float(line["slope"] * reach))


def _level_by_run(calibration: Calibration) -> pd.DataFrame:
    """Mean square of level × run about the runs' own lines, a sensor."""
    keys = [*_SENSOR, "trial", "session", "repetition"]
    runs = calibration.run_lines
    runs = runs.loc[runs["branch"] == "both", [*keys, "intercept", "slope"]]
    readings = calibration.readings
    readings = readings[readings["used"] & readings["direction"].isin(["rising", "falling"])]
    rows = readings.merge(runs, on=keys).dropna(subset=["nominal_level"])
    rows["rest"] = rows["signal"] - rows["intercept"] - rows["slope"] * rows["x"]
    cell = rows.groupby([*_SENSOR, "direction", "nominal_level"])["rest"]
    rows["square"] = (rows["rest"] - cell.transform("mean")) ** 2
    sums = rows.groupby(_SENSOR).agg(square=("square", "sum"), n=("rest", "size"), lines=("trial", "nunique"))
    cells = cell.ngroup().groupby([rows[k] for k in _SENSOR]).nunique()
    freedom = sums["n"] - cells - 2 * (sums["lines"] - 1)
    enough = freedom > 0
    scatter = pd.DataFrame(
        {"mean_square": (sums["square"] / freedom).where(enough), "freedom": freedom.where(enough)}
    )
    return scatter.astype(float).reset_index()


def _judge_sensors(name: str, value: float, unit: str, figures: pd.DataFrame) -> Iterator[dict[str, object]]:
    for figure in figures.to_dict("records"):
        judged = _judge_one(value, figure)
        who = {key: figure[key] for key in _SENSOR}
        yield {
            "limit": name,
            "value": value,
            "unit": unit,
            "subject": f"{figure['module']} {figure['sensor']}",
            **who,
            **judged,
        }


def _judge_one(value: float, figure: dict[Hashable, Any]) -> dict[str, object]:
    estimate = float(figure["estimate"])
    freedom = float(figure["degrees_of_freedom"])
    spread = float(figure["standard_uncertainty"])
    if figure["kind"] == "spread":
        probability = conformity_of_spread(estimate, freedom, value)
        low, high = spread_interval(estimate, freedom)
    else:
        probability = conformity_of_estimate(estimate, spread, freedom, value)
        reach = float(stats.t.ppf(0.975, freedom)) * spread if freedom > 0 else math.nan
        low, high = max(estimate - reach, 0.0), estimate + reach
    return _verdict(value, estimate, low, high, freedom, probability, UNKNOWN)


def _verdict(
    value: float, estimate: float, low: float, high: float, freedom: float, probability: float, unknown: str
) -> dict[str, object]:
    return {
        "estimate": estimate,
        "low": low,
        "high": high,
        "expanded_uncertainty": (high - low) / 2,
        "degrees_of_freedom": freedom,
        "probability": probability,
        "verdict": verdict_of(probability),
        "accepted": bool(estimate <= value),
        "reason": unknown if math.isnan(probability) else "",
    }


def _judge_new_sensors(
    name: str, value: float, unit: str, figures: pd.DataFrame
) -> Iterator[dict[str, object]]:
    for generation, rows in figures.dropna(subset=["estimate"]).groupby("generation", sort=True):
        yield {
            "limit": name,
            "value": value,
            "unit": unit,
            "subject": f"a new sensor of {generation}",
            "generation": generation,
            "module": "",
            "sensor": "",
            **_judge_new(value, rows),
        }


def _judge_new(value: float, rows: pd.DataFrame) -> dict[str, object]:
    """Predict on the logarithm, the figures being positive and skewed; one module covers no new module."""
    values = rows["estimate"].to_numpy(float)
    modules = pd.factorize(rows["module"])[0]
    prediction = predict_new_member(np.log(values), modules) if np.all(values > 0) else None
    if prediction is None:
        estimate = float(np.mean(values))
        return _verdict(value, estimate, math.nan, math.nan, math.nan, math.nan, TOO_FEW)
    centre, spread, freedom = (
        prediction.estimate,
        prediction.standard_deviation,
        prediction.degrees_of_freedom,
    )
    estimate = math.exp(centre)
    if prediction.groups == 1 or spread == 0:
        return _verdict(value, estimate, math.nan, math.nan, freedom, math.nan, ONE_MODULE)
    reach = float(stats.t.ppf(0.975, freedom)) * spread
    probability = conformity_of_estimate(centre, spread, freedom, math.log(value))
    low, high = math.exp(centre - reach), math.exp(centre + reach)
    return _verdict(value, estimate, low, high, freedom, probability, "")


def _withhold_met(table: pd.DataFrame) -> pd.DataFrame:
    """An error in use holds influences not measured: it can be too large already, never small enough."""
    table = table.copy()
    open_ended = (table["limit"] == "strain_error") & (table["verdict"] == "met")
    table.loc[open_ended, "verdict"] = "not decided"
    table.loc[open_ended, "reason"] = CONDITIONS
    return table
