"""Figures as plain values: traces and layout in the plot library's schema, in the house style.

Only ``scatter`` and ``bar`` traces are used, so that the smallest build of the library draws them, and only
as vectors. The same value becomes the static picture (:mod:`campaign.pages.static_figure`) and the live
figure. A figure draws at most 2,000 markers and 10,000 points of lines; curves are thinned by
:func:`campaign.pages.thinning.thinned`, never computed from what was thinned.

Builders return trace dictionaries; :func:`Figure` puts them together. Texts that come from recordings go
through :func:`plain` (the library reads a little markup in texts).
"""

from __future__ import annotations

import html
import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from campaign.pages import palette
from campaign.pages.palette import GenerationStyle

Trace = dict[str, Any]
Layout = dict[str, Any]

LARGEST_NUMBER_OF_MARKERS = 2000
LARGEST_NUMBER_OF_LINE_POINTS = 10_000
WIDTH = 864
"""Width in px that static pictures are drawn for."""


@dataclass(frozen=True)
class Figure:
    """One figure of a page.

    Attributes
    ----------
    name
        Name on the page and in links: lower-case letters, digits and hyphens.
    caption
        What the figure shows, as a finding in a sentence.
    alternative
        Text for readers who do not see it: what is drawn against what, and what is seen.
    traces, layout
        Plain dictionaries in the plot library's schema; axis titles carry units.
    data
        What stands behind the figure: its CSV file. ``None`` where ``table`` is given.
    table
        Name of the site's table that holds the figure's data, instead of ``data``.
    note
        How to read this: stands in the margin.
    height
        Height in px.
    """

    name: str
    caption: str
    alternative: str
    traces: tuple[Trace, ...]
    layout: Layout
    data: pd.DataFrame | None = None
    table: str | None = None
    note: str = ""
    height: int = 420


def plain(text: str) -> str:
    """Return *text* so that the plot library shows it as it is, with no markup of its own."""
    return html.escape(text, quote=False)


def axis(
    title: str,
    unit: str = "",
    *,
    low: float | None = None,
    high: float | None = None,
    logarithmic: bool = False,
    ticks: Sequence[tuple[float, str]] = (),
    reverse: bool = False,
    grid: bool = True,
    **more: object,
) -> Layout:
    """Return an axis: title with its unit, limits in data values, ticks as (value, text) where given.

    A line feed in a tick's text begins another line. Without limits the axis is fitted to the data. *more*
    goes into the axis as it is (``domain``, ``anchor``).
    """
    words = f"{title} / {unit}" if unit else title
    made: Layout = {"title": {"text": words}, "showgrid": grid, **more}
    if logarithmic:
        made["type"] = "log"
    if low is not None and high is not None:
        ends = [math.log10(low), math.log10(high)] if logarithmic else [float(low), float(high)]
        made["range"] = ends[::-1] if reverse else ends
    if ticks:
        texts = [plain(text).replace("\n", "<br>") for _, text in ticks]
        made |= {"tickmode": "array", "tickvals": [v for v, _ in ticks], "ticktext": texts}
    return made


def points(
    x: Iterable[float],
    y: Iterable[float],
    *,
    name: str = "",
    style: GenerationStyle = palette.GENERATION_STYLES[0],
    size: float = 7,
    open_marker: bool = False,
    text: Sequence[str] | None = None,
    links: Sequence[str] | None = None,
    module: str = "",
    sensor: str = "",
    axes: str = "",
    **more: object,
) -> Trace:
    """Return markers.

    Parameters
    ----------
    x, y
        Values of equal length.
    style
        Colour and symbol.
    text
        A sentence for each point, shown on hovering.
    links
        Address that each point leads to (its trial's section).
    module, sensor
        Whose points they are, so that choosing one anywhere marks them.
    axes
        Which panel: ``""`` for the first, ``"2"`` for the second.
    """
    symbol = f"{style.symbol}-open" if open_marker else style.symbol
    trace: Trace = {
        "type": "scatter",
        "mode": "markers",
        "name": plain(name),
        "x": _floats(x),
        "y": _floats(y),
        "marker": {"color": style.colour, "symbol": symbol, "size": size},
    }
    return _completed(trace, text, links, module, sensor, axes, more)


