"""One placement adjusted: lengths to shape, as far as the lengths allow, with its tests and its errors.

What cannot be solved whole is solved in part: edges without a length and edges of triangles that cannot close
are left out, and the largest part that the others hold together is adjusted by itself.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.analyses.layout_errors import LengthsOfPlacement, PredictedErrors, edge_errors, node_errors
from campaign.analyses.layout_parts import NetworkPart, adjust_part, coordinates_of, largest_part
from campaign.analyses.layout_results import (
    NOT_SOLVED,
    PARTLY_SOLVED,
    SOLVED,
    Blunder,
    Ellipses,
    MonteCarlo,
    NetworkTests,
    Placement,
)
from campaign.analyses.layout_signals import Network, PlacedShape
from campaign.methods.distance_network import (
    AdjustedNetwork,
    UnsolvedNetworkError,
    distance_design,
    distances,
    keep_direction,
)
from campaign.methods.distance_network_amplification import node_amplification
from campaign.methods.distance_network_ellipses import ellipse_factor, standard_ellipses
from campaign.methods.distance_network_figure import broken_triangles, edges_to_leave_out
from campaign.methods.distance_network_monte_carlo import adjust_draws
from campaign.methods.distance_network_tests import NetworkTest, network_tests
from campaign.methods.rigid_fit import into_frame

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

ADJUSTED_DRAWS = 1000
"""Drawn sets of lengths that are adjusted: their SDs are known to 2 %."""

TOLERANCE = 0.1
"""First order fails where a node's SD differs by more than this share, or its mean moves by that of an SD."""


@dataclass(frozen=True)
class SolvedPlacement:
    """A placement and its drawn errors: by ``datum``, ``fit`` and ``edges``; empty where unsolved."""

    placement: Placement
    predicted: dict[str, PredictedErrors]


def adjust_placement(shape: PlacedShape, read: LengthsOfPlacement, known_sd: float) -> SolvedPlacement:
    """Adjust one placement.

    Parameters
    ----------
    shape
        Known positions and the network.
    read
        Its lengths.
    known_sd
        Standard uncertainty of each recorded coordinate in mm; NaN where not stated.
    """
    usable = np.flatnonzero(np.isfinite(read.lengths_mm))
    reasons = list(read.missing.values())
    taken = usable[: 0 if len(usable) < 3 else None]
    sub = np.ix_(taken, taken)
    broken = broken_triangles(shape.network.pairs[taken], read.lengths_mm[taken], read.covariance_mm2[sub])
    doubted = taken[list(edges_to_leave_out(broken))]
    if len(doubted):
        reasons.append(f"triangle inequality broken: {_sensors(shape.network, doubted)} left out")
    part = largest_part(shape.network, np.setdiff1d(taken, doubted))
    if part is None:
        reasons.append("the lengths left hold no three nodes together")
        return SolvedPlacement(_placement(shape, read, known_sd, NOT_SOLVED, reasons), {})
    try:
        sub = np.ix_(part.edges, part.edges)
        network, turned = adjust_part(part, read.lengths_mm[part.edges], read.covariance_mm2[sub])
    except UnsolvedNetworkError as failure:
        reasons.append(str(failure))
        return SolvedPlacement(_placement(shape, read, known_sd, NOT_SOLVED, reasons), {})
    if turned:
        reasons.append("a triangle lies the other way round than in the unstretched layout")
    free = [shape.network.nodes[k] for k in range(len(shape.network.nodes)) if k not in part.nodes]
    if free:
        reasons.append(f"nothing holds {', '.join(free)} in place")
    status = PARTLY_SOLVED if free else SOLVED
    blank = _placement(shape, read, known_sd, status, reasons)
    return _solved(blank, shape, part, network, read)


def _sensors(network: Network, edges: IntArray) -> str:
    return ", ".join(network.edges[k].sensor for k in edges)


# --- what a solved placement says


def _solved(
    blank: Placement,
    shape: PlacedShape,
    part: NetworkPart,
    network: AdjustedNetwork,
    read: LengthsOfPlacement,
) -> SolvedPlacement:
    """The placement with everything that follows from its adjusted network."""
    count = len(blank.nodes)
    at = coordinates_of(part.nodes)
    points, covariance = np.full((count, 2), np.nan), np.full((2 * count, 2 * count), np.nan)
    points[part.nodes] = network.points
    covariance[np.ix_(at, at)] = network.covariance
    sub = read.covariance_mm2[np.ix_(part.edges, part.edges)]
    tested = network_tests(network, sub)
    errors, predicted = node_errors(blank, shape, part, network, read)
    edge = edge_errors(blank, shape, part, network, read)
    predicted["edges"] = edge.predicted
    used = np.zeros(len(blank.edges), dtype=bool)
    used[part.edges] = True
    solved = np.zeros(count, dtype=bool)
    solved[part.nodes] = True
    amplification = np.full(count, np.nan)
    amplification[part.nodes] = node_amplification(network.points, part.pairs)
    made = {
        **vars(blank),
        "datum": (blank.nodes[part.nodes[part.datum[0]]], blank.nodes[part.nodes[part.datum[1]]]),
        "solved": solved,
        "used": used,
        "unstretched_mm": into_frame(shape.network.layout_mm, *part.nodes[list(part.datum)])[0],
        "known_mm": into_frame(shape.known_mm, *part.nodes[list(part.datum)])[0],
        "adjusted_mm": points,
        "covariance_mm2": covariance,
        "adjusted_lengths_mm": edge.adjusted,
        "adjusted_length_covariance_mm2": edge.adjusted_covariance,
        "edge_errors_mm": edge.errors,
        "edge_error_covariance_mm2": edge.covariance,
        "ellipses": _ellipses(covariance),
        "tests": _tests(tested, network.residuals, part.edges, blank),
        "monte_carlo": _monte_carlo(part, network, read, count),
        "after_datum": errors["datum"],
        "after_fit": errors["fit"],
        "amplification": amplification,
    }
    return SolvedPlacement(Placement(**made), predicted)


