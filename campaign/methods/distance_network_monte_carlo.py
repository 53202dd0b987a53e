"""Many sets of lengths of one network adjusted at once: propagation by Monte Carlo (JCGM 101:2008)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.methods.distance_network import (
    AdjustedNetwork,
    datum_basis,
    distance_design,
    distances,
)

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

MOST_STEPS = 25
AT_REST = 1e-6
"""A draw is solved when its last step is smaller than this share of the figure's size."""


@dataclass(frozen=True)
class DrawnShapes:
    """Shapes of drawn lengths: ``points`` (draws, n, 2), and which of them were ``solved`` (draws,)."""

    points: FloatArray
    solved: BoolArray

    @property
    def mean(self) -> FloatArray:
        """Mean over the solved draws, shape (n, 2)."""
        return np.asarray(self.points[self.solved].mean(axis=0))

    @property
    def covariance(self) -> FloatArray:
        """Covariance over the solved draws, shape (2n, 2n)."""
        flat = self.points[self.solved].reshape(int(self.solved.sum()), -1)
        return np.asarray(np.cov(flat, rowvar=False))


def adjust_draws(
    network: AdjustedNetwork, edges: IntArray, draws: FloatArray, covariance: FloatArray, kept: BoolArray
) -> DrawnShapes:
    """Adjust many sets of lengths by Gauss–Newton steps from the first-order answer.

    Parameters
    ----------
    network
        The adjusted network about which lengths were drawn.
    edges
        Shape (E, 2).
    draws
        Shape (draws, E): lengths.
    covariance
        Shape (E, E): what they are weighted by.
    kept
        Shape (n, 2): the datum, as of the network.

    Returns
    -------
    DrawnShapes
        A draw whose steps do not come to rest has no shape, and is not solved.
    """
    origin = network.points.mean(axis=0)
    centre = network.points - origin
    basis, whiten = datum_basis(centre, kept), np.linalg.inv(np.linalg.cholesky(covariance))
    shift = (draws - distances(centre, edges)) @ network.operator.T
    points = centre + shift.reshape(len(draws), -1, 2)
    size = float(np.ptp(centre))
    solved = np.zeros(len(draws), dtype=bool)
    active = np.arange(len(draws))
    for _ in range(MOST_STEPS):
        step = _steps(points[active], edges, draws[active], whiten, basis)
        points[active] += step
        largest = np.abs(step).max(axis=(1, 2))
        solved[active[largest <= AT_REST * size]] = True
        active = active[(largest > AT_REST * size) & (largest < 10.0 * size)]
        if not len(active):
            break
    return DrawnShapes(points + origin, solved)


def _steps(
    points: FloatArray, edges: IntArray, lengths: FloatArray, whiten: FloatArray, basis: FloatArray
) -> FloatArray:
    """One Gauss–Newton step of every draw, shape (draws, n, 2)."""
    slope = (whiten @ distance_design(points, edges)) @ basis
    residual = (lengths - distances(points, edges)) @ whiten.T
    turned = slope.transpose(0, 2, 1)
    gram = turned @ slope
    gram += 1e-12 * np.trace(gram, axis1=1, axis2=2)[:, None, None] * np.eye(basis.shape[1])
    step = np.linalg.solve(gram, turned @ residual[:, :, None])[:, :, 0]
    return np.asarray((step @ basis.T).reshape(len(points), -1, 2))
