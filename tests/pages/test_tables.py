"""Tables: the file in full precision, the page's cells rounded, the schema, and millimetres."""

from __future__ import annotations

import io
import json
import math

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from campaign.pages.contract_columns import CONTRACT_COLUMNS
from campaign.pages.tables import (
    Column,
    Table,
    csv_bytes,
    drawn_csv_bytes,
    exported_columns,
    in_reference,
    schema_bytes,
    shown_cells,
    shown_marks,
    sort_beside,
)
from campaign.recordings.recording import ELONGATION, LENGTH, STRAIN


def frame() -> pd.DataFrame:
    return pd.DataFrame(
        {
            "module": ["M01", "M02"],
            "sensor": ["AB", "=1+1"],
            "slope": [0.1 + 0.2, np.nan],
            "u": [0.004, np.nan],
            "low": [0.29, np.nan],
            "high": [0.31, np.nan],
            "settled": [True, False],
            "_href": ["sensor-M01-AB.html", ""],
        }
    )


def test_the_file_has_full_double_precision_and_no_helper_columns() -> None:
    text = csv_bytes(frame()).decode("utf-8")
    assert text.splitlines()[0] == "module,sensor,slope,u,low,high,settled"
    assert "0.30000000000000004" in text
    assert text.endswith("M02,=1+1,,,,,false\n")
    assert "\r" not in text
    back = pd.read_csv(io.StringIO(text))
    assert back["slope"][0] == 0.1 + 0.2


def test_contract_columns_come_first_and_must_be_there() -> None:
    rows = pd.DataFrame({name: ["x"] for name in [*reversed(CONTRACT_COLUMNS["effects"]), "further"]})
    header = csv_bytes(rows, "effects").decode().splitlines()[0]
    assert header == ",".join([*CONTRACT_COLUMNS["effects"], "further"])
    with pytest.raises(KeyError, match="estimate"):
        csv_bytes(rows.drop(columns="estimate"), "effects")


def test_columns_of_strain_are_renamed_in_a_campaign_in_millimetres() -> None:
    columns = {name: [1.0] for name in CONTRACT_COLUMNS["variance_in_strain"]}
    renamed = in_reference(pd.DataFrame(columns), ELONGATION)
    assert list(renamed)[3] == "elongation_sd_mm"
    header = csv_bytes(renamed, "variance_in_strain").decode().splitlines()[0]
    assert header == "generation,level,place,elongation_sd_mm,low,high,share"
    assert list(in_reference(pd.DataFrame(columns), STRAIN)) == list(columns)


def test_a_strain_column_gives_way_to_the_millimetres_that_are_there() -> None:
    readings = pd.DataFrame({"strain": [np.nan], "elongation_mm": [2.0]})
    assert in_reference(readings, ELONGATION).to_dict("list") == {"elongation_mm": [2.0]}


def test_cells_are_rounded_by_their_uncertainty_or_interval_and_sort_by_the_value() -> None:
    table = Table(
        "t",
        "",
        frame(),
        (
            Column("module", "Module", kind="text", href="_href"),
            Column("slope", "Slope", uncertainty="u"),
            Column("slope", "Slope", interval=("low", "high")),
            Column("slope", "Slope", "%", factor=100.0, digits=3),
            Column("settled", "Settled", kind="text"),
        ),
    )
    first, second = shown_cells(table)
    assert first[0].href == "sensor-M01-AB.html"
    assert first[1].text == "0.3000 ± 0.0040"
    assert first[1].sort is None  # it begins with the number that it sorts by
    assert first[2].text == "0.300 [0.290, 0.310]"
    assert first[3].text == "30.0"
    assert [cell.text for cell in second[1:]] == ["not identifiable from this design"] * 3 + ["no"]
    assert second[1].sort is None  # no number to begin with: missing
    assert shown_marks(table) == [("M01", "AB"), ("M02", "=1+1")]


@pytest.mark.parametrize(
    ("text", "value", "sort"),
    [
        ("0.300 ± 0.010", 0.3004, None),
        ("−12 [−13, −11]", -12.4, None),
        ("\u2007\u20075.0", 5.02, None),
        ("< 0.001", 2e-5, "2e-05"),
        ("1.2 × 10⁻⁵", 1.2e-5, "1.2e-05"),
        ("1\u202f234", 1234.0, "1234"),
        ("not measured", math.nan, None),
        ("1 at most", math.nan, ""),
    ],
)
def test_a_cell_says_what_it_sorts_by_only_where_its_text_does_not(
    text: str, value: float, sort: str | None
) -> None:
    assert sort_beside(text, value) == sort


