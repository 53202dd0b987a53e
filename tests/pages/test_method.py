"""The Method page: its formulas render, its addresses are there, and links from other pages find them."""

from __future__ import annotations

import re
from pathlib import Path

import pandas as pd
import pytest

from campaign.analyses.scope import Scope, Span
from campaign.pages.definitions import DEFINITIONS, definitions_of
from campaign.pages.formulas import FORMULAS, rendered_formulas
from campaign.pages.method import (
    SECTIONS,
    coverage_table,
    measured_ranges,
    method_pages,
    pages_of_sections,
    versions,
)
from campaign.pages.page import SiteFrame
from campaign.pages.render import render_site
from campaign.pages.tables import Column, Table, shown_cells
from campaign.pages.templates import templates_folder
from campaign.pipeline import analyse, read_campaign
from campaign.recordings.recording import STRAIN

TEMPLATES = templates_folder()
IN_EVERY_PAGE = ("content",)
PACKAGE = Path(__file__).parents[2] / "campaign"


def _scope(**changes: object) -> Scope:
    values: dict[str, object] = {
        "title": "Invented",
        "simulated": True,
        "stands": (),
        "reference": STRAIN,
        "x": Span(0.0, 0.4),
        "temperature_c": Span(21.0, 24.0),
        "humidity_percent": None,
        "rest_length_mm": None,
        "generations": 2,
        "modules": 12,
        "sensors": 71,
        "batches": 4,
        "mountings": Span(2.0, 2.0),
        "runs": Span(5.0, 6.0),
        "first_day": "2025-02-03",
        "last_day": "2025-02-26",
        "set_aside": (),
        "failed_before_testing": (),
        "trials_set_aside": 0,
        "not_analysed": (),
        "not_measured": (),
    }
    return Scope(**(values | changes))  # type: ignore[arg-type]


def _site(scope: Scope, stated: bool = True) -> dict[str, str]:
    """The Method page and its sections, by file."""
    context = {
        "formulas": rendered_formulas(),
        "versions": versions(),
        "scope": scope,
        "reference": scope.reference,
        "reference_stated": stated,
        **measured_ranges(scope),
    }
    coverage = coverage_table(TEMPLATES / "method" / "coverage.csv")
    files = render_site(SiteFrame("Invented", ()), pages_of_sections(context, coverage))
    return {name: content.decode() for name, content in files.items() if name.endswith(".html")}


def _html(scope: Scope, stated: bool = True) -> str:
    """All sections, one after the other."""
    site = _site(scope, stated)
    return "".join(site[f"{section.slug}.html"] for section in SECTIONS)


@pytest.fixture(scope="module")
def html() -> str:
    return _html(_scope())


def test_every_formula_is_shown_once_or_more_and_obeys_the_content_policy(html: str) -> None:
    used = set(re.findall(r"formulas\.(\w+)", "".join(p.read_text() for p in TEMPLATES.rglob("*.html"))))
    assert used == set(FORMULAS)
    assert html.count("<math") >= len(FORMULAS)
    assert "style=" not in html
    assert "\\" not in "".join(rendered_formulas().values())


def test_every_definition_has_an_address_of_its_own_and_a_source(html: str) -> None:
    ids = [name for name in re.findall(r'\sid="([^"]+)"', html) if name not in IN_EVERY_PAGE]
    assert len(ids) == len(set(ids))
    definitions = re.findall(r'<section class="definition" id="([^"]+)">(.*?)</section>', html, re.DOTALL)
    assert len(definitions) > 30
    without = [name for name, words in definitions if "Source:" not in words]
    assert without == ["coverage"]


def test_links_to_definitions_find_them() -> None:
    """Every address that templates and code name stands on the Method page, which leads to the section."""
    texts = [p.read_text() for p in (*TEMPLATES.rglob("*.html"), *PACKAGE.rglob("*.py"))]
    link = re.compile(r"method\.html#([a-z][\w-]*)|\bterm\(\s*[\"']([\w-]+)")
    wanted = {anchor for text in texts for pair in link.findall(text) for anchor in pair if anchor}
    assert {"linearity", "versions"} <= wanted
    wanted |= {anchor for anchor, _ in DEFINITIONS.values()}
    index = _site(_scope())["method.html"]
    assert sorted(wanted - set(re.findall(r'\bid="([^"]+)"', index))) == []


