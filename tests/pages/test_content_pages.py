"""The pages that say what was found: their numbers are the results', and small campaigns leave no holes."""

from __future__ import annotations

import json
import re
from functools import cache
from html import unescape
from html.parser import HTMLParser

import numpy as np
import pytest

from campaign.analyses.findings import EnoughFinding
from campaign.analyses.results import CampaignResults
from campaign.pages import numbers, residuals
from campaign.pages.figures import marker_count
from campaign.pages.page_data import unfolded_traces, unpacked_lists
from campaign.pages.site import build_site
from campaign.pipeline import analyse, read_campaign
from tests.pages.small_campaign import Sketch, small_results

SKETCHES = {
    "usual": Sketch(set_aside="M2 BC"),
    "one sensor, one run, one branch, no limits": Sketch(
        generations=("only",), modules=1, sensors=("S",), sessions=1, runs=1, both_branches=False, limits=""
    ),
    "in millimetres": Sketch(generations=("g",), modules=2, rest_length=False, sessions=1, limits=""),
    "ids with any characters": Sketch(
        generations=("<b>&g</b>",),
        modules=2,
        sensors=("a/../b", "ü {{ 1 }}"),
        sessions=1,
        module_name="M {number} <i>",
    ),
}
FORBIDDEN = re.compile(r"\b(safe|certified|approved)\b", re.IGNORECASE)
HOLES = re.compile(r"\b(nan|NaN|None|undefined|inf|Infinity)\b")


class _Text(HTMLParser):
    """Visible text, links and anchors of one page."""

    def __init__(self) -> None:
        super().__init__()
        self.words: list[str] = []
        self.links: list[str] = []
        self.anchors: set[str] = set()
        self._hidden = 0

    def handle_starttag(self, tag: str, attributes: list[tuple[str, str | None]]) -> None:
        given = dict(attributes)
        self._hidden += tag in ("script", "style")
        self.anchors |= {value for key in ("id", "name") if (value := given.get(key))}
        if tag == "a" and given.get("href"):
            self.links.append(str(given["href"]))

    def handle_endtag(self, tag: str) -> None:
        self._hidden -= tag in ("script", "style")

    def handle_data(self, data: str) -> None:
        if not self._hidden:
            self.words.append(data)

    @property
    def text(self) -> str:
        return spaced("".join(self.words))


def parsed(page: bytes) -> _Text:
    parser = _Text()
    parser.feed(page.decode("utf-8"))
    return parser


@pytest.fixture(scope="module")
def sites(tmp_path_factory: pytest.TempPathFactory):
    """Results and files of a sketch by its name, each made once."""

    @cache
    def made(name: str) -> tuple[CampaignResults, dict[str, bytes]]:
        results = small_results(tmp_path_factory.mktemp("campaign") / "c", SKETCHES[name])
        return results, build_site(results)

    return made


@pytest.fixture(params=SKETCHES, ids=str)
def built(request: pytest.FixtureRequest, sites):
    return sites(request.param)


@pytest.fixture
def usual(sites) -> tuple[CampaignResults, dict[str, bytes]]:
    return sites("usual")


def spaced(text: str) -> str:
    """Text with every kind of space made plain, as parsed pages have it."""
    return re.sub(r"\s+", " ", text)


def pages_of(files: dict[str, bytes]) -> dict[str, _Text]:
    return {name: parsed(content) for name, content in files.items() if name.endswith(".html")}


def test_no_page_shows_a_hole_or_a_word_that_promises_too_much(built):
    _, files = built
    for name, page in pages_of(files).items():
        assert not HOLES.findall(page.text), (name, HOLES.search(page.text))
        if name not in ("method.html", "recordings.html", "provenance.html"):
            assert not FORBIDDEN.findall(page.text), name


def test_every_link_leads_to_a_page_a_file_or_a_section_of_the_site(built):
    _, files = built
    pages = pages_of(files)
    # the lists of hashes in provenance/ are written around the site by the pipeline
    for name, page in pages.items():
        for link in page.links:
            address, _, anchor = unescape(link).partition("#")
            target = address or name
            if target.startswith(("https:", "provenance/", "data:")):
                continue
            assert target in files, (name, link)
            if anchor and target in pages:
                assert anchor in pages[target].anchors, (name, link)


