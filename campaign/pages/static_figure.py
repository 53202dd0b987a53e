"""The static picture of a figure: an SVG drawn from the same traces and layout as the live one.

It is what print, readers without scripts and the first moment of every page see. All looks are presentation
attributes (a lone file keeps them); ink is ``currentColor`` and every other colour is one of the palette,
which the style sheet swaps by attribute in the dark scheme.
"""

from __future__ import annotations

import html
import math
import re
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from typing import Any

from campaign.pages import palette
from campaign.pages.drawing import axis_names, axis_of
from campaign.pages.figures import WIDTH, Figure, Layout, Trace
from campaign.pages.ticks import linear_ticks, logarithmic_ticks

DASHES = {
    "dash": "7 4",
    "dot": "1.5 3",
    "dashdot": "7 3 1.5 3",
    "longdash": "12 4",
    "longdashdot": "12 3 1.5 3",
}
_TEXT_SIZE = 12
_TICK_LABEL_WIDTH = 58


@dataclass(frozen=True)
class Panel:
    """One pair of axes on the picture: pixel ends of x and y, their ranges, and which are logarithmic."""

    x_axis: Layout
    y_axis: Layout
    left: float
    right: float
    top: float
    bottom: float

    def across(self, value: float | None) -> float:
        """Return the pixel of an x value in data units (NaN where it has none)."""
        return _place(value, self.x_axis, self.left, self.right)

    def upright(self, value: float | None) -> float:
        """Return the pixel of a y value in data units (NaN where it has none)."""
        return _place(value, self.y_axis, self.bottom, self.top)


def static_svg(figure: Figure, width: int = WIDTH) -> str:
    """Return the SVG of *figure*, which must be ready to be drawn (:func:`campaign.pages.drawing.ready`)."""
    panels = _panels(figure, width)
    clips = [_clip(figure, key, panel) for key, panel in panels.items()]
    parts = [_axes(panel) for panel in panels.values()]
    shapes = figure.layout.get("shapes", ())
    parts += [_shape(shape, panels) for shape in shapes if shape.get("layer") == "below"]
    parts += [_clipped(figure, key, _traces(figure, key, panel)) for key, panel in panels.items()]
    parts += [_shape(shape, panels) for shape in shapes if shape.get("layer") != "below"]
    parts += [_annotation(note, panels) for note in figure.layout.get("annotations", ())]
    parts += [_mark(figure.layout["title"], width, figure.height)] if "title" in figure.layout else []
    size = f'viewBox="0 0 {width} {figure.height}" width="{width}" height="{figure.height}"'
    alternative = _escaped(figure.alternative)
    return (
        f'<svg xmlns="http://www.w3.org/2000/svg" {size} role="img" aria-label="{alternative}" '
        f'font-size="{_TEXT_SIZE}" fill="currentColor"><defs>{"".join(clips)}</defs>{"".join(parts)}</svg>'
    )


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


def _place(value: float | None, axis: Layout, start: float, end: float) -> float:
    if value is None or not math.isfinite(value):
        return math.nan
    if axis.get("type") == "log":
        if value <= 0:
            return math.nan
        value = math.log10(value)
    low, high = axis["range"]
    return float(start + (value - low) / (high - low) * (end - start))


def _axes(panel: Panel) -> str:
    x_ticks = _ticks(panel.x_axis, abs(panel.right - panel.left) / 90)
    y_ticks = _ticks(panel.y_axis, abs(panel.bottom - panel.top) / 42)
    xs = [(_from_axis(v, panel.x_axis, panel.left, panel.right), text) for v, text in x_ticks]
    ys = [(_from_axis(v, panel.y_axis, panel.bottom, panel.top), text) for v, text in y_ticks]
    base = _line(panel.left, panel.bottom, panel.right, panel.bottom, palette.SOFT)
    return _grid(panel, xs, ys) + base + _tick_labels(panel, xs, ys) + _axis_titles(panel)


