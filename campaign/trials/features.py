"""What the features of every kind of trial have in common."""

from __future__ import annotations

from typing import Protocol

import numpy as np

from campaign.notices import Notice
from campaign.recordings.recording import FloatArray, ReferenceQuantity, Trial


class TrialFeatures(Protocol):
    """What is kept of one trial once its recording is no longer in memory: results and remarks."""

    @property
    def notices(self) -> tuple[Notice, ...]:
        """What a reader should know about the trial."""


def recorded_reference(trial: Trial) -> tuple[str, FloatArray] | None:
    """Return the quantity in which the stand recorded and its values, else whichever of the others is there.

    ``None`` where no length, elongation or strain is known.
    """
    recorded = {"length": trial.length_mm, "elongation": trial.elongation_mm, "strain": trial.strain}
    order = [trial.reference, *(name for name in recorded if name != trial.reference)]
    for name in order:
        values = recorded.get(name)
        if values is not None and np.any(np.isfinite(values)):
            return name, values
    return None


def into_reference(
    recorded: str, wanted: ReferenceQuantity, rest_length_mm: float
) -> tuple[float, float] | None:
    """Return (offset, factor) that take *recorded* values to *wanted*: wanted = offset + factor · recorded.

    Parameters
    ----------
    recorded
        ``"length"``, ``"elongation"`` (mm) or ``"strain"`` (mm/mm).
    wanted
        The quantity that an analysis is made in.
    rest_length_mm
        NaN where unknown.

    Returns
    -------
    tuple of float or None
        ``None`` where the rest length is needed and not known.
    """
    if recorded == wanted.name:
        return 0.0, 1.0
    if not rest_length_mm > 0:
        return None
    to_strain = {"length": (-1.0, 1.0 / rest_length_mm), "elongation": (0.0, 1.0 / rest_length_mm)}
    offset, factor = to_strain.get(recorded, (0.0, 1.0))
    from_strain = {"length": (rest_length_mm, rest_length_mm), "elongation": (0.0, rest_length_mm)}
    start, scale = from_strain.get(wanted.name, (0.0, 1.0))
    return start + scale * offset, scale * factor