def test_ids_are_shown_as_they_are_and_never_become_markup(built):
    results, files = built
    index = files["index.html"].decode("utf-8")
    assert "<b>&g" not in index
    assert "<i>" not in index
    modules = set(results.readings.table["module"])
    text = " ".join(page.text for page in pages_of(files).values())
    assert all(re.sub(r"\s+", " ", module) in text for module in modules)


def test_findings_say_the_expanded_uncertainties_of_the_effort_table(usual):
    results, files = usual
    text = parsed(files["index.html"]).text
    facts = [f for found in results.findings.findings if found.kind == "enough" for f in found.facts]
    assert len(facts) == 2
    for fact in facts:
        assert isinstance(fact, EnoughFinding)
        table = results.calibration_effort.table
        own = table[(table["generation"] == fact.generation) & (table["effort"] == "sensor")]
        row = own.iloc[0]
        expanded = 100 * float(row["strain_expanded"])
        low, high = (expanded * row[k] / row["strain_sd_predicted"] for k in ("low", "high"))
        shown = numbers.interval(expanded, low, high, "%")
        assert spaced(f"±{shown}") in text


def test_findings_name_the_worst_sensor_and_what_was_set_aside(usual):
    results, files = usual
    page = parsed(files["index.html"])
    lines = results.calibration.sensor_lines
    both = lines[(lines["branch"] == "both") & (lines["generation"] == "first")]
    worst = both.loc[both["linearity_least_squares_percent_fso"].idxmax()]
    value = numbers.significant(float(worst["linearity_least_squares_percent_fso"]), 2, "%FSO")
    assert spaced(f"{worst['module']} {worst['sensor']} with {value}") in page.text
    assert "M2 BC (torn)" in page.text
    assert "11 sensors of 6 modules" in page.text


def test_headline_figures_are_also_shown_with_everything_put_back(usual):
    results, files = usual
    facts = next(f.facts for f in results.findings.findings if f.kind == "linearity")
    first = next(f for f in facts if f.generation == "first")
    assert first.put_back > 3 * first.mean
    shown = numbers.significant(first.put_back, 2, "%FSO")
    sentence = spaced(f"With everything that was set aside put back the mean is {shown}.")
    assert sentence in parsed(files["index.html"]).text


def test_sensor_table_holds_the_slope_with_its_standard_uncertainty(usual):
    results, files = usual
    lines = results.calibration.sensor_lines
    row = lines[lines["branch"] == "both"].iloc[0]
    shown = numbers.measured(float(row["slope"]) / 100, float(row["var_slope"]) ** 0.5 / 100)
    assert spaced(shown) in parsed(files["calibration.html"]).text


def test_variance_page_shows_the_sd_of_sensors_with_its_interval(usual):
    results, files = usual
    table = results.variance.variance_in_strain
    row = table[
        (table["level"] == "sensor") & (table["place"] == "mid") & (table["generation"] == "first")
    ].iloc[0]
    text = parsed(files["variance.html"]).text.replace("\u2011", "-")
    if row["strain_sd"] == row["strain_sd"]:
        shown = numbers.interval(*(float(row[k]) * 100 for k in ("strain_sd", "low", "high")))
    else:
        shown = f"at most {numbers.significant(float(row['high']) * 100, 2)}"
    assert spaced(shown) in text


def test_every_trial_is_a_section_of_its_sensors_page(usual):
    results, files = usual
    pages = pages_of(files)
    trials = results.intake.trials
    assert len(trials) == 48
    for row in trials.to_dict("records"):
        page = pages[f"sensor-{row['module']}-{row['sensor']}.html"]
        assert row["file"] in page.text
    assert sum(a.startswith("trial-") for page in pages.values() for a in page.anchors) == 48


def test_in_millimetres_nothing_is_called_strain_and_no_gauge_factor_is_invented(sites):
    _, files = sites("in millimetres")
    text = parsed(files["calibration.html"]).text
    assert "Strain / %" not in text
    assert "not identifiable" in text
    assert "mm elongation" in parsed(files["index.html"]).text


