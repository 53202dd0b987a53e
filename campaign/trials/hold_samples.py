"""Which samples of a hold are kept: all of a short one, and of a long one those that a reader would miss.

What is kept of a trial must not grow with its length, or a thousand long holds would not fit into memory.
Figures of a hold are computed from all samples while they are there; what is kept is for readers.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]

MOST_SAMPLES = 200_000
"""A hold of no more samples keeps them all: 16 bytes each, 3.2 MB at most."""

FIRST_SAMPLES = 40_000
"""Of a longer one all of these first samples are kept: there the signal moves fastest."""


def kept_samples(times_s: FloatArray, signal: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the samples of a hold that are kept.

    Parameters
    ----------
    times_s, signal
        Shape (samples,): every sample of the hold, in order, none missing.

    Returns
    -------
    tuple of numpy.ndarray
        Times and signals as recorded, never means, at most :data:`MOST_SAMPLES`: all of them, or the first
        :data:`FIRST_SAMPLES` and, of equally many samples each, the lowest and the highest of the rest.
    """
    count = len(signal)
    if count <= MOST_SAMPLES:
        return times_s, signal
    rest = np.arange(FIRST_SAMPLES, count)
    stretches = np.array_split(rest, (MOST_SAMPLES - FIRST_SAMPLES) // 2)
    ends = [(part[np.argmin(signal[part])], part[np.argmax(signal[part])]) for part in stretches]
    places = np.unique(np.concatenate([np.arange(FIRST_SAMPLES), np.ravel(ends)]))
    return times_s[places], signal[places]
