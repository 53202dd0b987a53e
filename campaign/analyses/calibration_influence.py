"""The ordinary least-squares line, for comparison, and the influence of single readings on it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd

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


@dataclass(frozen=True)
class OrdinaryFit:
    """A least-squares line over all readings of a sensor, as if all were independent.

    Attributes
    ----------
    mean_x, sum_of_squares
        Mean of x, and Σ(x − mean)².
    centred
        Shape (readings,): x less its mean, so that no digits are lost.
    signal
        Shape (readings,).
    level, slope
        Signal at the mean of x, and per unit of x.
    """

    mean_x: float
    sum_of_squares: float
    centred: FloatArray
    signal: FloatArray
    level: float
    slope: float

    @property
    def degrees(self) -> int:
        """Degrees of freedom of the residuals."""
        return len(self.signal) - 2

    @property
    def residuals(self) -> FloatArray:
        """Departures from the line, shape (readings,)."""
        return np.asarray(self.signal - self.level - self.slope * self.centred)

    @property
    def variance(self) -> float:
        """Mean square of the residuals; NaN without degrees of freedom."""
        return float(np.sum(self.residuals**2)) / self.degrees if self.degrees > 0 else float("nan")

    @property
    def leverage(self) -> FloatArray:
        """Share of every reading in its own fitted value, shape (readings,)."""
        return np.asarray(1.0 / len(self.signal) + self.centred**2 / self.sum_of_squares)


def ordinary_fits(used: UsedReadings, lines: tuple[BranchLine, ...]) -> tuple[OrdinaryFit, ...]:
    """Return the least-squares fit over all readings of each line."""
    return tuple(_ordinary_fit(used.x[line.rows], used.signal[line.rows]) for line in lines)


def _ordinary_fit(x: FloatArray, signal: FloatArray) -> OrdinaryFit:
    mean, level = float(x.mean()), float(signal.mean())
    centred = x - mean
    squares = float(centred @ centred)
    return OrdinaryFit(mean, squares, centred, signal, level, float(centred @ (signal - level)) / squares)


def ordinary_lines(lines: tuple[BranchLine, ...], fits: tuple[OrdinaryFit, ...]) -> pd.DataFrame:
    """Return least-squares lines over all readings of each sensor and branch, as if all were independent."""
    records = []
    for line, fit in zip(lines, fits, strict=True):
        slope_variance = fit.variance / fit.sum_of_squares
        level_variance = fit.variance / len(fit.signal) + fit.mean_x**2 * slope_variance
        errors = np.sqrt([level_variance, slope_variance])
        records.append(
            (*line.key, line.branch, fit.level - fit.slope * fit.mean_x, fit.slope, *errors.tolist())
        )
    columns = [*SENSOR_KEYS, "branch", "intercept", "slope", "se_intercept", "se_slope"]
    return pd.DataFrame(records, columns=columns)


def influence_of_readings(
    table: pd.DataFrame,
    used: UsedReadings,
    lines: tuple[BranchLine, ...],
    fits: tuple[OrdinaryFit, ...],
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


def _influence(fit: OrdinaryFit) -> FloatArray:
    """Externally studentised residuals, leverages and Cook's distances, shape (readings, 3)."""
    degrees = fit.degrees - 1
    rounding = (EXACT_SHARE * float(np.max(np.abs(fit.signal)))) ** 2
    if degrees < 1 or fit.variance <= rounding:
        return np.full((len(fit.signal), 3), np.nan)
    leverage = fit.leverage
    internal = fit.residuals / np.sqrt(fit.variance * (1.0 - leverage))
    distance = internal**2 / 2.0 * leverage / (1.0 - leverage)
    return np.column_stack([externally_studentised(internal, degrees), leverage, distance])


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
