"""The table of readings: what every staircase is reduced to and every calibration analysis starts from."""

from __future__ import annotations

from dataclasses import dataclass

import pandas as pd

from campaign.recordings.recording import ReferenceQuantity

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
    "nominal_level": "float, nominal reference value of the plateau in units of x; NaN where levels are not common",
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
"""Columns of the table of readings, with type and unit; analyses append fitted, residual, studentised, leverage,
cooks_distance."""


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
    """

    table: pd.DataFrame
    reference: ReferenceQuantity

    @property
    def usable(self) -> pd.DataFrame:
        """The rows that analyses use (``used`` is True), index kept."""
        return self.table[self.table["used"]]
