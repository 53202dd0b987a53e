"""The ordinary least-squares line, for comparison, and the influence of single readings on it."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pandas as pd
from statsmodels.regression.linear_model import OLS, RegressionResults
from statsmodels.stats.outliers_influence import OLSInfluence

from campaign.analyses.calibration_lines import BranchLine, line_of_sensor
from campaign.analyses.used_readings import UsedReadings
from campaign.methods.calibration_line import t_quantile
from campaign.notices import Notice
from campaign.trials.readings import SENSOR_KEYS

FloatArray = npt.NDArray[np.float64]

INFLUENCE_COLUMNS = ("fitted", "residual", "studentised", "leverage", "cooks_distance")

EXACT_SHARE = 1e-12
"""Residuals below this share of the signal are rounding: exact data have no outlying readings."""

OUTLYING_RISK = 0.05
"""Risk, over all readings of a sensor, of marking one that is not outlying (Bonferroni)."""


def ordinary_fits(used: UsedReadings, lines: tuple[BranchLine, ...]) -> tuple[RegressionResults, ...]:
    """Return the least-squares fit over all readings of each line, x centred so that no digits are lost."""
    fits = []
    for line in lines:
        x = used.x[line.rows]
        design = np.column_stack([np.ones(len(x)), x - x.mean()])
        fits.append(OLS(used.signal[line.rows], design).fit())
    return tuple(fits)


def ordinary_lines(
    used: UsedReadings, lines: tuple[BranchLine, ...], fits: tuple[RegressionResults, ...]
) -> pd.DataFrame:
    """Return least-squares lines over all readings of each sensor and branch, as if all were independent."""
    records = []
    for line, fit in zip(lines, fits, strict=True):
        back = np.array([[1.0, -float(used.x[line.rows].mean())], [0.0, 1.0]])
        covariance = fit.cov_params() if fit.df_resid > 0 else np.full((2, 2), np.nan)
        errors = np.sqrt(np.diag(back @ covariance @ back.T))
        records.append((*line.key, line.branch, *(back @ fit.params), *errors))
    columns = [*SENSOR_KEYS, "branch", "intercept", "slope", "se_intercept", "se_slope"]
    return pd.DataFrame(records, columns=columns)


def influence_of_readings(
    table: pd.DataFrame,
    used: UsedReadings,
    lines: tuple[BranchLine, ...],
    fits: tuple[RegressionResults, ...],
) -> pd.DataFrame:
    """Return *table* with fitted, residual, studentised, leverage and cooks_distance; NaN where not used.

    Fitted values and residuals are by the line that stands for the sensor. Leverage, externally studentised
    residuals and Cook's distance are those of the ordinary line over the same readings.
    """
    found = np.full((len(used.x), len(INFLUENCE_COLUMNS)), np.nan)
    standing = set(map(id, line_of_sensor(lines).values()))
    for line, fit in zip(lines, fits, strict=True):
        if id(line) in standing:
            fitted = line.intercept + line.slope * used.x[line.rows]
            found[line.rows, 0], found[line.rows, 1] = fitted, used.signal[line.rows] - fitted
            found[line.rows, 2:] = _influence(fit)
    influence = pd.DataFrame(found, index=used.table.index, columns=list(INFLUENCE_COLUMNS))
    return table.join(influence.reindex(table.index))


def _influence(fit: RegressionResults) -> FloatArray:
    """Externally studentised residuals, leverages and Cook's distances, shape (readings, 3)."""
    degrees = int(fit.df_resid) - 1
    rounding = (EXACT_SHARE * float(np.max(np.abs(fit.model.endog)))) ** 2
    if degrees < 1 or fit.mse_resid <= rounding:
        return np.full((int(fit.nobs), 3), np.nan)
    influence = OLSInfluence(fit)
    studentised = externally_studentised(influence.resid_studentized_internal, degrees)
    return np.column_stack([studentised, influence.hat_matrix_diag, influence.cooks_distance[0]])


def externally_studentised(internal: FloatArray, degrees: int) -> FloatArray:
    """Return residuals studentised without their own reading, from internally studentised ones.

    ``degrees`` is the residual degrees of freedom less one (Cook & Weisberg, Residuals and Influence in
    Regression (1982), section 2.2).
    """
    left = degrees + 1.0 - internal**2
    external = np.copysign(np.inf, internal)
    return np.asarray(
        np.divide(internal * np.sqrt(degrees), np.sqrt(np.abs(left)), out=external, where=left > 0)
    )


def outlying_notices(table: pd.DataFrame) -> tuple[Notice, ...]:
    """One notice a trial and sensor that counts its outlying readings; they are kept."""
    known = table[np.isfinite(table["studentised"])]
    if known.empty:
        return ()
    counts = known.groupby(SENSOR_KEYS)["studentised"].transform("size").to_numpy()
    limits = {n: t_quantile(1.0 - OUTLYING_RISK / (2.0 * n), n - 3) for n in set(counts.tolist())}
    beyond = known[known["studentised"].abs().to_numpy() > np.array([limits[n] for n in counts.tolist()])]
    return tuple(
        Notice(
            "outlying-reading",
            "noted",
            str(trial),
            None,
            None,
            f"sensor {sensor}: outlying readings, order {', '.join(map(str, rows['order'][:8]))}",
            "kept",
            "look at the recording there",
            len(rows),
        )
        for (trial, sensor), rows in beyond.groupby(["trial", "sensor"], sort=True)
    )
