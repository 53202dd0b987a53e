"""Readings gathered by direction, level and run: what repeatability, hysteresis and linearity compare."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.analyses.used_readings import FALLING, RISING, UsedReadings

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


@dataclass(frozen=True)
class LevelCells:
    """One entry a direction, level and run, sorted so; all of shape (entries,).

    ``signal`` is the mean of the readings there, moved along the sensor's line from the x that was reached
    to the nominal level. ``cell`` numbers direction and level from 0.
    """

    direction: IntArray
    level: FloatArray
    run: IntArray
    mounting: IntArray
    signal: FloatArray
    cell: IntArray

    @property
    def cells(self) -> int:
        """Number of cells."""
        return int(self.cell[-1]) + 1 if len(self.cell) else 0

    def mean_curve(self) -> tuple[FloatArray, FloatArray]:
        """Levels in order and signals there: mean over runs, then over directions."""
        counts = np.bincount(self.cell)
        means = np.bincount(self.cell, self.signal) / counts
        first = np.concatenate([[0], np.cumsum(counts)[:-1]])
        levels, place = np.unique(self.level[first], return_inverse=True)
        return levels, np.bincount(place, means) / np.bincount(place)

    def differences(self) -> tuple[FloatArray, FloatArray]:
        """Levels visited both ways in some run, and rising minus falling there, shape (runs, levels)."""
        levels, place = np.unique(self.level, return_inverse=True)
        runs, row = np.unique(self.run, return_inverse=True)
        both = np.full((2, len(runs), len(levels)), np.nan)
        sided = self.direction <= FALLING
        both[self.direction[sided], row[sided], place[sided]] = self.signal[sided]
        difference = both[RISING] - both[FALLING]
        known = np.isfinite(difference)
        return levels[known.any(axis=0)], difference[known.any(axis=1)][:, known.any(axis=0)]


def level_cells(used: UsedReadings, rows: IntArray, slope: float) -> LevelCells:
    """Gather the readings of one sensor at the places *rows*; those without a level are left out."""
    x, signal, level = used.x[rows], used.signal[rows], used.level[rows]
    direction, run = used.direction[rows], used.run[rows]
    known = np.isfinite(level)
    levels, place = np.unique(level[known], return_inverse=True)
    runs, row = np.unique(run[known], return_inverse=True)
    key = (direction[known] * len(levels) + place) * len(runs) + row
    keys, entry = np.unique(key, return_inverse=True)
    moved = signal[known] - slope * (x[known] - level[known])
    means = np.bincount(entry, moved) / np.bincount(entry) if len(keys) else np.empty(0)
    of_level = keys // len(runs) if len(keys) else keys
    cell = np.unique(of_level, return_inverse=True)[1]
    return LevelCells(
        (of_level // max(len(levels), 1)).astype(np.int64),
        levels[of_level % max(len(levels), 1)] if len(keys) else np.empty(0),
        runs[keys % len(runs)] if len(keys) else np.empty(0, dtype=np.int64),
        used.mounting[rows][known][np.unique(entry, return_index=True)[1]],
        means,
        cell.astype(np.int64),
    )
