"""The data script of a page: figures, tables' further rows and values, nothing said twice.

``assets/unfold.js`` puts everything back before any other script sees it, as :func:`unfolded` does.

- What traces, axes, shapes and labels share (looks, units, ranges) stands once in ``shared``; ``"$"`` is its
  place. A trace without a name has the empty one.
- Numbers of points stand once in ``lists``, as short texts (:mod:`campaign.pages.packed_numbers`) where they
  are whole numbers of one decimal place; a trace holds the place of each of its lists.
- Sentences and links stand once in ``texts``. The sentences of one trace that differ in some words only are
  one sentence with gaps and the words of each gap, ``{"t": place, "v": [place, place]}``, words such as
  ``"1|2|3"`` being one text; a gap with one word for all points holds that word alone.
"""

from __future__ import annotations

import json
import re
from collections.abc import Mapping, Sequence
from typing import Any

import orjson

from campaign.pages.figures import Figure, Layout, Trace
from campaign.pages.house_style import NOTE_DEFAULTS
from campaign.pages.legible import legible_json
from campaign.pages.packed_numbers import packed, unpacked
from campaign.pages.page import Page
from campaign.pages.tables import Cell

GAP = "\ue000"
"""Stands in a sentence where a word of its own goes (a private character of Unicode)."""
BETWEEN = "|"
"""Stands between the words of one gap."""

_PROTO, _PROTO_AS_KEY = b'"__proto__":', b'["__proto__"]:'
_HEAD, _TAIL = b"window.campaignPage = ", b";\n"
_OWN_OF_TRACE = frozenset(
    {
        "x",
        "y",
        "xaxis",
        "yaxis",
        "name",
        "meta",
        "hovertext",
        "customdata",
        "text",
        "error_x",
        "error_y",
        "base",
    }
)
_NUMBERS_OF_TRACE = ("x", "y", "base")
_BARS_OF_TRACE = ("error_x", "error_y")
_OWN_OF_BARS = frozenset({"array", "arrayminus"})
_OWN_OF_AXIS = frozenset({"domain", "anchor", "matches"})
_OWN_OF_LABEL = frozenset({"text", "x", "y", "xref", "yref"})
_OWN_OF_SHAPE = frozenset({"x0", "x1", "y0", "y1", "xref", "yref"})
_WORDS = re.compile(r"([ \u202f:,;()\[\]]+)")


