"""Tables compared figure by figure: tolerances by kind of column, and what differs by its place."""

from __future__ import annotations

import json

import pytest

from campaign.provenance.comparing import (
    COMPUTED,
    EXACT,
    LIMIT,
    PROBABILITY,
    READ,
    SEARCH,
    TableComparison,
    compare_tables,
    tolerance_of,
)

TYPES = {
    "module": "string",
    "n": "integer",
    "slope": "number",
    "low": "number",
    "p": "number",
    "ok": "boolean",
}
SCHEMA = json.dumps(
    {
        "resources": [
            {
                "name": "lines",
                "schema": {"fields": [{"name": name, "type": kind} for name, kind in TYPES.items()]},
            }
        ]
    }
).encode()
ROWS = ["M1,3,0.5,0.25,0.01,true", "M2,4,100.0,,0.5,false", "M3,4,1e-9,INF,0.5,false"]


def table(rows: list[str], head: str = ",".join(TYPES)) -> bytes:
    return ("\n".join([head, *rows]) + "\n").encode()


def compared(rows: list[str], head: str = ",".join(TYPES)) -> TableComparison:
    sealed = {"lines.csv": table(ROWS), "schema.json": SCHEMA}
    return compare_tables(sealed, {"lines.csv": table(rows, head), "schema.json": SCHEMA})[0]


def test_the_same_bytes_agree() -> None:
    assert compared(ROWS) == TableComparison("lines", 18, True, ())


@pytest.mark.parametrize(
    ("row", "column", "agrees"),
    [
        ("M1,3,0.5000004,0.25,0.01,true", "slope", True),
        ("M1,3,0.500001,0.25,0.01,true", "slope", False),
        ("M1,3,0.5,0.25002,0.01,true", "low", True),
        ("M1,3,0.5,0.25005,0.01,true", "low", False),
        ("M1,3,0.5,0.25,0.0149,true", "p", True),
        ("M1,3,0.5,0.25,0.0151,true", "p", False),
        ("M1,3,0.5,,0.01,true", "low", False),
        ("M1,3,0.5,INF,0.01,true", "low", False),
        ("M1,3,nonsense,0.25,0.01,true", "slope", False),
        ("M1,4,0.5,0.25,0.01,true", "n", False),
        ("M1,3,0.5,0.25,0.01,false", "ok", False),
        ("M1 ,3,0.5,0.25,0.01,true", "module", False),
    ],
)
def test_figures_are_held_to_the_tolerance_of_their_kind(row: str, column: str, agrees: bool) -> None:
    found = compared([row, *ROWS[1:]])
    assert not found.same_bytes
    assert [d.column for d in found.differences] == ([] if agrees else [column])


def test_a_figure_near_zero_is_held_against_a_thousandth_of_the_columns_largest() -> None:
    assert compared([*ROWS[:2], "M3,4,6e-8,INF,0.5,false"]).differences == ()
    assert len(compared([*ROWS[:2], "M3,4,2e-7,INF,0.5,false"]).differences) == 1


def test_a_difference_says_where_and_by_how_much() -> None:
    found = compared([ROWS[0], "M2,4,99.0,,0.5,false", ROWS[2]])
    assert [d.sentence for d in found.differences] == [
        "tables/lines.csv, row 2 (M2), slope: sealed 100.0, now 99.0, -1 (-0.01 of it);"
        " allowed 1e-06 of the figure"
    ]


def test_rows_columns_and_tables_that_are_missing_or_new_are_named() -> None:
    fewer = compared(ROWS[:2])
    assert [(d.column, d.sealed, d.again) for d in fewer.differences] == [("rows", "3", "2")]
    renamed = compared(ROWS, "module,n,steepness,low,p,ok")
    assert [(d.column, d.again) for d in renamed.differences] == [
        ("slope", "missing"),
        ("steepness", "a column"),
    ]
    gone, new = compare_tables({"a.csv": b"x\n1\n"}, {"b.csv": b"x\n1\n"})
    assert [d.sentence for d in (*gone.differences, *new.differences)] == [
        "tables/a.csv: sealed there, now missing",
        "tables/b.csv: sealed missing, now there",
    ]


@pytest.mark.parametrize("content", [b"", b"\xff\xfe", b'"', b"x\n1,2,3\n", b"{", b"x" * 200_000, b"\0"])
def test_whatever_stands_in_a_file_nothing_breaks(content: bytes) -> None:
    (found,) = compare_tables({"lines.csv": table(ROWS), "schema.json": content}, {"lines.csv": content})
    assert found.differences


@pytest.mark.parametrize(
    ("name", "column", "kind", "tolerance"),
    [
        ("readings", "signal", "number", READ),
        ("readings", "residual", "number", COMPUTED),
        ("sensor_lines", "strain_low", "number", LIMIT),
        ("sensor_lines", "slope", "number", COMPUTED),
        ("sensor_lines", "lack_of_fit_p", "number", PROBABILITY),
        ("component_tests", "p_adjusted", "number", PROBABILITY),
        ("generations", "p_equivalence", "number", PROBABILITY),
        ("planning", "power_low", "number", PROBABILITY),
        ("planning", "difference_half_width", "number", LIMIT),
        ("budget_totals", "coverage_factor", "number", LIMIT),
        ("budget", "contribution_strain", "number", COMPUTED),
        ("layout", "cov_xy_mm2", "number", COMPUTED),
        ("sensor_lines", "runs", "integer", EXACT),
        ("fit_certificates", "evaluations", "integer", SEARCH),
        ("fit_certificates", "criterion", "number", COMPUTED),
        ("limits", "verdict", "string", EXACT),
        ("recordings", "bytes", "integer", EXACT),
    ],
)
def test_columns_have_the_tolerance_of_how_they_come_about(
    name: str, column: str, kind: str, tolerance: object
) -> None:
    assert tolerance_of(name, column, kind) is tolerance
