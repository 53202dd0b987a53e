"""One table of all loops of a campaign, in one reference quantity and on each sensor's own scale."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.analyses.grouped_rows import columns_of_all, rows_of_all
from campaign.analyses.sensor_figures import principal_lines
from campaign.recordings.recording import ELONGATION, LENGTH, STRAIN, ReferenceQuantity
from campaign.trials.cyclic import CyclicFeatures
from campaign.trials.features import into_reference

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration

FloatArray = npt.NDArray[np.float64]

SENSOR_KEYS = ["generation", "module", "sensor"]
"""Columns that together name one sensor."""

RATE_STEP = 1.25
"""Rates that differ by less than this factor from their neighbours are one rate."""

FULL_AMPLITUDE = 0.8
"""Trials of a sensor that reach at least this share of its largest amplitude are compared."""

STANDING_IN = 3
"""So many last cycles stand for settled ones in a trial that does not settle."""

BY_LINE, BY_LOOP = "the sensor's staircase line", "the loop's own range"
"""What per cent and strain equivalents refer to."""

_OWN = (
    "cycle",
    "mid_width",
    "largest_width",
    "area",
    "degree",
    "degree_of_whole_signal",
    "zero_signal",
    "peak_signal",
    "signal_range",
    "whole",
    "settled",
    "temperature_c",
    "pressure_kpa",
)


@dataclass(frozen=True)
class LoopTable:
    """All loops of a campaign.

    Attributes
    ----------
    reference
        What lengths are given in.
    rows
        One row a loop: generation, batch, module, sensor, position, session, repetition, trial, started, run
        (number of the run of its sensor, in order of time), unit, the columns of
        :data:`campaign.trials.cyclic.CYCLE_COLUMNS` (``low``, ``high``, ``at`` and ``rate`` in units of
        *reference*), rate_level (rate that the loop's rate belongs to; NaN without time), full_scale_output
        and slope (signal; signal per unit of *reference*) with ``scale``, what they come from, and
        ``counted``: whether the settled figures use it.
    width
        Shape (loops, places): signed width in per cent of full_scale_output.
    rate
        The rate at which sensors are compared; NaN where no time was recorded.
    left_out
        Trials whose lengths cannot be given in *reference*.
    """

    reference: ReferenceQuantity
    rows: pd.DataFrame
    width: FloatArray
    rate: float
    left_out: tuple[str, ...]


def common_reference(
    features: Iterable[CyclicFeatures], calibration: Calibration | None
) -> ReferenceQuantity:
    """Return what loops are given in: that of the calibration, else strain, elongation or length.

    Without a calibration it is the first of these that is known for every trial, else as recorded in the
    first.
    """
    if calibration is not None and len(calibration.sensor_lines):
        return calibration.reference
    known = list(features)
    for wanted in (STRAIN, ELONGATION, LENGTH):
        if all(_conversion(own, wanted) is not None for own in known):
            return wanted
    named = {quantity.name: quantity for quantity in (STRAIN, ELONGATION, LENGTH)}
    return named[known[0].recorded]


def loop_table(features: Sequence[CyclicFeatures], calibration: Calibration | None) -> LoopTable | None:
    """Return all loops of *features*, or ``None`` where there are none.

    Parameters
    ----------
    features
        Cyclic trials with at least one cycle each.
    calibration
        Lines of the sensors, ``None`` where no staircase was read.
    """
    reference = common_reference(features, calibration)
    convertible = [own for own in features if _conversion(own, reference) is not None]
    left_out = tuple(own.identity.file for own in features if _conversion(own, reference) is None)
    if not convertible:
        return None
    rows = _rows_of(convertible, reference)
    order = rows.sort_values([*SENSOR_KEYS, "started", "session", "repetition", "trial"], kind="stable").index
    width = np.concatenate([own.width for own in convertible])[order]
    rows = rows.loc[order].reset_index(drop=True)
    rows["run"] = rows.groupby(SENSOR_KEYS, sort=False)["trial"].transform(lambda t: pd.factorize(t)[0] + 1)
    rows["rate_level"] = rate_levels(rows["rate"].where(rows["whole"]).to_numpy(float))
    rate = _compared_rate(rows)
    rows["counted"] = _counted(rows, rate)
    rows = _with_scale(rows, calibration)
    scale = rows["full_scale_output"].to_numpy(float)[:, np.newaxis]
    return LoopTable(reference, rows, 100.0 * width / scale, rate, left_out)


def _conversion(own: CyclicFeatures, wanted: ReferenceQuantity) -> tuple[float, float] | None:
    return into_reference(own.recorded, wanted, own.identity.rest_length_mm)


def _rows_of(features: Sequence[CyclicFeatures], reference: ReferenceQuantity) -> pd.DataFrame:
    """The loops of all trials with whose they are, lengths in *reference*."""
    who = [own.identity for own in features]
    named: dict[str, Sequence[Any]] = {
        "generation": [identity.generation for identity in who],
        "batch": [identity.batch for identity in who],
        "module": [identity.module for identity in who],
        "sensor": [identity.sensor for identity in who],
        "position": [identity.position for identity in who],
        "session": [identity.session for identity in who],
        "repetition": [identity.repetition for identity in who],
        "trial": [identity.file for identity in who],
        "started": [identity.started for identity in who],
        "unit": [own.unit for own in features],
    }
    conversions = [_conversion(own, reference) or (0.0, 1.0) for own in features]
    offset, factor = np.repeat(conversions, [len(own.cycles) for own in features], axis=0).T
    recorded = columns_of_all([own.cycles for own in features], ("rate", "low", "high", "at"))
    table = rows_of_all([own.cycles for own in features], named, _OWN)
    table["rate"] = recorded["rate"] * np.abs(factor)
    for name in ("low", "high", "at"):
        table[name] = offset + factor * recorded[name]
    return table


def rate_levels(rates: FloatArray) -> FloatArray:
    """Return the rate that each of *rates* belongs to: the geometric mean of a cluster on a logarithmic axis.

    Sorted rates further apart than :data:`RATE_STEP` belong to different clusters; NaN stays NaN.
    """
    levels = np.full(len(rates), np.nan)
    known = np.flatnonzero(np.isfinite(rates) & (rates > 0))
    if len(known) == 0:
        return levels
    known = known[np.argsort(rates[known], kind="stable")]
    logs = np.log(rates[known])
    cluster = np.concatenate([[0], np.cumsum(np.diff(logs) > math.log(RATE_STEP))])
    means = np.bincount(cluster, logs) / np.bincount(cluster)
    levels[known] = np.exp(means)[cluster]
    return levels


def _compared_rate(rows: pd.DataFrame) -> float:
    """The rate that most sensors were run at, the slowest of these; NaN without time."""
    known = rows.dropna(subset=["rate_level"]).drop_duplicates([*SENSOR_KEYS, "rate_level"])
    if known.empty:
        return math.nan
    sensors = known.groupby("rate_level").size()
    return float(sensors[sensors == sensors.max()].index.min())


def at_rate(rows: pd.DataFrame, rate: float) -> pd.Series:
    """Return which loops ran at *rate*; all where it is NaN (no time recorded)."""
    return rows["rate_level"].eq(rate) if math.isfinite(rate) else rows["whole"]


def _counted(rows: pd.DataFrame, rate: float) -> pd.Series:
    """Settled whole loops of full amplitude at the compared rate; the last ones where none settles."""
    eligible = rows["whole"] & at_rate(rows, rate) & _of_full_amplitude(rows)
    runs = [*SENSOR_KEYS, "trial"]
    settled = rows["settled"] & eligible
    has_settled = settled.groupby([rows[k] for k in runs]).transform("any")
    from_the_end = eligible[::-1].groupby([rows[k] for k in runs]).cumsum()[::-1]
    return settled | (eligible & ~has_settled & (from_the_end <= STANDING_IN))


def _of_full_amplitude(rows: pd.DataFrame) -> pd.Series:
    amplitude = (rows["high"] - rows["low"]).where(rows["whole"])
    usual = amplitude.groupby([rows[k] for k in (*SENSOR_KEYS, "trial")]).transform("median")
    largest = usual.groupby([rows[k] for k in SENSOR_KEYS]).transform("max")
    return usual >= FULL_AMPLITUDE * largest


def _with_scale(rows: pd.DataFrame, calibration: Calibration | None) -> pd.DataFrame:
    """Full-scale output and slope of each sensor: of its staircase line, else of its own counted loops."""
    counted = rows[rows["counted"]]
    own = counted.assign(
        _slope=(counted["peak_signal"] - counted["zero_signal"]) / (counted["high"] - counted["low"])
    )
    scale = own.groupby(SENSOR_KEYS).agg(
        full_scale_output=("signal_range", "median"), slope=("_slope", "median")
    )
    scale["scale"] = BY_LOOP
    if calibration is not None and len(calibration.sensor_lines):
        lines = principal_lines(calibration.sensor_lines).set_index(SENSOR_KEYS)
        lines = lines[["full_scale_output", "slope"]].dropna().assign(scale=BY_LINE)
        scale = lines.combine_first(scale)
    return rows.merge(scale.reset_index(), on=SENSOR_KEYS, how="left")
