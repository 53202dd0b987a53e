"""One-way analysis of variance of balanced groups, from their means and standard deviations (GUM H.5)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.methods.calibration_line import f_tail

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class OneWayAnalysis:
    """Balanced one-way analysis; names after GUM H.5, all SDs in the unit of the means.

    ``from_means_sd`` is √K times the SD of the means (s_a), ``within_sd`` the pooled SD within groups (s_b),
    ``between_sd`` the SD of the group effect (0 where negative), ``mean_error`` the standard error of the
    grand mean with the group effect (groups − 1 degrees of freedom), ``mean_error_without`` without it (all
    − 1).
    """

    mean: float
    from_means_sd: float
    within_sd: float
    statistic: float
    p: float
    between_sd: float
    mean_error: float
    mean_error_without: float
    groups: int
    count: int


def one_way_analysis(means: FloatArray, standard_deviations: FloatArray, count: int) -> OneWayAnalysis:
    """Analyse balanced groups.

    ``means`` and ``standard_deviations`` have shape (groups,), ``count`` is the number of readings of each
    group.
    """
    groups = len(means)
    of_means = float(np.var(means, ddof=1))
    within = float(np.mean(standard_deviations**2))
    statistic = count * of_means / within
    total = (groups - 1) * count * of_means + groups * (count - 1) * within
    everything = groups * count
    return OneWayAnalysis(
        float(means.mean()),
        float(np.sqrt(count * of_means)),
        float(np.sqrt(within)),
        statistic,
        f_tail(statistic, groups - 1, groups * (count - 1)),
        float(np.sqrt(max(of_means - within / count, 0.0))),
        float(np.sqrt(of_means / groups)),
        float(np.sqrt(total / (everything - 1) / everything)),
        groups,
        count,
    )