class Fold:
    """What a page's script holds once: shared looks, numbers and texts, each by its place in a list."""

    def __init__(self) -> None:
        self._shared: dict[bytes, int] = {}
        self._lists: dict[bytes, int] = {}
        self._places: dict[tuple[float | str | None, ...], int] = {}
        self._texts: dict[str, int] = {}

    @property
    def shared(self) -> list[orjson.Fragment]:
        """The shared looks, in order."""
        return [orjson.Fragment(look) for look in self._shared]

    @property
    def lists(self) -> list[orjson.Fragment]:
        """The lists of numbers, in order."""
        return [orjson.Fragment(numbers) for numbers in self._lists]

    @property
    def texts(self) -> list[str]:
        """The texts, in order."""
        return list(self._texts)

    def trace(self, trace: Trace) -> Trace:
        """Return a trace with its looks, numbers, sentences and links folded."""
        made = self._parted(trace, _OWN_OF_TRACE)
        if made.get("name") == "":
            del made["name"]
        for key in _NUMBERS_OF_TRACE:
            if isinstance(trace.get(key), list):
                made[key] = self.numbers(trace[key])
        for key in _BARS_OF_TRACE:
            if key in trace:
                made[key] = self._bars(trace[key])
        if isinstance(trace.get("meta"), dict):
            made["meta"] = self._looks(trace["meta"])
        if isinstance(trace.get("customdata"), list):
            made["customdata"] = self._links(trace["customdata"])
        if isinstance(trace.get("hovertext"), list):
            made["hovertext"] = self._sentences(trace["hovertext"])
        return made

    def numbers(self, values: Sequence[float | None]) -> int:
        """Return the place of a list of numbers."""
        known = tuple(values)
        if (place := self._places.get(known)) is None:
            short = packed(values)
            written = orjson.dumps(values if short is None else short)
            place = self._places[known] = self._lists.setdefault(written, len(self._lists))
        return place

    def _bars(self, bars: Mapping[str, Any]) -> dict[str, Any]:
        made = self._parted(bars, _OWN_OF_BARS)
        return {key: self.numbers(value) if key in _OWN_OF_BARS else value for key, value in made.items()}

    def layout(self, layout: Layout) -> Layout:
        """Return a layout with its axes, shapes and labels folded."""
        made = {
            key: self._parted(value, _OWN_OF_AXIS) if key.startswith(("xaxis", "yaxis")) else value
            for key, value in layout.items()
        }
        labels = [_without_defaults(note) for note in layout.get("annotations", ())]
        made["annotations"] = [self._parted(note, _OWN_OF_LABEL) for note in labels]
        if "shapes" in layout:
            made["shapes"] = [self._parted(shape, _OWN_OF_SHAPE) for shape in layout["shapes"]]
        return made

    def _parted(self, whole: Mapping[str, Any], own: frozenset[str]) -> dict[str, Any]:
        looks = {key: value for key, value in whole.items() if key not in own}
        return {"$": self._looks(looks), **{key: value for key, value in whole.items() if key in own}}

    def _looks(self, looks: Mapping[str, Any]) -> int:
        written = orjson.dumps(looks, option=orjson.OPT_SORT_KEYS | orjson.OPT_SERIALIZE_NUMPY)
        return self._shared.setdefault(written, len(self._shared))

    def _text(self, text: str) -> int:
        return self._texts.setdefault(text, len(self._texts))

    def _links(self, links: Sequence[str]) -> int | list[int]:
        """Return the places of links, one number where all points lead to the same."""
        if links and all(link == links[0] for link in links):
            return self._text(links[0])
        return [self._text(link) for link in links]

    def _sentences(self, sentences: Sequence[str]) -> dict[str, Any] | list[int]:
        parts = _parted_sentences(sentences)
        if parts is None:
            return [self._text(sentence) for sentence in sentences]
        with_gaps, words = parts
        return {"t": self._text(with_gaps), "v": [self._text(own) for own in words]}


def _parted_sentences(sentences: Sequence[str]) -> tuple[str, list[str]] | None:
    """Return one sentence with gaps and each gap's words, or ``None`` where the sentences differ more."""
    joined = "".join(sentences)
    if not sentences or GAP in joined or BETWEEN in joined:
        return None
    rows = [_WORDS.split(sentence) for sentence in sentences]
    if len(set(map(len, rows))) > 1:
        return None
    with_gaps, words = "", []
    for place, column in enumerate(zip(*rows, strict=True)):
        first = column[0]
        same = column.count(first) == len(column)
        if place % 2 == 1 and not same:
            return None
        if same and not any(map(str.isdigit, first)):
            with_gaps += first
        else:
            with_gaps += GAP
            words.append(first if same else BETWEEN.join(column))
    return with_gaps, words


def _without_defaults(note: Layout) -> Layout:
    """Return a label without what the house template says of every label."""
    return {key: value for key, value in note.items() if NOTE_DEFAULTS.get(key) != value}


def data_script(
    page: Page, figures: Mapping[str, Figure], further_rows: Mapping[str, list[list[Any]]] | None = None
) -> bytes:
    """Return ``data/SLUG.js``: a classic script that hands the page's figures, rows and values on.

    Parameters
    ----------
    page
        The page.
    figures
        Its figures by name, ready to be drawn.
    further_rows
        Rows of its tables that the page itself does not hold, as :func:`folded_row` makes them.
    """
    content = {
        "slug": page.slug,
        **folded_figures(figures),
        "rows": further_rows or {},
        "values": dict(page.data),
    }
    return _HEAD + script_value(content) + _TAIL


def script_value(value: Any) -> bytes:
    """Return *value* as a classic script states it: JSON with legible texts.

    A key ``"__proto__"`` stands in brackets: in a script, unlike in JSON, the bare one would set what the
    object inherits from, and a module may be called so.
    """
    content = orjson.dumps(value, option=orjson.OPT_SERIALIZE_NUMPY | orjson.OPT_SORT_KEYS)
    return legible_json(content).replace(_PROTO, _PROTO_AS_KEY)


