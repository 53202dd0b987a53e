"""MODEL.md and its tables lead another program to the same fit; readings.csv alone leads ours there."""

from __future__ import annotations

import csv
import json
import re
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np
import pandas as pd
import pytest

from campaign.analyses.calibration import Calibration
from campaign.analyses.variance import Variance, analyse_variance
from campaign.methods.nested_model import NestedModel, RandomTerm, fit_nested_model
from campaign.pages.tables import csv_bytes, schema_bytes
from campaign.provenance.model_text import describe_fit, fit_tables, model_files, told_fit
from campaign.provenance.refitting import readings_table, refit_from_readings
from campaign.provenance.software import requirement_name
from tests.pages.small_campaign import Sketch, read_and_calibrate, write_campaign

WITHOUT_MODEL = (
    *("hysteresis", "drift", "pressure", "influences"),
    *("layout", "generations", "budget", "planning"),
)
"""Results that a campaign may lack, each told of in MODEL.md where it is there."""


@pytest.fixture(scope="module")
def simple(tmp_path_factory: pytest.TempPathFactory) -> tuple[Calibration, Variance, Any]:
    """One sensor a module, one run each: the module's line is the only effect with a covariance."""
    sketch = Sketch(
        generations=("first|1",), modules=7, sensors=("AB",), sessions=1, runs=1, both_branches=False
    )
    folder = write_campaign(tmp_path_factory.mktemp("simple") / "c", sketch)
    intake, calibration = read_and_calibrate(folder)
    variance = analyse_variance(calibration, intake.description)
    results = SimpleNamespace(
        variance=variance,
        calibration=calibration,
        readings=SimpleNamespace(reference=calibration.reference),
        **dict.fromkeys(WITHOUT_MODEL),
        earlier=(),
    )
    return calibration, variance, results


def sealed_tables(calibration: Calibration, variance: Variance) -> tuple[bytes, bytes, bytes]:
    frames = {"readings": calibration.readings, "fit_certificates": variance.certificate}
    return (
        csv_bytes(frames["readings"], "readings"),
        schema_bytes(frames),
        csv_bytes(frames["fit_certificates"], "fit_certificates"),
    )


def design_of(folder: Path) -> pd.DataFrame:
    return pd.read_csv(folder / "design.csv")


def test_the_design_table_alone_gives_the_sealed_criterion(unpacked: Path) -> None:
    """The design of every fit, read from CSV and fitted by the engine without anything of the analysis."""
    data = unpacked / "data"
    text = (data / "MODEL.md").read_text("utf-8")
    criteria = [
        float(value) for value in re.findall(r"^−2 log restricted likelihood: (\S+),", text, re.MULTILINE)
    ]
    places = re.findall(r"Files: `model/(.+)/`\.", text)
    assert len(places) == len(criteria) >= 2
    for place, criterion in zip(places, criteria, strict=True):
        design = design_of(data / "model" / place)
        assert list(design["row"]) == sorted(design["row"])
        units = [name.removeprefix("unit_") for name in design if name.startswith("unit_")]
        fixed = design[[name for name in design if re.fullmatch(r"f\d+", name)]].to_numpy(float)
        line = np.column_stack([np.ones(len(design)), design["z"]])
        formula = re.search(rf"`model/{place}/`.*?lmer\((.*?)data = design", text, re.DOTALL)
        assert formula is not None
        found = re.findall(r"\(([^|()]+) \| unit_(\w+)\)", formula.group(1))
        bars = {name: bar for bar, name in found}
        assert set(bars) == set(units)
        columns = {
            name: line
            if bars[name] == "1 + z"
            else line[:, :1]
            if bars[name] == "1"
            else design[[bars[name].removeprefix("0 + ")]].to_numpy(float)
            for name in units
        }
        levels = tuple(
            (name, design[f"unit_{name}"].to_numpy()) for name in ("module", "sensor", "repetition")
        )
        inner = {"sensor_by_level": "sensor", "sensor_by_direction": "sensor"}
        terms = tuple(
            RandomTerm(
                name,
                inner.get(name, name),
                columns[name],
                design[f"unit_{name}"].to_numpy() if name == "sensor_by_level" else None,
            )
            for name in units
        )
        names = tuple(f"f{k}" for k in range(fixed.shape[1]))
        fit = fit_nested_model(NestedModel(design["y"].to_numpy(), fixed, names, levels, terms))
        assert fit.criterion == pytest.approx(criterion, abs=1e-6)
        stored = pd.read_csv(data / "model" / place / "fixed_covariance.csv", index_col="of").to_numpy()
        np.testing.assert_allclose(fit.coefficient_covariance, stored, rtol=1e-4, atol=1e-7)


