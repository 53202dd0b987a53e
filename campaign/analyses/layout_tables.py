"""Placements as pages list them: what the tests say of each beside what chance alone would say of so many."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
from scipy import stats

from campaign.analyses.layout_results import LINES, SOLVED, AmplificationMap, Layout, NodeErrors, Placement
from campaign.methods.holm import holm_adjusted

RISK = 0.05
"""Of the χ² test of one placement, and of all of them together."""

PLACEMENT_COLUMNS = (
    *("read_by", "generation", "module", "trial", "repetition", "placement", "status", "reason"),
    *(
        "network_redundancy",
        "chi_square",
        "chi_square_limit",
        "p",
        "p_adjusted",
        "sigma0",
        "largest_tau",
        "tau_limit",
    ),
    *("verdict", "suspected", "error_mm", "expanded_uncertainty_mm"),
    *("datum_rms_mm", "datum_predicted_mm", "fit_rms_mm", "fit_predicted_mm", "fit_largest_mm"),
    *("amplification", "first_order_fails", "failed_draws"),
)
"""Columns of :func:`placement_table`.

``p_adjusted`` is Holm's over all placements tested by one choice of lines; ``amplification`` is the SD of a
node after best fit (root mean square over nodes) per SD of a length.
"""


def placement_table(layout: Layout) -> pd.DataFrame:
    """Return one row a placement and choice of lines, columns of :data:`PLACEMENT_COLUMNS`."""
    frame = pd.DataFrame([_row(one) for one in layout.placements], columns=list(PLACEMENT_COLUMNS))
    for line in LINES:
        rows = (frame["read_by"] == line) & frame["p"].notna()
        frame.loc[rows, "p_adjusted"] = holm_adjusted(frame.loc[rows, "p"].to_numpy(float))
    return frame


def _row(own: Placement) -> dict[str, object]:
    nan, tests, drawn = float("nan"), own.tests, own.monte_carlo
    tau = np.abs(tests.tau[np.isfinite(tests.tau)]) if tests is not None else np.zeros(0)
    tested: tuple[object, ...] = (0, nan, nan, nan, nan, nan, nan, nan, "", "", nan, nan)
    if tests is not None:
        found = tests.blunder
        tested = (
            *(tests.degrees_of_freedom, tests.chi_square, tests.chi_square_limit, tests.p, nan),
            *(tests.sigma0, float(tau.max()) if len(tau) else nan, tests.tau_limit),
            *(found.verdict, ", ".join(found.sensors), found.error_mm, found.uncertainty_mm),
        )
    known = own.amplification[np.isfinite(own.amplification)]
    values = (
        *(own.line, own.generation, own.module, own.trial, own.repetition, own.name, own.status, own.reason),
        *tested,
        *_errors(own.after_datum),
        *_errors(own.after_fit),
        own.after_fit.largest_mm if own.after_fit is not None else nan,
        float(np.sqrt(np.mean(known**2))) if len(known) else nan,
        drawn is not None and bool(drawn.first_order_fails.any()),
        drawn.failed if drawn is not None else 0,
    )
    return dict(zip(PLACEMENT_COLUMNS, values, strict=True))


def _errors(found: NodeErrors | None) -> tuple[float, float]:
    return (found.rms_mm, found.predicted_rms_mm) if found is not None else (float("nan"), float("nan"))


@dataclass(frozen=True)
class ChanceOfTests:
    """How many placements exceed their own χ² limit beside how many would by chance.

    Attributes
    ----------
    line
        Choice of lines.
    tested
        Placements with redundancy.
    beyond, expected
        Those beyond their own 5 % limit, and how many of them chance alone makes on average.
    low, high
        95 % limits of that number, were the placements independent.
    beyond_doubt
        Those that also exceed it with all tests counted (Holm).
    crowded
        Module → its placements beyond their own limit only, where there is more than one: they share lines.
    """

    line: str
    tested: int
    beyond: int
    expected: float
    low: int
    high: int
    beyond_doubt: int
    crowded: Mapping[str, int]


def chance_of_tests(table: pd.DataFrame, line: str) -> ChanceOfTests | None:
    """Return the counts of one choice of lines over the rows of :func:`placement_table`."""
    rows = table[(table["read_by"] == line) & table["p"].notna()]
    if rows.empty:
        return None
    low, high = (float(stats.binom.ppf(level, len(rows), RISK)) for level in (0.025, 0.975))
    beyond, doubtless = rows["p"] < RISK, rows["p_adjusted"] < RISK
    edge = rows[beyond & ~doubtless].groupby("module", sort=True).size()
    crowded = {str(module): int(count) for module, count in edge.items() if count > 1}
    return ChanceOfTests(
        line=line,
        tested=len(rows),
        beyond=int(beyond.sum()),
        expected=RISK * len(rows),
        low=int(low),
        high=int(high),
        beyond_doubt=int(doubtless.sum()),
        crowded=crowded,
    )


def bad_lengths(table: pd.DataFrame, line: str) -> pd.DataFrame:
    """Return the placements of one choice of lines with a bad length beyond doubt, the surest first."""
    rows = table[(table["read_by"] == line) & (table["p_adjusted"] < RISK)]
    return rows.sort_values("p", kind="stable")


def unsolved(table: pd.DataFrame, line: str) -> list[tuple[str, str, str, list[str]]]:
    """Return (module, status, reason, placements) of what was not solved whole from all its edges."""
    rows = table[(table["read_by"] == line) & ((table["status"] != SOLVED) | (table["reason"] != ""))]
    grouped = rows.groupby(["module", "status", "reason"], sort=True)["placement"]
    return [
        (str(module), str(status), str(reason), [str(name) for name in names])
        for (module, status, reason), names in grouped
    ]


def node_table(nodes: pd.DataFrame) -> pd.DataFrame:
    """Return observed and predicted errors of every node of every module over its placements.

    Root mean squares after best rigid fit, columns read_by, generation, module, node, placements,
    observed_mm, predicted_mm; *nodes* is :attr:`campaign.analyses.layout_results.Layout.nodes`.
    """
    known = nodes.dropna(subset=["fit_error_mm", "fit_predicted_sd_mm"])
    keys = ["read_by", "generation", "module", "node"]
    squared = known[keys].assign(
        placements=1,
        observed_mm=known["fit_error_mm"].to_numpy(float) ** 2,
        predicted_mm=known["fit_predicted_sd_mm"].to_numpy(float) ** 2,
    )
    return _root_mean_squares(squared, keys)


def length_table(edges: pd.DataFrame) -> pd.DataFrame:
    """Return how far the lengths that sensors read are off the known ones, a sensor and trial a row.

    Root mean squares over placements of the length as read less the known one, and as predicted; columns
    read_by, module, sensor, trial, placements, observed_mm, predicted_mm; *edges* is
    :attr:`campaign.analyses.layout_results.Layout.edges`.
    """
    known = edges.dropna(subset=["length_mm", "known_length_mm", "sd_length_mm"])
    keys = ["read_by", "module", "sensor", "trial"]
    off = known["length_mm"].to_numpy(float) - known["known_length_mm"].to_numpy(float)
    variance = known["sd_length_mm"].to_numpy(float) ** 2 + known["known_sd_mm"].to_numpy(float) ** 2
    squared = known[keys].assign(placements=1, observed_mm=off**2, predicted_mm=variance)
    return _root_mean_squares(squared, keys)


def _root_mean_squares(squared: pd.DataFrame, keys: list[str]) -> pd.DataFrame:
    summed = squared.groupby(keys, sort=True).agg(
        placements=("placements", "sum"),
        observed_mm=("observed_mm", "mean"),
        predicted_mm=("predicted_mm", "mean"),
    )
    summed[["observed_mm", "predicted_mm"]] = np.sqrt(summed[["observed_mm", "predicted_mm"]])
    return summed.reset_index()


# --- amplification


@dataclass(frozen=True)
class AmplificationFact:
    """How much a geometry amplifies errors of lengths, SD of a node per SD of a length.

    Attributes
    ----------
    geometry, nodes, edges, redundancy, statement, flexible_nodes
        As :class:`campaign.analyses.layout_results.NetworkFacts` has them.
    low, high
        Smallest and largest root mean square over the nodes, over the reachable shapes; NaN where none is.
    stretch, shear
        The shape with the largest.
    largest, node
        Largest of a single node, and which.
    measured_low, measured_high
        The same over the placements with all lengths, as laid; NaN without any.
    short_low, short_high, short
        Over placements with a length missing, and their number.
    """

    geometry: str
    nodes: int
    edges: int
    redundancy: int
    statement: str
    flexible_nodes: tuple[str, ...]
    low: float
    high: float
    stretch: float
    shear: float
    largest: float
    node: str
    measured_low: float
    measured_high: float
    short_low: float
    short_high: float
    short: int


def amplification_facts(layout: Layout) -> tuple[AmplificationFact, ...]:
    """Return one fact a geometry, by name."""
    maps = {found.geometry: found for found in layout.amplification}
    made = []
    for facts in layout.facts:
        own = [p for p in layout.placements if p.geometry == facts.geometry and p.solved.all()]
        whole, short = ([p for p in own if bool(p.used.all()) is every] for every in (True, False))
        low, high, stretch, shear, largest, node = _of_map(maps.get(facts.geometry))
        measured, shortened = _ends(whole), _ends(short)
        made.append(
            AmplificationFact(
                geometry=facts.geometry,
                nodes=facts.nodes,
                edges=facts.edges,
                redundancy=facts.redundancy,
                statement=facts.statement,
                flexible_nodes=facts.flexible_nodes,
                low=low,
                high=high,
                stretch=stretch,
                shear=shear,
                largest=largest,
                node=node,
                measured_low=measured[0],
                measured_high=measured[1],
                short_low=shortened[0],
                short_high=shortened[1],
                short=len({p.key for p in short}),
            )
        )
    return tuple(made)


def _of_map(found: AmplificationMap | None) -> tuple[float, float, float, float, float, str]:
    """Smallest and largest, the shape of the largest, and the largest of a node with its name."""
    nan = float("nan")
    if found is None or not np.isfinite(found.root_mean_square).any():
        return nan, nan, nan, nan, nan, ""
    values = np.where(np.isfinite(found.root_mean_square), found.root_mean_square, np.nan)
    by_node = np.where(np.isfinite(found.by_node), found.by_node, np.nan)
    i, j = np.unravel_index(int(np.nanargmax(values)), values.shape)
    node = int(np.nanargmax(by_node)) % len(found.nodes)
    shape = float(found.stretch[i]), float(found.shear[j])
    return (
        float(np.nanmin(values)),
        float(values[i, j]),
        *shape,
        float(np.nanmax(by_node)),
        found.nodes[node],
    )


def _ends(placements: Iterable[Placement]) -> tuple[float, float]:
    values = [float(np.sqrt(np.mean(p.amplification**2))) for p in placements]
    return (min(values), max(values)) if values else (float("nan"), float("nan"))
