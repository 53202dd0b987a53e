"""Overlapping Allan deviation with its intervals: what averaging buys, and from when on it buys nothing.

Readings of a signal at rest take the place of fractional frequencies. Source: W. J. Riley, Handbook of
Frequency Stability Analysis, NIST Special Publication 1065 (2008), 5.2.4 (overlapping Allan variance), 5.4.1
(equivalent degrees of freedom, after C. A. Greenhall and W. J. Riley, Proc. 35th PTTI Meeting, 2003), 5.5.3
(noise type from the lag-1 autocorrelation, after Riley and Greenhall, 18th EFTF, 2004).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Literal

import numpy as np
import numpy.typing as npt
from scipy import special

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

FLICKER_FACTOR = float(np.sqrt(2.0 * np.log(2.0) / np.pi))
"""Allan deviation of flicker noise divided by its level (SP 1065, 5.2 and table of noise types)."""

FEWEST_FOR_NOISE_TYPE = 30
"""Averages that telling the noise type takes; at longer averaging times the last one told is kept."""

LARGEST_JITTER = 0.25
LARGEST_JITTER_SHARE = 0.05
"""Sampling counts as even where at most this share of the steps is off a whole interval by more than that."""

STEPS_PER_OCTAVE = 2


@dataclass(frozen=True)
class AllanDeviation:
    """Overlapping Allan deviation at several averaging times.

    Attributes
    ----------
    factors
        Shape (times,): samples averaged, m.
    averaging_times_s
        Shape (times,): m times the sampling interval.
    deviations, low, high
        Shape (times,): deviation and its 95 % limits by χ², unit of the values.
    differences
        Shape (times,): second differences that each deviation is made of.
    degrees_of_freedom
        Shape (times,): equivalent degrees of freedom.
    noise_exponents
        Shape (times,): exponent α of the power spectrum f^α of the noise: 0 white, −1 flicker, −2 random
        walk.
    """

    factors: IntArray
    averaging_times_s: FloatArray
    deviations: FloatArray
    low: FloatArray
    high: FloatArray
    differences: IntArray
    degrees_of_freedom: FloatArray
    noise_exponents: IntArray


@dataclass(frozen=True)
class NoiseFloors:
    """What an Allan deviation says about averaging.

    Attributes
    ----------
    white, white_low, white_high
        Level of the white noise, unit of the values times √s: the deviation of a mean over τ seconds is
        white/√τ. NaN where the shortest averaging times are not white.
    flicker, flicker_low, flicker_high
        Flicker floor, unit of the values: the least deviation divided by √(2 ln 2/π). NaN where the deviation
        still falls at the longest averaging time.
    best_averaging_time_s
        Averaging time of the least deviation; where ``reached`` is False it is the longest tried.
    least_deviation
        The least deviation, unit of the values.
    reached
        Whether the deviation stops falling within the record.
    """

    white: float
    white_low: float
    white_high: float
    flicker: float
    flicker_low: float
    flicker_high: float
    best_averaging_time_s: float
    least_deviation: float
    reached: bool


def overlapping_allan_deviation(
    values: FloatArray,
    interval_s: float,
    *,
    kind: Literal["frequency", "phase"] = "frequency",
    factors: IntArray | None = None,
    level: float = 0.95,
) -> AllanDeviation:
    """Compute the overlapping Allan deviation of an evenly sampled series.

    Parameters
    ----------
    values
        Shape (n,): readings (``kind="frequency"``) or their running sums times the interval
        (``kind="phase"``, one more than there are readings). Missing readings are NaN: only differences
        without any take part, and degrees of freedom fall accordingly.
    interval_s
        Sampling interval in s.
    factors
        Numbers of samples to average; where not given, half octaves from 1 to a third of the record.
    level
        Confidence of the limits.

    Returns
    -------
    AllanDeviation
        Averaging times for which no difference is whole are left out.
    """
    readings = values if kind == "frequency" else np.diff(values) / interval_s
    chosen = _default_factors(len(readings)) if factors is None else np.asarray(factors, dtype=np.int64)
    sums = np.concatenate([[0.0], np.cumsum(np.nan_to_num(readings))])
    missing = np.concatenate([[0], np.cumsum(~np.isfinite(readings))])
    found = [(int(m), *_mean_square(sums, missing, int(m))) for m in chosen if 2 * m <= len(readings)]
    kept = [(m, square, count) for m, square, count in found if count > 0]
    m_kept = np.array([m for m, _, _ in kept], dtype=np.int64)
    counts = np.array([count for _, _, count in kept], dtype=np.int64)
    deviations = np.sqrt(np.array([square for _, square, _ in kept]) / 2.0)
    exponents = _noise_exponents(readings, m_kept)
    freedom = np.array(
        [equivalent_degrees_of_freedom(int(a), int(m), int(c)) for a, m, c in zip(exponents, m_kept, counts)]
    )
    tails = [2.0 * special.gammaincinv(freedom / 2.0, q) for q in ((1 + level) / 2, (1 - level) / 2)]
    low, high = (deviations * np.sqrt(freedom / tail) for tail in tails)
    return AllanDeviation(
        m_kept,
        np.asarray(m_kept * interval_s, dtype=np.float64),
        deviations,
        low,
        high,
        counts,
        np.asarray(freedom),
        exponents,
    )


def noise_floors(allan: AllanDeviation) -> NoiseFloors:
    """Return white noise level, flicker floor and best averaging time of *allan* (at least one time)."""
    best = int(np.argmin(allan.deviations))
    reached = best < len(allan.deviations) - 1 and bool(
        np.any(allan.low[best + 1 :] > allan.deviations[best])
    )
    white = int(np.argmax(allan.degrees_of_freedom)) if len(allan.factors) else 0
    whites = (
        _three(allan, white, np.sqrt(allan.averaging_times_s[white]))
        if allan.noise_exponents[white] == 0
        else (np.nan, np.nan, np.nan)
    )
    flickers = _three(allan, best, 1.0 / FLICKER_FACTOR) if reached else (np.nan, np.nan, np.nan)
    return NoiseFloors(
        *whites, *flickers, float(allan.averaging_times_s[best]), float(allan.deviations[best]), reached
    )


def evenly_sampled(times_s: FloatArray, values: FloatArray) -> tuple[FloatArray, float] | None:
    """Put samples on an even grid, NaN where one is missing; ``None`` where they were not taken evenly.

    Parameters
    ----------
    times_s
        Shape (n,), rising.
    values
        Shape (n,).

    Returns
    -------
    tuple of ndarray and float
        Shape (grid,) and the interval in s: the median step between samples. Each step is rounded to whole
        intervals, so that a clock which runs slightly off does not matter.
    """
    steps = np.diff(times_s)
    interval = float(np.median(steps)) if len(steps) else 0.0
    if interval <= 0.0 or not np.isfinite(interval):
        return None
    whole = np.maximum(np.round(steps / interval), 0.0)
    off = np.abs(steps / interval - whole) > LARGEST_JITTER
    if np.mean(off) > LARGEST_JITTER_SHARE or np.any(whole < 1.0) or whole.sum() > 20.0 * len(times_s):
        return None
    places = np.concatenate([[0], np.cumsum(whole)]).astype(np.int64)
    grid = np.full(places[-1] + 1, np.nan)
    grid[places] = values
    return grid, interval


@cache
def equivalent_degrees_of_freedom(exponent: int, factor: int, differences: int) -> float:
    """Return the equivalent χ² degrees of freedom of one overlapping Allan variance.

    *exponent* is α from −2 to 2, *factor* the number m of samples averaged, *differences* how many second
    differences were averaged.

    Source: NIST SP 1065, 5.4.1, the sum without its approximations (d = 2, F = m, S = m).
    """
    last = min(differences, 3 * factor)
    lags = np.arange(1, last)
    at_zero = float(_difference_covariance(np.zeros(1), factor, exponent)[0])
    inner = _difference_covariance(lags / factor, factor, exponent) ** 2
    outer = float(_difference_covariance(np.array([last / factor]), factor, exponent)[0]) ** 2
    total = at_zero**2 + (1.0 - last / differences) * outer
    total += 2.0 * float(np.sum((1.0 - lags / differences) * inner))
    return max(at_zero**2 * differences / total, 1.0)


def _default_factors(readings: int) -> IntArray:
    """Half octaves from 1 to a third of the readings."""
    largest = max(readings // 3, 1)
    steps = int(np.floor(np.log2(largest) * STEPS_PER_OCTAVE)) + 1
    return np.unique(np.round(2.0 ** (np.arange(steps) / STEPS_PER_OCTAVE)).astype(np.int64))


def _mean_square(sums: FloatArray, missing: IntArray, m: int) -> tuple[float, int]:
    """Mean square difference of adjacent averages of m readings, and how many differences are whole."""
    differences = (sums[2 * m :] - 2.0 * sums[m:-m] + sums[: -2 * m]) / m
    whole = missing[2 * m :] == missing[: -2 * m]
    count = int(np.count_nonzero(whole))
    return (float(np.mean(differences[whole] ** 2)) if count else np.nan), count


def _three(allan: AllanDeviation, place: int, factor: float) -> tuple[float, float, float]:
    columns = (allan.deviations, allan.low, allan.high)
    return (
        float(columns[0][place] * factor),
        float(columns[1][place] * factor),
        float(columns[2][place] * factor),
    )


def _noise_exponents(readings: FloatArray, factors: IntArray) -> IntArray:
    """Exponent at every factor, from adjacent averages; kept where too few averages are left."""
    exponents = np.zeros(len(factors), dtype=np.int64)
    known = 0
    for place, m in enumerate(factors):
        rows = len(readings) // int(m)
        averages = readings[: rows * int(m)].reshape(rows, int(m)).mean(axis=1)
        averages = averages[np.isfinite(averages)]
        if len(averages) >= FEWEST_FOR_NOISE_TYPE:
            known = _noise_exponent(averages)
        exponents[place] = known
    return exponents


def _noise_exponent(averages: FloatArray) -> int:
    """Exponent α by the lag-1 autocorrelation r₁: differenced d times until δ = r₁/(1 + r₁) < ¼.

    α = −2 (δ + d), held between −2 and 2.
    """
    series, taken = averages, 0
    while True:
        centred = series - series.mean()
        square = float(centred @ centred)
        correlation = float(centred[1:] @ centred[:-1]) / square if square > 0 else 0.0
        delta = correlation / (1.0 + correlation) if correlation > -1.0 else -1.0
        if delta < 0.25 or taken == 2:
            return int(np.clip(round(-2.0 * (delta + taken)), -2, 2))
        series, taken = np.diff(series), taken + 1


def _difference_covariance(lag: FloatArray, factor: int, exponent: int) -> FloatArray:
    """s_z of SP 1065 for second differences, lag in averaging times."""
    return np.asarray(
        6.0 * _average_covariance(lag, factor, exponent)
        - 4.0
        * (_average_covariance(lag - 1, factor, exponent) + _average_covariance(lag + 1, factor, exponent))
        + _average_covariance(lag - 2, factor, exponent)
        + _average_covariance(lag + 2, factor, exponent)
    )


def _average_covariance(lag: FloatArray, factor: int, exponent: int) -> FloatArray:
    """s_x of SP 1065, filtered by the sampling of the phase: F²(2 s_w(t) − s_w(t − 1/F) − s_w(t + 1/F))."""
    middle = 2.0 * _structure(lag, exponent)
    return np.asarray(
        factor**2
        * (middle - _structure(lag - 1.0 / factor, exponent) - _structure(lag + 1.0 / factor, exponent))
    )


def _structure(lag: FloatArray, exponent: int) -> FloatArray:
    """s_w of SP 1065: the generalised autocovariance of noise with exponent α."""
    distance = np.abs(lag)
    if exponent % 2 == 0:
        power = 3 - exponent
        sign = -1.0 if exponent in (2, -2) else 1.0
        return np.asarray(sign * distance ** (power if exponent != 2 else 1))
    logarithm = np.log(np.where(distance > 0, distance, 1.0))
    return np.asarray((1.0 if exponent == 1 else -1.0) * distance ** (3 - exponent) * logarithm)
