"""The figures of merit of every sensor, each with its interval: what pages draw and limits are judged by."""

from __future__ import annotations

import math
from collections.abc import Hashable, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
from scipy import special

from campaign.methods.conformity import spread_interval
from campaign.recordings.description import Description

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration, CalibrationRecord

FIGURE_COLUMNS = (
    "figure",
    "unit",
    "generation",
    "module",
    "sensor",
    "estimate",
    "low",
    "high",
    "standard_uncertainty",
    "degrees_of_freedom",
    "kind",
)
"""Columns of :func:`sensor_figures`."""

_SENSOR = ["generation", "module", "sensor"]


def sensor_figures(calibration: Calibration, description: Description) -> pd.DataFrame:
    """Return the figures of merit of every sensor with their 95 % intervals.

    Parameters
    ----------
    calibration
        Lines, run lines, level differences and records.
    description
        Direction in use.

    Returns
    -------
    DataFrame
        One row a figure (linearity, bend, hysteresis, repeatability, strain_error) and sensor, columns of
        :data:`FIGURE_COLUMNS`. ``kind`` is ``estimate`` (Student's t about the estimate) or ``spread`` (χ²
        of a standard deviation); limits are NaN where one run leaves the uncertainty unknown.
    """
    parts = {
        "linearity": linearity_figures(calibration),
        "bend": bend_figures(calibration),
        "hysteresis": hysteresis_figures(calibration),
        "repeatability": repeatability_figures(calibration),
        "strain_error": strain_error_figures(calibration, description),
    }
    units = dict.fromkeys(parts, "%FSO") | {"strain_error": calibration.reference.unit}
    known = [part.assign(figure=name, unit=units[name]) for name, part in parts.items() if len(part)]
    if not known:
        return pd.DataFrame(columns=list(FIGURE_COLUMNS))
    table = pd.concat(known, ignore_index=True)
    limits = [_interval(row) for row in table.to_dict("records")]
    low, high = zip(*limits, strict=True)
    return table.assign(low=low, high=high)[list(FIGURE_COLUMNS)]


def linearity_figures(calibration: Calibration) -> pd.DataFrame:
    """Return each sensor's least-squares linearity in %FSO with its standard uncertainty.

    The uncertainty is that of the mean over runs at one level: the mean square of level × run about the
    runs' own lines, divided by the number of runs.
    """
    lines = principal_lines(calibration.sensor_lines)
    scatter = _level_by_run(calibration)
    table = lines.merge(scatter, on=_SENSOR, how="left")
    uncertainty = np.sqrt(table["mean_square"] / table["runs"]) / table["full_scale_output"] * 100
    figures = table[_SENSOR].assign(
        estimate=table["linearity_least_squares_percent_fso"],
        standard_uncertainty=uncertainty.where(table["runs"] > 1),
        degrees_of_freedom=table["freedom"],
    )
    return figures.assign(kind="estimate")


def bend_figures(calibration: Calibration) -> pd.DataFrame:
    """Return each sensor's bend in %FSO: how far the quadratic term departs from its chord at mid range.

    The signed sagitta of the fitted parabola over the measured range, q (Δx/2)², with the interval of q.
    """
    lines = principal_lines(calibration.sensor_lines)
    scale = ((lines["strain_high"] - lines["strain_low"]) / 2) ** 2 / lines["full_scale_output"] * 100
    half_width = (lines["quadratic_high"] - lines["quadratic_low"]) / 2
    return lines[_SENSOR].assign(
        estimate=lines["quadratic"] * scale,
        standard_uncertainty=half_width / special.ndtri(0.975) * scale,
        degrees_of_freedom=math.inf,
        kind="estimate",
    )


def hysteresis_figures(calibration: Calibration) -> pd.DataFrame:
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
        standard_uncertainty=(rows["high"] - rows["low"]) / 2 / special.ndtri(0.975) * scale,
        degrees_of_freedom=math.inf,
        kind="estimate",
    )


def repeatability_figures(calibration: Calibration) -> pd.DataFrame:
    """Return each sensor's repeatability SD in %FSO with the degrees of freedom of its runs.

    Readings of one run share the run's zero and slope, so that the runs, not the levels, are counted, and
    each mounting takes one: runs − mountings.
    """
    lines = principal_lines(calibration.sensor_lines)
    return lines[_SENSOR].assign(
        estimate=lines["repeatability_percent_fso"],
        standard_uncertainty=math.nan,
        degrees_of_freedom=lines["repeatability_df"].where(lines["repeatability_df"] > 0),
        kind="spread",
    )


