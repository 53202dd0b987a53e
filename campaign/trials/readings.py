"""The table of readings: what every staircase is reduced to and every calibration analysis starts from."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.notices import Notice
from campaign.recordings.recording import ELONGATION, LENGTH, STRAIN, ReferenceQuantity

READING_COLUMNS: dict[str, str] = {
    "generation": "text",
    "batch": "text, empty where not recorded",
    "module": "text",
    "sensor": "text",
    "position": "text, place in the module (position of sensors.csv, else from–to, else the sensor's id)",
    "session": "text, empty where not recorded",
    "repetition": "integer from 1",
    "trial": "text, the recording's path: sensors that share it shared the run",
    "order": "integer from 1, order of the reading in its run",
    "started": "ISO 8601 text of the run's start, or empty",
    "direction": "text: rising, falling or turning (belongs to neither branch)",
    "nominal_level": "float, nominal reference value of the plateau, units of x; NaN where not common",
    "strain": "float, mm/mm; NaN where the rest length is unknown",
    "elongation_mm": "float, mm; NaN where unknown",
    "length_mm": "float, mm; NaN where unknown",
    "x": "float, the reference value in the campaign's ReferenceQuantity (strain, elongation or length)",
    "signal": "float, mean signal",
    "unit": "text, unit of signal",
    "standard_error": "float, standard error of signal; NaN for tables with one row a step",
    "count": "integer, samples averaged",
    "effective_count": "float, count after autocorrelation",
    "time_s": "float, mid-time of the samples since the start of the run; NaN in tables",
    "time_since_motion_s": "float, s; NaN in tables",
    "largest_x_before": "float, largest reference value seen before in the run",
    "temperature_c": "float, °C; NaN where not recorded",
    "humidity_percent": "float, %RH; NaN where not recorded",
    "pressure_kpa": "float, kPa; NaN where not recorded",
    "channel": "text or empty",
    "settled": "bool, no significant slope over the averaged part",
    "used": "bool, False where the sensor or trial is set aside",
}
"""Columns of the table of readings, with type and unit."""

READING_EXTRA_COLUMNS: dict[str, str] = {
    "sensor_level": "float, nominal reference value common to the runs of this sensor; NaN where not common",
    "dwell_s": "float, s the reference was held; NaN in tables",
    "reference": "text: length, elongation or strain, what the stand recorded",
    "rest_length_mm": "float, mm; NaN where unknown",
    "rest_length_uncertainty_mm": "float, mm, standard uncertainty; NaN where unknown",
}
"""Further columns of readings taken from recordings; an analysis does without where they are missing."""


@dataclass(frozen=True)
class Readings:
    """All readings of a campaign.

    Attributes
    ----------
    table
        One row a reading, columns of :data:`READING_COLUMNS`, sorted by generation, module, sensor, session,
        repetition and order, with a fresh integer index.
    reference
        What ``x`` is.
    notices
        What was found when the readings of all trials were put together.
    """

    table: pd.DataFrame
    reference: ReferenceQuantity
    notices: tuple[Notice, ...] = ()

    @property
    def usable(self) -> pd.DataFrame:
        """The rows that analyses use (``used`` is True), index kept."""
        return self.table[self.table["used"].astype(bool)]  # an empty table has no truth values


RUN_KEYS = ["generation", "module", "sensor", "session", "repetition", "trial"]
"""Columns that together name one sensor's share of one run."""

SENSOR_KEYS = ["generation", "module", "sensor"]
"""Columns that together name one sensor."""

COMMON_SHARE = 0.5
"""A level is common to the campaign when at least this share of its runs (or of a sensor's runs) visit it."""

COMMON_READINGS = 0.8
"""Nominal levels are common to a campaign when at least this share of its readings lies at common levels."""

_COLUMN_OF = {STRAIN: "strain", ELONGATION: "elongation_mm", LENGTH: "length_mm"}


@dataclass(frozen=True)
class ReadingPart:
    """The readings of one trial, before they are put together with those of the others.

    Attributes
    ----------
    columns
        By the names of ``READING_COLUMNS`` and ``READING_EXTRA_COLUMNS`` without x, nominal_level,
        sensor_level and largest_x_before, which come when all trials are known: an array of shape
        (readings,) or one value for all. ``largest_before`` is the place, in the trial, of the reading with
        the largest reference before each.
    count
        Number of readings.
    """

    columns: dict[str, object]
    count: int

    @property
    def frame(self) -> pd.DataFrame:
        """The readings as a table, one row each."""
        return pd.DataFrame(self.columns, index=range(self.count))


