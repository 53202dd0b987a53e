"""A figure's panels and words rearranged for a narrow column of print."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import Any

from campaign.pages.drawing import axis_names
from campaign.pages.figures import Figure, Layout

TALLEST = 1050
"""Height in pixels that a print figure may have: 238 mm."""
NARROW = 500
"""Below so many pixels of width panels are put into fewer columns."""
_SMALLEST_LETTERS = 11
_LETTER = 6.2
"""Width in pixels that a letter takes at most, on average, at the size of titles."""
_LETTER_SHARE = 0.5
"""Width of a letter over the size of letters, on average."""
_LINE = 16
_BETWEEN_ROWS, _BETWEEN_TITLED_ROWS = 34, 72
_BETWEEN_COLUMNS = 0.08
_SHRUNK_WITH_ONE_PANEL = 0.72

Pair = tuple[str, str]


def laid_for_print(figure: Figure, width: int) -> Figure:
    """Return a figure, ready to be drawn, with panels and words that fit into *width* pixels.

    A lone panel becomes flatter; panels side by side go into fewer columns where the width is narrow and the
    page is long enough; titles are broken where they would meet; no letter is smaller than eleven pixels.
    """
    pairs = _pairs(figure.layout)
    named_rows = any("ticktext" in figure.layout[y] for _, y in pairs)
    if len(pairs) == 1 and not named_rows:
        flat = min(figure.height, round(_SHRUNK_WITH_ONE_PANEL * max(width, 400)))
        figure = replace(figure, height=flat)
    elif width < NARROW:
        figure = _in_fewer_columns(figure, pairs)
    return _with_broken_titles(figure, width)


def _pairs(layout: Layout) -> list[Pair]:
    """Return the axes of every panel in reading order."""
    pairs = [
        (key, f"yaxis{layout[key].get('anchor', 'y')[1:]}") for key in axis_names(layout) if key[0] == "x"
    ]
    return sorted(pairs, key=lambda pair: (-_start(layout[pair[1]]), _start(layout[pair[0]])))


def _start(axis: Layout) -> float:
    return round(float(axis.get("domain", (0.0, 1.0))[0]), 3)


def _title(axis: Layout) -> str:
    return str(axis.get("title", {}).get("text", ""))


def _in_fewer_columns(figure: Figure, pairs: list[Pair]) -> Figure:
    layout, margin = figure.layout, figure.layout["margin"]
    left = min(_start(layout[x]) for x, _ in pairs)
    columns = len({_start(layout[x]) for x, _ in pairs})
    scales_of_their_own = any(
        layout[y].get("showticklabels", True) for x, y in pairs if _start(layout[x]) > left
    )
    fewer = 1 if scales_of_their_own else 2
    if columns <= fewer:
        return figure
    x_titles = {_title(layout[x]) for x, _ in pairs} - {""}
    every_row_titled = len(x_titles) > 1
    gap = _BETWEEN_TITLED_ROWS if every_row_titled else _BETWEEN_ROWS
    domain = layout[pairs[0][1]].get("domain", (0.0, 1.0))
    panel = (figure.height - margin["t"] - margin["b"]) * (domain[1] - domain[0])
    rows = math.ceil(len(pairs) / fewer)
    inner = rows * panel + (rows - 1) * gap
    height = round(inner + margin["t"] + margin["b"])
    if height > TALLEST:
        return figure
    made = dict(layout)
    y_title = next((_title(layout[y]) for _, y in pairs if _title(layout[y])), "")
    for index, (x, y) in enumerate(pairs):
        row, column = divmod(index, fewer)
        top = 1 - row * (panel + gap) / inner
        size = (1 - _BETWEEN_COLUMNS * (fewer - 1)) / fewer
        start = column * (size + _BETWEEN_COLUMNS)
        lowest = every_row_titled or index + fewer >= len(pairs)
        shown_x = _title(layout[x]) or (next(iter(x_titles), "") if lowest else "")
        made[x] = _shown(layout[x], (start, start + size), shown_x if lowest else "", lowest)
        leads = column == 0
        made[y] = _shown(
            layout[y],
            (max(top - panel / inner, 0.0), top),
            _title(layout[y]) or y_title if leads else "",
            leads or scales_of_their_own,
        )
    return replace(figure, layout=made, height=height)


def _shown(axis: Layout, domain: tuple[float, float], title: str, ticks: bool) -> Layout:
    return {
        **axis,
        "domain": list(domain),
        "title": {**axis.get("title", {}), "text": title},
        "showticklabels": ticks,
    }


def _with_broken_titles(figure: Figure, width: int) -> Figure:
    layout = dict(figure.layout)
    margin = dict(layout["margin"])
    inner = width - margin["l"] - margin["r"]
    lines = 1
    for x, _ in _pairs(layout):
        room = inner * _share(layout[x]) + 12
        title = _broken(_title(layout[x]), room)
        layout[x] = {**layout[x], "title": {**layout[x].get("title", {}), "text": title}}
        lines = max(lines, title.count("<br>") + 1)
    margin["b"] += _LINE * (lines - 1)
    notes = [_legible(note, layout, inner) for note in layout.get("annotations", ())]
    highest = max((note["text"].count("<br>") for note in notes if _is_panel_title(note)), default=0)
    notes = [_raised(note, _LINE * highest) if _is_above(note) else note for note in notes]
    margin["t"] += _LINE * highest
    notes = [_kept_inside(note, layout, width) for note in notes]
    layout |= {"annotations": notes, "margin": margin}
    return replace(figure, layout=layout, height=figure.height + _LINE * (lines - 1 + highest))


def _share(axis: Layout) -> float:
    start, end = axis.get("domain", (0.0, 1.0))
    return float(end - start)


def _is_panel_title(note: Layout) -> bool:
    at_the_corner = str(note.get("xref", "")).endswith("domain") and (note["x"], note["y"]) == (0, 1)
    return at_the_corner and "align" in note


def _is_above(note: Layout) -> bool:
    """Return whether a label stands above its panel and is not its title: a key, say."""
    above = str(note.get("yref", "")).endswith("domain") and note["y"] >= 1 and note.get("yshift", 0) > 0
    return above and not _is_panel_title(note)


def _raised(note: Layout, pixels: float) -> Layout:
    return {**note, "yshift": note.get("yshift", 0) + pixels}


def _kept_inside(note: Layout, layout: Layout, width: int) -> Layout:
    """Return a label moved back into the picture where its end would be cut off."""
    axis = layout.get(f"xaxis{str(note.get('xref', 'x')).split(' ')[0][1:]}")
    if axis is None:
        return note
    low, high = (0.0, 1.0) if str(note.get("xref", "")).endswith("domain") else axis["range"]
    start, margin = axis.get("domain", (0.0, 1.0))[0], layout["margin"]
    along = start + _share(axis) * (float(note["x"]) - low) / (high - low)
    place = margin["l"] + (width - margin["l"] - margin["r"]) * along + note.get("xshift", 0)
    longest = max(len(line) for line in str(note["text"]).split("<br>"))
    size = longest * _LETTER_SHARE * note["font"]["size"]
    left = place - size * {"left": 0.0, "center": 0.5, "right": 1.0}.get(note.get("xanchor", "center"), 0.5)
    moved = min(width - 2 - (left + size), 0.0) or max(2 - left, 0.0)
    return {**note, "xshift": note.get("xshift", 0) + moved} if moved else note


def _legible(note: Layout, layout: Layout, inner: float) -> Layout:
    """Return a label with letters of a size that can be read; the title of a panel broken to its width."""
    font: dict[str, Any] = dict(note.get("font", {}))
    made = {**note, "font": {**font, "size": max(font.get("size", 12), _SMALLEST_LETTERS)}}
    if _is_panel_title(note):
        axis = layout.get(f"xaxis{str(note['xref']).split(' ')[0][1:]}", {})
        text = _broken(str(note["text"]), inner * _share(axis) + 8)
        made |= {"text": text, "yshift": note.get("yshift", 0) + _LINE * text.count("<br>")}
    return made


def _broken(text: str, room: float) -> str:
    """Return a text in lines of at most *room* pixels, broken at spaces; one word alone is never broken."""
    made: list[str] = []
    for word in text.split(" "):
        if made and len(made[-1]) + 1 + len(word) <= room / _LETTER:
            made[-1] += f" {word}"
        else:
            made.append(word)
    return "<br>".join(made)