def _placement(
    shape: PlacedShape, read: LengthsOfPlacement, known_sd: float, status: str, reasons: list[str]
) -> Placement:
    """A placement of which nothing is solved: known positions, read lengths, and why."""
    network = shape.network
    nodes, edges = len(network.nodes), len(network.edges)
    blank = np.full((nodes, 2), np.nan)
    known = into_frame(shape.known_mm, *network.datum)[0]
    known_design = distance_design(shape.known_mm, network.pairs)
    known_covariance = np.nan_to_num(known_sd) ** 2 * known_design @ known_design.T
    known_lengths = distances(shape.known_mm, network.pairs)
    return Placement(
        generation=shape.generation,
        module=shape.module,
        session=shape.session,
        trial=shape.trial,
        repetition=shape.repetition,
        name=shape.name,
        line=read.line,
        geometry=network.geometry,
        nodes=network.nodes,
        edges=network.edges,
        datum=(network.nodes[network.datum[0]], network.nodes[network.datum[1]]),
        status=status,
        reason="; ".join(reasons),
        solved=np.zeros(nodes, dtype=bool),
        used=np.zeros(edges, dtype=bool),
        unstretched_mm=into_frame(network.layout_mm, *network.datum)[0],
        known_mm=known,
        known_uncertainty_mm=known_sd,
        lengths_mm=read.lengths_mm,
        length_covariance_mm2=read.covariance_mm2,
        known_lengths_mm=known_lengths,
        known_length_covariance_mm2=known_covariance,
        adjusted_mm=blank,
        covariance_mm2=np.full((2 * nodes, 2 * nodes), np.nan),
        adjusted_lengths_mm=np.full(edges, np.nan),
        adjusted_length_covariance_mm2=np.full((edges, edges), np.nan),
        edge_errors_mm=read.lengths_mm - known_lengths,
        edge_error_covariance_mm2=read.covariance_mm2 + known_covariance,
        amplification=np.full(nodes, np.nan),
    )


def _ellipses(covariance: FloatArray) -> Ellipses:
    found = standard_ellipses(covariance)
    return Ellipses(found.semi_major, found.semi_minor, found.angle, ellipse_factor())


def _tests(found: NetworkTest, residuals: FloatArray, edges: IntArray, blank: Placement) -> NetworkTests:
    """The tests with arrays over all edges of the module."""

    def spread(values: FloatArray) -> FloatArray:
        whole = np.full(len(blank.edges), np.nan)
        whole[edges] = values
        return whole

    error = found.gross_error
    named = tuple(blank.edges[edges[k]].sensor for k in error.edges)
    return NetworkTests(
        found.degrees_of_freedom,
        found.chi_square,
        found.chi_square_limit,
        found.p,
        found.sigma0,
        spread(residuals),
        spread(found.redundancy),
        spread(found.standardised),
        spread(found.tau),
        found.tau_limit,
        Blunder(error.verdict, named, error.error, error.expanded_uncertainty),
    )


def _monte_carlo(
    part: NetworkPart, network: AdjustedNetwork, read: LengthsOfPlacement, count: int
) -> MonteCarlo:
    """The same propagation by adjusting drawn lengths, and where first order fails."""
    covariance = read.covariance_mm2[np.ix_(part.edges, part.edges)]
    draws = network.lengths + read.deviations_mm[:ADJUSTED_DRAWS, part.edges]
    drawn = adjust_draws(network, part.pairs, draws, covariance, keep_direction(len(part.nodes), *part.datum))
    at = coordinates_of(part.nodes)
    mean, spread = np.full((count, 2), np.nan), np.full((2 * count, 2 * count), np.nan)
    failed = int((~drawn.solved).sum())
    fails = np.zeros(count, dtype=bool)
    if drawn.solved.sum() < 2:
        fails[part.nodes] = True
        return MonteCarlo(len(draws), failed, mean, spread, fails, TOLERANCE, float("nan"))
    mean[part.nodes] = drawn.mean
    spread[np.ix_(at, at)] = drawn.covariance
    first = np.sqrt(np.diag(network.covariance).reshape(-1, 2).sum(axis=1))
    second = np.sqrt(np.diag(drawn.covariance).reshape(-1, 2).sum(axis=1))
    moved = np.linalg.norm(drawn.mean - network.points, axis=1)
    off = (np.abs(second - first) > TOLERANCE * first) | (moved > TOLERANCE * first)
    fails[part.nodes] = (off & (first > 0)) | (failed > 0.05 * len(draws))
    sums = distances(drawn.points[drawn.solved], part.pairs).sum(axis=1)
    return MonteCarlo(len(draws), failed, mean, spread, fails, TOLERANCE, float(sums.std(ddof=1)))