def test_files_of_figures_hold_six_digits_of_each_column() -> None:
    frame = pd.DataFrame(
        {"a": [1 / 3, 1000 / 3, np.nan], "b": ["x", "y", "z"], "c": [1e-9 / 3, 0.0, -np.inf]}
    )
    written = drawn_csv_bytes(frame).decode()
    assert written == "a,b,c\n0.333,x,3.33333e-10\n333.333,y,0.0\n,z,-INF\n"
    assert frame["a"][0] == 1 / 3


def test_the_page_shows_some_rows_and_the_file_all() -> None:
    long = pd.DataFrame({"x": range(500)})
    table = Table("long", "", long, (Column("x", "x", kind="integer"),), shown_rows=20)
    assert len(shown_cells(table)) == 20
    assert csv_bytes(long).count(b"\n") == 501


def test_the_schema_names_type_unit_and_meaning_of_every_column() -> None:
    rows = pd.DataFrame(
        {"strain": [0.1], "humidity_percent": [40.0], "order": [1], "settled": [True], "module": ["M01"]}
    )
    schema = json.loads(schema_bytes({"some": rows}))
    assert schema["profile"] == "tabular-data-package"
    (resource,) = schema["resources"]
    assert resource["path"] == "some.csv"
    fields = {field["name"]: field for field in resource["schema"]["fields"]}
    assert {name: field["type"] for name, field in fields.items()} == {
        "strain": "number",
        "humidity_percent": "number",
        "order": "integer",
        "settled": "boolean",
        "module": "string",
    }
    assert fields["strain"]["unit"] == "mm/mm"
    assert fields["humidity_percent"]["unit"] == "%RH"
    assert fields["strain"]["description"]


def test_every_promised_column_has_a_meaning_or_a_unit() -> None:
    from campaign.pages.contract_columns import describe_column, unit_of_column

    nameless = {
        name
        for columns in CONTRACT_COLUMNS.values()
        for name in columns
        if not describe_column(name) and not unit_of_column(name)
    }
    assert nameless == set()


def test_infinite_limits_are_spelled_as_a_table_schema_wants_them() -> None:
    limits = pd.DataFrame({"low": [-np.inf, 0.1], "high": [np.inf, 1 / 3]})
    assert csv_bytes(limits).decode().split() == ["low,high", "-INF,INF", f"0.1,{1 / 3!r}"]
    fields = json.loads(schema_bytes({"t": limits}))["resources"][0]["schema"]["fields"]
    assert [field["type"] for field in fields] == ["number", "number"]


def test_the_files_leave_out_what_another_column_leads_to() -> None:
    columns = [*CONTRACT_COLUMNS["readings"], "x", "elongation_mm", "rest_length_mm", "dwell_s"]
    rows = pd.DataFrame({name: [1.0] for name in columns})
    assert exported_columns(rows, "readings") == [*CONTRACT_COLUMNS["readings"], "dwell_s"]
    in_millimetres = in_reference(rows, LENGTH)
    assert "x" in exported_columns(in_millimetres, "readings")
    residuals = pd.DataFrame(
        {"module": ["M1"], "trial": ["a"], "sensor": ["AB"], "order": [1], "marginal": [0.5]}
    )
    assert csv_bytes(residuals, "residuals") == b"trial,sensor,order,marginal\na,AB,1,0.5\n"
    assert list(residuals) == ["module", "trial", "sensor", "order", "marginal"]


@given(st.lists(st.floats(), min_size=1))
def test_every_number_of_a_file_comes_back_bit_by_bit(values: list[float]) -> None:
    fields = csv_bytes(pd.DataFrame({"value": values, "row": range(len(values))})).decode().splitlines()[1:]
    spelled = {"": "nan", "INF": "inf", "-INF": "-inf"}
    back = [float(spelled.get(cell, cell)) for cell in (line.split(",")[0] for line in fields)]
    np.testing.assert_array_equal(np.array(back), np.array(values))
    assert np.array_equal(np.signbit(back), np.signbit(values) & ~np.isnan(values))
