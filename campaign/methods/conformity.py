"""Judging a figure by a limit with the figure's uncertainty (JCGM 106:2012).

All limits here are upper limits of figures that count as better the smaller they are.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import special

FloatArray = npt.NDArray[np.float64]
Verdict = Literal["met", "not met", "not decided"]

DECIDED_FROM = 0.95
"""Probability of conformity from which a limit counts as met; not met from one minus this downwards."""


@dataclass(frozen=True)
class Prediction:
    """What a new member of a nested population is expected to show.

    Attributes
    ----------
    estimate
        Mean of the group means, in the unit of the values.
    standard_deviation
        Standard deviation of a new member of a new group about the estimate, the mean's uncertainty included.
    degrees_of_freedom
        Satterthwaite's, at least 1.
    groups
        Number of groups that carried it; with one group a new group is not covered.
    """

    estimate: float
    standard_deviation: float
    degrees_of_freedom: float
    groups: int


def conformity_of_estimate(
    estimate: float, standard_uncertainty: float, degrees_of_freedom: float, limit: float
) -> float:
    """Return the probability that a quantity is at most *limit*, given its estimate.

    Arguments are in one unit; *degrees_of_freedom* may be infinite (then the normal distribution is used).
    NaN where the estimate or its uncertainty is unknown.

    Source: JCGM 106:2012, 7.2 (one-sided upper tolerance limit), with the scaled and shifted t-distribution
    of JCGM 101:2008, 6.4.9 in place of the normal one.
    """
    if not (math.isfinite(estimate) and standard_uncertainty > 0 and degrees_of_freedom > 0):
        return math.nan
    return float(special.stdtr(degrees_of_freedom, (limit - estimate) / standard_uncertainty))


def conformity_of_spread(spread: float, degrees_of_freedom: float, limit: float) -> float:
    """Return the probability that a standard deviation (or a multiple of one) is at most *limit*.

    The variance follows ν s²/χ²(ν), the posterior of a normal sample under the usual prior; *spread*
    and *limit* are in one unit. NaN where unknown.

    Source: JCGM 106:2012, 7.1, with the distribution behind GUM E.4.3.
    """
    if not (math.isfinite(spread) and spread >= 0 and degrees_of_freedom > 0 and limit > 0):
        return math.nan
    return float(special.chdtrc(degrees_of_freedom, degrees_of_freedom * (spread / limit) ** 2))


def spread_interval(spread: float, degrees_of_freedom: float, level: float = 0.95) -> tuple[float, float]:
    """Return the χ² interval of a standard deviation with *degrees_of_freedom*; NaN where there are none.

    Source: ISO 2854:1976, table on estimation of a variance.
    """
    if not (math.isfinite(spread) and degrees_of_freedom > 0):
        return (math.nan, math.nan)
    tails = 2.0 * special.gammaincinv(degrees_of_freedom / 2.0, [(1 + level) / 2, (1 - level) / 2])
    low, high = spread * np.sqrt(degrees_of_freedom / tails)
    return float(low), float(high)


def verdict_of(probability: float) -> Verdict:
    """Return the verdict for a probability of conformity; unknown probabilities decide nothing."""
    if probability >= DECIDED_FROM:
        return "met"
    if probability <= 1 - DECIDED_FROM:
        return "not met"
    return "not decided"


def predict_new_member(values: FloatArray, groups: npt.NDArray[np.int64]) -> Prediction | None:
    """Predict the value of a new member of a new group from members nested in groups.

    Parameters
    ----------
    values
        Shape (n,), finite.
    groups
        Shape (n,), code of the group (module) of each value (sensor).

    Returns
    -------
    Prediction or None
        From the one-way random analysis of variance: the new member's variance is
        MS_between (1 + 1/k)/n₀ + MS_within (1 − 1/n₀) for k groups of n₀ members (harmonic mean).
        With one member a group the groups alone carry it; with one group its members do. ``None`` below two
        values.

    Source: Searle, Casella & McCulloch, *Variance Components* (1992), ch. 3; Satterthwaite (1946).
    """
    if values.size < 2:
        return None
    codes = np.unique(groups, return_inverse=True)[1]
    sizes = np.bincount(codes).astype(float)
    means = np.bincount(codes, weights=values) / sizes
    k = sizes.size
    within_df = values.size - k
    within = float(np.sum((values - means[codes]) ** 2) / within_df) if within_df else 0.0
    if k == 1:
        return Prediction(float(means[0]), math.sqrt(within * (1 + 1 / values.size)), float(within_df), 1)
    harmonic = k / float(np.sum(1 / sizes))
    # the variance of group means is used whole: it estimates σ²_between + σ²_within/n₀ whatever the sizes
    parts = np.array([np.var(means, ddof=1) * (1 + 1 / k), within * (1 - 1 / harmonic)])
    freedom = np.array([k - 1, max(within_df, 1)])
    total = float(parts.sum())
    satterthwaite = total**2 / float(np.sum(parts**2 / freedom)) if total > 0 else float(k - 1)
    return Prediction(float(means.mean()), math.sqrt(total), satterthwaite, k)
