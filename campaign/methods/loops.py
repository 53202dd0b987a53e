"""Loops of a signal against a known length: cycles, branches, widths and areas.

Everything works on whole arrays; nothing steps over samples or cycles. A *cycle* goes from a lower turn of
the reference to the next lower turn. Its *branches* are the motion between the turns: rests at the ends
belong to neither. A *width* is the signal on the way up less the signal on the way down at the same length:
it has a sign, so that the mean over cycles of a sensor without hysteresis is about zero.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from campaign.methods.medians import middle_value

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

FRACTIONS: FloatArray = np.linspace(0.05, 0.95, 19)
"""Places at which widths are taken, as fractions of a cycle's range; the tenth is mid range."""

MID = 9
"""Index of mid range among :data:`FRACTIONS`."""

SMALLEST_TURN = 0.05
"""Moves smaller than this share of the whole span of the reference are no reversal."""

NOISE_MULTIPLE = 8.0
"""A reversal is at least this many standard deviations of the reference's noise."""

SPIKE = 5.0
"""A single sample that leaps by more than this multiple of the neighbouring steps is a spike."""

REST_SHARE = 0.01
"""A sample rests at a turn while it lies within this share of the branch, or within the noise, of it."""

BINS = 48
"""A branch is averaged in so many equal steps of length at most, before widths are interpolated."""

WIDEST_HOLE = 0.15
"""Over a hole in the samples wider than this share of a branch, no width is interpolated."""


@dataclass(frozen=True)
class Cycles:
    """Where the cycles of a run lie among its samples.

    Attributes
    ----------
    starts, tops, stops
        Shape (cycles,): samples of the lower turn, the upper turn and the next lower turn.
    threshold
        Smallest move that counted as a reversal, in units of the reference.
    noise
        Standard deviation of the reference's noise, in its units.
    reference
        Shape (samples,): the run's reference without spikes.
    """

    starts: IntArray
    tops: IntArray
    stops: IntArray
    threshold: float
    noise: float
    reference: FloatArray

    @property
    def count(self) -> int:
        """Number of cycles."""
        return len(self.starts)


@dataclass(frozen=True)
class Loops:
    """What the cycles of one run amount to; every array has one entry or row a cycle.

    Attributes
    ----------
    low, high
        Range that both branches have in common, in units of the reference.
    width
        Shape (cycles, places): signal on the way up less signal on the way down at :data:`FRACTIONS` of the
        range; NaN where a branch has no samples near.
    largest_width, at
        The width of largest magnitude (with its sign), and where it sits, in units of the reference.
    area
        Signed area of the loop, ∮ y dx: positive where the way up lies above.
    degree
        |area| over the area under the loading branch, of the signal's change from the cycle's zero signal.
    degree_of_whole_signal
        The same over the area under the whole signal, with its zero as recorded.
    zero_signal, peak_signal
        Signal at the lower and at the upper end of the range, mean of both branches.
    signal_range
        Largest less smallest signal of the loop's branches.
    loading_rate, unloading_rate
        Mean speed between a tenth and nine tenths of the branch, units of the reference a second, both
        positive; NaN without time.
    hole
        Largest hole between the samples of either branch, as a share of its range.
    """

    low: FloatArray
    high: FloatArray
    width: FloatArray
    largest_width: FloatArray
    at: FloatArray
    area: FloatArray
    degree: FloatArray
    degree_of_whole_signal: FloatArray
    zero_signal: FloatArray
    peak_signal: FloatArray
    signal_range: FloatArray
    loading_rate: FloatArray
    unloading_rate: FloatArray
    hole: FloatArray


def reference_noise(reference: FloatArray) -> float:
    """Return the standard deviation of the reference's noise, robust; 0 for a set-point.

    From second differences, which a steady ramp does not enter; where the reference is logged so coarsely
    that its own curvature shows in them, from third differences, if those say less.
    """
    if len(reference) <= 2:
        return 0.0
    second = np.diff(reference, n=2)
    found = middle_value(np.abs(second)) / 0.6745 / float(np.sqrt(6.0))
    if len(reference) > 3:
        found = min(found, middle_value(np.abs(np.diff(second))) / 0.6745 / float(np.sqrt(20.0)))
    return found


