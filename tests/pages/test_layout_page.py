"""Page 8: what is said of shapes that were rebuilt, and how they are drawn."""

from __future__ import annotations

import json
import math
import re
from dataclasses import replace
from html import unescape

import numpy as np
import plotly.graph_objects as go
import pytest

from campaign.analyses.layout_results import (
    DETECTED,
    GENERATION_LINE,
    LINES,
    NO_BLUNDER,
    NO_TEST,
    ONE_EDGE,
    OWN_LINE,
    Layout,
    Placement,
)
from campaign.analyses.layout_tables import placement_table
from campaign.analyses.layout_views import BY_FIT, FRAMES, shape_view
from campaign.pages import numbers, palette
from campaign.pages.drawing import ready
from campaign.pages.layout import layout_page
from campaign.pages.layout_scripts import layout_script_address, layout_scripts
from campaign.pages.layout_sections import lengths_said, module_shapes
from campaign.pages.layout_shapes import FACTORS, draw, magnification, shape_figure
from campaign.pages.layout_words import edge_sentence, placement_sentence, verdict_words
from campaign.pages.static_figure import static_svg
from tests.analyses.layout_campaign import SEATED, laid
from tests.pages.layout_page_alone import page_of, results_of, site_of


def words(page: bytes) -> str:
    return re.sub(r"\s+", " ", unescape(re.sub(r"<[^>]+>", " ", page.decode())))


def spaced(number: str) -> str:
    """A number as :func:`words` leaves it."""
    return re.sub(r"\s+", " ", number)


@pytest.fixture(scope="module")
def slipped() -> Layout:
    """Four panels, a slip that no test can locate, and one sensor without a signal on another panel."""
    layout = laid().with_signals(-9.0, "AC", "2")
    case = laid()
    kept = {k: f for k, f in case.features.items() if (f.identity.module, f.identity.sensor) != ("M03", "CD")}
    without = case.again(kept)
    placements = [p for p in layout.placements if p.module != "M03"]
    placements += [p for p in without.placements if p.module == "M03"]
    return replace(layout, placements=tuple(sorted(placements, key=lambda p: (p.module, p.name, p.line))))


@pytest.fixture(scope="module")
def site(slipped: Layout) -> dict[str, bytes]:
    return site_of(slipped)


@pytest.fixture(scope="module")
def braced() -> Layout:
    """Two braced panels, the slip of one located."""
    return laid("braced", 2).with_signals(-9.0, "QS", "2")


def named(braced: Layout) -> Placement:
    p = next(p for p in braced.placements if (p.module, p.name, p.line) == ("M01", "2", OWN_LINE))
    assert p.tests is not None
    assert p.tests.blunder.sensors[0] == "QS"
    return p


# ---------------------------------------------------------------- what the page says


def test_there_is_no_page_without_shapes() -> None:
    assert layout_page(results_of(None)) is None  # type: ignore[arg-type]


def test_errors_stand_beside_their_predictions_by_both_choices_of_lines(
    slipped: Layout, site: dict[str, bytes]
) -> None:
    text = words(site["layout.html"])
    for line in LINES:
        table = slipped.errors
        chosen = (table["read_by"] == line) & (table["figure"] == "node error after best fit")
        row = table[chosen].iloc[0]
        assert spaced(numbers.significant(row["rms_mm"], 2, "mm")) in text
        assert spaced(numbers.limits(row["predicted_low_mm"], row["predicted_high_mm"], "mm")) in text
    assert "By the generation’s line it is" in text
    assert "the limit of 2.0 mm" in text
    assert "known to 0.10 mm in each coordinate" in text


def test_the_tests_are_said_with_what_chance_makes_and_nothing_is_located_on_four_nodes(
    slipped: Layout, site: dict[str, bytes]
) -> None:
    text = words(site["layout.html"])
    assert "one edge more than the shape needs: a bad length can be detected, not located" in text
    assert "12 tested placements" in text
    assert "chance alone makes 0.60 on average" in text
    assert "a bad length is detected and not located" in text
    assert "M03 , placements 1, 2, 3, 4: solved; CD: no signal." in text
    assert "In 4 placements so many lengths are missing that the shape is just determined" in text


def test_a_placement_at_the_edge_of_its_own_limit_is_no_found_bad_length(slipped: Layout) -> None:
    row = placement_table(slipped).iloc[0].to_dict()
    edge = row | {"verdict": DETECTED, "p": 0.03, "p_adjusted": 0.9}
    sure = row | {"verdict": DETECTED, "p": 1e-5, "p_adjusted": 0.001}
    assert verdict_words(edge) == "beyond its own limit only"
    assert verdict_words(sure) == "bad length detected, not located"
    said = row | {"verdict": ONE_EDGE, "p_adjusted": 0.001, "suspected": "RT", "error_mm": -18.0}
    assert verdict_words(said | {"expanded_uncertainty_mm": 2.0}).startswith("RT read wrong by −18.0 ± 2.0")
    assert verdict_words(row | {"verdict": NO_TEST, "p_adjusted": math.nan}) == "no test: just determined"
    assert verdict_words(row | {"verdict": NO_BLUNDER, "p_adjusted": 1.0}) == "nothing found"


