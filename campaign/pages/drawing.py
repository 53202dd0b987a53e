"""A figure made ready to be drawn: limits of every axis fixed, numbers rounded, limits on size checked."""

from __future__ import annotations

import math
import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from campaign.pages import figures, palette
from campaign.pages.figures import Figure, Layout, Trace
from campaign.pages.thinning import rounded

MARGINS = {"l": 64, "r": 24, "t": 28, "b": 52}
MARK_SIZE, MARK_STRIP = 12, 18
"""Size of a mark's letters, and height of the strip that it stands in, in pixels."""


def ready(figure: Figure) -> Figure:
    """Return *figure* with margins, axis ranges and rounded numbers, as both drawings need it.

    Raises
    ------
    ValueError
        Where the figure draws more markers or points of lines than a page bears, or a text holds markup.
    """
    _check_size(figure)
    _check_texts(figure)
    layout: Layout = {**figure.layout, "margin": {**MARGINS, **figure.layout.get("margin", {})}}
    reached = _reached(figure.traces)
    for key in axis_names(layout):
        layout[key] = _with_range(key, layout, reached)
    layout["annotations"] = [_on_its_axes(note, layout) for note in layout.get("annotations", ())]
    traces = tuple(_rounded_trace(trace, layout) for trace in figure.traces)
    return replace(figure, traces=traces, layout=layout)


def marked(figure: Figure, words: str) -> Figure:
    """Return *figure* with *words* in its lower right corner, in a strip of its own below the axes."""
    margin = {**MARGINS, **figure.layout.get("margin", {})}
    title = {
        "text": words,
        "x": 1.0,
        "xanchor": "right",
        "xref": "container",
        "y": 0.0,
        "yanchor": "bottom",
        "yref": "container",
        "pad": {"r": 6, "b": 4},
        "font": {"size": MARK_SIZE, "color": palette.ATTENTION},
    }
    layout = {**figure.layout, "margin": {**margin, "b": margin["b"] + MARK_STRIP}, "title": title}
    return replace(figure, height=figure.height + MARK_STRIP, layout=layout)


def axis_names(layout: Layout) -> list[str]:
    """Return the axes of a layout in the order in which they were given: ``xaxis``, ``yaxis2``, …."""
    return [key for key in layout if key.startswith(("xaxis", "yaxis"))]


def axis_of(trace: Trace, letter: str) -> str:
    """Return the name of the axis (``xaxis``, ``yaxis3``) that a trace is drawn on."""
    return f"{letter}axis{str(trace.get(f'{letter}axis', letter))[1:]}"


def _check_size(figure: Figure) -> None:
    if figures.marker_count(figure) > figures.LARGEST_NUMBER_OF_MARKERS:
        raise ValueError(f"figure {figure.name} draws {figures.marker_count(figure)} markers")
    if figures.line_point_count(figure) > figures.LARGEST_NUMBER_OF_LINE_POINTS:
        raise ValueError(f"figure {figure.name} draws {figures.line_point_count(figure)} points of lines")


def _check_texts(figure: Figure) -> None:
    """Refuse markup in texts but line breaks: the library makes style attributes of it."""
    titles = [figure.layout[key].get("title", {}).get("text", "") for key in axis_names(figure.layout)]
    labels = [note["text"] for note in figure.layout.get("annotations", ())]
    for text in (*titles, *labels):
        if re.search(r"<(?!br\s*/?>)", text):
            raise ValueError(f"figure {figure.name} has markup in the text {text!r}")


def _reached(traces: Iterable[Trace]) -> dict[str, list[float]]:
    """The ends of what each trace reaches along each axis."""
    reached: dict[str, list[float]] = {}
    for trace in traces:
        for letter in ("x", "y"):
            reached.setdefault(axis_of(trace, letter), []).extend(_extent(trace, letter))
    return reached


