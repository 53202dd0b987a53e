"""Drawings of rebuilt shapes beside known ones: the figure of one placement, and scripts with every other.

Known and rebuilt nodes differ by less than a line is wide, so differences and ellipses are drawn larger by a
factor that the drawing states; whether a known node lies in its ellipse is kept by that.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.analyses.layout_results import GENERATION_LINE, Placement
from campaign.analyses.layout_views import BY_DATUM, BY_FIT, FRAMES, ShapeView, shape_view
from campaign.pages import figures as drawn
from campaign.pages import numbers, palette
from campaign.pages.figures import Figure, Trace, axis, label, line, points
from campaign.pages.layout_words import (
    edge_sentence,
    known_sentence,
    node_sentence,
    placement_name,
)
from campaign.pages.palette import GenerationStyle

FloatArray = npt.NDArray[np.float64]

FACTORS = (50.0, 20.0, 10.0, 5.0, 2.0)
"""Factors by which differences and ellipses may be drawn larger, besides 1."""

_REACH = 0.16
"""Largest share of the shape's size that a difference with its ellipse may take in a drawing."""

_PANEL = (366.0, 330.0)
"""Width and height of a panel in px on the still picture."""

_PADDING = 0.14
_POINTS = 18
_BESIDE = 0.045
_KNOWN = GenerationStyle(palette.INK, "circle", "dot")
_DOUBTED = GenerationStyle(palette.ATTENTION, "x", "longdash")


@dataclass(frozen=True)
class Drawing:
    """Traces of one placement in one frame, what they are drawn larger by, and the middle and half size."""

    traces: tuple[Trace, ...]
    factor: float
    middle: tuple[float, float]
    half: tuple[float, float]


def magnification(view: ShapeView) -> float:
    """Return by how much differences and ellipses are drawn larger: a round number that keeps them apart."""
    size = float(np.nanmax(np.ptp(view.places_mm[np.isfinite(view.places_mm).all(axis=1)], axis=0)))
    sizes = np.concatenate(
        [np.linalg.norm(view.errors_mm, axis=1), view.ellipses.factor_95 * view.ellipses.semi_major_mm]
    )
    sizes = sizes[np.isfinite(sizes)]
    if not len(sizes) or sizes.max() <= 0:
        return 1.0
    return next((f for f in FACTORS if f * sizes.max() <= _REACH * size), 1.0)


@dataclass(frozen=True)
class Said:
    """What is said of the edges and the known nodes of one placement, in every frame alike."""

    edges: tuple[str, ...]
    known: tuple[str, ...]


def sentences(own: Placement) -> Said:
    """Return what is said of every edge and known node of a placement."""
    edges = (edge_sentence(own, k) for k in range(len(own.edges)))
    return Said(tuple(edges), tuple(known_sentence(own, k) for k in range(len(own.nodes))))


def draw(
    own: Placement, frame: str, style: GenerationStyle, axes: str = "", said: Said | None = None
) -> Drawing:
    """Return the drawing of one placement in one frame; without *said* a small one with no names either."""
    view = shape_view(own, frame)
    factor = magnification(view)
    places, error = view.places_mm, np.nan_to_num(view.errors_mm)
    rebuilt = np.where(np.isfinite(view.rebuilt_mm), places + factor * error, np.nan)
    outlines = factor * view.outlines(_POINTS) + rebuilt[:, None, :]
    traces = [
        _edges(view.known_mm, own, range(len(own.edges)), palette.INK, "dot", 1.2, axes),
        _rings(outlines[view.ellipses.semi_major_mm > 0], style, axes),
        *_rebuilt_edges(own, rebuilt, style, axes),
        *_middles(own, rebuilt, style, axes, said),
        *_nodes(own, view, rebuilt, style, axes, said),
        *([] if said is None else _names(own, rebuilt, axes)),
    ]
    shown = np.concatenate([places, rebuilt, outlines.reshape(-1, 2)])
    shown = shown[np.isfinite(shown).all(axis=1)]
    low, high = (shown.min(axis=0), shown.max(axis=0)) if len(shown) else (np.zeros(2), np.ones(2))
    middle, half = (low + high) / 2.0, np.maximum((high - low) / 2.0, 1e-3) * (1.0 + _PADDING)
    kept = tuple(trace for trace in traces if len(trace["x"]))
    return Drawing(kept, factor, (float(middle[0]), float(middle[1])), (float(half[0]), float(half[1])))


