"""The line of a sensor against length in mm: what a signal says of a length itself."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.analyses.calibration_lines import BranchLine, effective_degrees
from campaign.analyses.reference_covariance import shared_covariance
from campaign.analyses.used_readings import UsedReadings
from campaign.recordings.description import Description
from campaign.recordings.recording import ReferenceQuantity

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class LengthLine:
    """The same line against length: coefficients (signal, signal per mm), shape (2,), and covariances.

    Where lengths are recorded the rest length cancels, so the covariance is not that of the strain line
    multiplied.
    """

    coefficients: FloatArray
    covariance: FloatArray
    run_covariance: FloatArray
    effective_degrees: float


def length_line(
    used: UsedReadings, line: BranchLine, reference: ReferenceQuantity, description: Description
) -> LengthLine | None:
    """Return the line of signal against length in mm; None where the rest length is not known."""
    rest = float(used.column("rest_length_mm", line.rows[:1])[0])
    if reference.name == "length":
        coefficients = np.array([line.intercept, line.slope])
        return LengthLine(coefficients, line.covariance, line.run_covariance, line.effective_degrees)
    if not np.isfinite(rest):
        return None
    per_x = rest if reference.name == "strain" else 1.0
    change = np.array([[1.0, -rest / per_x], [0.0, 1.0 / per_x]])
    length = rest + per_x * used.x[line.rows]
    slope = line.slope / per_x
    shared = shared_covariance(used, line.rows, "length", length, slope, description)
    covariance = change @ line.fit_covariance @ change.T + shared
    run_covariance = change @ line.run_covariance @ change.T
    degrees = effective_degrees(line, float(length.mean()), covariance, run_covariance)
    return LengthLine(change @ np.array([line.intercept, line.slope]), covariance, run_covariance, degrees)