def test_the_model_and_the_caution_are_said(site: dict[str, bytes]) -> None:
    text = words(site["layout.html"])
    assert "bowed, wrapped or out of plane breaks the model, and the χ² test is the only warning" in text
    assert "a just determined shape has none" in text
    assert "Before using these figures." in text
    assert "several times as large as the errors of the lengths, growing as the shape flattens" in text
    for word in ("safe", "certified", "approved", "nan"):
        assert word not in text.lower().split()


def test_a_named_edge_is_named_with_its_error_first_of_all(braced: Layout) -> None:
    page = page_of(braced)
    first = page.figures[0]
    assert first.name == "shape"
    assert "M01, placement 2" in first.caption
    assert "QS" in first.caption
    said = words(site_of(braced)["layout.html"])
    blunder = named(braced).tests.blunder  # type: ignore[union-attr]
    assert spaced(numbers.measured(blunder.error_mm, blunder.uncertainty_mm, "mm")) in said
    assert "redundancy 3, two edges or more beyond what the shape needs" in said


def test_the_extra_sd_is_stated_where_it_is_told_and_bounded_where_not() -> None:
    plain, seated = laid().layout, laid(seat_mm=SEATED).layout
    told = words(site_of(seated)["layout.html"])
    row = seated.extra.set_index("read_by").loc[OWN_LINE]
    assert spaced(numbers.interval(row["extra_sd_mm"], row["low_mm"], row["high_mm"], "mm")) in told
    assert "mounting in another frame, coupling between sensors, hysteresis" in told
    bounded = words(site_of(plain)["layout.html"])
    assert "is distinguishable from zero by own lines; it is at most" in bounded


def test_known_positions_taken_as_exact_are_said_to_be() -> None:
    case = laid()
    exact = case.again(description=replace(case.description, node_reference_mm=float("nan")))
    assert "taken as exactly known" in words(site_of(exact)["layout.html"])


def test_a_campaign_of_which_nothing_can_be_solved_still_has_its_page() -> None:
    case = laid()
    few = {k: f for k, f in case.features.items() if f.identity.sensor in ("AB", "CD", "AC")}
    layout = case.again(few)
    page = page_of(layout)
    assert [figure.name for figure in page.figures] == ["shape", "edges", "amplification"]
    text = words(site_of(layout)["layout.html"])
    assert "not solved" in text
    assert "hold no three nodes together" in text
    assert "nan" not in text.lower().split()


# ---------------------------------------------------------------- drawings


def test_figures_are_in_the_librarys_schema_and_bear_their_pictures(slipped: Layout) -> None:
    page = page_of(slipped)
    names = [figure.name for figure in page.figures]
    assert names == ["shape", "errors", "agreement", "edges", "tests", "amplification"]
    for figure in page.figures:
        go.Figure(data=list(figure.traces), layout=figure.layout)
        picture = static_svg(ready(figure))
        assert 'role="img"' in picture
        assert "nan" not in picture.lower()
        assert figure.caption.endswith(".")
        assert figure.table or figure.data is not None


def test_a_shape_has_the_same_scale_along_both_axes(slipped: Layout) -> None:
    figure = ready(shape_figure(slipped.placements[0], ["generation 1"]))
    margin, layout = figure.layout["margin"], figure.layout
    inner = 864 - margin["l"] - margin["r"], figure.height - margin["t"] - margin["b"]
    scales = []
    for suffix in ("", "2"):
        x, y = layout[f"xaxis{suffix}"], layout[f"yaxis{suffix}"]
        assert x["scaleanchor"] == f"y{suffix}"
        wide = inner[0] * (x["domain"][1] - x["domain"][0])
        scales += [(x["range"][1] - x["range"][0]) / wide, (y["range"][1] - y["range"][0]) / inner[1]]
    assert scales == pytest.approx([scales[0]] * 4, rel=0.01)


def test_differences_and_ellipses_are_drawn_larger_by_the_same_stated_factor(slipped: Layout) -> None:
    own = slipped.of_line(OWN_LINE)[0]
    view = shape_view(own, BY_FIT)
    factor = magnification(view)
    assert factor in FACTORS
    style = palette.GENERATION_STYLES[0]
    drawn = draw(own, BY_FIT, style)
    known, rebuilt = (np.column_stack([t["x"], t["y"]]) for t in _markers(drawn.traces))
    assert known == pytest.approx(view.known_mm)
    assert rebuilt - known == pytest.approx(factor * view.errors_mm)
    ring = next(t for t in drawn.traces if t["mode"] == "lines" and t["line"]["width"] == 1.0)
    x = np.array(ring["x"])[:19]
    y = np.array(ring["y"])[:19]
    reach = np.hypot(x - rebuilt[0, 0], y - rebuilt[0, 1]).max()
    expected = factor * view.ellipses.factor_95 * view.ellipses.semi_major_mm[0]
    assert reach == pytest.approx(expected, rel=0.02)  # eighteen points need not meet the end of the axis
    heads = [note["text"] for note in shape_figure(own, ["generation 1"]).layout["annotations"]]
    assert f"ifferences ×{factor:g}" in heads[1]
    assert heads[0].startswith(f"{own.module}, placement {own.name}<br>Datum A, B; ")


