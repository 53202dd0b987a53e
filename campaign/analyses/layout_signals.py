"""The placements of a campaign before any length is read: signals, known nodes, and their network."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.analyses.layout_results import Edge
from campaign.notices import Notice
from campaign.recordings.description import Description, Geometry
from campaign.trials.layout import LayoutFeatures

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

SIGNAL_COLUMNS = (
    *("generation", "batch", "module", "sensor", "position", "session", "trial", "repetition"),
    *("placement", "signal", "standard_error", "temperature_c", "rest_length_mm"),
    "rest_length_uncertainty_mm",
)
"""One row a placement and sensor; lengths in mm, signals in the sensor's unit, NaN where unknown."""


@dataclass(frozen=True)
class Network:
    """The network of one module: names of nodes and edges, and the unstretched figure in the datum's frame.

    Attributes
    ----------
    geometry
        Name of the geometry.
    nodes, edges
        n names, E edges.
    pairs
        Shape (E, 2): numbers of the nodes of each edge.
    layout_mm
        Shape (n, 2), as described.
    datum
        Numbers of the origin and of the node on +x.
    """

    geometry: str
    nodes: tuple[str, ...]
    edges: tuple[Edge, ...]
    pairs: IntArray
    layout_mm: FloatArray
    datum: tuple[int, int]


@dataclass(frozen=True)
class PlacedShape:
    """One placement of one module: where its nodes were held, and where its signals stand.

    Attributes
    ----------
    generation, module, session, trial, repetition, name
        Whose it is.
    network
        Of the module.
    known_mm
        Shape (n, 2), as recorded; NaN where a node is not.
    rows
        Shape (E,): row of each edge's signal in the table of signals; −1 where it has none.
    """

    generation: str
    module: str
    session: str
    trial: str
    repetition: int
    name: str
    network: Network
    known_mm: FloatArray
    rows: IntArray


@dataclass(frozen=True)
class PlacedSignals:
    """All signals of layout trials (columns of :data:`SIGNAL_COLUMNS`), the placements, and remarks."""

    table: pd.DataFrame
    shapes: tuple[PlacedShape, ...]
    notices: tuple[Notice, ...]


def geometry_of(named: str, geometries: Mapping[str, Geometry]) -> Geometry | None:
    """Return a module's geometry: the one that its register names, else the only one there is."""
    if named:
        return geometries.get(named)
    return next(iter(geometries.values())) if len(geometries) == 1 else None


def network_of(
    geometry: Geometry, ends: Iterable[tuple[str, str, str]]
) -> tuple[Network | None, tuple[str, ...]]:
    """Return the network of a module, and its sensors that are no edge of it.

    Parameters
    ----------
    geometry
        Nodes and datum; without a datum the first two nodes stand for it.
    ends
        (sensor, from, to) of every sensor of the module.
    """
    nodes = tuple(geometry.nodes)
    number = {name: k for k, name in enumerate(nodes)}
    edges: list[Edge] = []
    others: list[Edge] = []
    for sensor, first, second in sorted(ends):
        known = first in number and second in number and first != second
        (edges if known else others).append(Edge(sensor, first, second))
    datum = geometry.datum if len(geometry.datum) == 2 else nodes[:2]
    left = tuple(edge.sensor for edge in others)
    if len(nodes) < 3 or len(edges) < 3 or any(name not in number for name in datum):
        return None, left
    pairs = np.array([[number[e.first], number[e.second]] for e in edges], dtype=np.int64)
    places = np.array([geometry.nodes[name] for name in nodes], dtype=np.float64)
    at = (number[datum[0]], number[datum[1]])
    return Network(geometry.name, nodes, tuple(edges), pairs, places, at), left


def networks_of(
    description: Description, modules: pd.DataFrame, sensors: pd.DataFrame, wanted: Iterable[str]
) -> tuple[dict[str, Network], list[Notice]]:
    """Return the networks of the *wanted* modules from registers and geometries, and what is missing."""
    named = {str(row["module"]): str(row.get("geometry", "") or "") for row in modules.to_dict("records")}
    found: dict[str, Network] = {}
    notices = []
    for module in sorted(set(wanted)):
        geometry = geometry_of(named.get(module, ""), description.geometries)
        own = sensors[sensors["module"].astype(str) == module]
        ends = [
            (str(row["sensor"]), str(row.get("from", "")), str(row.get("to", "")))
            for row in own.to_dict("records")
        ]
        network, left = (None, ()) if geometry is None else network_of(geometry, ends)
        if network is None:
            notices.append(_no_network(module, geometry is None))
            continue
        found[module] = network
        if left:
            what = f"module {module}: sensors {', '.join(left)} join no two nodes of the geometry"
            remedy = "name from and to in sensors.csv"
            notices.append(_noted("no-edge", what, "they are no edges of the shape", remedy, len(left)))
    return found, notices


