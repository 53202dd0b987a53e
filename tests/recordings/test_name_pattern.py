"""Patterns of names: what a name says, names that can be read in two ways, and names that cannot be read."""

from __future__ import annotations

import time

import pytest
from hypothesis import given
from hypothesis import strategies as st

from campaign.recordings.name_pattern import (
    PatternError,
    compile_pattern,
    distinct_readings,
    read_name,
    text_to_match,
)

KINDS = ("staircase", "cal", "up_down", "hold")
FOUR = "{module}_{sensor}_{kind}_r{repetition}"
THREE = "{module}_{kind}_r{repetition}"

plain_id = st.text("ABCXYZabcxyz0123456789-.éß中", min_size=1, max_size=8)


def read(file: str, *patterns: str) -> dict[str, str]:
    return read_name(file, [compile_pattern(p) for p in patterns], KINDS).values


@pytest.mark.parametrize(
    ("file", "values"),
    [
        ("trials/M01_AB_cal_r1.csv", {"module": "M01", "sensor": "AB", "kind": "cal", "repetition": "1"}),
        ("M01_AB_up_down_r02.csv", {"module": "M01", "sensor": "AB", "kind": "up_down", "repetition": "02"}),
        ("deep/er/M01_cal_r3.csv", {"module": "M01", "kind": "cal", "repetition": "3"}),
        ("M 01_A(B)_cal_r1.csv", {"module": "M 01", "sensor": "A(B)", "kind": "cal", "repetition": "1"}),
        ("模块一_边_cal_r1.csv", {"module": "模块一", "sensor": "边", "kind": "cal", "repetition": "1"}),
        ("M01_AB_cal_rx.csv", {}),
        ("M01_AB_cal_r1_extra.csv", {}),
        ("notes.csv", {}),
    ],
)
def test_a_name_says_what_the_first_matching_pattern_reads(file: str, values: dict[str, str]) -> None:
    assert read(file, FOUR, THREE) == values


def test_a_word_that_is_no_known_kind_is_still_told() -> None:
    assert read("M01_AB_wobble_r1.csv", FOUR)["kind"] == "wobble"


def test_a_name_that_one_pattern_can_read_in_two_ways_says_nothing() -> None:
    reading = read_name("M01_A_B_cal_r1.csv", [compile_pattern(FOUR)], KINDS)
    assert reading.values == {}
    assert sorted(found["sensor"] for found in reading.ambiguous) == ["A_B", "B"]


def test_ignored_parts_make_no_difference() -> None:
    assert read("M01_x_y_z_r1.csv", "{module}_{ignore}_{ignore}_r{repetition}") == {}
    assert read("2026-03-01_M01_r1.csv", "{ignore}_{module}_r{repetition}") == {
        "module": "M01",
        "repetition": "1",
    }


def test_a_pattern_with_a_slash_is_for_the_whole_path() -> None:
    pattern = "trials/{module}/{sensor}_{kind}_r{repetition}"
    assert read("trials/M01/AB_cal_r1.csv", pattern)["sensor"] == "AB"
    assert read("other/M01/AB_cal_r1.csv", pattern) == {}
    assert read("trials/deep/M01/AB_cal_r1.csv", pattern) == {}


def test_a_key_that_stands_twice_must_say_the_same_twice() -> None:
    pattern = "trials/{module}/{module}_{sensor}_r{repetition}"
    assert read("trials/M_1/M_1_AB_r1.csv", pattern) == {"module": "M_1", "sensor": "AB", "repetition": "1"}
    assert read("trials/M01/M02_AB_r1.csv", pattern) == {}


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("AB_120mm.csv", "120mm"),
        ("AB_-1.5 mm.csv", "-1.5 mm"),
        ("AB_0,5cm.csv", "0,5cm"),
        ("AB_40.csv", "40"),
    ],
)
def test_set_points_are_numbers_with_or_without_a_unit(name: str, value: str) -> None:
    assert read(name, "{sensor}_{length}") == {"sensor": "AB", "length": value}


def test_a_set_point_is_never_a_word() -> None:
    assert read("AB_long.csv", "{sensor}_{length}") == {}


def test_the_ending_is_left_out_unless_the_pattern_spells_it() -> None:
    assert text_to_match(compile_pattern("{module}"), "a/b.c.csv") == "b.c"
    assert text_to_match(compile_pattern("{module}.csv"), "a/b.csv") == "b.csv"


@pytest.mark.parametrize(
    ("pattern", "word"),
    [("{modul}_x", "modul"), ("{module", "{"), ("module}", "}"), ("no key", ""), ("{}", "")],
)
def test_a_pattern_that_cannot_be_used_is_refused(pattern: str, word: str) -> None:
    with pytest.raises(PatternError) as refused:
        compile_pattern(pattern)
    assert str(refused.value) == word


@given(plain_id, plain_id, st.sampled_from(KINDS), st.integers(0, 999))
def test_what_a_pattern_writes_it_reads_again(module: str, sensor: str, kind: str, repetition: int) -> None:
    file = f"trials/{module}_{sensor}_{kind}_r{repetition}.csv"
    assert read(file, FOUR, THREE) == {
        "module": module,
        "sensor": sensor,
        "kind": kind,
        "repetition": str(repetition),
    }


@given(st.text(st.characters(exclude_characters="/"), max_size=30))
def test_any_name_is_read_in_one_way_or_in_none(stem: str) -> None:
    reading = read_name(f"{stem}.csv", [compile_pattern(FOUR), compile_pattern("{module}-{sensor}")], KINDS)
    assert not (reading.values and reading.ambiguous)
    if reading.values and reading.pattern == FOUR:
        assert FOUR.format(**reading.values) == stem
    if reading.ambiguous:
        first, second = reading.ambiguous
        assert first != second
        assert reading.pattern is not None
        assert reading.pattern.format(**first) == reading.pattern.format(**second) == stem


def test_a_name_of_many_parts_is_settled_at_once() -> None:
    pattern = compile_pattern("{module}_{sensor}_{session}_{batch}_{generation}_{kind}_r{repetition}")
    started = time.perf_counter()
    assert distinct_readings(pattern, "_".join(["ab"] * 120), None) == []
    assert len(distinct_readings(pattern, "_".join(["ab"] * 120) + "_r1", None)) == 2
    assert time.perf_counter() - started < 2
