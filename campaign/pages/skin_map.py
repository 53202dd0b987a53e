"""The skin map: modules as outlines, sensors as edges where they sit, coloured by a chosen figure.

It is the overview, the way in (an edge leads to its sensor, an outline to its module) and, small, the 'you
are here' of their pages. Without geometry a module is a row of bars. Values stand beside the edges as text,
every edge has an ink casing, and what is set aside is dashed and has no colour: nothing is told by colour
alone.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from campaign.pages import numbers, palette, slugs

Point = tuple[float, float]

TILE_WIDTH, TILE_HEIGHT = 150.0, 108.0
_SIDE_EDGE, _UPPER_EDGE = 27.0, 17.0
_BAR_GAP = 18.0

COLOURS: tuple[str, ...] = (*palette.RAMP, palette.ATTENTION)
"""Colours by step: the ramp, then the one that asks for attention."""

ATTENTION_STEP = len(palette.RAMP)
NO_VALUE = -1

VERDICT_STEPS: dict[str, tuple[int, str]] = {
    "met": (2, "met"),
    "not decided": (5, "?"),
    "not met": (ATTENTION_STEP, "not"),
}
"""Step and short text of each verdict."""


@dataclass(frozen=True)
class MapSensor:
    """One sensor of the map.

    Attributes
    ----------
    ends
        The places of its two nodes in mm, ``None`` where not known.
    set_aside
        Whether no trial of it is used.
    has_page
        Whether it has a page; one that a register names and no trial has none.
    """

    generation: str
    module: str
    sensor: str
    ends: tuple[Point, Point] | None = None
    set_aside: bool = False
    has_page: bool = True


@dataclass(frozen=True)
class MapFigure:
    """One figure that edges can be coloured by.

    Attributes
    ----------
    key, title, unit
        Name in scripts, words in the list, and unit.
    values
        Value of each (module, sensor); what is missing or not a number has no colour.
    verdicts
        Instead of values: the verdict of each (module, sensor), one of :data:`VERDICT_STEPS`.
    """

    key: str
    title: str
    unit: str
    values: Mapping[tuple[str, str], float]
    verdicts: Mapping[tuple[str, str], str] | None = None


@dataclass(frozen=True)
class Scale:
    """What the legend of one figure says: title, unit, the texts of both ends (empty for verdicts)."""

    key: str
    title: str
    unit: str
    low: str
    high: str
    marks: tuple[tuple[int, str], ...]


@dataclass(frozen=True)
class MapEdge:
    """One sensor as drawn: its line, where its value stands, and what it says for the figure first chosen.

    Its address is empty where it has no page.
    """

    index: int
    module: str
    sensor: str
    href: str
    start: Point
    end: Point
    label: Point
    set_aside: bool
    colour: str
    text: str
    name: str

    @property
    def told(self) -> bool:
        """Whether there is something to say of it: a value, or that it was set aside."""
        return self.set_aside or bool(self.colour)


@dataclass(frozen=True)
class MapTile:
    """One module as drawn: outline (empty for a row of bars), edges, and its address.

    The address is empty where no sensor of it has a page.
    """

    generation: str
    module: str
    href: str
    outline: str
    edges: tuple[MapEdge, ...]
    bars: bool


@dataclass(frozen=True)
class SkinMap:
    """The whole map: tiles by generation, scales, the scale first shown, and the script's data."""

    groups: tuple[tuple[str, tuple[MapTile, ...]], ...]
    scales: tuple[Scale, ...]
    chosen: Scale | None
    data: Mapping[str, object]

    def tile(self, module: str) -> MapTile | None:
        """Return the tile of a module, for the small map of its page."""
        tiles = (tile for _, group in self.groups for tile in group)
        return next((tile for tile in tiles if tile.module == module), None)

    @property
    def has_bars(self) -> bool:
        """Whether any module is drawn as a row of bars."""
        return any(tile.bars for _, group in self.groups for tile in group)

    @property
    def has_unmeasured(self) -> bool:
        """Whether any sensor has no page, for no trial names it."""
        return any(not edge.href for _, group in self.groups for tile in group for edge in tile.edges)


