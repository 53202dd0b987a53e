"""The readings that analyses use, with levels and rest lengths beside the table, and as plain arrays."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.trials.readings import RUN_KEYS, SENSOR_KEYS, Readings

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

REST = ("rest_length_mm", "rest_length_uncertainty_mm")

RISING, FALLING, TURNING = 0, 1, 2
DIRECTIONS = ("rising", "falling", "turning")
"""Names of the codes of directions."""


@dataclass(frozen=True)
class UsedReadings:
    """The used readings that have a reference and a signal, in the order of the table of readings.

    Attributes
    ----------
    table
        Columns of the table of readings, and ``rest_length_mm``, ``rest_length_uncertainty_mm``,
        ``reference`` (what the stand recorded); index as in the table of readings.
    x, signal
        Shape (readings,).
    level
        Nominal level, of the campaign or else of the sensor; NaN where neither is common.
    direction
        Codes: rising, falling, turning.
    run, sensor, mounting
        Codes from 0, in sorted order of ``RUN_KEYS``, ``SENSOR_KEYS`` and module with session.
    one_way_runs
        Shape (runs,): whether the run only ever moves one way (level and time are not told apart).
    run_minutes
        Shape (runs,): minutes between the first and the last reading; NaN where time is not recorded.
    weights
        Shape (readings,): weights of the readings in the lines of runs, all 1 unless weighting matters.
    weighting_gain
        Share by which weighting lowers (or would lower) the standard error of the slope within a run.
    """

    table: pd.DataFrame
    x: FloatArray
    signal: FloatArray
    level: FloatArray
    direction: IntArray
    run: IntArray
    sensor: IntArray
    mounting: IntArray
    one_way_runs: BoolArray
    run_minutes: FloatArray
    weights: FloatArray
    weighting_gain: float = 0.0

    def column(self, name: str, rows: IntArray) -> FloatArray:
        """Values of a numeric column of the table at the places *rows*."""
        if name not in self._numbers:
            self._numbers[name] = self.table[name].to_numpy(dtype=np.float64)
        return np.asarray(self._numbers[name][rows])

    def texts(self, name: str, rows: IntArray) -> set[str]:
        """Return the different texts of a column of the table at the places *rows*."""
        return set(map(str, set(self._column_of_texts(name)[rows].tolist())))

    def text(self, name: str, row: int) -> str:
        """Text of a column of the table at one place."""
        return str(self._column_of_texts(name)[row])

    def _column_of_texts(self, name: str) -> npt.NDArray[np.object_]:
        if name not in self._texts:
            self._texts[name] = self.table[name].to_numpy(dtype=object)
        return self._texts[name]

    @cached_property
    def _numbers(self) -> dict[str, FloatArray]:
        """Numeric columns that were asked for: every line asks for the same ones."""
        return {}

    @cached_property
    def _texts(self) -> dict[str, npt.NDArray[np.object_]]:
        """Columns of texts that were asked for."""
        return {}


def used_readings(readings: Readings, sensors: pd.DataFrame) -> UsedReadings:
    """Return the readings that analyses use.

    Parameters
    ----------
    readings
        All readings.
    sensors
        Register of sensors: module, sensor and, where known, rest_length_mm and rest_length_uncertainty_mm.
    """
    table = readings.usable
    known = np.isfinite(table["x"].astype(float)) & np.isfinite(table["signal"].astype(float))
    table = table[known].copy()
    own = table["sensor_level"] if "sensor_level" in table else pd.Series(np.nan, table.index)
    level = table["nominal_level"].astype(float).fillna(own.astype(float))
    if "reference" not in table:
        table["reference"] = "length" if readings.reference.name == "length" else "elongation"
    for column in REST:
        table[column] = _rest(table, sensors, column)
    run = np.asarray(table.groupby(RUN_KEYS, sort=True).ngroup(), dtype=np.int64)
    one_way, minutes = _course_of_runs(table, run)
    return UsedReadings(
        table,
        np.asarray(table["x"], dtype=np.float64),
        np.asarray(table["signal"], dtype=np.float64),
        np.asarray(level, dtype=np.float64),
        np.asarray(pd.Index(DIRECTIONS).get_indexer(pd.Index(table["direction"])), dtype=np.int64),
        run,
        np.asarray(table.groupby(SENSOR_KEYS, sort=True).ngroup(), dtype=np.int64),
        np.asarray(table.groupby([*SENSOR_KEYS[:2], "session"], sort=True).ngroup(), dtype=np.int64),
        one_way,
        minutes,
        np.ones(len(table)),
    )


def _course_of_runs(table: pd.DataFrame, run: IntArray) -> tuple[BoolArray, FloatArray]:
    """Whether each run only ever moves one way, and how many minutes it takes."""
    course = pd.DataFrame({"run": run, "order": table["order"].to_numpy(), "x": table["x"].to_numpy(float)})
    course["time"] = table["time_s"].to_numpy(float)
    course = course.sort_values(["run", "order"])
    runs = course.groupby("run")
    x = runs["x"].agg(["first", "last", "min", "max"])
    along = np.sign((x["last"] - x["first"]).to_numpy())[course["run"]]
    span = (x["max"] - x["min"]).to_numpy()[course["run"]]
    back = runs["x"].diff() * along < -0.02 * span
    one_way = ~back.groupby(course["run"]).any() & (x["last"] != x["first"])
    minutes = (runs["time"].max() - runs["time"].min()) / 60.0
    return np.asarray(one_way, dtype=bool), np.asarray(minutes, dtype=np.float64)


def _rest(table: pd.DataFrame, sensors: pd.DataFrame, column: str) -> FloatArray:
    """Rest length or its uncertainty: from the readings, else the register, else length less elongation."""
    own = table[column].to_numpy(float) if column in table else np.full(len(table), np.nan)
    register = next((name for name in (column, column.removesuffix("_mm")) if name in sensors), None)
    if register is not None and len(sensors):
        known = sensors.drop_duplicates(["module", "sensor"]).set_index(["module", "sensor"])[register]
        listed = pd.Series(known.reindex(pd.MultiIndex.from_frame(table[["module", "sensor"]])).to_numpy())
        own = np.where(np.isfinite(own), own, pd.to_numeric(listed, errors="coerce").to_numpy(float))
    if column == REST[0]:
        own = np.where(np.isfinite(own), own, (table["length_mm"] - table["elongation_mm"]).to_numpy(float))
    return np.asarray(own, dtype=np.float64)
