"""The static picture of a figure: an SVG drawn from the same traces and layout as the live one.

It is what print, readers without scripts and the first moment of every page see. All looks are presentation
attributes (a lone file keeps them); ink is ``currentColor`` and every other colour is one of the palette,
which the style sheet swaps by attribute in the dark scheme. Coordinates are whole tenths of a pixel
(:mod:`campaign.pages.static_strokes`); neighbours that look alike are one path.
"""

from __future__ import annotations

import html
import math
import re
from collections import Counter
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np

from campaign.pages import palette
from campaign.pages.drawing import axis_names, axis_of
from campaign.pages.figures import WIDTH, Figure, Layout, Trace
from campaign.pages.legible import legible
from campaign.pages.static_strokes import (
    CAPS,
    STROKES,
    TENTHS,
    Floats,
    curve,
    markers,
    outline,
    rectangle,
    segment,
    segments,
    tenths,
)
from campaign.pages.ticks import linear_ticks, logarithmic_ticks

DASHES = {
    "dash": "70 40",
    "dot": "15 30",
    "dashdot": "70 30 15 30",
    "longdash": "120 40",
    "longdashdot": "120 30 15 30",
}
"""Dashes in tenths of a pixel, by the plot library's names."""
_TEXT_SIZE = 12
_TEXTS_WITH_ROOM = 90, 42
"""Pixels that a tick's text takes across and upright, with the room around it."""
_OVER_THE_EDGE = 5.0
"""Pixels by which curves and markers may stand over the edge of their panel."""

Piece = tuple[str, str]
"""A path and its looks: ``('stroke="#0072B2" fill="none"', "M0 0l5 5")``."""


@dataclass(frozen=True)
class Panel:
    """One pair of axes on the picture: pixel ends of x and y, their ranges, and which are logarithmic."""

    x_axis: Layout
    y_axis: Layout
    left: float
    right: float
    top: float
    bottom: float

    def across(self, values: Any) -> Floats:
        """Return the pixels of x values in data units (NaN where one has none)."""
        return _places(values, self.x_axis, self.left, self.right)

    def upright(self, values: Any) -> Floats:
        """Return the pixels of y values in data units (NaN where one has none)."""
        return _places(values, self.y_axis, self.bottom, self.top)

    def holds(self, x: Floats, y: Floats, room: float) -> bool:
        """Return whether all places (but those that are not numbers) lie within the panel and its *room*."""
        return _lies_within(x, self.left - room, self.right + room) and _lies_within(
            y, self.top - room, self.bottom + room
        )


def _lies_within(places: Floats, low: float, high: float) -> bool:
    """Return whether no place lies below *low* or above *high*; those that are not numbers do not count."""
    if not places.size:
        return True
    return not (np.fmin.reduce(places) < low or np.fmax.reduce(places) > high)


def static_svg(figure: Figure, width: int = WIDTH) -> str:
    """Return the SVG of *figure*, which must be ready to be drawn (:func:`campaign.pages.drawing.ready`)."""
    return (
        f'<svg viewBox="0 0 {TENTHS * width} {TENTHS * figure.height}" width="{width}" '
        f'height="{figure.height}" role="img" aria-label="{_escaped(figure.alternative)}" '
        f'font-size="{TENTHS * _TEXT_SIZE}" fill="none" stroke-width="{TENTHS}" stroke-linejoin="round">'
        f"{drawn_content(figure, width)}</svg>"
    )


def drawn_content(figure: Figure, width: int) -> str:
    """Return what stands within the SVG of *figure*, *width* pixels wide."""
    panels = _panels(figure, width)
    shapes = figure.layout.get("shapes", ())
    parts = [
        _all_axes(list(panels.values())),
        *_shapes([shape for shape in shapes if shape.get("layer") == "below"], panels),
        *_all_traces(figure, panels),
        *_shapes([shape for shape in shapes if shape.get("layer") != "below"], panels),
    ]
    notes = "".join(_annotation(note, panels) for note in figure.layout.get("annotations", ()))
    if "title" in figure.layout:
        notes += _mark(figure.layout["title"], width, figure.height)
    return "".join(parts) + (f'<g fill="currentColor">{notes}</g>' if notes else "")


