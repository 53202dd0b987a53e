"""Columns by position, by header, by pattern, by usual name; units from header, units row or description."""

from __future__ import annotations

import pytest

from campaign.recordings.columns import TablePlan, header_expression, plan_columns, rules_of_file
from campaign.recordings.description import ColumnRule, Description
from campaign.recordings.dialect import find_layout


def plan(
    header: str, *rules: ColumnRule, row: str | None = None, units: str = "", file: str = "trials/a.csv"
) -> TablePlan:
    separator = ";" if ";" in header else ","
    row = row if row is not None else separator.join("1.5" for _ in header.split(separator))
    text = header + "\n" + (units + "\n" if units else "") + (row + "\n") * 4
    layout = find_layout(text.encode(), Description("t"), by_position=any(r.position for r in rules))
    return plan_columns(layout, rules, file)


def read(table: TablePlan) -> list[tuple[object, ...]]:
    return [(c.position, c.quantity, c.unit.spelling if c.unit else None) for c in table.columns]


def codes(table: TablePlan) -> list[tuple[str, int | None]]:
    return [(n.code, n.column) for n in table.notices]


def test_usual_headers_need_no_rules():
    table = plan(
        "t / s,length [mm],capacitance (pF),p / kPa,force_N,T (°C),humidity_%RH,step,direction,cycle"
    )
    usual = "time length signal pressure force temperature humidity level direction cycle"
    assert " ".join(c.quantity for c in table.columns) == usual
    assert table.notices == ()


@pytest.mark.parametrize(
    ("header", "quantity", "unit"),
    [
        ("stretch_mm", "elongation", "mm"),
        ("stretch [%]", "strain", "%"),
        ("elongation (µm)", "elongation", "µm"),
        ("displacement, mm", "elongation", "mm"),
        ("strain_mm/mm", "strain", "mm/mm"),
        ("ε / %", "strain", "%"),
        ("Stage (mm)", "length", "mm"),
        ("L [mm]", "length", "mm"),
        ("ΔL / mm", "elongation", "mm"),
        ("dL_mm", "elongation", "mm"),
    ],
)
def test_references_by_their_usual_names(header, quantity, unit):
    table = plan(f"{header};C (pF)")
    assert read(table)[0] == (1, quantity, unit)
    assert table.readable


def test_a_resistance_is_the_signal_where_there_is_no_other():
    assert [c.quantity for c in plan("time_s,R (kohm)").columns] == ["time", "signal"]
    assert [c.quantity for c in plan("time_s,C (pF),R (kohm)").columns] == ["time", "signal", "resistance"]


def test_position_goes_before_header_and_the_first_rule_wins():
    rules = (
        ColumnRule("pressure", header="a", unit="kPa"),
        ColumnRule("signal", header="*", unit="pF"),
        ColumnRule("time", position=1, unit="s"),
    )
    assert read(plan("a,b", *rules)) == [(1, "time", "s"), (2, "signal", "pF")]
    assert plan("a,b", *rules).rules_used == {1, 2}


@pytest.mark.parametrize(
    ("pattern", "header", "matches"),
    [
        ("C1 ({repetition})", "C1 (2)", {"repetition": "2"}),
        ("C1 ({repetition})", "C1(3)", {"repetition": "3"}),
        ("C1 ({repetition})", "C2 avce C1 (2)", None),
        ("C1 pF", "C1  pF", {}),
        ("C1 pF", "C1pF", {}),
        ("C1 pF", " C1 pF ", {}),
        ("C1pF", "C1 pF", None),
        ("C_{sensor} (pF)", "C_AB (pF)", {"sensor": "AB"}),
        ("C_{sensor} (pF)", "C_left arm (pF)", {"sensor": "left arm"}),
        ("{sensor}.{repetition}", "S01.2", {"sensor": "S01", "repetition": "2"}),
        ("x_{node} [mm]", "x_A [mm]", {"node": "A"}),
        ("model *", "model d=K*C1", {}),
        ("model *", "a model", None),
        ("*", "", {}),
        ("a+b (x)", "a+b (x)", {}),
        ("caf\u00e9", "cafe\u0301", {}),
    ],
)
def test_headers_of_rules(pattern, header, matches):
    table = (
        plan(f"time_s;{header};C (pF)", ColumnRule("ignore", header=pattern)) if matches is not None else None
    )
    if table is not None:
        assert table.rules_used == {0}
    match = header_expression(pattern).fullmatch(header.strip()) if header.isascii() else None
    if header.isascii():
        assert (match.groupdict() if match else None) == (matches if matches is not None else None)


def test_wide_files_have_a_column_a_sensor():
    table = plan("time_s,C_AB (pF),C_CD (pF)", ColumnRule("signal", header="C_{sensor} (pF)"))
    assert [(c.quantity, c.sensor) for c in table.columns] == [
        ("time", None),
        ("signal", "AB"),
        ("signal", "CD"),
    ]
    assert table.readable


def test_the_unit_of_a_pattern_is_the_patterns_not_part_of_a_sensors_name():
    table = plan("time_s,C_F,C_N", ColumnRule("signal", header="C_{sensor}", unit="pF"))
    assert codes(table) == []
    wanting = plan("time_s,C_F", ColumnRule("signal", header="C_{sensor}"))
    assert codes(wanting) == [("unit", 2)]


