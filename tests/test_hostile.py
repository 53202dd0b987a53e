"""Text of recordings, registers, notes and the description is data: it is shown, and never more than that.

The hostile campaign sends :mod:`tests.hostile_texts` through every door; here its files are read as they
are, in ``tests/browser/test_hostile.py`` they are opened in a browser.
"""

from __future__ import annotations

import csv
import io
import json
import re
from collections.abc import Iterator
from dataclasses import dataclass, field
from html.parser import HTMLParser
from pathlib import Path
from urllib.parse import unquote
from xml.etree import ElementTree

import orjson
import pytest
import yaml

from campaign.cli import main
from campaign.notices import CampaignStops
from campaign.pages.brief import brief_bytes
from campaign.pages.drawing import ready
from campaign.pages.latex_tables import latex_table
from campaign.pages.legible import legible, legible_json
from campaign.pages.notes import make_notes, read_note_files
from campaign.pages.page import Page, SiteFrame
from campaign.pages.page_data import script_value, unfolded
from campaign.pages.print_figure import print_svg
from campaign.pages.render import render_site
from campaign.pages.site import site_frame, site_pages
from campaign.pipeline import make_site
from campaign.provenance.sealing import seal_campaign
from campaign.recordings.register import refusal_of_id, shown
from campaign.rehearsal import rehearsal_files
from campaign.simulation import write_campaign as write_folder_of_campaign
from tests.hostile_campaign import hostile_ids, hostile_plan, note_of
from tests.hostile_site import hostile_folder, hostile_site, hostile_space
from tests.hostile_texts import FORMULAS, MARKUP, NAMES, NUL, REFUSED, TEXTS, UNSEEN
from tests.pages.small_campaign import Sketch, write_campaign

_ELEMENTS = """
    a abbr article aside b blockquote body br caption cite code dd defs clippath details div dl dt em
    figcaption figure footer form g h1 h2 h3 h4 h5 h6 head header hr html i img input label li link main
    marker math menclose meta mfenced mfrac mi mn mo mover mpadded mroot mrow mspace msqrt mstyle msub
    msubsup msup mtable mtd mtext mtr munder munderover nav noscript ol option output p path polygon
    polyline pre rect circle line ellipse script section select small span strong style sub summary sup svg
    table tbody td text th thead title tr tspan ul use var wbr
"""
ELEMENTS = frozenset(_ELEMENTS.split())
"""Elements of our templates, pictures and formulas, and those that notes may hold."""
NEVER = re.compile(r"on\w*|style|srcdoc|formaction|action|autofocus|ping|background|xlink:href|xmlns:\w+")
"""Attributes that no page of ours has."""
UNSEEN_CHARACTER = re.compile(
    "[\x00-\x08\x0b\x0c\x0e-\x1f\x7f\u200b\u200e\u200f\u2028-\u202e\u2060\u2066-\u2069\ue000]"
)
EVALUATED = str(7 * 191)


@dataclass
class Parsed(HTMLParser):
    """What a page holds: every element with its attributes, and its text."""

    elements: list[tuple[str, dict[str, str | None]]] = field(default_factory=list)
    text: list[str] = field(default_factory=list)

    def __post_init__(self) -> None:
        super().__init__(convert_charrefs=True)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        assert len({name for name, _ in attrs}) == len(attrs), (tag, attrs)
        self.elements.append((tag, dict(attrs)))

    def handle_data(self, data: str) -> None:
        self.text.append(data)


def parsed(page: bytes) -> Parsed:
    made = Parsed()
    made.feed(page.decode("utf-8"))
    made.close()
    return made


def faults_of(page: bytes, files: dict[str, bytes]) -> Iterator[str]:
    """What stands in a page that our templates never write."""
    for tag, attributes in parsed(page).elements:
        if tag not in ELEMENTS:
            yield f"element {tag}"
        for name, value in attributes.items():
            if NEVER.fullmatch(name):
                yield f"attribute {name} of {tag}"
            if name in ("href", "src") and (fault := address_fault(tag, value or "", files)):
                yield fault


