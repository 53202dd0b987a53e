"""Survival of things that fail, with those that had not failed when the test ended (censored)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import stats

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class Survival:
    """The product-limit estimate of the share that survives.

    Attributes
    ----------
    time
        Shape (steps,): where somebody failed; then the end of the longest test.
    at_risk, failed
        Shape (steps,): how many were still tested just before, and how many failed there.
    share, low, high
        Shape (steps,): share surviving beyond, with 95 % limits.
    """

    time: FloatArray
    at_risk: FloatArray
    failed: FloatArray
    share: FloatArray
    low: FloatArray
    high: FloatArray


def product_limit(time: FloatArray, failed: BoolArray) -> Survival:
    """Estimate survival from times of failure and of the end of testing.

    Parameters
    ----------
    time
        Shape (things,), positive: when each failed, or was last seen working.
    failed
        Shape (things,): ``True`` where it failed.

    Notes
    -----
    Kaplan & Meier, JASA 53 (1958) 457–481, by statsmodels; limits on the scale log(−log S), which keep
    within 0 and 1 (Kalbfleisch & Prentice, The Statistical Analysis of Failure Time Data, 2nd ed., 1.4.1).
    Where nobody failed the lower limit is the exact binomial one, 0.025 to the power 1/n.
    """
    end = float(np.max(time))
    if not failed.any():
        low = 0.025 ** (1.0 / len(time))
        return Survival(*(np.array([v]) for v in (end, float(len(time)), 0.0, 1.0, low, 1.0)))
    from statsmodels.duration.survfunc import SurvfuncRight  # seconds to load, wanted by few campaigns

    found = SurvfuncRight(time, failed.astype(int))
    share, error = np.asarray(found.surv_prob, float), np.asarray(found.surv_prob_se, float)
    low, high = _limits(share, error)
    made = [
        np.asarray(found.surv_times, float),
        np.asarray(found.n_risk, float),
        np.asarray(found.n_events, float),
        share,
        low,
        high,
    ]
    if made[0][-1] < end:
        left = float(np.sum(time > made[0][-1]))
        last = [end, left, 0.0, share[-1], low[-1], high[-1]]
        made = [np.append(values, value) for values, value in zip(made, last)]
    return Survival(*made)


def _limits(share: FloatArray, error: FloatArray) -> tuple[FloatArray, FloatArray]:
    """95 % limits on the scale log(−log S); 0 and the last limit where nobody survives."""
    inside = (share > 0) & (share < 1)
    low, high = np.zeros(len(share)), np.ones(len(share))
    logs = np.log(share[inside])
    reach = float(stats.norm.ppf(0.975)) * error[inside] / (share[inside] * np.abs(logs))
    low[inside], high[inside] = share[inside] ** np.exp(reach), share[inside] ** np.exp(-reach)
    high[share == 0] = high[inside][-1] if inside.any() else 1.0
    return low, high
