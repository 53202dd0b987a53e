"""Lengths read directly in mm: the same line against length, in which what the rest length adds cancels.

The length is never the strain multiplied: a stand that records lengths knows the length whatever the rest
length is, so its uncertainty, carried by every strain (dε/dL₀ = −(1 + ε)/L₀), is taken out again. A stand
that records elongations knows ΔL, and the length L₀ + ΔL carries the rest length's uncertainty once.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from campaign.methods.inverse_reading import ReadingModel

if TYPE_CHECKING:
    from campaign.analyses.calibration import CalibrationRecord

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class _Polynomial:
    """A variance v(x) = constant + 2 x linear + x² square."""

    constant: float
    linear: float
    square: float

    def at(self, shift: float, scale: float) -> _Polynomial:
        """The same as a polynomial of L, where x = shift + scale L."""
        return _Polynomial(
            self.constant + 2 * shift * self.linear + shift**2 * self.square,
            scale * (self.linear + shift * self.square),
            scale**2 * self.square,
        )


def length_model(record: CalibrationRecord, recorded: str) -> ReadingModel | None:
    """Return the model that reads a length in mm from a signal.

    Parameters
    ----------
    record
        A calibration against strain, elongation or length.
    recorded
        What the stand recorded: ``"length"``, ``"elongation"`` or ``"strain"``.

    Returns
    -------
    ReadingModel or None
        With x = length in mm; ``None`` where the rest length is needed and not known.

    Source: GUM:2008 5.2.2 (correlated input quantities), for the rest length that line and conversion share.
    """
    if record.reference_name == "length":
        return record.reading_model
    rest = record.rest_length_mm
    if not rest > 0:
        return None
    strain = record.reference_name == "strain"
    shift, scale = (-1.0, 1.0 / rest) if strain else (-rest, 1.0)
    line = _Polynomial(record.var_intercept, record.cov_intercept_slope, record.var_slope).at(shift, scale)
    run = _Polynomial(record.run_var_intercept, record.run_cov, record.run_var_slope).at(shift, scale)
    line = _with_rest_length(line, record, recorded, per_mm=abs(record.slope) * scale)
    return ReadingModel(
        record.intercept + shift * record.slope,
        record.slope * scale,
        line.constant,
        line.square,
        line.linear,
        run.constant,
        run.square,
        run.linear,
        record.lack_of_fit_variance,
        record.direction_half_width,
        record.residual_variance,
        record.t_quantile_975,
    )


def _with_rest_length(
    line: _Polynomial, record: CalibrationRecord, recorded: str, per_mm: float
) -> _Polynomial:
    """Correct the line's variance for the rest length: what strain holds of it, against what length holds."""
    uncertainty, rest = record.rest_length_uncertainty_mm, record.rest_length_mm
    if not (math.isfinite(uncertainty) and uncertainty > 0):
        return line
    once = (per_mm * uncertainty) ** 2
    held_by_strain = record.reference_name == "strain" and recorded != "strain"
    taken = _lever(recorded, rest) if held_by_strain else _Polynomial(0.0, 0.0, 0.0)
    added = {"length": _Polynomial(0.0, 0.0, 0.0), "elongation": _Polynomial(1.0, 0.0, 0.0)}.get(
        recorded, _Polynomial(0.0, 0.0, 1 / rest**2)
    )
    return _Polynomial(
        line.constant + once * (added.constant - taken.constant),
        line.linear + once * (added.linear - taken.linear),
        line.square + once * (added.square - taken.square),
    )


def _lever(recorded: str, rest: float) -> _Polynomial:
    """Square of L₀ dε/dL₀ as a polynomial of L: (L/L₀)² for recorded lengths, (L/L₀ − 1)² for elongations."""
    if recorded == "length":
        return _Polynomial(0.0, 0.0, 1 / rest**2)
    return _Polynomial(1.0, -1 / rest, 1 / rest**2)
