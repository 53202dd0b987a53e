"""Where in a recording a length is kept, and how the stand came there and left."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

BAND_SHARE = 0.005
"""Half-width of 'kept' as a share of the span of the reference, where its noise is smaller still."""

NOISE_WIDTHS = 6.0
"""Half-width of 'kept' in standard deviations of the reference noise."""

SAME_SHARE = 1e-4
"""A reference whose span is smaller than this share of its size never moves."""

SHORTEST = 3
"""Fewest samples of a stretch in which a length is kept."""

SMALLEST_SHARE = 0.05
"""A level counts as kept where at least this share of the samples not yet explained lies there."""

MOST_LEVELS = 12

HOLD_SHARE = 0.5
"""Kept lengths that last at least this share of the longest are holds; shorter ones come before or after."""


@dataclass(frozen=True)
class KeptLength:
    """One stretch of a recording in which the length is kept.

    Attributes
    ----------
    start, stop
        First row and one past the last.
    level
        Median of the reference there, in its unit.
    """

    start: int
    stop: int
    level: float


@dataclass(frozen=True)
class HoldCourse:
    """One hold with what comes before and after.

    Attributes
    ----------
    kept
        The hold.
    before, after
        The kept lengths next to it, ``None`` where the recording holds none.
    moves
        Whether the recording shows the ramp that leads to the hold.
    """

    kept: KeptLength
    before: KeptLength | None
    after: KeptLength | None
    moves: bool


def find_holds(reference: FloatArray) -> tuple[HoldCourse, ...]:
    """Find the holds of a recording.

    Parameters
    ----------
    reference
        Shape (rows,), finite: length, elongation, strain or force.

    Returns
    -------
    tuple of HoldCourse
        In order; empty where no length is kept. A reference that never moves is one hold without a ramp.
    """
    kept = find_kept_lengths(reference)
    if not kept:
        return ()
    longest = max(own.stop - own.start for own in kept)
    return tuple(
        HoldCourse(
            own,
            kept[place - 1] if place else None,
            kept[place + 1] if place + 1 < len(kept) else None,
            own.start > 0,
        )
        for place, own in enumerate(kept)
        if own.stop - own.start >= HOLD_SHARE * longest
    )


def find_kept_lengths(reference: FloatArray) -> tuple[KeptLength, ...]:
    """Return the stretches in which *reference*, shape (rows,), stays at one level, in order.

    Levels are the most visited values, one after another; of each the longest stretch near it is taken as
    long as it explains enough of what is left (:data:`SMALLEST_SHARE`).
    """
    if len(reference) < SHORTEST:
        return ()
    span = float(np.ptp(reference))
    noise = _noise(reference)
    if span <= max(2.0 * NOISE_WIDTHS * noise, SAME_SHARE * float(np.max(np.abs(reference)))):
        return (KeptLength(0, len(reference), float(np.median(reference))),)
    band = max(BAND_SHARE * span, NOISE_WIDTHS * noise)
    free = np.ones(len(reference), dtype=bool)
    found: list[KeptLength] = []
    while len(found) < MOST_LEVELS and np.count_nonzero(free) >= SHORTEST:
        near = free & (np.abs(reference - _most_visited(reference[free], band)) <= band)
        start, stop = _longest_run(near)
        if stop - start < max(SHORTEST, SMALLEST_SHARE * np.count_nonzero(free)):
            break
        found.append(KeptLength(start, stop, float(np.median(reference[start:stop]))))
        free[start:stop] = False
    return tuple(sorted(found, key=lambda own: own.start))


def _noise(reference: FloatArray) -> float:
    """Standard deviation of the reference noise from second differences, motion left out by the median."""
    second = np.abs(np.diff(reference, 2))
    return float(np.median(second)) / (0.6745 * np.sqrt(6.0)) if len(second) else 0.0


def _most_visited(values: FloatArray, band: float) -> float:
    """The value with most of *values* within *band*, to a quarter of it, then their median."""
    bins = np.floor((values - values.min()) / (band / 4.0)).astype(np.int64)
    counts = np.bincount(bins)
    around = np.convolve(counts, np.ones(3, dtype=np.int64), mode="same")
    middle = float(values.min() + (int(np.argmax(around)) + 0.5) * band / 4.0)
    return float(np.median(values[np.abs(values - middle) <= band]))


def _longest_run(inside: BoolArray) -> tuple[int, int]:
    """First and one past the last of the longest stretch of true values."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], inside, [False]]).astype(np.int8)))
    starts, stops = edges[0::2], edges[1::2]
    longest = int(np.argmax(stops - starts))
    return int(starts[longest]), int(stops[longest])
