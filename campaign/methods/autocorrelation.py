"""Means of autocorrelated samples, many stretches at once, with pooled autocorrelation.

The variance of a mean of n autocorrelated samples is γ₀ τ / n with τ the integrated autocorrelation time.
Here τ comes from the initial positive sequence (C. J. Geyer, Practical Markov chain Monte Carlo,
Statistical Science 7 (1992) 473–483) of autocovariances pooled over the stretches, corrected for the bias
that subtracting each stretch's own mean causes.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

SHORT_STRETCH = 8
"""Stretches with fewer samples take the pooled variance: their own has too few degrees of freedom."""

FIXED_POINT_STEPS = 30

FEW_LAGS = 8
"""Lags that are summed one by one first; twice as many each time these do not hold the whole sequence."""

MANY_LAGS = 64
"""Beyond so many lags all are taken at once, by the Fourier transform."""


@dataclass(frozen=True)
class StretchMeans:
    """Means of stretches of autocorrelated samples.

    Attributes
    ----------
    means, standard_errors, effective_counts
        Shape (stretches,): mean, its standard error (unit of the samples) and count after autocorrelation.
    slopes, slope_standard_errors
        Shape (stretches,): least-squares slope against time and its standard error (unit of the samples a
        second); NaN for stretches of fewer than 3 samples.
    slope_degrees_of_freedom
        Shape (stretches,): degrees of freedom behind the slopes' standard errors, at least 1. A drift does
        not lower them: the autocorrelation is taken about the lines.
    autocorrelation_time
        Pooled integrated autocorrelation time, in samples, at least 1 (1 for independent samples).
    """

    means: FloatArray
    standard_errors: FloatArray
    effective_counts: FloatArray
    slopes: FloatArray
    slope_standard_errors: FloatArray
    slope_degrees_of_freedom: FloatArray
    autocorrelation_time: float


def stretch_means(
    values: FloatArray, times: FloatArray, counts: IntArray, *, resolution: float = 0.0
) -> StretchMeans:
    """Reduce consecutive stretches of samples to means with standard errors.

    Parameters
    ----------
    values, times
        Shape (samples,): the samples of all stretches one after another, and when they were taken (s).
    counts
        Shape (stretches,): samples of each stretch, each at least 1; they add up to the number of samples.
    resolution
        Step of the display in the unit of the samples; a standard error is never below resolution/√12
        (GUM F.2.2.1). 0 where it is not known.

    Returns
    -------
    StretchMeans
        The effective count of a stretch is never more than the number of times its value changed, plus one: a
        slow instrument that is logged fast repeats its last value, and a repeated value is one observation.
    """
    firsts = np.cumsum(counts) - counts
    changes = _changes(values, firsts)
    codes = np.repeat(np.arange(len(counts)), counts)
    means = np.bincount(codes, values) / counts  # summed one by one: seeds are taken from these means
    residuals = values - means[codes]
    times_centred = times - (np.bincount(codes, times) / counts)[codes]
    squares = np.asarray(np.add.reduceat(residuals**2, firsts), dtype=np.float64)

    factors = _variance_factors(_pooled_correlation(residuals, counts, removed=1), counts)
    factors = np.clip(factors, 1.0, counts.astype(float))
    effective: FloatArray = np.asarray(np.minimum(counts / factors, 1.0 + changes), dtype=np.float64)
    variances = _own_variances(squares, counts, effective)
    floor = resolution / np.sqrt(12.0)
    errors = np.maximum(np.sqrt(variances / effective), floor)

    slopes, slope_errors, degrees = _slopes(residuals, times_centred, firsts, counts)
    longest_time = float(np.max(factors, initial=1.0))
    return StretchMeans(means, errors, effective, slopes, slope_errors, degrees, longest_time)


def _changes(values: FloatArray, firsts: IntArray) -> IntArray:
    """How many samples of each stretch differ from the one before them in it."""
    changed = np.empty(len(values), dtype=bool)
    np.not_equal(values[1:], values[:-1], out=changed[1:])
    changed[firsts] = False
    return np.add.reduceat(changed, firsts, dtype=np.int64)


def _own_variances(squares: FloatArray, counts: IntArray, effective: FloatArray) -> FloatArray:
    """Variance of the samples of each stretch, mean estimated; pooled for short stretches."""
    degrees = counts * (1.0 - 1.0 / np.maximum(effective, 1.0 + 1e-9))
    pooled = float(np.sum(squares) / max(float(np.sum(degrees)), 1e-300)) if np.any(squares > 0) else 0.0
    own = np.divide(squares, degrees, out=np.full(len(counts), pooled), where=degrees > 0.5)
    return np.where((counts < SHORT_STRETCH) | (effective < 2.0), pooled, own)


def _slopes(
    residuals: FloatArray, times: FloatArray, firsts: IntArray, counts: IntArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Least-squares slopes, standard errors by the autocorrelation about the lines, degrees of freedom."""
    spread = np.add.reduceat(times**2, firsts)
    usable = (spread > 0) & (counts >= 3)
    nan = np.full(len(counts), np.nan)
    slopes = np.divide(np.add.reduceat(times * residuals, firsts), spread, out=nan.copy(), where=usable)
    about_line = residuals - np.repeat(np.nan_to_num(slopes), counts) * times
    correlation = _pooled_correlation(about_line, counts, removed=2)
    factors = np.clip(_variance_factors(correlation, counts), 1.0, counts.astype(float))
    variance = np.add.reduceat(about_line**2, firsts) / np.maximum(counts - 2.0 * factors, 1.0)
    errors = np.sqrt(np.divide(variance * factors, spread, out=nan.copy(), where=usable))
    return slopes, errors, np.maximum(counts / factors - 2.0, 1.0)