def skin_map(sensors: Sequence[MapSensor], figures: Sequence[MapFigure], chosen: str = "") -> SkinMap:
    """Return the map of *sensors*, coloured by the figure named *chosen* (else the first).

    Parameters
    ----------
    sensors
        Every sensor, in any order.
    figures
        Figures that a reader may pick, in order.
    """
    ordered = sorted(sensors, key=lambda s: (s.generation, s.module, s.sensor))
    indices = {(s.module, s.sensor): i for i, s in enumerate(ordered)}
    painted = {figure.key: _painted(figure, ordered) for figure in figures}
    first = next((f for f in figures if f.key == chosen), figures[0] if figures else None)
    steps = painted[first.key] if first else [(NO_VALUE, "")] * len(ordered)
    groups = []
    for generation in dict.fromkeys(s.generation for s in ordered):
        modules = dict.fromkeys(s.module for s in ordered if s.generation == generation)
        own = [[s for s in ordered if (s.generation, s.module) == (generation, m)] for m in modules]
        groups.append((generation, tuple(_tile(module, indices, steps, first) for module in own)))
    scales = tuple(_scale(figure) for figure in figures)
    data = {
        "colours": COLOURS,
        "order": [scale.key for scale in scales],
        "figures": {scale.key: {"scale": scale, "steps": painted[scale.key]} for scale in scales},
    }
    return SkinMap(
        tuple(groups), scales, next((s for s in scales if first and s.key == first.key), None), data
    )


def _painted(figure: MapFigure, sensors: Sequence[MapSensor]) -> list[tuple[int, str]]:
    """Return step and text of each sensor; (−1, words) where there is no value or it is set aside."""
    low, high = _range(figure)
    return [_step(figure, sensor, low, high) for sensor in sensors]


def _step(figure: MapFigure, sensor: MapSensor, low: float, high: float) -> tuple[int, str]:
    key = (sensor.module, sensor.sensor)
    if sensor.set_aside:
        return NO_VALUE, "set aside" if sensor.has_page else "not measured"
    if figure.verdicts is not None:
        return VERDICT_STEPS.get(figure.verdicts.get(key, ""), (NO_VALUE, "no verdict"))
    value = figure.values.get(key, math.nan)
    if not math.isfinite(value):
        return NO_VALUE, "no value"
    fraction = (value - low) / (high - low) if high > low else 0.5
    return palette.RAMP.index(palette.ramp_colour(fraction)), _value_text(value, low, high)


def _value_text(value: float, low: float, high: float) -> str:
    """Return a value to two digits of the figure's range over the map."""
    if not 1e-4 < high - low < 1e4:
        return numbers.significant(value, 2)
    return numbers.fixed(value, numbers.decimals_of(high - low))


def _range(figure: MapFigure) -> tuple[float, float]:
    values = [v for v in figure.values.values() if math.isfinite(v)]
    return (min(values), max(values)) if values else (math.nan, math.nan)


def _scale(figure: MapFigure) -> Scale:
    low, high = _range(figure)
    if figure.verdicts is not None:
        marks = tuple((step, verdict) for verdict, (step, _) in VERDICT_STEPS.items())
        return Scale(figure.key, figure.title, "", "", "", marks)
    if not math.isfinite(low):
        return Scale(figure.key, figure.title, figure.unit, "no value", "", ())
    ends = [_value_text(end, low, high) for end in (low, high)]
    if low == high:
        return Scale(figure.key, figure.title, figure.unit, f"{ends[0]} in every one", "", ())
    return Scale(figure.key, figure.title, figure.unit, ends[0], ends[1], ())


def _tile(
    sensors: Sequence[MapSensor],
    indices: Mapping[tuple[str, str], int],
    steps: Sequence[tuple[int, str]],
    figure: MapFigure | None,
) -> MapTile:
    bars = any(s.ends is None for s in sensors)
    places = _bar_places(sensors) if bars else _edge_places(sensors)
    edges = []
    for sensor, (start, end, label) in zip(sensors, places, strict=True):
        index = indices[sensor.module, sensor.sensor]
        step, text = steps[index]
        words = f"{text} {figure.unit}".strip() if figure and step != NO_VALUE else text
        edges.append(
            MapEdge(
                index=index,
                module=sensor.module,
                sensor=sensor.sensor,
                href=slugs.sensor_href(sensor.module, sensor.sensor) if sensor.has_page else "",
                start=start,
                end=end,
                label=label,
                set_aside=sensor.set_aside,
                colour=COLOURS[step] if step != NO_VALUE else "",
                text=text if step != NO_VALUE else "",
                name=f"{sensor.module} {sensor.sensor}: {words}",
            )
        )
    outline = "" if bars else _outline([end for s in sensors for end in s.ends or ()], sensors)
    module = sensors[0]
    href = slugs.module_href(module.module) if any(s.has_page for s in sensors) else ""
    return MapTile(module.generation, module.module, href, outline, tuple(edges), bars)


