"""Spread of readings at the same level: between branches (hysteresis) and between runs (repeatability)."""

from __future__ import annotations

import numpy as np
import pandas as pd

from campaign.analyses.calibration_lines import BranchLine, level_differences, line_of_sensor, run_cells
from campaign.methods.repeatability import repeatability
from campaign.recordings.description import Description
from campaign.trials.readings import SENSOR_KEYS

NOT_FROM_STAND = "not distinguishable from the stand"

HYSTERESIS_COLUMNS = [*SENSOR_KEYS, "nominal_level", "difference", "low", "high", "percent_fso", "runs"]
HYSTERESIS_COLUMNS += ["label"]
REPEATABILITY_COLUMNS = [*SENSOR_KEYS, "direction", "nominal_level", "runs", "sd", "range", "sd_percent_fso"]


def hysteresis_frame(
    used: pd.DataFrame, lines: tuple[BranchLine, ...], description: Description
) -> pd.DataFrame:
    """Return rising minus falling at every common level of every sensor, with simultaneous limits."""
    parts = []
    for line in lines:
        if line.branch != "both" or line.hysteresis is None:
            continue
        rows = used.loc[line.rows]
        found = line.hysteresis
        stand = _backlash_in_signal(line, rows, description)
        parts.append(
            pd.DataFrame(
                {
                    **dict(zip(SENSOR_KEYS, line.key, strict=True)),
                    "nominal_level": level_differences(rows, line.slope).columns.to_numpy(float),
                    "difference": found.differences,
                    "low": found.low,
                    "high": found.high,
                    "percent_fso": 100.0 * found.differences / line.full_scale_output,
                    "runs": found.runs,
                    "label": np.where(np.abs(found.differences) <= stand, NOT_FROM_STAND, ""),
                }
            )
        )
    return pd.concat(parts, ignore_index=True) if parts else pd.DataFrame(columns=HYSTERESIS_COLUMNS)


def _backlash_in_signal(line: BranchLine, rows: pd.DataFrame, description: Description) -> float:
    """Expanded (95 %) backlash of the stand as a signal difference; −1 where it is not stated."""
    backlash = description.length_reference.backlash_mm
    rest = float(rows["rest_length_mm"].iloc[0])
    strain = np.allclose(rows["x"], rows["strain"], equal_nan=False)
    per_mm = 1.0 / rest if strain else 1.0
    return 1.96 * backlash * per_mm * abs(line.slope) if backlash * per_mm > 0 else -1.0


def repeatability_frame(used: pd.DataFrame, lines: tuple[BranchLine, ...]) -> pd.DataFrame:
    """Return SD and range over runs at every level and direction of every sensor.

    Signals are moved along the sensor's line from the x that was reached to the nominal level.
    """
    parts = []
    for line in line_of_sensor(lines).values():
        cells, codes = run_cells(used.loc[line.rows], line.slope)
        if cells.empty:
            continue
        found = repeatability(cells["signal"].to_numpy(float), codes, int(codes.max()) + 1)
        names = cells.drop_duplicates(["direction", "level"])
        parts.append(
            pd.DataFrame(
                {
                    **dict(zip(SENSOR_KEYS, line.key, strict=True)),
                    "direction": names["direction"].to_numpy(),
                    "nominal_level": names["level"].to_numpy(float),
                    "runs": found.counts,
                    "sd": found.standard_deviations,
                    "range": np.where(found.counts > 1, found.ranges, np.nan),
                    "sd_percent_fso": 100.0 * found.standard_deviations / line.full_scale_output,
                }
            )
        )
    return pd.concat(parts, ignore_index=True) if parts else pd.DataFrame(columns=REPEATABILITY_COLUMNS)
