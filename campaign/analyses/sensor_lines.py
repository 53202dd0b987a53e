"""The table of sensor lines: one row a sensor and branch, every figure by its definition."""

from __future__ import annotations

from dataclasses import asdict

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.analyses.calibration_lines import BranchLine
from campaign.analyses.used_readings import TURNING, UsedReadings
from campaign.methods.calibration_line import common_quadratic, fit_polynomial, t_quantile
from campaign.methods.linearity import linearity
from campaign.methods.repeatability import repeatability
from campaign.methods.stretch_exponent import run_exponents
from campaign.recordings.recording import ReferenceQuantity

FloatArray = npt.NDArray[np.float64]

CAPACITANCE_UNITS = frozenset({"fF", "pF", "nF", "µF", "mF", "F"})

NOT_IDENTIFIABLE = "not identifiable"
EXTRAPOLATED = "extrapolated"

SENSOR_LINE_COLUMNS = [
    "generation",
    "module",
    "sensor",
    "position",
    "branch",
    "runs",
    "readings",
    "strain_low",
    "strain_high",
    "rest_length_mm",
    "rest_length_uncertainty_mm",
    "intercept",
    "slope",
    "var_intercept",
    "var_slope",
    "cov_intercept_slope",
    "residual_sd",
    "df",
    "variance_source",
    "unit",
    "zero_signal",
    "lack_of_fit_f",
    "lack_of_fit_df1",
    "lack_of_fit_df2",
    "lack_of_fit_p",
    "quadratic",
    "quadratic_low",
    "quadratic_high",
    "r_squared",
    "gauge_factor",
    "linearity_least_squares_percent_fso",
    "linearity_terminal_percent_fso",
    "linearity_zero_based_percent_fso",
    "linearity_independent_percent_fso",
    "hysteresis_percent_fso",
    "repeatability_percent_fso",
    "strain_residual_sd",
    "stretch_exponent",
    "stretch_exponent_low",
    "stretch_exponent_high",
    "full_scale_output",
    "full_scale",
    "gauge_factor_low",
    "gauge_factor_high",
    "gauge_factor_label",
    "hysteresis_null_percent_fso",
    "hysteresis_p",
    "run_to_run_sd",
    "repeatability_df",
]
"""Columns of the table, in order; strain stands for x where the reference is a length."""


def sensor_lines_frame(
    used: UsedReadings,
    lines: tuple[BranchLine, ...],
    reference: ReferenceQuantity,
) -> pd.DataFrame:
    """Return the table of sensor lines; columns :data:`SENSOR_LINE_COLUMNS`, NaN where not identifiable."""
    exponents = _stretch_exponents(used, lines, reference)
    records = []
    for line in lines:
        records.append(
            {
                **_line_figures(line, used, reference),
                **_fit_figures(line, used),
                **_gauge_factor(line, used.x[line.rows], reference),
                **_linearity_figures(line),
                **_hysteresis_figures(line),
                **_repeatability_figures(line),
                **exponents[line.key, line.branch],
            }
        )
    return pd.DataFrame(records, columns=SENSOR_LINE_COLUMNS)


def _line_figures(line: BranchLine, used: UsedReadings, reference: ReferenceQuantity) -> dict[str, object]:
    x = used.x[line.rows]
    middle = 0.5 * float(x.min() + x.max())
    return {
        "generation": line.generation,
        "module": line.module,
        "sensor": line.sensor,
        "position": line.position,
        "branch": line.branch,
        "runs": line.runs,
        "readings": len(x),
        "strain_low": float(x.min()),
        "strain_high": float(x.max()),
        "rest_length_mm": float(used.column("rest_length_mm", line.rows[:1])[0]),
        "rest_length_uncertainty_mm": float(used.column("rest_length_uncertainty_mm", line.rows[:1])[0]),
        "intercept": line.intercept,
        "slope": line.slope,
        "var_intercept": float(line.covariance[0, 0]),
        "var_slope": float(line.covariance[1, 1]),
        "cov_intercept_slope": float(line.covariance[0, 1]),
        "residual_sd": line.residual_sd,
        "df": line.degrees_of_freedom,
        "variance_source": line.variance_source,
        "unit": line.unit,
        "zero_signal": line.intercept if reference.name != "length" else float("nan"),
        "strain_residual_sd": line.residual_sd / abs(line.slope),
        "full_scale_output": line.full_scale_output,
        "full_scale": line.full_scale,
        "run_to_run_sd": float(np.sqrt(line.variance_between_runs(middle))) / abs(line.slope),
    }


def _fit_figures(line: BranchLine, used: UsedReadings) -> dict[str, object]:
    """Lack of fit, the quadratic term, and R² of the ordinary line."""
    x, y = used.x[line.rows], used.signal[line.rows]
    side = used.direction[line.rows]
    side = np.zeros_like(side) if np.mean(side == TURNING) > 0.5 else side
    group = np.unique(used.run[line.rows] * 3 + side, return_inverse=True)[1].astype(np.int64)
    estimate, low, high = common_quadratic(x, y, group)
    lack = line.lack_of_fit
    return {
        "lack_of_fit_f": lack.statistic if lack else float("nan"),
        "lack_of_fit_df1": lack.first_degrees if lack else float("nan"),
        "lack_of_fit_df2": lack.second_degrees if lack else float("nan"),
        "lack_of_fit_p": lack.p if lack else float("nan"),
        "quadratic": estimate,
        "quadratic_low": low,
        "quadratic_high": high,
        "r_squared": fit_polynomial(x, y).r_squared,
    }