def _no_network(module: str, without_geometry: bool) -> Notice:
    what = f"module {module} has layout trials but no geometry of its nodes"
    remedy = "describe it under [geometry] and name it in modules.csv"
    if not without_geometry:
        what = f"module {module} has layout trials but fewer than three sensors between nodes of its geometry"
        remedy = "name from and to in sensors.csv"
    return _noted("no-geometry", what, "no shape is rebuilt", remedy)


def _noted(code: str, what: str, done: str, remedy: str = "", count: int = 1) -> Notice:
    return Notice(code, "noted", None, None, None, what, done, remedy, count)


def gather_placements(
    features: Iterable[LayoutFeatures],
    description: Description,
    modules: pd.DataFrame,
    sensors: pd.DataFrame,
) -> PlacedSignals:
    """Put the shares of the sensors together, placement by placement.

    Parameters
    ----------
    features
        Of all layout trials that are used.
    description
        Its geometries.
    modules, sensors
        Registers: geometry of modules; from and to of sensors.
    """
    known = sorted(
        (f for f in features if f.names),
        key=lambda f: (f.identity.generation, f.identity.module, f.identity.file, f.identity.repetition),
    )
    networks, notices = networks_of(description, modules, sensors, (f.identity.module for f in known))
    table = pd.DataFrame([row for f in known for row in _rows(f)], columns=list(SIGNAL_COLUMNS))
    shapes: list[PlacedShape] = []
    runs: dict[tuple[str, int], list[LayoutFeatures]] = {}
    for found in known:
        runs.setdefault((found.identity.file, found.identity.repetition), []).append(found)
    for (file, repetition), own in runs.items():
        rows = table[(table["trial"] == file) & (table["repetition"] == repetition)]
        for module in dict.fromkeys(f.identity.module for f in own if f.identity.module in networks):
            shapes += _shapes(networks[module], rows[rows["module"] == module], own)
    return PlacedSignals(table, tuple(shapes), tuple(notices))


def _rows(found: LayoutFeatures) -> Iterable[dict[str, object]]:
    """One row a placement of one sensor."""
    identity = found.identity
    for k, name in enumerate(found.names):
        yield {
            "generation": identity.generation,
            "batch": identity.batch,
            "module": identity.module,
            "sensor": identity.sensor,
            "position": identity.position,
            "session": identity.session,
            "trial": identity.file,
            "repetition": identity.repetition,
            "placement": name,
            "signal": float(found.signal[k]),
            "standard_error": float(found.standard_error[k]),
            "temperature_c": float(found.temperature_c[k]),
            "rest_length_mm": identity.rest_length_mm,
            "rest_length_uncertainty_mm": identity.rest_length_uncertainty_mm,
        }


def _shapes(network: Network, rows: pd.DataFrame, own: list[LayoutFeatures]) -> Iterable[PlacedShape]:
    """The placements of one run of one module, in the order taken."""
    first = rows.iloc[0]
    row_of = {
        (str(sensor), str(name)): int(index)
        for index, sensor, name in zip(rows.index, rows["sensor"], rows["placement"], strict=True)
    }
    for name in dict.fromkeys(rows["placement"].astype(str)):
        yield PlacedShape(
            generation=str(first["generation"]),
            module=str(first["module"]),
            session=str(first["session"]),
            trial=str(first["trial"]),
            repetition=int(first["repetition"]),
            name=name,
            network=network,
            known_mm=_known_places(network, name, own),
            rows=np.array([row_of.get((edge.sensor, name), -1) for edge in network.edges], dtype=np.int64),
        )


def _known_places(network: Network, name: str, own: list[LayoutFeatures]) -> FloatArray:
    """Recorded positions of the network's nodes at one placement, by the first share that has it."""
    places = np.full((len(network.nodes), 2), np.nan)
    found = next(f for f in own if name in f.names)
    at = found.known_mm[found.names.index(name)]
    for k, node in enumerate(network.nodes):
        if node in found.nodes:
            places[k] = at[found.nodes.index(node)]
    return places