def line(
    x: Iterable[float],
    y: Iterable[float],
    *,
    name: str = "",
    colour: str = palette.INK,
    dash: str = "solid",
    width: float = 1.5,
    text: Sequence[str] | None = None,
    links: Sequence[str] | None = None,
    module: str = "",
    sensor: str = "",
    axes: str = "",
    **more: object,
) -> Trace:
    """Return a line through the points in order; a value that is not a number breaks it."""
    trace: Trace = {
        "type": "scatter",
        "mode": "lines",
        "name": plain(name),
        "x": _floats(x),
        "y": _floats(y),
        "line": {"color": colour, "dash": dash, "width": width},
    }
    return _completed(trace, text, links, module, sensor, axes, more)


def band(
    x: Iterable[float],
    low: Iterable[float],
    high: Iterable[float],
    *,
    name: str = "",
    colour: str = palette.GENERATION_STYLES[0].colour,
    opacity: float = 0.18,
    axes: str = "",
    **more: object,
) -> Trace:
    """Return a filled band between *low* and *high* (one closed outline; values must be finite)."""
    xs, lows, highs = _floats(x), _floats(low), _floats(high)
    trace: Trace = {
        "type": "scatter",
        "mode": "lines",
        "name": plain(name),
        "x": xs + xs[::-1],
        "y": highs + lows[::-1],
        "fill": "toself",
        "fillcolor": colour,
        "opacity": opacity,
        "line": {"width": 0, "color": colour},
        "hoverinfo": "skip",
    }
    return _completed(trace, None, None, "", "", axes, more)


def intervals(
    estimate: Iterable[float],
    low: Iterable[float],
    high: Iterable[float],
    places: Iterable[float],
    *,
    across: bool = True,
    **more: Any,
) -> Trace:
    """Return estimates with their intervals: along x at heights *places*, or upright where *across* is False.

    Takes the keywords of :func:`points`. Limits that are not finite are drawn without that side's bar.
    """
    centre = _floats(estimate)
    upper = [max(h - e, 0.0) if math.isfinite(h) else 0.0 for e, h in zip(centre, _floats(high), strict=True)]
    lower = [max(e - v, 0.0) if math.isfinite(v) else 0.0 for e, v in zip(centre, _floats(low), strict=True)]
    style: GenerationStyle = more.get("style", palette.GENERATION_STYLES[0])
    trace = points(centre, places, **more) if across else points(places, centre, **more)
    bars = {
        "type": "data",
        "symmetric": False,
        "array": upper,
        "arrayminus": lower,
        "color": style.colour,
        "thickness": 1.4,
        "width": 0,
    }
    return trace | {"error_x" if across else "error_y": bars}


def bars(
    x: Iterable[float],
    height: Iterable[float],
    *,
    name: str = "",
    colour: str = palette.RAMP[6],
    width: float | None = None,
    text: Sequence[str] | None = None,
    links: Sequence[str] | None = None,
    across: bool = False,
    module: str = "",
    sensor: str = "",
    axes: str = "",
    **more: object,
) -> Trace:
    """Return bars from zero (or from ``base``, given in *more*); *across* lays them along x."""
    along, size = ("y", "x") if across else ("x", "y")
    trace: Trace = {
        "type": "bar",
        "name": plain(name),
        along: _floats(x),
        size: _floats(height),
        "orientation": "h" if across else "v",
        "marker": {"color": colour, "line": {"width": 0}},
    }
    if width is not None:
        trace["width"] = width
    return _completed(trace, text, links, module, sensor, axes, more)


def label(
    text: str,
    x: float,
    y: float,
    *,
    colour: str = palette.INK,
    axes: str = "",
    anchor: str = "left",
    shift: tuple[float, float] = (6, 0),
    size: int = 12,
    paper: bool = False,
) -> Layout:
    """Return a label for ``layout["annotations"]``; *paper* places it in fractions of its panel."""
    suffix = " domain" if paper else ""
    return {
        "text": plain(text),
        "x": float(x),
        "y": float(y),
        "xref": f"x{axes}{suffix}",
        "yref": f"y{axes}{suffix}",
        "xanchor": anchor,
        "yanchor": "middle",
        "xshift": shift[0],
        "yshift": shift[1],
        "showarrow": False,
        "font": {"size": size, "color": colour},
    }


