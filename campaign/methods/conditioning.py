"""From which cycle on a run is settled, told from noise."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy import special

FloatArray = npt.NDArray[np.float64]

WINDOW = 5
"""Cycles over which the change per cycle is taken, fewer near the end of a run."""

STATED_CHANGE = 0.002
"""Settled means: no figure is shown to change by more than this share of the signal's range a cycle."""

FEWEST_AFTER = 3
"""A run is settled only where at least so many cycles show it."""

RISK = 0.01
"""Risk, per figure and window, of taking noise for a change."""


def settled_from(series: FloatArray, scale: float, change: float = STATED_CHANGE) -> int | None:
    """Return the index of the first settled cycle, or ``None`` where the run does not settle.

    Parameters
    ----------
    series
        Shape (cycles, figures): figures of every whole cycle in order (width, zero and peak signal), in
        signal units; rows with NaN are passed over.
    scale
        Range of the signal in a cycle, in the same units.
    change
        Largest change per cycle that counts as settled, as a share of *scale*.

    Notes
    -----
    The change per cycle at cycle n is the slope of a straight line through cycle n and the ones after it, up
    to :data:`WINDOW`. A run is settled from the first cycle from which on no slope exceeds *change*
    beyond its own noise (one-sided, :data:`RISK`); the noise is taken from the second differences of
    the later half, which a steady change does not enter.
    """
    known = np.flatnonzero(np.all(np.isfinite(series), axis=1))
    if len(known) < FEWEST_AFTER or not scale > 0:
        return None
    values = series[known] / scale
    noise = cycle_noise(values)
    degrees = max(len(values) // 2 - 1, 1)
    last = len(values) - FEWEST_AFTER
    multiple = float(special.stdtrit(degrees, 1.0 - RISK))
    moving = _moving(values, noise, multiple, change)[: last + 1]
    after = int(np.flatnonzero(moving)[-1]) + 1 if moving.any() else 0
    return int(known[after]) if after <= last else None


def cycle_noise(values: FloatArray) -> FloatArray:
    """Return the standard deviation from cycle to cycle of each column of *values* (cycles, figures)."""
    late = values[max(len(values) // 2 - 1, 0) :]
    late = late if len(late) >= 3 else values
    second = np.diff(late, n=2, axis=0)
    return np.asarray(np.sqrt(np.mean(second**2, axis=0) / 6.0))


def _moving(values: FloatArray, noise: FloatArray, multiple: float, change: float) -> npt.NDArray[np.bool_]:
    """Whether any figure moves from each cycle on, over the cycles of its window (shape (cycles,))."""
    moving = np.zeros(len(values), dtype=bool)
    for length in range(FEWEST_AFTER, min(WINDOW, len(values)) + 1):
        windows = np.lib.stride_tricks.sliding_window_view(values, length, axis=0)
        own = slice(None) if length == WINDOW else slice(len(windows) - 1, None)  # fewer only at the end
        moving[: len(windows)][own] = _exceeds(windows[own], noise, multiple, change).any(axis=1)
    return moving


def _exceeds(windows: FloatArray, noise: FloatArray, multiple: float, change: float) -> npt.NDArray[np.bool_]:
    """Whether a figure's slope is above *change* by more than a multiple of its standard error.

    *windows* has shape (windows, figures, cycles), the result (windows, figures).
    """
    length = windows.shape[-1]
    place = np.arange(length) - (length - 1) / 2.0
    square = float(np.sum(place**2))
    slope = np.abs(windows @ place) / square
    error = noise / np.sqrt(square)
    return np.asarray(slope - multiple * error > change)
