"""Linearity of a calibration curve by its four usual definitions, in per cent of full-scale output.

Definitions as in ISA-51.1 (process instrumentation terminology): the largest deviation of the curve from a
straight line that is the least-squares line, the terminal line (through both end points), the zero-based line
(through the first point, as close as possible) or the independent line (as close as possible).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Linearity:
    """Largest deviation from each line, in per cent of full-scale output."""

    least_squares: float
    terminal: float
    zero_based: float
    independent: float


def linearity(x: FloatArray, y: FloatArray, full_scale_output: float) -> Linearity:
    """Return the linearity of a curve by the four definitions.

    Parameters
    ----------
    x, y
        Shape (levels,): reference and mean signal of each level, at least 3 levels of distinct x; where both
        branches were run, the mean over directions at each level.
    full_scale_output
        In the unit of y: usually |slope| times the rated range.
    """
    order = np.argsort(x, kind="stable")
    x, y = x[order], y[order]
    deviations = np.array(
        [
            _largest_about_least_squares(x, y),
            _largest_about_terminal(x, y),
            _smallest_through_first(x, y),
            _smallest_of_all(x, y),
        ]
    )
    percent = (100.0 * deviations / abs(full_scale_output)).tolist()
    return Linearity(*percent)


def _largest_about_least_squares(x: FloatArray, y: FloatArray) -> float:
    dx = x - x.mean()
    slope = float(dx @ y) / float(dx @ dx)
    return float(np.max(np.abs(y - y.mean() - slope * dx)))


def _largest_about_terminal(x: FloatArray, y: FloatArray) -> float:
    slope = (y[-1] - y[0]) / (x[-1] - x[0])
    return float(np.max(np.abs(y - y[0] - slope * (x - x[0]))))


def _smallest_through_first(x: FloatArray, y: FloatArray) -> float:
    """Smallest largest deviation of lines through the first point.

    The largest deviation is convex and piecewise linear in the slope; its minimum lies where two deviations
    are equal and opposite, or where one is zero.
    """
    u, d = x[1:] - x[0], y[1:] - y[0]
    slopes = ((d[:, None] + d[None, :]) / (u[:, None] + u[None, :])).ravel()
    return float(np.min(np.max(np.abs(d[None, :] - slopes[:, None] * u[None, :]), axis=1)))


def _smallest_of_all(x: FloatArray, y: FloatArray) -> float:
    """Smallest largest deviation of all lines: half the vertical width of the narrowest strip.

    The width is convex and piecewise linear in the slope; its minimum lies at the slope of some pair of
    points.
    """
    i, j = np.triu_indices(len(x), 1)
    distinct = x[j] > x[i]
    slopes = (y[j] - y[i])[distinct] / (x[j] - x[i])[distinct]
    heights = y[None, :] - slopes[:, None] * (x - x.mean())[None, :]
    return float(np.min(np.ptp(heights, axis=1)) / 2.0)
