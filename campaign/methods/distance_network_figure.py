"""What the figure of a distance network allows: rigid parts, broken triangles, a start on the right side."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations

import numpy as np
import numpy.typing as npt

from campaign.methods.distance_network import distance_design

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

IMPLIED = 1e-7
"""Change of the distance of two nodes, under unit motions that keep all edges, that still counts as none."""

CHANCE = 3.0
"""A triangle is broken where one edge exceeds the other two by more than so many SDs of the excess."""


@dataclass(frozen=True)
class BrokenTriangle:
    """Three edges (numbers) of which the first is longer than the other two together, and by how much."""

    edges: tuple[int, int, int]
    excess: float
    excess_sd: float


def rigid_parts(points: FloatArray, edges: IntArray) -> tuple[tuple[int, ...], ...]:
    """Return the sets of nodes that the edges hold together, largest first.

    Two nodes belong together if no motion that keeps every edge (to first order, at *points*) changes their
    distance; a third joins a pair if it belongs to both. In the plane two parts share one node at most.

    Parameters
    ----------
    points
        Shape (n, 2): a shape of the network that is not itself singular.
    edges
        Shape (E, 2).
    """
    count = len(points)
    pairs = np.array(list(combinations(range(count), 2)), dtype=np.int64).reshape(-1, 2)
    motions = _motions_that_keep(distance_design(points, edges), 2 * count)
    moved = np.abs(distance_design(points, pairs) @ motions).max(axis=1, initial=0.0)
    held = np.eye(count, dtype=bool)
    for (first, second), change in zip(pairs, moved, strict=True):
        held[first, second] = held[second, first] = change < IMPLIED
    found = {tuple(np.flatnonzero(held[a] & held[b]).tolist()) for a, b in pairs if held[a, b]}
    return tuple(sorted(found, key=lambda part: (-len(part), part)))


def _motions_that_keep(design: FloatArray, columns: int) -> FloatArray:
    """Basis of the velocities under which no edge changes, shape (2n, k)."""
    if not len(design):
        return np.eye(columns)
    _, values, right = np.linalg.svd(design)
    rank = int(np.sum(values > 1e-9 * max(float(values[0]), 1e-300)))
    return np.asarray(right[rank:].T)


def broken_triangles(edges: IntArray, lengths: FloatArray, covariance: FloatArray) -> list[BrokenTriangle]:
    """Return the triangles of edges whose inequality is broken beyond chance.

    Parameters
    ----------
    edges, lengths, covariance
        Shape (E, 2), (E,) and (E, E).
    """
    number = {frozenset(map(int, edge)): k for k, edge in enumerate(edges)}
    nodes = sorted({int(node) for edge in edges for node in edge})
    found = []
    for corner in combinations(nodes, 3):
        sides = [number.get(frozenset(pair)) for pair in combinations(corner, 2)]
        if None in sides:
            continue
        first, second, third = sorted((s for s in sides if s is not None), key=lambda s: -lengths[s])
        signs = np.zeros(len(lengths))
        signs[first], signs[second], signs[third] = 1.0, -1.0, -1.0
        excess, sd = float(signs @ lengths), float(np.sqrt(signs @ covariance @ signs))
        if excess > CHANCE * sd:
            found.append(BrokenTriangle((first, second, third), excess, sd))
    return found


def edges_to_leave_out(broken: list[BrokenTriangle]) -> tuple[int, ...]:
    """Return the edges that broken triangles put in doubt: the one that they share, else all of them."""
    if not broken:
        return ()
    shared = set.intersection(*(set(triangle.edges) for triangle in broken))
    if len(broken) > 1 and len(shared) == 1:
        return tuple(shared)
    return tuple(sorted({edge for triangle in broken for edge in triangle.edges}))


def place_nodes(
    edges: IntArray, lengths: FloatArray, layout: FloatArray, first: tuple[int, int]
) -> FloatArray:
    """Place the nodes one after another by two lengths each, turned as they are in *layout*.

    Parameters
    ----------
    edges, lengths
        Shape (E, 2) and (E,).
    layout
        Shape (n, 2): the unstretched figure, which says on which side of two others a node lies.
    first
        Two nodes that are placed first: the first where it is in the layout, the second in the direction
        that it has there.

    Returns
    -------
    numpy.ndarray
        Shape (n, 2): where no two placed neighbours lead to a node, its place in the layout, stretched alike.
    """
    known = {frozenset(map(int, edge)): float(length) for edge, length in zip(edges, lengths, strict=True)}
    stretch = _mean_stretch(edges, lengths, layout)
    points = layout[first[0]] + stretch * (layout - layout[first[0]])
    if (length := known.get(frozenset(first))) is not None:
        along = layout[first[1]] - layout[first[0]]
        points[first[1]] = layout[first[0]] + along * length / np.linalg.norm(along)
    placed, waiting = list(first), [k for k in range(len(layout)) if k not in first]
    while (reach := _best_reach(known, layout, placed, waiting)) is not None:
        node, base = reach
        points[node] = _third_corner(known, layout, points, node, base)
        placed.append(node)
        waiting.remove(node)
    return np.asarray(points)


def _mean_stretch(edges: IntArray, lengths: FloatArray, layout: FloatArray) -> float:
    before = np.linalg.norm(layout[edges[:, 1]] - layout[edges[:, 0]], axis=1)
    return float(lengths.sum() / before.sum())


def _best_reach(
    known: dict[frozenset[int], float], layout: FloatArray, placed: list[int], waiting: list[int]
) -> tuple[int, tuple[int, int]] | None:
    """Return the waiting node whose two lengths to placed nodes meet at the best angle, and those nodes."""
    best, found = 0.0, None
    for node in waiting:
        near = [k for k in placed if frozenset((node, k)) in known]
        for base in combinations(near, 2):
            one, other = (layout[k] - layout[node] for k in base)
            sine = abs(_cross(one, other)) / (np.linalg.norm(one) * np.linalg.norm(other))
            if sine > best:
                best, found = float(sine), (node, base)
    return found


def _third_corner(
    known: dict[frozenset[int], float],
    layout: FloatArray,
    points: FloatArray,
    node: int,
    base: tuple[int, int],
) -> FloatArray:
    """Meeting point of two circles, on the side of the base where the layout has the node."""
    start, end = points[base[0]], points[base[1]]
    across, near, far = float(np.linalg.norm(end - start)), *(known[frozenset((node, k))] for k in base)
    foot = (near**2 - far**2 + across**2) / (2.0 * across)
    height = np.sqrt(max(near**2 - foot**2, (0.05 * near) ** 2))
    along = (end - start) / across
    side = np.sign(_cross(layout[base[1]] - layout[base[0]], layout[node] - layout[base[0]]))
    return np.asarray(start + foot * along + side * height * np.array([-along[1], along[0]]))


def _cross(one: FloatArray, other: FloatArray) -> float:
    return float(one[0] * other[1] - one[1] * other[0])


def turned_over(points: FloatArray, edges: IntArray, layout: FloatArray) -> bool:
    """Return whether any triangle of edges lies the other way round than in *layout* (n, 2)."""
    joined = {frozenset(map(int, edge)) for edge in edges}
    for a, b, c in combinations(range(len(layout)), 3):
        if {frozenset((a, b)), frozenset((b, c)), frozenset((a, c))} <= joined:
            before = _cross(layout[b] - layout[a], layout[c] - layout[a])
            after = _cross(points[b] - points[a], points[c] - points[a])
            if before * after < 0:
                return True
    return False
