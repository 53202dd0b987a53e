"""Layout: what shape comes back from the lengths, and why it is off.

Every placement is read by each sensor's own line and by the mean line of its generation, adjusted as a planar
distance network with the whole covariance of its lengths, and laid beside the known positions of its nodes.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.analyses.layout_errors import LengthsOfPlacement
from campaign.analyses.layout_generation_lines import read_by_generation_line
from campaign.analyses.layout_lengths import LengthReadings, read_by_own_lines, temperature_factors
from campaign.analyses.layout_maps import facts_of, geometries_of, map_of, strain_range_of
from campaign.analyses.layout_results import (
    EDGE_COLUMNS,
    EXTRA_COLUMNS,
    GENERATION_LINE,
    NODE_COLUMNS,
    NOT_SOLVED,
    OWN_LINE,
    SOLVED,
    Layout,
    Placement,
)
from campaign.analyses.layout_shapes import SolvedPlacement, adjust_placement
from campaign.analyses.layout_signals import PlacedShape, PlacedSignals, gather_placements
from campaign.analyses.layout_summaries import error_table, extra_row, node_figures, sum_table
from campaign.analyses.seeds import seed_from
from campaign.analyses.shared_work import do_all
from campaign.analyses.variance_fit import GenerationFit
from campaign.notices import Notice
from campaign.recordings.description import Description
from campaign.recordings.sensor_share import TrialKey
from campaign.trials.layout import LayoutFeatures
from campaign.workers.workshop import Workshop

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration
    from campaign.analyses.influences import Influences
    from campaign.analyses.variance import Variance

FloatArray = npt.NDArray[np.float64]

DRAWS = 2000
"""Sets of length errors drawn for all placements together."""

AT_A_TIME = 50
"""Placements whose drawn lengths are held at a time."""

EXACT_NODES = "known node positions taken as exact: no uncertainty is stated under [reference] node"


def analyse_layout(
    features: Mapping[TrialKey, LayoutFeatures],
    calibration: Calibration | None,
    variance: Variance | None,
    influences: Influences | None,
    description: Description,
    registers: tuple[pd.DataFrame, pd.DataFrame],
    workshop: Workshop | None = None,
) -> Layout | None:
    """Rebuild the shape of every placement of every layout trial.

    Parameters
    ----------
    features
        Layout trials that are used.
    calibration
        The sensors' lines, or ``None``: then nothing can be read.
    variance
        The nested fits: mean lines, and what sensors of a shared run have in common.
    influences
        What temperature does to the sensors, where it was measured.
    description
        Geometries, uncertainties of the reference and of known nodes.
    registers
        Modules (geometry) and sensors (from, to).
    workshop
        Who adjusts, and what earlier runs adjusted; this process alone where ``None``.

    Returns
    -------
    Layout or None
        ``None`` where there is no layout trial; without placements, but with notices, where none can be read.
    """
    if not features:
        return None
    placed = gather_placements(features.values(), description, *registers)
    notices = list(placed.notices)
    if calibration is None or not calibration.records:
        what = "there are layout trials but no line that lengths could be read by"
        notices.append(_noted("layout-without-line", what, "no shape is rebuilt", "run staircases"))
        return _gather(placed, [], [], None, {}, notices)
    coefficients = influences.of("temperature") if influences is not None else None
    campaign = _Campaign(placed, calibration, variance, coefficients, description)
    solved: list[SolvedPlacement] = []
    extra: list[dict[str, object]] = []
    labels: dict[str, str] = {}
    for generation, line, read in _readings(campaign, labels):
        shapes = [shape for shape in placed.shapes if shape.generation == generation]
        solved += _adjusted(campaign, shapes, line, read, workshop or Workshop())
        row = extra_row(line, generation, shapes, read, description.node_reference_mm)
        extra += [row] if row is not None else []
    if not np.isfinite(description.node_reference_mm):
        labels["known_nodes"] = EXACT_NODES
    return _gather(placed, solved, extra, calibration, labels, notices)


def _noted(code: str, what: str, done: str, remedy: str = "", file: str | None = None) -> Notice:
    return Notice(code, "noted", file, None, None, what, done, remedy)


@dataclass(frozen=True)
class _Campaign:
    """What readings of lengths need."""

    placed: PlacedSignals
    calibration: Calibration
    variance: Variance | None
    coefficients: pd.DataFrame | None
    description: Description

    def fit_of(self, generation: str) -> GenerationFit | None:
        """The nested fit of one generation."""
        fits = self.variance.by_generation if self.variance is not None else ()
        wanted = (generation, "all") if len(fits) == 1 else (generation,)
        return next((fit for fit in fits if fit.generation in wanted), None)


def _readings(campaign: _Campaign, labels: dict[str, str]) -> Iterator[tuple[str, str, LengthReadings]]:
    """Generation, choice of lines and the lengths read by it, over the rows of the whole table."""
    table = campaign.placed.table
    for generation in sorted({shape.generation for shape in campaign.placed.shapes}):
        rows = np.flatnonzero(table["generation"] == generation)
        own = table.iloc[rows].reset_index(drop=True)
        factors, said = temperature_factors(
            own, campaign.calibration, campaign.coefficients, campaign.description
        )
        labels["temperature"] = said
        fit = campaign.fit_of(generation)
        arguments = campaign.description, factors
        read = read_by_own_lines(own, campaign.calibration, fit, *arguments)
        labels |= read.labels
        yield generation, OWN_LINE, _over_all(read, rows, len(table))
        if fit is not None and fit.mean_slope:
            read = read_by_generation_line(own, campaign.calibration, fit, *arguments)
            labels |= read.labels
            yield generation, GENERATION_LINE, _over_all(read, rows, len(table))


def _over_all(read: LengthReadings, rows: npt.NDArray[np.int64], count: int) -> LengthReadings:
    """The readings of some rows of a table, over all its rows."""
    lengths, outside = np.full(count, np.nan), np.zeros(count, dtype=bool)
    lengths[rows], outside[rows] = read.lengths_mm, read.outside
    covariance = np.zeros((count, count))
    covariance[np.ix_(rows, rows)] = read.covariance_mm2
    return LengthReadings(lengths, covariance, {}, outside, read.labels)


def _adjusted(
    campaign: _Campaign, shapes: list[PlacedShape], line: str, read: LengthReadings, workshop: Workshop
) -> list[SolvedPlacement]:
    """Adjust the placements of one generation; their length errors are drawn together, as they are shared."""
    known = np.flatnonzero(np.isfinite(read.lengths_mm))
    rng = np.random.default_rng(_seed(campaign.placed.table, line))
    root = np.linalg.cholesky(read.covariance_mm2[np.ix_(known, known)])
    deviations = np.zeros((DRAWS, len(read.lengths_mm)))
    deviations[:, known] = rng.standard_normal((DRAWS, len(known))) @ root.T
    sd = campaign.description.node_reference_mm
    solved: list[SolvedPlacement] = []
    for start in range(0, len(shapes), AT_A_TIME):
        tasks = []
        for shape in shapes[start : start + AT_A_TIME]:
            moved = float(np.nan_to_num(sd)) * rng.standard_normal((DRAWS, 2 * len(shape.network.nodes)))
            tasks.append((shape, _lengths_of(shape, line, read, deviations, moved), sd))
        solved += do_all(_adjusted_placement, tasks, workshop, lambda _: False)
    return solved


def _adjusted_placement(task: tuple[PlacedShape, LengthsOfPlacement, float]) -> tuple[SolvedPlacement]:
    return (adjust_placement(*task),)


def _lengths_of(
    shape: PlacedShape, line: str, read: LengthReadings, deviations: FloatArray, moved: FloatArray
) -> LengthsOfPlacement:
    """The lengths of one placement, and why some are missing."""
    rows, have = shape.rows, shape.rows >= 0
    lengths = np.where(have, read.lengths_mm[rows], np.nan)
    finite = np.isfinite(lengths)
    covariance = read.covariance_mm2[np.ix_(rows, rows)] * np.outer(finite, finite)
    drawn = deviations[:, rows] * finite
    return LengthsOfPlacement(line, lengths, covariance, drawn, moved, _missing(shape, read, lengths))


def _missing(shape: PlacedShape, read: LengthReadings, lengths: FloatArray) -> dict[int, str]:
    """Why an edge has no length, by its number."""
    found = {}
    for k in np.flatnonzero(~np.isfinite(lengths)):
        sensor, row = shape.network.edges[k].sensor, int(shape.rows[k])
        why = "no signal" if row < 0 else "outside calibration" if read.outside[row] else "no line"
        found[int(k)] = f"{sensor}: {why}"
    return found


def _seed(table: pd.DataFrame, line: str) -> int:
    """A seed that depends on the signals alone, so that a report repeats to the byte."""
    return seed_from([line, table["trial"]], [table["signal"]])


# --- putting it together


def _gather(
    placed: PlacedSignals,
    solved: list[SolvedPlacement],
    extra: list[dict[str, object]],
    calibration: Calibration | None,
    labels: dict[str, str],
    notices: list[Notice],
) -> Layout:
    order = {shape_key(shape): k for k, shape in enumerate(placed.shapes)}
    solved = sorted(solved, key=lambda one: (order[one.placement.key], one.placement.line != OWN_LINE))
    placements = tuple(one.placement for one in solved)
    networks = geometries_of(shape.network for shape in placed.shapes) if placements else {}
    strain = (
        (0.0, 0.0)
        if calibration is None
        else strain_range_of(calibration.readings, calibration.reference.name)
    )
    return Layout(
        placements=placements,
        nodes=_frame((row for one in placements for row in _node_rows(one)), NODE_COLUMNS),
        edges=_frame((row for one in placements for row in _edge_rows(one)), EDGE_COLUMNS),
        errors=error_table(solved, by_module=False),
        by_module=error_table(solved, by_module=True),
        extra=_frame(extra, EXTRA_COLUMNS),
        sums=sum_table(placements),
        amplification=tuple(map_of(network, strain) for network in networks.values()),
        facts=tuple(facts_of(network) for network in networks.values()),
        figures=node_figures(solved),
        labels=labels,
        notices=(*notices, *_shape_notices(placements)),
    )


def shape_key(shape: PlacedShape) -> tuple[str, str, str, int, str]:
    """Return what names a placement whatever its line."""
    return shape.generation, shape.module, shape.trial, shape.repetition, shape.name


def _frame(rows: Iterable[dict[str, object]], columns: tuple[str, ...]) -> pd.DataFrame:
    return pd.DataFrame(list(rows), columns=list(columns))


def _shape_notices(placements: tuple[Placement, ...]) -> Iterator[Notice]:
    """One notice a placement that own lines cannot solve whole, or only without some of its edges."""
    for own in placements:
        if own.line != OWN_LINE or (own.status == SOLVED and not own.reason):
            continue
        what = f"module {own.module}, placement {own.name}: {own.reason}"
        done = {NOT_SOLVED: "no shape is rebuilt", SOLVED: "the shape is rebuilt from the other edges"}
        told = done.get(own.status, "the part that the other edges hold is rebuilt")
        yield _noted("placement-in-part", what, told, file=own.trial)


def _node_rows(own: Placement) -> Iterator[dict[str, object]]:
    """Rows of the table of nodes of one placement."""
    nan = float("nan")
    variances = np.diag(own.covariance_mm2).reshape(-1, 2)
    for k, node in enumerate(own.nodes):
        datum, fit = own.after_datum, own.after_fit
        fails = own.monte_carlo is not None and bool(own.monte_carlo.first_order_fails[k])
        values = (
            *(own.generation, own.module, own.name, node),
            *map(float, (*own.adjusted_mm[k], *own.known_mm[k], *np.sqrt(np.maximum(variances[k], 0.0)))),
            float(own.covariance_mm2[2 * k, 2 * k + 1]),
            *(map(float, (datum.sizes_mm[k], datum.predicted_mm[k])) if datum is not None else (nan, nan)),
            *(own.line, own.trial, own.repetition, own.status),
            *(map(float, datum.errors_mm[k]) if datum is not None else (nan, nan)),
            *(map(float, (fit.sizes_mm[k], fit.predicted_mm[k])) if fit is not None else (nan, nan)),
            fails,
        )
        yield dict(zip(NODE_COLUMNS, values, strict=True))


def _edge_rows(own: Placement) -> Iterator[dict[str, object]]:
    """Rows of the table of edges of one placement."""
    nan, tests = float("nan"), own.tests
    read_sd, known_sd, error_sd = (
        np.sqrt(np.maximum(np.diag(matrix), 0.0))
        for matrix in (
            own.length_covariance_mm2,
            own.known_length_covariance_mm2,
            own.edge_error_covariance_mm2,
        )
    )
    for k, edge in enumerate(own.edges):
        checks = (nan, nan, nan) if tests is None else _checks(own, k)
        read = np.isfinite(own.lengths_mm[k])
        values = (
            *(own.generation, own.module, own.name, edge.sensor),
            *map(float, (own.lengths_mm[k], own.known_lengths_mm[k], own.adjusted_lengths_mm[k])),
            *checks,
            *(own.line, own.trial, own.repetition, own.status),
            *(float(read_sd[k]) if read else nan, float(known_sd[k])),
            *(float(own.edge_errors_mm[k]), float(error_sd[k])),
            *((nan, nan) if tests is None else (float(tests.standardised[k]), tests.tau_limit)),
            tests is not None and edge.sensor in tests.blunder.sensors,
        )
        yield dict(zip(EDGE_COLUMNS, values, strict=True))


def _checks(own: Placement, edge: int) -> tuple[float, float, float]:
    """Residual, redundancy and τ of one edge."""
    tests = own.tests
    assert tests is not None
    return float(tests.residuals_mm[edge]), float(tests.redundancy[edge]), float(tests.tau[edge])