def find_cycles(reference: FloatArray) -> Cycles:
    """Find the cycles of a run from the reversals of its reference.

    Parameters
    ----------
    reference
        Shape (samples,), finite, in any unit: noise, rests at the ends, unequal amplitudes and cycles cut
        short are all allowed.

    Returns
    -------
    Cycles
        Each from a lower turn up and down to the next; the ends of the run count as turns, so that the first
        and the last may be cut short. A cycle may be of any amplitude above the threshold.
    """
    none = np.empty(0, dtype=np.int64)
    span = float(np.ptp(reference)) if len(reference) else 0.0
    noise = reference_noise(reference)
    threshold = max(SMALLEST_TURN * span, min(NOISE_MULTIPLE * noise, 0.5 * span))
    if len(reference) < 5 or span == 0.0:
        return Cycles(none, none, none, threshold, noise, reference)
    reference = _without_spikes(reference, noise, span)
    turns = find_reversals(reference, threshold)
    turns = turns[1:] if len(turns) > 1 and reference[turns[0]] > reference[turns[1]] else turns
    whole = (len(turns) - 1) // 2
    if whole < 1:
        return Cycles(none, none, none, threshold, noise, reference)
    lower, tops = turns[0 : 2 * whole + 1 : 2], turns[1 : 2 * whole : 2]
    return Cycles(lower[:-1], tops, lower[1:], threshold, noise, reference)


def _without_spikes(reference: FloatArray, noise: float, span: float) -> FloatArray:
    """Return *reference* with single samples that leap out and back replaced by the median of three.

    A leap is more than :data:`SPIKE` times the steps on either side of it, and more than noise: the turn of
    a fast wave is none.
    """
    least = max(NOISE_MULTIPLE * noise, 0.02 * span)
    step = np.abs(np.diff(reference, prepend=reference[0], append=reference[-1]))
    if not (step > least).any():  # a sample is no further from the median of three than the larger step
        return reference
    around = np.maximum(np.roll(step[:-1], 1), np.roll(step[1:], -1))
    beside = np.concatenate([reference[:1], reference, reference[-1:]])
    low, high = np.minimum(beside[:-2], beside[2:]), np.maximum(beside[:-2], beside[2:])
    median = np.minimum(np.maximum(reference, low), high)
    return np.where(np.abs(reference - median) > SPIKE * around + least, median, reference)


def find_reversals(values: FloatArray, threshold: float) -> IntArray:
    """Return the samples at which *values* turn, with moves of at least *threshold* between them.

    Moves that are smaller are taken out in pairs, the smallest of their neighbourhood first, so that what
    is left alternates between low and high turns. The first and the last sample of the run's outer moves
    are among the turns. (This is the simplification of a curve by the persistence of its extremes.)

    Parameters
    ----------
    values
        Shape (samples,), finite.
    threshold
        In units of *values*, positive.
    """
    places = _extremes(values)
    while len(places) > 1:
        moves = np.abs(np.diff(values[places]))
        removable = _smallest_moves(moves, threshold)
        if not removable.any():
            return places
        gone = np.zeros(len(places), dtype=bool)
        gone[:-1] |= removable
        gone[1:] |= removable
        if removable[0]:
            gone[1] = False
        if removable[-1]:
            gone[-2] = gone[-2] and len(places) == 2
        places = places[~gone]
    return np.empty(0, dtype=np.int64)


def _extremes(values: FloatArray) -> IntArray:
    """First sample, last sample and every local extreme (the middle sample of a level stretch)."""
    if len(values) == 0:
        return np.empty(0, dtype=np.int64)
    begins = np.flatnonzero(np.concatenate([[True], np.diff(values) != 0]))
    ends = np.append(begins[1:], len(values)) - 1
    direction = np.sign(np.diff(values[begins]))
    turned = np.flatnonzero(direction[1:] != direction[:-1]) + 1
    middle = (begins + ends) // 2
    return np.unique(np.concatenate([begins[:1], middle[turned], ends[-1:]]))


def _smallest_moves(moves: FloatArray, threshold: float) -> BoolArray:
    """Moves below the threshold that are no larger than both their neighbours, no two of them adjoining."""
    padded = np.concatenate([[np.inf], moves, [np.inf]])
    small = (moves < threshold) & (moves <= padded[:-2]) & (moves <= padded[2:])
    starts = np.flatnonzero(small & ~np.concatenate([[False], small[:-1]]))
    first = starts[np.searchsorted(starts, np.arange(len(moves)), side="right") - 1] if len(starts) else 0
    return np.asarray(small & ((np.arange(len(moves)) - first) % 2 == 0))