def _with_range(key: str, layout: Layout, reached: Mapping[str, list[float]]) -> Layout:
    axis: Layout = layout[key]
    if "range" in axis:
        return {**axis, "range": _rounded_ends(axis["range"])}
    group = _matching(key, layout)
    values = [v for axis_name in group for v in reached.get(axis_name, ())]
    logarithmic = axis.get("type") == "log"
    ends = _rounded_ends(_fitted([math.log10(v) for v in values if v > 0] if logarithmic else values))
    reverse = axis.get("autorange") == "reversed"
    kept = {k: v for k, v in axis.items() if k != "autorange"}
    return {**kept, "range": ends[::-1] if reverse else ends}


def _on_its_axes(note: Layout, layout: Layout) -> Layout:
    """Return a label placed as the library wants it: by exponents where an axis is logarithmic."""
    made = dict(note)
    for letter in ("x", "y"):
        axis = layout.get(f"{letter}axis{note.get(f'{letter}ref', letter)[1:]}", {})
        if axis.get("type") == "log" and note[letter] > 0:
            made[letter] = math.log10(note[letter])
    return made


def _matching(key: str, layout: Layout) -> set[str]:
    """Return the axes that share limits with *key*."""
    leader = layout[key].get("matches", key[0] + key[5:])
    return {
        k
        for k in axis_names(layout)
        if k[0] == key[0] and (k[0] + k[5:] == leader or layout[k].get("matches") == leader)
    }


def _extent(trace: Trace, letter: str) -> list[float]:
    """Return the ends of what a trace reaches along x or y, error bars and bars' feet included.

    They are the smallest and largest finite places, and the smallest above zero.
    """
    if letter not in trace:
        return []
    centre = np.asarray(trace[letter], dtype=float)
    parts = [centre]
    error = trace.get(f"error_{letter}")
    if error:
        up = np.asarray(error["array"], dtype=float)
        parts += [centre + up, centre - np.asarray(error.get("arrayminus", up), dtype=float)]
    if trace["type"] == "bar":
        parts += _bar_extent(trace, letter, centre)
    joined = np.concatenate(parts) if len(parts) > 1 else centre
    reached = joined[np.isfinite(joined)]
    if not len(reached):
        return []
    above = reached[reached > 0]
    ends = [float(reached.min()), float(reached.max())]
    return [*ends, float(above.min())] if len(above) else ends


def _bar_extent(trace: Trace, letter: str, centre: Any) -> list[Any]:
    along = "y" if trace.get("orientation") == "h" else "x"
    if letter == along:
        half = float(trace.get("width", 0.8)) / 2.0
        return [centre - half, centre + half]
    base = np.broadcast_to(np.asarray(trace.get("base", 0.0), dtype=float), centre.shape)
    return [base, base + centre]


def _fitted(values: list[float]) -> list[float]:
    if not values:
        return [0.0, 1.0]
    low, high = min(values), max(values)
    if low == high:
        reach = abs(low) * 0.1 or 1.0
        return [low - reach, high + reach]
    return [low - 0.05 * (high - low), high + 0.05 * (high - low)]


def _rounded_ends(ends: Sequence[float]) -> list[float]:
    """Round the ends of an axis to a millionth of its length or so: far less than a picture shows."""
    length = abs(ends[1] - ends[0])
    if not (math.isfinite(length) and length > 0):
        return list(ends)
    decimals = 6 - math.floor(math.log10(length))
    return [round(float(end), decimals) + 0.0 for end in ends]


def _rounded_trace(trace: Trace, layout: Layout) -> Trace:
    made = dict(trace)
    for letter in ("x", "y"):
        axis = layout.get(axis_of(trace, letter))
        if axis is None or letter not in trace:
            continue
        made[letter] = _rounded_values(trace[letter], axis)
        error = trace.get(f"error_{letter}")
        if error:
            sides = {k: _rounded_values(error[k], axis) for k in ("array", "arrayminus") if k in error}
            made[f"error_{letter}"] = {**error, **sides}
    return made


def _rounded_values(values: list[float], axis: Layout) -> list[float | None]:
    array = np.asarray(values, dtype=float)
    if axis.get("type") == "log":
        return [float(f"{v:.5g}") if math.isfinite(v) else None for v in array]
    low, high = axis["range"]
    places = rounded(array, abs(high - low))
    if np.isfinite(places).all():
        return list(places.tolist())
    return [v if math.isfinite(v) else None for v in places.tolist()]