def collect_readings(parts: Sequence[ReadingPart], set_aside: Collection[tuple[str, str]] = ()) -> Readings:
    """Put the readings of all trials together: one reference quantity, nominal levels, which are used.

    Parameters
    ----------
    parts
        One a trial, the ``readings`` of its ``StaircaseFeatures``; empty ones are passed over.
    set_aside
        (module, sensor) of sensors that are set aside: their readings stay in the table and are not used.

    Returns
    -------
    Readings
        ``x`` is strain where it is known for every used reading, else elongation, else length, whichever is
        known for all; where none is, the one known for most, and the readings without it are not used (a
        notice says so).
    """
    kept = [part for part in parts if part.count]
    if not kept:
        return Readings(pd.DataFrame(columns=[*READING_COLUMNS, *READING_EXTRA_COLUMNS]), STRAIN)
    table = _joined(kept)
    sensors = pd.MultiIndex.from_frame(table[["module", "sensor"]])
    table["used"] = ~sensors.isin(list(set_aside)) if len(set_aside) else True
    reference = _common_reference(table)
    table["x"] = table[_COLUMN_OF[reference]]
    table["largest_x_before"] = _x_of_largest(table)
    unknown = table["used"] & table["x"].isna()
    notices = _unknown_notices(table[unknown], reference)
    table.loc[unknown, "used"] = False
    table = table.sort_values([*RUN_KEYS, "order"], kind="stable", ignore_index=True)
    table["nominal_level"], table["sensor_level"] = _nominal_levels(table)
    return Readings(table[[*READING_COLUMNS, *READING_EXTRA_COLUMNS]], reference, notices)


def _joined(parts: Sequence[ReadingPart]) -> pd.DataFrame:
    """All parts as one table, column by column: a frame a trial would cost more than reading it."""
    counts = np.array([part.count for part in parts])
    whole = {}
    for name in parts[0].columns:
        values = [part.columns[name] for part in parts]
        if any(isinstance(value, np.ndarray) for value in values):
            joined = np.concatenate([np.broadcast_to(v, n) for v, n in zip(values, counts)])  # type: ignore[call-overload]
            whole[name] = _few_texts(joined) if joined.dtype.kind == "U" else joined
        else:
            whole[name] = np.repeat(one_a_table(values), counts)
    return pd.DataFrame(whole)


def one_a_table(values: Sequence[object]) -> npt.NDArray[Any]:
    """Return *values* as an array; of texts it holds the texts themselves, so that repeating copies none."""
    return np.array(values, dtype=object if any(isinstance(value, str) for value in values) else None)


def _few_texts(texts: npt.NDArray[np.str_]) -> npt.NDArray[np.object_]:
    """The same texts, each made once however often it stands there."""
    distinct, place = np.unique(texts, return_inverse=True)
    return np.asarray(distinct.astype(object)[place])


def _common_reference(table: pd.DataFrame) -> ReferenceQuantity:
    """Strain, elongation or length: the first known for all used readings, else the one known for most."""
    used = table[table["used"]] if table["used"].any() else table
    known = {quantity: float(used[column].notna().mean()) for quantity, column in _COLUMN_OF.items()}
    complete = [quantity for quantity, share in known.items() if share == 1.0]
    return complete[0] if complete else max(known, key=lambda quantity: known[quantity])


def _x_of_largest(table: pd.DataFrame) -> npt.NDArray[np.float64]:
    """Value of x of the reading that ``largest_before`` points at within its run (frames in run order)."""
    place = table["order"].to_numpy(dtype=np.int64) - 1
    first = np.arange(len(table)) - place
    x = table["x"].to_numpy(dtype=np.float64)
    return np.asarray(x[first + table["largest_before"].to_numpy(dtype=np.int64)])


