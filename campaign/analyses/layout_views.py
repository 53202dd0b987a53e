"""A rebuilt shape beside the known one, in a frame: what a drawing of a placement needs."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.analyses.layout_results import Ellipses, NodeErrors, Placement
from campaign.methods.distance_network_ellipses import ellipse_factor, standard_ellipses

FloatArray = npt.NDArray[np.float64]

BY_DATUM, BY_FIT = "datum", "fit"
FRAMES = (BY_DATUM, BY_FIT)
"""The frames: node and direction of the datum kept, or known and rebuilt nodes fitted rigidly."""


@dataclass(frozen=True)
class ShapeView:
    """One placement in one frame.

    Attributes
    ----------
    frame
        One of :data:`FRAMES`.
    known_mm, rebuilt_mm
        Shape (n, 2), NaN where not known, not solved.
    ellipses
        Of rebuilt less known, as calibration and known positions predict it; of the rebuilt node alone where
        its known position is missing; NaN where nothing was solved.
    """

    frame: str
    known_mm: FloatArray
    rebuilt_mm: FloatArray
    ellipses: Ellipses

    @property
    def errors_mm(self) -> FloatArray:
        """Rebuilt less known, shape (n, 2)."""
        return self.rebuilt_mm - self.known_mm

    @property
    def places_mm(self) -> FloatArray:
        """Known nodes, or rebuilt ones where these are not known, shape (n, 2)."""
        return np.where(np.isfinite(self.known_mm), self.known_mm, self.rebuilt_mm)

    def outlines(self, points: int = 24) -> FloatArray:
        """Return the 95 % ellipses about the origin, shape (n, points + 1, 2), closed."""
        around = np.linspace(0.0, 2.0 * np.pi, points + 1)
        own, factor = self.ellipses, self.ellipses.factor_95
        major = factor * own.semi_major_mm[:, None] * np.cos(around)
        minor = factor * own.semi_minor_mm[:, None] * np.sin(around)
        cosine, sine = np.cos(own.angle_rad)[:, None], np.sin(own.angle_rad)[:, None]
        return np.stack([major * cosine - minor * sine, major * sine + minor * cosine], axis=2)


def shape_view(placement: Placement, frame: str) -> ShapeView:
    """Return a placement in one of :data:`FRAMES`; without errors there, as its datum has it."""
    found = placement.after_datum if frame == BY_DATUM else placement.after_fit
    known = placement.known_mm if found is None else _with_others(found, placement)
    return ShapeView(frame, known, placement.adjusted_mm, _ellipses(placement, found))


def _with_others(found: NodeErrors, placement: Placement) -> FloatArray:
    """Known nodes of the frame; those of nodes that were not solved only where the datum is the frame."""
    if found is not placement.after_datum:
        return found.known_mm
    return np.where(np.isfinite(found.known_mm), found.known_mm, placement.known_mm)


def _ellipses(placement: Placement, found: NodeErrors | None) -> Ellipses:
    covariance = placement.covariance_mm2.copy()
    if found is not None:
        known = np.flatnonzero(np.isfinite(np.diag(found.covariance_mm2)))
        covariance[np.ix_(known, known)] = found.covariance_mm2[np.ix_(known, known)]
    made = standard_ellipses(covariance)
    factor = placement.ellipses.factor_95 if placement.ellipses is not None else ellipse_factor()
    return Ellipses(made.semi_major, made.semi_minor, made.angle, factor)