def strain_error_figures(calibration: Calibration, description: Description) -> pd.DataFrame:
    """Return each sensor's 95 % expanded uncertainty of one reading in a new run, with its own line.

    The largest over the calibrated range, for the branch that ``[use] direction`` names (both where
    unknown), in the unit of the limit (mm/mm or mm).
    """
    branch = description.use.get("direction", "unknown")
    records = [record for record in calibration.records if record.branch == branch]
    rows = [_record_error(record) for record in records or principal_records(calibration.records)]
    return pd.DataFrame(rows).assign(kind="spread") if rows else _no_figures()


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


def principal_lines(lines: pd.DataFrame) -> pd.DataFrame:
    """Return the row of each sensor that stands for it: both branches, else the only branch that was run.

    *lines* has columns generation, module, sensor and branch; the result has a fresh index.
    """
    rank = lines["branch"].map({"both": 0, "rising": 1, "falling": 2})
    first = lines.assign(_rank=rank).sort_values([*_SENSOR, "_rank"], kind="stable")
    return first.drop_duplicates(_SENSOR).drop(columns="_rank").reset_index(drop=True)


def principal_run_lines(calibration: Calibration) -> pd.DataFrame:
    """Return the run lines of the branch that stands for each sensor (see :func:`principal_lines`)."""
    chosen = principal_lines(calibration.sensor_lines)[[*_SENSOR, "branch"]]
    return calibration.run_lines.merge(chosen, on=[*_SENSOR, "branch"])


def principal_records(records: Sequence[CalibrationRecord]) -> list[CalibrationRecord]:
    """Return the calibration record that stands for each sensor, chosen as :func:`principal_lines` does."""
    best: dict[tuple[str, str, str], CalibrationRecord] = {}
    rank = ("both", "rising", "falling").index
    for record in sorted(records, key=lambda r: rank(r.branch)):
        best.setdefault((record.generation, record.module, record.sensor), record)
    return [best[key] for key in sorted(best)]


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


def _no_figures() -> pd.DataFrame:
    return pd.DataFrame(columns=[*_SENSOR, "estimate", "standard_uncertainty", "degrees_of_freedom", "kind"])


def _level_by_run(calibration: Calibration) -> pd.DataFrame:
    """Mean square of level × run about the runs' own lines, a sensor."""
    keys = [*_SENSOR, "trial", "session", "repetition"]
    runs = principal_run_lines(calibration)[[*keys, "intercept", "slope"]]
    runs["run"] = np.arange(len(runs))
    readings = calibration.readings
    readings = readings[readings["used"] & readings["direction"].isin(["rising", "falling"])]
    rows = readings.merge(runs, on=keys).dropna(subset=["nominal_level"])
    rows["rest"] = rows["signal"] - rows["intercept"] - rows["slope"] * rows["x"]
    cell = rows.groupby([*_SENSOR, "direction", "nominal_level"])["rest"]
    rows["square"] = (rows["rest"] - cell.transform("mean")) ** 2
    sums = rows.groupby(_SENSOR).agg(square=("square", "sum"), n=("rest", "size"), lines=("run", "nunique"))
    cells = cell.ngroup().groupby([rows[k] for k in _SENSOR]).nunique()
    freedom = sums["n"] - cells - 2 * (sums["lines"] - 1)
    enough = freedom > 0
    scatter = pd.DataFrame(
        {"mean_square": (sums["square"] / freedom).where(enough), "freedom": freedom.where(enough)}
    )
    return scatter.astype(float).reset_index()


def _interval(figure: dict[Hashable, Any]) -> tuple[float, float]:
    """95 % limits of one figure; a magnitude stays at or above zero, a bend has a sign."""
    estimate, freedom = float(figure["estimate"]), float(figure["degrees_of_freedom"])
    if figure["kind"] == "spread":
        return spread_interval(estimate, freedom)
    quantile = float(special.stdtrit(freedom, 0.975)) if freedom > 0 else math.nan
    reach = quantile * float(figure["standard_uncertainty"])
    low = estimate - reach
    return (low if figure["figure"] == "bend" or math.isnan(low) else max(low, 0.0)), estimate + reach
