"""Ellipses of adjusted nodes: standard, and of 95 %, 2.45 times as large (JCGM 102:2011, 6.5.2)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import stats

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class StandardEllipses:
    """Standard ellipses of n points, shape (n,) each; NaN where the covariance is.

    Semi-axes are in the unit of the points, the angle is that of the major one from +x, in rad.
    """

    semi_major: FloatArray
    semi_minor: FloatArray
    angle: FloatArray


def standard_ellipses(covariance: FloatArray) -> StandardEllipses:
    """Return the standard ellipses of points from their covariance (2n, 2n)."""
    count = len(covariance) // 2
    blocks = covariance.reshape(count, 2, count, 2)[np.arange(count), :, np.arange(count), :]
    xx, yy, xy = blocks[:, 0, 0], blocks[:, 1, 1], blocks[:, 0, 1]
    middle, radius = (xx + yy) / 2.0, np.hypot((xx - yy) / 2.0, xy)
    return StandardEllipses(
        np.sqrt(np.maximum(middle + radius, 0.0)),
        np.sqrt(np.maximum(middle - radius, 0.0)),
        0.5 * np.arctan2(2.0 * xy, xx - yy),
    )


def ellipse_factor(confidence: float = 0.95, degrees_of_freedom: float = float("inf")) -> float:
    """Return what a standard ellipse is multiplied by to hold *confidence*.

    Parameters
    ----------
    confidence
        Between 0 and 1.
    degrees_of_freedom
        Of an estimated σ0, √(2 F); infinite for a known covariance, √χ² of two degrees of freedom.
    """
    if np.isinf(degrees_of_freedom):
        return float(np.sqrt(stats.chi2.ppf(confidence, 2)))
    return float(np.sqrt(2.0 * stats.f.ppf(confidence, 2, degrees_of_freedom)))
