"""The ordinary least-squares line, for comparison, and the influence of single readings on it."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pandas as pd
from statsmodels.regression.linear_model import OLS, RegressionResults
from statsmodels.stats.outliers_influence import OLSInfluence

from campaign.analyses.calibration_lines import BranchLine, line_of_sensor
from campaign.methods.calibration_line import t_quantile
from campaign.notices import Notice
from campaign.trials.readings import SENSOR_KEYS

FloatArray = npt.NDArray[np.float64]

INFLUENCE_COLUMNS = ("fitted", "residual", "studentised", "leverage", "cooks_distance")

OUTLYING_RISK = 0.05
"""Risk, over all readings of a sensor, of marking one that is not outlying (Bonferroni)."""


def ordinary_lines(used: pd.DataFrame, lines: tuple[BranchLine, ...]) -> pd.DataFrame:
    """Return least-squares lines over all readings of each sensor and branch, as if all were independent."""
    records = []
    for line in lines:
        rows = used.loc[line.rows]
        centre = float(rows["x"].mean())
        fit = _ordinary(rows, centre)
        back = np.array([[1.0, -centre], [0.0, 1.0]])
        errors = np.sqrt(np.diag(back @ fit.cov_params() @ back.T))
        intercept, slope = back @ fit.params
        records.append(
            {
                **dict(zip(SENSOR_KEYS, line.key, strict=True)),
                "branch": line.branch,
                "intercept": intercept,
                "slope": slope,
                "se_intercept": errors[0],
                "se_slope": errors[1],
            }
        )
    columns = [*SENSOR_KEYS, "branch", "intercept", "slope", "se_intercept", "se_slope"]
    return pd.DataFrame(records, columns=columns)


def _ordinary(rows: pd.DataFrame, centre: float) -> RegressionResults:
    """Ordinary least squares on x centred, so that no digits are lost."""
    x = rows["x"].to_numpy(float) - centre
    return OLS(rows["signal"].to_numpy(float), np.column_stack([np.ones(len(x)), x])).fit()


def influence_of_readings(
    table: pd.DataFrame, used: pd.DataFrame, lines: tuple[BranchLine, ...]
) -> pd.DataFrame:
    """Return *table* with fitted, residual, studentised, leverage and cooks_distance; NaN where not used.

    Fitted values and residuals are by the line that stands for the sensor. Leverage, externally studentised
    residuals and Cook's distance are those of the ordinary line over the same readings.
    """
    result = table.assign(**dict.fromkeys(INFLUENCE_COLUMNS, np.nan))
    parts = [_influence(used.loc[line.rows], line) for line in line_of_sensor(lines).values()]
    if parts:
        found = pd.concat(parts)
        result.loc[found.index, list(INFLUENCE_COLUMNS)] = found
    return result


def _influence(rows: pd.DataFrame, line: BranchLine) -> pd.DataFrame:
    fitted = line.intercept + line.slope * rows["x"].to_numpy(float)
    residual = rows["signal"].to_numpy(float) - fitted
    frame = pd.DataFrame(np.nan, index=rows.index, columns=list(INFLUENCE_COLUMNS))
    frame["fitted"], frame["residual"] = fitted, residual
    degrees = len(rows) - 3
    fit = _ordinary(rows, float(rows["x"].mean()))
    if degrees < 1 or fit.mse_resid <= 0.0:
        return frame
    influence = OLSInfluence(fit)
    internal = influence.resid_studentized_internal
    frame["leverage"] = influence.hat_matrix_diag
    frame["studentised"] = externally_studentised(internal, degrees)
    frame["cooks_distance"] = influence.cooks_distance[0]
    return frame


def externally_studentised(internal: FloatArray, degrees: int) -> FloatArray:
    """Return residuals studentised without their own reading, from internally studentised ones.

    ``degrees`` is the residual degrees of freedom less one (Cook & Weisberg, Residuals and Influence in
    Regression (1982), section 2.2).
    """
    left = degrees + 1.0 - internal**2
    external = np.full(len(internal), np.inf) * np.sign(internal)
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
