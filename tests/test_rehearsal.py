"""``campaign rehearse``: a plan becomes a campaign folder, and every page of its report says so."""

from __future__ import annotations

import html
import json
import math
import re
import subprocess
import sys
from dataclasses import replace
from pathlib import Path
from typing import cast

import numpy as np
import pandas as pd
import pytest

from campaign.analyses.rehearsal import compare_with_plan, rehearsal_findings
from campaign.analyses.variance import Variance
from campaign.archive import unpack_archive
from campaign.campaign_reading import silent
from campaign.cli import main
from campaign.notices import CampaignStops
from campaign.pipeline import read_and_analyse, read_campaign
from campaign.provenance.sealing import seal_campaign, write_sealed
from campaign.recordings.description_file import load_description, read_description, read_plan_file
from campaign.rehearsal import rehearsal_files
from campaign.simulation import write_campaign

ROOT = Path(__file__).parents[1]
EXAMPLE = ROOT / "demo_campaign" / "plans" / "next_panels.toml"
EVERY_KIND = """\
format = 1

[campaign]   # a remark
title = "Every kind, small"

[plan]
generations = ["old", "new"]
modules     = 3
sensors     = 3
repetitions = 2
levels      = 4
kinds       = ["cyclic", "hold", "pressure", "layout"]

[plan.components]
module     = "1 %"
sensor     = "1.5 %"
repetition = "0.3 %"
residual   = "0.2 %"
hysteresis = "1 %"
pressure   = "0.05 %"
relaxation = "1 %"

[geometry.triangle]
nodes = { A = [0, 0], B = [80, 0], C = [30, 60] }
"""
SAID = re.compile("rehearsal, not measured", re.IGNORECASE)