def _gauge_factor(line: BranchLine, x: FloatArray, reference: ReferenceQuantity) -> dict[str, object]:
    """Slope over zero-strain signal, with an interval by the law of propagation from their covariance."""
    nan = float("nan")
    if reference.name != "strain" or line.intercept == 0.0:
        values = nan, nan, nan
        return dict(zip(_GAUGE_FACTOR, (*values, NOT_IDENTIFIABLE), strict=True))
    factor = line.slope / line.intercept
    gradient = np.array([-factor, 1.0]) / line.intercept
    variance = float(gradient @ line.covariance @ gradient)
    degrees = line.degrees_of_freedom
    half = t_quantile(0.975, degrees) * np.sqrt(variance) if degrees > 0 else nan
    outside = min(abs(float(x.min())), abs(float(x.max()))) if x.min() * x.max() > 0 else 0.0
    label = EXTRAPOLATED if outside > 0.02 * float(np.ptp(x)) else ""
    return dict(zip(_GAUGE_FACTOR, (factor, factor - half, factor + half, label), strict=True))


_GAUGE_FACTOR = ("gauge_factor", "gauge_factor_low", "gauge_factor_high", "gauge_factor_label")

_LINEARITY = {
    "least_squares": "linearity_least_squares_percent_fso",
    "terminal": "linearity_terminal_percent_fso",
    "zero_based": "linearity_zero_based_percent_fso",
    "independent": "linearity_independent_percent_fso",
}


def _linearity_figures(line: BranchLine) -> dict[str, float]:
    """Linearity of the mean curve: signals at nominal levels, averaged over runs, then over directions."""
    if line.cells.cells == 0:
        return dict.fromkeys(_LINEARITY.values(), float("nan"))
    levels, curve = line.cells.mean_curve()
    if len(curve) < 3:
        return dict.fromkeys(_LINEARITY.values(), float("nan"))
    found = linearity(levels, curve, line.full_scale_output)
    return {_LINEARITY[name]: value for name, value in asdict(found).items()}


def _hysteresis_figures(line: BranchLine) -> dict[str, float]:
    found = line.hysteresis
    if found is None:
        nan = float("nan")
        return {"hysteresis_percent_fso": nan, "hysteresis_null_percent_fso": nan, "hysteresis_p": nan}
    return {
        "hysteresis_percent_fso": 100.0 * found.largest / line.full_scale_output,
        "hysteresis_null_percent_fso": 100.0 * found.null_quantile / line.full_scale_output,
        "hysteresis_p": found.p,
    }


def _repeatability_figures(line: BranchLine) -> dict[str, float]:
    """SD over the runs of a mounting at one level and direction, pooled over all, in per cent of full scale.

    The readings of a run share its zero and slope, so the degrees of freedom are those of the runs.
    """
    if line.cells.cells == 0:
        return {"repeatability_percent_fso": float("nan"), "repeatability_df": 0.0}
    found = repeatability(line.cells.signal, line.cells.cell, line.cells.mounting)
    runs, mountings = len(np.unique(line.cells.run)), len(np.unique(line.cells.mounting))
    return {
        "repeatability_percent_fso": 100.0 * found.pooled_sd / line.full_scale_output,
        "repeatability_df": float(runs - mountings),
    }


def _stretch_exponents(
    used: UsedReadings, lines: tuple[BranchLine, ...], reference: ReferenceQuantity
) -> dict[tuple[tuple[str, str, str], str], dict[str, float]]:
    """Mean exponent of each sensor's runs; the SD between runs is pooled over its generation."""
    found: dict[tuple[tuple[str, str, str], str], FloatArray] = {}
    for line in lines:
        strain, signal = used.x[line.rows], used.signal[line.rows]
        usable = reference.name == "strain" and line.unit in CAPACITANCE_UNITS
        if usable and strain.min() > -1.0 and signal.min() > 0.0:
            run = np.unique(used.run[line.rows], return_inverse=True)[1].astype(np.int64)
            found[line.key, line.branch] = run_exponents(strain, signal, run, line.runs).exponents
    pooled: dict[tuple[str, str], tuple[float, int]] = {}
    for (key, branch), values in found.items():
        squares, degrees = pooled.get((key[0], branch), (0.0, 0))
        own = float(np.sum((values - values.mean()) ** 2))
        pooled[key[0], branch] = squares + own, degrees + len(values) - 1
    return {
        (line.key, line.branch): _exponent_interval(
            found.get((line.key, line.branch)), *pooled.get((line.generation, line.branch), (0.0, 0))
        )
        for line in lines
    }


def _exponent_interval(values: FloatArray | None, squares: float, degrees: int) -> dict[str, float]:
    nan = float("nan")
    if values is None:
        return {"stretch_exponent": nan, "stretch_exponent_low": nan, "stretch_exponent_high": nan}
    mean, half = float(values.mean()), nan
    if degrees > 0 and len(values) > 1:
        half = t_quantile(0.975, degrees) * float(np.sqrt(squares / degrees / len(values)))
    return {
        "stretch_exponent": mean,
        "stretch_exponent_low": mean - half,
        "stretch_exponent_high": mean + half,
    }
