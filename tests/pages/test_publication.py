"""Print figures and the publication folder: sizes, letters, density, what belongs together."""

from __future__ import annotations

import csv
import io
import re
import struct
import xml.etree.ElementTree as ElementTree
import zlib
from pathlib import Path
from typing import Any

import pytest

from campaign.analyses.results import CampaignResults
from campaign.cli import main
from campaign.notices import CampaignStops
from campaign.pages import figures, palette
from campaign.pages.drawing import ready
from campaign.pages.figures import Figure
from campaign.pages.page import Page
from campaign.pages.print_figure import COLUMN_WIDTHS_MM, print_png, print_svg
from campaign.pages.print_layout import TALLEST
from campaign.pages.publication import chosen_pages, publication_files
from tests.pages.toy import toy_figure, toy_page

SVG = "{http://www.w3.org/2000/svg}"
POINT_MM = 25.4 / 72
WHOLE_TABLES = {"tables/run_lines.csv", "tables/limits.csv"}
"""Tables that pages show parts of: their files come from the whole site's list of tables."""


def letters_in_points(svg: str) -> list[float]:
    """Sizes of all letters of a lone file, in points of 1/72 inch."""
    root = ElementTree.fromstring(svg)
    per_unit = float(root.get("width", "").removesuffix("mm")) / float(root.get("viewBox", "").split()[2])
    found = [float(root.get("font-size", "")) if root.iter(f"{SVG}text") else 0.0]
    found += [float(e.get("font-size", "")) for e in root.iter(f"{SVG}text") if e.get("font-size")]
    return [size * per_unit / POINT_MM for size in found]


def chunks(png: bytes) -> dict[bytes, bytes]:
    """The chunks of a PNG by kind, each with a sound checksum (PNG, third edition, 5.3)."""
    assert png.startswith(b"\x89PNG\r\n\x1a\n")
    found, place = {}, 8
    while place < len(png):
        (length,) = struct.unpack(">I", png[place : place + 4])
        kind, body = png[place + 4 : place + 8], png[place + 8 : place + 8 + length]
        assert struct.unpack(">I", png[place + 8 + length : place + 12 + length])[0] == zlib.crc32(
            kind + body
        )
        found.setdefault(kind, body)
        place += 12 + length
    return found


@pytest.fixture(scope="module")
def pages(small_campaign_pages: tuple[CampaignResults, list[Page]]) -> list[Page]:
    return small_campaign_pages[1]


@pytest.mark.parametrize("width", COLUMN_WIDTHS_MM.values())
def test_every_figure_of_a_site_is_a_sound_vector_file_with_letters_that_can_be_read(
    pages: list[Page], width: int
) -> None:
    drawn = 0
    for page in pages:
        for figure in page.figures:
            svg = print_svg(ready(figure), width)
            root = ElementTree.fromstring(svg)
            assert root.tag == f"{SVG}svg"
            assert root.get("width") == f"{width}mm"
            assert min(letters_in_points(svg)) >= 7.0, (page.slug, figure.name)
            assert "Source Sans" in str(root.get("font-family"))
            assert not any(e.get("style") or e.get("class") for e in root.iter())
            assert palette.PAPER not in svg
            drawn += 1
    assert drawn > 20


def test_pictures_have_300_dots_an_inch_and_state_them() -> None:
    png = print_png(print_svg(ready(toy_figure()), 85))
    found = chunks(png)
    width, height = struct.unpack(">II", found[b"IHDR"][:8])
    assert width == round(85 / 25.4 * 300)
    assert 0.4 < height / width < 1.2
    assert struct.unpack(">IIB", found[b"pHYs"]) == (11811, 11811, 1)  # dots a metre
    assert print_png(print_svg(ready(toy_figure()), 85)) == png


def test_letters_are_drawn_without_typefaces_of_the_machine() -> None:
    words, none = (
        print_png(print_svg(ready(toy_figure(name)), 85))
        for name in ("M01 λ² ± −5", "\u2007\u2007\u2007\u2007")
    )
    assert len(words) > len(none)


def panels(count: int, columns: int, **more: Any) -> Figure:
    titles = [f"M{i:02} · a generation with a long name" for i in range(count)]
    layout = figures.small_multiples(
        titles, figures.axis("Strain", "%"), figures.axis("Signal", "pF"), columns=columns
    )
    traces = [figures.line([0, 1], [0, i + 1], axes=figures.panel(i)) for i in range(count)]
    return ready(Figure("panels", "c", "a", tuple(traces), layout, height=500, **more))


