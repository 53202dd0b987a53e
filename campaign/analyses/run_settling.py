"""Does the run number since mounting matter? Runs before a sensor has settled do not enter repetition."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

from campaign.methods.component_tests import mean_lines, run_lines, spreads, tabulate_runs, wilks
from campaign.methods.identifiability import Units, code_units

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

SIGNIFICANCE = 0.01
"""Run numbers matter below this p: a test that can leave runs out must not reject easily."""

FEWEST_KEPT = 2
"""Runs of a mounting that always stay."""


@dataclass(frozen=True)
class Settling:
    """From which run since mounting the runs of a generation are alike.

    Attributes
    ----------
    generation
        Its name.
    first_settled
        Number of the first run that is kept, from 1: 1 means that all are.
    statistic, p
        F of the run number and its p-value over all runs; NaN where no mounting has three runs.
    """

    generation: str
    first_settled: int
    statistic: float
    p: float


def number_runs(readings: pd.DataFrame) -> IntArray:
    """Return the number of every reading's run since its sensor was mounted, from 1, shape (readings,).

    Runs of a session are ordered by their start, else by repetition and path.
    """
    keys = ["generation", "module", "sensor", "session"]
    runs = readings[[*keys, "started", "repetition", "trial"]].drop_duplicates()
    runs = runs.sort_values([*keys, "started", "repetition", "trial"], kind="stable")
    runs["number"] = runs.groupby(keys, sort=False).cumcount() + 1
    numbered = readings[[*keys, "repetition", "trial"]].merge(
        runs[[*keys, "repetition", "trial", "number"]], on=[*keys, "repetition", "trial"], how="left"
    )
    return numbered["number"].to_numpy(np.int64)


def find_settling(readings: pd.DataFrame, generation: str) -> Settling:
    """Test the run number and, where it matters, find the first run from which on it does not.

    Parameters
    ----------
    readings
        Used readings of one generation.
    generation
        Its name.
    """
    number = number_runs(readings)
    statistic, p = _test(readings, number)
    first, p_now = 1, p
    while p_now < SIGNIFICANCE and number.max() - first >= FEWEST_KEPT:
        first += 1
        kept = number >= first
        p_now = _test(readings[kept], number[kept])[1]
    return Settling(generation, first, statistic, p)


def _test(readings: pd.DataFrame, number: IntArray) -> tuple[float, float]:
    """F of the run number within mountings (of modules where runs are shared, else of sensors), its p."""
    if len(np.unique(number)) <= FEWEST_KEPT:
        return float("nan"), float("nan")
    units = code_units(readings)
    z = readings["x"].to_numpy(float)
    table = tabulate_runs(units, z, line=_has_lines(units))
    lines = run_lines(table, _without_level_means(readings, units)[:, np.newaxis])
    numbers = number[table.order][table.starts]
    if units.shared:
        base = table.units["mounting"]
        numbers = numbers[np.unique(table.units["shared_run"], return_index=True)[1]]
        lines, of = mean_lines(lines, table.units, "shared_run")
        base = of["mounting"]
    else:
        base = table.units["session"]
    values, freedom = wilks(*spreads(lines, [base], numbers))
    if freedom is None or freedom[0] < 1:
        return float("nan"), float("nan")
    return float(values[0]), float(stats.f.sf(values[0], *freedom))


def _has_lines(units: Units) -> bool:
    pairs = np.unique(np.column_stack([units.run, units.level]), axis=0)[:, 0]
    return bool(np.median(np.unique(pairs, return_counts=True)[1]) >= 3)


def _without_level_means(readings: pd.DataFrame, units: Units) -> FloatArray:
    """Signals less the mean of their level and branch: the mean curve must not bend runs with a gap."""
    cell = np.unique(
        np.column_stack([units.generation, units.level, units.direction]), axis=0, return_inverse=True
    )[1].ravel()
    signal = readings["signal"].to_numpy(float)
    return np.asarray(signal - (np.bincount(cell, signal) / np.bincount(cell))[cell])