def _grid(panel: Panel, xs: Sequence[tuple[float, str]], ys: Sequence[tuple[float, str]]) -> str:
    path = ""
    if panel.x_axis.get("showgrid", True):
        path += "".join(_segment(x, panel.top, x, panel.bottom) for x, _ in xs)
    if panel.y_axis.get("showgrid", True):
        path += "".join(_segment(panel.left, y, panel.right, y) for y, _ in ys)
    return f'<path d="{path}" stroke="{palette.RULE}"/>' if path else ""


def _tick_labels(panel: Panel, xs: Sequence[tuple[float, str]], ys: Sequence[tuple[float, str]]) -> str:
    made = ""
    if xs and panel.x_axis.get("showticklabels", True):
        texts = "".join(_text(words, x, panel.bottom + 17) for x, words in xs)
        made += f'<g fill="{palette.SOFT}" text-anchor="middle">{texts}</g>'
    if ys and panel.y_axis.get("showticklabels", True):
        texts = "".join(_text(words, panel.left - 8, y + 4) for y, words in ys)
        made += f'<g fill="{palette.SOFT}" text-anchor="end">{texts}</g>'
    return made


def _axis_titles(panel: Panel) -> str:
    x_title = panel.x_axis.get("title", {}).get("text", "")
    y_title = panel.y_axis.get("title", {}).get("text", "")
    made = ""
    if x_title:
        made += _text(x_title, (panel.left + panel.right) / 2, panel.bottom + 40, anchor="middle", size=13)
    if y_title:
        x, y = panel.left - panel.y_axis.get("title", {}).get("standoff", 46), (panel.top + panel.bottom) / 2
        made += _text(y_title, x, y, anchor="middle", size=13, turn=-90)
    return made


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


def _from_axis(value: float, axis: Layout, start: float, end: float) -> float:
    low, high = axis["range"]
    return float(start + (value - low) / (high - low) * (end - start))


def _clip(figure: Figure, key: str, panel: Panel) -> str:
    place = f'x="{_px(panel.left - 5)}" y="{_px(panel.top - 5)}"'
    size = f'width="{_px(panel.right - panel.left + 10)}" height="{_px(panel.bottom - panel.top + 10)}"'
    return f'<clipPath id="{_clip_id(figure, key)}"><rect {place} {size}/></clipPath>'


def _clip_id(figure: Figure, key: str) -> str:
    return f"clip-{figure.name}-{key.replace('|', '-')}"


def _clipped(figure: Figure, key: str, content: str) -> str:
    return f'<g clip-path="url(#{_clip_id(figure, key)})">{content}</g>' if content else ""


def _traces(figure: Figure, key: str, panel: Panel) -> str:
    own = [
        t
        for t in figure.traces
        if f"{axis_of(t, 'x')}|{axis_of(t, 'y')}" == key and t.get("visible", True) is True
    ]
    drawn = (_bar_trace(t, panel) if t["type"] == "bar" else _scatter_trace(t, panel) for t in own)
    return "".join(_joined(drawn))


_STROKE = re.compile(r'<path d="([^"]*)"( fill="none" stroke=[^>]*)/>')


def _joined(drawn: Iterable[str]) -> Iterator[str]:
    """Join neighbouring traces that are one stroked path each and look alike: the picture stays the same."""
    strokes, looks = "", ""
    for content in drawn:
        stroke = _STROKE.fullmatch(content)
        if strokes and (stroke is None or stroke[2] != looks):
            yield f'<path d="{strokes}"{looks}/>'
            strokes = ""
        if stroke is None:
            yield content
        else:
            strokes, looks = strokes + stroke[1], stroke[2]
    if strokes:
        yield f'<path d="{strokes}"{looks}/>'


def _scatter_trace(trace: Trace, panel: Panel) -> str:
    places = [(panel.across(x), panel.upright(y)) for x, y in zip(trace["x"], trace["y"], strict=True)]
    mode = trace.get("mode", "lines")
    parts = []
    if trace.get("fill") == "toself":
        parts.append(_area(places, trace))
    elif "lines" in mode:
        parts.append(_curve(places, trace))
    parts.append(_error_bars(trace, panel))
    if "markers" in mode:
        parts.append(_markers(places, trace))
    if "text" in mode:
        parts += [
            _text(t, x + 6, y + 4) for t, (x, y) in zip(trace["text"], places, strict=True) if _seen(x, y)
        ]
    content = "".join(parts)
    opacity = trace.get("opacity", 1)
    return f'<g opacity="{opacity:g}">{content}</g>' if opacity != 1 and content else content