FORMULA = re.compile(
    r"lmer\(y ~ 0 \+ (?P<means>f\d+(?: \+ f\d+)*)"
    r"\n     \+ (?P<bars>\((?:1|1 \+ z|0 \+ \w+) \| \w+\)(?: \+ \((?:1|1 \+ z|0 \+ \w+) \| \w+\))*),"
    r"\n     data = design, REML = TRUE\)"
)
"""A call of lme4 as MODEL.md writes it. DEVELOPERS.md says how such calls were run in R."""


def test_every_call_of_lme4_is_whole_and_names_columns_that_are_there(unpacked: Path) -> None:
    data = unpacked / "data"
    text = (data / "MODEL.md").read_text("utf-8")
    sections = [part for part in text.split("\n## ") if "```r\n" in part]
    assert len(sections) >= 2
    for section in sections:
        place = re.search(r"Files: `model/(.+)/`", section)
        call = re.search(r"```r\n(.*?)\n```", section, re.DOTALL)
        assert place is not None
        assert call is not None
        formula = FORMULA.fullmatch(call[1])
        assert formula is not None, call[1]
        design = design_of(data / "model" / place[1])
        means = formula["means"].split(" + ")
        assert means == [name for name in design if re.fullmatch(r"f\d+", name)]
        for bar, unit in re.findall(r"\(([^|]+) \| (\w+)\)", formula["bars"]):
            assert unit in design
            assert set(bar.split(" + ")) - {"0", "1"} <= set(design.columns)
            # as many units as rows would leave nothing to tell the effect from the residual
            assert 1 < design[unit].nunique() < len(design)
        assert np.linalg.matrix_rank(design[means].to_numpy(float)) == len(means)
        assert np.isfinite(design.select_dtypes("number").to_numpy()).all()


def test_design_rows_are_rows_of_the_table_of_readings(unpacked: Path) -> None:
    data = unpacked / "data"
    design = design_of(next((data / "model").glob("*-signal")))
    with (data / "tables" / "readings.csv").open(encoding="utf-8", newline="") as stream:
        readings = list(csv.DictReader(stream))
    for row in design.itertuples():
        reading = readings[row.row - 1]
        assert (reading["module"], reading["sensor"], reading["trial"]) == (row.module, row.sensor, row.trial)
        assert float(reading["signal"]) == row.y


def test_the_text_names_seed_parts_and_evidence(unpacked: Path, simple: tuple[Any, Any, Any]) -> None:
    text = (unpacked / "data" / "MODEL.md").read_text("utf-8")
    assert re.search(r"seeded by \d+", text)
    assert "statsmodels cannot express it: sensor" in text
    assert "log-likelihood" in text.lower()
    told = model_files(simple[2])["MODEL.md"].decode()
    assert f"seeded by {simple[1].seed}" in told
    assert "first\\|1: level 0.1" in told
    for line in told.splitlines():
        if line.startswith("| f"):
            assert len(re.findall(r"(?<!\\)\|", line)) == 6


def test_the_call_of_statsmodels_runs_on_the_design_and_finds_the_optimum(
    simple: tuple[Any, Any, Any], tmp_path: Path
) -> None:
    """The text of MODEL.md is executed as it stands, on the design table beside it."""
    import warnings

    import statsmodels.formula.api as smf

    calibration, variance, _ = simple
    fit = variance.fits[0]
    told = told_fit(fit, "signal", calibration.readings.index, calibration.reference)
    words = describe_fit(told)
    assert words.statsmodels_says == ""
    for name, content in fit_tables(told):
        (tmp_path / name).write_bytes(content)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        found = eval(words.statsmodels, {"smf": smf, "design": design_of(tmp_path)})
    assert found.llf == pytest.approx(fit.fit.log_likelihood, abs=1e-3)
    components = pd.read_csv(tmp_path / "component_covariance.csv")
    assert components["estimate"].iloc[-1] == pytest.approx(found.scale, rel=0.02)


def test_without_a_fit_the_text_says_so() -> None:
    reference = SimpleNamespace(name="strain", unit="mm/mm")
    nothing = dict.fromkeys(("variance", "calibration", *WITHOUT_MODEL))
    results: Any = SimpleNamespace(**nothing, earlier=(), readings=SimpleNamespace(reference=reference))
    files = model_files(results)
    assert set(files) == {"MODEL.md"}
    assert b"No nested model was fitted: the campaign holds no staircase reading" in files["MODEL.md"]


