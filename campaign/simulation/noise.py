"""Noise of the samples of a log: white, slow of first order, and flicker."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.signal import lfilter

from campaign.simulation.truth import SampleNoise

FloatArray = npt.NDArray[np.float64]

LONGER = 4
"""Flicker is drawn over so many times the record's length: its slowest part then does not close on it."""


def sample_noise(truth: SampleNoise, generator: np.random.Generator, count: int) -> FloatArray:
    """Return *count* successive samples of noise, in signal units."""
    white = truth.white * generator.standard_normal(count)
    return np.asarray(white + truth.slow * slow_noise(generator, count, truth.slow_correlation))


def slow_noise(generator: np.random.Generator, count: int, correlation: float) -> FloatArray:
    """Return *count* samples of stationary first-order noise of unit SD."""
    normal = generator.standard_normal(count)
    normal[1:] *= np.sqrt(1.0 - correlation**2)
    return np.asarray(lfilter([1.0], [1.0, -correlation], normal))


def flicker_noise(generator: np.random.Generator, count: int, floor: float) -> FloatArray:
    """Return *count* samples of noise with a spectral density of h/f, given by its Allan deviation *floor*.

    Notes
    -----
    The Allan variance of 1/f noise is 2 ln 2 · h at any averaging time (NIST SP 1065,
    power-law noise: from the frequency to the time domain). Frequency k of the record has the variance h/k.
    """
    total = 2 * (LONGER * max(count, 2) // 2)
    power = floor**2 / (2.0 * np.log(2.0)) / np.arange(1, total // 2)
    parts = generator.standard_normal((2, len(power))) * np.sqrt(power)
    spectrum = np.zeros(total // 2 + 1, dtype=np.complex128)
    spectrum[1:-1] = (parts[0] - 1j * parts[1]) * total / 2.0
    return np.asarray(np.fft.irfft(spectrum, n=total)[:count])