def _edges(
    nodes: FloatArray, own: Placement, which: Iterable[int], colour: str, dash: str, width: float, axes: str
) -> Trace:
    number = {name: k for k, name in enumerate(own.nodes)}
    gap = np.full(2, np.nan)
    way = [
        place
        for k in which
        for place in (nodes[number[own.edges[k].first]], nodes[number[own.edges[k].second]], gap)
    ]
    way = way[:-1]
    path = np.array(way).reshape(-1, 2)
    return line(path[:, 0], path[:, 1], colour=colour, dash=dash, width=width, axes=axes)


def _rings(outlines: FloatArray, style: GenerationStyle, axes: str) -> Trace:
    """The ellipses, as one line with gaps."""
    rings = outlines[np.isfinite(outlines).all(axis=(1, 2))]
    gap = np.full((len(rings), 1, 2), np.nan)
    path = np.concatenate([rings, gap], axis=1).reshape(-1, 2)[:-1]
    return line(path[:, 0], path[:, 1], colour=style.colour, width=1.0, axes=axes)


def _doubted(own: Placement) -> frozenset[str]:
    return frozenset(own.tests.blunder.sensors) if own.tests is not None else frozenset()


def _rebuilt_edges(own: Placement, rebuilt: FloatArray, style: GenerationStyle, axes: str) -> list[Trace]:
    """Edges of the rebuilt shape: read, left out, and those that the tests name."""
    doubted = [k for k, edge in enumerate(own.edges) if edge.sensor in _doubted(own)]
    read = [k for k in range(len(own.edges)) if own.used[k] and k not in doubted]
    left = [k for k in range(len(own.edges)) if not own.used[k] and k not in doubted]
    return [
        _edges(rebuilt, own, read, style.colour, "solid", 1.8, axes),
        _edges(rebuilt, own, left, palette.SOFT, "dash", 1.2, axes),
        _edges(rebuilt, own, doubted, _DOUBTED.colour, _DOUBTED.dash, 3.4, axes),
    ]


def _nodes(
    own: Placement, view: ShapeView, rebuilt: FloatArray, style: GenerationStyle, axes: str, said: Said | None
) -> list[Trace]:
    """Known nodes hollow, rebuilt ones filled and named."""
    known = np.flatnonzero(np.isfinite(view.known_mm).all(axis=1))
    solved = np.flatnonzero(np.isfinite(rebuilt).all(axis=1))
    places = points(
        *view.known_mm[known].T,
        style=_KNOWN,
        open_marker=True,
        size=5 if said is None else 8,
        text=None if said is None else [said.known[k] for k in known],
        axes=axes,
    )
    nodes = points(
        *rebuilt[solved].T,
        style=style,
        size=4 if said is None else 7,
        text=None if said is None else [node_sentence(own, view, int(k)) for k in solved],
        axes=axes,
    )
    return [places, nodes]


def _middles(
    own: Placement, rebuilt: FloatArray, style: GenerationStyle, axes: str, said: Said | None
) -> list[Trace]:
    """Marks half-way along the edges; a cross and its name on those that the tests name."""
    number = {name: k for k, name in enumerate(own.nodes)}
    middles = np.array([(rebuilt[number[e.first]] + rebuilt[number[e.second]]) / 2.0 for e in own.edges])
    seen = np.isfinite(middles).all(axis=1)
    doubted = np.array([edge.sensor in _doubted(own) for edge in own.edges])
    plain, crossed = np.flatnonzero(seen & ~doubted), np.flatnonzero(seen & doubted)
    text = None if said is None else [said.edges[k] for k in crossed]
    made = [points(*middles[crossed].T, style=_DOUBTED, size=11, text=text, axes=axes)]
    if said is not None:
        text = [said.edges[k] for k in plain]
        made.append(points(*middles[plain].T, style=style, open_marker=True, size=4, text=text, axes=axes))
    return made


