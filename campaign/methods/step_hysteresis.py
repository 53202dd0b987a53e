"""Hysteresis of staircases: the signed difference of the branches at each level, and its largest value.

A largest absolute difference cannot be zero, so it is set beside its distribution where there is no
hysteresis. Simultaneous intervals and that distribution use Šidák's inequality (Z. Šidák, JASA 62 (1967)
626–633) for Student's t with one pooled variance.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import special

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


@dataclass(frozen=True)
class StepHysteresis:
    """Rising minus falling at each common level.

    Attributes
    ----------
    differences, low, high
        Shape (levels,): mean over runs, and limits that hold for all levels at once with the confidence asked
        for; signal units. Limits are NaN where no variance is known.
    runs
        Shape (levels,): runs in which both branches visited the level.
    largest
        Largest absolute mean difference.
    largest_level
        Its place among the levels.
    null_quantile
        Quantile (at the confidence asked for) of the largest absolute mean difference were there no
        hysteresis; NaN where no variance is known.
    p
        Probability of a largest difference at least as large were there none; NaN where no variance is known.
    mean_square_width
        Mean over levels of the squared width, less what noise adds, never negative.
    variance, degrees_of_freedom
        Variance of one difference of one run, and its degrees of freedom.
    """

    differences: FloatArray
    low: FloatArray
    high: FloatArray
    runs: IntArray
    largest: float
    largest_level: int
    null_quantile: float
    p: float
    mean_square_width: float
    variance: float
    degrees_of_freedom: float


def step_hysteresis(
    differences: FloatArray,
    *,
    confidence: float = 0.95,
    noise_variance: float = float("nan"),
    noise_degrees: float = 0.0,
) -> StepHysteresis:
    """Analyse the differences of branches of several runs.

    Parameters
    ----------
    differences
        Shape (runs, levels): rising minus falling of each run; NaN where a branch did not visit the level.
        Every level needs at least one run. The run's own zero and slope cancel in a difference.
    confidence
        Of the simultaneous intervals.
    noise_variance, noise_degrees
        Variance of one difference by other means (twice that of a reading) and its degrees of freedom, used
        where no level was repeated.

    Returns
    -------
    StepHysteresis
        With a variance pooled over levels.
    """
    known = np.isfinite(differences)
    runs = known.sum(axis=0)
    means = np.where(known, differences, 0.0).sum(axis=0) / runs
    degrees = float(np.sum(runs - 1))
    deviations = np.where(known, differences - means, 0.0)
    variance = float(np.sum(deviations**2)) / degrees if degrees > 0 else noise_variance
    degrees = degrees if degrees > 0 else noise_degrees
    errors = np.sqrt(variance / runs)
    levels = len(means)
    place = int(np.argmax(np.abs(means)))
    largest = float(np.abs(means[place]))
    quantile, p = float("nan"), float("nan")
    if degrees > 0 and variance > 0:
        one_level = 0.5 + 0.5 * confidence ** (1.0 / levels)
        quantile = float(special.stdtrit(degrees, one_level))
        tails = 2.0 * special.stdtr(degrees, -np.max(np.abs(means) / errors))
        p = float(-np.expm1(levels * np.log1p(-min(float(tails), 1.0 - 1e-16))))
    width = float(np.mean(means**2) - (np.mean(errors**2) if np.all(np.isfinite(errors)) else 0.0))
    return StepHysteresis(
        means,
        means - quantile * errors,
        means + quantile * errors,
        runs.astype(np.int64),
        largest,
        place,
        float(quantile * np.max(errors)),
        p,
        max(width, 0.0),
        variance,
        degrees,
    )
