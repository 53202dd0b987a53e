"""Is the noise inside runs even and independent? Nothing else carries a residual SD and its interval.

Module, sensor and total SDs are robust to what is wrong inside a run; the residual SD and the repetition SD
are not. So the noise that is left of a run after its own line and the sensor's own levels is looked at: its
SD by level and by sensor, and its autocorrelation from reading to reading. Taking off lines and levels ties
the rest together, so that the figures are compared with what the same steps make of independent, even, normal
noise (a Monte Carlo test: Barnard, J. Roy. Statist. Soc. B 25 (1963) 294; it is exact, since no figure
depends on the noise's SD).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import sparse

from campaign.methods.component_tests import RunTable

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

DRAWS = 499
"""Draws of even noise."""

_AT_ONCE = 1000
"""Readings to look at at once, with all draws."""

SIGNIFICANCE = 0.002
"""A figure counts where no draw is as large, if the effect is large as well."""

LEAST_RATIO, LEAST_AUTOCORRELATION = 1.3, 0.2
"""Effects that are large enough to withhold intervals: largest over smallest SD of levels or
of sensors (beyond what even noise shows), and lag-1 autocorrelation."""


@dataclass(frozen=True)
class NoiseCheck:
    """What the noise inside runs looks like.

    Attributes
    ----------
    by_level
        One row a level: level (code), count, sd.
    level_p, level_ratio
        Largest over smallest SD of a level, and the probability of one as large in even noise.
    sensor_p, sensor_ratio
        The same over sensors.
    level_excess, sensor_excess
        The ratios over their medians in even noise.
    autocorrelation, autocorrelation_error, autocorrelation_p
        Pooled lag-1 autocorrelation within runs in the order in which readings were made, less its mean in
        independent noise; its standard error, and the probability of one as far from zero.
    """

    by_level: pd.DataFrame
    level_p: float
    level_ratio: float
    level_excess: float
    sensor_p: float
    sensor_ratio: float
    sensor_excess: float
    autocorrelation: float
    autocorrelation_error: float
    autocorrelation_p: float

    @property
    def faults(self) -> tuple[str, ...]:
        """What is wrong with it: ``uneven over levels``, ``uneven over sensors``, ``autocorrelated``."""
        found = []
        if self.level_p <= SIGNIFICANCE and self.level_excess > LEAST_RATIO:
            found.append("uneven over levels")
        if self.sensor_p <= SIGNIFICANCE and self.sensor_excess > LEAST_RATIO:
            found.append("uneven over sensors")
        if self.autocorrelation_p <= SIGNIFICANCE and abs(self.autocorrelation) > LEAST_AUTOCORRELATION:
            found.append("autocorrelated")
        return tuple(found)


def check_noise(
    table: RunTable, order_in_run: IntArray, response: FloatArray, generator: np.random.Generator
) -> NoiseCheck:
    """Look at the noise inside runs.

    Parameters
    ----------
    table
        Runs and their units.
    order_in_run
        Shape (readings,), order of every reading in its run.
    response
        Shape (readings,), fixed part taken off.
    generator
        Source of the even noise that the figures are compared with.
    """
    sums = _all_sums(table, order_in_run[table.order], response, generator)
    level_sds, sensor_sds = (np.sqrt(part) for part in (sums.by_level, sums.by_sensor))
    level_p, level_ratio, level_excess = _compared(_spans(level_sds))
    sensor_p, sensor_ratio, sensor_excess = _compared(_spans(sensor_sds))
    lag = sums.products / np.where(sums.power > 0, sums.power, 1.0)
    lag = lag - lag[1:].mean()
    codes, counts = np.unique(table.level, return_counts=True)
    return NoiseCheck(
        by_level=pd.DataFrame({"level": codes, "count": counts, "sd": level_sds[:, 0]}),
        level_p=level_p,
        level_ratio=level_ratio,
        level_excess=level_excess,
        sensor_p=sensor_p,
        sensor_ratio=sensor_ratio,
        sensor_excess=sensor_excess,
        autocorrelation=float(lag[0]),
        autocorrelation_error=float(lag[1:].std()),
        autocorrelation_p=_compared(np.abs(lag))[0],
    )


def _spans(sds: FloatArray) -> FloatArray:
    """Largest over smallest SD of each column; 1 where some group has no noise at all."""
    smallest = sds.min(axis=0)
    return np.where(smallest > 0, sds.max(axis=0) / np.where(smallest > 0, smallest, 1.0), 1.0)


def _compared(figures: FloatArray) -> tuple[float, float, float]:
    """Monte Carlo p of the first figure among the others, the figure, and its ratio to their median."""
    first, drawn = float(figures[0]), figures[1:]
    p = (1 + int(np.sum(drawn >= first))) / (1 + len(drawn))
    middle = float(np.median(drawn))
    return p, first, first / middle if middle > 0 else 1.0


@dataclass
class _Sums:
    """Sums over the noise of the readings and of every draw.

    Attributes
    ----------
    by_level, by_sensor
        (groups, 1 + draws) mean squares.
    power, products
        (1 + draws,) sums of squares and of products of neighbours.
    """

    by_level: FloatArray
    by_sensor: FloatArray
    power: FloatArray
    products: FloatArray


def _all_sums(
    table: RunTable, order_in_run: IntArray, response: FloatArray, generator: np.random.Generator
) -> _Sums:
    """Draw even noise and add up, some whole sensors at a time: what is drawn is never there as a whole."""
    sensor = table.units["sensor"][table.run]
    names = np.unique(sensor, return_inverse=True)[1].ravel()
    levels = np.unique(table.level, return_inverse=True)[1].ravel()
    cell = np.unique(sensor * (int(table.cell.max()) + 1) + table.cell, return_inverse=True)[1].ravel()
    count = np.bincount(cell).astype(float)[cell]
    repeated = float(np.median(count)) > 1
    leverage = np.einsum("nd,nd->n", table.design, table.weights)
    kept = (1 - np.clip(leverage, 0, 1)) * (np.maximum(count - 1, 0) / count if repeated else 1.0)
    scale = np.sqrt(np.maximum(kept, 1e-9))
    sums = _Sums(
        np.zeros((int(levels.max()) + 1, 1 + DRAWS)),
        np.zeros((int(names.max()) + 1, 1 + DRAWS)),
        np.zeros(1 + DRAWS),
        np.zeros(1 + DRAWS),
    )
    for first, last in _parts(table.order, names):
        values = np.empty((last - first, 1 + DRAWS))
        values[:, 0] = response[first:last]
        values[:, 1:] = generator.standard_normal((last - first, DRAWS))
        rows = np.flatnonzero((table.order >= first) & (table.order < last))
        noise = _noise(table, rows, values[table.order[rows] - first], cell[rows] if repeated else None)
        _add_neighbours(sums, table.run[rows], order_in_run[rows], noise)
        noise /= scale[rows, np.newaxis]
        np.square(noise, out=noise)
        sums.by_level += _added(levels[rows], len(sums.by_level)) @ noise
        sums.by_sensor += _added(names[rows], len(sums.by_sensor)) @ noise
    sums.by_level /= np.bincount(levels)[:, np.newaxis]
    sums.by_sensor /= np.bincount(names)[:, np.newaxis]
    return sums


def _parts(order: IntArray, sensor: IntArray) -> list[tuple[int, int]]:
    """First and last + 1 of stretches of readings that hold whole sensors, of some :data:`_AT_ONCE`."""
    last = np.full(int(sensor.max()) + 1, -1, dtype=np.int64)
    np.maximum.at(last, sensor, order)
    reach = np.empty(len(order), dtype=np.int64)
    reach[order] = last[sensor]
    ends = np.flatnonzero(np.maximum.accumulate(reach) == np.arange(len(order))) + 1
    parts, first = [], 0
    for end in ends.tolist():
        if end - first >= _AT_ONCE or end == len(order):
            parts.append((first, end))
            first = end
    return parts


def _noise(table: RunTable, rows: IntArray, values: FloatArray, cell: IntArray | None) -> FloatArray:
    """What is left of whole runs after their lines and, where given, the means of the sensors' cells.

    `values` are those of the sorted readings *rows*; they are written over.
    """
    run = np.unique(table.run[rows], return_inverse=True)[1].ravel()
    runs = int(run.max()) + 1
    lines = [_added(run, runs, column) @ values for column in table.weights[rows].T]
    for column, line in zip(table.design[rows].T, lines, strict=True):
        values -= column[:, np.newaxis] * line[run]
    if cell is None:
        return values
    own = np.unique(cell, return_inverse=True)[1].ravel()
    count = np.bincount(own)
    means = _added(own, len(count)) @ values / count[:, np.newaxis]
    values -= means[own]
    return values


def _added(code: IntArray, groups: int, weights: FloatArray | None = None) -> sparse.csr_array:
    """The matrix that adds up the rows of every group."""
    ones = np.ones(len(code)) if weights is None else weights
    return sparse.csr_array((ones, (code, np.arange(len(code)))), shape=(groups, len(code)))


def _add_neighbours(sums: _Sums, run: IntArray, order_in_run: IntArray, noise: FloatArray) -> None:
    """Add Σ eᵢ² and Σ eᵢ eᵢ₊₁ within runs, in the order in which readings were made."""
    rows = np.lexsort((order_in_run, run))
    near = np.flatnonzero(run[rows[1:]] == run[rows[:-1]])
    sums.power += np.einsum("nk,nk->k", noise, noise)
    sums.products += np.einsum("nk,nk->k", noise[rows[near + 1]], noise[rows[near]])