def _names(own: Placement, rebuilt: FloatArray, axes: str) -> list[Trace]:
    """Names of nodes outside the shape, and of suspected edges above them."""
    solved = np.flatnonzero(np.isfinite(rebuilt).all(axis=1))
    if not len(solved):
        return []
    away = rebuilt[solved] - rebuilt[solved].mean(axis=0)
    size = float(np.ptp(rebuilt[solved], axis=0).max())
    away /= np.maximum(np.linalg.norm(away, axis=1, keepdims=True), 1e-9)
    # a text begins at its place: to the left of the shape it has to begin earlier
    nodes = rebuilt[solved] + _BESIDE * size * away - np.array((0.03 * size, 0.0))
    nodes[:, 0] -= np.where(away[:, 0] < 0, 0.03 * size, 0.0)
    number = {name: k for k, name in enumerate(own.nodes)}
    doubted = [edge for edge in own.edges if edge.sensor in _doubted(own)]
    ends = [rebuilt[[number[edge.first], number[edge.second]]] for edge in doubted]
    edges = [pair.mean(axis=0) + np.array((-0.2 * size, _BESIDE * size)) for pair in ends]
    places = np.array([*nodes, *edges])
    names = [*(own.nodes[k] for k in solved), *(f"{edge.sensor} suspected" for edge in doubted)]
    seen = np.isfinite(places).all(axis=1)
    trace = points(*places[seen].T, style=_KNOWN, axes=axes)
    texts = [drawn.plain(name) for name, kept in zip(names, seen, strict=True) if kept]
    return [trace | {"mode": "text", "textposition": "middle right", "text": texts}]


# --- one placement as a figure


def shape_figure(own: Placement, generations: Sequence[str], caption: str = "", note: str = "") -> Figure:
    """Return one placement by its datum and after best fit, both to the same scale."""
    style = palette.generation_style(own.generation, tuple(generations))
    said = sentences(own)
    panels = {frame: draw(own, frame, style, drawn.panel(i), said) for i, frame in enumerate(FRAMES)}
    scale = max(max(p.half[0] / _PANEL[0], p.half[1] / _PANEL[1]) for p in panels.values())
    made: dict[str, object] = {}
    notes = []
    for i, (frame, panel) in enumerate(panels.items()):
        suffix = drawn.panel(i)
        x, y = panel.middle
        reach = scale * _PANEL[0], scale * _PANEL[1]
        made[f"xaxis{suffix}"] = axis(
            "x",
            "mm",
            low=x - reach[0],
            high=x + reach[0],
            domain=[0.0, 0.47] if i == 0 else [0.53, 1.0],
            anchor=f"y{suffix}",
            scaleanchor=f"y{suffix}",
            scaleratio=1,
            constrain="domain",
        )
        made[f"yaxis{suffix}"] = axis(
            "y" if i == 0 else "",
            "mm" if i == 0 else "",
            low=y - reach[1],
            high=y + reach[1],
            anchor=f"x{suffix}",
            constrain="domain",
        )
        head = label("", 0, 1, axes=suffix, shift=(0, 20), paper=True)
        first, second = _head(own, frame, panel.factor)
        text = f"{drawn.plain(first)}<br>{drawn.plain(second)}"
        notes.append(head | {"text": text, "align": "left", "font": {"size": 13, "color": palette.INK}})
    return Figure(
        name="shape",
        caption=caption,
        alternative=_alternative(own),
        traces=tuple(trace for panel in panels.values() for trace in panel.traces),
        layout={**made, "annotations": notes, "margin": {"t": 48}},
        table="layout",
        note=note,
        height=430,
    )