@pytest.fixture(scope="module")
def plan(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("plan") / "next.toml"
    path.write_text(EVERY_KIND, encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def rehearsed(plan: Path) -> Path:
    folder = plan.parent / "rehearsed"
    assert main(["rehearse", str(plan), "--into", str(folder)]) == 0
    (folder / "notes").mkdir()
    (folder / "notes" / "why.md").write_text("# Why\n\nTo see what it would tell.\n", encoding="utf-8")
    return folder


@pytest.fixture(scope="module")
def site(rehearsed: Path) -> Path:
    into = rehearsed.parent / "site"
    assert main(["report", str(rehearsed), "--into", str(into)]) == 0
    return into


def contents(folder: Path) -> dict[str, bytes]:
    return {p.relative_to(folder).as_posix(): p.read_bytes() for p in folder.rglob("*") if p.is_file()}


# ---------------------------------------------------------------- the folder


def test_the_same_plan_makes_the_same_bytes_in_another_process(plan: Path, tmp_path: Path) -> None:
    command = [sys.executable, "-m", "campaign", "rehearse", str(plan), "--into", str(tmp_path / "again")]
    done = subprocess.run(
        command, cwd=ROOT, env={"PYTHONHASHSEED": "5"}, capture_output=True, text=True, check=True
    )
    assert "a rehearsal, nothing in it was measured" in done.stdout
    assert contents(tmp_path / "again") == rehearsal_files(plan.read_bytes(), plan.name)


def test_another_plan_makes_other_draws() -> None:
    one, other = (
        rehearsal_files(text.encode()) for text in (EVERY_KIND, EVERY_KIND.replace("small", "little"))
    )
    assert one.keys() == other.keys()
    logs = [path for path in one if path.startswith("trials/")]
    assert all(one[path] != other[path] for path in logs)


def test_every_file_says_that_it_is_invented_or_rehearsed() -> None:
    files = rehearsal_files(EVERY_KIND.encode())
    assert [p for p, data in files.items() if not re.search(b"invented|rehears", data, re.IGNORECASE)] == []
    assert files["campaign.toml"].startswith(b"# REHEARSAL, NOT MEASURED.")
    assert b"## A rehearsal, not measured" in files["TRUTH.md"]


def test_the_description_holds_the_plan_as_it_stands_and_reads_every_recording(rehearsed: Path) -> None:
    description = load_description(rehearsed)
    assert description.rehearsal
    assert description.planned == read_plan_file(EVERY_KIND.encode(), "p").planned
    kept = [line for line in description.text.splitlines() if not line.startswith("rehearsal = true")]
    assert "\n".join(kept).find(EVERY_KIND.rstrip("\n")) > 0
    read = read_campaign(rehearsed)
    assert read.intake.counts.set_aside == 0
    assert [n for n in read.intake.notices if n.code != "no-title"] == []
    trials = read.intake.trials.drop_duplicates("file")["kind"].value_counts().to_dict()
    modules, sensors, runs = 6, 3, 2
    assert trials == {
        "staircase": modules * sensors * runs,
        "cyclic": modules * 2 * 4,
        "hold": modules,
        "pressure": modules * 2,
        "layout": modules,
    }


@pytest.mark.parametrize(
    "campaign",
    [
        "",
        "[campaign]\n",
        '  [ campaign ]  # ours\r\ntitle = "t"\r\n',
        '[campaign]\ntitle = "t"\nsimulated = true\n',
        '[campaign]\nauthors = [{ name = "[campaign]" }]\n',
    ],
)
def test_however_the_campaign_is_headed_it_is_marked(campaign: str) -> None:
    head = "" if "\r" not in campaign else "\ufeff"
    rest = EVERY_KIND[EVERY_KIND.index("[plan]") :]
    files = rehearsal_files((head + "format = 1\n" + campaign + rest).encode())
    assert read_description(files["campaign.toml"]).rehearsal


def test_a_campaign_that_cannot_be_marked_is_refused() -> None:
    text = EVERY_KIND.replace('[campaign]   # a remark\ntitle = "Every kind, small"\n', "")
    with pytest.raises(CampaignStops, match=r"\[campaign\] is not a table of its own"):
        rehearsal_files(('campaign.title = "t"\n' + text).encode())


def test_an_sd_of_the_plan_is_that_of_the_sensors(tmp_path: Path) -> None:
    """60 modules, one run: the SD of module means is 2 % of 90 pF · 0.8 to 9 %; sensors differ by 1 %."""
    text = """
[plan]
generations = 1
modules = 60
sensors = 4
repetitions = 1
levels = 2
direction = "up"
[plan.components]
module = "2 %"
sensor = "1 %"
repetition = 0
residual = 0
noise = 0
[plan.mean]
signal = "90 pF"
gauge_factor = 0.8
"""
    write_campaign(rehearsal_files(text.encode()), tmp_path / "r")
    found = read_campaign(tmp_path / "r").readings.table
    assert found["unit"].unique().tolist() == ["pF"]
    means = found.groupby(["module", "sensor"])["signal"].mean().unstack()
    assert float(means.mean().mean()) == pytest.approx(90.0 * (1.0 + 0.8 * 0.20), rel=0.01)
    assert float(means.mean(axis=1).std()) / 72.0 == pytest.approx(math.hypot(0.02, 0.01 / 2), rel=0.3)
    within = means.sub(means.mean(axis=1), axis=0).to_numpy()
    assert math.sqrt(float((within**2).sum()) / (60 * 3)) / 72.0 == pytest.approx(0.01, rel=0.2)
    slopes = found.pivot_table(index=["module", "sensor"], columns="nominal_level", values="signal")
    assert np.ptp(slopes.to_numpy(), axis=1) == pytest.approx(72.0 * 0.40, rel=1e-3)


def test_a_folder_with_other_things_is_left_alone(
    plan: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (tmp_path / "thesis.txt").write_text("mine", encoding="utf-8")
    assert main(["rehearse", str(plan), "--into", str(tmp_path)]) == 2
    said = " ".join(capsys.readouterr().err.split())
    assert "thesis.txt" in said
    assert "nothing is written" in said
    assert [path.name for path in tmp_path.iterdir()] == ["thesis.txt"]


def test_a_rehearsal_may_be_made_again_in_its_own_folder(plan: Path, tmp_path: Path) -> None:
    into = tmp_path / "new" / "rehearsed"
    for _ in range(2):
        assert main(["rehearse", str(plan), "--into", str(into)]) == 0
    assert contents(into) == rehearsal_files(plan.read_bytes(), plan.name)
    assert [path.name for path in into.parent.iterdir()] == ["rehearsed"]


def test_nothing_is_left_where_writing_fails(tmp_path: Path) -> None:
    into = tmp_path / "made"
    with pytest.raises((NotADirectoryError, FileExistsError)):
        write_campaign({"a.txt": b"1", "a.txt/b.txt": b"2"}, into)
    assert list(tmp_path.iterdir()) == []
    write_campaign({"a.txt": b"1"}, into)
    with pytest.raises((NotADirectoryError, FileExistsError)):
        write_campaign({"a.txt": b"2", "a.txt/b.txt": b"2"}, into)
    assert contents(tmp_path) == {"made/a.txt": b"1"}


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (("modules     = 3", "modulles = 3"), ["[plan] has no key 'modulles'", "did you mean 'modules'?"]),
        (('module     = "1 %"\n', ""), ["[plan.components] module: is not stated"]),
        (('"1.5 %"', '"150 %"'), ["150 % in strain is negative or more than all of it"]),
        (("[plan", "[plann"), ["has no key 'plann'", "the file has no [plan]"]),
    ],
)
def test_faults_of_a_plan_are_named_and_nothing_is_written(
    change: tuple[str, str], words: list[str], tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "plan.toml"
    path.write_text(EVERY_KIND.replace(*change), encoding="utf-8")
    assert main(["rehearse", str(path), "--into", str(tmp_path / "r")]) == 2
    said = " ".join(capsys.readouterr().err.split())
    assert [word for word in words if word not in said] == []
    assert "plan.toml" in said
    assert not (tmp_path / "r").exists()


def test_a_plan_that_is_not_there_is_said_so(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["rehearse", str(tmp_path / "none.toml"), "--into", str(tmp_path / "r")]) == 2
    assert "cannot be opened" in capsys.readouterr().err


def test_the_example_plan_can_be_rehearsed_and_says_that_it_is_invented() -> None:
    files = rehearsal_files(EXAMPLE.read_bytes(), EXAMPLE.name)
    description = read_description(files["campaign.toml"])
    assert description.planned is not None
    assert [g.name for g in description.planned.generations] == ["hand-poured", "blade-cast"]
    assert "(invented plan)" in description.title
    assert sum(map(len, files.values())) < 4e6


# ---------------------------------------------------------------- its site


def test_every_page_says_so_in_its_title_its_head_and_its_foot(site: Path) -> None:
    pages = sorted(site.glob("*.html"))
    kinds = ("index", "calibration", "hysteresis", "drift", "pressure", "method", "provenance", "recordings")
    names = {page.stem for page in pages}
    assert set(kinds) <= names
    assert {"module-M01", "sensor-M01-AB"} <= names or len([n for n in names if "M01" in n]) >= 4
    assert any("why" in name for name in names)
    for page in pages:
        text = page.read_text(encoding="utf-8")
        assert SAID.search(text.split("<title>")[1].split("</title>")[0]), page.name
        assert SAID.search(re.findall(r'<meta name="description" content="([^"]*)"', text)[0]), page.name
        assert len(re.findall('<aside class="rehearsal"', text)) == 1, page.name
        assert SAID.search(text.split('<header class="masthead">')[1].split("</header>")[0]), page.name
        assert SAID.search(text.split("<footer>")[1]), page.name
        assert "invented data" not in text.split("</header>")[0], page.name


def test_every_figure_and_table_says_so_wherever_it_is_taken(site: Path) -> None:
    figures = tables = 0
    for page in site.glob("*.html"):
        text = page.read_text(encoding="utf-8")
        for figure in re.findall(r'<figure class="figure".*?</figure>', text, re.DOTALL):
            caption, drawn = figure.split("</figcaption>")
            assert SAID.search(html.unescape(caption)), page.name
            assert SAID.search(re.sub("<[^>]+>", " ", drawn.split("<svg")[1].split("</svg>")[0])), page.name
            figures += 1
        for caption in re.findall(
            r'<caption[^>]*>(<span class="number">Table.*?)</caption>', text, re.DOTALL
        ):
            assert SAID.search(caption), page.name
            tables += 1
    assert figures > 20
    assert tables > 20


def test_live_figures_carry_it_too(site: Path) -> None:
    counted = 0
    for script in (site / "data").glob("*.js"):
        text = script.read_text(encoding="utf-8")
        if text.startswith("window.campaignPage = "):
            drawn = json.loads(text.removeprefix("window.campaignPage = ").rstrip().rstrip(";"))["figures"]
            assert all(SAID.search(figure["layout"]["title"]["text"]) for figure in drawn.values())
            counted += len(drawn)
    assert counted > 20


def test_tables_and_records_say_so_in_the_files_that_go_with_them(site: Path) -> None:
    schema = json.loads((site / "tables" / "schema.json").read_text(encoding="utf-8"))
    assert SAID.fullmatch(schema["description"])
    assert all(SAID.fullmatch(resource["description"]) for resource in schema["resources"])
    records = sorted((site / "records").glob("*.json"))
    assert len(records) >= 18
    assert all(SAID.fullmatch(json.loads(r.read_text(encoding="utf-8"))["origin"]) for r in records)


def test_citation_paper_and_first_words_say_so(site: Path) -> None:
    def words(page: str) -> str:
        return " ".join(re.sub("<[^>]+>", " ", (site / page).read_text(encoding="utf-8")).split())

    assert "Rehearsal, not measured." in words("provenance.html").split("How to cite")[1][:400]
    assert "note = {Recordings and report, rehearsal, not measured}" in words("provenance.html")
    assert "Rehearsal, not measured: the text below shows the form only." in words("method-paper.html")
    first = words("index.html").split("Measured on")[0]
    assert "Rehearsal, not measured" in first
    assert "the recordings were simulated from a plan" in first


def test_brief_figures_for_a_paper_and_archive_say_so(
    rehearsed: Path, site: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    found = read_and_analyse(rehearsed, None, silent, None)
    monkeypatch.setattr("campaign.pipeline.read_and_analyse", lambda *_: found)  # once for both commands
    brief, figures, archive = tmp_path / "brief.html", tmp_path / "figures", tmp_path / "sealed.zip"
    assert main(["report", str(rehearsed), "--brief", str(brief)]) == 0
    text = brief.read_text(encoding="utf-8")
    assert SAID.search(text.split("<title>")[1].split("</title>")[0])
    assert SAID.search(text.split('<header class="masthead">')[1].split("</header>")[0])
    assert SAID.search(text.split("<footer>")[1])
    drawn = re.findall(r'<figure class="figure".*?</figure>', text, re.DOTALL)
    assert len(drawn) > 5
    assert all(SAID.search(part) for figure in drawn for part in figure.split("</figcaption>"))

    assert main(["figures", str(rehearsed), "--page", "hysteresis", "--into", str(figures)]) == 0
    listed = pd.read_csv(figures / "index.csv")
    assert listed["caption"].str.contains(SAID).all()
    assert (listed["kind"] == "figure").sum() >= 2
    sheets = sorted((figures / "tables").glob("*.tex"))
    assert len(sheets) == (listed["kind"] == "table").sum()
    assert all(SAID.search(sheet.read_text(encoding="utf-8")) for sheet in sheets)

    write_sealed(seal_campaign(rehearsed, found[0], contents(site)), archive)
    data = unpack_archive(archive, tmp_path / "unpacked") / "data"
    for name in ("README.md", "../README.txt", "CITATION.cff", "ro-crate-preview.html", "../bag-info.txt"):
        assert SAID.search(" ".join((data / name).read_text(encoding="utf-8").split())), name
    for name in ("methods.md", "data_availability.md", "citation.bib"):
        assert SAID.search((data / "texts" / name).read_text(encoding="utf-8")), name
    crate = json.loads((data / "ro-crate-metadata.json").read_bytes())
    (root,) = (entity for entity in crate["@graph"] if entity["@id"] == "./")
    assert SAID.search(root["description"])
    assert SAID.search(root["keywords"])
    assert nodes_by_the_lengths_of_the_archive(data) > 10


def nodes_by_the_lengths_of_the_archive(data: Path) -> int:
    """Return how many node covariances of an archive follow from those of its lengths, A⁻¹ Σ A⁻ᵀ.

    A triangle is just determined, so that its design A is square in the three free coordinates.
    """
    text = (data / "MODEL.md").read_text(encoding="utf-8")
    assert all(f"## {part}" in text for part in ("Shapes from lengths", "Generations compared"))
    assert all(f"## {part}" in text for part in ("Uncertainty in use", "What a plan resolves"))
    whose = ["generation", "module", "trial", "repetition", "placement", "read_by"]
    nodes = pd.read_csv(data / "tables" / "layout.csv").groupby(whose)
    lengths = pd.read_csv(data / "model" / "shapes" / "length_covariance.csv").groupby(whose)
    found = pd.read_csv(data / "model" / "shapes" / "node_covariance.csv").groupby(whose)
    for key, pairs in found:
        at = nodes.get_group(key).set_index("node")[["x_mm", "y_mm"]].to_numpy()
        names = list(nodes.get_group(key)["node"])
        covariance = pairs.pivot(index="first", columns="second", values="covariance_mm2")
        q = symmetric(covariance)
        free = [name for name in q.index if q.loc[name, name] > 0]
        sigma = symmetric(
            lengths.get_group(key).pivot(index="first", columns="second", values="covariance_mm2")
        )
        design = pd.DataFrame(0.0, index=sigma.index, columns=q.index)
        for edge in sigma.index:
            i, j = (names.index(letter) for letter in edge)
            along = (at[j] - at[i]) / np.linalg.norm(at[j] - at[i])
            for axis, part in zip("xy", along, strict=True):
                design.loc[edge, f"{names[i]}.{axis}"] = -part
                design.loc[edge, f"{names[j]}.{axis}"] = part
        inverse = np.linalg.inv(design[free].to_numpy())
        assert q.loc[free, free].to_numpy() == pytest.approx(inverse @ sigma.to_numpy() @ inverse.T, rel=1e-6)
    return len(found)


def symmetric(upper: pd.DataFrame) -> pd.DataFrame:
    """Return a whole covariance from its upper triangle, rows and columns in one order."""
    names = sorted(set(upper.index) | set(upper.columns))
    whole = upper.reindex(index=names, columns=names)
    return whole.fillna(whole.T)


def test_every_printed_sheet_says_so(site: Path) -> None:
    sheet = (site / "assets" / "site.css").read_text(encoding="utf-8")
    assert re.search(r'@page rehearsal \{ @top-left \{ content: "Rehearsal, not measured"', sheet)
    assert "body:has(.rehearsal) { page: rehearsal; }" in sheet


def test_page_0_and_page_2_lay_the_plan_beside_the_estimate(site: Path) -> None:
    found = pd.read_csv(site / "tables" / "planned_components.csv")
    assert found.groupby("generation")["level"].nunique().to_dict() == {"new": 4, "old": 4}
    planned = found.set_index(["generation", "level"])["planned_strain_sd"]
    assert planned["old"].to_dict() == pytest.approx(
        {"module": 0.01, "sensor": 0.015, "repetition": 0.003, "residual": 0.002}
    )
    # eight 95 % intervals: fewer than six hold their truth once in a thousand rehearsals
    assert found["held"].sum() >= 6
    text = (site / "index.html").read_text(encoding="utf-8")
    words = " ".join(re.sub("<[^>]+>", " ", text).replace("\u202f", " ").replace("\u00a0", " ").split())
    assert re.search(r"\d of 8 intervals hold the spread that was planned", words)
    assert re.search(r"sensors of a module planned 1\.5 %, estimated [\d.]+ \[[\d.]+, [\d.]+\] %", words)
    assert 'id="table-planned_components"' in (site / "variance.html").read_text(encoding="utf-8")


def test_what_the_design_cannot_part_stands_together(site: Path) -> None:
    found = pd.read_csv(site / "tables" / "planned_components.csv")
    assert set(found.loc[found["level"] == "module", "called"]) == {"module + mounting"}


def test_what_was_measured_is_not_laid_beside_a_plan() -> None:
    measured = read_description(EVERY_KIND.encode())
    assert measured.planned is not None
    assert compare_with_plan(measured, cast(Variance, "not looked at")) is None
    assert compare_with_plan(replace(measured, rehearsal=True), None) is None
    assert rehearsal_findings(None) == ()
