"""Figures of errors of rebuilt shapes beside what is predicted: by module, by node, by edge."""

from __future__ import annotations

import math
from collections.abc import Hashable, Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd

from campaign.analyses.layout_results import LINES, OWN_LINE, Layout
from campaign.analyses.layout_summaries import AFTER_DATUM, AFTER_FIT
from campaign.pages import numbers, palette, slugs
from campaign.pages.figures import (
    Figure,
    Trace,
    axis,
    label,
    level_line,
    line,
    panel,
    points,
    small_multiples,
)
from campaign.pages.figures import (
    Layout as FigureLayout,
)
from campaign.pages.figures import (
    layout as one_panel,
)
from campaign.pages.layout_words import SHORT_LINE_WORDS, line_words

Row = Mapping[Hashable, Any]

MOST_MODULES = 40
"""Modules that the figure of errors draws, those furthest from their prediction first."""

MOST_NODES = 700
"""Nodes a choice of lines that are drawn one by one; beyond, each module is one point."""

MOST_LENGTHS = 1200
"""Lengths that are drawn one by one; beyond, each sensor is drawn by the one furthest off."""

FAR = 3.0
"""Predicted SDs from which on a length is drawn with its name."""


def error_figure(found: Layout) -> Figure | None:
    """Return errors of every module beside the limits that calibration and known positions predict."""
    table = found.by_module[found.by_module["figure"].isin([AFTER_DATUM, AFTER_FIT])]
    if table.empty:
        return None
    modules = _modules_shown(table)
    lines = [choice for choice in LINES if (table["read_by"] == choice).any()]
    heads: list[str] = []
    traces: list[Trace] = []
    generations = tuple(sorted(set(found.by_module["generation"].astype(str))))
    for choice in lines:
        for frame in (AFTER_FIT, AFTER_DATUM):
            where = panel(len(heads))
            by = "Best fit" if frame == AFTER_FIT else "Datum"
            heads.append(f"{by}, {SHORT_LINE_WORDS[choice]}s")
            rows = table[(table["read_by"] == choice) & (table["figure"] == frame)]
            traces += _error_traces(rows, modules, generations, where)
    ticks = [(float(i), module) for i, (_, module) in enumerate(modules)]
    upright = axis("Module", ticks=ticks, low=-0.6, high=len(modules) - 0.2, reverse=True)
    low, high = _reach(traces)
    ticks_across = _round_ticks(0.9 * low, 1.1 * high)
    across = axis("Node error", "mm", logarithmic=True, low=0.9 * low, high=1.1 * high, ticks=ticks_across)
    lines_of_panels = -(-len(heads) // 2)
    return Figure(
        name="errors",
        caption=_error_caption(found),
        alternative="By module: dots for the observed root mean square node error on bars for the limits "
        "that are predicted, hollow marks for the largest error.",
        traces=tuple(traces),
        layout=small_multiples(heads, across, upright, columns=2, gap=(0.06, 0.12)),
        table="layout_errors",
        note="Bars hold 95 % of the root mean square that calibration and known positions alone would give. "
        "Filled: observed. Hollow: the largest of all nodes, its predicted limits thin.",
        height=90 + lines_of_panels * (50 + 19 * len(modules)),
    )


def _modules_shown(table: pd.DataFrame) -> list[tuple[str, str]]:
    """(generation, module) in order; of very many those furthest from what is predicted."""
    off = table.assign(_off=np.abs(np.log(np.maximum(table["ratio"].to_numpy(float), 1e-12))))
    worst = off.groupby(["generation", "module"])["_off"].max().sort_values(ascending=False, kind="stable")
    return sorted((str(generation), str(module)) for generation, module in worst.index[:MOST_MODULES])


def _reach(traces: Sequence[Trace]) -> tuple[float, float]:
    """Smallest and largest positive value along x."""
    values = [value for trace in traces for value in trace["x"] if math.isfinite(value) and value > 0]
    return min(values, default=0.1), max(values, default=1.0)


def _round_ticks(low: float, high: float) -> list[tuple[float, str]]:
    """Ticks of a logarithmic axis at 1, 2 and 5 of every decade."""
    decades = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
    values = [digit * 10.0**decade for decade in decades for digit in (1, 2, 5)]
    return [(value, f"{value:g}") for value in values if low <= value <= high]


def _error_traces(
    rows: pd.DataFrame, modules: Sequence[tuple[str, str]], generations: tuple[str, ...], where: str
) -> list[Trace]:
    rows = rows[[key in modules for key in zip(rows["generation"], rows["module"], strict=True)]]
    heights = [float(modules.index(key)) for key in zip(rows["generation"], rows["module"], strict=True)]
    lower = [height + 0.34 for height in heights]
    ends = [rows[f"predicted_{key}_mm"].tolist() for key in ("low", "high", "largest_low", "largest_high")]
    traces = [
        _bars(ends[0], ends[1], heights, palette.RAMP[3], 5.0, where),
        _bars(ends[2], ends[3], lower, palette.SOFT, 1.0, where),
    ]
    for generation, own in rows.groupby("generation", sort=True):
        style = palette.generation_style(str(generation), generations)
        places = [float(modules.index((str(generation), str(module)))) for module in own["module"]]
        links = [slugs.module_href(str(module)) for module in own["module"]]
        said = [_error_sentence(row) for row in own.to_dict("records")]
        traces.append(points(own["rms_mm"], places, style=style, text=said, links=links, axes=where))
        largest = [f"{numbers.significant(float(v), 2, 'mm')}: the largest error" for v in own["largest_mm"]]
        below = [place + 0.34 for place in places]
        traces.append(
            points(
                *(own["largest_mm"], below),
                style=style,
                open_marker=True,
                size=5,
                text=largest,
                links=links,
                axes=where,
            )
        )
    return traces


def _bars(
    low: Sequence[float],
    high: Sequence[float],
    heights: Sequence[float],
    colour: str,
    width: float,
    where: str,
) -> Trace:
    x: list[float] = []
    y: list[float] = []
    for start, end, height in zip(low, high, heights, strict=True):
        x += [float(start), float(end), math.nan]
        y += [height, height, math.nan]
    return line(x[:-1], y[:-1], colour=colour, width=width, axes=where)


def _error_sentence(row: Row) -> str:
    size = numbers.significant(float(row["rms_mm"]), 2, "mm")
    limits = numbers.limits(float(row["predicted_low_mm"]), float(row["predicted_high_mm"]), "mm")
    return f"{row['module']}: {size} observed, {limits} predicted"


def _error_caption(found: Layout) -> str:
    rows = found.by_module[
        (found.by_module["figure"] == AFTER_FIT) & (found.by_module["read_by"] == OWN_LINE)
    ]
    above = rows[rows["rms_mm"] > rows["predicted_high_mm"]]
    if rows.empty:
        return "Node errors of every module beside the limits that are predicted."
    how_many = numbers.whole(len(above)) if len(above) else "none"
    said = f"After best fit {how_many} of {numbers.count(len(rows), 'module')} "
    said += (
        f"{'is' if len(above) < 2 else 'are'} further off than calibration and known positions alone predict"
    )
    if above.empty:
        return f"{said}."
    worst = max(above.to_dict("records"), key=lambda row: float(row["ratio"]))
    size = numbers.significant(float(worst["rms_mm"]), 2, "mm")
    limits = numbers.limits(float(worst["predicted_low_mm"]), float(worst["predicted_high_mm"]), "mm")
    return f"{said}, most of all {worst['module']}: {size}, predicted {limits}."


# --- predicted against observed


def agreement_figure(found: Layout, nodes: pd.DataFrame) -> Figure | None:
    """Return observed against predicted error of every node of every module, a panel a choice of lines.

    *nodes* is :func:`campaign.analyses.layout_tables.node_table`.
    """
    if nodes.empty:
        return None
    by_node = int(nodes.groupby("read_by").size().max()) <= MOST_NODES
    table = nodes if by_node else _by_module(found)
    lines = [choice for choice in LINES if (table["read_by"] == choice).any()]
    generations = tuple(sorted(set(table["generation"].astype(str))))
    values = table[["observed_mm", "predicted_mm"]].to_numpy(float)
    least, most = 0.85 * float(values[values > 0].min(initial=1.0)), 1.15 * float(values.max())
    traces: list[Trace] = []
    for index, choice in enumerate(lines):
        where = panel(index)
        traces.append(
            line([least, most], [least, most], colour=palette.SOFT, dash="dot", width=1.2, axes=where)
        )
        for generation, rows in table[table["read_by"] == choice].groupby("generation", sort=True):
            traces.append(
                points(
                    *(rows["predicted_mm"], rows["observed_mm"]),
                    name=str(generation),
                    style=palette.generation_style(str(generation), generations),
                    size=6,
                    text=[_agreement_sentence(row) for row in rows.to_dict("records")],
                    links=[slugs.module_href(str(module)) for module in rows["module"]],
                    axes=where,
                )
            )
    heads = [f"By {line_words(choice)}" for choice in lines]
    ticks = _round_ticks(least, most)
    made = small_multiples(
        heads,
        axis("Predicted", "mm", logarithmic=True, low=least, high=most, ticks=ticks),
        axis("Observed", "mm", logarithmic=True, low=least, high=most, ticks=ticks),
        columns=2,
    )
    made["annotations"] += _generation_names(generations)
    return Figure(
        name="agreement",
        caption=_agreement_caption(table, by_node),
        alternative="Dots about a dotted line of equality: observed against predicted error, one dot a "
        f"{'node of a module' if by_node else 'module'}.",
        traces=tuple(traces),
        layout=made,
        data=table,
        note="Root mean square over the placements, after best rigid fit. Dotted: observed as predicted. "
        "Above it something is missing in the prediction.",
        height=400,
    )


def _generation_names(generations: Sequence[str]) -> list[FigureLayout]:
    """Names of generations in the corner of the first panel, in their colours with their marks."""
    if len(generations) < 2:
        return []
    made = []
    for index, generation in enumerate(generations):
        style = palette.generation_style(generation, tuple(generations))
        mark = {"circle": "●", "square": "■", "diamond": "◆", "triangle-up": "▲", "x": "✕"}[style.symbol]
        text, place = f"{mark} {generation}", 0.95 - 0.065 * index
        made.append(label(text, 0.02, place, colour=style.colour, shift=(0, 0), paper=True))
    return made


def _by_module(found: Layout) -> pd.DataFrame:
    rows = found.by_module[found.by_module["figure"] == AFTER_FIT]
    named = rows.rename(columns={"rms_mm": "observed_mm", "predicted_rms_mm": "predicted_mm"})
    columns = ["read_by", "generation", "module", "placements", "observed_mm", "predicted_mm"]
    return named[columns].assign(node="")


def _agreement_sentence(row: Row) -> str:
    observed, predicted = (
        numbers.significant(float(row[key]), 2, "mm") for key in ("observed_mm", "predicted_mm")
    )
    who = " ".join(part for part in (str(row["module"]), str(row["node"])) if part)
    return f"{who}: {observed} observed, {predicted} predicted, {row['placements']} placements"


def _agreement_caption(table: pd.DataFrame, by_node: bool) -> str:
    parts = []
    for choice in LINES:
        rows = table[table["read_by"] == choice]
        if len(rows):
            above = int((rows["observed_mm"] > rows["predicted_mm"]).sum())
            what = numbers.count(len(rows), "node" if by_node else "module")
            parts.append(f"{numbers.whole(above)} of {what} by {line_words(choice)}")
    said = f"Further off than predicted: {', '.join(parts)}"
    return f"{said}; rather less than half would be if the prediction held."


# --- edges


def edge_figure(found: Layout, generations: Sequence[str]) -> Figure | None:
    """Return errors of adjusted lengths by sensor's name, read by own lines."""
    rows = found.edges[found.edges["read_by"] == OWN_LINE].dropna(subset=["error_mm", "predicted_sd_mm"])
    if rows.empty:
        return None
    ratio = (rows["error_mm"] / rows["predicted_sd_mm"]).abs()
    every = len(rows)
    if every > MOST_LENGTHS:
        rows = rows.loc[ratio.groupby([rows["module"], rows["sensor"]]).idxmax().sort_values()]
    names = sorted(set(rows["sensor"].astype(str)), key=lambda name: (len(name), name))
    far = rows["error_mm"].abs() > FAR * rows["predicted_sd_mm"]
    named = rows["suspected"].astype(bool)
    traces: list[Trace] = []
    for index, generation in enumerate(generations):
        own = rows["generation"] == generation
        shift = 0.24 * (index - (len(generations) - 1) / 2)
        style = palette.generation_style(generation, tuple(generations))
        near = rows[own & ~far & ~named]
        heights = [names.index(str(name)) + shift for name in near["sensor"]]
        traces.append(points(near["error_mm"], heights, style=style, size=4))
        traces.append(_edge_points(rows[own & far & ~named], names, shift, style))
    traces.append(_edge_points(rows[named], names, 0.0, _CROSSED, size=11))
    ticks = [(float(i), name) for i, name in enumerate(names)]
    worst = max(rows.to_dict("records"), key=lambda row: abs(float(row["error_mm"])))
    return Figure(
        name="edges",
        caption=_edge_caption(found, worst),
        alternative="Dots, one an adjusted length of a placement: rebuilt less known length by sensor; "
        "crosses where the tests name the edge.",
        traces=tuple(trace for trace in traces if len(trace["x"])),
        layout=one_panel(
            axis("Rebuilt − known length", "mm"),
            axis("Sensor", ticks=ticks, low=-0.7, high=len(names) - 0.3, reverse=True),
            shapes=[level_line(0.0, upright=True, colour=palette.INK)],
        ),
        table="layout_edges",
        note=f"By own lines. Hollow: more than {FAR:g} predicted SDs off. Crosses: edges that the tests name."
        + ("" if every <= MOST_LENGTHS else " Each sensor by the placement where it is furthest off."),
        height=110 + 24 * len(names),
    )


_CROSSED = palette.GenerationStyle(palette.ATTENTION, "x", "solid")


def _edge_points(
    rows: pd.DataFrame, names: Sequence[str], shift: float, style: palette.GenerationStyle, size: float = 8
) -> Trace:
    records = rows.to_dict("records")
    return points(
        rows["error_mm"],
        [names.index(str(name)) + shift for name in rows["sensor"]],
        style=style,
        open_marker=style is not _CROSSED,
        size=size,
        text=[_edge_sentence(row) for row in records],
        links=[slugs.module_href(str(row["module"])) for row in records],
    )


def _edge_sentence(row: Row) -> str:
    error = numbers.measured(float(row["error_mm"]), float(row["predicted_sd_mm"]), "mm")
    return f"{row['module']} {row['sensor']}, placement {row['placement']}: {error}"


def _edge_caption(found: Layout, worst: Row) -> str:
    rows = found.edges[found.edges["read_by"] == OWN_LINE]
    rms = float(np.sqrt(np.nanmean(rows["error_mm"].to_numpy(float) ** 2)))
    error = numbers.measured(float(worst["error_mm"]), float(worst["predicted_sd_mm"]), "mm")
    return (
        f"Rebuilt lengths are off by {numbers.significant(rms, 2, 'mm')} (root mean square); furthest off is "
        f"{worst['sensor']} of {worst['module']} in placement {worst['placement']}, by {error} "
        "(standard uncertainty)."
    )
