"""Legs and points of one sweep as far as the influence settles them: the same for all sensors of a file.

What is kept of a sweep here are places among its rows; means of a sensor's own columns over them are taken
elsewhere, once a sensor.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.trials.plateaus import expand, find_plateaus

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
Series = FloatArray | None

STEPS = 12
"""Points a leg of a sweep that moves all the time."""

TURN_SHARE = 0.15
"""A way back counts as a new leg from this share of the sweep's range on."""

TABLE_ROWS = 60
"""Up to so many rows, or without time, every row is a point of its own."""

CURVE_POINTS = 160


@dataclass(frozen=True)
class SweepRows:
    """One sweep: its rows, and which of them are averaged to which point.

    Attributes
    ----------
    rows
        Shape (rows,): rows of the trial.
    chosen
        Rows of the trial that are averaged, those of one point after another.
    counts
        Shape (points,): how many of them are a point's, at least one.
    leg, branch
        Shape (points,): number of the way up or down, and 1 rising, −1 falling, 0 neither.
    time_s, dwell_s
        Shape (points,): mean time, and the time that the point covers; NaN where time is not known.
    legs
        How many ways up or down there are.
    pause_s
        The longest pause between samples where it is far longer than usual; else 0.
    """

    rows: IntArray
    chosen: IntArray
    counts: IntArray
    leg: IntArray
    branch: IntArray
    time_s: FloatArray
    dwell_s: FloatArray
    legs: int
    pause_s: float


def rows_of_sweep(values: FloatArray, time_s: Series, rows: IntArray, *, ordered: bool) -> SweepRows:
    """Part one sweep into legs and points.

    Parameters
    ----------
    values, time_s
        Shape (rows of the trial,): the influence, and s; ``None`` where time is not recorded.
    rows
        Those of the sweep.
    ordered
        Whether time never runs backwards.

    Returns
    -------
    SweepRows
        A sweep that dwells has one point a dwell, one that moves all the time one a step of equal width on
        every leg, a table one a row; points are in the order taken.
    """
    swept = values[rows]
    legs = _legs(swept)
    signs = _leg_signs(swept, legs)
    clock = time_s if ordered else None
    places, starts, stops, turning = _stretches(
        swept, legs, tabular=time_s is None or len(rows) <= TABLE_ROWS
    )
    if not turning and clock is not None:
        leg, seconds = legs[places[starts]], _means(clock[rows[places]], starts, stops - starts)
        if np.isfinite(seconds).all():
            order = np.lexsort([seconds, leg])
            starts, stops = starts[order], stops[order]
    own, _ = expand(starts, stops)
    counts, chosen = stops - starts, rows[places[own]]
    firsts = np.cumsum(counts) - counts
    leg = legs[places[starts]]
    branch = signs[leg]
    if turning:
        branch = np.where(np.concatenate([[False], np.diff(leg) != 0]), 0, branch)
    timed = np.full((2, len(counts)), np.nan)
    if clock is not None:
        moments = clock[chosen]
        timed[0] = means_over(clock, chosen, counts)
        timed[1] = np.maximum.reduceat(moments, firsts) - np.minimum.reduceat(moments, firsts)
    number = int(legs.max(initial=0)) + 1
    return SweepRows(rows, chosen, counts, leg, branch, timed[0], timed[1], number, _pause(clock, rows))


def means_over(series: FloatArray, chosen: IntArray, counts: IntArray) -> FloatArray:
    """Return the means of a series over the rows of each point; NaN where one of them has no value."""
    point = np.repeat(np.arange(len(counts)), counts)
    return np.asarray(np.bincount(point, series.take(chosen), minlength=len(counts)) / counts)


def _means(values: FloatArray, starts: IntArray, counts: IntArray) -> FloatArray:
    """Means over stretches that lie one after another."""
    return np.asarray(np.add.reduceat(values, starts) / counts)


def _stretches(
    swept: FloatArray, legs: IntArray, *, tabular: bool
) -> tuple[IntArray, IntArray, IntArray, bool]:
    """Places of the sweep, stretches of them that are one point each, and whether turns are points apart.

    Of dwells or of a table, the point at a turn belongs to neither branch.
    """
    every = np.arange(len(swept))
    if tabular:
        return every, every, every + 1, True
    starts, stops = find_plateaus(swept)
    if len(starts) >= 3 and float(np.sum(stops - starts)) >= 0.5 * len(swept):
        return every, starts + (stops - starts) // 3, stops, True
    return *_steps(swept, legs), False


