"""Tests of groups and members by unweighted means: quick, and exact where the design is balanced."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import stats

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

NAN = float("nan")


@dataclass(frozen=True)
class MeansTest:
    """F of a component with its degrees of freedom and p; NaN where the design has none."""

    statistic: float
    freedom: tuple[float, float]
    p: float


def test_members(values: FloatArray, groups: IntArray, error: FloatArray, error_freedom: float) -> MeansTest:
    """Test that the members of each group are alike.

    Parameters
    ----------
    values
        (n,): the mean of each member.
    groups
        (n,): code of its group.
    error
        (n,): variance of each mean.
    error_freedom
        Degrees of freedom of those variances, taken together.

    Returns
    -------
    MeansTest
        Mean square of members within groups over the mean variance of the means. Exact where all means have
        one variance (Searle, Casella & McCulloch, *Variance Components* (1992), 3.6).
    """
    codes = np.unique(groups, return_inverse=True)[1]
    freedom = len(values) - (codes.max(initial=-1) + 1)
    noise = float(np.mean(error)) if len(error) else NAN
    if freedom < 1 or not error_freedom > 0 or not noise > 0:
        return MeansTest(NAN, (float(max(freedom, 0)), error_freedom), NAN)
    return _test(_within(values, codes) / freedom, noise, float(freedom), error_freedom)


def test_groups(values: FloatArray, groups: IntArray) -> MeansTest:
    """Test that groups are alike, their members being the error.

    *values* and *groups* as in :func:`test_members`. The variance of the group means over that of members
    within groups divided by their harmonic number; exact where all groups are of one size.
    """
    codes = np.unique(groups, return_inverse=True)[1]
    number = int(codes.max(initial=-1)) + 1
    within = len(values) - number
    if number < 2 or within < 1:
        return MeansTest(NAN, (float(max(number - 1, 0)), float(max(within, 0))), NAN)
    sizes = np.bincount(codes)
    means = np.bincount(codes, values) / sizes
    noise = _within(values, codes) / within * float(np.mean(1.0 / sizes))
    return _test(float(np.var(means, ddof=1)), noise, float(number - 1), float(within))


test_members.__test__ = False  # type: ignore[attr-defined]  # these are no tests of pytest's
test_groups.__test__ = False  # type: ignore[attr-defined]


def _within(values: FloatArray, codes: IntArray) -> float:
    """Sum of squares about the group means."""
    means = np.bincount(codes, values) / np.bincount(codes)
    return float(np.sum((values - means[codes]) ** 2))


def _test(above: float, below: float, first: float, second: float) -> MeansTest:
    if not below > 0:
        return MeansTest(NAN, (first, second), NAN)
    statistic = above / below
    return MeansTest(statistic, (first, second), float(stats.f.sf(statistic, first, second)))