def test_panels_go_into_fewer_columns_in_a_narrow_column_and_titles_are_broken() -> None:
    root = ElementTree.fromstring(print_svg(panels(6, 3), 85))
    assert list(root.iter(f"{SVG}tspan"))
    titles = [e for e in root.iter(f"{SVG}text") if (e.text or "").startswith("M0")]
    assert len({e.get("x") for e in titles}) == 2
    assert len({e.get("y") for e in titles}) == 3
    wide = ElementTree.fromstring(print_svg(panels(6, 3), 175))
    assert len({e.get("x") for e in wide.iter(f"{SVG}text") if (e.text or "").startswith("M0")}) == 3


def crowded() -> Figure:
    """A figure whose names along x meet in a narrow column, with a label that begins at its right end."""
    x_axis = figures.axis("", ticks=[(float(k), f"a long name {k}") for k in range(5)], low=-0.5, high=4.5)
    notes = [figures.label("six sensors, six runs in two mountings, p of 3×10⁻⁸", 4.0, 1.0, anchor="left")]
    layout = figures.layout(x_axis, figures.axis("Signal", "pF"), annotations=notes)
    return ready(Figure("crowded", "c", "a", (figures.line([0, 4], [0, 1]),), layout, height=300))


def test_labels_stay_in_the_picture_names_do_not_meet_and_powers_have_letters_of_the_typeface() -> None:
    root = ElementTree.fromstring(print_svg(crowded(), 85))
    texts = {"".join(e.itertext()): e for e in root.iter(f"{SVG}text")}
    (told,) = (e for words, e in texts.items() if words.startswith("six sensors"))
    assert "".join(told.itertext()).endswith("p of 3e−8")
    width = float(str(root.get("viewBox")).split()[2])
    # nineteen letters and more of half their size each end before the right edge
    assert float(str(told.get("x"))) + 49 * 0.5 * 110 < width
    names = [e for words, e in texts.items() if words.startswith("a long name")]
    heights = [float(str(e.get("y"))) for e in names]
    assert len(names) == 5
    assert len(set(heights[::2])) == len(set(heights[1::2])) == 1
    assert heights[1] > heights[0]
    wide = ElementTree.fromstring(print_svg(crowded(), 175))
    shown = [e for e in wide.iter(f"{SVG}text") if "".join(e.itertext()).startswith("a long name")]
    assert len({e.get("y") for e in shown}) == 1


def test_no_print_figure_is_taller_than_a_page_for_more_columns() -> None:
    root = ElementTree.fromstring(print_svg(panels(24, 3), 85))
    height = float(str(root.get("viewBox")).split()[3]) / 10
    assert height <= TALLEST + 100


def test_the_folder_holds_every_figure_and_table_of_the_pages_and_an_index(pages: list[Page]) -> None:
    wanted = chosen_pages(pages, ["calibration_effort", "sensor-M1-AB"])
    files = publication_files(wanted)
    rows = list(csv.DictReader(io.StringIO(files["index.csv"].decode())))
    assert len(rows) == sum(len(page.figures) + len(page.tables) for page in wanted)
    for row in rows:
        assert set(row["files"].split()) <= set(files) | WHOLE_TABLES
    for page in wanted:
        for figure in page.figures:
            for name in COLUMN_WIDTHS_MM:
                assert {f"figures/{page.slug}_{figure.name}_{name}.{e}" for e in ("svg", "png")} <= set(files)
    assert files["tables/calibration_effort.tex"].startswith(b"% Calibration effort: table 4.")
    assert b"\\begin{" in files["tables/sensor-M1-AB_runs.tex"]
    assert list(files) == sorted(files)


def test_the_command_writes_the_folder_whole_and_overwrites_none_but_its_own(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    into, folder = (
        tmp_path / "for a paper",
        Path(__file__).parents[1] / "campaigns" / "real" / "pressure_decay",
    )
    command = ["figures", str(folder), "--into", str(into), "--page", "drift"]
    assert main(command) == 0
    assert "index.csv" in capsys.readouterr().out
    names = {path.name for path in (into / "figures").iterdir()}
    assert {"drift_holds_one-column.svg", "drift_holds_two-column.png"} <= names
    assert main(command) == 0
    (into / "campaign-site.txt").unlink()
    assert main(command) == 2
    assert (into / "index.csv").is_file()


def test_a_page_that_is_not_there_stops_with_names_that_are() -> None:
    with pytest.raises(CampaignStops) as stopped:
        chosen_pages([toy_page()], ["indeks"])
    (notice,) = stopped.value.notices
    assert notice.code == "page-not-there"
    assert "index" in notice.remedy


def test_a_text_of_a_recording_stays_text_in_a_print_figure(tmp_path: Path) -> None:
    hostile = "</text><script>1</script>&<b>"
    svg = print_svg(ready(toy_figure(hostile)), 85)
    root = ElementTree.fromstring(svg)
    assert not [e for e in root.iter() if e.tag.endswith("script")]
    assert hostile in re.sub(r"\s+", " ", " ".join("".join(e.itertext()) for e in root.iter(f"{SVG}text")))
    assert print_png(svg)