def address_fault(tag: str, value: str, files: dict[str, bytes]) -> str:
    """Why an address is none of the site's own, empty where it is."""
    if value == "data:," or value.startswith("#"):
        return ""
    target = unquote(value.split("#")[0])
    if target not in files:
        return f"{tag} leads to {value}"
    wanted = {"script": ("assets/", "data/"), "img": ("notes/",), "link": ("assets/",)}
    return "" if target.startswith(wanted.get(tag, "")) else f"{tag} takes {value}"


def pages() -> dict[str, bytes]:
    return {name: content for name, content in hostile_site()[1].items() if name.endswith(".html")}


@pytest.fixture(scope="module")
def built() -> list[Page]:
    """The pages before they are rendered."""
    results, _ = hostile_site()
    return site_pages(results, make_notes(read_note_files(hostile_space() / "in" / "campaign")))


# ---------------------------------------------------------------- the campaign is what it should be


def test_the_campaign_has_every_page_and_all_its_sensors() -> None:
    results, files = hostile_site()
    named = {"calibration", "variance", "residuals", "calibration_effort", "hysteresis", "drift", "pressure"}
    named |= {"generations", "planning", "budget", "recordings", "method", "provenance", "index"}
    assert {f"{name}.html" for name in named} <= files.keys()
    ids = hostile_ids(hostile_plan())
    used = results.intake.trials[results.intake.trials["fate"] == "used"]
    assert set(ids.modules.values()) <= set(used["module"])
    sensors = {(ids.modules[m], text) for (m, _), text in ids.sensors.items() if refusal_of_id(text) is None}
    assert sensors <= set(zip(used["module"], used["sensor"], strict=True))
    assert len({name.casefold() for name in files}) == len(files)


def test_every_refused_text_is_named_in_a_notice() -> None:
    """A tab or a return before a formula is a blank around an id; then the formula is what is refused."""
    notices = hostile_site()[0].notices
    said = [(n.file, n.what) for n in notices if n.code == "id-refused"]
    for name, text in REFUSED.items():
        words = shown(text.strip())
        assert any(file == "trials.csv" and words in what for file, what in said), name
        in_preamble = f"trials/refused/preamble {name}.csv"
        assert in_preamble in dict(said) or name in ("escape", "line_separator"), name
    assert "modules.csv" in dict(said)
    left_out = [n for n in notices if n.code == "text-refused"]
    assert {n.weight for n in left_out} == {"noted"}
    assert {n.file for n in left_out} >= {"sensors.csv", "trials.csv"}


# ---------------------------------------------------------------- pages, scripts, tables


def test_no_element_attribute_or_address_of_a_page_comes_from_data() -> None:
    files = hostile_site()[1]
    found = {name: sorted(set(faults_of(page, files))) for name, page in pages().items()}
    assert {name: faults for name, faults in found.items() if faults} == {}


def test_texts_are_shown_as_they_are_written() -> None:
    _, files = hostile_site()
    ids = hostile_ids(hostile_plan())
    titles = {"".join(parsed(page).text) for name, page in pages().items() if name.startswith("module-")}
    for module in ids.modules.values():
        assert any(module in title for title in titles), module
    front = "".join(parsed(files["index.html"]).text)
    assert "{{ 7*191 }}{% for x in range(9) %}loop{% endfor %}{# gone #}" in front
    assert "abc\\u202edcba" in front
    recordings = "".join(parsed(files["recordings.html"]).text) + str(unfolded(files["data/recordings.js"]))
    assert "<img src=https://hostile.invalid/x onerror=window.ran=1>" in recordings


def test_no_character_of_a_page_or_script_is_unseen() -> None:
    for name, content in hostile_site()[1].items():
        if name.endswith((".html", ".svg")):
            assert UNSEEN_CHARACTER.findall(content.decode("utf-8")) == [], name
        elif name.startswith("data/"):
            found = set(UNSEEN_CHARACTER.findall(content.decode("utf-8")))
            assert found <= {"\ue000"}, name
            assert not re.search(rb"(?<!\\)(\\\\)*\\u00[01]", content), name


def test_template_syntax_of_a_text_is_never_carried_out() -> None:
    for name, content in hostile_site()[1].items():
        if name.endswith((".html", ".js")) and not name.startswith("assets/"):
            text = content.decode("utf-8")
            assert f"{EVALUATED}{{%" not in text, name
            assert f"{EVALUATED} " not in text.replace(f"{EVALUATED} ±", ""), name
            assert "looploop" not in text, name


