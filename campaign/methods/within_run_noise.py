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

from campaign.methods.component_tests import RunTable, group_means, group_sums, rest_of_runs, run_lines

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

DRAWS = 499
"""Draws of even noise."""

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
    even = generator.standard_normal((len(response), DRAWS))
    noise, scale = _noise(table, np.column_stack([response, even]))
    squares = (noise / scale) ** 2
    level_sds = np.sqrt(group_means_once(squares, table.level))
    sensor_sds = np.sqrt(group_means_once(squares, table.units["sensor"][table.run]))
    level_p, level_ratio, level_excess = _compared(_spans(level_sds))
    sensor_p, sensor_ratio, sensor_excess = _compared(_spans(sensor_sds))
    lag = _lag_one(table, order_in_run[table.order], noise)
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


def group_means_once(values: FloatArray, code: IntArray) -> FloatArray:
    """Return the mean of every group, sorted by code, shape (groups, columns)."""
    return group_sums(values, code) / np.unique(code, return_counts=True)[1][:, np.newaxis]


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


def _noise(table: RunTable, response: FloatArray) -> tuple[FloatArray, FloatArray]:
    """What is left of runs after their lines and the sensors' cell means, and what that shrinks it by."""
    rest = rest_of_runs(table, response, run_lines(table, response))
    cell = table.units["sensor"][table.run] * (int(table.cell.max()) + 1) + table.cell
    repeats = np.unique(cell, return_inverse=True, return_counts=True)
    count = repeats[2][repeats[1].ravel()].astype(float)
    repeated = float(np.median(count)) > 1
    centred = rest - group_means(rest, cell) if repeated else rest
    leverage = np.einsum("nd,nd->n", table.design, table.weights)
    kept = (1 - np.clip(leverage, 0, 1)) * (np.maximum(count - 1, 0) / count if repeated else 1.0)
    return centred, np.sqrt(np.maximum(kept, 1e-9))[:, np.newaxis]


def _lag_one(table: RunTable, order_in_run: IntArray, noise: FloatArray) -> FloatArray:
    """Pooled lag-1 autocorrelation within runs, Σ eᵢ eᵢ₊₁ / Σ eᵢ², of each column."""
    rows = np.lexsort((order_in_run, table.run))
    run, values = table.run[rows], noise[rows]
    near = (run[1:] == run[:-1])[:, np.newaxis]
    power = np.sum(values**2, axis=0)
    products = np.sum(values[1:] * values[:-1] * near, axis=0)
    return np.asarray(products / np.where(power > 0, power, 1.0))