def _panels(figure: Figure, width: int) -> dict[str, Panel]:
    """Return the panels by the suffix of their x axis and y axis: ``"x|y"``, ``"x2|y2"``."""
    layout, margin = figure.layout, figure.layout["margin"]
    inner_width, inner_height = width - margin["l"] - margin["r"], figure.height - margin["t"] - margin["b"]
    made = {}
    for key in axis_names(layout):
        if not key.startswith("x"):
            continue
        x_axis = layout[key]
        y_key = _axis_key(x_axis.get("anchor", "y"), "y")
        y_axis = layout[y_key]
        x0, x1 = x_axis.get("domain", (0.0, 1.0))
        y0, y1 = y_axis.get("domain", (0.0, 1.0))
        made[f"{key}|{y_key}"] = Panel(
            x_axis,
            y_axis,
            margin["l"] + x0 * inner_width,
            margin["l"] + x1 * inner_width,
            margin["t"] + (1 - y1) * inner_height,
            margin["t"] + (1 - y0) * inner_height,
        )
    return made


def _mark(title: Layout, width: int, height: int) -> str:
    """Words in the lower right corner (:func:`campaign.pages.drawing.marked`)."""
    font, pad = title["font"], title["pad"]
    return _text(
        title["text"],
        width - pad["r"],
        height - pad["b"],
        anchor="end",
        size=font["size"],
        colour=font["color"],
    )


def _axis_key(reference: str, letter: str) -> str:
    return f"{letter}axis{reference[1:]}"


def _places(values: Any, axis: Layout, start: float, end: float) -> Floats:
    array = np.array(values, dtype=float)
    if axis.get("type") == "log":
        array = np.log10(array, where=array > 0, out=np.full(array.shape, np.nan))
    low, high = axis["range"]
    placed: Floats = start + (array - low) * ((end - start) / (high - low))
    return placed


def _place(value: float, axis: Layout, start: float, end: float) -> float:
    return float(_places(value, axis, start, end))


def _from_axis(value: float, axis: Layout, start: float, end: float) -> float:
    low, high = axis["range"]
    return float(start + (value - low) / (high - low) * (end - start))


# Axes.


def _all_axes(panels: Sequence[Panel]) -> str:
    """Return grids, base lines, ticks' texts and titles of all panels."""
    grid, labels = "", ""
    for panel in panels:
        x_ticks = _ticks(panel.x_axis, abs(panel.right - panel.left) / _TEXTS_WITH_ROOM[0])
        y_ticks = _ticks(panel.y_axis, abs(panel.bottom - panel.top) / _TEXTS_WITH_ROOM[1])
        xs = [(_from_axis(v, panel.x_axis, panel.left, panel.right), text) for v, text in x_ticks]
        ys = [(_from_axis(v, panel.y_axis, panel.bottom, panel.top), text) for v, text in y_ticks]
        grid += _grid(panel, xs, ys)
        labels += _tick_labels(panel, xs, ys) + _axis_titles(panel)
    base = "".join(segment(p.left, p.bottom, p.right, p.bottom) for p in panels)
    drawn = f'<path d="{grid}" stroke="{palette.RULE}"/>' if grid else ""
    return drawn + f'<path d="{base}" stroke="{palette.SOFT}"/>{labels}'


def _grid(panel: Panel, xs: Sequence[tuple[float, str]], ys: Sequence[tuple[float, str]]) -> str:
    path = ""
    if panel.x_axis.get("showgrid", True):
        path += "".join(segment(x, panel.top, x, panel.bottom) for x, _ in xs)
    if panel.y_axis.get("showgrid", True):
        path += "".join(segment(panel.left, y, panel.right, y) for y, _ in ys)
    return path


def _tick_labels(panel: Panel, xs: Sequence[tuple[float, str]], ys: Sequence[tuple[float, str]]) -> str:
    made = ""
    if xs and panel.x_axis.get("showticklabels", True):
        lower = _STAGGER if _names_meet(panel, xs) else 0
        texts = "".join(
            _text(words, x, panel.bottom + 17 + lower * (k % 2)) for k, (x, words) in enumerate(xs)
        )
        made += f'<g fill="{palette.SOFT}" text-anchor="middle">{texts}</g>'
    if ys and panel.y_axis.get("showticklabels", True):
        texts = "".join(_text(words, panel.left - 8, y + 4) for y, words in ys)
        made += f'<g fill="{palette.SOFT}" text-anchor="end">{texts}</g>'
    return made


_STAGGER = 13
"""How much lower every second name stands where names along x would meet, in pixels."""


def _names_meet(panel: Panel, xs: Sequence[tuple[float, str]]) -> bool:
    """Return whether names along x meet, and no title stands below them."""
    if "ticktext" not in panel.x_axis or panel.x_axis.get("title", {}).get("text"):
        return False
    pairs = pairwise(xs)
    return any(abs(b - a) < 2.9 * (len(one) + len(other)) for (a, one), (b, other) in pairs)


