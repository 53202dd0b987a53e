"""Straight lines and polynomials by least squares, and the line of a sensor from the lines of its runs.

Least squares: centred and scaled, so that no digits are lost (the NIST Pontius data need it). Lack of fit:
N. R. Draper, H. Smith, Applied Regression Analysis, 3rd edition (1998), section 2.1, for true replicates; for
runs, level against level × run. The line from runs is the estimate of a random-coefficient regression
(P. A. V. B. Swamy, Econometrica 38 (1970) 311–323), which is the plain mean where the runs share one design.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import special

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


def t_quantile(probability: float, degrees_of_freedom: float) -> float:
    """Return the quantile of Student's t (the normal quantile for infinite degrees of freedom)."""
    if np.isinf(degrees_of_freedom):
        return float(special.ndtri(probability))
    return float(special.stdtrit(degrees_of_freedom, probability))


def f_tail(statistic: float, first: float, second: float) -> float:
    """Return the probability that an F variable with the given degrees of freedom exceeds *statistic*."""
    if not np.isfinite(statistic):
        return 0.0 if statistic == np.inf else float("nan")
    return float(special.fdtrc(first, second, statistic))


@dataclass(frozen=True)
class Polynomial:
    """A least-squares polynomial in the powers of x itself.

    Attributes
    ----------
    coefficients
        Shape (degree + 1,): constant term first.
    covariance
        Shape (degree + 1, degree + 1); NaN where no degrees of freedom are left.
    residual_sd
        Residual standard deviation in the unit of y; NaN where no degrees of freedom are left.
    degrees_of_freedom
        Readings less coefficients.
    residual_sum_of_squares, r_squared
        As usual; R² is NaN where y does not vary.
    x_mean, x_sum_of_squares
        Mean of x and the sum of squares about it.
    """

    coefficients: FloatArray
    covariance: FloatArray
    residual_sd: float
    degrees_of_freedom: int
    residual_sum_of_squares: float
    r_squared: float
    x_mean: float
    x_sum_of_squares: float

    @property
    def intercept(self) -> float:
        """Constant term."""
        return float(self.coefficients[0])

    @property
    def slope(self) -> float:
        """Coefficient of x."""
        return float(self.coefficients[1])

    def value(self, x: FloatArray | float) -> FloatArray:
        """Return the fitted value at *x*."""
        return np.asarray(np.polynomial.polynomial.polyval(x, self.coefficients))


def fit_polynomial(x: FloatArray, y: FloatArray, degree: int = 1) -> Polynomial:
    """Fit a polynomial by ordinary least squares on centred and scaled x.

    Parameters
    ----------
    x, y
        Shape (readings,), any units, at least degree + 1 distinct x.
    degree
        1 for a straight line.

    Returns
    -------
    Polynomial
        Coefficients and covariance in the powers of x itself.

    Raises
    ------
    ValueError
        With fewer than degree + 1 distinct values of x.
    """
    if len(np.unique(x)) <= degree:
        raise ValueError(f"{degree + 1} distinct values of x are needed, {len(np.unique(x))} given")
    centre = float(np.mean(x))
    scale = float(np.max(np.abs(x - centre)))
    design = np.vander((x - centre) / scale, degree + 1, increasing=True)
    orthogonal, triangular = np.linalg.qr(design)
    middle = float(np.mean(y))
    scaled = np.linalg.solve(triangular, orthogonal.T @ (y - middle))
    residuals = (y - middle) - design @ scaled
    sum_of_squares = float(residuals @ residuals)
    degrees = len(x) - degree - 1
    variance = sum_of_squares / degrees if degrees > 0 else float("nan")
    inverse = np.linalg.inv(triangular)
    scaled[0] += middle
    to_raw = _powers_of_shifted(degree, centre, scale)
    about_mean = float(np.sum((y - middle) ** 2))
    return Polynomial(
        to_raw @ scaled,
        to_raw @ (inverse @ inverse.T) @ to_raw.T * variance,
        float(np.sqrt(variance)),
        degrees,
        sum_of_squares,
        1.0 - sum_of_squares / about_mean if about_mean > 0 else float("nan"),
        centre,
        float(np.sum((x - centre) ** 2)),
    )


def _powers_of_shifted(degree: int, centre: float, scale: float) -> FloatArray:
    """Matrix that takes coefficients in ((x − centre)/scale)^k to coefficients in x^k."""
    shifted = np.zeros((degree + 1, degree + 1))
    power = np.array([1.0])
    for k in range(degree + 1):
        shifted[: k + 1, k] = power
        power = np.convolve(power, [-centre / scale, 1.0 / scale])
    return shifted


@dataclass(frozen=True)
class LackOfFit:
    """An F test of lack of fit: statistic, degrees of freedom, p, and the two mean squares.

    ``variance`` is the variance of the deviation of a level from the line that it implies, never negative.
    """

    statistic: float
    first_degrees: int
    second_degrees: int
    p: float
    mean_square_lack: float
    mean_square_error: float
    variance: float