def _bar_places(sensors: Sequence[MapSensor]) -> list[tuple[Point, Point, Point]]:
    """Return upright bars side by side; the names of sensors stand below them."""
    gap = min(_BAR_GAP, (TILE_WIDTH - 2 * _UPPER_EDGE) / max(len(sensors), 1))
    left = TILE_WIDTH / 2 - gap * (len(sensors) - 1) / 2
    base, top = TILE_HEIGHT - 26.0, 22.0
    xs = [round(left + i * gap, 1) for i in range(len(sensors))]
    return [((x, base), (x, top), (x, base + 14.0)) for x in xs]


def _edge_places(sensors: Sequence[MapSensor]) -> list[tuple[Point, Point, Point]]:
    place = _placing([end for s in sensors for end in s.ends or ()])
    drawn = [tuple(place(end) for end in s.ends or ()) for s in sensors]
    outer = _sides([end for ends in drawn for end in ends])
    labels: list[Point] = []
    for start, end in drawn:
        offered = _label_places(start, end, side={start, end} in outer)
        free = [p for p in offered if not any(_meet(p, other) for other in labels)]
        labels.append((free or offered)[0])
    return [(start, end, label) for (start, end), label in zip(drawn, labels, strict=True)]


def _sides(places: Sequence[Point]) -> list[set[Point]]:
    """Return the pairs of neighbouring corners of the outline."""
    corners = convex_hull(places)
    return [{a, b} for a, b in zip(corners, [*corners[1:], *corners[:1]], strict=True)]


def _meet(first: Point, second: Point) -> bool:
    """Whether two values that stand there would cover each other."""
    return abs(first[0] - second[0]) < 18 and abs(first[1] - second[1]) < 10


def _placing(nodes: Sequence[Point]) -> _Placing:
    left, right = min(x for x, _ in nodes), max(x for x, _ in nodes)
    low, high = min(y for _, y in nodes), max(y for _, y in nodes)
    across = (TILE_WIDTH - 2 * _SIDE_EDGE) / ((right - left) or 1.0)
    upright = (TILE_HEIGHT - 2 * _UPPER_EDGE) / ((high - low) or 1.0)
    return _Placing(min(across, upright), (left + right) / 2, (low + high) / 2)


@dataclass(frozen=True)
class _Placing:
    """From mm in the module to px in the tile, y upwards in the module."""

    scale: float
    middle_x: float
    middle_y: float

    def __call__(self, point: Point) -> Point:
        x = TILE_WIDTH / 2 + (point[0] - self.middle_x) * self.scale
        y = TILE_HEIGHT / 2 - (point[1] - self.middle_y) * self.scale
        return round(x, 1), round(y, 1)


def _label_places(start: Point, end: Point, side: bool) -> list[Point]:
    """Return where an edge's value may stand, best first: outside a side, along an edge that runs inside.

    Diagonals cross in the middle, where their values would meet.
    """
    if side:
        return [_beside(start, end)]
    lower, upper = sorted((start, end))
    shares = (0.28, 0.72, 0.36, 0.64, 0.5, 0.2, 0.8)
    reach_x, reach_y = upper[0] - lower[0], upper[1] - lower[1]
    return [(round(lower[0] + s * reach_x, 1), round(lower[1] + s * reach_y, 1)) for s in shares]


def _beside(start: Point, end: Point) -> Point:
    """Return the place outside the middle of a side, further off where the side stands upright."""
    x, y = (start[0] + end[0]) / 2, (start[1] + end[1]) / 2
    across, upright = end[1] - start[1], start[0] - end[0]
    length = math.hypot(across, upright) or 1.0
    across, upright = across / length, upright / length
    if across * (x - TILE_WIDTH / 2) + upright * (y - TILE_HEIGHT / 2) < 0:
        across, upright = -across, -upright
    reach = 10.0 + 7.0 * across**2
    return round(x + reach * across, 1), round(y + reach * upright, 1)


def _outline(nodes: Sequence[Point], sensors: Sequence[MapSensor]) -> str:
    place = _placing([end for s in sensors for end in s.ends or ()])
    return " ".join(f"{x:g},{y:g}" for x, y in (place(p) for p in convex_hull(nodes)))


def convex_hull(points: Sequence[Point]) -> list[Point]:
    """Return the corners of the convex outline of *points*, in order around it (monotone chain)."""
    ordered = sorted(set(points))
    if len(ordered) < 3:
        return ordered
    return _chain(ordered)[:-1] + _chain(ordered[::-1])[:-1]


def _chain(points: Sequence[Point]) -> list[Point]:
    made: list[Point] = []
    for point in points:
        while len(made) >= 2 and _turn(made[-2], made[-1], point) <= 0:
            made.pop()
        made.append(point)
    return made


def _turn(a: Point, b: Point, c: Point) -> float:
    return (b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0])
