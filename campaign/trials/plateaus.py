"""Plateaus of a staircase log: the stretches in which the known length stands still."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from campaign.methods.medians import middle_value

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

SMALLEST_BAND = 0.0025
"""Half-width of 'constant' as a share of the span of the reference, where its noise is smaller still."""

MOTION_SHARE = 0.002
"""Differences smaller than this share of the span of the reference are not motion."""

SMALLEST_REST_SHARE = 1.0 / 6.0
"""A log that rests for less than this share of its samples is no staircase (a sine rests at its ends too)."""

LARGEST_ROUNDING = 0.01
"""The smallest move of a log is its rounding if it is no more than this share of the span."""

SHORTEST_PLATEAU = 3
"""Fewest samples that make a plateau."""

PADDING = 4
"""Stretches are laid out side by side for their medians where that takes no more than this many times their
samples."""


def find_plateaus(reference: FloatArray) -> tuple[IntArray, IntArray]:
    """Find the stretches of constant reference in a log, in the order of its rows.

    Parameters
    ----------
    reference
        Shape (samples,), finite, any unit; noise, ramps, unequal dwells, up and down are all allowed.

    Returns
    -------
    starts, stops
        Shape (plateaus,): first sample and one past the last of each. Empty where there are none.

    Notes
    -----
    Motion is told from rest by differences of neighbouring means over *h* samples, with the smallest *h*
    for which the slower motions of the log stand clear of the reference noise. (The noise is taken from
    second differences, which a steady ramp does not enter.) Rests at one level with only a flicker between
    them are one plateau, and the edges lost to averaging are given back where the reference is already, or
    still, at the level.
    """
    none = np.empty(0, dtype=np.int64)
    span = float(np.ptp(reference)) if len(reference) else 0.0
    noise = _reference_noise(reference, span)
    if len(reference) < 2 * SHORTEST_PLATEAU or span <= 8.0 * noise:
        return none, none
    band = max(4.0 * noise, SMALLEST_BAND * span)
    starts, stops = _rests(reference, noise, span)
    starts, stops = _long_enough(starts, stops)
    if len(starts) == 0:
        return none, none
    starts, stops, levels = _joined(reference, starts, stops, band)
    starts, stops = _long_enough(*_widened(reference, starts, stops, levels, band))
    rests = float(np.sum(stops - starts)) / len(reference)
    return (starts, stops) if rests >= SMALLEST_REST_SHARE else (none, none)


def expand(starts: IntArray, stops: IntArray) -> tuple[IntArray, IntArray]:
    """Return the whole numbers of half-open intervals, one after another, and the interval of each."""
    lengths = stops - starts
    owner = np.repeat(np.arange(len(starts)), lengths)
    shifts = np.repeat(starts - (np.cumsum(lengths) - lengths), lengths)
    return np.arange(len(owner)) + shifts, owner


def _reference_noise(reference: FloatArray, span: float) -> float:
    """Standard deviation of the reference noise: robust, from second differences, or of its rounding."""
    if len(reference) < 4:
        return 0.0
    moves = reference[1:] - reference[:-1]
    noise = float(middle_value(np.abs(moves[1:] - moves[:-1])) / (0.6745 * np.sqrt(6.0)))
    if (len(moves) - np.count_nonzero(moves)) / len(moves) <= 0.1:
        return noise
    np.abs(moves, out=moves)
    smallest = float(moves.min(initial=np.inf, where=moves > 1e-9 * span))
    return max(noise, smallest / np.sqrt(12.0) if smallest <= LARGEST_ROUNDING * span else 0.0)


def _rests(reference: FloatArray, noise: float, span: float) -> tuple[IntArray, IntArray]:
    """Stretches without motion, at the finest averaging that tells motion from noise; none if none does."""
    sums = np.zeros(len(reference) + 1)
    np.cumsum(reference - reference.mean(), out=sums[1:])
    width = 1
    while width <= max(len(reference) // 20, 1):
        motion = _motion(sums, width)
        noise_left = noise * np.sqrt(2.0 / width)
        still = max(4.0 * noise_left, MOTION_SHARE * span)
        moving = motion > still
        if _lower_quartile_exceeds(motion, moving, 1.5 * still):
            return _stretches(~moving)
        width *= 2
    none = np.empty(0, dtype=np.int64)
    return none, none


def _motion(sums: FloatArray, width: int) -> FloatArray:
    """Absolute difference of the means of the *width* samples before each sample and from it on.

    ``sums`` has shape (samples + 1,): sums of the samples before each place.
    """
    samples = len(sums) - 1
    means = sums[width:] - sums[:-width]
    means /= width
    difference = np.empty(samples)
    difference[: samples - width + 1] = means
    difference[samples - width + 1 :] = (sums[-1] - sums[samples - width + 1 : -1]) / np.arange(
        width - 1, 0, -1
    )
    difference[width:] -= means[:-1]
    difference[1:width] -= sums[1:width] / np.arange(1, width)
    np.abs(difference, out=difference)
    difference[0] = difference[1]
    return difference


def _lower_quartile_exceeds(values: FloatArray, chosen: BoolArray, limit: float) -> bool:
    """Whether the lower quartile of the *chosen* lies above *limit*: by counting, where the count settles it.

    All that lie above the limit are among the chosen; where nothing is chosen it does not.
    """
    number = int(np.count_nonzero(chosen))
    below = number - int(np.count_nonzero(values > limit))
    first = (number - 1) // 4
    if below <= first:
        return number > 0
    if below >= min(first + 2, number):
        return False
    return bool(np.quantile(values[chosen], 0.25) > limit)


def _stretches(mask: BoolArray) -> tuple[IntArray, IntArray]:
    """Starts and ends (one past the last) of the stretches where *mask* holds."""
    edges = np.flatnonzero(mask[1:] != mask[:-1]) + 1
    starts, stops = np.append(0, edges), np.append(edges, len(mask))
    first = 0 if mask[0] else 1
    return starts[first::2], stops[first::2]


def _typical_length(lengths: IntArray) -> int:
    """Length such that half of all samples lie in stretches no longer."""
    ordered = np.sort(lengths)
    return int(ordered[np.searchsorted(np.cumsum(ordered), lengths.sum() / 2.0)])


def _long_enough(starts: IntArray, stops: IntArray) -> tuple[IntArray, IntArray]:
    """Stretches of at least the shortest plateau and a tenth of the typical length."""
    lengths = stops - starts
    if len(lengths) == 0:
        return starts, stops
    kept = lengths >= max(SHORTEST_PLATEAU, 0.1 * _typical_length(lengths))
    return starts[kept], stops[kept]


def _medians(values: FloatArray, starts: IntArray, stops: IntArray) -> FloatArray:
    """Median of the values of each stretch."""
    lengths = stops - starts
    longest = int(lengths.max())
    if longest * len(starts) > PADDING * int(lengths.sum()):
        return _medians_by_sorting(values, starts, stops)
    # as many values below each stretch as above it: all medians then stand in the middle of their rows
    before = (longest - lengths) // 2
    place = np.arange(longest) - before[:, None]
    rows = values.take(place + starts[:, None], mode="clip")
    rows[place < 0] = -np.inf
    rows[place >= lengths[:, None]] = np.inf
    low, high = (longest - 1) // 2, longest // 2
    if (lengths != longest).any():
        low -= longest % 2
    rows.partition(sorted({low, high}), axis=1)
    own = np.arange(len(starts)), before + (lengths - 1) // 2, before + lengths // 2
    return np.asarray((rows[own[0], own[1]] + rows[own[0], own[2]]) / 2.0)


def _medians_by_sorting(values: FloatArray, starts: IntArray, stops: IntArray) -> FloatArray:
    places, owner = expand(starts, stops)
    ordered = values[places][np.lexsort([values[places], owner])]
    lengths = stops - starts
    first = np.cumsum(lengths) - lengths
    return np.asarray((ordered[first + (lengths - 1) // 2] + ordered[first + lengths // 2]) / 2.0)


def _joined(
    values: FloatArray, starts: IntArray, stops: IntArray, band: float
) -> tuple[IntArray, IntArray, FloatArray]:
    """Neighbours at one level made one, unless the reference was away for a while; and all levels."""
    medians = _medians(values, starts, stops)
    gaps = starts[1:] - stops[:-1]
    shorter = np.minimum((stops - starts)[1:], (stops - starts)[:-1])
    apart = (np.abs(np.diff(medians)) > band) | (gaps > np.maximum(SHORTEST_PLATEAU, shorter))
    if apart.all():
        return starts, stops, medians
    starts, stops = starts[np.append(True, apart)], stops[np.append(apart, True)]
    return starts, stops, _medians(values, starts, stops)


def _widened(
    values: FloatArray, starts: IntArray, stops: IntArray, levels: FloatArray, band: float
) -> tuple[IntArray, IntArray]:
    """Edges moved outwards over samples in the band about the level, up to the first that is not."""
    place, gap = expand(np.append(0, stops), np.append(starts, len(values)))
    beside = values[place]
    after = (gap > 0) & (np.abs(beside - levels[np.maximum(gap - 1, 0)]) > band)
    before = (gap < len(starts)) & (np.abs(beside - levels[np.minimum(gap, len(starts) - 1)]) > band)
    left, not_yet = place[after], place[before]
    outside = np.append(left, len(values))
    new_stops = np.minimum(outside[np.searchsorted(outside, stops)], np.append(starts[1:], len(values)))
    inside = np.append(-1, not_yet)
    new_starts = np.maximum(inside[np.searchsorted(inside, starts) - 1] + 1, np.append(0, new_stops[:-1]))
    return new_starts, new_stops
