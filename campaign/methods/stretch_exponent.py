"""Stretch exponent of a capacitive sensor: C/C₀ = λ^p with λ = 1 + strain.

Parallel plates with an incompressible dielectric of constant permittivity: area over thickness grows as λ
when the sides are free (p = 1), as λ² when the width is kept (p = 2), as λ⁴ when both directions stretch
alike (p = 4).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.methods.calibration_line import fit_lines

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

LAWS: dict[str, float] = {"free uniaxial": 1.0, "width kept": 2.0, "equibiaxial": 4.0}
"""Exponent of each ideal deformation."""


@dataclass(frozen=True)
class RunExponents:
    """Exponent of each run, shape (runs,), and its variance from noise within the run."""

    exponents: FloatArray
    variances: FloatArray


def capacitance_ratio(strain: FloatArray, exponent: float) -> FloatArray:
    """Return C/C₀ = (1 + strain)^exponent; *strain* is engineering strain in mm/mm."""
    return np.asarray((1.0 + strain) ** exponent)


def run_exponents(strain: FloatArray, signal: FloatArray, run: IntArray, runs: int) -> RunExponents:
    """Fit log C against log λ in every run by least squares.

    Parameters
    ----------
    strain, signal, run
        Shape (readings,): strain in mm/mm above −1, capacitance above 0 in any one unit, run codes from 0.
    runs
        Number of runs.
    """
    lines = fit_lines(np.log1p(strain), np.log(signal), run, runs)
    degrees = lines.counts - 2
    variance = np.divide(
        lines.residual_sums_of_squares, degrees, out=np.full(runs, np.nan), where=degrees > 0
    )
    return RunExponents(lines.slopes, np.asarray(variance / lines.x_sums_of_squares))


def apparent_exponent(exponent: float, zero_capacitance: float, parasitic: float) -> float:
    """Return the exponent seen at small strain with a parallel parasitic capacitance: p C₀/(C₀ + C_p)."""
    return exponent * zero_capacitance / (zero_capacitance + parasitic)
