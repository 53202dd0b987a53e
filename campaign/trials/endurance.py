"""Endurance trials, sparse logs of thousands of cycles: zero and sensitivity by cycle, and failure."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.methods.loops import find_cycles
from campaign.notices import Notice
from campaign.recordings.recording import FloatArray, Trial, TrialIdentity
from campaign.trials.features import recorded_reference

IntArray = npt.NDArray[np.int64]

LOW_SHARE = 0.1
"""Rows within this share of the reference's range of its lowest value give the zero signal."""

LOST_SENSITIVITY = 0.5
"""A sensor has failed once its sensitivity stays below this share of its first value."""

EARLY = 3
"""So many first logged cycles give the first sensitivity."""


@dataclass(frozen=True)
class EnduranceFeatures:
    """What one endurance trial is reduced to.

    Attributes
    ----------
    identity, unit, recorded
        Whose trial it is, the unit of its signal, the quantity of its reference as recorded (empty: none).
    cycles
        One row a logged cycle: cycle, zero_signal, sensitivity (signal per unit of the reference as recorded;
        NaN without a reference that moves), temperature_c.
    last_working
        Last logged cycle at which the sensor worked.
    failed_at
        First logged cycle at which it no longer did and after which it never did again; NaN where it lasted.
    notices
        What a reader should know about the trial.
    """

    identity: TrialIdentity
    unit: str
    recorded: str
    cycles: pd.DataFrame
    last_working: float
    failed_at: float
    notices: tuple[Notice, ...]


def features_of_endurance(trial: Trial) -> EnduranceFeatures:
    """Reduce one endurance trial.

    The sensor has failed from the first logged cycle from which on no signal is recorded, or its sensitivity
    stays below half of its first value. What it read afterwards enters no figure.
    """
    reference = recorded_reference(trial)
    number = _cycle_numbers(trial, reference[1] if reference is not None else None)
    if number is None:
        return _nothing(trial, "no cycle numbers are recorded and no cycles are found in the reference")
    x = reference[1] if reference is not None else np.full(len(trial.signal), np.nan)
    table = _by_cycle(number, x, trial.signal, trial.temperature_c)
    if not np.isfinite(table["zero_signal"]).any():
        return _nothing(trial, "no signal is recorded")
    working = _works(table)
    last = int(np.flatnonzero(working)[-1])
    cycles = table["cycle"].to_numpy(float)
    failed = float(cycles[last + 1]) if last + 1 < len(cycles) else float("nan")
    return EnduranceFeatures(
        trial.identity,
        trial.signal_unit,
        reference[0] if reference is not None else "",
        table.iloc[: last + 1].reset_index(drop=True),
        float(cycles[last]),
        failed,
        (),
    )


def _nothing(trial: Trial, what: str) -> EnduranceFeatures:
    notice = Notice(
        "no-endurance",
        "noted",
        trial.file,
        None,
        None,
        what,
        "nothing is taken from it",
        "log the cycle number",
    )
    empty = pd.DataFrame(columns=["cycle", "zero_signal", "sensitivity", "temperature_c"], dtype=float)
    return EnduranceFeatures(trial.identity, trial.signal_unit, "", empty, np.nan, np.nan, (notice,))


def _cycle_numbers(trial: Trial, reference: FloatArray | None) -> FloatArray | None:
    """Number of the cycle of every row: as recorded, else counted in the reference; NaN outside cycles."""
    if trial.cycle is not None and np.any(np.isfinite(trial.cycle)):
        return trial.cycle
    if reference is None:
        return None
    rows = np.flatnonzero(np.isfinite(reference))
    cycles = find_cycles(reference[rows])
    if cycles.count == 0:
        return None
    number = np.full(len(reference), np.nan)
    inside = np.searchsorted(cycles.starts, np.arange(len(rows)), side="right").astype(float)
    inside[(inside < 1) | (np.arange(len(rows)) > cycles.stops[-1])] = np.nan
    number[rows] = inside
    return number


def _by_cycle(
    number: FloatArray, x: FloatArray, signal: FloatArray, temperature: FloatArray | None
) -> pd.DataFrame:
    """Zero signal and sensitivity of every logged cycle, by the least-squares line of its rows."""
    rows = np.flatnonzero(np.isfinite(number))
    cycles, code = np.unique(number[rows], return_inverse=True)
    own_x, own_y = x[rows], signal[rows]
    lowest = float(np.nanmin(own_x)) if np.isfinite(own_x).any() else np.nan
    span = float(np.nanmax(own_x)) - lowest if np.isfinite(lowest) else np.nan
    count = len(cycles)
    known = np.isfinite(own_y)
    at_zero = known & (own_x <= lowest + LOW_SHARE * span) if span > 0 else known
    both = known & np.isfinite(own_x)
    mean_x, mean_y = _mean(own_x, code, both, count), _mean(own_y, code, both, count)
    dx, dy = np.where(both, own_x - mean_x[code], 0.0), np.where(both, own_y - mean_y[code], 0.0)
    square, product = np.bincount(code, dx * dx, minlength=count), np.bincount(code, dx * dy, minlength=count)
    usable = square > (0.01 * span**2 if span > 0 else np.inf)
    slope = np.divide(product, square, out=np.full(count, np.nan), where=usable)
    degrees = np.full(count, np.nan)
    if temperature is not None:
        degrees = _mean(temperature[rows], code, np.isfinite(temperature[rows]), count)
    return pd.DataFrame(
        {
            "cycle": cycles,
            "zero_signal": _mean(own_y, code, at_zero, count),
            "sensitivity": slope,
            "temperature_c": degrees,
        }
    )


def _mean(values: FloatArray, code: IntArray, used: npt.NDArray[np.bool_], count: int) -> FloatArray:
    held = np.bincount(code[used], minlength=count)
    total = np.bincount(code[used], values[used], minlength=count)
    return np.asarray(np.divide(total, held, out=np.full(count, np.nan), where=held > 0))


def _works(table: pd.DataFrame) -> npt.NDArray[np.bool_]:
    """Logged cycles with a signal, and with at least half the first sensitivity where one is known."""
    there = np.isfinite(table["zero_signal"].to_numpy(float))
    sensitivity = table["sensitivity"].to_numpy(float)
    known = np.flatnonzero(np.isfinite(sensitivity))
    if len(known) == 0:
        return np.asarray(there, dtype=bool)
    first = float(np.median(sensitivity[known[:EARLY]]))
    weak = np.isfinite(sensitivity) & (sensitivity / first < LOST_SENSITIVITY)
    return np.asarray((there | np.isfinite(sensitivity)) & ~weak, dtype=bool)