def _curve(places: list[tuple[float, float]], trace: Trace) -> str:
    drawn = trace.get("line", {})
    if drawn.get("width", 1.5) == 0:
        return ""
    path = _path(places, drawn.get("shape", "linear"))
    dash = DASHES.get(drawn.get("dash", "solid"))
    dashes = f' stroke-dasharray="{dash}"' if dash else ""
    paint, width = _paint(drawn.get("color", palette.INK)), drawn.get("width", 1.5)
    looks = f'stroke="{paint}" stroke-width="{width:g}"{dashes}'
    return f'<path d="{path}" fill="none" {looks} stroke-linejoin="round"/>' if path else ""


def _path(places: Iterable[tuple[float, float]], shape: str) -> str:
    """Return a path by relative steps, which are shorter; they add up to the rounded places exactly."""
    parts: list[str] = []
    last: tuple[int, int] | None = None
    for x, y in places:
        if not _seen(x, y):
            last = None
            continue
        across, upright = round(10 * x), round(10 * y)
        if last is None:
            parts.append(f"M{_px(across / 10)} {_px(upright / 10)}")
        else:
            right, down = _px((across - last[0]) / 10), _px((upright - last[1]) / 10)
            parts.append(f"h{right}v{down}" if shape == "hv" else f"l{right} {down}".replace(" -", "-"))
        last = across, upright
    return "".join(parts)


def _area(places: list[tuple[float, float]], trace: Trace) -> str:
    path = _path(places, "linear")
    return (
        f'<path d="{path}Z" fill="{_paint(trace.get("fillcolor", palette.INK))}" stroke="none"/>'
        if path
        else ""
    )


def _error_bars(trace: Trace, panel: Panel) -> str:
    return _bars_along(trace, panel, "x") + _bars_along(trace, panel, "y")


def _bars_along(trace: Trace, panel: Panel, letter: str) -> str:
    error = trace.get(f"error_{letter}")
    if not error:
        return ""
    ups, downs = error["array"], error.get("arrayminus", error["array"])
    segments = []
    for x, y, up, down in zip(trace["x"], trace["y"], ups, downs, strict=True):
        if None in (x, y, up, down):
            continue
        if letter == "x":
            ends = panel.across(x - down), panel.upright(y), panel.across(x + up), panel.upright(y)
        else:
            ends = panel.across(x), panel.upright(y - down), panel.across(x), panel.upright(y + up)
        if _seen(*ends):
            segments.append(_segment(*ends))
    looks = (
        f'stroke="{_paint(error.get("color", palette.INK))}" stroke-width="{error.get("thickness", 1.4):g}"'
    )
    return f'<path d="{"".join(segments)}" fill="none" {looks}/>' if segments else ""


def _markers(places: list[tuple[float, float]], trace: Trace) -> str:
    marker = trace.get("marker", {})
    symbols, sizes = marker.get("symbol", "circle"), marker.get("size", 7)
    colours = marker.get("color", palette.INK)
    seen = [i for i, place in enumerate(places) if _seen(*place)]
    if not any(isinstance(value, list) for value in (symbols, sizes, colours)):
        outlines = "".join(_symbol(symbols, *places[i], sizes / 2) for i in seen)
        return _painted_symbol(outlines, colours, symbols, sizes) if outlines else ""
    return "".join(
        _one_marker(places[i], _each(symbols, i), _each(sizes, i), _each(colours, i)) for i in seen
    )


def _one_marker(place: tuple[float, float], symbol: str, size: float, colour: str) -> str:
    return _painted_symbol(_symbol(symbol, *place, size / 2), colour, symbol, size)


def _each(values: Any, index: int) -> Any:
    return values[index] if isinstance(values, list) else values