def _axis_titles(panel: Panel) -> str:
    x_title = panel.x_axis.get("title", {}).get("text", "")
    y_title = panel.y_axis.get("title", {}).get("text", "")
    made = ""
    if x_title:
        made += _text(x_title, (panel.left + panel.right) / 2, panel.bottom + 40, anchor="middle", size=13)
    if y_title:
        x, y = panel.left - panel.y_axis.get("title", {}).get("standoff", 46), (panel.top + panel.bottom) / 2
        made += _text(y_title, x, y, anchor="middle", size=13, turn=-90)
    return f'<g fill="currentColor">{made}</g>' if made else ""


def _ticks(axis: Layout, about: float) -> list[tuple[float, str]]:
    low, high = sorted(axis["range"])
    if "tickvals" in axis:
        texts = axis.get("ticktext") or [f"{v:g}" for v in axis["tickvals"]]
        logarithmic = axis.get("type") == "log"
        places = [math.log10(v) if logarithmic else v for v in axis["tickvals"]]
        return [(p, t) for p, t in zip(places, texts, strict=True) if low - 1e-9 <= p <= high + 1e-9]
    if axis.get("type") == "log":
        return logarithmic_ticks(low, high)
    return linear_ticks(low, high, max(3, round(about)))


# Traces.


@dataclass(frozen=True)
class DrawnTrace:
    """What one trace draws: paths with their looks, texts, its opacity, and whether all lies within."""

    pieces: tuple[Piece, ...]
    texts: str = ""
    opacity: float = 1.0
    within: bool = True


def _all_traces(figure: Figure, panels: Mapping[str, Panel]) -> Iterator[str]:
    """Return the traces of all panels; panels that something reaches out of are cut off at their edges."""
    shown: dict[str, list[Trace]] = {key: [] for key in panels}
    for trace in figure.traces:
        key = f"{axis_of(trace, 'x')}|{axis_of(trace, 'y')}"
        if key in shown and trace.get("visible", True) is True:
            shown[key].append(trace)
    whole: list[list[DrawnTrace]] = []
    for key, panel in panels.items():
        drawn = [_bar_trace(t, panel) if t["type"] == "bar" else _scatter_trace(t, panel) for t in shown[key]]
        if all(trace.within for trace in drawn):
            whole.append(drawn)
        else:
            yield _cut_off(f"clip-{figure.name}-{key.replace('|', '-')}", panel, _joined([drawn]))
    yield _joined(whole)


def _cut_off(name: str, panel: Panel, content: str) -> str:
    room = _OVER_THE_EDGE
    path = rectangle(panel.left - room, panel.right + room, panel.top - room, panel.bottom + room)
    return f'<clipPath id="{name}"><path d="{path}"/></clipPath><g clip-path="url(#{name})">{content}</g>'


def _joined(panels: Iterable[Iterable[DrawnTrace]]) -> str:
    """Join paths that look alike, each where its like is first drawn.

    Paths that are seen through are joined over different panels only: within one they would no longer add up.
    """
    paths: dict[tuple[str, int], list[str]] = {}
    texts = ""
    for panel in panels:
        seen_through: Counter[str] = Counter()
        for trace in panel:
            texts += trace.texts
            for looks, path in trace.pieces:
                own = looks
                if trace.opacity != 1:
                    own = f'{looks} opacity="{trace.opacity:g}"'
                    seen_through[own] += 1
                paths.setdefault((own, seen_through[own]), []).append(path)
    drawn = "".join(f'<path d="{"".join(parts)}" {looks}/>' for (looks, _), parts in paths.items())
    return drawn + (f'<g fill="currentColor">{texts}</g>' if texts else "")


def _scatter_trace(trace: Trace, panel: Panel) -> DrawnTrace:
    x, y = panel.across(trace["x"]), panel.upright(trace["y"])
    mode = trace.get("mode", "lines")
    pieces: list[Piece] = []
    if trace.get("fill") == "toself":
        fill = f'fill="{_paint(trace.get("fillcolor", palette.INK))}"'
        pieces.append((fill, outline(x, y)))
    elif "lines" in mode:
        pieces += _curve(x, y, trace)
    bars, within = _error_bars(trace, panel)
    pieces += bars
    if "markers" in mode:
        pieces += _markers(x, y, trace)
    texts = ""
    if "text" in mode:
        named = zip(trace["text"], x.tolist(), y.tolist(), strict=True)
        texts = "".join(
            _text(t, across + 6, upright + 4) for t, across, upright in named if _seen(across, upright)
        )
    return DrawnTrace(
        tuple((looks, path) for looks, path in pieces if path),
        texts,
        trace.get("opacity", 1),
        within and panel.holds(x, y, 1.0),
    )


