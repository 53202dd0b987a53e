"""Spread of readings at the same level: between branches (hysteresis) and between runs (repeatability)."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd

from campaign.analyses.calibration_lines import BranchLine, line_of_sensor
from campaign.analyses.used_readings import DIRECTIONS, UsedReadings
from campaign.methods.repeatability import repeatability
from campaign.recordings.description import Description
from campaign.recordings.recording import ReferenceQuantity
from campaign.trials.readings import SENSOR_KEYS

NOT_FROM_STAND = "not distinguishable from the stand"

HYSTERESIS_COLUMNS = [*SENSOR_KEYS, "nominal_level", "difference", "low", "high", "percent_fso", "runs"]
HYSTERESIS_COLUMNS += ["label"]
REPEATABILITY_COLUMNS = [*SENSOR_KEYS, "direction", "nominal_level", "runs", "sd", "range", "sd_percent_fso"]


def hysteresis_frame(
    used: UsedReadings, lines: tuple[BranchLine, ...], reference: ReferenceQuantity, description: Description
) -> pd.DataFrame:
    """Return rising minus falling at every common level of every sensor, with simultaneous limits."""
    parts = []
    for line in lines:
        found = line.hysteresis
        if found is None:
            continue
        stand = _backlash_in_signal(used, line, reference, description)
        parts.append(
            {
                **dict(zip(SENSOR_KEYS, line.key, strict=True)),
                "nominal_level": line.cells.differences()[0],
                "difference": found.differences,
                "low": found.low,
                "high": found.high,
                "percent_fso": 100.0 * found.differences / line.full_scale_output,
                "runs": found.runs,
                "label": np.where(np.abs(found.differences) <= stand, NOT_FROM_STAND, ""),
            }
        )
    return _joined(parts) if parts else pd.DataFrame(columns=HYSTERESIS_COLUMNS)


def _backlash_in_signal(
    used: UsedReadings, line: BranchLine, reference: ReferenceQuantity, description: Description
) -> float:
    """Expanded (95 %) backlash of the stand as a signal difference; −1 where it is not stated."""
    rest = float(used.column("rest_length_mm", line.rows[:1])[0]) if reference.name == "strain" else 1.0
    backlash = 1.96 * description.length_reference.backlash_mm / rest * abs(line.slope)
    return backlash if backlash > 0 else -1.0


def repeatability_frame(lines: tuple[BranchLine, ...]) -> pd.DataFrame:
    """Return SD and range over the runs of a mounting at every level and direction of every sensor.

    Signals are moved along the sensor's line from the x that was reached to the nominal level.
    """
    parts = []
    for line in line_of_sensor(lines).values():
        cells = line.cells
        if cells.cells == 0:
            continue
        found = repeatability(cells.signal, cells.cell, cells.mounting)
        first = np.unique(cells.cell, return_index=True)[1]
        parts.append(
            {
                **dict(zip(SENSOR_KEYS, line.key, strict=True)),
                "direction": np.array(DIRECTIONS, dtype=object)[cells.direction[first]],
                "nominal_level": cells.level[first],
                "runs": found.counts,
                "sd": found.standard_deviations,
                "range": found.ranges,
                "sd_percent_fso": 100.0 * found.standard_deviations / line.full_scale_output,
            }
        )
    return _joined(parts) if parts else pd.DataFrame(columns=REPEATABILITY_COLUMNS)


def _joined(parts: Sequence[Mapping[str, Any]]) -> pd.DataFrame:
    """One table of the columns of all parts: arrays of the part's length, or one value for all of it."""
    lengths = [len(part["nominal_level"]) for part in parts]
    return pd.DataFrame(
        {
            name: np.concatenate(
                [np.broadcast_to(part[name], length) for part, length in zip(parts, lengths, strict=True)]
            )
            for name in parts[0]
        }
    )
