"""Weights of readings: all alike, unless their scatter differs enough to make a stated difference."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import numpy.typing as npt

from campaign.analyses.used_readings import UsedReadings
from campaign.methods.calibration_line import fit_lines
from campaign.methods.reading_weights import scatter_against, slope_error_ratio

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

STATED_GAIN = 0.10
"""Readings are weighted where that lowers the standard error of the slope within a run by this share."""


def with_weights(used: UsedReadings) -> UsedReadings:
    """Return the readings with weights, and the gain in the slope's standard error that they would bring.

    The scatter about the lines of runs and branches is taken as a smooth function of x in each generation,
    and the standard error of each reading's mean is added. Weights have a mean of about 1; all are 1 where
    the median gain over runs is less than :data:`STATED_GAIN`.
    """
    if len(used.x) == 0:
        return used
    group = np.unique(used.run * 3 + used.direction, return_inverse=True)[1].astype(np.int64)
    lines = fit_lines(used.x, used.signal, group, int(group.max()) + 1)
    residuals = used.signal - lines.y_means[group] - lines.slopes[group] * (used.x - lines.x_means[group])
    free = np.isfinite(residuals) & (lines.counts[group] > 2)
    variances = np.full(len(used.x), np.nan)
    generation = np.unique(used.table["generation"].astype(str), return_inverse=True)[1]
    for code in range(int(generation.max()) + 1):
        chosen = np.flatnonzero((generation == code) & free)
        total = scatter_against(used.x[chosen], residuals[chosen])
        error = used.column("standard_error", chosen) ** 2
        known = np.isfinite(error)
        common = float(error[known].mean()) if known.any() else 0.0
        variances[chosen] = np.where(known, np.maximum(total - common, 0.0) + error, total)
    usable = np.isfinite(variances) & (variances > 0)
    gain = _median_gain(used, variances, usable)
    if gain < STATED_GAIN:
        return replace(used, weighting_gain=gain)
    weights = np.where(usable, float(np.mean(variances[usable])) / np.where(usable, variances, 1.0), 1.0)
    return replace(used, weights=weights, weighting_gain=gain)


def _median_gain(used: UsedReadings, variances: FloatArray, usable: BoolArray) -> float:
    """Median over runs of the share by which weighting lowers the standard error of the slope."""
    gains = []
    order = np.flatnonzero(usable)[np.argsort(used.run[usable], kind="stable")]
    for rows in np.split(order, np.flatnonzero(np.diff(used.run[order])) + 1):
        if len(rows) > 2 and np.ptp(used.x[rows]) > 0:
            gains.append(1.0 - slope_error_ratio(used.x[rows], variances[rows]))
    return float(np.median(gains)) if gains else 0.0