def test_data_scripts_state_one_value_and_nothing_else() -> None:
    head = re.compile(
        rb"window\.campaignPage = "
        rb"|\(window\.campaign\w+ = window\.campaign\w+ \|\| \{\}\)\[(\"data/[\w./-]+\")\] = "
    )
    for name, content in hostile_site()[1].items():
        if not name.startswith("data/"):
            continue
        begins = head.match(content)
        assert begins is not None, name
        assert begins[1] is None or json.loads(begins[1]) == name
        value = content[begins.end() :].removesuffix(b";\n")
        assert b'"__proto__":' not in value, name
        assert isinstance(json.loads(value.replace(b'["__proto__"]:', b'"__proto__":')), dict), name


def test_figures_hold_no_markup_but_line_breaks_and_lead_to_pages_of_the_site_only() -> None:
    files = hostile_site()[1]
    for name, content in files.items():
        if not content.startswith(b"window.campaignPage = "):
            continue
        for figure in unfolded(content)["figures"].values():
            for trace in figure["traces"]:
                assert not [key for key in trace if "template" in key], name
                links = trace.get("customdata", [])
                assert [link for link in links if link.split("#")[0] not in {"", *files}] == [], name
            own = [{**trace, "meta": None} for trace in figure["traces"]]
            for text in texts_of([own, figure["layout"]]):
                assert "<" not in text.replace("<br>", ""), (name, text)


def texts_of(value: object) -> Iterator[str]:
    """Every text within a value, keys aside."""
    if isinstance(value, str):
        yield value
    elif isinstance(value, dict):
        for part in value.values():
            yield from texts_of(part)
    elif isinstance(value, list):
        for part in value:
            yield from texts_of(part)


NUMBER = re.compile(r"[+-]?(\d+\.?\d*(e[+-]?\d+)?|INF)", re.IGNORECASE)


def formula_cells(table: bytes) -> list[str]:
    """Fields of a CSV file that spreadsheets would run, and whether every row is as long as the header."""
    rows = list(csv.reader(io.StringIO(table.decode("utf-8"), newline="")))
    assert {len(row) for row in rows} == {len(rows[0])}
    return [
        cell
        for row in rows
        for cell in row
        if cell.startswith(("=", "+", "-", "−", "@", "\t", "\r", "\n", "＝", "＋", "－", "＠"))
        and not NUMBER.fullmatch(cell)
    ]


def test_no_field_of_any_table_is_run_by_a_spreadsheet() -> None:
    tables = {name: content for name, content in hostile_site()[1].items() if name.endswith(".csv")}
    assert len(tables) > 40
    assert {name: cells for name, t in tables.items() if (cells := formula_cells(t))} == {}


def test_a_file_that_is_called_like_a_formula_is_named_by_its_path_from_here() -> None:
    _, files = hostile_site()
    rows = list(csv.DictReader(io.StringIO(files["tables/recordings.csv"].decode("utf-8"), newline="")))
    assert {"./=cmd.csv", "./@SUM(1).txt"} <= {row["file"] for row in rows}


def test_nothing_is_written_outside_the_output_folder() -> None:
    folder = hostile_folder()
    space = hostile_space()
    assert sorted(path.name for path in (space / "out").iterdir()) == ["site"]
    assert sorted(path.name for path in (space / "in").iterdir()) == ["campaign"]
    assert not Path(NAMES["absolute"]).exists()
    assert not list(space.rglob("*climbed.html*")) or all(
        path.is_relative_to(folder) for path in space.rglob("*climbed*.html")
    )
    assert all(path.resolve().is_relative_to(folder) for path in folder.rglob("*"))


# ---------------------------------------------------------------- notes


@pytest.mark.parametrize("name", sorted(TEXTS))
def test_a_note_can_hold_every_text(name: str) -> None:
    notes = make_notes({"a.md": f"# {TEXTS[name]}\n\n{note_of(TEXTS[name])}[^1]\n\n[^1]: {NUL}".encode()})
    files = render_site(SiteFrame("t", ()), notes.pages)
    page = files[notes.pages[0].file]
    outside = {"https://hostile.invalid/x"}
    for tag, attributes in parsed(page).elements:
        assert tag in ELEMENTS
        assert not [key for key in attributes if NEVER.fullmatch(key)]
        for key in {"href", "src"} & attributes.keys():
            value = attributes[key] or ""
            fault = address_fault(tag, value, files | {"provenance.html": b"", "index.html": b""})
            assert not fault or (tag == "a" and (value in outside or value.startswith("https://"))), value
    assert UNSEEN_CHARACTER.findall(page.decode("utf-8")) == []


