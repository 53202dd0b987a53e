"""Least-squares adjustment of a planar network of distances: node coordinates from edge lengths.

Lengths l with their whole covariance Σ are adjusted so that (l − d(x))' Σ⁻¹ (l − d(x)) is least, by damped
Gauss–Newton steps (Levenberg and Marquardt). Distances say nothing about place and direction (a defect of
three): the datum supplies them, by coordinates that are kept, or by inner constraints (no mean shift and no
mean rotation against the start), which make the trace of the coordinates' covariance least of all datums.
Strang & Borre, Linear Algebra, Geodesy, and GPS (1997); Niemeier, Ausgleichungsrechnung (2008), from memory.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

SINGULAR = 1e-3
"""Smallest over largest singular value of the design below which a figure counts as singular: node SDs would
be a thousand times the length SDs."""

MOST_STEPS = 200
STILL = 1e-11
"""A step smaller than this share of the figure's size ends the search."""

HARDLY_LESS = 1e-12
"""A sum of squares that falls by a smaller share has stopped falling."""


class UnsolvedNetworkError(ValueError):
    """The network has no adjusted shape; the message says why, in a clause without a final stop."""


@dataclass(frozen=True)
class AdjustedNetwork:
    """An adjusted network of n nodes and E edges; lengths in one unit, covariances in its square.

    Attributes
    ----------
    points
        Shape (n, 2).
    covariance
        Shape (2n, 2n) in the order x₁, y₁, x₂, …, by the known covariance of the lengths; 0 in the
        coordinates that the datum keeps.
    lengths, length_covariance
        Shape (E,) and (E, E): adjusted.
    residuals
        Shape (E,): adjusted less given length.
    operator
        Shape (2n, E): what the given lengths do to the coordinates, to first order.
    design
        Shape (E, 2n): derivatives of the lengths.
    degrees_of_freedom
        Edges less coordinates found.
    chi_square
        Sum of squares of the whitened residuals.
    steps
        Accepted steps of the search.
    condition
        Smallest over largest singular value of the design within the datum.
    """

    points: FloatArray
    covariance: FloatArray
    lengths: FloatArray
    length_covariance: FloatArray
    residuals: FloatArray
    operator: FloatArray
    design: FloatArray
    degrees_of_freedom: int
    chi_square: float
    steps: int
    condition: float


def keep_nodes(count: int, nodes: list[int]) -> BoolArray:
    """Return the datum that keeps both coordinates of *nodes*, shape (count, 2)."""
    kept = np.zeros((count, 2), dtype=bool)
    kept[nodes] = True
    return kept


def keep_direction(count: int, origin: int, along: int) -> BoolArray:
    """Return the datum that keeps *origin*, and y of *along*: a fixed node and direction, shape (count, 2).

    The start must have both nodes at one y.
    """
    kept = keep_nodes(count, [origin])
    kept[along, 1] = True
    return kept


def keep_nothing(count: int) -> BoolArray:
    """Return the datum by inner constraints (a free network), shape (count, 2)."""
    return np.zeros((count, 2), dtype=bool)


def distances(points: FloatArray, edges: IntArray) -> FloatArray:
    """Return the lengths of *edges* (E, 2) between *points* (…, n, 2), shape (…, E)."""
    return np.asarray(np.linalg.norm(points[..., edges[:, 1], :] - points[..., edges[:, 0], :], axis=-1))


def distance_design(points: FloatArray, edges: IntArray) -> FloatArray:
    """Return the derivatives of edge lengths with respect to the coordinates, shape (…, E, 2n)."""
    difference = points[..., edges[:, 1], :] - points[..., edges[:, 0], :]
    length = np.linalg.norm(difference, axis=-1, keepdims=True)
    unit = difference / np.where(length > 0, length, 1.0)
    design = np.zeros((*points.shape[:-2], len(edges), points.shape[-2], 2))
    rows = np.arange(len(edges))
    design[..., rows, edges[:, 0], :] = -unit
    design[..., rows, edges[:, 1], :] = unit
    return design.reshape(*points.shape[:-2], len(edges), -1)


def rigid_motions(points: FloatArray) -> FloatArray:
    """Return shifts and rotation of *points* (n, 2) as orthonormal columns, shape (2n, 3)."""
    count = len(points)
    motions = np.zeros((count, 2, 3))
    motions[:, 0, 0] = motions[:, 1, 1] = 1.0 / np.sqrt(count)
    away = points - points.mean(axis=0)
    turn = np.column_stack([-away[:, 1], away[:, 0]])
    size = float(np.linalg.norm(turn))
    motions[:, :, 2] = turn / size if size > 0 else turn
    return motions.reshape(2 * count, 3)


