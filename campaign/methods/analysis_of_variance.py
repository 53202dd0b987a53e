"""Type-1 analysis of variance of a nested classification, balanced or not.

The fixed part is fitted first, then level after level from the outermost inwards; the sum of squares of a
level is what the residuals lose by its units. Equating mean squares with their expectations gives unbiased
estimates of the components, which may be negative. It is the estimate to fall back on where the likelihood
cannot be maximised, and the exact one for F tests and modified-large-sample intervals where the design is
balanced.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from campaign.methods.modified_large_sample import MeanSquares

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

ERROR = "error"
"""Name of the innermost row: readings within the innermost units."""


@dataclass(frozen=True)
class FTest:
    """F of a level against the next inner one, with its probability and degrees of freedom."""

    statistic: float
    p: float
    degrees_of_freedom: tuple[float, float]


@dataclass(frozen=True)
class ComponentInterval:
    """Estimate and limits of a variance (or of a sum of variances); the lower limit is not below zero."""

    estimate: float
    low: float
    high: float


@dataclass(frozen=True)
class NestedAnalysisOfVariance:
    """The table.

    Attributes
    ----------
    names
        Levels from the outermost inwards, then 'error'.
    sums_of_squares, degrees_of_freedom
        One a name.
    expectations
        (rows, rows): expected mean square = expectations @ variances.
    variances
        Estimates of the components, one a name; they may be negative.
    balanced
        All units of a level have the same number of readings and every fixed effect lies in one row, so that
        F tests are exact.
    """

    names: tuple[str, ...]
    sums_of_squares: FloatArray
    degrees_of_freedom: FloatArray
    expectations: FloatArray
    variances: FloatArray
    balanced: bool

    @property
    def mean_squares(self) -> FloatArray:
        """Sums of squares over degrees of freedom."""
        return np.asarray(self.sums_of_squares / self.degrees_of_freedom)

    @property
    def total(self) -> float:
        """Sum of the components, negative ones counted as zero."""
        return float(np.maximum(self.variances, 0.0).sum())

    def variance(self, name: str) -> float:
        """Component of a level, or of 'error'."""
        return float(self.variances[self.names.index(name)])

    def test(self, name: str) -> FTest:
        """F test that the component of a level is zero, against the next inner row; exact where balanced."""
        k = self.names.index(name)
        statistic = float(self.mean_squares[k] / self.mean_squares[k + 1])
        freedom = float(self.degrees_of_freedom[k]), float(self.degrees_of_freedom[k + 1])
        return FTest(statistic, float(stats.f.sf(statistic, *freedom)), freedom)

    def interval(self, name: str, level: float = 0.95) -> ComponentInterval:
        """Modified-large-sample interval of a component; that of 'error' is the exact χ² interval.

        Raises
        ------
        ValueError
            The design is not balanced.

        References
        ----------
        As in :mod:`campaign.methods.modified_large_sample`.
        """
        return self._limits([name], level)

    def total_interval(self, level: float = 0.95) -> ComponentInterval:
        """Interval of the sum of all components, as a sum of mean squares with positive weights.

        Raises
        ------
        ValueError
            The design is not balanced.

        References
        ----------
        As in :mod:`campaign.methods.modified_large_sample`.
        """
        return self._limits(self.names, level)

    def _limits(self, names: Sequence[str], level: float) -> ComponentInterval:
        """Interval of the sum of the components *names*."""
        if not self.balanced:
            raise ValueError("modified-large-sample intervals need a balanced design")
        table = MeanSquares(self.names, self.mean_squares, self.degrees_of_freedom, self.expectations)
        found = table.limits(names, level)
        return ComponentInterval(float(found.estimate), float(found.low), float(found.high))


def nested_analysis_of_variance(
    response: FloatArray,
    levels: Sequence[tuple[str, IntArray]],
    fixed: FloatArray | None = None,
) -> NestedAnalysisOfVariance:
    """Type-1 analysis of variance of a nested classification.

    Parameters
    ----------
    response
        (N,) readings, or one number a unit (the value of its line at some place).
    levels
        (name, codes (N,)) from the outermost to the innermost level; a code need only be unique within its
        outer unit.
    fixed
        (N, p) fixed columns, fitted before all levels; None: a common mean.

    Raises
    ------
    ValueError
        A level has no degrees of freedom of its own.

    References
    ----------
    Searle, Casella & McCulloch (1992), Variance Components, chapters 3 and 5.
    """
    y = np.asarray(response, dtype=float)
    x = np.ones((len(y), 1)) if fixed is None else np.asarray(fixed, dtype=float)
    stages = [_Stage.of(y, x, np.zeros(len(y), dtype=np.int64), absorbed=False)]
    unit = np.zeros(len(y), dtype=np.int64)
    units = []
    for _, codes in levels:
        unit = np.unique(np.column_stack([unit, codes]), axis=0, return_inverse=True)[1].ravel()
        units.append(unit)
        stages.append(_Stage.of(y, x, unit, absorbed=True))
    names = (*(name for name, _ in levels), ERROR)
    sums = np.array([*(a.left - b.left for a, b in pairwise(stages)), stages[-1].left])
    freedom = np.array([*(b.rank - a.rank for a, b in pairwise(stages)), len(y) - stages[-1].rank])
    for name, degrees in zip(names, freedom, strict=True):
        if degrees < 1:
            raise ValueError(f"no degrees of freedom are left for '{name}'")
    seen = np.array([[stage.seen_of(other) for other in units] for stage in stages])
    expectations = np.zeros((len(names), len(names)))
    expectations[:-1, :-1] = np.triu(seen[1:] - seen[:-1]) / freedom[:-1, None]
    expectations[:, -1] = 1.0
    squares = sums / freedom
    return NestedAnalysisOfVariance(
        names=names,
        sums_of_squares=sums,
        degrees_of_freedom=freedom.astype(float),
        expectations=expectations,
        variances=np.linalg.solve(expectations, squares),
        balanced=all(len(np.unique(np.bincount(unit))) == 1 for unit in units)
        and all(inner.splits(outer) for outer, inner in pairwise(stages)),
    )


@dataclass(frozen=True)
class _Stage:
    """Fixed part and one level's units fitted: what is left, the rank, and the projection in two parts."""

    unit: IntArray
    absorbed: bool
    basis: FloatArray
    left: float
    rank: int

    @staticmethod
    def of(y: FloatArray, x: FloatArray, unit: IntArray, *, absorbed: bool) -> _Stage:
        within_x = x - _unit_means(x, unit) if absorbed else x
        within_y = y - _unit_means(y[:, None], unit)[:, 0] if absorbed else y
        left_vectors, sizes, _ = np.linalg.svd(within_x, full_matrices=False)
        scale = np.sqrt((x**2).sum(axis=0)).max()
        basis = left_vectors[:, sizes > 1e-9 * scale]
        rest = within_y - basis @ (basis.T @ within_y)
        units = int(unit.max()) + 1 if absorbed else 0
        return _Stage(unit, absorbed, basis, float(rest @ rest), units + basis.shape[1])

    def splits(self, outer: _Stage) -> bool:
        """Whether what the fixed part explains within outer units is either between or within these units."""
        between = _unit_means(outer.basis, self.unit)
        rank = int((np.linalg.svd(between, compute_uv=False) > 1e-9).sum()) if between.size else 0
        return bool(outer.basis.shape[1] == rank + self.basis.shape[1])

    def seen_of(self, other: IntArray) -> float:
        """Trace of Z'PZ: how much of the units `other` this stage has fitted."""
        traced = sum(float((np.bincount(other, weights=column) ** 2).sum()) for column in self.basis.T)
        if self.absorbed:
            pairs, counts = np.unique(np.column_stack([self.unit, other]), axis=0, return_counts=True)
            traced += float((counts**2 / np.bincount(self.unit)[pairs[:, 0]]).sum())
        return traced


def _unit_means(columns: FloatArray, unit: IntArray) -> FloatArray:
    counts = np.bincount(unit)
    means = [(np.bincount(unit, weights=column) / counts)[unit] for column in columns.T]
    return np.array(means).T.reshape(columns.shape)
