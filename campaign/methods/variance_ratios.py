"""Intervals of sums, shares and ratios of variances, from the intervals of the single variances.

The method of variance estimates recovery joins separate intervals without assuming that they are symmetric
(Zou & Donner, Statistics in Medicine 27 (2008) 1693; for ratios Donner & Zou, Statistical Methods in Medical
Research 21 (2012) 347). It takes the estimates as independent; estimates of neighbouring components are
slightly negatively correlated, which the coverage shown in ``benchmarks/coverage.csv`` includes.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import hypot, inf, isfinite, isnan, nan, sqrt


@dataclass(frozen=True)
class VarianceInterval:
    """An estimate of a variance, or of a combination, with its 95 % limits (NaN where not known)."""

    estimate: float
    low: float
    high: float

    @property
    def known(self) -> bool:
        """Whether the limits are known."""
        return not (isnan(self.low) or isnan(self.high))

    @property
    def root(self) -> tuple[float, float, float]:
        """Estimate and limits of the standard deviation."""
        return sqrt(self.estimate), sqrt(self.low), sqrt(self.high)


def sum_of(parts: Sequence[VarianceInterval]) -> VarianceInterval:
    """Return the interval of a sum of variances; of no variances, zero.

    Examples
    --------
    >>> sum_of([VarianceInterval(4.0, 1.0, 9.0), VarianceInterval(9.0, 5.0, 21.0)])
    VarianceInterval(estimate=13.0, low=8.0, high=26.0)
    """
    total = sum(part.estimate for part in parts)
    below = hypot(*(part.estimate - part.low for part in parts)) if parts else 0.0
    above = hypot(*(part.high - part.estimate for part in parts)) if parts else 0.0
    return VarianceInterval(total, max(total - below, 0.0), total + above)


def ratio_of(first: VarianceInterval, second: VarianceInterval) -> VarianceInterval:
    """Return the interval of a ratio of variances; without upper limit where the second may be zero."""
    if not (first.known and second.known):
        return VarianceInterval(first.estimate / second.estimate if second.estimate > 0 else inf, nan, nan)
    if second.estimate <= 0:
        return VarianceInterval(inf, 0.0, inf)
    return VarianceInterval(
        first.estimate / second.estimate,
        _ratio_limit(first.estimate, first.low, second.estimate, second.high, -1.0),
        _ratio_limit(first.estimate, first.high, second.estimate, second.low, 1.0),
    )


def _ratio_limit(a: float, a_limit: float, b: float, b_limit: float, side: float) -> float:
    """One limit of a/b; *side* is −1 for the lower one (least a, greatest b) and 1 for the upper one."""
    if b_limit <= 0:
        return inf
    if not isfinite(a_limit):
        return inf
    if not isfinite(b_limit):
        return 0.0
    leading = b_limit * (2 * b - b_limit)
    constant = a_limit * (2 * a - a_limit)
    if leading <= 0:
        return _steep_limit(a, a_limit, b, b_limit, side)
    root = sqrt(max((a * b) ** 2 - constant * leading, 0.0))
    return max((a * b + side * root) / leading, 0.0)


def _steep_limit(a: float, a_limit: float, b: float, b_limit: float, side: float) -> float:
    """The limit where the denominator's limit is more than twice its estimate: the other form of the root."""
    leading = b_limit * (2 * b - b_limit)
    constant = a_limit * (2 * a - a_limit)
    root = sqrt(max((a * b) ** 2 - constant * leading, 0.0))
    below = a * b - side * root
    return max(constant / below, 0.0) if below > 0 else inf


def share_of(part: VarianceInterval, others: Sequence[VarianceInterval]) -> VarianceInterval:
    """Return the interval of part/(part + others), between 0 and 1.

    The share rises with the ratio of the part to the sum of the others, so that its limits are those of that
    ratio.
    """
    rest = sum_of(others)
    total = part.estimate + rest.estimate
    estimate = part.estimate / total if total > 0 else 0.0
    if not (part.known and rest.known):
        return VarianceInterval(estimate, nan, nan)
    if rest.high <= 0:
        return VarianceInterval(1.0, 1.0, 1.0)
    if part.high <= 0:
        return VarianceInterval(0.0, 0.0, 0.0)
    ratio = ratio_of(part, rest)
    return VarianceInterval(estimate, _of_ratio(ratio.low), _of_ratio(ratio.high))


def _of_ratio(ratio: float) -> float:
    return ratio / (1.0 + ratio) if isfinite(ratio) else 1.0
