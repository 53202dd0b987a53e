"""Spread of runs within and between mountings, and the line of a sensor from runs of several mountings.

Runs of one mounting share what mounting changed, so they are not independent of each other: the analysis of
variance has two strata (S. R. Searle, G. Casella, C. E. McCulloch, Variance Components (1992), chapter 3),
here for two coefficients at once.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.methods.calibration_line import LineOfRuns, line_of_runs, run_covariance, scatter_of_runs

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


@dataclass(frozen=True)
class RunScatter:
    """Sums over one sensor, or over several once added: all that the components of spread are found from.

    Attributes
    ----------
    between, within
        Shape (2, 2): sums of squares and products of the means of mountings (each times its runs) about the
        sensor's mean, and of runs about the mean of their mounting.
    between_degrees, within_degrees
        Their degrees of freedom.
    sizes
        Effective number of runs in a mounting times ``between_degrees``.
    noise
        Shape (2, 2): covariance of a run's coefficients from noise within it, times all degrees of freedom.
    """

    between: FloatArray
    within: FloatArray
    between_degrees: int
    within_degrees: int
    sizes: float
    noise: FloatArray

    @property
    def degrees(self) -> int:
        """All degrees of freedom between runs."""
        return self.between_degrees + self.within_degrees

    def __add__(self, other: RunScatter) -> RunScatter:
        return RunScatter(
            self.between + other.between,
            self.within + other.within,
            self.between_degrees + other.between_degrees,
            self.within_degrees + other.within_degrees,
            self.sizes + other.sizes,
            self.noise + other.noise,
        )


APART = "apart"
TOGETHER = "together"
ONE_MOUNTING = "one mounting"
"""Mountings are told from runs; each run was a mounting of its own; no mounting was repeated."""


@dataclass(frozen=True)
class RunSpread:
    """Covariances of true lines, (2, 2): of mountings about the sensor, of runs about their mounting.

    ``degrees_of_freedom`` are those of the spread of a new run in a new mounting (Satterthwaite), at the
    centre. ``mountings`` says what is known of remounting: :data:`APART` from runs, :data:`TOGETHER` with
    them in ``run``, or :data:`ONE_MOUNTING`.
    """

    mounting: FloatArray
    run: FloatArray
    degrees_of_freedom: float
    mountings: str

    @property
    def new_run(self) -> FloatArray:
        """Covariance of the line of a run in a new mounting, shape (2, 2)."""
        return self.mounting + self.run


def scatter_in_mountings(coefficients: FloatArray, within: FloatArray, mounting: IntArray) -> RunScatter:
    """Return the scatter of one sensor's runs.

    Parameters
    ----------
    coefficients
        Shape (runs, 2): coefficients of the runs' lines.
    within
        Shape (runs, 2, 2): their covariance from noise within the run.
    mounting
        Shape (runs,): code of each run's mounting.
    """
    codes = np.unique(mounting, return_inverse=True)[1]
    counts = np.bincount(codes)
    means = np.stack([coefficients[codes == code].mean(axis=0) for code in range(len(counts))])
    inside = coefficients - means[codes]
    total = scatter_of_runs(coefficients)
    own = inside.T @ inside
    runs = len(coefficients)
    return RunScatter(
        total - own,
        own,
        len(counts) - 1,
        runs - len(counts),
        float(runs - np.sum(counts**2) / runs),
        (runs - 1) * within.mean(axis=0),
    )


def spread_of_runs(scatter: RunScatter) -> RunSpread:
    """Return the components of spread; they need at least one degree of freedom between runs.

    Where no mounting holds two runs, or none is repeated, mounting and run are one component, called the
    run's.
    """
    noise = scatter.noise / scatter.degrees
    if scatter.within_degrees == 0 or scatter.between_degrees == 0:
        observed = (scatter.between + scatter.within) / scatter.degrees
        known = ONE_MOUNTING if scatter.between_degrees == 0 else TOGETHER
        return RunSpread(np.zeros((2, 2)), run_covariance(observed, noise), float(scatter.degrees), known)
    size = scatter.sizes / scatter.between_degrees
    between = scatter.between / scatter.between_degrees
    inside = scatter.within / scatter.within_degrees
    run = run_covariance(inside, noise)
    mounting = run_covariance(between, run + noise) / size
    parts = float(between[0, 0] / size), float((1.0 - 1.0 / size) * inside[0, 0])
    spent = parts[0] ** 2 / scatter.between_degrees + parts[1] ** 2 / scatter.within_degrees
    degrees = sum(parts) ** 2 / spent if spent > 0 else float(scatter.degrees)
    return RunSpread(mounting, run, degrees, APART)


def line_of_mountings(
    coefficients: FloatArray, within: FloatArray, mounting: IntArray, spread: RunSpread, centre: float
) -> LineOfRuns:
    """Return the sensor's line from runs of several mountings, with that of a run in a new mounting about it.

    The line of each mounting from its runs first, then the sensor's from those, each by generalised least
    squares; arguments as in :func:`scatter_in_mountings` and
    :func:`~campaign.methods.calibration_line.line_of_runs`.
    """
    codes = np.unique(mounting, return_inverse=True)[1]
    own = [
        line_of_runs(coefficients[codes == code], within[codes == code], spread.run, centre)
        for code in range(int(codes.max()) + 1)
    ]
    line = line_of_runs(
        np.stack([part.coefficients for part in own]),
        np.stack([part.covariance for part in own]),
        spread.mounting,
        centre,
    )
    return LineOfRuns(line.coefficients, line.covariance, spread.new_run, centre)