def _curve(x: Floats, y: Floats, trace: Trace) -> list[Piece]:
    drawn = trace.get("line", {})
    if drawn.get("width", 1.5) == 0:
        return []
    looks = _line_looks({"color": palette.INK, "width": 1.5, **drawn})
    return [(looks, curve(x, y, drawn.get("shape", "linear")))]


def _error_bars(trace: Trace, panel: Panel) -> tuple[list[Piece], bool]:
    """Return the bars of a trace along x and along y, and whether they end within the panel."""
    pieces, within = [], True
    for letter in ("x", "y"):
        error = trace.get(f"error_{letter}")
        if not error:
            continue
        ends = _bar_ends(trace, error, panel, letter)
        looks = _line_looks({"color": error.get("color", palette.INK), "width": error.get("thickness", 1.4)})
        pieces.append((looks, segments(*ends)))
        within &= panel.holds(ends[0], ends[1], 1.0) and panel.holds(ends[2], ends[3], 1.0)
    return pieces, within


def _bar_ends(
    trace: Trace, error: dict[str, Any], panel: Panel, letter: str
) -> tuple[Floats, Floats, Floats, Floats]:
    x, y = np.array(trace["x"], dtype=float), np.array(trace["y"], dtype=float)
    up = np.array(error["array"], dtype=float)
    down = np.array(error.get("arrayminus", error["array"]), dtype=float)
    if letter == "x":
        level = panel.upright(y)
        return panel.across(x - down), level, panel.across(x + up), level
    place = panel.across(x)
    return place, panel.upright(y - down), place, panel.upright(y + up)


def _markers(x: Floats, y: Floats, trace: Trace) -> list[Piece]:
    marker = trace.get("marker", {})
    symbols, sizes = marker.get("symbol", "circle"), marker.get("size", 7)
    colours = marker.get("color", palette.INK)
    if not any(isinstance(value, list) for value in (symbols, sizes, colours)):
        return [(_marker_looks(symbols, colours, sizes), markers(symbols, x, y, sizes))]
    kinds: dict[tuple[str, str, float], list[int]] = {}
    for i in range(len(x)):
        kinds.setdefault((_each(symbols, i), _each(colours, i), _each(sizes, i)), []).append(i)
    return [(_marker_looks(*kind), markers(kind[0], x[at], y[at], kind[2])) for kind, at in kinds.items()]


def _marker_looks(symbol: str, colour: str, size: float) -> str:
    paint = _paint(colour)
    if symbol in CAPS:
        cap, share = CAPS[symbol]
        return f'stroke="{paint}" stroke-width="{tenths(size * share)}" stroke-linecap="{cap}"'
    if symbol.endswith("-open") or symbol in STROKES:
        return f'stroke="{paint}" stroke-width="15"'
    return f'fill="{paint}"'


def _each(values: Any, index: int) -> Any:
    return values[index] if isinstance(values, list) else values


def _bar_trace(trace: Trace, panel: Panel) -> DrawnTrace:
    lying = trace.get("orientation") == "h"
    places, sizes = (trace["y"], trace["x"]) if lying else (trace["x"], trace["y"])
    widths, bases = trace.get("width", 0.8), trace.get("base", 0.0)
    colours = trace.get("marker", {}).get("color", palette.RAMP[6])
    along, across = (panel.upright, panel.across) if lying else (panel.across, panel.upright)
    place, size = np.array(places, dtype=float), np.array(sizes, dtype=float)
    half, base = np.array(widths, dtype=float) / 2, np.array(bases, dtype=float)
    feet = np.column_stack([along(place - half), along(place + half)])
    ends = np.column_stack([across(base + 0 * size), across(base + size)])
    x, y = (ends, feet) if lying else (feet, ends)
    paths: dict[str, list[str]] = {}
    for i in np.flatnonzero(np.isfinite(x).all(axis=1) & np.isfinite(y).all(axis=1)).tolist():
        shape = rectangle(*sorted(x[i].tolist()), *sorted(y[i].tolist()))
        paths.setdefault(_paint(_each(colours, i)), []).append(shape)
    bars, within = _error_bars(trace, panel)
    pieces = [(f'fill="{paint}"', "".join(shapes)) for paint, shapes in paths.items()] + bars
    held = within and panel.holds(x.ravel(), y.ravel(), 1.0)
    return DrawnTrace(tuple(pieces), opacity=trace.get("opacity", 1), within=held)


