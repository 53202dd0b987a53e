"""Data scripts: what is folded comes back as it was, whatever the texts hold."""

from __future__ import annotations

import math
from typing import Any

from hypothesis import given
from hypothesis import strategies as st

from campaign.pages import figures
from campaign.pages.drawing import ready
from campaign.pages.figures import Figure
from campaign.pages.page import Page
from campaign.pages.page_data import GAP, data_script, folded_row, unfolded
from campaign.pages.tables import Cell

WORDS = st.text(st.sampled_from("ab1 2|:,;.\u202f−<&{}" + GAP), max_size=12)


def page_with(*traces: dict[str, Any], **layout: Any) -> dict[str, Any]:
    axes = figures.layout(figures.axis("x", "mm"), figures.axis("y", "pF"), **layout)
    figure = ready(Figure("toy", "c", "a", traces, axes))
    return unfolded(data_script(Page("index", 0, "t", "toy.html"), {"toy": figure}))


@given(st.lists(WORDS, min_size=1, max_size=6), WORDS)
def test_sentences_and_links_come_back_as_they_were(sentences: list[str], link: str) -> None:
    many = [f"{link}{i // 2}" for i in range(len(sentences))]
    places = list(range(len(sentences)))
    traces = [figures.points(places, places, text=sentences, links=many) for _ in range(2)]
    for trace, written in zip(page_with(*traces)["figures"]["toy"]["traces"], traces, strict=True):
        assert trace["hovertext"] == written["hovertext"]
        assert trace["customdata"] == many


def test_sentences_of_one_pattern_are_written_once_with_their_words_in_lists() -> None:
    sentences = [f"M01 AB, run {i}, rising at {5 * i} %: 0.{i}2 pF" for i in range(1, 40)]
    trace = figures.points(range(1, 40), range(1, 40), text=sentences)
    axes = figures.layout(figures.axis("x"), figures.axis("y"))
    figure = ready(Figure("toy", "c", "a", (trace,), axes))
    script = data_script(Page("index", 0, "t", "toy.html"), {"toy": figure})
    assert script.count(b"rising") == 1
    assert unfolded(script)["figures"]["toy"]["traces"][0]["hovertext"] == sentences


def test_looks_axes_and_labels_come_back_and_stand_once() -> None:
    titles = ["M01", "M02", "M03", "M04"]
    layout = figures.small_multiples(titles, figures.axis("Strain", "%"), figures.axis("Signal", "pF"))
    traces = [
        figures.line([0, 1, math.nan], [i, 1, 2], axes=figures.panel(i), module=title)
        for i, title in enumerate(titles)
    ]
    lines = [figures.level_line(level) for level in (0.0, 1.0)]
    figure = ready(Figure("toy", "c", "a", tuple(traces), {**layout, "shapes": lines}))
    script = data_script(Page("index", 0, "t", "toy.html"), {"toy": figure})
    back = unfolded(script)["figures"]["toy"]
    assert script.count(b'"dash"') == 2
    assert back["layout"]["shapes"] == lines
    assert b'"name"' not in script
    for written, trace in zip(figure.traces, back["traces"], strict=True):
        assert trace == {**written, "x": [0.0, 1.0, None]}
    for key in ("xaxis", "yaxis3"):
        assert back["layout"][key] == figure.layout[key]
    assert [note["text"] for note in back["layout"]["annotations"]] == titles


def test_a_row_keeps_marks_links_and_what_it_sorts_by() -> None:
    cells = [Cell("a"), Cell("b", None, "b.html"), Cell("< 1", "0.5"), Cell("c", "2", "c.html")]
    assert folded_row(("M01", "AB"), cells) == [
        *("M01", "AB", "a"),
        ["b", "b.html"],
        ["< 1", "", "0.5"],
        ["c", "c.html", "2"],
    ]
