"""What holds are given in: per cent of a sensor's full-scale output, or of their first settled signal."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING

from campaign.analyses.hold_figures import OF_FULL_SCALE, OF_SIGNAL, HoldScale
from campaign.analyses.sensor_figures import principal_lines
from campaign.trials.hold import Hold, HoldFeatures

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration

SensorScales = Mapping[tuple[str, str], tuple[float, float, float]]
"""(module, sensor) to full-scale output, slope and the slope's relative standard uncertainty."""


def sensor_scales(calibration: Calibration | None) -> SensorScales:
    """Return what the staircase lines say of every sensor; empty without a calibration."""
    if calibration is None or calibration.sensor_lines.empty:
        return {}
    rows = principal_lines(calibration.sensor_lines).to_dict("records")
    found: dict[tuple[str, str], tuple[float, float, float]] = {}
    for row in rows:
        output, slope = float(row["full_scale_output"]), float(row["slope"])
        spread = math.sqrt(row["var_slope"]) / abs(slope) if row["var_slope"] >= 0 and slope else 0.0
        if output > 0:
            found[str(row["module"]), str(row["sensor"])] = (output, slope, spread)
    return found


def scale_of_hold(own: HoldFeatures, hold: Hold, scales: SensorScales) -> HoldScale:
    """Return the scale of one hold; blank channels have no full-scale output."""
    line = scales.get((own.identity.module, own.identity.sensor))
    if line is not None and own.identity.kind != "blank":
        output, slope, spread = line
        return HoldScale(100.0 / output, OF_FULL_SCALE, 1.0 / slope, spread)
    size = abs(hold.first.mean)
    return HoldScale(100.0 / size if size > 0 else math.nan, OF_SIGNAL, math.nan, 0.0)
