"""A variance that must be added to a known covariance for differences to be as large as they are.

d ~ N(0, V + τ² I) with V known in full: the likelihood of τ² in the eigenvectors of V, its maximum, the
interval that the profile gives (χ² of one degree of freedom) and the test of τ² = 0 (50:50 mixture of χ²₀ and
χ²₁, for a variance on its boundary: S. G. Self & K.-Y. Liang, JASA 82 (1987) 605–610, from memory). Nothing
is fitted but τ², so restricted and full likelihood are one.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import optimize, stats

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class ExtraVariance:
    """Extra SD τ with its 95 % profile interval, p of τ = 0, and the number of differences behind it.

    ``low`` is 0 where the interval reaches it.
    """

    sd: float
    low: float
    high: float
    p: float
    count: int


def extra_variance(differences: FloatArray, covariance: FloatArray) -> ExtraVariance:
    """Estimate the extra SD of *differences* (N,) about zero beyond *covariance* (N, N)."""
    values, vectors = np.linalg.eigh(covariance)
    spread, squares = np.maximum(values, 0.0), (vectors.T @ differences) ** 2
    floor = 1e-9 * (float(spread.mean()) + float(squares.mean()))
    spread = np.maximum(spread, floor)
    top = max(float(squares.sum()), float(spread.max()))

    def deviance(variance: float) -> float:
        return float(np.sum(np.log(spread + variance) + squares / (spread + variance)))

    variance = _least(deviance, floor, top)
    least = deviance(variance)
    reach = least + float(stats.chi2.ppf(0.95, 1))
    statistic = max(deviance(0.0) - least, 0.0)
    low = 0.0 if deviance(0.0) <= reach else _crossing(deviance, reach, 0.0, variance)
    far = max(variance, floor)
    while deviance(far) <= reach:
        far *= 2.0
    high = _crossing(deviance, reach, variance, far)
    p = float(0.5 * stats.chi2.sf(statistic, 1)) if statistic > 0 else 1.0
    return ExtraVariance(float(np.sqrt(variance)), float(np.sqrt(low)), float(np.sqrt(high)), p, len(squares))


def _least(deviance: Callable[[float], float], floor: float, top: float) -> float:
    """The variance of least deviance: the best of a grid of logarithms, refined; 0 where that is no worse."""
    grid = np.linspace(np.log(floor), np.log(top), 60)
    at = int(np.argmin([deviance(float(np.exp(g))) for g in grid]))
    bounds = (grid[max(at - 1, 0)], grid[min(at + 1, len(grid) - 1)])
    found = optimize.minimize_scalar(
        lambda g: deviance(float(np.exp(g))), bounds=bounds, method="bounded", options={"xatol": 1e-10}
    )
    variance = float(np.exp(found.x))
    return variance if deviance(variance) < deviance(0.0) - 1e-9 else 0.0


def _crossing(deviance: Callable[[float], float], level: float, low: float, high: float) -> float:
    return float(optimize.brentq(lambda v: deviance(v) - level, low, high, xtol=1e-15, rtol=1e-12))
