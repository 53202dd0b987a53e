"""Pages 9 and 10 and their findings: what is said, drawn and listed, and nothing that is not shown."""

from __future__ import annotations

import re
from dataclasses import replace

import pandas as pd
import plotly.graph_objects as go
import pytest

from campaign.analyses.generation_figures import FIGURES
from campaign.analyses.generations import GENERATION_COLUMNS
from campaign.pages.drawing import ready
from campaign.pages.generation_words import (
    FIGURE_WORDS,
    comparison_sentence,
    comparison_words,
    margin_words,
    shown_unit,
)
from campaign.pages.generations import generations_page
from campaign.pages.planning import planning_page
from campaign.pages.site import build_site
from tests.pages.small_campaign import Sketch, small_results


@pytest.fixture(scope="module")
def results(tmp_path_factory):
    return small_results(tmp_path_factory.mktemp("compared") / "small", Sketch())


@pytest.fixture(scope="module")
def site(results):
    return build_site(results)


def text_of(site, page: str) -> str:
    return re.sub(r"\s+", " ", re.sub(r"<[^>]+>", "", site[page].decode("utf-8")))


def test_every_figure_has_words_and_a_definition_on_the_method_page(site):
    method = site["method.html"].decode("utf-8")
    for figure in FIGURES:
        words, anchor = FIGURE_WORDS[figure.name]
        assert words
        assert f'id="{anchor}"' in method
    for anchor in ("generations", "equivalence", "planning", "allocation"):
        assert f'id="{anchor}"' in method


def test_the_page_says_that_the_cause_stays_open_and_never_that_a_process_does_anything(site):
    said = text_of(site, "generations.html")
    assert "What caused it stays open" in said
    assert "not decided" in said
    assert "the process" not in said
    assert not re.search(r"\b(safe|certified|approved)\b", said, re.IGNORECASE)
    assert "nan" not in said.lower().split()


def test_all_comparisons_stand_in_the_table_with_the_promised_columns_first(results, site):
    lines = site["tables/generations.csv"].decode("utf-8").splitlines()
    assert lines[0].split(",")[:14] == list(GENERATION_COLUMNS[:14])
    assert len(lines) == 1 + len(results.generations.table)
    assert (
        site["tables/planning.csv"]
        .decode("utf-8")
        .startswith("generations,modules,sensors,repetitions,cost,")
    )


def test_figures_draw_zero_or_one_and_every_row(results):
    page = generations_page(results)
    assert page is not None
    figures = {figure.name: ready(figure) for figure in page.figures}
    rows = sum(len(figure.traces) for name, figure in figures.items() if name != "modules")
    table = results.generations.table.dropna(subset=["difference_or_ratio"])
    assert rows == len(table[table["verdict"] != "not tested"]) > 0
    assert set(table.loc[table["verdict"] == "not tested", "figure"]) == {
        "strain_error",
        "expanded_uncertainty",
    }
    centres = {
        figures["ratios"].layout["shapes"][0]["x0"],
        figures["differences-1"].layout["shapes"][0]["x0"],
    }
    assert centres == {1.0, 0.0}


def test_every_figure_is_valid_in_the_schema_of_the_plot_library(results):
    for page in (generations_page(results), planning_page(results)):
        for figure in page.figures:
            go.Figure(data=list(ready(figure).traces), layout=ready(figure).layout)
            assert figure.caption.endswith(".")


def row(**given) -> dict[str, object]:
    usual = dict.fromkeys(GENERATION_COLUMNS, float("nan"))
    return {**usual, "figure": "strain_error", "unit": "mm/mm", "kind": "difference", **given}


def test_numbers_carry_units_and_two_digits_of_their_interval():
    one = row(
        estimate_first=0.0203, estimate_second=0.0167, difference_or_ratio=-0.0036, low=-0.0045, high=-0.0028
    )
    assert comparison_words(one) == "−0.360 [−0.450, −0.280]\u202f%"
    assert comparison_sentence(one).startswith("error of one reading (95 %) 2.03 → 1.67\u202f% (")
    ratio = row(kind="ratio", difference_or_ratio=0.48, low=0.32, high=0.69)
    assert comparison_words(ratio) == "0.48 [0.32, 0.69] times"
    assert comparison_words(row(kind="ratio")) == "not identifiable from this design"
    untested = row(difference_or_ratio=-0.0036, verdict="not tested")
    assert comparison_words(untested) == "−0.36\u202f% (no interval)"
    assert margin_words(row(margin=0.005)) == "±0.500\u202f%"
    assert margin_words(row(margin=0.25, kind="ratio")) == "×0.800 to ×1.25"
    assert shown_unit("pF/(mm/mm)") == (0.01, "pF/%")


def test_one_generation_has_no_page_of_comparison_but_a_plan(tmp_path):
    alone = small_results(tmp_path / "alone", Sketch(generations=("first",), sessions=1))
    assert generations_page(alone) is None
    page = planning_page(alone)
    assert page is not None
    files = build_site(alone)
    assert "generations.html" not in files
    assert "A second generation" in text_of(files, "planning.html")


def test_too_few_modules_are_said_to_be_so_on_both_pages(tmp_path):
    few = small_results(tmp_path / "few", Sketch(modules=2, sessions=1))
    files = build_site(few)
    assert "fewer than three modules a generation: estimates without a verdict" in text_of(
        files, "generations.html"
    )
    assert "Too few modules to compare generations" in text_of(files, "index.html")
    assert set(few.generations.table["verdict"]) == {"too few modules"}


def test_without_costs_no_allocation_is_shown_and_the_controls_ask_for_them(site):
    said = text_of(site, "planning.html")
    assert "The description states no costs" in said
    assert re.search(r"with the components at the ends of their intervals it is [\d.]+\s% or [\d.]+\s%", said)
    assert (
        'data-part="cost-module" type="text" inputmode="decimal" value=""' in site["planning.html"].decode()
    )


def test_pages_of_an_empty_comparison_do_not_appear(results):
    bare = replace(
        results, generations=replace(results.generations, table=pd.DataFrame(columns=GENERATION_COLUMNS))
    )
    assert generations_page(bare) is None
    assert generations_page(replace(results, generations=None)) is None
    assert planning_page(replace(results, planning=None)) is None
