"""Reading the reference from a signal: classical calibration with Fieller's interval.

The plain form for one calibration line is E. J. Williams, Regression Analysis (1959), and Draper & Smith,
Applied Regression Analysis, section 3.2. The form for a new run adds the variance of runs about the line
(re-evaluated at every x), lack of fit and direction; only the noise of readings is divided by their number.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.methods.calibration_line import Polynomial, t_quantile

FloatArray = npt.NDArray[np.float64]

INSIDE_CALIBRATION = "inside calibration"
NO_INTERVAL = "no interval"
OUTSIDE_CALIBRATION = "outside calibration"


@dataclass(frozen=True)
class ReadingModel:
    """What the variance of a reading about a line consists of, in units of signal y and reference x.

    Attributes
    ----------
    intercept, slope
        The line y = a + b x.
    var_intercept, var_slope, cov_intercept_slope
        Covariance of the line's coefficients.
    run_var_intercept, run_var_slope, run_cov
        Covariance of a new run's line about it.
    lack_of_fit_variance
        Variance of what a level deviates from the line in every run.
    direction_half_width
        Half the loop width, where the direction of approach is not known; else 0.
    residual_variance
        Variance of one reading about its run.
    t
        Quantile of Student's t (two-sided 95 % as a rule).
    """

    intercept: float
    slope: float
    var_intercept: float
    var_slope: float
    cov_intercept_slope: float
    run_var_intercept: float = 0.0
    run_var_slope: float = 0.0
    run_cov: float = 0.0
    lack_of_fit_variance: float = 0.0
    direction_half_width: float = 0.0
    residual_variance: float = 0.0
    t: float = 1.959963984540054


@dataclass(frozen=True)
class InverseReading:
    """Reference read from a signal; limits are NaN without an interval, all three outside calibration."""

    estimate: float
    low: float
    high: float
    status: str


def inverse_limits(
    model: ReadingModel, signal: FloatArray | float, readings: float = 1.0, *, hold_run_variance: bool = False
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return estimate, lower and upper limit of the reference for each signal of a new run.

    Parameters
    ----------
    model
        The line and its variances; attributes may be arrays that broadcast with *signal* (many campaigns at
        once).
    signal
        Any shape, unit of y.
    readings
        Number m of readings averaged, all in one new run; ``inf`` for a mean response.
    hold_run_variance
        False: the variance of a new run is re-evaluated at every x, which is exact. True: it is held at the
        estimate, as some published answers do.

    Returns
    -------
    tuple of numpy.ndarray
        Limits are the roots of (y − a − b x)² = t₁² [V(a + b x) + v(x)] + t₂² [lack of fit + half width² +
        σ²/m]; NaN where these do not enclose a finite interval (g ≥ 1: the slope is not told from zero).
    """
    y = np.asarray(signal, dtype=np.float64)
    a, b = model.intercept, model.slope
    estimate = np.asarray((y - a) / b)
    t_squared = np.square(model.t)
    run0, run01, run1 = model.run_var_intercept, model.run_cov, model.run_var_slope
    if hold_run_variance:
        run0 = run0 + 2.0 * estimate * run01 + estimate**2 * run1  # type: ignore[assignment]
        run01 = run1 = 0.0
    constant = t_squared * (
        model.var_intercept
        + run0
        + model.lack_of_fit_variance
        + np.square(model.direction_half_width)
        + np.asarray(model.residual_variance) / readings
    )
    linear = t_squared * (model.cov_intercept_slope + run01)
    quadratic = t_squared * (model.var_slope + run1)
    leading = np.asarray(np.square(b) - quadratic)
    half_linear = (y - a) * b + linear
    discriminant = half_linear**2 - leading * ((y - a) ** 2 - constant)
    finite = (leading > 0) & (discriminant >= 0)
    root = np.sqrt(np.where(finite, discriminant, np.nan))
    leading = np.where(finite, leading, np.nan)
    return estimate, np.asarray((half_linear - root) / leading), np.asarray((half_linear + root) / leading)


def read_reference(
    model: ReadingModel, signal: float, readings: float = 1.0, *, signal_low: float, signal_high: float
) -> InverseReading:
    """Read the reference from one signal, or the mean of *readings* signals of one new run.

    Parameters
    ----------
    model
        The line and its variances.
    signal
        In the unit of the line.
    readings
        How many readings the signal is the mean of.
    signal_low, signal_high
        The calibrated range of the signal: nothing is read outside it.
    """
    if not signal_low <= signal <= signal_high:
        return InverseReading(float("nan"), float("nan"), float("nan"), OUTSIDE_CALIBRATION)
    estimate, low, high = (float(value) for value in inverse_limits(model, signal, readings))
    return InverseReading(estimate, low, high, INSIDE_CALIBRATION if np.isfinite(low) else NO_INTERVAL)


def fieller_interval(
    line: Polynomial, signals: FloatArray, *, confidence: float = 0.95, mean_response: bool = False
) -> InverseReading:
    """Return the plain Fieller interval for one calibration line and new readings of one unknown.

    Parameters
    ----------
    line
        A straight line by ordinary least squares.
    signals
        Shape (m,): new readings of the same unknown; their scatter is pooled into σ² (n + m − 3 degrees of
        freedom).
    confidence
        Of the interval.
    mean_response
        The signal is a known mean response: no reading noise, n − 2 degrees of freedom.

    Returns
    -------
    InverseReading
        Status 'no interval' where g ≥ 1.
    """
    signals = np.atleast_1d(np.asarray(signals, dtype=np.float64))
    mean = float(signals.mean())
    degrees = line.degrees_of_freedom
    variance = line.residual_sum_of_squares / degrees
    if not mean_response:
        degrees += len(signals) - 1
        variance = (line.residual_sum_of_squares + float(np.sum((signals - mean) ** 2))) / degrees
    t = t_quantile(0.5 + confidence / 2.0, degrees)
    scaled = line.covariance * (variance / line.residual_sd**2)
    model = ReadingModel(
        line.intercept,
        line.slope,
        float(scaled[0, 0]),
        float(scaled[1, 1]),
        float(scaled[0, 1]),
        residual_variance=0.0 if mean_response else variance,
        t=t,
    )
    estimate, low, high = (float(value) for value in inverse_limits(model, mean, len(signals)))
    return InverseReading(estimate, low, high, INSIDE_CALIBRATION if np.isfinite(low) else NO_INTERVAL)


def reading_uncertainty(line: Polynomial, signal: float) -> float:
    """Return the standard uncertainty of the reference read from one signal, by the law of propagation.

    u² = s_a²/b² + (y − a)² s_b²/b⁴ + s²/b² + 2 (y − a) s_ab/b³ (NIST/SEMATECH e-Handbook, 2.3.6.7).
    """
    a, b = line.intercept, line.slope
    c = line.covariance
    gap = signal - a
    squared = (
        c[0, 0] / b**2 + gap**2 * c[1, 1] / b**4 + line.residual_sd**2 / b**2 + 2.0 * gap * c[0, 1] / b**3
    )
    return float(np.sqrt(squared))
