"""What a reading by a sensor's line owes its uncertainty to, each source once, from one decomposition."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.analyses.calibration_lines import BranchLine
from campaign.analyses.used_readings import TURNING, UsedReadings

FloatArray = npt.NDArray[np.float64]

MEASURED = "measured"
IN_NOISE = "in the noise"
NOT_MEASURED = "not measured"
"""What is known of the loop: measured level by level; inside the noise, as levels came in random order; or
no level was approached from both sides."""


@dataclass(frozen=True)
class LineSources:
    """The variances of a reading by one line, signal units squared; x in units of the campaign's reference.

    Attributes
    ----------
    generation, module, sensor, branch
        Whose line.
    intercept, slope
        The line.
    x_low, x_high
        Calibrated range.
    line, mounting, run, reference
        Shape (2, 2), covariances of intercept and slope: of the line from between runs, of a new mounting, of
        a new run within its mounting (both where mountings are not told from runs), and of the reference.
        NaN where unknown.
    mountings
        :data:`campaign.methods.run_spread.APART`, ``TOGETHER`` or ``ONE_MOUNTING``.
    run_degrees
        Degrees of freedom that line, mounting and run rest on together.
    lack_of_fit, lack_of_fit_degrees
        Variance of a level about the line in every run; NaN degrees where it cannot be told from noise.
    noise, noise_degrees
        Variance of one reading about its run.
    half_loop, loop
        Half the root-mean-square loop width over the levels, and what is known of it.
    full_scale_output
        Signal over the full scale.
    settled_s
        Usual time from the last motion to a reading; NaN where no time was recorded.
    temperature_variance
        Of the mean temperature of runs about their sensor's, K²; NaN where not recorded or one run only.
    recorded
        What the stand records: ``strain``, ``elongation`` or ``length``.
    """

    generation: str
    module: str
    sensor: str
    branch: str
    intercept: float
    slope: float
    x_low: float
    x_high: float
    line: FloatArray
    mounting: FloatArray
    run: FloatArray
    reference: FloatArray
    mountings: str
    run_degrees: float
    lack_of_fit: float
    lack_of_fit_degrees: float
    noise: float
    noise_degrees: float
    half_loop: float
    loop: str
    full_scale_output: float
    settled_s: float
    temperature_variance: float
    recorded: str

    @property
    def key(self) -> tuple[str, str, str]:
        """Generation, module and sensor."""
        return self.generation, self.module, self.sensor


def line_sources(line: BranchLine, used: UsedReadings) -> LineSources:
    """Return the sources of one line."""
    x = used.x[line.rows]
    lack = line.lack_of_fit
    return LineSources(
        line.generation,
        line.module,
        line.sensor,
        line.branch,
        line.intercept,
        line.slope,
        float(x.min()),
        float(x.max()),
        line.fit_covariance,
        line.mounting_covariance,
        line.run_covariance - line.mounting_covariance,
        line.reference_covariance,
        line.mountings,
        line.degrees_of_freedom,
        line.lack_of_fit_variance,
        float(lack.first_degrees) if lack is not None else float("nan"),
        line.residual_variance,
        line.residual_degrees,
        line.direction_half_width,
        _loop(line, used),
        line.full_scale_output,
        _median(used.column("time_since_motion_s", line.rows)),
        _temperature_variance(used, line),
        used.text("reference", int(line.rows[0])),
    )


def _loop(line: BranchLine, used: UsedReadings) -> str:
    if line.hysteresis is not None:
        return MEASURED
    return IN_NOISE if np.mean(used.direction[line.rows] == TURNING) > 0.5 else NOT_MEASURED


def _median(values: FloatArray) -> float:
    known = values[np.isfinite(values)]
    return float(np.median(known)) if len(known) else float("nan")


def _temperature_variance(used: UsedReadings, line: BranchLine) -> float:
    values, run = used.column("temperature_c", line.rows), used.run[line.rows]
    means = _medians_of_runs(values, run)
    return float(np.var(means, ddof=1)) if len(means) > 1 else float("nan")


def _medians_of_runs(values: FloatArray, run: npt.NDArray[np.int64]) -> FloatArray:
    """Median of the known values of every run that has any, in the order of the codes of runs."""
    known = np.isfinite(values)
    values, run = values[known], run[known]
    order = np.lexsort((values, run))
    values, run = values[order], run[order]
    first = np.flatnonzero(np.diff(run, prepend=-1))
    counts = np.diff(first, append=len(run))
    return np.asarray((values[first + (counts - 1) // 2] + values[first + counts // 2]) / 2.0)