def test_without_staircases_the_findings_say_what_was_measured(tmp_path):
    folder = tmp_path / "c"
    (folder / "trials").mkdir(parents=True)
    rows = "\n".join(f"{i / 10},{60 + abs(i % 20 - 10)},{50 + abs(i % 20 - 10)}" for i in range(60))
    (folder / "trials" / "M1_S_layout_r1.csv").write_text(f"time_s,length [mm],C (pF)\n{rows}\n")
    (folder / "campaign.toml").write_text(
        'format = 1\n[campaign]\ntitle = "Only shapes"\n[recordings]\n'
        'name = "{module}_{sensor}_{kind}_r{repetition}"\n'
    )
    files = build_site(analyse(read_campaign(folder)))
    assert not {"calibration.html", "variance.html", "residuals.html", "calibration_effort.html"} & set(files)
    page = parsed(files["index.html"])
    assert "1 recording of known shapes of the module" in page.text
    assert "Pages 1 to 4" in page.text
    assert not HOLES.findall(page.text)
    assert "trials/M1_S_layout_r1.csv" in parsed(files["sensor-M1-S.html"]).text


def write_wide_campaign(folder):
    """Two sensors in every file: one run of the stand shared by the sensors of a module."""
    generator = np.random.default_rng(9)
    (folder / "trials").mkdir(parents=True)
    for module in (1, 2, 3):
        for run in (1, 2):
            shift = generator.normal(0, 0.1)
            rows = [
                f"{60 + 6 * k},{50 + module + 4 * k + shift + a},{70 - module + 5 * k + shift + b}"
                for k, a, b in zip(
                    (0, 1, 2, 3, 4, 3, 2, 1, 0), *generator.normal(0, 0.02, (2, 9)), strict=True
                )
            ]
            table = "\n".join(["length_mm,C_A,C_B", *rows])
            (folder / "trials" / f"M{module}_cal_r{run}.csv").write_text(table + "\n")
    sensors = [f"M{m},{s},60 mm" for m in (1, 2, 3) for s in "AB"]
    (folder / "sensors.csv").write_text("\n".join(["module,sensor,rest_length", *sensors]) + "\n")
    (folder / "campaign.toml").write_text(
        'format = 1\n[campaign]\ntitle = "Wide"\n[recordings]\nname = "{module}_{kind}_r{repetition}"\n'
        '[recordings.kinds]\ncal = "staircase"\n[[columns]]\nheader = "length_mm"\nquantity = "length"\n'
        'unit = "mm"\nalong = ["A", "B"]\n[[columns]]\nheader = "C_{sensor}"\nquantity = "signal"\n'
        'unit = "pF"\n'
    )
    return folder


def test_a_run_that_sensors_share_is_a_section_of_its_modules_page(tmp_path):
    files = build_site(analyse(read_campaign(write_wide_campaign(tmp_path / "c"))))
    pages = pages_of(files)
    module, sensor = pages["module-M1.html"], pages["sensor-M1-A.html"]
    shared = {a for a in module.anchors if a.startswith("trial-")}
    assert {a for a in sensor.anchors if a.startswith("trial-")} >= shared
    assert len([a for a in shared if f"sensor-M1-A.html#{a}" in module.links]) == 2
    assert "Run shared with B" in sensor.text
    assert "runs shared by the sensors of a module" in pages["variance.html"].text
    assert not any(HOLES.findall(page.text) for page in pages.values())


def test_with_many_residuals_bands_are_drawn_and_every_module_has_a_script_of_its_points(sites, monkeypatch):
    results, few = sites("usual")
    assert not [name for name in few if name.startswith("data/residuals_")]
    monkeypatch.setattr(residuals, "LARGEST_NUMBER_OF_MARKERS", 300)
    page = residuals.residuals_page(results)
    files = residuals.residual_files(results)
    readings = results.residuals.table.groupby("module").size()
    assert len(readings) == 6
    for module, number in readings.items():
        script = files[page.data["residual_files"][module]].decode("utf-8")
        content = json.loads(script[script.index("] = ") + 4 : script.rindex(";")])
        assert len(unfolded_traces(content)[0]["y"]) == number
        assert len(unpacked_lists(content)[content["x"]["against-order"][0]]) == number
    against_level = next(figure for figure in page.figures if figure.name == "against-level")
    assert marker_count(against_level) == residuals.LARGEST_SHOWN