def lack_of_fit_of_replicates(x: FloatArray, y: FloatArray, degree: int = 1) -> LackOfFit:
    """Test a polynomial against true replicates: readings at equal x that repeat everything that can vary.

    Raises
    ------
    ValueError
        Where no x is repeated or the levels are no more than the coefficients.
    """
    fit = fit_polynomial(x, y, degree)
    levels, codes, counts = np.unique(x, return_inverse=True, return_counts=True)
    means = np.bincount(codes, y) / counts
    pure = float(np.sum((y - means[codes]) ** 2))
    first, second = len(levels) - degree - 1, len(x) - len(levels)
    if first < 1 or second < 1:
        raise ValueError("lack of fit needs repeated x and more levels than coefficients")
    return _lack_of_fit(fit.residual_sum_of_squares - pure, first, pure, second, len(x) / len(levels))


def lack_of_fit_of_runs(residuals: FloatArray, run: IntArray, level: IntArray) -> LackOfFit | None:
    """Test what levels have in common over runs against level × run, after each run's own line.

    Parameters
    ----------
    residuals
        Shape (readings,): residuals from the least-squares line of the reading's own run.
    run, level
        Shape (readings,): codes from 0. Readings of one branch each, or codes that tell the branches apart.

    Returns
    -------
    LackOfFit or None
        None with one run, or with too few levels.
    """
    runs = len(np.unique(run))
    levels, codes, counts = np.unique(level, return_inverse=True, return_counts=True)
    first = len(levels) - 2
    second = len(residuals) - 2 * runs - first
    if runs < 2 or first < 1 or second < 1:
        return None
    means = np.bincount(codes, residuals) / counts
    lack = float(np.sum(counts * means**2))
    error = float(np.sum((residuals - means[codes]) ** 2))
    return _lack_of_fit(lack, first, error, second, len(residuals) / len(levels))


def pooled_lack_of_fit(parts: list[LackOfFit], count_a_level: float) -> LackOfFit | None:
    """Pool the tests of several branches: sums of squares and degrees of freedom are added."""
    if not parts:
        return None
    first = sum(part.first_degrees for part in parts)
    second = sum(part.second_degrees for part in parts)
    lack = sum(part.mean_square_lack * part.first_degrees for part in parts)
    error = sum(part.mean_square_error * part.second_degrees for part in parts)
    return _lack_of_fit(lack, first, error, second, count_a_level)


def _lack_of_fit(lack: float, first: int, error: float, second: int, count_a_level: float) -> LackOfFit:
    mean_lack, mean_error = lack / first, error / second
    statistic = mean_lack / mean_error if mean_error > 0 else float("nan")
    variance = max(mean_lack - mean_error, 0.0) / count_a_level
    return LackOfFit(
        statistic, first, second, f_tail(statistic, first, second), mean_lack, mean_error, variance
    )


@dataclass(frozen=True)
class GroupLines:
    """Least-squares lines of many groups of readings (runs), about each group's own mean x.

    All attributes have shape (groups,): count, sum of weights, mean of x and y, sum of squares of x, slope,
    and the residual sum of squares. Groups without two distinct x have a slope of NaN.
    """

    counts: IntArray
    masses: FloatArray
    x_means: FloatArray
    y_means: FloatArray
    x_sums_of_squares: FloatArray
    slopes: FloatArray
    residual_sums_of_squares: FloatArray

    @property
    def intercepts(self) -> FloatArray:
        """Values of the lines at x = 0."""
        return np.asarray(self.y_means - self.slopes * self.x_means)

    def values(self, x: float | FloatArray) -> FloatArray:
        """Values of the lines at *x*."""
        return np.asarray(self.y_means + self.slopes * (x - self.x_means))


def fit_lines(
    x: FloatArray, y: FloatArray, group: IntArray, groups: int, weights: FloatArray | None = None
) -> GroupLines:
    """Fit a least-squares line to every group of readings at once.

    Parameters
    ----------
    x, y, group
        Shape (readings,); ``group`` codes from 0 to groups − 1.
    groups
        Number of groups.
    weights
        Shape (readings,), inverse to the variances of the readings; None: all 1. Means, sums of squares and
        residual sums of squares are then weighted.
    """
    w = np.ones(len(x)) if weights is None else weights
    counts = np.bincount(group, minlength=groups)
    mass = np.asarray(np.bincount(group, w, minlength=groups), dtype=np.float64)
    divisor = np.where(mass > 0, mass, 1.0)
    x_means = np.bincount(group, w * x, minlength=groups) / divisor
    y_means = np.bincount(group, w * y, minlength=groups) / divisor
    dx, dy = x - x_means[group], y - y_means[group]
    sxx = np.asarray(np.bincount(group, w * dx**2, minlength=groups), dtype=np.float64)
    sxy = np.bincount(group, w * dx * dy, minlength=groups)
    usable = sxx > 1e-24 * np.maximum(x_means**2, 1e-300)
    slopes = np.divide(sxy, sxx, out=np.full(groups, np.nan), where=usable)
    residuals = dy - slopes[group] * dx
    rss = np.asarray(np.bincount(group, w * residuals**2, minlength=groups), dtype=np.float64)
    return GroupLines(counts.astype(np.int64), mass, x_means, y_means, sxx, slopes, rss)