def measure_loops(signal: FloatArray, cycles: Cycles, time_s: FloatArray | None = None) -> Loops:
    """Measure every cycle of a run.

    Parameters
    ----------
    signal
        Shape (samples,); samples without a signal (NaN) are passed over.
    cycles
        Of :func:`find_cycles`, on the same samples.
    time_s
        Shape (samples,), in s, increasing, or ``None``.

    Notes
    -----
    The degree of hysteresis by area is the loop's area over the area under the loading branch, as used for
    stretchable sensors with the signal's change from its unstretched value. A branch is averaged in
    :data:`BINS` equal steps of length (the mean of a straight branch lies on it), then interpolated.
    """
    reference = cycles.reference
    ends = np.concatenate([cycles.starts, cycles.tops]), np.concatenate([cycles.tops, cycles.stops])
    branches = _branches(reference, signal, time_s, *ends, cycles.noise)
    count = cycles.count
    up, down = slice(0, count), slice(count, 2 * count)
    low = np.maximum(branches.low[up], branches.low[down])
    high = np.minimum(branches.high[up], branches.high[down])
    places = low[:, np.newaxis] + FRACTIONS * (high - low)[:, np.newaxis]
    above, below = branches.signal_at(places, 0), branches.signal_at(places, count)
    width = above - below
    largest = _largest(width)
    area = _loop_areas(reference, signal, cycles)
    ends_up, ends_down = (branches.ends(low, high, first) for first in (0, count))
    zero, peak = ((ends_up[i] + ends_down[i]) / 2 for i in (0, 1))
    under = _areas_under(places, above, ends_up, low, high)
    changed = under - ends_up[0] * (high - low)
    rows = np.arange(count)
    return Loops(
        low=low,
        high=high,
        width=width,
        largest_width=width[rows, largest],
        at=places[rows, largest],
        area=area,
        degree=_ratio(np.abs(area), np.abs(changed)),
        degree_of_whole_signal=_ratio(np.abs(area), np.abs(under)),
        zero_signal=zero,
        peak_signal=peak,
        signal_range=np.maximum(branches.top[up], branches.top[down])
        - np.minimum(branches.bottom[up], branches.bottom[down]),
        loading_rate=branches.rate[up],
        unloading_rate=branches.rate[down],
        hole=np.maximum(branches.hole[up], branches.hole[down]),
    )


def _largest(width: FloatArray) -> IntArray:
    """Index of the largest magnitude in each row; 0 where a row holds nothing."""
    return np.asarray(np.nanargmax(np.where(np.isnan(width), -1.0, np.abs(width)), axis=1))


def _ratio(part: FloatArray, whole: FloatArray) -> FloatArray:
    return np.asarray(np.divide(part, whole, out=np.full(len(part), np.nan), where=whole > 0))


def _areas_under(
    places: FloatArray,
    values: FloatArray,
    ends: tuple[FloatArray, FloatArray],
    low: FloatArray,
    high: FloatArray,
) -> FloatArray:
    """Area under each branch by trapezia over its places and ends; NaN where a place has no value."""
    x = np.column_stack([low, places, high])
    y = np.column_stack([ends[0], values, ends[1]])
    return np.asarray(np.trapezoid(y, x, axis=1))


def _loop_areas(reference: FloatArray, signal: FloatArray, cycles: Cycles) -> FloatArray:
    """∮ y dx over the samples of each cycle, closed by a straight line."""
    known = np.flatnonzero(np.isfinite(signal))
    if len(known) == 0:
        return np.full(cycles.count, np.nan)
    x = reference[known] - reference[known].mean()
    y = signal[known] - signal[known].mean()
    steps = np.concatenate([[0.0], np.cumsum((y[1:] + y[:-1]) / 2 * np.diff(x))])
    first = np.searchsorted(known, cycles.starts)
    last = np.searchsorted(known, cycles.stops, side="right") - 1
    first = np.minimum(first, len(known) - 1)
    closing = (y[first] + y[last]) / 2 * (x[first] - x[last])
    return np.asarray(np.where(last > first, steps[last] - steps[first] + closing, np.nan))


@dataclass(frozen=True)
class _Branches:
    """Branches of a run, averaged in steps of length; knots of all branches lie one after another.

    ``x`` and ``y`` hold the knots sorted by branch and length; ``first`` and ``last`` the knots of each.
    """

    x: FloatArray
    y: FloatArray
    first: IntArray
    last: IntArray
    low: FloatArray
    high: FloatArray
    bottom: FloatArray
    top: FloatArray
    rate: FloatArray
    hole: FloatArray

    def signal_at(self, places: FloatArray, first_branch: int) -> FloatArray:
        """Signal at *places* (branches, k) of the branches from *first_branch* on, by interpolation."""
        own = np.arange(first_branch, first_branch + len(places))
        return _interpolated(self.x, self.y, self.first[own], self.last[own], places, self._widest(own))

    def _widest(self, own: IntArray) -> FloatArray:
        return WIDEST_HOLE * (self.high[own] - self.low[own])

    def ends(self, low: FloatArray, high: FloatArray, first_branch: int) -> tuple[FloatArray, FloatArray]:
        """Signal at the ends of the range, by the straight line through the two knots next to each."""
        own = np.arange(first_branch, first_branch + len(low))
        first, last = self.first[own], self.last[own]
        there = last > first
        return (
            np.where(there, _extrapolated(self.x, self.y, first, first + there, low), np.nan),
            np.where(there, _extrapolated(self.x, self.y, last - there, last, high), np.nan),
        )


