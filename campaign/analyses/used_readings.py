"""The readings that analyses use, with levels and rest lengths beside the table of readings."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.trials.readings import RUN_KEYS, SENSOR_KEYS, Readings

FloatArray = npt.NDArray[np.float64]

REST = ("rest_length_mm", "rest_length_uncertainty_mm")


def used_readings(readings: Readings, sensors: pd.DataFrame) -> pd.DataFrame:
    """Return the used readings that have a reference and a signal, index kept.

    Parameters
    ----------
    readings
        All readings.
    sensors
        Register of sensors: module, sensor and, where known, rest_length_mm and rest_length_uncertainty_mm.

    Returns
    -------
    pandas.DataFrame
        Columns of the table of readings, and: ``level`` (nominal level, of the campaign or else of the
        sensor, NaN where neither is common), ``rest_length_mm``, ``rest_length_uncertainty_mm``,
        ``reference`` (what the stand recorded), ``run`` and ``sensor_code`` (codes from 0), ``weight`` (1).
    """
    table = readings.usable
    table = table[np.isfinite(table["x"].astype(float)) & np.isfinite(table["signal"].astype(float))].copy()
    own = table["sensor_level"] if "sensor_level" in table else pd.Series(np.nan, table.index)
    table["level"] = table["nominal_level"].astype(float).fillna(own.astype(float))
    if "reference" not in table:
        table["reference"] = "elongation" if readings.reference.name != "length" else "length"
    for column in REST:
        table[column] = _rest(table, sensors, column)
    table["run"] = table.groupby(RUN_KEYS, sort=True).ngroup()
    table["sensor_code"] = table.groupby(SENSOR_KEYS, sort=True).ngroup()
    return table


def _rest(table: pd.DataFrame, sensors: pd.DataFrame, column: str) -> FloatArray:
    """Rest length or its uncertainty: from the readings, else the register, else length less elongation."""
    own = table[column].to_numpy(float) if column in table else np.full(len(table), np.nan)
    register = next((name for name in (column, column.removesuffix("_mm")) if name in sensors), None)
    if register is not None and len(sensors):
        known = sensors.drop_duplicates(["module", "sensor"]).set_index(["module", "sensor"])[register]
        listed = known.reindex(pd.MultiIndex.from_frame(table[["module", "sensor"]])).to_numpy()
        own = np.where(
            np.isfinite(own), own, pd.to_numeric(pd.Series(listed), errors="coerce").to_numpy(float)
        )
    if column == REST[0]:
        own = np.where(np.isfinite(own), own, (table["length_mm"] - table["elongation_mm"]).to_numpy(float))
    return np.asarray(own, dtype=np.float64)