def _steps(swept: FloatArray, legs: IntArray) -> tuple[IntArray, IntArray, IntArray]:
    """Places of a sweep that never rests, ordered by equal steps of the influence on every leg."""
    orders, edges, done = [], [np.zeros(0, dtype=np.int64)], 0
    for _, start, stop in each_leg(legs):
        own = swept[start:stop]
        low, high = float(own.min()), float(own.max())
        if high <= low:
            continue
        step = np.minimum(((own - low) / (high - low) * STEPS).astype(np.int8), STEPS - 1)
        order = np.argsort(step, kind="stable")
        orders.append(start + order)
        edges.append(done + np.append(0, np.flatnonzero(np.diff(step[order])) + 1))
        done += stop - start
    starts = np.concatenate(edges)
    places = np.concatenate([np.zeros(0, dtype=np.int64), *orders])
    return places, starts, np.append(starts[1:], done)[: len(starts)]


def _legs(values: FloatArray) -> IntArray:
    """Number of the leg of every row: cut at turns of more than a share of the range (shape (rows,)).

    Long logs are first averaged over blocks of rows, so that the walk from turn to turn stays short.
    """
    size = max(len(values) // 1500, 1)
    blocks = np.add.reduceat(values, np.arange(0, len(values), size))
    blocks /= np.diff(np.append(np.arange(0, len(values), size), len(values)))
    turns = _turns(blocks, TURN_SHARE * float(np.ptp(values)))
    at = np.array(turns, dtype=np.int64) * size
    return np.searchsorted(at, np.arange(len(values)), side="right").astype(np.int64)


def _turns(values: FloatArray, least: float) -> list[int]:
    """Places where the series turns and then comes back by more than *least*."""
    turns: list[int] = []
    best, sign = _first_leg(values, least)
    extreme = float(values[best])
    for place, value in enumerate(values[best:].tolist(), best):
        if sign * (value - extreme) > 0:
            best, extreme = place, value
        elif sign * (extreme - value) > least:
            turns.append(best)
            best, extreme, sign = place, value, -sign
    return turns


def _first_leg(values: FloatArray, least: float) -> tuple[int, int]:
    """Return the place from which the series is known to rise (1) or fall (−1), and which; 0 for neither."""
    lowest, highest = np.minimum.accumulate(values), np.maximum.accumulate(values)
    wide = np.flatnonzero(highest - lowest > least)
    if not len(wide):
        return len(values) - 1, 0
    place = int(wide[0])
    return place, 1 if values[place] == highest[place] else -1


def each_leg(legs: IntArray) -> list[tuple[int, int, int]]:
    """Number, first row and one past the last of every leg."""
    stops = np.append(np.flatnonzero(np.diff(legs)) + 1, len(legs)).tolist()
    return [(int(legs[start]), start, stop) for start, stop in zip([0, *stops[:-1]], stops) if stop > start]


def _leg_signs(values: FloatArray, legs: IntArray) -> IntArray:
    """1 for every leg that rises over its rows, −1 for one that falls; shape (legs,)."""
    signs = np.zeros(int(legs.max(initial=0)) + 1, dtype=np.int64)
    for leg, start, stop in each_leg(legs):
        own = values[start:stop]
        if len(own) > 1:
            signs[leg] = int(np.sign(np.dot(np.arange(len(own)) - (len(own) - 1) / 2.0, own)))
        else:
            signs[leg] = -signs[leg - 1] if leg else 0
    return signs


def _pause(clock: Series, rows: IntArray) -> float:
    """The longest pause between samples where it is far longer than usual; else 0."""
    if clock is None or len(rows) <= TABLE_ROWS:
        return 0.0
    steps = np.diff(clock[rows])
    longest = float(steps.max())
    return longest if longest > max(20.0 * float(np.median(steps)), 0.05 * float(steps.sum())) else 0.0


@dataclass(frozen=True)
class CurveBlocks:
    """A sweep cut into blocks of rows for drawing.

    Attributes
    ----------
    places
        Shape (blocks, longest): places of each, the last one repeated.
    kept
        Places that are drawn for the influence's sake: its extremes in every block, and both ends.
    """

    places: IntArray
    kept: IntArray


def curve_blocks(swept: FloatArray) -> CurveBlocks | None:
    """Return the blocks of a sweep, shape (rows,); ``None`` where all rows are drawn."""
    if len(swept) <= CURVE_POINTS:
        return None
    edges = np.linspace(0, len(swept), CURVE_POINTS // 4 + 1).astype(np.int64)
    starts, stops = edges[:-1, None], edges[1:, None]
    places = np.minimum(starts + np.arange(int((stops - starts).max())), stops - 1)
    return CurveBlocks(places, np.concatenate([[0, len(swept) - 1], extremes_in(swept, places)]))


def extremes_in(series: FloatArray, places: IntArray) -> IntArray:
    """Return the places of the smallest and largest value in every block."""
    own, first = series[places], places[:, 0]
    return np.concatenate([first + own.argmin(axis=1), first + own.argmax(axis=1)])
