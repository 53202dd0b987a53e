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
    """Spread of each cell (level and direction), shape (cells,), in signal units.

    Attributes
    ----------
    counts
        Runs in the cell.
    degrees_of_freedom
        Of its standard deviation: runs less mountings.
    standard_deviations
        Over the runs of one mounting, pooled over mountings; NaN where no mounting repeats the cell.
    ranges
        Largest less smallest within one mounting, the largest of all mountings; NaN likewise.
    pooled_sd, pooled_degrees
        Variances of all cells pooled by their degrees of freedom; the SD is NaN where nothing is repeated.
    """

    counts: IntArray
    degrees_of_freedom: IntArray
    standard_deviations: FloatArray
    ranges: FloatArray
    pooled_sd: float
    pooled_degrees: int


def repeatability(signals: FloatArray, cell: IntArray, mounting: IntArray) -> Repeatability:
    """Return the spread of readings in each cell.

    Parameters
    ----------
    signals
        Shape (readings,): one reading a run and cell.
    cell
        Shape (readings,): codes from 0, each present.
    mounting
        Shape (readings,): code of the mounting; repeatability is the spread within one.
    """
    cells = int(cell.max()) + 1
    group = np.unique(cell * (int(mounting.max()) + 1) + mounting, return_inverse=True)[1]
    counts = np.bincount(group)
    means = np.bincount(group, signals) / counts
    order = np.lexsort((signals, group))
    first = np.concatenate([[0], np.cumsum(counts)[:-1]])
    of_group = cell[order][first]
    ordered = signals[order]
    ranges = np.full(cells, np.nan)
    repeated = counts > 1
    np.fmax.at(ranges, of_group[repeated], (ordered[first + counts - 1] - ordered[first])[repeated])
    squares = np.bincount(cell, (signals - means[group]) ** 2, minlength=cells)
    degrees = np.bincount(of_group, counts - 1, minlength=cells).astype(np.int64)
    variances = np.divide(squares, degrees, out=np.full(cells, np.nan), where=degrees > 0)
    every = int(degrees.sum())
    return Repeatability(
        np.bincount(cell, minlength=cells).astype(np.int64),
        degrees,
        np.sqrt(variances),
        ranges,
        float(np.sqrt(squares.sum() / every)) if every > 0 else float("nan"),
        every,
    )
