"""What all placements say together: observed errors beside predicted ones, the extra SD, sums of edges."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

from campaign.analyses.layout_errors import PredictedErrors
from campaign.analyses.layout_lengths import LengthReadings
from campaign.analyses.layout_results import (
    ERROR_COLUMNS,
    EXTRA_COLUMNS,
    OWN_LINE,
    SUM_COLUMNS,
    Placement,
)
from campaign.analyses.layout_shapes import SolvedPlacement
from campaign.analyses.layout_signals import PlacedShape
from campaign.analyses.sensor_figures import FIGURE_COLUMNS
from campaign.methods.conformity import spread_interval
from campaign.methods.distance_network import distance_design, distances
from campaign.methods.extra_variance import extra_variance

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

AFTER_DATUM, AFTER_FIT = "node error after datum", "node error after best fit"
EDGE_ERROR = "edge length error"
_FRAMES = {"datum": AFTER_DATUM, "fit": AFTER_FIT, "edges": EDGE_ERROR}

GROSS_RISK = 0.001
"""Risk, over all lengths of a generation, of leaving a length out of the extra SD as a gross error."""

MOST_GROSS = 10
"""Lengths left out at most: more are no exceptions."""

NOT_FROM_ZERO = "not distinguishable from zero"


def error_table(solved: Sequence[SolvedPlacement], *, by_module: bool) -> pd.DataFrame:
    """Return observed errors beside predicted ones, a generation or a module a row.

    Columns are those of :data:`campaign.analyses.layout_results.ERROR_COLUMNS`.
    """
    groups: dict[tuple[str, str, str], list[SolvedPlacement]] = {}
    for one in solved:
        if one.predicted:
            own = one.placement
            key = own.line, own.generation, own.module if by_module else ""
            groups.setdefault(key, []).append(one)
    rows = [
        row for key in sorted(groups) for frame in _FRAMES for row in _error_rows(key, groups[key], frame)
    ]
    return pd.DataFrame(rows, columns=list(ERROR_COLUMNS))


def _observed(placement: Placement, frame: str) -> FloatArray:
    """Sizes of the errors of one placement in one frame."""
    if frame == "edges":
        return np.abs(placement.edge_errors_mm)
    found = placement.after_datum if frame == "datum" else placement.after_fit
    return np.zeros(0) if found is None else found.sizes_mm


def _error_rows(
    key: tuple[str, str, str], group: list[SolvedPlacement], frame: str
) -> Iterator[dict[str, object]]:
    known = [one for one in group if frame in one.predicted]
    if not known:
        return
    predicted = [one.predicted[frame] for one in known]
    sizes = np.concatenate(
        [_observed(o.placement, frame)[p.members] for o, p in zip(known, predicted, strict=True)]
    )
    squares = np.concatenate([p.squares for p in predicted], axis=1)
    rms = np.sqrt(squares.mean(axis=1))
    low, high = np.quantile(rms, [0.025, 0.975])
    largest = np.quantile(np.sqrt(squares.max(axis=1)), [0.5, 0.025, 0.975])
    observed = float(np.sqrt(np.mean(sizes**2)))
    usual = float(np.sqrt(squares.mean()))
    values = (
        *(key[0], key[1], key[2], _FRAMES[frame], len(known), len(sizes)),
        *(observed, float(sizes.max()), usual, float(low), float(high), *map(float, largest)),
        *(observed / usual, observed / float(high), observed / float(low), bool(low <= observed <= high)),
    )
    yield dict(zip(ERROR_COLUMNS, values, strict=True))


# --- the SD that is missing


@dataclass(frozen=True)
class _Differences:
    """Read less known lengths of one generation, and their covariance."""

    values: FloatArray
    covariance: FloatArray


def _differences(shapes: Iterable[PlacedShape], read: LengthReadings, known_sd: float) -> _Differences:
    """Every length of every placement against the known one, with all that calibration shares."""
    rows, values, blocks = [], [], []
    for shape in shapes:
        known = distances(shape.known_mm, shape.network.pairs)
        have = np.flatnonzero((shape.rows >= 0) & np.isfinite(known))
        have = have[np.isfinite(read.lengths_mm[shape.rows[have]])]
        design = distance_design(np.nan_to_num(shape.known_mm), shape.network.pairs)[have]
        rows.append(shape.rows[have])
        values.append(read.lengths_mm[shape.rows[have]] - known[have])
        blocks.append(known_sd**2 * design @ design.T)
    if not rows:
        return _Differences(np.zeros(0), np.zeros((0, 0)))
    at = np.concatenate(rows)
    covariance = read.covariance_mm2[np.ix_(at, at)].copy()
    start = 0
    for block in blocks:
        covariance[start : start + len(block), start : start + len(block)] += block
        start += len(block)
    return _Differences(np.concatenate(values), covariance)


def extra_row(
    line: str, generation: str, shapes: Iterable[PlacedShape], read: LengthReadings, known_sd: float
) -> dict[str, object] | None:
    """Return the extra SD of one generation, columns of :data:`EXTRA_COLUMNS`; ``None`` without any length.

    A length further from what the others and the known positions say of it than chance allows (with the extra
    SD counted in) is a gross error, for the tests to find; such are left out here one by one, and counted.
    """
    found = _differences(shapes, read, float(np.nan_to_num(known_sd)))
    if len(found.values) < 3:
        return None
    kept = np.arange(len(found.values))
    reach = float(stats.norm.ppf(1.0 - GROSS_RISK / (2.0 * len(kept))))
    for _ in range(MOST_GROSS + 1):
        covariance = found.covariance[np.ix_(kept, kept)]
        extra = extra_variance(found.values[kept], covariance)
        weights = np.linalg.inv(covariance + extra.sd**2 * np.eye(len(kept)))
        deviation = np.abs(weights @ found.values[kept]) / np.sqrt(np.diag(weights))
        worst = int(np.argmax(deviation))
        if deviation[worst] <= reach or len(kept) == max(len(found.values) - MOST_GROSS, 3):
            break
        kept = np.delete(kept, worst)
    labels = [NOT_FROM_ZERO] if extra.low == 0.0 else []
    if len(kept) < len(found.values):
        labels.append(f"{len(found.values) - len(kept)} lengths beyond chance left out")
    values = (line, generation, extra.sd, extra.low, extra.high, extra.p, extra.count, "; ".join(labels))
    return dict(zip(EXTRA_COLUMNS, values, strict=True))


# --- sums of edges


def sum_table(placements: Iterable[Placement]) -> pd.DataFrame:
    """Return the sum of the used edges of every placement with its SD, columns of :data:`SUM_COLUMNS`."""
    rows = []
    for own in placements:
        if own.monte_carlo is None:
            continue
        used = own.used
        covariance = own.adjusted_length_covariance_mm2[np.ix_(used, used)]
        values = (
            *(own.generation, own.module, own.name, own.line, own.trial, int(used.sum())),
            *(float(own.adjusted_lengths_mm[used].sum()), float(own.known_lengths_mm[used].sum())),
            *(float(np.sqrt(covariance.sum())), float(np.sqrt(np.trace(covariance)))),
            own.monte_carlo.sum_sd_mm,
        )
        rows.append(dict(zip(SUM_COLUMNS, values, strict=True)))
    return pd.DataFrame(rows, columns=list(SUM_COLUMNS))


# --- the figure that a limit judges


def node_figures(solved: Sequence[SolvedPlacement]) -> pd.DataFrame:
    """Return the root mean square error of every node of every module, as limits take it.

    After best rigid fit, over the placements, read by own lines; ``sensor`` holds the name of the node. Its
    degrees of freedom are Satterthwaite's of the predicted errors, since placements share lines.
    """
    groups: dict[tuple[str, str, str], list[tuple[float, FloatArray]]] = {}
    for one in solved:
        own = one.placement
        if own.line != OWN_LINE or own.after_fit is None:
            continue
        predicted: PredictedErrors = one.predicted["fit"]
        for k, member in enumerate(predicted.members):
            key = own.generation, own.module, own.nodes[int(member)]
            size = float(own.after_fit.sizes_mm[int(member)])
            groups.setdefault(key, []).append((size, predicted.squares[:, k]))
    rows = [_node_figure(key, groups[key]) for key in sorted(groups)]
    return pd.DataFrame(rows, columns=list(FIGURE_COLUMNS))


def _node_figure(key: tuple[str, str, str], found: list[tuple[float, FloatArray]]) -> dict[str, object]:
    rms = float(np.sqrt(np.mean([size**2 for size, _ in found])))
    drawn = np.mean([squares for _, squares in found], axis=0)
    spread = float(drawn.var(ddof=1))
    freedom = 2.0 * float(drawn.mean()) ** 2 / spread if spread > 0 else float("nan")
    low, high = spread_interval(rms, freedom)
    values = ("node_error", "mm", *key, rms, low, high, float("nan"), freedom, "spread")
    return dict(zip(FIGURE_COLUMNS, values, strict=True))
