"""Plateaus of a staircase log: the stretches in which the known length stands still."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

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
    noise = _reference_noise(reference)
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
    offsets = np.arange(int(lengths.sum())) - np.repeat(np.cumsum(lengths) - lengths, lengths)
    return starts[owner] + offsets, owner


def _reference_noise(reference: FloatArray) -> float:
    """Standard deviation of the reference noise: robust, from second differences, or of its rounding."""
    if len(reference) < 4:
        return 0.0
    second = np.diff(reference, n=2)
    noise = float(np.median(np.abs(second)) / (0.6745 * np.sqrt(6.0)))
    moves = np.abs(np.diff(reference))
    smallest = float(moves[moves > 1e-9 * np.ptp(reference)].min(initial=np.inf))
    rounding = smallest / np.sqrt(12.0) if smallest <= LARGEST_ROUNDING * np.ptp(reference) else 0.0
    return max(noise, rounding if np.mean(moves == 0.0) > 0.1 else 0.0)


def _rests(reference: FloatArray, noise: float, span: float) -> tuple[IntArray, IntArray]:
    """Stretches without motion, at the finest averaging that tells motion from noise; none if none does."""
    sums = np.concatenate([[0.0], np.cumsum(reference - reference.mean())])
    width = 1
    while width <= max(len(reference) // 20, 1):
        motion = _motion(sums, width)
        noise_left = noise * np.sqrt(2.0 / width)
        still = max(4.0 * noise_left, MOTION_SHARE * span)
        moving = motion[motion > still]
        if len(moving) and _lower_quartile_exceeds(moving, 1.5 * still):
            return _stretches(motion <= still)
        width *= 2
    return _stretches(np.zeros(len(reference), dtype=bool))


def _motion(sums: FloatArray, width: int) -> FloatArray:
    """Absolute difference of the means of the *width* samples before each sample and from it on.

    ``sums`` has shape (samples + 1,): sums of the samples before each place.
    """
    samples = len(sums) - 1
    difference = np.empty(samples)
    difference[: samples - width + 1] = (sums[width:] - sums[:-width]) / width
    difference[samples - width + 1 :] = (sums[-1] - sums[samples - width + 1 : -1]) / np.arange(
        width - 1, 0, -1
    )
    difference[width:] -= (sums[width:-1] - sums[: -width - 1]) / width
    difference[1:width] -= sums[1:width] / np.arange(1, width)
    np.abs(difference, out=difference)
    difference[0] = difference[1]
    return difference


def _lower_quartile_exceeds(values: FloatArray, limit: float) -> bool:
    """Whether the lower quartile lies above *limit*: by counting, where the count settles it."""
    below = int(np.count_nonzero(values <= limit))
    first = (len(values) - 1) // 4
    if below <= first:
        return True
    if below >= min(first + 2, len(values)):
        return False
    return bool(np.quantile(values, 0.25) > limit)


def _stretches(mask: BoolArray) -> tuple[IntArray, IntArray]:
    """Starts and ends (one past the last) of the stretches where *mask* holds."""
    edges = np.diff(np.concatenate([[0], mask.astype(np.int8), [0]]))
    return np.flatnonzero(edges == 1), np.flatnonzero(edges == -1)


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
    places, owner = expand(starts, stops)
    lengths = stops - starts
    longest = int(lengths.max())
    if longest * len(starts) <= PADDING * len(places):
        rows = np.full((len(starts), longest), np.inf)
        rows[np.arange(longest) < lengths[:, None]] = values[places]
        rows.sort(axis=1)
        ordered, first = rows.ravel(), np.arange(len(starts)) * longest
    else:
        ordered = values[places][np.lexsort([values[places], owner])]
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