def _branches(
    reference: FloatArray,
    signal: FloatArray,
    time_s: FloatArray | None,
    starts: IntArray,
    stops: IntArray,
    noise: float,
) -> _Branches:
    """Average the motion between *starts* and *stops* (samples of turns) in steps of length."""
    owner, place = _samples_between(starts, stops)
    owner, place = _without_rests(reference, owner, place, starts, stops, noise)
    known = np.isfinite(signal[place])
    owner, place = owner[known], place[known]
    count = len(starts)
    x = reference[place]
    low = _extreme_by(np.minimum, x, owner, count)
    high = _extreme_by(np.maximum, x, owner, count)
    span = np.where(high > low, high - low, 1.0)
    step = np.clip(((x - low[owner]) / span[owner] * BINS).astype(np.int64), 0, BINS - 1)
    cell = owner * BINS + step
    held = np.bincount(cell, minlength=count * BINS)
    filled = np.flatnonzero(held)
    channels = [x, signal[place]] + ([time_s[place]] if time_s is not None else [])
    means = [np.bincount(cell, values, minlength=count * BINS)[filled] / held[filled] for values in channels]
    branch = filled // BINS
    first = np.searchsorted(branch, np.arange(count))
    last = np.searchsorted(branch, np.arange(count), side="right") - 1
    return _Branches(
        x=means[0],
        y=means[1],
        first=first,
        last=last,
        low=low,
        high=high,
        bottom=_extreme_by(np.minimum, means[1], branch, count),
        top=_extreme_by(np.maximum, means[1], branch, count),
        rate=_rates(means, first, last, low, high) if time_s is not None else np.full(count, np.nan),
        hole=_holes(means[0], branch, low, high),
    )


def _samples_between(starts: IntArray, stops: IntArray) -> tuple[IntArray, IntArray]:
    """Every sample from each start to its stop, both included, and which branch it belongs to."""
    lengths = stops - starts + 1
    owner = np.repeat(np.arange(len(starts)), lengths)
    offsets = np.arange(int(lengths.sum())) - np.repeat(np.cumsum(lengths) - lengths, lengths)
    return owner, starts[owner] + offsets


def _without_rests(
    reference: FloatArray,
    owner: IntArray,
    place: IntArray,
    starts: IntArray,
    stops: IntArray,
    noise: float,
) -> tuple[IntArray, IntArray]:
    """Keep, of each branch, from the last sample at its start to the first at its end."""
    first_level, last_level = reference[starts], reference[stops]
    band = np.maximum(REST_SHARE * np.abs(last_level - first_level), 3.0 * noise)
    value = reference[place]
    begun = np.abs(value - first_level[owner]) <= band[owner]
    ended = np.abs(value - last_level[owner]) <= band[owner]
    count = len(starts)
    leaving = _extreme_by(np.maximum, np.where(begun, place, -1), owner, count)
    arriving = _extreme_by(
        np.minimum, np.where(ended & (place > leaving[owner]), place, len(reference)), owner, count
    )
    kept = (place >= leaving[owner]) & (place <= arriving[owner])
    return owner[kept], place[kept]


def _extreme_by(extreme: np.ufunc, values: npt.NDArray[Any], owner: IntArray, count: int) -> npt.NDArray[Any]:
    """Smallest or largest value of each owner, whose values lie one after another; NaN where one has none."""
    if len(values) == 0:
        return np.full(count, np.nan)
    first = np.searchsorted(owner, np.arange(count))
    found = extreme.reduceat(values, np.minimum(first, len(values) - 1))
    empty = np.bincount(owner, minlength=count) == 0
    return np.where(empty, np.nan, found) if empty.any() else found


