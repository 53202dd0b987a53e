"""Repeatability: the spread of readings at one level, approached from one side, over runs.

The standard deviation is that of ISO 5725-2 (one operator, stand and mounting, as far as the runs are
such); the range is the bench habit (largest minus smallest).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


@dataclass(frozen=True)
class Repeatability:
    """Spread of each cell (level and direction): all of shape (cells,), signal units; SD is NaN with one run.

    ``pooled_sd`` pools the variances of all cells by their degrees of freedom (NaN where nothing is
    repeated).
    """

    counts: IntArray
    means: FloatArray
    standard_deviations: FloatArray
    ranges: FloatArray
    pooled_sd: float
    degrees_of_freedom: int


def repeatability(signals: FloatArray, cell: IntArray, cells: int) -> Repeatability:
    """Return the spread of readings in each cell.

    ``signals`` and ``cell`` (codes from 0 to cells − 1, each present) have shape (readings,), one reading a
    run.
    """
    counts = np.bincount(cell, minlength=cells)
    means = np.bincount(cell, signals, minlength=cells) / counts
    squares = np.bincount(cell, (signals - means[cell]) ** 2, minlength=cells)
    deviations = np.sqrt(np.divide(squares, counts - 1, out=np.full(cells, np.nan), where=counts > 1))
    order = np.lexsort((signals, cell))
    first = np.concatenate([[0], np.cumsum(counts)[:-1]])
    ordered = signals[order]
    ranges = ordered[first + counts - 1] - ordered[first]
    degrees = int(np.sum(counts - 1))
    pooled = float(np.sqrt(squares.sum() / degrees)) if degrees > 0 else float("nan")
    return Repeatability(counts.astype(np.int64), means, deviations, ranges, pooled, degrees)
