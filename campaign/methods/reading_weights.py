"""Whether readings of unequal scatter should be weighted: only where it changes the slope's standard error.

The variance of a reading is τ² + SE², with τ² the scatter about the run's line, here a smooth function of the
reference, exp(a + b x) (A. C. Harvey, Econometrica 44 (1976) 461–465): a variance a level would be too noisy
to weight by.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]

MEAN_LOG_CHI_SQUARE = -1.2703628454614782
"""Mean of the logarithm of χ² with one degree of freedom, −γ − ln 2."""


def scatter_against(x: FloatArray, residuals: FloatArray) -> FloatArray:
    """Return the variance of a reading as a smooth function of x, at every x.

    Parameters
    ----------
    x, residuals
        Shape (readings,): reference, and residual from the line of the reading's own run.

    Returns
    -------
    numpy.ndarray
        Shape (readings,), unit of the residuals squared: exp(a + b x) by least squares on log residual²,
        level adjusted so that its mean is that of the squared residuals. Constant where there are too few
        readings.
    """
    squares = residuals**2
    mean = float(squares.mean()) if len(squares) else 0.0
    spread = float(np.sum((x - x.mean()) ** 2)) if len(x) else 0.0
    if len(x) < 5 or mean <= 0.0 or spread <= 0.0:
        return np.full(len(x), mean)
    logarithms = np.log(np.maximum(squares, 1e-6 * mean)) - MEAN_LOG_CHI_SQUARE
    rate = float((x - x.mean()) @ logarithms) / spread
    shape = np.exp(rate * (x - x.mean()))
    return np.asarray(mean * shape / shape.mean())


def slope_error_ratio(x: FloatArray, variances: FloatArray) -> float:
    """Return the standard error of a weighted slope divided by that of the unweighted one, at most 1.

    ``x`` and ``variances`` (of a reading, above 0) have shape (readings,), for one run.
    """
    dx = x - x.mean()
    unweighted = float(dx**2 @ variances) / float(dx @ dx) ** 2
    weights = 1.0 / variances
    centred = x - float(weights @ x) / float(weights.sum())
    weighted = 1.0 / float(weights @ centred**2)
    return float(np.sqrt(weighted / unweighted))
