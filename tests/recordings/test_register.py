"""Registers: broken in each way, in several dialects; ids that are refused, noted and kept."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from campaign.notices import Notice
from campaign.recordings.register import (
    FATE_SET_ASIDE,
    Register,
    key_of,
    read_register,
    refusal_of_id,
    remark_on_id,
    rest_length_mm,
    shown,
)
from campaign.units import UnitError


def read(name: str, text: str) -> tuple[Register, list[Notice]]:
    return read_register(name, text.encode())


def codes(notices: list[Notice]) -> list[tuple[str, str, int | None]]:
    return [(n.code, n.weight, n.line) for n in notices]


def test_rows_and_free_columns_are_kept() -> None:
    register, notices = read("modules", "module,generation,batch,colour\nM01,first,B1,red\nM02,first,,\n")
    assert notices == []
    assert register.columns == ("module", "generation", "batch", "colour")
    assert [row.get("colour") for row in register.rows] == ["red", ""]
    assert register.by_key()["M02",].line == 3


@pytest.mark.parametrize("separator", [",", ";", "\t"])
def test_separators_are_found_out(separator: str) -> None:
    text = separator.join(["module", "generation"]) + "\n" + separator.join(["M01", "first"]) + "\n"
    register, notices = read("modules", text)
    assert notices == []
    assert register.rows[0].values == {"module": "M01", "generation": "first"}


@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig", "utf-16"])
def test_encodings_with_a_mark_need_no_remark(encoding: str) -> None:
    register, notices = read_register("modules", "module,generation\nM01,größer\n".encode(encoding))
    assert notices == []
    assert register.rows[0].get("generation") == "größer"


def test_another_encoding_is_read_and_noted() -> None:
    register, notices = read_register("modules", "module,generation\nM01,größer\n".encode("cp1252"))
    assert register.rows[0].get("generation") == "größer"
    assert codes(notices) == [("register-encoding", "noted", 2)]


def test_quoted_fields_may_hold_separators_and_line_ends() -> None:
    register, notices = read("modules", 'module,reason\nM01,"cut, twice\nand glued"\nM02,x\n')
    assert notices == []
    assert register.rows[0].get("reason") == "cut, twice\nand glued"
    assert register.rows[1].line == 4


@pytest.mark.parametrize(
    ("name", "text", "code", "line"),
    [
        ("modules", "modul,generation\nM01,first\n", "register-column-missing", 1),
        ("trials", "kind,module\nstaircase,M01\n", "register-column-missing", 1),
        ("modules", "module,generation,generation\nM01,a,b\n", "register-column-twice", 1),
        ("modules", "", "register-empty", 1),
        ("modules", "module,reason\nM01,\"never closed\n", "register-quotes", 2),
        ("modules", "module\0,generation\n", "register-not-text", 1),
    ],
)  # fmt: skip
def test_a_register_that_cannot_be_relied_upon_stops(name: str, text: str, code: str, line: int) -> None:
    register, notices = read(name, text)
    assert (code, "stops", line) in codes(notices)
    assert register.rows == ()


def test_a_missing_column_comes_with_the_nearest_one() -> None:
    _, [notice] = read("modules", "modul,generation\nM01,first\n")
    assert "modul" in notice.remedy


def test_an_extra_column_is_kept_and_a_slip_of_a_known_one_is_noted() -> None:
    register, notices = read("modules", "module,generatoin,shelf\nM01,first,3\n")
    assert codes(notices) == [("register-column-unknown", "noted", 1)]
    assert "generation" in notices[0].remedy
    assert register.rows[0].get("shelf") == "3"


@pytest.mark.parametrize("row", ["M02,first,extra", "M02"])
def test_a_row_of_the_wrong_width_is_left_out_and_the_others_kept(row: str) -> None:
    register, notices = read("modules", f"module,generation\nM01,first\n{row}\nM03,first\n")
    assert [r.get("module") for r in register.rows] == ["M01", "M03"]
    assert codes(notices) == [("register-row-ragged", "set aside", 3)]


def test_a_trailing_separator_is_no_extra_field() -> None:
    register, notices = read("modules", "module,generation\nM01,first,\n")
    assert notices == []
    assert len(register.rows) == 1


def test_two_rows_that_differ_are_both_disbelieved() -> None:
    register, notices = read("modules", "module,generation\nM01,first\nM02,first\nM01,second\n")
    assert [row.get("module") for row in register.rows] == ["M02"]
    assert ("M01",) in register.refused
    assert codes(notices) == [("register-row-conflict", "set aside", 4)]
    assert "lines 2 and 4" in notices[0].what
    assert "generation" in notices[0].what


def test_two_rows_that_say_the_same_are_one() -> None:
    register, notices = read("sensors", "module,sensor,rest_length\nM01,AB,60\nM01,AB,60\nM02,AB,60\n")
    assert len(register.rows) == 2
    assert codes(notices) == [("register-row-repeated", "noted", 3)]


def test_a_row_without_a_name_is_left_out() -> None:
    register, notices = read("sensors", "module,sensor\nM01,\n")
    assert register.rows == ()
    assert codes(notices) == [("register-row-nameless", "set aside", 2)]


@pytest.mark.parametrize("sign", ["=", "+", "-", "−", "@"])
def test_ids_that_spreadsheets_would_run_are_refused(sign: str) -> None:
    register, notices = read("modules", f"module,generation\n{sign}M01,first\n")
    assert register.rows == ()
    assert register.refused
    assert codes(notices) == [("id-refused", "set aside", 2)]
    assert f"{sign}M01" in notices[0].what


@pytest.mark.parametrize("name", ["M\u202e01", "M\u200b01", "M\x0701", "\u200fM01"])
def test_ids_with_characters_that_cannot_be_seen_are_refused_and_spelled_out(name: str) -> None:
    assert refusal_of_id(name) is not None
    assert "\\" in shown(name)
    assert shown(name).isprintable()


@pytest.mark.parametrize("name", ["M 01", "模块", "M'01\"", "Modul-É", "a=b", "العربية", "../M01", "x" * 300])
def test_other_ids_are_kept(name: str) -> None:
    assert refusal_of_id(name) is None


def test_ids_like_paths_and_very_long_ones_are_remarked_on() -> None:
    assert "path" in (remark_on_id("../../etc") or "")
    assert "path" in (remark_on_id("a\\..\\b") or "")
    assert "300" in (remark_on_id("x" * 300) or "")
    assert remark_on_id("M01") is None


def test_one_letter_typed_in_two_ways_is_one_id() -> None:
    register, notices = read("modules", "module,generation\nE\u0301t\u00e9,a\n\u00c9t\u00e9,a\n")
    assert len(register.rows) == 1
    assert codes(notices) == [("register-row-repeated", "noted", 3)]


@pytest.mark.parametrize(
    ("text", "length"), [("60", 60.0), ("60.5 mm", 60.5), ("6 cm", 60.0), ("", math.nan), ("0.06 m", 60.0)]
)
def test_rest_lengths_are_in_mm_unless_they_say_otherwise(text: str, length: float) -> None:
    register, notices = read("sensors", f"module,sensor,rest_length\nM01,AB,{text}\n")
    assert notices == []
    assert rest_length_mm(register.rows[0]) == pytest.approx(length, nan_ok=True)


@pytest.mark.parametrize("text", ["-3", "0", "about 60", "60 kPa", "nan", "60,5"])
def test_a_rest_length_that_is_none_is_unknown_and_noted(text: str) -> None:
    register, notices = read("sensors", f'module,sensor,rest_length\nM01,AB,"{text}"\n')
    assert codes(notices) == [("rest-length-unreadable", "noted", 2)]
    with pytest.raises(UnitError):
        rest_length_mm(register.rows[0])


def test_headers_may_carry_the_unit() -> None:
    register, _ = read(
        "sensors", "Module,Sensor,Rest length [mm],rest_length_uncertainty_mm\nM01,AB,60,0.1\n"
    )
    assert register.columns == ("module", "sensor", "rest_length", "rest_length_uncertainty")


def test_a_session_may_be_named_alike_in_two_modules() -> None:
    register, notices = read("sessions", "session,module,started\n1,M01,2026-01-01\n1,M02,2026-01-02\n")
    assert notices == []
    assert len(register.by_key()) == 2


def test_paths_of_trials_are_compared_in_one_form() -> None:
    assert key_of("trials", {"file": ".\\trials\\e\u0301.csv"}) == ("trials/\u00e9.csv",)


@pytest.mark.parametrize(
    ("fate", "aside"),
    [
        ("", False),
        ("ok", False),
        ("failed", False),
        ("tested, short dwell", False),
        ("failed before testing", True),
        ("set aside", True),
        ("dead", True),
        ("shorted", True),
        ("Broken lead", True),
    ],
)
def test_fates_that_leave_a_sensor_out(fate: str, aside: bool) -> None:
    assert (FATE_SET_ASIDE.search(fate) is not None) == aside


@given(st.binary(max_size=300))
def test_any_bytes_give_rows_or_notices_never_an_error(data: bytes) -> None:
    for name in ("modules", "sensors", "sessions", "trials"):
        register, notices = read_register(name, data)
        assert register.rows or notices or not any(register.rows)
        assert all(notice.file == f"{name}.csv" for notice in notices)


@given(st.lists(st.text("ABC12 ", min_size=1, max_size=3), min_size=1, max_size=8))
def test_every_row_is_kept_or_accounted_for(names: list[str]) -> None:
    text = "module,n\n" + "".join(f"{name},{i}\n" for i, name in enumerate(names))
    register, notices = read("modules", text)
    named = [name.strip() for name in names if name.strip()]
    assert sorted(
        {row.get("module") for row in register.rows} | {key[0] for key in register.refused}
    ) == sorted(set(named))
    assert sum(n.code == "register-row-nameless" for n in notices) == len(names) - len(named)
