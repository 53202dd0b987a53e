"""Means of nested groups compared: differences and ratios with the outermost group as the unit.

Every mean is fitted by itself (restricted maximum likelihood, :mod:`campaign.methods.nested_model`), so that
two sides may spread differently, and two means are joined by Welch's formula. Degrees of freedom are
Satterthwaite's, but never more than the number of outermost groups less one: where the variance between
groups is estimated as zero, Satterthwaite's formula would count their members instead.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import stats

from campaign.methods.nested_model import NestedModel, RandomTerm, fit_nested_model, satterthwaite

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

NAN = math.nan
LEVEL = 0.95
"""Confidence level of every interval."""


@dataclass(frozen=True)
class Mean:
    """Mean of a nested population, in the unit of the values.

    ``variance`` and ``degrees_of_freedom`` are those of the estimate, NaN where a single outermost group
    leaves them unknown; ``groups`` counts the outermost groups, ``members`` the values.
    """

    estimate: float
    variance: float
    degrees_of_freedom: float
    groups: int
    members: int


@dataclass(frozen=True)
class Comparison:
    """A difference (null value 0) or a ratio (null value 1) of two means, with its 95 % interval.

    ``low`` and ``high`` are infinite where a ratio has no limit; ``p`` is two-sided, of the null value.
    """

    estimate: float
    low: float
    high: float
    degrees_of_freedom: float
    p: float


def nested_mean(values: FloatArray, levels: Sequence[IntArray], places: IntArray | None = None) -> Mean:
    """Return the mean of values that are nested in groups.

    Parameters
    ----------
    values
        Shape (n,), finite.
    levels
        Codes (n,) of the groups, outermost first; the innermost members need no code of their own.
    places
        Codes (n,) of a fixed factor that is the same in every group (the position of a sensor): the mean is
        then that of the places with equal weights. Left out where it cannot be told from the groups.

    Returns
    -------
    Mean
        Without a variance where there is one outermost group only.
    """
    outermost = np.unique(levels[0], return_inverse=True)[1]
    groups = int(outermost.max()) + 1
    fixed = _place_columns(places, outermost) if places is not None else np.ones((len(values), 1))
    if groups == 1 or len(values) - fixed.shape[1] < 1:
        return Mean(float(values.mean()), NAN, NAN, groups, len(values))
    if np.ptp(values) == 0:
        return Mean(float(values[0]), 0.0, float(groups - 1), groups, len(values))
    contrast = np.zeros(fixed.shape[1])
    contrast[0] = 1.0
    estimate, variance, freedom = _fitted(values, fixed, contrast, levels)
    return Mean(estimate, variance, min(freedom, groups - 1.0), groups, len(values))


def _place_columns(places: IntArray, groups: IntArray) -> FloatArray:
    """Mean and places coded to sum to zero; the mean alone where places leave nothing to tell groups by."""
    codes = np.unique(places, return_inverse=True)[1]
    number = int(codes.max()) + 1
    mean = np.ones((len(codes), 1))
    if len(codes) - (groups.max() + 1) - (number - 1) < 1:
        return mean
    own = np.eye(number)[codes]
    return np.hstack([mean, own[:, :-1] - own[:, -1:]])


def common_variance_difference(
    values: FloatArray, side: IntArray, levels: Sequence[IntArray], places: IntArray | None = None
) -> Comparison:
    """Return second minus first mean where both sides are taken to spread alike (one fit of both).

    Parameters
    ----------
    values, levels, places
        As in :func:`nested_mean`; groups belong to one side each.
    side
        Shape (n,), 0 or 1.

    Returns
    -------
    Comparison
        With Satterthwaite's degrees of freedom (equal to those of Kenward and Roger in balanced designs).
    """
    outermost = np.unique(np.column_stack([side, levels[0]]), axis=0, return_inverse=True)[1].ravel()
    base = np.ones((len(values), 1)) if places is None else _place_columns(places, outermost)
    fixed = np.column_stack([base, side.astype(float)])
    contrast = np.zeros(fixed.shape[1])
    contrast[-1] = 1.0
    estimate, variance, freedom = _fitted(values, fixed, contrast, [outermost, *levels[1:]])
    return _by_student(estimate, math.sqrt(variance), min(freedom, outermost.max() - 1.0))


def _fitted(
    values: FloatArray, fixed: FloatArray, contrast: FloatArray, levels: Sequence[IntArray]
) -> tuple[float, float, float]:
    """Estimate, variance and degrees of freedom of a contrast of the fixed part."""
    names = [f"level {number}" for number, _ in enumerate(levels)]
    one = np.ones((len(values), 1))
    # a level whose groups hold one value each is the residual itself
    inner = [
        (name, codes)
        for name, codes in zip(names, levels, strict=True)
        if len(np.unique(codes)) < len(values)
    ]
    scale = float(np.std(values)) or 1.0
    model = NestedModel(
        response=(values - values.mean()) / scale,
        fixed=fixed,
        fixed_names=tuple(f"column {k}" for k in range(fixed.shape[1])),
        levels=tuple(inner),
        terms=tuple(RandomTerm(name, name, one) for name, _ in inner),
    )
    if not inner:
        return _least_squares(values, fixed, contrast)
    fit = fit_nested_model(model)
    variance, freedom = satterthwaite(fit, contrast)
    centre = values.mean() * (1.0 if contrast[0] else 0.0)
    return float(contrast @ fit.coefficients) * scale + centre, variance * scale**2, freedom


def _least_squares(values: FloatArray, fixed: FloatArray, contrast: FloatArray) -> tuple[float, float, float]:
    """The same where every group holds one value: there are no levels to tell apart."""
    inverse = np.linalg.inv(fixed.T @ fixed)
    coefficients = inverse @ fixed.T @ values
    freedom = len(values) - fixed.shape[1]
    rest = values - fixed @ coefficients
    variance = float(rest @ rest) / freedom * float(contrast @ inverse @ contrast)
    return float(contrast @ coefficients), variance, float(freedom)


def difference_of_means(first: Mean, second: Mean) -> Comparison:
    """Return second minus first with its interval.

    Source: Welch, Biometrika 34 (1947) 28; Satterthwaite, Biometrics Bulletin 2 (1946) 110.
    """
    freedom = joint_freedom((first.variance, second.variance), first, second)
    return _by_student(second.estimate - first.estimate, math.sqrt(first.variance + second.variance), freedom)


def joint_freedom(parts: tuple[float, float], first: Mean, second: Mean) -> float:
    """Return Welch's degrees of freedom of the sum of two variances, *parts* of *first* and *second*."""
    total = sum(parts)
    if not total > 0:
        return min(first.degrees_of_freedom, second.degrees_of_freedom)
    own = (first.degrees_of_freedom, second.degrees_of_freedom)
    return total**2 / sum(part**2 / freedom for part, freedom in zip(parts, own, strict=True))


