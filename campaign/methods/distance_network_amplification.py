"""How much a figure amplifies: SD of a node per SD of a length, all lengths independent and alike.

Common practice, no source: node errors of a shape rebuilt from lengths are several times the length errors,
and grow as the shape flattens, since lengths along a direction say little of what lies across it.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from campaign.methods.distance_network import SINGULAR, distance_design, distances, rigid_motions

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


def node_amplification(points: FloatArray, edges: IntArray) -> FloatArray:
    """Return the SD of every node (both coordinates together) per unit SD of a length, shape (n,).

    Parameters
    ----------
    points
        Shape (n, 2).
    edges
        Shape (E, 2).

    Returns
    -------
    numpy.ndarray
        After best rigid fit (inner constraints over all nodes), so that no datum decides; infinite for a
        singular figure.
    """
    design, motions = distance_design(points, edges), rigid_motions(points)
    values, vectors = np.linalg.eigh(design.T @ design + motions @ motions.T)
    if values[0] < SINGULAR**2 * values[-1]:
        return np.full(len(points), np.inf)
    cofactor = (vectors / values) @ vectors.T - motions @ motions.T
    return np.asarray(np.sqrt(np.maximum(np.diag(cofactor), 0.0).reshape(-1, 2).sum(axis=1)))


def stretched_and_sheared(layout: FloatArray, stretch: float, shear: float) -> FloatArray:
    """Return *layout* (n, 2) with x times *stretch*, then moved along x by *shear* times y."""
    centre = layout.mean(axis=0)
    away = layout - centre
    return np.asarray(centre + np.column_stack([stretch * away[:, 0] + shear * away[:, 1], away[:, 1]]))


def amplification_map(
    layout: FloatArray,
    edges: IntArray,
    stretches: FloatArray,
    shears: FloatArray,
    strain_range: tuple[float, float],
) -> FloatArray:
    """Return the amplification of every node over stretched and sheared layouts, shape (a, b, n).

    Parameters
    ----------
    layout
        Shape (n, 2): unstretched.
    edges
        Shape (E, 2).
    stretches, shears
        Shape (a,) and (b,).
    strain_range
        Lowest and highest strain of an edge that can be read: shapes beyond are NaN.
    """
    rest = distances(layout, edges)
    found = np.full((len(stretches), len(shears), len(layout)), np.nan)
    for i, stretch in enumerate(stretches):
        for j, shear in enumerate(shears):
            points = stretched_and_sheared(layout, float(stretch), float(shear))
            strain = distances(points, edges) / rest - 1.0
            if strain.min() >= strain_range[0] - 1e-9 and strain.max() <= strain_range[1] + 1e-9:
                found[i, j] = node_amplification(points, edges)
    return found