def common_quadratic(
    x: FloatArray, y: FloatArray, run: IntArray, confidence: float = 0.95
) -> tuple[float, float, float]:
    """Return the quadratic coefficient common to all runs, each with its own line, and its interval.

    Parameters
    ----------
    x, y, run
        Shape (readings,); ``run`` codes from 0, one for each own line; those of fewer than three
        readings are left out.
    confidence
        Of the interval.

    Returns
    -------
    tuple of float
        Estimate, lower and upper limit, in units of y per unit of x squared; NaN where not identifiable.
    """
    held = np.bincount(run)[run] >= 3
    if not held.any():
        return float("nan"), float("nan"), float("nan")
    x, y, run = x[held], y[held], np.unique(run[held], return_inverse=True)[1].astype(np.int64)
    groups = int(run.max()) + 1
    square = (x - x.mean()) ** 2
    own_square = _residuals(x, square, run, groups)
    own_y = _residuals(x, y, run, groups)
    spread = float(own_square @ own_square)
    degrees = len(x) - 2 * groups - 1
    if degrees < 1 or not spread > 1e-12 * float(square @ square):
        return float("nan"), float("nan"), float("nan")
    estimate = float(own_square @ own_y) / spread
    variance = float(np.sum((own_y - estimate * own_square) ** 2)) / degrees / spread
    half = t_quantile(0.5 + confidence / 2.0, degrees) * float(np.sqrt(variance))
    return estimate, estimate - half, estimate + half


def _residuals(x: FloatArray, y: FloatArray, group: IntArray, groups: int) -> FloatArray:
    """Residuals from the least-squares line of each group."""
    lines = fit_lines(x, y, group, groups)
    return np.asarray(y - lines.y_means[group] - lines.slopes[group] * (x - lines.x_means[group]))


@dataclass(frozen=True)
class LineOfRuns:
    """A sensor's line from the lines of its runs.

    Attributes
    ----------
    coefficients
        Shape (2,): value at ``centre`` and slope.
    covariance
        Shape (2, 2): of ``coefficients``, from between runs.
    run_covariance
        Shape (2, 2): of a run's true line about the sensor's, in the same basis.
    centre
        Where the first coefficient is the value of the line.
    """

    coefficients: FloatArray
    covariance: FloatArray
    run_covariance: FloatArray
    centre: float

    @property
    def raw(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Coefficients, covariance and run covariance as intercept (at x = 0) and slope."""
        back = np.array([[1.0, -self.centre], [0.0, 1.0]])
        covariances = at_zero(self.covariance, self.centre), at_zero(self.run_covariance, self.centre)
        return back @ self.coefficients, *covariances


def at_zero(covariance: FloatArray, centre: float) -> FloatArray:
    """Return the covariance of (intercept at x = 0, slope) from that of (value at *centre*, slope)."""
    back = np.array([[1.0, -centre], [0.0, 1.0]])
    return np.asarray(back @ covariance @ back.T)


def scatter_of_runs(coefficients: FloatArray) -> FloatArray:
    """Return sums of squares and products of run coefficients, shape (runs, 2), about their mean: (2, 2)."""
    deviations = coefficients - coefficients.mean(axis=0)
    return np.asarray(deviations.T @ deviations)


def run_covariance(observed: FloatArray, within: FloatArray) -> FloatArray:
    """Return the covariance of true run lines: observed scatter less what noise within runs explains.

    Parameters
    ----------
    observed
        Shape (2, 2): covariance of the runs' fitted coefficients (mean squares and products).
    within
        Shape (2, 2), positive definite: the part of it due to noise within runs, σ² (X'X)⁻¹.

    Returns
    -------
    numpy.ndarray
        Shape (2, 2): the nearest non-negative matrix in the metric of ``within`` (negative parts are zero).
    """
    root = np.linalg.cholesky(within)
    inverse = np.linalg.inv(root)
    values, vectors = np.linalg.eigh(inverse @ observed @ inverse.T)
    kept = (vectors * np.maximum(values - 1.0, 0.0)) @ vectors.T
    return np.asarray(root @ kept @ root.T)


def line_of_runs(
    coefficients: FloatArray, within: FloatArray, run_variance: FloatArray, centre: float
) -> LineOfRuns:
    """Combine the lines of runs into the sensor's line.

    Parameters
    ----------
    coefficients
        Shape (runs, 2): value at ``centre`` and slope of every run.
    within
        Shape (runs, 2, 2): covariance of each run's coefficients from noise within the run.
    run_variance
        Shape (2, 2): covariance of true run lines about the sensor's line (zero for a single run).
    centre
        The place of the first coefficient.

    Returns
    -------
    LineOfRuns
        The generalised least-squares mean; the plain mean where all runs have the same design.
    """
    weights = np.linalg.inv(run_variance[None] + within)
    covariance = np.linalg.inv(weights.sum(axis=0))
    mean = covariance @ np.einsum("rij,rj->i", weights, coefficients)
    return LineOfRuns(mean, covariance, run_variance, centre)