# ---------------------------------------------------------------- what leaves by other ways


def test_the_brief_holds_no_element_and_no_address_of_data(built: list[Page]) -> None:
    results, _ = hostile_site()
    page = brief_bytes(site_frame(results), built)
    found = parsed(page).elements
    assert {tag for tag, _ in found} <= ELEMENTS - {"script", "img"}
    assert not [key for _, attributes in found for key in attributes if NEVER.fullmatch(key)]
    assert not [a["href"] for _, a in found if "href" in a and not str(a["href"]).startswith(("#", "data:,"))]
    assert sum(tag == "style" for tag, _ in found) == 1
    assert UNSEEN_CHARACTER.findall(page.decode("utf-8")) == []


def test_pictures_for_print_are_well_formed_and_hold_shapes_alone(built: list[Page]) -> None:
    few = [page for page in built if page.number is not None or "CON" in page.slug]
    figures = [figure for page in few for figure in page.figures]
    assert len(figures) > 20
    for figure in figures:
        root = ElementTree.fromstring(print_svg(ready(figure), 85.0))
        names = {element.tag.rpartition("}")[2] for element in root.iter()}
        assert names <= {"svg", "g", "path", "text", "tspan", "rect", "title", "clipPath", "defs"}
        assert not [k for e in root.iter() for k in e.attrib if NEVER.fullmatch(k) or "href" in k]


def test_latex_sets_every_text_and_runs_none(built: list[Page]) -> None:
    tables = [table for page in built for table in page.tables]
    assert len(tables) > 20
    commands = set()
    for table in tables:
        text = latex_table(table)
        body = re.sub(r"(?m)^%.*$", "", text)
        commands |= set(re.findall(r"\\([A-Za-z]+)", body))
        plain = re.sub(r"\\[\\{}$&#%_^~]|\\[A-Za-z]+", "", body)
        assert plain.count("{") == plain.count("}"), table.name
        assert "%" not in plain
        assert UNSEEN_CHARACTER.findall(text) == []
    assert not commands & {"input", "include", "write", "def", "catcode", "immediate", "openout", "csname"}


def test_what_machines_read_of_a_sealed_archive_is_well_formed() -> None:
    results, site = hostile_site()
    sealed = seal_campaign(hostile_space() / "in" / "campaign", results, site)
    written = {name: content for name, content in sealed.files.items() if isinstance(content, bytes)}
    for name in sealed.files:
        assert not name.startswith("/"), name
        assert ".." not in name.split("/"), name
        assert not re.search(r"[\\\x00-\x1f]", name), name
    by_name = {name.rsplit("/", 1)[1]: content for name, content in written.items() if "/program" not in name}
    crate = json.loads(by_name["ro-crate-metadata.json"])
    root = next(item for item in crate["@graph"] if item["@id"] == "./")
    title = legible(results.description.title)
    assert root["name"] == title
    cited = yaml.safe_load(by_name["CITATION.cff"].decode("utf-8"))
    assert cited["title"] == " ".join(title.split())
    assert len(cited["authors"]) == len([text for text in TEXTS.values() if text.strip()])
    for name in ("README.md", "MODEL.md", "CITATION.cff", "bag-info.txt"):
        text = by_name[name].decode("utf-8")
        assert UNSEEN_CHARACTER.findall(text) == [], name
        assert EVALUATED not in text, name
    assert all(
        re.match(r"[\w-]+: |  ", line) for line in by_name["bag-info.txt"].decode("utf-8").splitlines()
    )
    preview = parsed(by_name["ro-crate-preview.html"]).elements
    assert {tag for tag, _ in preview} <= ELEMENTS - {"script"}
    assert not [key for _, attributes in preview for key in attributes if NEVER.fullmatch(key)]