def _by_student(estimate: float, standard_error: float, freedom: float) -> Comparison:
    if not freedom > 0:
        return Comparison(estimate, NAN, NAN, NAN, NAN)
    reach = float(stats.t.ppf((1 + LEVEL) / 2, freedom)) * standard_error
    p = (
        float(2 * stats.t.sf(abs(estimate) / standard_error, freedom))
        if standard_error > 0
        else float(estimate == 0)
    )
    return Comparison(estimate, estimate - reach, estimate + reach, freedom, p)


def ratio_of_means(first: Mean, second: Mean) -> Comparison:
    """Return second over first with Fieller's interval: all ratios ρ with (b − ρa)² ≤ t² (V_b + ρ² V_a).

    Limits are infinite where the first mean is not told from zero at this level (the set is then unbounded).

    Source: Fieller, J. Roy. Statist. Soc. B 16 (1954) 175, with Welch's degrees of freedom at the estimate.
    """
    a, b = first.estimate, second.estimate
    if a == 0:
        return Comparison(NAN, NAN, NAN, NAN, NAN)
    ratio = b / a
    freedom = joint_freedom((ratio**2 * first.variance, second.variance), first, second)
    if not freedom > 0:
        return Comparison(ratio, NAN, NAN, NAN, NAN)
    square = float(stats.t.ppf((1 + LEVEL) / 2, freedom)) ** 2
    leading = a * a - square * first.variance
    root = (a * b) ** 2 - leading * (b * b - square * second.variance)
    p = difference_of_means(first, second).p
    if leading <= 0 or root < 0:
        return Comparison(ratio, -math.inf, math.inf, freedom, p)
    reach = math.sqrt(root)
    return Comparison(ratio, (a * b - reach) / leading, (a * b + reach) / leading, freedom, p)
