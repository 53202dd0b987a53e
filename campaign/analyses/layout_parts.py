"""What part of a network can be adjusted, and its adjustment from a start that is not mirrored."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.analyses.layout_signals import Network
from campaign.methods.distance_network import (
    AdjustedNetwork,
    UnsolvedNetworkError,
    adjust_network,
    distances,
    keep_direction,
)
from campaign.methods.distance_network_figure import place_nodes, rigid_parts, turned_over
from campaign.methods.rigid_fit import into_frame

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


@dataclass(frozen=True)
class NetworkPart:
    """The part of a network that is adjusted: numbers of its nodes and edges, its datum and layout.

    ``pairs`` and ``datum`` number the nodes within the part.
    """

    nodes: IntArray
    edges: IntArray
    pairs: IntArray
    datum: tuple[int, int]
    layout: FloatArray


def coordinates_of(nodes: IntArray) -> IntArray:
    """Return the places of the coordinates of *nodes* in x₁, y₁, x₂, …."""
    return np.column_stack([2 * nodes, 2 * nodes + 1]).ravel()


def largest_part(network: Network, edges: IntArray) -> NetworkPart | None:
    """Return the largest part that *edges* hold together, that with the datum before others of its size."""
    parts = rigid_parts(network.layout_mm, network.pairs[edges]) if len(edges) >= 3 else ()
    parts = tuple(part for part in parts if len(part) >= 3)
    if not parts:
        return None
    chosen = max(parts, key=lambda part: (len(part), set(network.datum) <= set(part)))
    nodes = np.array(chosen, dtype=np.int64)
    within = np.isin(network.pairs[edges], nodes).all(axis=1)
    datum = network.datum if set(network.datum) <= set(chosen) else _own_datum(network, chosen)
    number = {int(node): k for k, node in enumerate(nodes)}
    pairs = np.array([[number[int(a)], number[int(b)]] for a, b in network.pairs[edges[within]]])
    at = number[datum[0]], number[datum[1]]
    return NetworkPart(nodes, edges[within], pairs, at, into_frame(network.layout_mm[nodes], *at)[0])


def _own_datum(network: Network, nodes: tuple[int, ...]) -> tuple[int, int]:
    """A datum for a part without the module's own: what it holds of that, else its first two nodes."""
    kept = [k for k in network.datum if k in nodes]
    others = [k for k in nodes if k not in kept]
    first, second = [*kept, *others][:2]
    return first, second


def adjust_part(
    part: NetworkPart, lengths: FloatArray, covariance: FloatArray
) -> tuple[AdjustedNetwork, bool]:
    """Adjust from the nodes placed one by one; where that fails or turns over, from the layout as it is.

    Parameters
    ----------
    part
        Of E edges.
    lengths, covariance
        Shape (E,) and (E, E).

    Returns
    -------
    tuple
        The adjusted network, and whether a triangle lies the other way round than in the layout.

    Raises
    ------
    UnsolvedNetworkError
        Where neither start leads to a shape.
    """
    kept = keep_direction(len(part.nodes), *part.datum)
    stretch = float(lengths.sum() / distances(part.layout, part.pairs).sum())
    starts = (place_nodes(part.pairs, lengths, part.layout, part.datum), stretch * part.layout)
    found: list[tuple[bool, AdjustedNetwork]] = []
    failure: UnsolvedNetworkError | None = None
    for start in starts:
        try:
            network = adjust_network(part.pairs, lengths, covariance, start, kept)
        except UnsolvedNetworkError as error:
            failure = failure or error
            continue
        turned = turned_over(network.points, part.pairs, part.layout)
        found.append((turned, network))
        if not turned and not _doubtful(network):
            break
    if not found:
        raise failure or UnsolvedNetworkError("the adjustment found no shape")
    turned, network = min(found, key=lambda one: (one[0], one[1].chi_square))
    return network, turned


def _doubtful(network: AdjustedNetwork) -> bool:
    """Whether the residuals are so large that another start is worth a try."""
    return network.chi_square > 20.0 * (network.degrees_of_freedom + 2)
