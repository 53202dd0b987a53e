"""What page 0 and page 8 say of rebuilt shapes, as facts without words."""

from __future__ import annotations

import math
from collections.abc import Hashable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from campaign.analyses.findings import Finding, limit_value, verdict_of_limit
from campaign.analyses.layout_results import GENERATION_LINE, OWN_LINE, Layout
from campaign.analyses.layout_summaries import AFTER_DATUM, AFTER_FIT, EDGE_ERROR
from campaign.analyses.layout_tables import bad_lengths, placement_table
from campaign.analyses.limits import Limits

Row = Mapping[Hashable, Any]

_FIGURES = {"datum": AFTER_DATUM, "fit": AFTER_FIT, "edges": EDGE_ERROR}


@dataclass(frozen=True)
class ErrorFact:
    """Observed error of one figure beside what calibration and known positions alone predict, in mm.

    ``low`` and ``high`` hold 95 % of the predicted root mean square; ``ratio`` is observed over predicted
    with its 95 % interval.
    """

    rms: float
    largest: float
    predicted: float
    low: float
    high: float
    ratio: float
    ratio_low: float
    ratio_high: float
    as_predicted: bool


@dataclass(frozen=True)
class ExtraFact:
    """SD to be added to every length for prediction and observation to agree, in mm, with its 95 % limits.

    ``told`` is whether it is distinguishable from zero; ``left_out`` the lengths beyond chance that were left
    out of it.
    """

    sd: float
    low: float
    high: float
    lengths: int
    left_out: int
    told: bool


@dataclass(frozen=True)
class BadLength:
    """A placement with a bad length beyond doubt: the edges named (none: not located), and its error."""

    module: str
    placement: str
    trial: str
    sensors: tuple[str, ...]
    error_mm: float
    expanded_uncertainty_mm: float
    p: float


@dataclass(frozen=True)
class LayoutFact:
    """Shapes of one generation.

    Attributes
    ----------
    generation, modules, placements
        Whose, and how many were solved at least in part by own lines.
    own, mean_line
        Errors by each sensor's own line and by the generation's, by ``datum``, ``fit`` and ``edges``; a
        figure is missing where no placement gives it.
    own_extra, mean_extra
        The extra SD of both, ``None`` where there are too few lengths.
    bad
        Placements with a bad length beyond doubt, by own lines.
    fit_without_bad
        Observed and predicted root mean square error after best fit, own lines, over the other placements;
        NaN where there is none.
    worst
        Module, node and root mean square error over placements of the worst node after best fit.
    nodes, limit, exceeding
        Nodes judged, the limit on their error (NaN: none) and how many exceed it.
    """

    generation: str
    modules: int
    placements: int
    own: Mapping[str, ErrorFact]
    mean_line: Mapping[str, ErrorFact]
    own_extra: ExtraFact | None
    mean_extra: ExtraFact | None
    bad: tuple[BadLength, ...]
    fit_without_bad: tuple[float, float]
    worst: tuple[str, str, float]
    nodes: int
    limit: float
    exceeding: int


def layout_findings(layout: Layout | None, limits: Limits) -> tuple[Finding, ...]:
    """Return what page 0 says of shapes; nothing where no node error is known."""
    facts = tuple(fact for fact in layout_facts(layout, limits) if "fit" in fact.own)
    if not facts:
        return ()
    return (Finding("layout", facts, verdict_of_limit(limits, "node_error"), "node_error"),)


def layout_facts(layout: Layout | None, limits: Limits) -> tuple[LayoutFact, ...]:
    """Return the facts of every generation with a placement, by name."""
    if layout is None:
        return ()
    table = placement_table(layout)
    limit = limit_value(limits, "node_error")
    return tuple(_fact(name, layout, table, limit) for name in sorted(set(table["generation"])))


def _fact(generation: str, layout: Layout, table: pd.DataFrame, limit: float) -> LayoutFact:
    rows = table[(table["generation"] == generation) & (table["read_by"] == OWN_LINE)]
    solved = rows[rows["verdict"] != ""]
    bad = bad_lengths(table, OWN_LINE)
    figures = layout.figures[layout.figures["generation"] == generation]
    estimates = figures["estimate"].to_numpy(float)
    return LayoutFact(
        generation,
        int(solved["module"].nunique()),
        len(solved),
        _errors(layout.errors, generation, OWN_LINE),
        _errors(layout.errors, generation, GENERATION_LINE),
        _extra(layout.extra, generation, OWN_LINE),
        _extra(layout.extra, generation, GENERATION_LINE),
        tuple(_bad(row) for row in bad[bad["generation"] == generation].to_dict("records")),
        _without(layout, rows, set(bad.index)),
        _worst(figures.to_dict("records")),
        len(figures),
        limit,
        int((estimates > limit).sum()),
    )


def _without(layout: Layout, rows: pd.DataFrame, left_out: set[int]) -> tuple[float, float]:
    """Observed and predicted root mean square over nodes of the placements in *rows* not left out."""
    fits = [layout.placements[k].after_fit for k in rows.index if k not in left_out]
    pairs = [(fit.sizes_mm, fit.predicted_mm) for fit in fits if fit is not None]
    if not pairs:
        return math.nan, math.nan
    observed, predicted = (np.concatenate(parts) for parts in zip(*pairs, strict=True))
    return float(np.sqrt(np.nanmean(observed**2))), float(np.sqrt(np.nanmean(predicted**2)))


def _worst(figures: Sequence[Row]) -> tuple[str, str, float]:
    """Module, node and error of the worst node."""
    if not figures:
        return "", "", math.nan
    row = max(figures, key=lambda own: float(own["estimate"]))
    return str(row["module"]), str(row["sensor"]), float(row["estimate"])


def _errors(table: pd.DataFrame, generation: str, line: str) -> Mapping[str, ErrorFact]:
    rows = table[(table["generation"] == generation) & (table["read_by"] == line)]
    by_figure = {str(row["figure"]): row for row in rows.to_dict("records")}
    return {name: _error(by_figure[figure]) for name, figure in _FIGURES.items() if figure in by_figure}


def _error(row: Row) -> ErrorFact:
    return ErrorFact(
        rms=float(row["rms_mm"]),
        largest=float(row["largest_mm"]),
        predicted=float(row["predicted_rms_mm"]),
        low=float(row["predicted_low_mm"]),
        high=float(row["predicted_high_mm"]),
        ratio=float(row["ratio"]),
        ratio_low=float(row["ratio_low"]),
        ratio_high=float(row["ratio_high"]),
        as_predicted=bool(row["as_predicted"]),
    )


def _extra(table: pd.DataFrame, generation: str, line: str) -> ExtraFact | None:
    rows = table[(table["generation"] == generation) & (table["read_by"] == line)].to_dict("records")
    if not rows:
        return None
    row = rows[0]
    label = str(row["label"])
    counts = [int(part.split()[0]) for part in label.split("; ") if part.endswith("left out")]
    ends = float(row["extra_sd_mm"]), float(row["low_mm"]), float(row["high_mm"])
    return ExtraFact(*ends, int(row["lengths"]), sum(counts), ends[1] > 0.0)


def _bad(row: Row) -> BadLength:
    return BadLength(
        module=str(row["module"]),
        placement=str(row["placement"]),
        trial=str(row["trial"]),
        sensors=tuple(name for name in str(row["suspected"]).split(", ") if name),
        error_mm=float(row["error_mm"]),
        expanded_uncertainty_mm=float(row["expanded_uncertainty_mm"]),
        p=float(row["p"]),
    )
