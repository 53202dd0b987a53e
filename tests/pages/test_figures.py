"""Figures: valid in the plot library's schema, within the limits, thinned without loss of extremes."""

from __future__ import annotations

import math
import re
import xml.etree.ElementTree as ElementTree
from typing import Any

import numpy as np
import plotly.graph_objects as go
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from campaign.pages import figures, palette
from campaign.pages.drawing import ready
from campaign.pages.figures import Figure
from campaign.pages.house_style import HOUSE_TEMPLATE
from campaign.pages.static_figure import static_svg
from campaign.pages.static_strokes import curve
from campaign.pages.thinning import rounded, thinned
from campaign.pages.ticks import linear_ticks, logarithmic_ticks


def made(traces: list[dict[str, Any]], layout: dict[str, Any], **more: Any) -> Figure:
    return ready(Figure("toy", "c", "alternative text", tuple(traces), layout, **more))


def every_kind() -> Figure:
    titles = ["M01", "M02", "M03", "M04", "M05"]
    layout = figures.small_multiples(
        titles, figures.axis("Strain", "%"), figures.axis("Signal", "pF"), columns=2
    )
    layout["shapes"] = [figures.level_line(1.0), figures.level_line(1.0, upright=True, axes="2")]
    traces = [
        figures.band([0, 1, 2], [0, 1, 2], [1, 2, 3]),
        figures.line([0, 1, 2, 3], [0, math.nan, 2, 3], dash="dash"),
        figures.points([0, 1], [0, 1], axes="2", text=["a", "b"], links=["index.html"] * 2),
        figures.intervals([1, 2], [0.5, math.nan], [1.5, 3], [0, 1], axes="3"),
        figures.intervals([1, 2], [0.5, 1], [1.5, math.inf], [0, 1], axes="4", across=False),
        figures.bars([0, 1, 2], [1, -2, 3], axes="5", width=0.6),
        figures.bars([0, 1], [1, 2], axes="5", across=True),
    ]
    return made(traces, layout)


def test_every_kind_of_trace_and_the_template_are_valid_in_the_librarys_schema() -> None:
    figure = every_kind()
    drawn = go.Figure(data=list(figure.traces), layout={**figure.layout, "template": HOUSE_TEMPLATE})
    assert {trace.type for trace in drawn.data} == {"scatter", "bar"}


def test_the_static_picture_shows_every_trace_with_a_text_alternative() -> None:
    root = ElementTree.fromstring(static_svg(every_kind()))
    assert root.get("role") == "img"
    assert root.get("aria-label") == "alternative text"
    words = {element.text for element in root.iter("text")}
    assert {"M01", "M05", "Strain / %", "Signal / pF"} <= words
    bars = [e.get("d", "") for e in root.iter("path") if e.get("fill") == palette.RAMP[6]]
    assert sum(path.count("z") for path in bars) == 5


def test_the_static_picture_uses_currentcolor_and_colours_of_the_palette_alone() -> None:
    root = ElementTree.fromstring(static_svg(every_kind()))
    used = {e.get(key) for e in root.iter() for key in ("fill", "stroke")} - {None}
    assert used <= {"currentColor", "none", *palette.DARK}
    assert not any(e.get("style") or e.get("class") for e in root.iter())


def test_a_point_stands_where_its_values_say() -> None:
    axes = figures.layout(
        figures.axis("x", low=0, high=10), figures.axis("y", low=1, high=100, logarithmic=True)
    )
    figure = made([figures.points([5], [10], size=8)], axes)
    margin = figure.layout["margin"]
    x = margin["l"] + (figures.WIDTH - margin["l"] - margin["r"]) / 2
    y = margin["t"] + (figure.height - margin["t"] - margin["b"]) / 2
    dot = next(
        e for e in ElementTree.fromstring(static_svg(figure)).iter() if e.get("stroke-linecap") == "round"
    )
    assert (dot.get("d"), dot.get("stroke-width")) == (
        f"M{10 * x:g} {10 * y:g}h0",
        "80",
    )  # whole tenths of a pixel


def test_ranges_reach_over_error_bars_bars_and_shared_axes() -> None:
    one = made([figures.intervals([5], [1], [9], [0])], figures.layout(figures.axis("x"), figures.axis("y")))
    low, high = one.layout["xaxis"]["range"]
    assert low < 1 < 9 < high
    bars = made([figures.bars([0], [4])], figures.layout(figures.axis("x"), figures.axis("y")))
    assert bars.layout["yaxis"]["range"][0] < 0
    shared = figures.small_multiples(["a", "b"], figures.axis("x"), figures.axis("y"))
    both = made([figures.points([0, 1], [0, 1]), figures.points([0, 9], [0, 1], axes="2")], shared)
    assert both.layout["xaxis"]["range"] == both.layout["xaxis2"]["range"]
    assert both.layout["xaxis"]["range"][1] > 9


def test_labels_on_logarithmic_axes_are_placed_by_exponents() -> None:
    axes = figures.layout(
        figures.axis("x", logarithmic=True), figures.axis("y"), annotations=[figures.label("a", 100, 1)]
    )
    figure = made([figures.points([1, 1000], [0, 1])], axes)
    assert figure.layout["annotations"][0]["x"] == pytest.approx(2.0)


def test_numbers_are_rounded_to_five_digits_of_the_axis() -> None:
    figure = made(
        [figures.line([0, 1], [0, 123.456789])],
        figures.layout(figures.axis("x"), figures.axis("y", low=0, high=200)),
    )
    assert figure.traces[0]["y"][1] == 123.46