def _pooled_correlation(residuals: FloatArray, counts: IntArray, removed: int) -> FloatArray:
    """Autocorrelations at lags 0, 1, … up to the end of the initial positive sequence.

    ``removed`` is the number of coefficients fitted to each stretch before (1: mean, 2: line). Each lowers
    every autocovariance by about the variance of the mean, which is put back by fixed-point iteration. About
    lines the lags are those of the uncorrected sequence: what is put back would lengthen it without end.
    """
    every = (_whole_median(counts) // 2 if len(counts) else 0) + 1
    if every < 2 or not np.any(residuals * residuals):  # none, or too small to be squared
        return np.ones(1)
    sums, lags = np.zeros(0), FEW_LAGS
    apart = _apart(residuals, counts)
    while lags < min(every, MANY_LAGS + 1):
        sums = np.append(sums, _few_lagged_sums(apart, len(sums), lags))
        found = _positive_sequence(sums, counts, removed, whole=False)
        if found is not None:
            return found
        lags *= 2
    sums = _lagged_sums(residuals, counts)[:every]
    found = _positive_sequence(sums, counts, removed, whole=True)
    assert found is not None
    return found


def _positive_sequence(sums: FloatArray, counts: IntArray, removed: int, *, whole: bool) -> FloatArray | None:
    """Autocorrelations of the initial positive sequence; ``None`` where it may go on beyond the lags given.

    *sums* are those of the lags from 0 on, and *whole* says that there are no more.
    """
    pairs_each = np.maximum(counts[:, None] - np.arange(len(sums))[None, :], 0).astype(float)
    pairs = pairs_each.sum(axis=0)
    shares = pairs_each[:, 1:] / counts[:, None]
    kept = _initial_positive(sums / pairs)
    for _ in range(FIXED_POINT_STEPS):
        if len(kept) == len(sums) and not whole:
            return None
        factors = 1.0 + 2.0 * shares[:, : len(kept) - 1] @ (kept[1:] / kept[0])
        of_means = kept[0] * np.minimum(np.maximum(factors / counts, 0.0), 1.0)
        corrected = (sums + removed * (of_means @ pairs_each)) / pairs
        after = _initial_positive(corrected) if removed == 1 else corrected[: len(kept)]
        close = len(after) == len(kept) and abs(after[0] - kept[0]) <= 1e-5 * kept[0]
        kept = after
        if close:
            break
    if len(kept) == len(sums) and not whole:
        return None
    return np.asarray(kept / kept[0])


def _apart(residuals: FloatArray, counts: IntArray) -> FloatArray:
    """The stretches one after another with zeros between them, and after the last."""
    gap = MANY_LAGS - 1
    apart = np.zeros(len(residuals) + len(counts) * gap)
    apart[np.arange(len(residuals)) + np.repeat(np.arange(len(counts)) * gap, counts)] = residuals
    return apart


def _few_lagged_sums(apart: FloatArray, first: int, end: int) -> list[float]:
    """Σ over stretches of Σ_t r_t r_(t+k), for k from *first* to *end* − 1, at most :data:`MANY_LAGS`."""
    length = len(apart) - (MANY_LAGS - 1)
    return [np.einsum("i,i->", apart[:length], apart[k : k + length]) for k in range(first, end)]


def _whole_median(counts: IntArray) -> int:
    """Median, rounded down."""
    ordered = np.sort(counts)
    return int(ordered[(len(counts) - 1) // 2] + ordered[len(counts) // 2]) // 2


def _lagged_sums(residuals: FloatArray, counts: IntArray) -> FloatArray:
    """The same for every k, by the Fourier transform of padded rows."""
    longest = int(counts.max())
    rows = np.zeros((len(counts), longest))
    rows[np.arange(longest)[None, :] < counts[:, None]] = residuals
    size = 1 << (2 * longest - 1).bit_length()
    power = np.sum(np.abs(np.fft.rfft(rows, size, axis=1)) ** 2, axis=0)
    return np.asarray(np.fft.irfft(power, size)[:longest])


def _initial_positive(covariance: FloatArray) -> FloatArray:
    """Lags up to the first pair (γ_2m + γ_2m+1) that is not positive; lag 0 always."""
    even = covariance[: 2 * (len(covariance) // 2)]
    pair_sums = even[0::2] + even[1::2]
    stops = np.flatnonzero(pair_sums <= 0)
    pairs = int(stops[0]) if len(stops) else len(pair_sums)
    return covariance[: max(2 * pairs, 1)]


def _variance_factors(correlation: FloatArray, counts: IntArray) -> FloatArray:
    """Variance of the mean times n/γ₀ for each stretch: 1 + 2 Σ (1 − k/n) ρ_k."""
    lags = np.arange(1, len(correlation))
    weights = np.clip(1.0 - lags[None, :] / counts[:, None], 0.0, None)
    return np.asarray(1.0 + 2.0 * weights @ correlation[1:])