def _interpolated(
    x: FloatArray, y: FloatArray, first: IntArray, last: IntArray, places: FloatArray, widest: FloatArray
) -> FloatArray:
    """Interpolate at *places* (curves, k) among the knots of each curve; NaN outside and over holes.

    Half a step beyond the outermost knots their line is still drawn on.
    """
    if len(x) == 0:
        return np.full(places.shape, np.nan)
    right = _first_knot_at_or_after(x, first, last, places)
    right = np.clip(right, first[:, np.newaxis] + 1, np.maximum(last, first + 1)[:, np.newaxis])
    right = np.minimum(right, len(x) - 1)
    left = np.maximum(right - 1, 0)
    values = _extrapolated(x, y, left, right, places)
    gap = widest[:, np.newaxis]
    margin = 2.0 * gap / WIDEST_HOLE / BINS
    usable = (x[right] - x[left] <= gap) & (places >= x[left] - margin) & (places <= x[right] + margin)
    return np.asarray(np.where(usable & (last > first)[:, np.newaxis], values, np.nan))


def _first_knot_at_or_after(x: FloatArray, first: IntArray, last: IntArray, places: FloatArray) -> IntArray:
    """Bisect the knots of every curve at once."""
    low = np.broadcast_to(first[:, np.newaxis], places.shape).copy()
    high = np.broadcast_to(last[:, np.newaxis] + 1, places.shape).copy()
    for _ in range(int(np.ceil(np.log2(BINS + 1))) + 1):
        open_ = low < high
        middle = (low + high) // 2
        before = x[np.minimum(middle, len(x) - 1)] < places
        low = np.where(open_ & before, middle + 1, low)
        high = np.where(open_ & ~before, middle, high)
    return low


def _extrapolated(
    x: FloatArray, y: FloatArray, left: IntArray, right: IntArray, places: FloatArray
) -> FloatArray:
    """The straight line through knots *left* and *right*, at *places*."""
    if len(x) == 0:
        return np.full(places.shape, np.nan)
    last = len(x) - 1
    left, right = np.clip(left, 0, last), np.clip(right, 0, last)
    run = x[right] - x[left]
    slope = np.divide(y[right] - y[left], run, out=np.zeros_like(run), where=run != 0)
    return np.asarray(y[left] + slope * (places - x[left]))


def _rates(
    means: list[FloatArray], first: IntArray, last: IntArray, low: FloatArray, high: FloatArray
) -> FloatArray:
    """Speed of each branch between a tenth and nine tenths of its range, always positive."""
    span = high - low
    places = low[:, np.newaxis] + np.array([0.1, 0.9]) * span[:, np.newaxis]
    at = _interpolated(means[0], means[2], first, last, places, np.full(len(low), np.inf))
    taken = np.abs(at[:, 1] - at[:, 0])
    return np.asarray(np.divide(0.8 * span, taken, out=np.full(len(low), np.nan), where=taken > 0))


def _holes(x: FloatArray, branch: IntArray, low: FloatArray, high: FloatArray) -> FloatArray:
    """Largest step between neighbouring knots of each branch, as a share of its range."""
    largest = np.zeros(len(low))
    if len(x) > 1:
        same = branch[1:] == branch[:-1]
        span = np.where(high > low, high - low, 1.0)[branch[1:]]
        np.maximum.at(largest, branch[1:][same], (np.diff(x) / span)[same])
    return largest


def thin_cycles(
    x: FloatArray, y: FloatArray, starts: IntArray, stops: IntArray, buckets: int = 32
) -> list[IntArray]:
    """Choose samples that draw each cycle as it looks.

    Every cycle is cut into *buckets* of equally many samples in time; of each the samples with the lowest and
    highest x and y are kept, in their order, and both ends of the cycle: what a picture shows of a loop is
    its outline. Figures are always computed from all samples, never from these.

    Parameters
    ----------
    x, y
        Shape (samples,).
    starts, stops
        Shape (cycles,): first and last sample of each.

    Returns
    -------
    list of numpy.ndarray
        For each cycle the samples to draw, at most 4 · *buckets* + 2.
    """
    return [_outline(x, y, int(start), int(stop), buckets) for start, stop in zip(starts, stops)]


def _outline(x: FloatArray, y: FloatArray, start: int, stop: int, buckets: int) -> IntArray:
    """Samples of one cycle that keep its outline, those without a signal left out."""
    own = np.arange(start, stop + 1)[np.isfinite(y[start : stop + 1])]
    if len(own) <= 4 * buckets:
        return own
    size = -(-len(own) // buckets)
    padded = own[np.minimum(np.arange(buckets * size), len(own) - 1)].reshape(buckets, size)
    rows = np.arange(buckets)
    kept = [
        padded[rows, choose(values[padded], axis=1)] for values in (x, y) for choose in (np.argmin, np.argmax)
    ]
    return np.unique(np.concatenate([*kept, own[:1], own[-1:]]))
