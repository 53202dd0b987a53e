"""What a geometry can tell before anything is measured: what checks what, and how much errors grow."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.analyses.layout_results import AmplificationMap, NetworkFacts
from campaign.analyses.layout_signals import Network
from campaign.methods.distance_network_amplification import amplification_map
from campaign.methods.distance_network_figure import rigid_parts

FloatArray = npt.NDArray[np.float64]

STEPS = 21
"""Grid points a side of a map."""

USUAL_STRAIN = (0.0, 0.4)
"""Range of strain taken where the campaign's reference is no strain."""

UNDER, JUST = "under-determined", "just determined"
DETECTABLE = "a bad edge can be detected, not located"
NAMEABLE = "a bad edge can be detected and named"


def geometries_of(networks: Iterable[Network]) -> dict[str, Network]:
    """Return one network a geometry, the one with most edges; sorted by name."""
    found: dict[str, Network] = {}
    for network in networks:
        kept = found.get(network.geometry)
        if kept is None or len(network.edges) > len(kept.edges):
            found[network.geometry] = network
    return dict(sorted(found.items()))


def strain_range_of(readings: pd.DataFrame, reference: str) -> tuple[float, float]:
    """Return the range of strain that all sensors were calibrated over."""
    used = readings[readings["used"].astype(bool)]
    if reference != "strain" or used.empty:
        return USUAL_STRAIN
    grouped = used.groupby(["generation", "module", "sensor"])["x"]
    low, high = float(grouped.min().max()), float(grouped.max().min())
    return (low, high) if high > low else (float(used["x"].min()), float(used["x"].max()))


def map_of(network: Network, strain_range: tuple[float, float]) -> AmplificationMap:
    """Return the amplification over the shapes that a geometry can be stretched and sheared to."""
    low, high = strain_range
    stretch = np.linspace(1.0 + min(low, 0.0), 1.0 + high, STEPS)
    shear = np.linspace(-high, high, STEPS)
    by_node = amplification_map(network.layout_mm, network.pairs, stretch, shear, strain_range)
    by_node = np.where(np.isfinite(by_node), by_node, np.nan)
    return AmplificationMap(
        network.geometry,
        stretch,
        shear,
        np.sqrt(np.mean(by_node**2, axis=2)),
        by_node.max(axis=2),
        by_node,
        network.nodes,
        low,
        high,
    )


def facts_of(network: Network) -> NetworkFacts:
    """Return what checks what in a geometry."""
    parts = rigid_parts(network.layout_mm, network.pairs)
    held = set(parts[0]) if parts else set()
    flexible = tuple(name for k, name in enumerate(network.nodes) if k not in held)
    redundancy = len(network.edges) - (2 * len(network.nodes) - 3)
    return NetworkFacts(
        network.geometry,
        len(network.nodes),
        len(network.edges),
        redundancy,
        _statement(redundancy, bool(flexible)),
        flexible,
    )


def _statement(redundancy: int, flexible: bool) -> str:
    if flexible or redundancy < 0:
        return UNDER
    return {0: JUST, 1: DETECTABLE}.get(redundancy, NAMEABLE)