def test_nothing_that_is_printed_can_command_a_terminal(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    folder = write_campaign(tmp_path / "c", Sketch(generations=("g",), modules=1, sensors=("AB",), runs=1))
    about = folder / "campaign.toml"
    text = about.read_text(encoding="utf-8").replace("Small invented panels", "a\\u001b[2Jb\\u202ec\\u0000")
    about.write_text(text, encoding="utf-8")
    for name in ("x\x1b[31m.csv", "a\nb.csv", "c\\d.csv", "e\u202ef.csv"):
        (folder / "trials" / name).write_text("x_mm,C\n1,2\n", encoding="utf-8")
    assert main(["inspect", str(folder)]) == 0
    assert main(["report", str(folder), "--into", str(tmp_path / "site")]) == 0
    said = "".join(capsys.readouterr())
    assert "a\\x1b[2Jb\\u202ec\\x00" in said
    assert not re.search("[\x00-\x08\x0b-\x1f\x7f\u202a-\u202e]", said.replace("\r", ""))
    page = (tmp_path / "site" / "recordings.html").read_text(encoding="utf-8")
    assert UNSEEN_CHARACTER.findall(page) == []


# ---------------------------------------------------------------- plans


HOSTILE_PLAN = """format = 1
[campaign]
title = {0}
description = {0}
[plan]
generations = [{0}, "new"]
modules = 3
sensors = 3
repetitions = 2
levels = 3
[plan.components]
module = "1 %"
sensor = "1.5 %"
repetition = "0.3 %"
residual = "0.2 %"
[plan.generation.{0}.components]
sensor = "0.8 %"
[geometry.{0}]
nodes = {{ {1} = [0, 0], B = [80, 0], C = [30, 60] }}
"""


def hostile_rehearsal(text: str, node: str = "A") -> dict[str, bytes] | str:
    """Every file of the rehearsal of a plan that is full of *text*, or the words with which it stops."""
    spelled = [json.dumps(words, ensure_ascii=False).replace("\x7f", "\\u007f") for words in (text, node)]
    try:
        return rehearsal_files(HOSTILE_PLAN.format(*spelled).encode("utf-8"), "plan.toml")
    except CampaignStops as stop:
        return " ".join(f"{notice.what} {notice.remedy}" for notice in stop.notices)


def test_a_plan_full_of_any_text_stops_or_gives_files_within_the_folder() -> None:
    texts = {**TEXTS, "nul": NUL, "deep": "/../../../../climbed", "drive": "C:\\climbed"}
    made = [hostile_rehearsal(text, node) for text in texts.values() for node in ("A", text)]
    rehearsed = [files for files in made if not isinstance(files, str)]
    assert len(rehearsed) > 20
    for files in rehearsed:
        for path in files:
            assert re.fullmatch(r"(?:trials/M\d\d/)?[\w.-]+", path), path
    for said in made:
        if isinstance(said, str):
            assert re.search("file names|cannot be seen|formula|no TOML", said), said


def test_a_hostile_plan_is_reported_as_text(tmp_path: Path) -> None:
    text = MARKUP["closes_script"]
    files = hostile_rehearsal(text)
    assert not isinstance(files, str), files
    write_folder_of_campaign(files, tmp_path / "c")
    _, site = make_site(tmp_path / "c")
    shown_pages = {name: content for name, content in site.items() if name.endswith(".html")}
    assert len(shown_pages) > 20
    for name, page in shown_pages.items():
        assert list(faults_of(page, site)) == [], name
    assert text in "".join(parsed(site["generations.html"]).text)


# ---------------------------------------------------------------- legible texts


@pytest.mark.parametrize("text", [*UNSEEN.values(), NUL, "plain", "🤖👩‍🔬 می‌خواهم", 'a"\\b\\u0000'])
def test_texts_in_scripts_are_as_legible_as_in_pages(text: str) -> None:
    assert json.loads(script_value({"t": text}))["t"] == legible(text).replace("\\ue000", "\ue000")
    assert json.loads(legible_json(orjson.dumps(text))) == legible(text).replace("\\ue000", "\ue000")


def test_formulas_and_unseen_marks_are_refused_as_ids() -> None:
    for name, text in (FORMULAS | UNSEEN).items():
        assert refusal_of_id(text.strip()) is not None, name
