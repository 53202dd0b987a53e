"""Errors of an adjusted placement against its known nodes, beside those that are predicted.

Predicted are the errors that the covariance of the lengths and the uncertainty of the known positions make by
themselves, to first order; their distribution is drawn, because largest and root mean square are not normal.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.analyses.layout_parts import NetworkPart, coordinates_of
from campaign.analyses.layout_results import NodeErrors, Placement
from campaign.analyses.layout_signals import PlacedShape
from campaign.methods.distance_network import AdjustedNetwork, distance_design, distances
from campaign.methods.rigid_fit import fit_rigidly, into_frame

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class LengthsOfPlacement:
    """What was read at one placement by one choice of lines.

    Attributes
    ----------
    line
        The choice.
    lengths_mm, covariance_mm2
        Shape (E,) and (E, E): NaN and 0 where an edge has no length.
    deviations_mm
        Shape (draws, E): errors of the lengths drawn from the covariance of all placements together.
    known_deviations_mm
        Shape (draws, 2n): drawn errors of the recorded coordinates.
    missing
        Why an edge has no length, by its number.
    """

    line: str
    lengths_mm: FloatArray
    covariance_mm2: FloatArray
    deviations_mm: FloatArray
    known_deviations_mm: FloatArray
    missing: dict[int, str]


@dataclass(frozen=True)
class PredictedErrors:
    """Drawn errors of one placement.

    Attributes
    ----------
    squares
        Shape (draws, k): squared errors of its known nodes, or edges, in mm².
    members
        Shape (k,): their numbers.
    """

    squares: FloatArray
    members: IntArray

    @property
    def rms(self) -> FloatArray:
        """Root mean square of every draw."""
        return np.asarray(np.sqrt(self.squares.mean(axis=1)))

    @property
    def largest(self) -> FloatArray:
        """Largest error of every draw."""
        return np.asarray(np.sqrt(self.squares.max(axis=1)))


def node_errors(
    blank: Placement,
    shape: PlacedShape,
    part: NetworkPart,
    network: AdjustedNetwork,
    read: LengthsOfPlacement,
) -> tuple[dict[str, NodeErrors | None], dict[str, PredictedErrors]]:
    """Return the errors of solved nodes in the datum's frame and after best rigid fit, and predicted ones.

    Keys are ``datum`` and ``fit``; a frame is missing where too few positions are known for it.
    """
    known = shape.known_mm[part.nodes]
    errors: dict[str, NodeErrors | None] = {"datum": None, "fit": None}
    predicted: dict[str, PredictedErrors] = {}
    frames = {}
    if np.isfinite(known[list(part.datum)]).all():
        moved, slopes = into_frame(known, *part.datum)
        frames["datum"] = _Frame(moved, network.operator, slopes)
    have = np.asarray(np.isfinite(known).all(axis=1))
    if have.sum() >= 2:
        frames["fit"] = _fitted(known, have, network)
    for name, frame in frames.items():
        errors[name], predicted[name] = _errors(blank, part, network, read, frame)
    return errors, predicted


@dataclass(frozen=True)
class _Frame:
    """Known nodes of a part in one frame, and what lengths and known coordinates do to errors there."""

    known: FloatArray
    of_lengths: FloatArray
    of_known: FloatArray

    @property
    def have(self) -> BoolArray:
        """Which nodes are known."""
        return np.asarray(np.isfinite(self.known).all(axis=1))


def _fitted(known: FloatArray, have: BoolArray, network: AdjustedNetwork) -> _Frame:
    """The frame of the adjusted nodes with the known ones fitted to them."""
    fit = fit_rigidly(known[have], network.points[have])
    moved = np.full_like(known, np.nan)
    moved[have] = fit.moved
    at = np.flatnonzero(np.repeat(have, 2))
    project = np.zeros((known.size, known.size))
    project[np.ix_(at, at)] = fit.projector
    return _Frame(moved, project @ network.operator, project)


def _errors(
    blank: Placement,
    part: NetworkPart,
    network: AdjustedNetwork,
    read: LengthsOfPlacement,
    frame: _Frame,
) -> tuple[NodeErrors, PredictedErrors]:
    """Node errors in one frame, beside the draws of what calibration and known positions alone would give."""
    sd, have = float(np.nan_to_num(blank.known_uncertainty_mm)), frame.have
    sub = read.covariance_mm2[np.ix_(part.edges, part.edges)]
    covariance = frame.of_lengths @ sub @ frame.of_lengths.T + sd**2 * frame.of_known @ frame.of_known.T
    drawn = read.deviations_mm[:, part.edges] @ frame.of_lengths.T
    drawn += read.known_deviations_mm[:, coordinates_of(part.nodes)] @ frame.of_known.T
    squares = (drawn.reshape(len(drawn), -1, 2) ** 2).sum(axis=2)[:, have]
    predicted = PredictedErrors(squares, part.nodes[have])
    count = len(blank.nodes)
    errors, frame_points = np.full((count, 2), np.nan), np.full((count, 2), np.nan)
    errors[part.nodes] = network.points - frame.known
    frame_points[part.nodes] = frame.known
    whole = np.full((2 * count, 2 * count), np.nan)
    at = coordinates_of(part.nodes[have])
    inner = np.flatnonzero(np.repeat(have, 2))
    whole[np.ix_(at, at)] = covariance[np.ix_(inner, inner)]
    return node_errors_of(frame_points, errors, whole, predicted), predicted


def node_errors_of(
    known: FloatArray, errors: FloatArray, covariance: FloatArray, predicted: PredictedErrors
) -> NodeErrors:
    """Sum up node errors (n, 2) and their predicted covariance (2n, 2n) beside drawn ones."""
    sizes = np.linalg.norm(errors, axis=1)
    own = np.sqrt(np.diag(covariance).reshape(-1, 2).sum(axis=1))
    seen = np.isfinite(sizes)
    low, high = np.quantile(predicted.rms, [0.025, 0.975])
    largest = np.quantile(predicted.largest, [0.5, 0.025, 0.975])
    return NodeErrors(
        known,
        errors,
        covariance,
        sizes,
        own,
        float(np.sqrt(np.mean(sizes[seen] ** 2))),
        float(sizes[seen].max()),
        float(np.sqrt(np.mean(own[seen] ** 2))),
        float(low),
        float(high),
        *(float(value) for value in largest),
    )


@dataclass(frozen=True)
class EdgeErrors:
    """Adjusted lengths and their errors, over all edges of the module."""

    adjusted: FloatArray
    adjusted_covariance: FloatArray
    errors: FloatArray
    covariance: FloatArray
    predicted: PredictedErrors


def edge_errors(
    blank: Placement,
    shape: PlacedShape,
    part: NetworkPart,
    network: AdjustedNetwork,
    read: LengthsOfPlacement,
) -> EdgeErrors:
    """Return lengths between solved nodes by the adjusted shape, others as read, with their errors."""
    pairs, count = shape.network.pairs, len(blank.edges)
    number = {int(node): k for k, node in enumerate(part.nodes)}
    inside = np.isin(pairs, part.nodes).all(axis=1)
    within = np.array([[number[int(a)], number[int(b)]] for a, b in pairs[inside]], dtype=np.int64)
    carry = np.eye(count)
    carry[inside] = 0.0
    operator = distance_design(network.points, within) @ network.operator
    carry[np.ix_(np.flatnonzero(inside), part.edges)] = operator
    lengths = read.lengths_mm.copy()
    lengths[inside] = distances(network.points, within)
    covariance = carry @ read.covariance_mm2 @ carry.T
    adjusted, spread = np.full(count, np.nan), np.full((count, count), np.nan)
    adjusted[inside] = lengths[inside]
    spread[np.ix_(inside, inside)] = covariance[np.ix_(inside, inside)]
    errors = lengths - blank.known_lengths_mm
    whole = covariance + blank.known_length_covariance_mm2
    known = np.isfinite(errors)
    return EdgeErrors(adjusted, spread, errors, whole, _drawn_edges(shape, read, carry, known))


def _drawn_edges(
    shape: PlacedShape, read: LengthsOfPlacement, carry: FloatArray, known: BoolArray
) -> PredictedErrors:
    drawn = np.nan_to_num(read.deviations_mm) @ carry.T
    places = np.nan_to_num(shape.known_mm)
    drawn = drawn - read.known_deviations_mm @ distance_design(places, shape.network.pairs).T
    squares = drawn[:, known] ** 2
    return PredictedErrors(squares, np.flatnonzero(known))