# Shapes and labels.


def _shapes(shapes: Iterable[Layout], panels: dict[str, Panel]) -> list[str]:
    """Return level lines and areas, lines that look alike as one path."""
    lines: dict[str, str] = {}
    areas = []
    for shape in shapes:
        panel = _panel_of(shape, panels)
        x0, x1 = (_referred(shape[k], shape["xref"], panel, "x", _place) for k in ("x0", "x1"))
        y0, y1 = (_referred(shape[k], shape["yref"], panel, "y", _place) for k in ("y0", "y1"))
        if not _seen(x0, y0, x1, y1):
            continue
        if shape["type"] == "rect":
            path = rectangle(*sorted((x0, x1)), *sorted((y0, y1)))
            paint = _paint(shape.get("fillcolor", palette.RULE))
            areas.append(f'<path d="{path}" fill="{paint}" opacity="{shape.get("opacity", 0.5):g}"/>')
        else:
            looks = _line_looks(shape.get("line", {}))
            lines[looks] = lines.get(looks, "") + segment(x0, y0, x1, y1)
    return areas + [f'<path d="{path}" {looks}/>' for looks, path in lines.items()]


def _line_looks(drawn: Mapping[str, Any]) -> str:
    width, dash = drawn.get("width", 1), DASHES.get(drawn.get("dash", "solid"))
    looks = f'stroke="{_paint(drawn.get("color", palette.SOFT))}"'
    looks += f' stroke-width="{tenths(width)}"' if width != 1 else ""
    return looks + (f' stroke-dasharray="{dash}"' if dash else "")


def _annotation(note: Layout, panels: dict[str, Panel]) -> str:
    panel = _panel_of(note, panels)
    x = _referred(note["x"], note.get("xref", "x"), panel, "x", _from_axis) + note.get("xshift", 0)
    y = _referred(note["y"], note.get("yref", "y"), panel, "y", _from_axis) - note.get("yshift", 0)
    if not _seen(x, y):
        return ""
    anchor = {"left": "start", "right": "end"}.get(note.get("xanchor", "left"), "middle")
    drop = {"top": 10, "bottom": -3}.get(note.get("yanchor", "middle"), 4)
    font = note.get("font", {})
    return _text(
        note["text"],
        x,
        y + drop,
        anchor=anchor,
        size=font.get("size", 12),
        colour=font.get("color", palette.INK),
    )


def _panel_of(placed: Layout, panels: dict[str, Panel]) -> Panel:
    x_key = _axis_key(placed.get("xref", "x").split(" ")[0], "x")
    return next((p for key, p in panels.items() if key.split("|")[0] == x_key), next(iter(panels.values())))


def _referred(
    value: float,
    reference: str,
    panel: Panel,
    letter: str,
    place: Callable[[float, Layout, float, float], float],
) -> float:
    """Return a pixel; *place* takes data values (shapes) or exponents of a logarithmic axis (notes)."""
    start, end = (panel.left, panel.right) if letter == "x" else (panel.bottom, panel.top)
    if reference.endswith("domain") or reference == "paper":
        return start + value * (end - start)
    return place(value, panel.x_axis if letter == "x" else panel.y_axis, start, end)


def _text(
    words: str,
    x: float,
    y: float,
    *,
    anchor: str = "start",
    size: float = _TEXT_SIZE,
    colour: str = palette.INK,
    turn: float = 0,
) -> str:
    lines = re.split(r"<br\s*/?>", words) if "<" in words else [words]
    shown = [_escaped(html.unescape(re.sub(r"</?(?:b|i|sub|sup)>", "", line))) for line in lines]
    place = f'x="{tenths(x)}" y="{tenths(y)}"'
    looks = f' transform="rotate({turn:g} {tenths(x)} {tenths(y)})"' if turn else ""
    looks += f' text-anchor="{anchor}"' if anchor != "start" else ""
    looks += f' font-size="{tenths(size)}"' if size != _TEXT_SIZE else ""
    paint = _paint(colour)
    looks += f' fill="{paint}"' if paint != "currentColor" else ""
    spans = [shown[0]] + [f'<tspan x="{tenths(x)}" dy="1.25em">{line}</tspan>' for line in shown[1:]]
    return f"<text {place}{looks}>{''.join(spans)}</text>"


def _paint(colour: str) -> str:
    return "currentColor" if colour == palette.INK else colour


def _seen(*places: float) -> bool:
    return all(math.isfinite(place) for place in places)


def _escaped(text: str) -> str:
    return html.escape(legible(text), quote=True)