def test_models_of_loops_holds_and_influences_are_told_as_well() -> None:
    """One level, one value a unit: the text, the design and the covariances are those of the fit."""
    module = np.repeat(np.arange(5), 4)
    y = np.random.default_rng(3).normal(size=5)[module] + np.random.default_rng(4).normal(size=20) / 3
    one = np.ones((20, 1))
    model = NestedModel(y, one, ("first",), (("module", module),), (RandomTerm("module", "module", one),))
    fit = fit_nested_model(model)
    hysteresis = SimpleNamespace(fits=((SimpleNamespace(generation="first"), fit),))
    pressure = SimpleNamespace(spread=SimpleNamespace(fits={"first": fit}))
    results: Any = SimpleNamespace(
        variance=None,
        calibration=None,
        **dict.fromkeys(WITHOUT_MODEL) | {"hysteresis": hysteresis, "pressure": pressure},
        earlier=(),
        readings=SimpleNamespace(reference=SimpleNamespace(name="strain", unit="mm/mm")),
    )
    files = model_files(results)
    text = files["MODEL.md"].decode()
    assert "## generation first: width of loops" in text
    assert "## generation first: effect of pressure in kPa" in text
    assert text.count(f"−2 log restricted likelihood: {fit.criterion},") == 2
    assert "seeded by" not in text
    folders = {name.split("/")[1] for name in files if name.startswith("model/")}
    assert len(folders) == 2
    for folder in folders:
        design = files[f"model/{folder}/design.csv"].decode().splitlines()
        assert design[0] == "y,unit_module,outermost,f1"
        assert design[1] == f"{y[0]},0,0,1.0"
        covariance = files[f"model/{folder}/component_covariance.csv"].decode()
        assert covariance.startswith("of,component,estimate,c1,c2\nc1,module: variance of column 1,")


def test_readings_come_back_from_their_file_as_they_were(simple: tuple[Any, Any, Any]) -> None:
    calibration, variance, _ = simple
    readings, schema, _ = sealed_tables(calibration, variance)
    back = readings_table(readings, schema)
    for column in ("x", "signal", "nominal_level", "order", "used"):
        np.testing.assert_array_equal(back[column].to_numpy(), calibration.readings[column].to_numpy())
    for column in ("module", "sensor", "session", "trial", "direction"):
        assert back[column].tolist() == calibration.readings[column].astype(str).tolist()


def test_statsmodels_fits_the_model_from_readings_alone_where_it_can(simple: tuple[Any, Any, Any]) -> None:
    calibration, variance, _ = simple
    (refit,) = refit_from_readings(*sealed_tables(calibration, variance))
    assert refit.agrees
    assert "statsmodels' own fit reaches the same optimum" in refit.sentence


def test_a_criterion_that_is_not_that_of_the_readings_is_found(simple: tuple[Any, Any, Any]) -> None:
    calibration, variance, _ = simple
    readings, schema, certificates = sealed_tables(calibration, variance)
    head, row = certificates.decode().splitlines()
    cells = row.split(",")
    cells[1] = repr(float(cells[1]) + 0.01)
    forged = "\n".join([head, ",".join(cells)]).encode()
    (refit,) = refit_from_readings(readings, schema, forged)
    assert not refit.agrees
    assert "(-0.01)" in refit.sentence
    other = "\n".join([head, row.replace("first|1", "third")]).encode()
    (refit,) = refit_from_readings(readings, schema, other)
    assert (refit.generation, refit.agrees) == ("third", False)


@pytest.mark.parametrize("spoilt", [0, 1, 2])
@pytest.mark.parametrize(
    "content", [b"", b"\xff", b"[]", b"a,b\n1,2\n", b'{"resources": [{"name": "readings"}]}']
)
def test_tables_that_are_not_what_they_should_be_are_said_to_be_so(
    simple: tuple[Any, Any, Any], spoilt: int, content: bytes
) -> None:
    parts = list(sealed_tables(*simple[:2]))
    parts[spoilt] = content
    (refit,) = refit_from_readings(*parts)
    assert not refit.agrees
    assert "cannot be fitted again as it stands" in refit.sentence


def test_changed_readings_do_not_give_the_sealed_criterion(unpacked: Path) -> None:
    tables = unpacked / "data" / "tables"
    readings = (tables / "readings.csv").read_text("utf-8").splitlines()
    place = readings[0].split(",").index("signal")
    cells = readings[5].split(",")
    cells[place] = repr(float(cells[place]) + 0.5)
    readings[5] = ",".join(cells)
    others = [(tables / name).read_bytes() for name in ("schema.json", "fit_certificates.csv")]
    (refit,) = refit_from_readings("\n".join(readings).encode(), *others)
    assert not refit.agrees


@pytest.mark.parametrize(
    ("text", "name"),
    [("Jinja2>=3.1", "jinja2"), ("a_b.c[x]; python_version<'4'", "a-b-c"), (" numpy ", "numpy"), ("", "")],
)
def test_names_of_requirements_are_those_of_pep_503(text: str, name: str) -> None:
    assert requirement_name(text) == name


def test_the_schema_of_the_archive_names_units(unpacked: Path) -> None:
    schema = json.loads((unpacked / "data" / "tables" / "schema.json").read_bytes())
    readings = next(r for r in schema["resources"] if r["name"] == "readings")
    units = {field["name"]: field.get("unit") for field in readings["schema"]["fields"]}
    assert (units["length_mm"], units["strain"]) == ("mm", "mm/mm")
