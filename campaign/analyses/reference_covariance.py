"""The uncertainty of the reference as it bears on a sensor's line."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from campaign.analyses.used_readings import UsedReadings
from campaign.methods.reference_uncertainty import covariance_of_line, shared_sources
from campaign.recordings.description import Description

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

DIRECTION_SIGNS = np.array([1.0, -1.0, 0.0])
"""Of rising, falling and turning."""


def shared_covariance(
    used: UsedReadings,
    rows: IntArray,
    quantity: str,
    x: FloatArray,
    slope: float,
    description: Description,
) -> FloatArray:
    """Return what the uncertainty of the reference adds to the covariance of intercept and slope.

    Parameters
    ----------
    used, rows
        The used readings, and the places of those of the line.
    quantity
        What the line runs against: ``"strain"``, ``"elongation"`` or ``"length"``.
    x
        Shape (readings,): its values.
    slope
        Of the line against it.
    description
        Stated uncertainties of the stand.

    Returns
    -------
    numpy.ndarray
        Shape (2, 2); zero where nothing is stated, or lengths are not known.
    """
    stated = description.length_reference
    rest = float(used.column("rest_length_mm", rows[:1])[0])
    recorded = used.text("reference", int(rows[0]))
    elongation, length = used.column("elongation_mm", rows), used.column("length_mm", rows)
    if quantity == "strain" and not np.isfinite(elongation).all():
        elongation = x * rest
    travel = length if recorded == "length" else elongation
    if (quantity == "strain" and not np.isfinite(rest)) or not np.isfinite(travel).all():
        return np.zeros((2, 2))
    sources = shared_sources(
        quantity=quantity,
        recorded=recorded,
        length_mm=length,
        elongation_mm=elongation,
        rest_length_mm=rest,
        direction=DIRECTION_SIGNS[used.direction[rows]],
        session=used.mounting[rows],
        scale_relative=stated.scale_relative,
        zero_mm=stated.zero_mm,
        backlash_mm=stated.backlash_mm,
        rest_length_uncertainty_mm=float(used.column("rest_length_uncertainty_mm", rows[:1])[0]),
    )
    return covariance_of_line(sources, x, slope)