def folded_figures(figures: Mapping[str, Figure]) -> dict[str, Any]:
    """Return ``figures``, ``shared``, ``lists`` and ``texts`` of figures that are ready to be drawn."""
    fold = Fold()
    drawn = {
        name: {
            "traces": [fold.trace(trace) for trace in figure.traces],
            "layout": fold.layout(figure.layout),
            "height": figure.height,
        }
        for name, figure in figures.items()
    }
    return {"figures": drawn, "shared": fold.shared, "lists": fold.lists, "texts": fold.texts}


def folded_row(marks: tuple[str, str], cells: Sequence[Cell]) -> list[Any]:
    """Return a row as the script holds it: module, sensor, then its cells (a text, or a text and more)."""
    return [*marks, *(_folded_cell(cell) for cell in cells)]


def _folded_cell(cell: Cell) -> str | list[str]:
    if cell.sort is not None:
        return [cell.text, cell.href, cell.sort]
    return [cell.text, cell.href] if cell.href else cell.text


def unfolded(script: bytes) -> dict[str, Any]:
    """Return what a page's script holds, as the site's scripts see it once it is unfolded.

    Raises
    ------
    ValueError
        Where *script* is no data script.
    """
    if not (script.startswith(_HEAD) and script.endswith(_TAIL)):
        raise ValueError("not a data script")
    page: dict[str, Any] = json.loads(script[len(_HEAD) : -len(_TAIL)].replace(_PROTO_AS_KEY, _PROTO))
    page["lists"] = unpacked_lists(page)
    for figure in page["figures"].values():
        figure["traces"] = [_unfolded_trace(trace, page) for trace in figure["traces"]]
        layout: dict[str, Any] = {
            key: _whole(value, page) if key.startswith(("xaxis", "yaxis")) else value
            for key, value in figure["layout"].items()
        }
        for key in ("annotations", "shapes"):
            if key in layout:
                layout[key] = [_whole(part, page) for part in layout[key]]
        figure["layout"] = layout
    return page


def unfolded_traces(content: dict[str, Any]) -> list[Trace]:
    """Return the traces of a script that brings further ones with ``shared``, ``lists`` and ``texts``."""
    whole = {**content, "lists": unpacked_lists(content)}
    return [_unfolded_trace(trace, whole) for trace in content["traces"]]


def unpacked_lists(content: Mapping[str, Any]) -> list[list[Any]]:
    """Return the lists of numbers that a script holds, in order."""
    return [unpacked(held) if isinstance(held, str) else held for held in content["lists"]]


def _unfolded_trace(trace: dict[str, Any], page: dict[str, Any]) -> dict[str, Any]:
    made, texts, lists = {"name": "", **_whole(trace, page)}, page["texts"], page["lists"]
    for key in _NUMBERS_OF_TRACE:
        if isinstance(made.get(key), int):
            made[key] = lists[made[key]]
    for key in _BARS_OF_TRACE:
        if key in made:
            bars = _whole(made[key], page)
            made[key] = {k: lists[v] if k in _OWN_OF_BARS else v for k, v in bars.items()}
    if "meta" in made:
        made["meta"] = page["shared"][made["meta"]]
    if "customdata" in made:
        places = made["customdata"]
        places = places if isinstance(places, list) else [places] * len(made["x"])
        made["customdata"] = [texts[place] for place in places]
    hover = made.get("hovertext")
    if isinstance(hover, list):
        made["hovertext"] = [texts[place] for place in hover]
    elif isinstance(hover, dict):
        words = [texts[place] for place in hover["v"]]
        made["hovertext"] = [_filled(texts[hover["t"]], words, i) for i in range(len(made["x"]))]
    return made


def _filled(with_gaps: str, words: Sequence[str], index: int) -> str:
    first, *rest = with_gaps.split(GAP)
    own = [column.split(BETWEEN) for column in words]
    return first + "".join(
        (column[index] if len(column) > 1 else column[0]) + after
        for column, after in zip(own, rest, strict=True)
    )


def _whole(parted: dict[str, Any], page: dict[str, Any]) -> dict[str, Any]:
    return {**page["shared"][parted["$"]], **{key: value for key, value in parted.items() if key != "$"}}