def test_every_section_has_a_page_of_its_own_that_links_lead_to() -> None:
    templates = {path.stem for path in (TEMPLATES / "method").glob("*.html")}
    assert sorted(name for section in SECTIONS for name in section.templates) == sorted(templates)
    site = _site(_scope())
    for section in SECTIONS:
        page = site[f"{section.slug}.html"]
        entries = re.findall(rf'href="{section.slug}\.html#([^"]+)"', site["method.html"])
        assert set(entries) <= set(re.findall(r'\bid="([^"]+)"', page))
        assert section.anchor in re.findall(r'\bid="([^"]+)"', page)
    spread = site["method-spread.html"]
    assert 'href="method-lines.html#' in "".join(site.values())
    assert not re.search(r'href="method\.html#(?!versions)', spread)


def test_columns_that_a_table_shows_are_explained_below_it() -> None:
    frame = pd.DataFrame({"module": ["M01"], "hysteresis_percent_fso": [1.0], "strain_sd": [0.01]})
    shown = Table("sensor_lines", "Lines.", frame, (Column("module", "Module"), Column("strain_sd", "SD")))
    words = [word for word, _ in definitions_of(shown)]
    assert words == ["strain-equivalent", "component as a strain", "intervals of SDs"]
    assert definitions_of(Table("t", "T.", frame, (Column("module", "Module"),))) == []


def test_text_for_a_paper_carries_the_numbers_of_the_campaign(html: str) -> None:
    words = re.sub(r"\s+", " ", re.sub(r"<[^>]+>", "", html))
    assert "71 sensors of 12 modules from 4 batches of 2 generations" in words
    assert "0–40 % strain" in words
    assert "5–6 runs a sensor in 2 mountings a module" in words
    assert "between 2025-02-03 and 2025-02-26" in words
    assert "carried as covariances" in words
    assert "invented" in words


def test_text_for_a_paper_says_nothing_that_was_not_recorded() -> None:
    bare = _scope(
        temperature_c=None, mountings=None, batches=0, generations=1, first_day="", x=None, runs=None
    )
    words = re.sub(r"\s+", " ", re.sub(r"<[^>]+>", "", _html(bare, stated=False)))
    paper = words[words.index("Measurements.") : words.index("Software.")]
    assert "71 sensors of 12 modules were stretched in steps on a stand." in paper
    assert "taken as exact" in paper
    for absent in ("batch", "session", "None", "nan", "°C", "between 2"):
        assert absent not in paper


def test_text_for_a_paper_tells_of_the_kinds_that_were_measured_and_of_no_others() -> None:
    root = Path(__file__).parents[1] / "campaigns" / "real"
    seals = _paper_of(root / "pneumatic_seals_3bar")
    # SOURCE.md beside the data: two runs of ten strokes of one seal, time and stroke recorded, one speed
    assert "1 sensor was cycled in 2 runs (20 loops) at 13" in seals
    assert "One rate was run" in seals
    assert "stretched in steps" not in seals
    assert "Calibration." not in seals
    assert "Holds." not in seals
    assert "Pressure." not in seals
    chamber = _paper_of(root / "pressure_decay")
    # one log of two and a half minutes, without a temperature
    assert "1 hold of 1 sensor lasted 2.5 min" in chamber
    assert "no change is called drift" in chamber
    assert "Loops." not in chamber


def _paper_of(folder: Path) -> str:
    pages = method_pages(analyse(read_campaign(folder)))
    html = render_site(SiteFrame("Real", ()), pages)["method-paper.html"].decode()
    words = re.sub(r"\s+", " ", re.sub(r"<[^>]+>", "", html)).replace("\u202f", " ").replace("\xa0", " ")
    return words[words.index("Measurements.") : words.index("Software.")]


def test_coverage_table_shows_what_its_file_says(tmp_path: Path) -> None:
    file = tmp_path / "coverage.csv"
    file.write_text(
        "quantity,nominal,covered,simulations,low,high\nmodule SD at mid,0.95,0.952,500,0.929,0.969\n"
    )
    table = coverage_table(file)
    assert table is not None
    cells = [cell.text.replace("\u2007", "").strip() for cell in shown_cells(table)[0]]
    assert cells == ["module SD at mid", "95\u202f%", "95.2 [92.9, 96.9]", "500"]
    assert coverage_table(tmp_path / "absent.csv") is None


def test_coverage_on_the_page_is_that_of_the_benchmark() -> None:
    benchmark = Path(__file__).parents[2] / "benchmarks" / "coverage.csv"
    assert benchmark.read_bytes() == (TEMPLATES / "method" / "coverage.csv").read_bytes()
    covered = pd.read_csv(benchmark)
    assert (covered["simulations"] >= 500).all()
