"""Coupling: neighbours that move while only one sensor of their module is strained.

A recording that carries several sensors and a length that belongs to one of them says what the others do
meanwhile. Their signals are set against that one's length and the influence of the trial, over blocks
of rows.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterator, Mapping
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

from campaign.analyses.sensor_figures import principal_lines
from campaign.methods.autocorrelation import stretch_means
from campaign.recordings.sensor_share import TrialKey
from campaign.trials.sweeps import SweepFeatures, Trace

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration

FloatArray = npt.NDArray[np.float64]

COUPLING_COLUMNS = (
    *("generation", "module", "sensor", "strained", "trial", "repetition", "quantity"),
    *("coefficient", "low", "high", "unit", "relative", "p", "p_adjusted", "moves"),
)
"""Columns of the table of coupling: one row a neighbour, strained sensor and run.

``coefficient`` is the neighbour's signal per unit of the strained sensor's length (in ``quantity``, as
recorded), beside the influence of the trial; ``relative`` the same over the neighbour's own slope, where both
are strains; ``p_adjusted`` is Holm's over all rows, and ``moves`` whether it is below 0.05.
"""


def coupling_table(
    features: Mapping[TrialKey, SweepFeatures], calibration: Calibration | None
) -> pd.DataFrame:
    """Return what neighbours did while one sensor's length changed; empty where no recording can say.

    Parameters
    ----------
    features
        Trials reduced to sweeps, with their traces.
    calibration
        The neighbours' own slopes; ``None`` where there are none.
    """
    slopes = _own_slopes(calibration)
    rows = [row for group in _shared_runs(features) for row in _of_run(group, slopes)]
    table = pd.DataFrame(rows, columns=list(COUPLING_COLUMNS))
    if table.empty:
        return table
    order = np.argsort(table["p"].to_numpy(float), kind="stable")
    scaled = table["p"].to_numpy(float)[order] * np.arange(len(table), 0, -1)
    adjusted = np.empty(len(table))
    adjusted[order] = np.minimum(np.maximum.accumulate(scaled), 1.0)
    table = table.assign(p_adjusted=adjusted, moves=adjusted < 0.05)
    return table.sort_values(["generation", "module", "sensor", "trial"], kind="stable", ignore_index=True)


def _own_slopes(calibration: Calibration | None) -> dict[tuple[str, str], float]:
    if calibration is None or calibration.sensor_lines.empty or calibration.reference.name != "strain":
        return {}
    rows = principal_lines(calibration.sensor_lines)
    names = zip(rows["module"].astype(str), rows["sensor"].astype(str), strict=True)
    return dict(zip(names, rows["slope"].astype(float), strict=True))


def _shared_runs(features: Mapping[TrialKey, SweepFeatures]) -> Iterator[list[SweepFeatures]]:
    """Trials of one recording and repetition that several sensors share, all with a trace."""
    groups: dict[tuple[str, int], list[SweepFeatures]] = defaultdict(list)
    for found in features.values():
        if found.trace is not None:
            groups[found.identity.file, found.identity.repetition].append(found)
    yield from (groups[key] for key in sorted(groups) if len(groups[key]) > 1)


def _of_run(
    group: list[SweepFeatures], slopes: Mapping[tuple[str, str], float]
) -> Iterator[dict[str, object]]:
    """One row a neighbour where exactly one sensor's length is known and moves."""
    moving = [found for found in group if found.trace is not None and _moves(found.trace.reference)]
    if len(moving) != 1 or any(_known(f.trace) for f in group if f is not moving[0]):
        return
    strained = moving[0]
    assert strained.trace is not None
    for found in sorted(group, key=lambda f: f.identity.sensor):
        if found is strained or found.trace is None or found.identity.module != strained.identity.module:
            continue
        fitted = _slope_beside(found.trace.signal, strained.trace.reference, found.trace.influence)
        if fitted is None:
            continue
        value, error, freedom = fitted
        reach = float(stats.t.ppf(0.975, freedom)) * error
        own = slopes.get((found.identity.module, found.identity.sensor), np.nan)
        is_strain = strained.trace.quantity == "strain"
        yield {
            "generation": found.identity.generation,
            "module": found.identity.module,
            "sensor": found.identity.sensor,
            "strained": strained.identity.sensor,
            "trial": found.identity.file,
            "repetition": found.identity.repetition,
            "quantity": strained.trace.quantity,
            "coefficient": value,
            "low": value - reach,
            "high": value + reach,
            "unit": f"{found.signal_unit} per {'mm/mm' if is_strain else 'mm'}",
            "relative": value / own if is_strain and own else np.nan,
            "p": float(2.0 * stats.t.sf(abs(value) / error, freedom)) if error > 0 else 1.0,
            "p_adjusted": np.nan,
            "moves": False,
        }


def _known(trace: Trace | None) -> bool:
    return trace is not None and bool(np.isfinite(trace.reference).any())


def _moves(reference: FloatArray) -> bool:
    known = reference[np.isfinite(reference)]
    return len(known) > 8 and float(np.ptp(known)) > 0.005 * max(float(np.abs(known).max()), 1.0)


def _slope_beside(
    signal: FloatArray, length: FloatArray, influence: FloatArray
) -> tuple[float, float, float] | None:
    """Slope of the signal on the length beside the influence, its standard error and degrees of freedom."""
    known = np.isfinite(signal) & np.isfinite(length) & np.isfinite(influence)
    if known.sum() < 12:
        return None
    others = np.column_stack([np.ones(known.sum()), influence[known] - influence[known].mean()])
    rest_length = length[known] - others @ np.linalg.lstsq(others, length[known], rcond=None)[0]
    rest_signal = signal[known] - others @ np.linalg.lstsq(others, signal[known], rcond=None)[0]
    if float(rest_length @ rest_length) <= 1e-12 * float(length[known] @ length[known] + 1e-300):
        return None
    found = stretch_means(rest_signal, rest_length, np.array([known.sum()], dtype=np.int64))
    freedom = max(float(found.slope_degrees_of_freedom[0]) - 1.0, 1.0)
    return float(found.slopes[0]), float(found.slope_standard_errors[0]), freedom