def _painted_symbol(outline: str, colour: str, symbol: str, size: float) -> str:
    """Return outlines of *symbol* as one path: dots as caps of lines without length, else shapes."""
    paint = _paint(colour)
    if symbol in _CAPS:
        cap, share = _CAPS[symbol]
        looks = f'stroke-width="{_px(size * share)}" stroke-linecap="{cap}"'
        return f'<path d="{outline}" fill="none" stroke="{paint}" {looks}/>'
    if symbol.endswith("-open") or symbol in _STROKES:
        return f'<path d="{outline}" fill="none" stroke="{paint}" stroke-width="1.5"/>'
    return f'<path d="{outline}" fill="{paint}"/>'


def _symbol(symbol: str, x: float, y: float, r: float) -> str:
    """Return the outline of one marker around (x, y), by relative steps to keep it short."""
    if symbol in _CAPS:
        return f"M{_px(x)} {_px(y)}h0"
    return _SYMBOLS.get(symbol.removesuffix("-open"), _circle)(x, y, r)


def _circle(x: float, y: float, r: float) -> str:
    arc = f"a{_px(r)} {_px(r)} 0 1 0 "
    return f"M{_px(x - r)} {_px(y)}{arc}{_px(2 * r)} 0{arc}{_px(-2 * r)} 0"


def _square(x: float, y: float, r: float) -> str:
    side = 1.8 * r
    return f"M{_px(x - side / 2)} {_px(y - side / 2)}h{_px(side)}v{_px(side)}h{_px(-side)}z"


def _diamond(x: float, y: float, r: float) -> str:
    h = 1.25 * r
    return f"M{_px(x)} {_px(y - h)}" + _steps((h, h), (-h, h), (-h, -h)) + "z"


def _triangle(x: float, y: float, r: float) -> str:
    h = 1.15 * r
    return f"M{_px(x)} {_px(y - h)}" + _steps((0.9 * h, 1.7 * h), (-1.8 * h, 0)) + "z"


def _triangle_down(x: float, y: float, r: float) -> str:
    h = 1.15 * r
    return f"M{_px(x)} {_px(y + h)}" + _steps((0.9 * h, -1.7 * h), (-1.8 * h, 0)) + "z"


def _saltire(x: float, y: float, r: float) -> str:
    return (
        f"M{_px(x - r)} {_px(y - r)}" + _steps((2 * r, 2 * r)) + f"m{_px(-2 * r)} 0" + _steps((2 * r, -2 * r))
    )


def _cross(x: float, y: float, r: float) -> str:
    return f"M{_px(x - r)} {_px(y)}h{_px(2 * r)}m{_px(-r)} {_px(-r)}v{_px(2 * r)}"


def _upright_tick(x: float, y: float, r: float) -> str:
    return f"M{_px(x)} {_px(y - r)}v{_px(2 * r)}"


def _level_tick(x: float, y: float, r: float) -> str:
    return f"M{_px(x - r)} {_px(y)}h{_px(2 * r)}"


def _steps(*steps: tuple[float, float]) -> str:
    return "".join(f"l{_px(dx)} {_px(dy)}" for dx, dy in steps)


_CAPS: dict[str, tuple[str, float]] = {"circle": ("round", 1.0), "square": ("square", 0.9)}
_STROKES = frozenset({"x", "cross", "line-ns", "line-ew"})
_SYMBOLS: dict[str, Callable[[float, float, float], str]] = {
    "circle": _circle,
    "square": _square,
    "diamond": _diamond,
    "triangle-up": _triangle,
    "triangle-down": _triangle_down,
    "x": _saltire,
    "cross": _cross,
    "line-ns": _upright_tick,
    "line-ew": _level_tick,
}


