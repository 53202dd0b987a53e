"""Adjusting the probabilities of several tests (S. Holm, Scand. J. Statist. 6 (1979) 65–70)."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]


def holm_adjusted(p: npt.ArrayLike) -> FloatArray:
    """Return Holm's adjusted probabilities, shape (tests,), in the order of *p*.

    The k-th smallest of n is multiplied by n − k + 1, and none is smaller than the one before it. A
    hypothesis is rejected at level α where its adjusted probability is at most α. (statsmodels does the same
    after a collection of all garbage and seconds of imports, which a report of many tables cannot afford.)
    """
    given = np.asarray(p, dtype=np.float64)
    order = np.argsort(given, kind="stable")
    raised = np.maximum.accumulate(given[order] * np.arange(len(given), 0, -1))
    adjusted = np.empty_like(raised)
    adjusted[order] = np.minimum(raised, 1.0)
    return adjusted
