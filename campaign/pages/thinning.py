"""Curves with more points than a picture has columns: each column keeps its lowest and highest."""

from __future__ import annotations

import numpy as np

from campaign.recordings.recording import FloatArray

LARGEST_NUMBER_OF_POINTS = 1600
"""Two points a pixel column of an 800 px figure."""


def thinned(
    x: FloatArray, y: FloatArray, most: int = LARGEST_NUMBER_OF_POINTS
) -> tuple[FloatArray, FloatArray]:
    """Return at most *most* points of a curve with the same envelope.

    The curve, shape (n,) each, is cut into buckets of equally many points (the last is padded with its own
    last point); of each the lowest and the highest y are kept, in their order, and both ends. Short curves
    come back as they are.
    """
    if len(x) <= most:
        return x, y
    buckets = most // 2 - 1
    size = -(-len(x) // buckets)
    padded = np.minimum(np.arange(buckets * size), len(x) - 1).reshape(buckets, size)
    values = np.where(np.isnan(y), 0.0, y)[padded]
    rows = np.arange(buckets)
    extremes = np.stack([padded[rows, values.argmin(axis=1)], padded[rows, values.argmax(axis=1)]], axis=1)
    kept = np.unique(np.concatenate([extremes.ravel(), [0, len(x) - 1]]))
    return x[kept], y[kept]


def rounded(values: FloatArray, span: float, digits: int = 5) -> FloatArray:
    """Return *values* to *digits* significant digits of *span* (the range of their axis)."""
    if not (np.isfinite(span) and span > 0):
        return values
    decimals = digits - int(np.ceil(np.log10(span)))
    return np.round(values, decimals) + 0.0