def level_line(
    value: float, *, upright: bool = False, colour: str = palette.SOFT, dash: str = "dot", axes: str = ""
) -> Layout:
    """Return a line across the whole panel at *value* for ``layout["shapes"]`` (a limit, zero)."""
    ends = (
        {"x0": value, "x1": value, "y0": 0, "y1": 1}
        if upright
        else {"x0": 0, "x1": 1, "y0": value, "y1": value}
    )
    references = (f"x{axes}", f"y{axes} domain") if upright else (f"x{axes} domain", f"y{axes}")
    drawn = {"color": colour, "dash": dash, "width": 1}
    return {
        "type": "line",
        **ends,
        "xref": references[0],
        "yref": references[1],
        "line": drawn,
        "layer": "below",
    }


def layout(x: Layout, y: Layout, **more: object) -> Layout:
    """Return the layout of a figure with one panel; *more* holds ``annotations``, ``shapes``, ``barmode``."""
    return {"xaxis": x, "yaxis": y, **more}


def small_multiples(
    titles: Sequence[str],
    x: Layout,
    y: Layout,
    *,
    columns: int = 3,
    gap: tuple[float, float] = (0.04, 0.12),
    **more: Any,
) -> Layout:
    """Return a layout of equal panels in reading order that share their axes' limits.

    Panel *i* (from 0) is drawn on by traces with ``axes=panel(i)``. Only the outer panels carry axis titles
    and tick labels. *gap* is the space between panels as fractions of the whole width and height.
    """
    columns = max(1, min(columns, len(titles)))
    rows = math.ceil(len(titles) / columns)
    made: Layout = {**more, "annotations": list(more.get("annotations", ()))}
    for index, title in enumerate(titles):
        row, column = divmod(index, columns)
        lowest = index + columns >= len(titles)
        suffix = panel(index)
        across, upright = _domain(column, columns, gap[0]), _domain(rows - 1 - row, rows, gap[1])
        made[f"xaxis{suffix}"] = _panel_axis(
            x, across, f"y{suffix}", titled=lowest, leader="x", first=index == 0
        )
        made[f"yaxis{suffix}"] = _panel_axis(
            y, upright, f"x{suffix}", titled=column == 0, leader="y", first=index == 0
        )
        made["annotations"].append(_panel_title(title, suffix))
    return made


def panel(index: int) -> str:
    """Return the axes' suffix of a panel counted from 0: ``""``, ``"2"``, ``"3"``, …."""
    return "" if index == 0 else str(index + 1)


def marker_count(figure: Figure) -> int:
    """Return how many markers a figure draws."""
    return sum(len(t["x"]) for t in figure.traces if "markers" in t.get("mode", ""))


def line_point_count(figure: Figure) -> int:
    """Return how many points of lines a figure draws."""
    return sum(len(t["x"]) for t in figure.traces if "lines" in t.get("mode", ""))


def _floats(values: Iterable[float]) -> list[float]:
    if isinstance(values, pd.Series):
        values = values.to_numpy(float, na_value=np.nan)
    made: list[float] = np.asarray(
        values if isinstance(values, np.ndarray) else list(values), dtype=float
    ).tolist()
    return made


def _completed(
    trace: Trace,
    text: Sequence[str] | None,
    links: Sequence[str] | None,
    module: str,
    sensor: str,
    axes: str,
    more: Mapping[str, object],
) -> Trace:
    if text is not None:
        trace |= {"hovertext": [plain(t) for t in text], "hoverinfo": "text"}
    elif "hoverinfo" not in trace:
        trace["hoverinfo"] = "skip"
    if links is not None:
        trace["customdata"] = list(links)
    if module or sensor:
        trace["meta"] = {"module": module, "sensor": sensor}
    if axes:
        trace |= {"xaxis": f"x{axes}", "yaxis": f"y{axes}"}
    return trace | dict(more)


def _domain(index: int, number: int, gap: float) -> list[float]:
    size = (1.0 - gap * (number - 1)) / number
    start = index * (size + gap)
    return [round(start, 5), round(min(start + size, 1.0), 5)]


def _panel_axis(
    shared: Layout, domain: list[float], anchor: str, *, titled: bool, leader: str, first: bool
) -> Layout:
    made = {**shared, "domain": domain, "anchor": anchor}
    if not first:
        made["matches"] = leader
    if not titled:
        made |= {"title": {"text": ""}, "showticklabels": False}
    return made


def _panel_title(title: str, suffix: str) -> Layout:
    """Return a panel's title; one of several lines grows upwards."""
    text = plain(title).replace("\n", "<br>")
    made = label("", 0, 1, axes=suffix, shift=(0, 10 + 8 * text.count("<br>")), paper=True)
    return made | {"text": text, "align": "left", "font": {"size": 13, "color": palette.INK}}
