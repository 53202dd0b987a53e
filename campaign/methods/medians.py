"""Medians without sorting, for arrays that nobody needs afterwards."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt


def middle_value(values: npt.NDArray[np.float64]) -> float:
    """Return the median of *values*, shape (values,), finite and at least one; their order is lost."""
    low, high = (len(values) - 1) // 2, len(values) // 2
    values.partition([low, high] if low < high else low)
    return float((values[low] + values[high]) / 2.0)