def test_too_many_markers_or_points_are_refused() -> None:
    axes = figures.layout(figures.axis("x"), figures.axis("y"))
    many = list(range(2001))
    with pytest.raises(ValueError, match="2001 markers"):
        made([figures.points(many, many)], axes)
    many = list(range(10_001))
    with pytest.raises(ValueError, match="10001 points of lines"):
        made([figures.line(many, many)], axes)


def test_texts_of_recordings_are_not_read_as_markup() -> None:
    trace = figures.points([0], [0], name="<b>x</b>", text=["<a href='javascript:x'>y</a>"])
    assert trace["name"] == "&lt;b&gt;x&lt;/b&gt;"
    assert trace["hovertext"] == ["&lt;a href='javascript:x'&gt;y&lt;/a&gt;"]
    label = made(
        [trace],
        figures.layout(figures.axis("x"), figures.axis("y"), annotations=[figures.label("<i>&", 0, 0)]),
    )
    words = [e.text for e in ElementTree.fromstring(static_svg(label)).iter("text")]
    assert "<i>&" in words


def test_markup_in_titles_and_labels_is_refused() -> None:
    """The plot library would set it by style attributes, which the content policy forbids."""
    with pytest.raises(ValueError, match="markup"):
        made([figures.points([0], [0])], figures.layout(figures.axis("x<sub>1</sub>"), figures.axis("y")))


@given(arrays(float, st.integers(1, 5000), elements=st.floats(-1e6, 1e6)))
def test_thinning_keeps_the_extremes_the_ends_and_the_order(y: np.ndarray[Any, Any]) -> None:
    x = np.arange(len(y), dtype=float)
    thin_x, thin_y = thinned(x, y, 100)
    assert len(thin_x) <= 100
    assert thin_y.max() == y.max()
    assert thin_y.min() == y.min()
    assert np.all(np.diff(thin_x) > 0)
    assert (thin_x[0], thin_x[-1]) == (x[0], x[-1])
    assert np.array_equal(thin_y, y[thin_x.astype(int)])


def test_short_curves_and_flat_spans_stay_as_they_are() -> None:
    x = np.arange(10.0)
    assert thinned(x, x, 100)[0] is x
    assert rounded(x, 0.0) is x


@given(st.floats(-1e6, 1e6), st.floats(1e-6, 1e6))
def test_ticks_lie_within_the_axis_at_equal_steps(low: float, width: float) -> None:
    ticks = [place for place, _ in linear_ticks(low, low + width)]
    assert 2 <= len(ticks) <= 12
    slack = 1e-6 * width + 1e-9 * abs(low)
    assert low - slack <= ticks[0]
    assert ticks[-1] <= low + width + slack
    assert np.allclose(np.diff(ticks, 2), 0, atol=1e-6 * width + 1e-9 * abs(low))


def test_ticks_read_well() -> None:
    assert [text for _, text in linear_ticks(-1.2, -0.3, 3)] == ["−1.0", "−0.5"]
    assert [text for _, text in linear_ticks(-0.9, 0.9, 2)] == ["−0.5", "0.0", "0.5"]
    assert [text for _, text in linear_ticks(-0.25, 0.25)] == ["−0.2", "−0.1", "0.0", "0.1", "0.2"]
    assert [text for _, text in logarithmic_ticks(-1, 1)] == ["0.1", "0.2", "0.5", "1", "2", "5", "10"]
    assert [text for _, text in logarithmic_ticks(0, 6)][:3] == ["1", "10", "100"]


@given(arrays(float, st.integers(3, 400), elements=st.floats(0, 500)))
def test_a_curve_of_a_picture_stays_within_a_pixel_of_its_points(y: np.ndarray[Any, Any]) -> None:
    x = np.linspace(0, 800, len(y))
    (start, steps) = re.fullmatch(r"M(-?\d+ -?\d+)l(.*)", curve(x, y)).groups()  # type: ignore[union-attr]
    numbers = np.array([int(n) for n in re.findall(r"-?\d+", steps)]).reshape(-1, 2)
    places = np.cumsum([[int(n) for n in start.split()], *numbers.tolist()], axis=0) / 10
    assert np.abs(places[-1] - (x[-1], y[-1])).max() <= 0.05 + 1e-9
    begins, ways = places[:-1], np.diff(places, axis=0)
    lengths = np.maximum((ways**2).sum(axis=1), 1e-12)
    for point in np.column_stack([x, y]):
        along = np.clip(((point - begins) * ways).sum(axis=1) / lengths, 0, 1)
        off = np.hypot(*(begins + along[:, None] * ways - point).T).min()
        assert off < 1.0


def test_neighbours_that_look_alike_are_one_path_and_what_lies_within_is_not_cut_off() -> None:
    axes = figures.layout(figures.axis("x", low=0, high=3), figures.axis("y", low=0, high=3))
    inside = [figures.line([0, 1, 2], [i, 2, 0]) for i in range(3)]
    root = ElementTree.fromstring(static_svg(made(inside, axes)))
    assert len([e for e in root.iter("path") if e.get("stroke-width") == "15"]) == 1
    assert not list(root.iter("clipPath"))
    over = ElementTree.fromstring(static_svg(made([figures.line([0, 1], [0, 9])], axes)))
    assert len(list(over.iter("clipPath"))) == 1