def datum_basis(points: FloatArray, kept: BoolArray) -> FloatArray:
    """Return an orthonormal basis of the changes of *points* that the datum allows, shape (2n, k)."""
    if kept.any():
        return np.eye(kept.size)[:, ~kept.ravel()]
    motions = rigid_motions(points)
    return np.asarray(np.linalg.qr(motions, mode="complete")[0][:, motions.shape[1] :])


def adjust_network(
    edges: IntArray, lengths: FloatArray, covariance: FloatArray, start: FloatArray, kept: BoolArray
) -> AdjustedNetwork:
    """Adjust a planar distance network.

    Parameters
    ----------
    edges
        Shape (E, 2): the two nodes of each edge.
    lengths, covariance
        Shape (E,) and (E, E), positive definite: known up to nothing.
    start
        Shape (n, 2): where the search starts; its reflection is the answer's, and the coordinates that the
        datum keeps are taken from it.
    kept
        Shape (n, 2): the coordinates that the datum keeps; none: inner constraints against *start*.

    Raises
    ------
    UnsolvedNetworkError
        Fewer edges than coordinates, a singular figure, or a search that does not end.
    """
    whiten = np.linalg.inv(np.linalg.cholesky(covariance))
    origin = start.mean(axis=0)
    basis = datum_basis(start - origin, kept)
    if len(edges) < basis.shape[1]:
        raise UnsolvedNetworkError(f"{len(edges)} lengths for {basis.shape[1]} coordinates")
    points, steps = _search(edges, lengths, whiten, start - origin, basis)
    return _adjusted(edges, lengths, covariance, points, origin, kept, steps)


def _search(
    edges: IntArray, lengths: FloatArray, whiten: FloatArray, start: FloatArray, basis: FloatArray
) -> tuple[FloatArray, int]:
    """Damped Gauss–Newton steps from *start* within *basis* until they stand still."""
    points, damping, size = start, 1e-3, float(np.ptp(start)) or 1.0
    residual = whiten @ (lengths - distances(points, edges))
    for step_number in range(MOST_STEPS):
        slope = whiten @ (distance_design(points, edges) @ basis)
        gram, right = slope.T @ slope, slope.T @ residual
        scale = np.diag(gram) + 1e-12 * float(np.max(np.diag(gram)))
        step = (basis @ np.linalg.solve(gram + damping * np.diag(scale), right)).reshape(-1, 2)
        tried = points + step
        new = whiten @ (lengths - distances(tried, edges))
        before, after = float(residual @ residual), float(new @ new)
        tiny = float(np.abs(step).max()) <= STILL * size
        if after <= before:
            points, residual, damping = tried, new, damping / 10.0
        elif tiny or after - before <= HARDLY_LESS * before:
            return points, step_number
        else:
            damping *= 10.0
        if tiny:
            return points, step_number + 1
    raise UnsolvedNetworkError(f"the adjustment does not come to rest in {MOST_STEPS} steps")


def _adjusted(
    edges: IntArray,
    lengths: FloatArray,
    covariance: FloatArray,
    points: FloatArray,
    origin: FloatArray,
    kept: BoolArray,
    steps: int,
) -> AdjustedNetwork:
    """Covariances and residuals at the end of the search, the figure's condition checked."""
    basis, design = datum_basis(points, kept), distance_design(points, edges)
    values = np.linalg.svd(design @ basis, compute_uv=False)
    condition = float(values[-1] / values[0]) if values[0] > 0 else 0.0
    if condition < SINGULAR:
        raise UnsolvedNetworkError("singular figure: the lengths hardly tell where its nodes are")
    weights = np.linalg.inv(covariance)
    within = design @ basis
    cofactor = basis @ np.linalg.inv(within.T @ weights @ within) @ basis.T
    adjusted = distances(points, edges)
    residuals = adjusted - lengths
    return AdjustedNetwork(
        points=points + origin,
        covariance=cofactor,
        lengths=adjusted,
        length_covariance=design @ cofactor @ design.T,
        residuals=residuals,
        operator=cofactor @ design.T @ weights,
        design=design,
        degrees_of_freedom=len(edges) - basis.shape[1],
        chi_square=float(residuals @ weights @ residuals),
        steps=steps,
        condition=condition,
    )
