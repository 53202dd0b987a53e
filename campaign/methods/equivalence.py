"""Equivalence within a margin by two one-sided tests.

Absence of a significant difference shows nothing. Two figures are equivalent within a margin when it is
rejected that they differ by more than it, upwards and downwards, each at 5 %; that is so when the 90 %
interval lies within the margin.

Source: Schuirmann, J. Pharmacokin. Biopharm. 15 (1987) 657; of a ratio of means, Sasabuchi, Biometrika 67
(1980) 429.
"""

from __future__ import annotations

import math

from scipy import stats

from campaign.methods.mean_comparison import Mean, difference_of_means, joint_freedom
from campaign.methods.variance_ratios import VarianceInterval

NORMAL_975 = float(stats.norm.ppf(0.975))


def equivalence_of_difference(first: Mean, second: Mean, margin: float) -> float:
    """Return p of the hypothesis that two means differ by *margin* (> 0, in their unit) or more."""
    found = difference_of_means(first, second)
    spread = math.sqrt(first.variance + second.variance)
    room = margin - abs(found.estimate)
    if spread == 0:
        return float(room <= 0)
    return float(stats.t.sf(room / spread, found.degrees_of_freedom))


def equivalence_of_ratio(first: Mean, second: Mean, margin: float) -> float:
    """Return p of the hypothesis that the ratio lies outside 1/(1 + *margin*) to 1 + *margin*.

    Both means are taken as positive or both as negative; where they differ in sign the ratio is no share and
    p is 1.
    """
    a, b = first.estimate, second.estimate
    if not a * b > 0:
        return 1.0
    a, b = abs(a), abs(b)
    low, high = 1.0 / (1.0 + margin), 1.0 + margin
    return max(_beyond(b - low * a, low, first, second), _beyond(high * a - b, high, first, second))


def _beyond(room: float, ratio: float, first: Mean, second: Mean) -> float:
    parts = (ratio**2 * first.variance, second.variance)
    spread = math.sqrt(sum(parts))
    if spread == 0:
        return float(room <= 0)
    return float(stats.t.sf(room / spread, joint_freedom(parts, first, second)))


def difference_of_spreads(first: VarianceInterval, second: VarianceInterval) -> float:
    """Return p of the hypothesis that two independent variances are equal, from their 95 % intervals.

    The level at which the interval of their ratio (method of variance estimates recovery) would just reach
    one, distances to limits taken as proportional to the normal quantile: p is below 0.05 exactly when the
    95 % interval excludes one, and errs upwards far from there. NaN where limits are not known.
    """
    if not (first.known and second.known):
        return math.nan
    larger, smaller = (first, second) if first.estimate >= second.estimate else (second, first)
    return min(1.0, 2.0 * _level(larger, smaller, 1.0))


def equivalence_of_spreads(first: VarianceInterval, second: VarianceInterval, margin: float) -> float:
    """Return p of the hypothesis that the ratio of two SDs lies outside 1/(1 + *margin*) to 1 + *margin*."""
    if not (first.known and second.known):
        return math.nan
    square = (1.0 + margin) ** 2
    return max(_level(first, second, 1.0 / square), _level(second, first, 1.0 / square))


def _level(larger: VarianceInterval, smaller: VarianceInterval, factor: float) -> float:
    """One-sided p of: *larger* is at most *factor* times *smaller*."""
    room = larger.estimate - factor * smaller.estimate
    below = larger.estimate - larger.low
    above = factor * (smaller.high - smaller.estimate)
    reach = math.hypot(below, above)
    if not math.isfinite(reach) or reach == 0:
        return 0.5 if not math.isfinite(reach) else float(room <= 0)
    return float(stats.norm.sf(NORMAL_975 * room / reach))
