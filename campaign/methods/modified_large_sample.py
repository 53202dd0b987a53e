"""Modified large-sample intervals of variances and of sums of them, in balanced designs.

In a balanced design the mean squares are independent, each an expected mean square times χ²/n, and every
variance is a combination of them, γ = Σ c θ, with weights c of either sign. The large-sample interval of such
a combination is modified so that it is exact in every limiting case where a single mean square, or the
difference of two, is all that counts. It needs no likelihood and no optimiser, which makes it a check on the
profile limits that stand beside it; it holds for balanced designs only.

References
----------
Graybill & Wang, Journal of the American Statistical Association 75 (1980) 869: positive weights. Ting,
Burdick, Graybill, Jeyaratnam & Lu, Journal of Statistical Computation and Simulation 35 (1990) 135: weights
of either sign. Burdick & Graybill, *Confidence Intervals on Variance Components* (1992), 3.2 and 3.3.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import combinations

import numpy as np
import numpy.typing as npt
from scipy import stats

FloatArray = npt.NDArray[np.float64]

NEGLIGIBLE = 1e-10
"""A weight of less than this share of the largest is a rounding error of the solution, not a weight."""


@dataclass(frozen=True)
class Limits:
    """Estimate and limits of a variance, one an entry of the mean squares' trailing shape.

    Attributes
    ----------
    estimate
        Unbiased; it may be negative.
    low, high
        Limits, not below zero.
    """

    estimate: FloatArray
    low: FloatArray
    high: FloatArray


@dataclass(frozen=True)
class MeanSquares:
    """The mean squares of a balanced design and what they estimate.

    Attributes
    ----------
    names
        Components, one a mean square.
    values
        Shape (components, …): the mean squares; trailing axes are separate campaigns.
    degrees_of_freedom
        Shape (components,).
    expectations
        Shape (components, components): expected mean squares are expectations @ variances.
    """

    names: tuple[str, ...]
    values: FloatArray
    degrees_of_freedom: FloatArray
    expectations: FloatArray

    def limits(self, names: Sequence[str], level: float = 0.95) -> Limits:
        """Return estimate and limits of the sum of the variances of *names*, in units of the mean squares.

        Raises
        ------
        ValueError
            A name is not among the components, or a mean square that is needed has no degrees of freedom.
        """
        wanted = np.array([sum(name == own for name in names) for own in self.names], dtype=float)
        if wanted.sum() != len(names):
            raise ValueError(f"not all of {', '.join(names)} are among {', '.join(self.names)}")
        weights = np.linalg.solve(self.expectations.T, wanted)
        return limits_of_combination(weights, self.values, self.degrees_of_freedom, level)


def nested_expectations(sizes: Sequence[int]) -> FloatArray:
    """Return the expected mean squares of a balanced nested design of any number of levels.

    Parameters
    ----------
    sizes
        Numbers of units within one unit of the next outer level, from the outermost level down to the
        readings of the innermost unit: ``(modules, sensors a module, readings a sensor)``.

    Returns
    -------
    array of shape (levels, levels)
        Row k: level k and every level within it, each with its readings a unit; the last row is the error's.

    Examples
    --------
    >>> nested_expectations((6, 5, 3))
    array([[15.,  3.,  1.],
           [ 0.,  3.,  1.],
           [ 0.,  0.,  1.]])
    """
    readings = np.cumprod([1, *sizes[:0:-1]])[::-1].astype(float)
    return np.triu(np.tile(readings, (len(sizes), 1)))


def nested_degrees_of_freedom(sizes: Sequence[int]) -> FloatArray:
    """Return the degrees of freedom of a balanced nested design about one common mean.

    Arguments as in :func:`nested_expectations`.

    Examples
    --------
    >>> nested_degrees_of_freedom((6, 5, 3))
    array([ 5., 24., 60.])
    """
    units = np.cumprod(sizes).astype(float)
    return np.diff(units, prepend=1.0)


def limits_of_combination(
    weights: FloatArray, mean_squares: FloatArray, degrees_of_freedom: FloatArray, level: float = 0.95
) -> Limits:
    """Return estimate and limits of a weighted sum of expected mean squares.

    Parameters
    ----------
    weights
        Shape (k,), of either sign; mean squares of weight zero are not looked at.
    mean_squares
        Shape (k, …), independent; trailing axes are separate campaigns.
    degrees_of_freedom
        Shape (k,).
    level
        Two-sided confidence level.

    Returns
    -------
    Limits
        Of shape (…). One positive weight alone gives the exact χ² interval.

    Raises
    ------
    ValueError
        A mean square of weight other than zero has no degrees of freedom, or all weights are zero.
    """
    kept = np.abs(weights) > NEGLIGIBLE * np.abs(weights).max(initial=0.0)
    freedom = np.asarray(degrees_of_freedom, dtype=float)[kept]
    if not kept.any() or freedom.min() < 1:
        raise ValueError("every mean square that counts needs a degree of freedom")
    parts = np.einsum("k,k...->k...", np.asarray(weights, dtype=float)[kept], np.asarray(mean_squares)[kept])
    alpha = (1.0 - level) / 2.0
    estimate = parts.sum(axis=0)
    positive = np.asarray(weights)[kept] > 0
    low = estimate - np.sqrt(_reach(np.abs(parts), freedom, positive, alpha, upper=False))
    high = estimate + np.sqrt(_reach(np.abs(parts), freedom, positive, alpha, upper=True))
    return Limits(np.asarray(estimate), np.maximum(low, 0.0), np.maximum(high, 0.0))


def _reach(
    parts: FloatArray, freedom: FloatArray, positive: npt.NDArray[np.bool_], alpha: float, *, upper: bool
) -> FloatArray:
    """Square of the distance from the estimate to a limit: V_L or V_U of Ting and others (1990).

    The upper limit of γ is the lower limit of −γ mirrored: the terms that pull towards the limit and those
    that pull away change places. G belongs to the sign whose sums of squares the correction G* joins.
    """
    away = 1.0 - freedom / stats.chi2.isf(alpha, freedom)
    towards = freedom / stats.chi2.isf(1.0 - alpha, freedom) - 1.0
    first = positive != upper
    squares = np.where(first, away, towards) ** 2
    total = np.einsum("k,k...->...", squares, parts**2)
    for q in np.flatnonzero(positive):
        for r in np.flatnonzero(~positive):
            total = total + _opposed(freedom[q], freedom[r], alpha, upper=upper) * parts[q] * parts[r]
    same = np.flatnonzero(first)
    if not first.all():
        for q, t in combinations(same, 2):
            total = total + _alike(freedom[q], freedom[t], alpha) / (len(same) - 1) * parts[q] * parts[t]
    return np.asarray(np.maximum(total, 0.0))


def _opposed(q: float, r: float, alpha: float, *, upper: bool) -> float:
    """G_qr, or H_qr for the upper limit: makes the limit of a difference of two mean squares exact at zero.

    *q* and *r* are the degrees of freedom of the positive and of the negative one.
    """
    tail, first_tail, second_tail = (1 - alpha, 1 - alpha, alpha) if upper else (alpha, alpha, 1 - alpha)
    quantile = float(stats.f.isf(tail, q, r))
    first = 1.0 - q / float(stats.chi2.isf(first_tail, q))
    second = 1.0 - r / float(stats.chi2.isf(second_tail, r))
    return ((quantile - 1.0) ** 2 - (first * quantile) ** 2 - second**2) / quantile


def _alike(q: float, t: float, alpha: float) -> float:
    """G*_qt: makes the limit of a sum of two mean squares of one sign exact where they are one."""
    both = 1.0 - (q + t) / float(stats.chi2.isf(alpha, q + t))
    first, second = (1.0 - n / float(stats.chi2.isf(alpha, n)) for n in (q, t))
    return (both * (q + t)) ** 2 / (q * t) - first**2 * q / t - second**2 * t / q