def _unknown_notices(rows: pd.DataFrame, reference: ReferenceQuantity) -> tuple[Notice, ...]:
    """One notice a trial whose readings have no value of the campaign's reference quantity."""
    return tuple(
        Notice(
            "reference-not-common",
            "set aside",
            str(trial),
            None,
            None,
            f"{reference.name} is not known in this trial, but in most others",
            f"{count} readings are not used",
            "state the rest length in sensors.csv" if reference == STRAIN else "",
            int(count),
        )
        for trial, count in rows.groupby("trial", sort=True).size().items()
    )


def _nominal_levels(table: pd.DataFrame) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.float64]]:
    """Nominal level of every reading among all runs of the campaign, and among the runs of its own sensor."""
    run = _codes(table, RUN_KEYS)
    sensor = _codes(table, SENSOR_KEYS)
    x = table["x"].to_numpy(dtype=np.float64)
    used = table["used"].to_numpy(dtype=bool) & np.isfinite(x)
    step = _typical_step(x, run)
    together = np.zeros(len(x), dtype=np.int64)
    common = cluster_levels(x, together, run, used, 0.1 * step)
    if np.isfinite(common[used]).mean() < COMMON_READINGS:
        common[:] = np.nan
    return common, cluster_levels(x, sensor, run, used, 0.25 * step)


def _codes(table: pd.DataFrame, keys: list[str]) -> npt.NDArray[np.int64]:
    """Number of the group that each row belongs to, from 0 in order of appearance."""
    return np.asarray(table.groupby(keys, sort=False).ngroup(), dtype=np.int64)


def _typical_step(x: npt.NDArray[np.float64], run: npt.NDArray[np.int64]) -> float:
    """Median over consecutive readings of a run of the step between them."""
    step = np.abs(np.diff(x))[(np.diff(run) == 0)]
    step = step[np.isfinite(step)]
    moved = step[step > 0.01 * step.max(initial=0.0)]
    return float(np.median(moved)) if len(moved) else 0.0


def cluster_levels(
    x: npt.NDArray[np.float64],
    group: npt.NDArray[np.int64],
    run: npt.NDArray[np.int64],
    used: npt.NDArray[np.bool_],
    tolerance: float,
) -> npt.NDArray[np.float64]:
    """Find levels that the runs of a group have in common.

    Parameters
    ----------
    x
        Shape (readings,): reference values.
    group, run
        Shape (readings,): codes from 0 of the group (a sensor, or the campaign) and of the run of each
        reading.
    used
        Readings that count; the others get NaN.
    tolerance
        Sorted values of a group further apart than this belong to different levels; a level may be twice as
        wide.

    Returns
    -------
    numpy.ndarray
        Shape (readings,): the level's median, rounded as far as the spread of the level allows; NaN where
        fewer than half of the group's runs visit the level, or where values run together so that no levels
        are seen.
    """
    places = np.flatnonzero(used)
    nominal = np.full(len(x), np.nan)
    if len(places) == 0 or tolerance <= 0.0:
        return nominal
    places = places[np.lexsort((x[places], group[places]))]
    new = np.ones(len(places), dtype=bool)
    new[1:] = (np.diff(group[places]) != 0) | (np.diff(x[places]) > tolerance)
    cluster = np.cumsum(new) - 1
    frame = pd.DataFrame({"cluster": cluster, "x": x[places], "run": run[places], "group": group[places]})
    clusters = frame.groupby("cluster").agg(
        middle=("x", "median"),
        low=("x", "min"),
        high=("x", "max"),
        runs=("run", "nunique"),
        group=("group", "first"),
    )
    runs = frame.groupby("group")["run"].nunique()
    width = clusters["high"] - clusters["low"]
    common = (width <= 2.0 * tolerance) & (clusters["runs"] >= COMMON_SHARE * clusters["group"].map(runs))
    rounded = _rounded(clusters["middle"].to_numpy(), 0.08 * tolerance)
    nominal[places] = np.where(common.to_numpy(), rounded, np.nan)[cluster]
    return nominal


def _rounded(values: npt.NDArray[np.float64], tolerance: float) -> npt.NDArray[np.float64]:
    """Values rounded to as few decimals as stay within *tolerance*."""
    decimals = np.arange(-3, 10)
    candidates = np.stack([np.round(values, int(d)) for d in decimals])
    close = np.abs(candidates - values) <= tolerance
    close[-1] = True
    return np.asarray(candidates[np.argmax(close, axis=0), np.arange(len(values))]) + 0.0