def _markers(traces):
    known = next(t for t in traces if t["mode"] == "markers" and t["marker"]["symbol"] == "circle-open")
    rebuilt = next(t for t in traces if t["mode"] == "markers" and t["marker"]["symbol"] == "circle")
    return known, rebuilt


def test_a_suspected_edge_is_told_by_its_dash_its_cross_and_its_name(braced: Layout) -> None:
    traces = shape_figure(named(braced), ["generation 1"]).traces
    heavy = [t for t in traces if t["mode"] == "lines" and t["line"]["dash"] == "longdash"]
    crosses = [t for t in traces if t["mode"] == "markers" and t["marker"]["symbol"] == "x"]
    texts = [text for t in traces if t["mode"] == "text" for text in t["text"]]
    assert len(heavy) == len(crosses) == len(FRAMES)
    assert texts.count("QS suspected") == len(FRAMES)
    assert {"P", "Q", "R", "S", "T"} <= set(texts)


def test_an_edge_without_a_length_is_dashed_and_says_so(slipped: Layout) -> None:
    own = next(p for p in slipped.placements if p.module == "M03" and p.line == OWN_LINE)
    traces = shape_figure(own, ["generation 1"]).traces
    assert sum(t["mode"] == "lines" and t["line"]["dash"] == "dash" for t in traces) == len(FRAMES)
    missing = [edge.sensor for edge in own.edges].index("CD")
    assert edge_sentence(own, missing).startswith("CD: no length; known ")
    assert "Just determined: no length is checked by the others" in placement_sentence(own)


def test_what_is_said_of_a_placement_counts_all_tests(slipped: Layout, braced: Layout) -> None:
    own = next(p for p in slipped.placements if (p.module, p.name, p.line) == ("M01", "2", OWN_LINE))
    assert "a bad length is detected, not located (every edge is suspected alike)" in placement_sentence(
        own, 0.001
    )
    assert "not with all placements tested counted" in placement_sentence(own, 0.4)
    said = placement_sentence(named(braced), 0.001)
    assert "QS" in said
    assert "read wrong by" in said
    calm = next(p for p in slipped.placements if p.tests is not None and p.tests.p > 0.3)
    assert placement_sentence(calm, 1.0).endswith("nothing found.")


# ---------------------------------------------------------------- scripts and size


def test_every_placement_has_its_drawing_in_the_script_of_its_module(slipped: Layout) -> None:
    scripts = layout_scripts(slipped)
    assert set(scripts) == {
        layout_script_address(module, line) for module in ("M01", "M02", "M03", "M04") for line in LINES
    }
    for address, script in scripts.items():
        head, content = script.split(b"] = ", 1)
        assert json.loads(head.split(b")[", 1)[1]) == address
        found = json.loads(content[:-2])
        for part in ("figures", "said", "captions"):
            assert sorted(found[part]) == ["0", "1", "2", "3"]
        assert len(script) < 120_000
    assert layout_scripts(None) == {}


def test_the_list_to_pick_from_starts_with_what_is_drawn(braced: Layout) -> None:
    page = page_of(braced)
    choices = page.data["layout"]
    module, number, line = choices["first"]  # type: ignore[index]
    entry = next(one for one in choices["modules"] if one["module"] == module)  # type: ignore[index]
    assert (module, entry["placements"][number], LINES[line]) == ("M01", "2", OWN_LINE)
    assert entry["lines"][number] == [0, 1]
    assert len(choices["lines"]) == 2  # type: ignore[index]


def test_the_page_keeps_its_budget(site: dict[str, bytes]) -> None:
    assert len(site["layout.html"]) < 60_000
    assert len(site["data/layout.js"]) < 120_000


# ---------------------------------------------------------------- pages of modules and sensors


def test_a_module_shows_its_placements_and_a_sensor_how_its_lengths_were_off(slipped: Layout) -> None:
    results = results_of(slipped)
    trial = slipped.of_line(OWN_LINE)[0].trial
    figure = module_shapes(results, "M01", trial, "trial-1", ["G1"])  # type: ignore[arg-type]
    assert figure is not None
    assert figure.name == "trial-1"
    assert "4 placements; furthest off is 2" in figure.caption.replace("\u00a0", " ")
    go.Figure(data=list(figure.traces), layout=figure.layout)
    assert module_shapes(results, "M01", "another.csv", "trial-1", ["G1"]) is None  # type: ignore[arg-type]
    said = lengths_said(results)[("M01", "AC", trial)]  # type: ignore[arg-type]
    assert said.startswith("Read less known length, root mean square over 4\u00a0placements: by its own line")
    assert "by the generation’s line" in said
    assert lengths_said(results_of(None)) == {}  # type: ignore[arg-type]
    assert GENERATION_LINE in set(slipped.edges["read_by"])
