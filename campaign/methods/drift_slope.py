"""Slope of a series against time with a standard error that respects the autocorrelation of its residuals.

Ordinary least squares takes successive readings for independent and so claims too small an error for a slow
series. Here the variance of the slope takes the integrated autocorrelation time of the residuals of the line
(initial positive sequence, :mod:`campaign.methods.autocorrelation`).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import special

from campaign.methods.autocorrelation import stretch_means

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class DriftSlope:
    """A least-squares line with two standard errors of its slope.

    Attributes
    ----------
    intercept, slope
        Line of the values against time: value at time 0, and unit of the values a unit of time.
    standard_error
        Of the slope, with the autocorrelation of the residuals.
    ordinary_standard_error
        Of the slope, by ordinary least squares, for comparison.
    degrees_of_freedom
        Behind ``standard_error``.
    lag_one_of_values, lag_one_of_residuals
        Lag-1 autocorrelation of the series and of the residuals of its line.
    residual_sd
        Residual standard deviation, n − 2 degrees of freedom.
    """

    intercept: float
    slope: float
    standard_error: float
    ordinary_standard_error: float
    degrees_of_freedom: float
    lag_one_of_values: float
    lag_one_of_residuals: float
    residual_sd: float

    def interval(self, level: float = 0.95) -> tuple[float, float]:
        """Return the interval of the slope by Student's t."""
        reach = float(special.stdtrit(self.degrees_of_freedom, (1 + level) / 2)) * self.standard_error
        return self.slope - reach, self.slope + reach

    @property
    def widening(self) -> float:
        """How many times larger the standard error is than the ordinary one."""
        return self.standard_error / self.ordinary_standard_error


def drift_slope(times: FloatArray, values: FloatArray) -> DriftSlope:
    """Fit a line to an evenly sampled series.

    Parameters
    ----------
    times, values
        Shape (n,), n at least 3, in the order taken.

    Returns
    -------
    DriftSlope
        The standard error is never below the ordinary one.
    """
    reduced = stretch_means(values, times, np.array([len(values)]))
    slope = float(reduced.slopes[0])
    centred = times - times.mean()
    residuals = values - values.mean() - slope * centred
    spread = float(np.sqrt(residuals @ residuals / (len(values) - 2)))
    ordinary = spread / float(np.sqrt(centred @ centred))
    return DriftSlope(
        float(values.mean() - slope * times.mean()),
        slope,
        max(float(reduced.slope_standard_errors[0]), ordinary),
        ordinary,
        float(reduced.slope_degrees_of_freedom[0]),
        lag_one(values),
        lag_one(residuals),
        spread,
    )


def lag_one(values: FloatArray) -> float:
    """Return the lag-1 autocorrelation of a series, shape (n,); 0 where it is constant."""
    centred = values - values.mean()
    square = float(centred @ centred)
    return float(centred[1:] @ centred[:-1]) / square if square > 0 else 0.0