def _head(own: Placement, frame: str, factor: float) -> tuple[str, str]:
    """Two lines above a panel: whose, in which frame, and what is drawn larger."""
    larger = f"differences ×{factor:g}" if factor > 1 else "differences to scale"
    if frame == BY_DATUM:
        return f"{own.module}, placement {own.name}", f"Datum {own.datum[0]}, {own.datum[1]}; {larger}"
    return "After the best rigid fit", larger[0].upper() + larger[1:]


def _alternative(own: Placement) -> str:
    return (
        f"Two drawings of {placement_name(own)}: the known nodes and edges dotted, the rebuilt ones solid "
        "with an ellipse about each node, once by the datum and once after the best rigid fit."
    )


# --- all placements of a module


def small_shapes(
    placements: Sequence[Placement], generations: Sequence[str], name: str, *, columns: int = 4
) -> Figure | None:
    """Return the placements of one layout trial after best fit, a panel each, to one scale."""
    shown = [own for own in placements if own.line != GENERATION_LINE]
    if not shown:
        return None
    columns = min(columns, len(shown))
    rows = -(-len(shown) // columns)
    style = palette.generation_style(shown[0].generation, tuple(generations))
    panels = [draw(own, BY_FIT, style, drawn.panel(i)) for i, own in enumerate(shown)]
    width, height = 776.0 / columns * 0.95, 150.0
    scale = max(max(2 * p.half[0] / width, 2 * p.half[1] / height) for p in panels)
    made: dict[str, object] = {}
    notes = []
    for i, (own, panel) in enumerate(zip(shown, panels, strict=True)):
        suffix, (row, column) = drawn.panel(i), divmod(i, columns)
        across, upright = scale * width / 2, scale * height / 2
        left, top = column / columns, 1.0 - row / rows
        (x, y) = panel.middle
        bare = {"showticklabels": False, "grid": False}
        made[f"xaxis{suffix}"] = axis(
            "",
            low=x - across,
            high=x + across,
            domain=[left, left + 0.95 / columns],
            anchor=f"y{suffix}",
            scaleanchor=f"y{suffix}",
            scaleratio=1,
            constrain="domain",
            **bare,  # type: ignore[arg-type]
        )
        made[f"yaxis{suffix}"] = axis(
            "",
            low=y - upright,
            high=y + upright,
            domain=[top - 0.82 / rows, top],
            anchor=f"x{suffix}",
            constrain="domain",
            **bare,  # type: ignore[arg-type]
        )
        larger = f" (×{panel.factor:g})" if panel.factor > 1 else ""
        notes.append(label(f"{own.name}{larger}", 0, 1, axes=suffix, shift=(0, 8), paper=True))
    worst = max(shown, key=lambda own: own.after_fit.rms_mm if own.after_fit is not None else -1.0)
    return Figure(
        name=name,
        caption=_small_caption(worst, len(shown)),
        alternative="One drawing a placement: known nodes and edges dotted, rebuilt ones solid, an ellipse "
        "about each node.",
        traces=tuple(trace for panel in panels for trace in panel.traces),
        layout={**made, "annotations": notes, "margin": {"l": 30, "r": 20, "t": 34, "b": 20}},
        table="layout",
        note="After best rigid fit, by own lines. Brackets: by how much differences and 95 % ellipses are "
        "drawn larger.",
        height=round(54 + rows * height / 0.82),
    )


def _small_caption(worst: Placement, count: int) -> str:
    if worst.after_fit is None:
        return f"{numbers.count(count, 'placement')}; no node error is known."
    fit = worst.after_fit
    return (
        f"{numbers.count(count, 'placement')}; furthest off is {worst.name}, by "
        f"{numbers.significant(fit.rms_mm, 2)} mm (root mean square over its nodes), where calibration "
        f"predicts {numbers.limits(fit.predicted_rms_low_mm, fit.predicted_rms_high_mm, 'mm')}."
    )