def _bar_trace(trace: Trace, panel: Panel) -> str:
    lying = trace.get("orientation") == "h"
    places, sizes = (trace["y"], trace["x"]) if lying else (trace["x"], trace["y"])
    widths, bases = trace.get("width", 0.8), trace.get("base", 0.0)
    colours = trace.get("marker", {}).get("color", palette.RAMP[6])
    parts = []
    for index, (place, size) in enumerate(zip(places, sizes, strict=True)):
        if place is None or size is None:
            continue
        half, base = _each(widths, index) / 2, _each(bases, index)
        along, across = (panel.upright, panel.across) if lying else (panel.across, panel.upright)
        corners = (
            sorted((along(place - half), along(place + half))),
            sorted((across(base), across(base + size))),
        )
        parts.append(
            _rectangle(corners[1], corners[0], _each(colours, index))
            if lying
            else _rectangle(*corners, _each(colours, index))
        )
    content = "".join(parts) + _error_bars(trace, panel)
    opacity = trace.get("opacity", 1)
    return f'<g opacity="{opacity:g}">{content}</g>' if opacity != 1 else content


def _rectangle(xs: list[float], ys: list[float], colour: str) -> str:
    if not _seen(*xs, *ys):
        return ""
    size = f'width="{_px(xs[1] - xs[0])}" height="{_px(ys[1] - ys[0])}"'
    return f'<rect x="{_px(xs[0])}" y="{_px(ys[0])}" {size} fill="{_paint(colour)}"/>'


def _shape(shape: Layout, panels: dict[str, Panel]) -> str:
    panel = _panel_of(shape, panels)
    x0, x1 = (_referred(shape[k], shape["xref"], panel, "x", _place) for k in ("x0", "x1"))
    y0, y1 = (_referred(shape[k], shape["yref"], panel, "y", _place) for k in ("y0", "y1"))
    if not _seen(x0, y0, x1, y1):
        return ""
    if shape["type"] == "rect":
        drawn = _rectangle(sorted((x0, x1)), sorted((y0, y1)), shape.get("fillcolor", palette.RULE))
        return f'<g opacity="{shape.get("opacity", 0.5):g}">{drawn}</g>'
    drawn = shape.get("line", {})
    return _line(
        x0, y0, x1, y1, drawn.get("color", palette.SOFT), drawn.get("dash", "solid"), drawn.get("width", 1)
    )


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


def _line(
    x0: float, y0: float, x1: float, y1: float, colour: str, dash: str = "solid", width: float = 1
) -> str:
    dashes = f' stroke-dasharray="{DASHES[dash]}"' if dash in DASHES else ""
    looks = f'stroke="{_paint(colour)}" stroke-width="{width:g}"{dashes}'
    return f'<path d="{_segment(x0, y0, x1, y1)}" {looks}/>'


def _segment(x0: float, y0: float, x1: float, y1: float) -> str:
    """Return a straight piece of a path, by its one coordinate where it is level or upright."""
    start, across, upright = f"M{_px(x0)} {_px(y0)}", _px(x1), _px(y1)
    if upright == _px(y0):
        return f"{start}H{across}"
    return f"{start}V{upright}" if across == _px(x0) else f"{start}L{across} {upright}"


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
    lines = re.split(r"<br\s*/?>", words)
    shown = [_escaped(html.unescape(re.sub(r"</?(?:b|i|sub|sup)>", "", line))) for line in lines]
    turned = f' transform="rotate({turn:g} {_px(x)} {_px(y)})"' if turn else ""
    looks = f'x="{_px(x)}" y="{_px(y)}"' + (f' text-anchor="{anchor}"' if anchor != "start" else "")
    looks += (f' font-size="{size:g}"' if size != _TEXT_SIZE else "") + turned
    paint = _paint(colour)
    looks += f' fill="{paint}"' if paint != "currentColor" else ""
    spans = [shown[0]] + [f'<tspan x="{_px(x)}" dy="1.25em">{line}</tspan>' for line in shown[1:]]
    return f"<text {looks}>{''.join(spans)}</text>"


def _paint(colour: str) -> str:
    return "currentColor" if colour == palette.INK else colour


def _seen(*places: float) -> bool:
    return all(math.isfinite(place) for place in places)


def _px(value: float) -> str:
    return f"{value:.1f}".removesuffix(".0").replace("-0.0", "0") if value > -0.05 or value < -0.05 else "0"


def _escaped(text: str) -> str:
    return html.escape(text, quote=True)
