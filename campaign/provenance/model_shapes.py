"""Covariances of rebuilt shapes, placement by placement, as tables beside MODEL.md.

The lengths that were read, and the nodes adjusted to them, are correlated throughout: what the site's tables
give of a node or an edge alone is not enough to compute anything of several.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.analyses.layout_results import Layout, Placement
from campaign.pages.tables import csv_bytes

FloatArray = npt.NDArray[np.float64]

LENGTHS, NODES = "shapes/length_covariance.csv", "shapes/node_covariance.csv"
"""Names of the files, from the folder of models."""

_WHOSE = ("generation", "module", "trial", "repetition", "placement", "read_by")
COLUMNS = (*_WHOSE, "first", "second", "covariance_mm2")
"""Columns of both tables."""


def shape_files(layout: Layout | None) -> dict[str, bytes]:
    """Return the covariances of every placement, by file; empty without a placement.

    Each file has one row a pair of lengths (named by their sensors) or of coordinates (``A.x``), the second
    not before the first, columns :data:`COLUMNS`. Lengths that were not read, and nodes that were not solved,
    are left out; coordinates that the datum keeps have 0.
    """
    if layout is None or not layout.placements:
        return {}
    return {
        LENGTHS: csv_bytes(_table(row for one in layout.placements for row in _of_lengths(one))),
        NODES: csv_bytes(_table(row for one in layout.placements for row in _of_nodes(one))),
    }


def _table(rows: Iterator[tuple[object, ...]]) -> pd.DataFrame:
    return pd.DataFrame(list(rows), columns=list(COLUMNS))


def _of_lengths(one: Placement) -> Iterator[tuple[object, ...]]:
    known = np.isfinite(one.lengths_mm)
    yield from _pairs(one, [edge.sensor for edge in one.edges], known, one.length_covariance_mm2)


def _of_nodes(one: Placement) -> Iterator[tuple[object, ...]]:
    names = [f"{node}.{axis}" for node in one.nodes for axis in "xy"]
    yield from _pairs(one, names, np.repeat(one.solved, 2), one.covariance_mm2)


def _pairs(
    one: Placement, names: Sequence[str], known: npt.NDArray[np.bool_], covariance: FloatArray
) -> Iterator[tuple[object, ...]]:
    whose = (one.generation, one.module, one.trial, one.repetition, one.name, one.line)
    places = np.flatnonzero(known).tolist()
    for number, first in enumerate(places):
        for second in places[number:]:
            yield (*whose, names[first], names[second], float(covariance[first, second]))
