"""Sentences about placements, nodes and edges, with numbers rounded."""

from __future__ import annotations

import math
from collections.abc import Hashable, Mapping
from typing import Any

from campaign.analyses.layout_results import (
    DETECTED,
    GENERATION_LINE,
    NO_BLUNDER,
    NO_TEST,
    ONE_EDGE,
    OWN_LINE,
    NodeErrors,
    Placement,
)
from campaign.analyses.layout_tables import RISK
from campaign.analyses.layout_views import ShapeView
from campaign.pages import numbers

Row = Mapping[Hashable, Any]

LINE_WORDS: Mapping[str, str] = {OWN_LINE: "each sensor’s own line", GENERATION_LINE: "the generation’s line"}
"""What choices of lines are called."""

SHORT_LINE_WORDS: Mapping[str, str] = {OWN_LINE: "own line", GENERATION_LINE: "generation’s line"}
"""The same in columns of tables."""

STATEMENT_WORDS: Mapping[str, str] = {
    "under-determined": "under-determined: the edges leave nodes free to move",
    "just determined": "just determined: the edges fix the shape and nothing checks them",
    "a bad edge can be detected, not located": "one edge more than the shape needs: a bad length can be "
    "detected, not located",
    "a bad edge can be detected and named": "two edges or more beyond what the shape needs: a bad length can "
    "be detected and, where the others tell it apart, named",
}
"""What a geometry can tell, in words."""


def line_words(line: str) -> str:
    """Return what a choice of lines is called."""
    return LINE_WORDS.get(line, line)


def placement_name(own: Placement) -> str:
    """Return ``M08, placement 3``."""
    return f"{own.module}, placement {own.name}"


def verdict_words(row: Row) -> str:
    """Return what the tests say of a placement, all placements tested by the same lines counted.

    *row* is one of :func:`campaign.analyses.layout_tables.placement_table`.
    """
    verdict, sure = str(row["verdict"]), float(row["p_adjusted"]) < RISK
    if not verdict:
        return str(row["status"])
    if verdict == NO_TEST:
        return "no test: just determined"
    if verdict == NO_BLUNDER:
        return "nothing found"
    if not sure:
        return "beyond its own limit only"
    if verdict == DETECTED:
        return "bad length detected, not located"
    error = numbers.measured(float(row["error_mm"]), float(row["expanded_uncertainty_mm"]), "mm")
    which = str(row["suspected"]) if verdict == ONE_EDGE else f"one of {row['suspected']}"
    return f"{which} read wrong by {error}"


# --- of one placement


def placement_caption(own: Placement) -> str:
    """Return the caption of the drawing of a placement that a reader picked."""
    said = f"{placement_name(own)}, read by {line_words(own.line)}"
    if own.after_fit is None:
        return f"{said}: {own.status}." if own.tests is None else f"{said}."
    limits = numbers.limits(own.after_fit.predicted_rms_low_mm, own.after_fit.predicted_rms_high_mm, "mm")
    size = numbers.significant(own.after_fit.rms_mm, 2, "mm")
    return f"{said}: {size} off after the best rigid fit, predicted {limits}."


def placement_sentence(own: Placement, p_adjusted: float = math.nan) -> str:
    """Return what is said of one placement below its drawing.

    *p_adjusted* is p of its χ² test with all tests of the campaign counted; NaN where it was not tested.
    """
    parts = [f"{placement_name(own)}, read by {line_words(own.line)}: {own.status}"]
    if own.reason:
        parts[0] += f" ({own.reason})"
    if own.after_datum is not None:
        parts.append(f"Node errors by the datum {_error_words(own.after_datum)}")
    if own.after_fit is not None:
        parts.append(f"After the best rigid fit {_error_words(own.after_fit)}")
    if own.tests is not None:
        parts.append(_tests_words(own, p_adjusted))
    if own.monte_carlo is not None and own.monte_carlo.first_order_fails.any():
        parts.append("First-order ellipses differ from Monte Carlo here and are not to be trusted")
    return ". ".join(parts) + "."


def _error_words(found: NodeErrors) -> str:
    size = numbers.significant(found.rms_mm, 2, "mm")
    limits = numbers.limits(found.predicted_rms_low_mm, found.predicted_rms_high_mm, "mm")
    largest = numbers.significant(found.largest_mm, 2, "mm")
    return f"{size} (root mean square; predicted {limits}), the largest {largest}"


def _tests_words(own: Placement, p_adjusted: float) -> str:
    tests = own.tests
    assert tests is not None
    if tests.degrees_of_freedom < 1:
        return "Just determined: no length is checked by the others"
    chi = numbers.significant(tests.chi_square, 3)
    limit = numbers.significant(tests.chi_square_limit, 3)
    freedom = numbers.whole(tests.degrees_of_freedom)
    first = f"χ² = {chi} with redundancy {freedom} (5 % limit {limit}), {numbers.probability(tests.p)}"
    found = tests.blunder
    if found.verdict == NO_BLUNDER:
        return f"{first}: nothing found"
    if not p_adjusted < RISK:
        return f"{first}: beyond the limit of this one test, but not with all placements tested counted"
    if found.verdict == DETECTED:
        why = "every edge is suspected alike" if tests.degrees_of_freedom == 1 else "no one edge explains it"
        return f"{first}: a bad length is detected, not located ({why})"
    which = found.sensors[0] if found.verdict == ONE_EDGE else f"one of {', '.join(found.sensors)}"
    error = numbers.measured(found.error_mm, found.uncertainty_mm, "mm")
    return f"{first}: {which} was read wrong by {error} (U, 95 %)"


def node_sentence(own: Placement, view: ShapeView, node: int) -> str:
    """Return what is said of a rebuilt node."""
    found = own.after_datum if view.frame == "datum" else own.after_fit
    if found is None or not math.isfinite(found.sizes_mm[node]):
        return f"{own.nodes[node]}, rebuilt; its known position is missing"
    size = numbers.significant(float(found.sizes_mm[node]), 2, "mm")
    predicted = numbers.significant(float(found.predicted_mm[node]), 2, "mm")
    return f"{own.nodes[node]}, rebuilt: {size} from the known node, predicted {predicted}"


def known_sentence(own: Placement, node: int) -> str:
    """Return what is said of a known node."""
    if not math.isfinite(own.known_uncertainty_mm):
        return f"{own.nodes[node]}, known; taken as exact"
    uncertainty = numbers.significant(own.known_uncertainty_mm, 2, "mm")
    return f"{own.nodes[node]}, known to {uncertainty} in each coordinate (standard uncertainty)"


def edge_sentence(own: Placement, edge: int) -> str:
    """Return what is said of an edge: its length as read and known, and what others make of it."""
    sensor = own.edges[edge].sensor
    known = numbers.significant(float(own.known_lengths_mm[edge]), 5, missing="not known")
    if not math.isfinite(own.lengths_mm[edge]):
        return f"{sensor}: no length; known {known} mm"
    sd = float(own.length_covariance_mm2[edge, edge]) ** 0.5
    read = numbers.measured(float(own.lengths_mm[edge]), sd)
    said = f"{sensor}: read ({read}) mm, known {known} mm"
    if not own.used[edge] or own.tests is None or own.tests.degrees_of_freedom < 1:
        return said
    residual = numbers.significant(float(own.tests.residuals_mm[edge]), 2, "mm")
    share = numbers.percent(float(own.tests.redundancy[edge]))
    return f"{said}, residual {residual}; the others would show {share} of an error"
