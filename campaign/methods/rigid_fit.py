"""The best rigid fit of one set of points to another: shift and rotation, no stretch and no reflection.

Procrustes with the rotation from the singular values of the cross-products (P. H. Schönemann, Psychometrika
31 (1966) 1–10; from memory), in the plane by one angle.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.methods.distance_network import rigid_motions

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class RigidFit:
    """Points moved rigidly onto others.

    Attributes
    ----------
    moved
        Shape (n, 2): the points after shift and rotation.
    differences
        Shape (n, 2): the points fitted to, less the moved ones.
    projector
        Shape (2n, 2n): takes the covariance of either set (in the frame fitted to) to its share in the
        differences, to first order: P C P'.
    angle
        Rotation in rad, counter-clockwise.
    """

    moved: FloatArray
    differences: FloatArray
    projector: FloatArray
    angle: float


def fit_rigidly(points: FloatArray, onto: FloatArray) -> RigidFit:
    """Return the shift and rotation of *points* (n, 2) that bring them closest to *onto* (n, 2)."""
    centre, target = points.mean(axis=0), onto.mean(axis=0)
    here, there = points - centre, onto - target
    cosine = float(np.sum(here * there))
    sine = float(np.sum(here[:, 0] * there[:, 1] - here[:, 1] * there[:, 0]))
    angle = float(np.arctan2(sine, cosine))
    moved = here @ rotation(angle).T + target
    motions = rigid_motions(moved)
    projector = np.eye(2 * len(points)) - motions @ motions.T
    return RigidFit(moved, onto - moved, projector, angle)


def rotation(angle: float) -> FloatArray:
    """Return the matrix that turns by *angle* (rad), counter-clockwise."""
    cosine, sine = np.cos(angle), np.sin(angle)
    return np.array([[cosine, -sine], [sine, cosine]])


def into_frame(points: FloatArray, origin: int, along: int) -> tuple[FloatArray, FloatArray]:
    """Return points in the frame of two of them, and the derivatives of the new coordinates.

    Parameters
    ----------
    points
        Shape (n, 2).
    origin, along
        Numbers of the point that becomes (0, 0) and of that which comes to lie on +x.

    Returns
    -------
    tuple of numpy.ndarray
        Shape (n, 2), and (2n, 2n): takes the covariance of the points to that of the new coordinates.
    """
    count = len(points)
    axis = points[along] - points[origin]
    reach = float(np.linalg.norm(axis))
    back = rotation(-float(np.arctan2(axis[1], axis[0])))
    moved = (points - points[origin]) @ back.T
    slopes = np.kron(np.eye(count), back)
    slopes[:, 2 * origin : 2 * origin + 2] -= np.tile(back, (count, 1))
    turn = np.zeros(2 * count)
    turn[2 * along : 2 * along + 2] += back[1] / reach
    turn[2 * origin : 2 * origin + 2] -= back[1] / reach
    aside = np.column_stack([moved[:, 1], -moved[:, 0]]).ravel()
    return np.asarray(moved), np.asarray(slopes + np.outer(aside, turn))
