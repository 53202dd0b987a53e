"""The reference is not exact: what its uncertainty adds to the covariance of a line.

Each source is one unknown (or a few, one a session) that several readings share: scale, zero, rest length,
backlash. Their covariance is propagated to the line after the fit (GUM 5.2, F.1.2.3) and no repetition
makes it smaller. The random part differs from reading to reading, so the scatter of readings already
contains it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


@dataclass(frozen=True)
class SharedSource:
    """One source of uncertainty of the reference that readings share.

    Attributes
    ----------
    name
        ``"scale"``, ``"zero"``, ``"rest length"`` or ``"backlash"``.
    sensitivities
        Shape (readings, unknowns): change of x for one standard uncertainty of each unknown, in units of x.
    """

    name: str
    sensitivities: FloatArray


def shared_sources(
    *,
    quantity: str,
    recorded: str,
    length_mm: FloatArray,
    elongation_mm: FloatArray,
    rest_length_mm: float,
    direction: FloatArray,
    session: IntArray,
    scale_relative: float,
    zero_mm: float,
    backlash_mm: float,
    rest_length_uncertainty_mm: float,
) -> tuple[SharedSource, ...]:
    """Return the sources that act on the readings of one sensor.

    Parameters
    ----------
    quantity
        What x is: ``"strain"``, ``"elongation"`` or ``"length"``.
    recorded
        What the stand records: the same three.
    length_mm, elongation_mm
        Shape (readings,), NaN where unknown; the recorded one (for strain: elongation) must be known.
    rest_length_mm
        Needed where x is strain, or strain was recorded.
    direction
        Shape (readings,): +1 approached from below, −1 from above, 0 at the turn.
    session
        Shape (readings,): code of the mounting; the zero is taken anew at each.
    scale_relative, zero_mm, backlash_mm, rest_length_uncertainty_mm
        Standard uncertainties; NaN or 0 where not stated.

    Returns
    -------
    tuple of SharedSource
        Only the sources that are stated and act. dε/dL₀ is −(1 + ε)/L₀ where lengths are recorded and −ε/L₀
        where elongations are; x that is itself recorded does not depend on the rest length.
    """
    per_mm = 1.0 / rest_length_mm if quantity == "strain" else 1.0
    travel = length_mm if recorded == "length" else elongation_mm
    sources = []
    if scale_relative > 0:
        sources.append(SharedSource("scale", (scale_relative * travel * per_mm)[:, None]))
    if zero_mm > 0:
        codes = np.unique(session, return_inverse=True)[1]
        indicators = (codes[:, None] == np.arange(codes.max() + 1)[None, :]).astype(np.float64)
        sources.append(SharedSource("zero", zero_mm * per_mm * indicators))
    if rest_length_uncertainty_mm > 0 and quantity != recorded:
        lever = _per_rest_length(quantity, recorded, travel, rest_length_mm)
        sources.append(SharedSource("rest length", (rest_length_uncertainty_mm * lever)[:, None]))
    if backlash_mm > 0:
        sources.append(SharedSource("backlash", (0.5 * backlash_mm * per_mm * direction)[:, None]))
    return tuple(sources)


def _per_rest_length(quantity: str, recorded: str, travel: FloatArray, rest: float) -> FloatArray:
    """Change of x per mm of rest length with what was recorded held fixed, shape (readings,)."""
    if quantity == "strain":
        return -travel / rest**2
    if recorded == "strain":
        return travel / rest + (quantity == "length")
    return np.full(len(travel), 1.0 if quantity == "length" else -1.0)


def covariance_between_readings(sources: Sequence[SharedSource]) -> FloatArray:
    """Return the covariance of x between readings that the sources make, shape (readings, readings)."""
    stacked = np.hstack([source.sensitivities for source in sources])
    return np.asarray(stacked @ stacked.T)


def covariance_of_line(sources: Sequence[SharedSource], x: FloatArray, slope: float) -> FloatArray:
    """Return what the sources add to the covariance of intercept and slope of a line, shape (2, 2).

    An error δ of x moves the signal expected there by slope × δ; the least-squares operator carries that to
    the coefficients.
    """
    if not sources:
        return np.zeros((2, 2))
    design = np.column_stack([np.ones(len(x)), x - x.mean()])
    operator = np.linalg.solve(design.T @ design, design.T)
    operator[0] -= x.mean() * operator[1]
    moved = slope * operator @ np.hstack([source.sensitivities for source in sources])
    return np.asarray(moved @ moved.T)