def test_repetitions_by_constants():
    rules = (
        ColumnRule("length", position=1, unit="mm"),
        ColumnRule("signal", position=2, unit="pF", repetition=1),
        ColumnRule("signal", position=3, unit="pF", repetition=2, sensor="S1"),
    )
    assert [(c.sensor, c.repetition) for c in plan("a,b,c", *rules).columns] == [
        (None, None),
        (None, 1),
        ("S1", 2),
    ]


def test_a_rule_serves_the_files_it_names():
    rules = (
        ColumnRule("ignore", header="a", files="runs/seal_*.csv"),
        ColumnRule("time", header="a", unit="s"),
    )
    assert [i for i, _ in rules_of_file(rules, "runs/seal_1.csv")] == [0, 1]
    assert [i for i, _ in rules_of_file(rules, "runs/deep/seal_1.csv")] == [1]
    assert plan("a,C (pF)", *rules, file="runs/seal_1.csv").left_alone == ("a",)
    assert read(plan("a,C (pF)", *rules, file="x.csv"))[0] == (1, "time", "s")


def test_the_description_overrules_the_header_and_the_notice_says_so():
    table = plan("timestamp(ms),C (pF)", ColumnRule("time", header="timestamp(ms)", unit="s"))
    assert read(table)[0] == (1, "time", "s")
    [notice] = table.notices
    assert (notice.code, notice.column, notice.weight) == ("unit-overruled", 1, "noted")
    assert "'ms'" in notice.what
    assert "'s'" in notice.what
    same = plan("timestamp(ms),C (pF)", ColumnRule("time", header="timestamp(ms)", unit="msec"))
    assert [n.code for n in same.notices] == ["converted"]


def test_units_rows_serve_rules_and_usual_names():
    table = plan("time,stage,C1", ColumnRule("signal", header="C1"), units="ms,[cm],(nF)")
    assert read(table) == [(1, "time", "ms"), (2, "length", "cm"), (3, "signal", "nF")]
    [notice] = table.notices
    assert (notice.code, notice.count) == ("converted", 3)


@pytest.mark.parametrize(
    "header", ["time,capacitance_pF", "time_s,capacitance", "time [kPa],C (pF)", "time_s,C [furlong]"]
)
def test_a_missing_or_wrong_unit_sets_aside(header):
    table = plan(header)
    assert not table.readable
    assert {n.code for n in table.notices} == {"unit"}


def test_an_unmarked_end_that_is_no_unit_of_the_quantity_makes_another_name():
    table = plan("time_s,C (pF),pressure_min,force_max,p_MIN")
    assert codes(table) == [("extra-column", 3)]
    assert table.notices[0].count == 3


def test_timestamps_need_no_unit_and_may_be_declared():
    assert plan("timestamp,C (pF)", row="2026-03-04T10:00:00,1.5").columns[0].content == "timestamp"
    declared = plan(
        "when,C (pF)", ColumnRule("time", header="when", unit="timestamp"), row="2026-03-04 10:00,1.5"
    )
    assert declared.columns[0].content == "timestamp"
    assert plan("time_s,C (pF)", row="2026-03-04T10:00:00,1.5").columns[0].content == "number"


def test_two_columns_of_one_quantity_are_ambiguous_but_for_clocks():
    table = plan("time_s,C (pF),cap_pF")
    assert ("duplicate-column", 3) in codes(table)
    assert not table.readable
    clocks = plan("time_s,timestamp_ms,C (pF)")
    assert clocks.readable
    assert ("several-clocks", 2) in codes(clocks)
    assert read(clocks) == [(1, "time", "s"), (3, "signal", "pF")]
    assert not plan("time_s,time_s,C (pF)").readable


@pytest.mark.parametrize(
    ("header", "words"),
    [("C (pF)", "a time or a reference"), ("time_s,p_kPa", "a signal"), ("a,b", "a reference")],
)
def test_what_is_wanting_is_named(header, words):
    [notice] = [n for n in plan(header).notices if n.code == "missing-column"]
    assert notice.weight == "set aside"
    assert words.split()[-1] in notice.what


def test_columns_left_alone_are_listed_and_unknown_ones_remarked_on():
    table = plan("time_s,C (pF),model a,other,", ColumnRule("ignore", header="model *"), row="1.0,2.0,3,4,5")
    assert table.left_alone == ("model a",)
    [notice] = table.notices
    assert (notice.code, notice.column, notice.count) == ("extra-column", 4, 2)


def test_spacer_columns_are_not_taken_for_data():
    table = plan("time_s,,C (pF),,note", row="1.0,,2.0,,x")
    assert codes(table) == [("extra-column", 5), ("spacer-column", 2)]


def test_a_position_beyond_the_file_is_said():
    table = plan("time_s,C (pF)", ColumnRule("force", position=7, unit="N"))
    assert ("column-not-found", 7) in codes(table)
    assert table.readable


def test_any_quantity_may_stand_as_the_signal():
    rules = (ColumnRule("time", position=1, unit="ms"), ColumnRule("signal", position=2, unit="N"))
    assert read(plan("a,b", *rules)) == [(1, "time", "ms"), (2, "signal", "N")]


def test_names_of_trials_may_stand_in_columns():
    table = plan("Module,time_s,C (pF)", row="M03,1.0,2.0")
    assert (table.columns[0].quantity, table.columns[0].content) == ("module", "identity")
