"""The skin map: edges where sensors sit, coloured by what the reader picks, never by colour alone."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest

from campaign.pages import palette
from campaign.pages.skin_map import (
    ATTENTION_STEP,
    COLOURS,
    TILE_HEIGHT,
    TILE_WIDTH,
    MapFigure,
    MapSensor,
    SkinMap,
    convex_hull,
    skin_map,
)

NODES = {"A": (0.0, 0.0), "B": (96.0, 0.0), "C": (88.0, 62.0), "D": (10.0, 58.0)}
EDGES = ("AB", "BC", "CD", "DA", "AC", "BD")


def sensors(module: str = "M01", generation: str = "g", aside: str = "") -> list[MapSensor]:
    return [MapSensor(generation, module, e, (NODES[e[0]], NODES[e[1]]), e == aside) for e in EDGES]


def figure(module: str = "M01", key: str = "hysteresis") -> MapFigure:
    return MapFigure(key, "hysteresis", "%FSO", {(module, e): float(i) for i, e in enumerate(EDGES)})


def edges(mapped: SkinMap) -> dict[str, object]:
    return {edge.sensor: edge for _, tiles in mapped.groups for tile in tiles for edge in tile.edges}


def test_edges_are_coloured_by_their_place_in_the_range() -> None:
    drawn = edges(skin_map(sensors(), [figure()]))
    assert drawn["AB"].colour == palette.RAMP[0]
    assert drawn["BD"].colour == palette.RAMP[-1]
    assert drawn["BD"].text == "5.0"
    assert drawn["BD"].name == "M01 BD: 5.0 %FSO"
    assert drawn["BD"].href == "sensor-M01-BD.html"


def test_what_is_set_aside_or_has_no_value_has_no_colour_and_says_so() -> None:
    values = {("M01", e): 1.0 for e in EDGES} | {("M01", "BC"): math.nan}
    drawn = edges(skin_map(sensors(aside="CD"), [MapFigure("h", "h", "", values)]))
    assert (drawn["CD"].colour, drawn["CD"].name) == ("", "M01 CD: set aside")
    assert (drawn["BC"].colour, drawn["BC"].name) == ("", "M01 BC: no value")
    assert drawn["AB"].colour != ""


def test_what_no_trial_names_leads_nowhere_and_is_said_to_be_unmeasured() -> None:
    known = MapSensor("g", "M01", "AB", (NODES["A"], NODES["B"]))
    spare = replace(known, sensor="CD", set_aside=True, has_page=False)
    drawn = skin_map([known, spare], [MapFigure("h", "h", "", {("M01", "AB"): 1.0})])
    assert [edge.href for edge in drawn.groups[0][1][0].edges] == ["sensor-M01-AB.html", ""]
    assert drawn.groups[0][1][0].edges[1].name == "M01 CD: not measured"
    assert drawn.has_unmeasured
    assert drawn.groups[0][1][0].href == "module-M01.html"
    assert skin_map([spare], []).groups[0][1][0].href == ""
    assert not skin_map([known], []).has_unmeasured


def test_y_points_up_in_the_module_and_down_on_the_page() -> None:
    drawn = edges(skin_map(sensors(), [figure()]))
    assert drawn["AB"].start[1] > drawn["CD"].start[1]
    for edge in drawn.values():
        for x, y in (edge.start, edge.end):
            assert 0 <= x <= TILE_WIDTH
            assert 0 <= y <= TILE_HEIGHT


def test_values_of_crossing_diagonals_do_not_meet() -> None:
    drawn = edges(skin_map(sensors(), [figure()]))
    assert math.dist(drawn["AC"].label, drawn["BD"].label) > 10


def test_modules_stand_by_generation_and_the_map_gives_their_tiles() -> None:
    mapped = skin_map([*sensors("M02", "b"), *sensors("M01", "a")], [figure()])
    assert [(g, [t.module for t in tiles]) for g, tiles in mapped.groups] == [("a", ["M01"]), ("b", ["M02"])]
    tile = mapped.tile("M02")
    assert tile is not None
    assert tile.href == "module-M02.html"
    assert mapped.tile("M03") is None


def test_without_geometry_a_module_is_a_row_of_bars() -> None:
    mapped = skin_map([MapSensor("g", "M01", s) for s in "abc"], [figure()])
    tile = mapped.tile("M01")
    assert mapped.has_bars
    assert tile is not None
    assert tile.outline == ""
    xs = [edge.start[0] for edge in tile.edges]
    assert xs == sorted(set(xs))
    assert all(edge.start[0] == edge.end[0] for edge in tile.edges)


def test_verdicts_are_words_with_the_attention_colour_for_what_is_not_met() -> None:
    verdicts = {("M01", "AB"): "met", ("M01", "BC"): "not met", ("M01", "CD"): "not decided"}
    mapped = skin_map(sensors(), [MapFigure("v", "verdict", "", {}, verdicts)])
    drawn = edges(mapped)
    assert drawn["BC"].colour == palette.ATTENTION == COLOURS[ATTENTION_STEP]
    assert [drawn[e].text for e in ("AB", "BC", "CD")] == ["met", "not", "?"]
    assert mapped.scales[0].marks


def test_the_script_gets_steps_and_texts_of_every_figure_in_the_order_of_edges() -> None:
    mapped = skin_map(sensors(), [figure(key="one"), figure(key="two")], chosen="two")
    assert mapped.chosen is not None
    assert mapped.chosen.key == "two"
    assert mapped.data["order"] == ["one", "two"]
    steps = mapped.data["figures"]["one"]["steps"]  # type: ignore[index]
    for edge in edges(mapped).values():
        step, text = steps[edge.index]
        assert (COLOURS[step], text) == (edge.colour, edge.text)


def test_without_figures_the_map_is_drawn_bare() -> None:
    mapped = skin_map(sensors(), [])
    assert mapped.chosen is None
    assert {edge.colour for edge in edges(mapped).values()} == {""}


@pytest.mark.parametrize(
    ("points", "corners"),
    [
        ([(0, 0), (2, 0), (2, 2), (0, 2), (1, 1)], {(0, 0), (2, 0), (2, 2), (0, 2)}),
        ([(0, 0), (1, 0), (2, 0)], {(0, 0), (2, 0)}),
        ([(0, 0)], {(0, 0)}),
    ],
)
def test_the_outline_is_the_convex_hull(
    points: list[tuple[float, float]], corners: set[tuple[float, float]]
) -> None:
    assert set(convex_hull(points)) == corners


def test_values_of_a_braced_panel_do_not_cover_each_other() -> None:
    turn = 2 * math.pi / 5
    places = {
        name: (60 * math.sin(i * turn + 0.1), 54 * math.cos(i * turn + 0.1)) for i, name in enumerate("PQRST")
    }
    pairs = [(a, b) for i, a in enumerate("PQRST") for b in "PQRST"[i + 1 :]]
    braced = [MapSensor("g", "M01", a + b, (places[a], places[b])) for a, b in pairs]
    labels = [edge.label for edge in edges(skin_map(braced, [])).values()]
    close = [
        (one, other)
        for i, one in enumerate(labels)
        for other in labels[i + 1 :]
        if abs(one[0] - other[0]) < 16 and abs(one[1] - other[1]) < 9
    ]
    assert not close
