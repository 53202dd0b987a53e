"""The careful road: plain numbers are read, words are missing, the rest is remarked on: no guesses."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from campaign.recordings.columns import ColumnPlan
from campaign.recordings.description import ColumnRule, Description
from campaign.recordings.line_parser import field_reader
from campaign.recordings.reading import ReadOutcome, RecordingBytes, read_recordings

HEADER = "time_s,length_mm,capacitance_pF\n"


def read(text: str, *rules: ColumnRule, header: str = HEADER, **pinned: object) -> ReadOutcome:
    description = Description("t", columns=rules, **pinned)
    [careful] = read_recordings(
        [RecordingBytes("a.csv", (header + text).encode())], description, careful=True
    )
    [outcome] = read_recordings([RecordingBytes("a.csv", (header + text).encode())], description)
    assert outcome.notices == careful.notices
    return outcome


def codes(outcome: ReadOutcome) -> list[tuple[str, int | None, int | None, int]]:
    return [(n.code, n.line, n.column, n.count) for n in outcome.notices]


def rows(outcome: ReadOutcome) -> list[list[float]]:
    return [list(row) for row in zip(*(c.values.tolist() for c in outcome.recording.channels))]


@pytest.mark.parametrize(
    ("text", "decimal", "value"),
    [
        ("1", ".", 1.0),
        (" 1.5\t", ".", 1.5),
        ("+.5", ".", 0.5),
        ("5.", ".", 5.0),
        ("-1.5e-3", ".", -0.0015),
        ("-1,5E3", ",", -1500.0),
        ("0.1", ".", 0.1),
        ("1e400", ".", math.inf),
    ],
)
def test_plain_numbers_are_read(text, decimal, value):
    assert field_reader(ColumnPlan(1, "", "signal"), decimal)(text) == (value, "")


@pytest.mark.parametrize(
    ("text", "code"),
    [
        ("", "missing-token"),
        ("NaN", "missing-token"),
        ("#N/A", "missing-token"),
        ("---", "missing-token"),
        ("NULL", "missing-token"),
        ("OVER", "overrange"),
        ("ovld", "overrange"),
        ("O.L", "overrange"),
        ("inf", "non-finite"),
        ("-Infinity", "non-finite"),
        ("TRUE", "number"),
        ("0x1F", "number"),
        ("1_000", "number"),
        ("1,5", "number"),
        ("1.2.3", "number"),
        ("1 000", "number"),
        ("1\u00a0000", "number"),
        ("\u00a01", "number"),
        ("５", "number"),
        ("−1", "number"),
        ("1d3", "number"),
        ("ERR", "number"),
        ("1e", "number"),
        ("1" * 65, "field-length"),
    ],
)
def test_nothing_else_is_a_number(text, code):
    value, found = field_reader(ColumnPlan(1, "", "signal"), ".")(text)
    assert math.isnan(value)
    assert found == code


@given(st.text(max_size=12))
def test_no_text_is_read_as_another_number_than_it_says(text):
    value, code = field_reader(ColumnPlan(1, "", "signal"), ".")(text)
    if not code:
        assert text.isascii()
        assert value == float(text)


@pytest.mark.parametrize(
    ("text", "thousands", "decimal", "value"),
    [
        ("143.696.000", ".", ".", 143696.0),
        ("0.000", ".", ".", 0.0),
        ("-1.003.250", ".", ".", -1003.25),
        ("1.234,5", ".", ",", 1234.5),
        ("1,083.21", ",", ".", 1083.21),
        ("1'083'000", "'", ".", 1083000.0),
        ("83,5", ".", ",", 83.5),
        ("1 083,5", " ", ",", 1083.5),
    ],
)
def test_declared_thousands_are_taken_off(text, thousands, decimal, value):
    column = ColumnPlan(1, "", "signal", thousands=thousands, decimal=decimal)
    assert field_reader(column, ".")(text) == (value, "")


@pytest.mark.parametrize(
    ("text", "thousands"), [("143696", "."), ("1.2.3", "."), ("1.23", ","), ("12.34.567", ",")]
)
def test_ill_grouped_thousands_are_no_numbers(text, thousands):
    value, code = field_reader(ColumnPlan(1, "", "signal", thousands=thousands, decimal="."), ".")(text)
    if text == "1.23":
        assert (value, code) == (1.23, "")
    else:
        assert code == "number"


def test_rows_with_too_many_or_too_few_fields_are_dropped_and_counted():
    outcome = read("0,1,80\n1,2\n2,3,81,9\n3,4,82\n")
    assert rows(outcome) == [[0, 1, 80], [3, 4, 82]]
    assert codes(outcome) == [("ragged", 3, 3, 2)]
    assert outcome.recording.line_numbers.tolist() == [2, 5]


def test_a_comment_between_the_rows_is_shown_but_not_a_row_that_begins_with_a_word_for_no_value():
    outcome = read("0,1,80\n# paused by hand\n#N/A,2,81\n2,3,82\n")
    assert codes(outcome) == [("comment-line", 3, None, 1), ("missing-token", 4, 1, 1)]
    assert "paused by hand" in outcome.notices[0].what
    assert outcome.recording.rows == 3


def test_one_notice_stands_for_thousands_of_missing_values():
    text = "".join(
        f"{i},{i / 10},{'' if i % 2 else 80 + i / 9:.5}\n" if i % 2 == 0 else f"{i},{i / 10},\n"
        for i in range(4000)
    )
    outcome = read(text)
    assert codes(outcome) == [("missing-token", 3, 3, 2000)]


def test_a_footer_needs_words_in_the_place_of_a_number():
    assert codes(read("0,1,80\n1,2,81\nMean,2,80\nOperator: B\n")) == [("footer", 4, 1, 2)]
    assert codes(read("0,1,80\n1,2,81\nOVER,2,80\n")) == [("overrange", 4, 1, 1)]
    assert codes(read("0,1,80\nMean,2,80\n2,3,81\n")) == [("number", 3, 1, 1)]
    assert codes(read("0,1,80\n1,2,81\nEnd\n\n\n")) == [("footer", 4, 1, 1), ("blank-line", 5, None, 2)]


@pytest.mark.parametrize(
    ("last", "code"),
    [
        ("3,4,82.1250", "no-final-newline"),
        ("3,4,82.125", "truncated"),
        ("3,4,8", "truncated"),
        ("3,4,", "truncated"),
        ("3,4", "truncated"),
        ("3", "truncated"),
        ("3,4,82.1250,", "ragged"),
    ],
)
def test_an_unfinished_last_line_is_compared_with_its_neighbours(last, code):
    outcome = read("0,1,80.0000\n1,2,81.0625\n2,3,81.5000\n" + last)
    assert [n.code for n in outcome.notices] == [code]
    assert outcome.recording.rows == (4 if code == "no-final-newline" else 3)


@pytest.mark.parametrize(
    ("rows_before", "last", "kept"),
    [
        (["0,1,9998", "1,2,10001"], "2,3,10002", True),
        (["0,1,9998", "1,2,10001"], "2,3,1000", False),
        (["0,1,1.5e-05", "1,2,1.6e-05"], "2,3,1.7e-0", False),
        (["0,1,1.5e-05", "1,2,1.6e-05"], "2,3,1.7e-05", True),
        (['0,1,"80.5"', '1,2,"81.25"'], '2,3,"82.5"', True),
        (["0,1,80.5,", "1,2,81.25,"], "2,3,82.5,", True),
    ],
)
def test_lengths_of_last_fields(rows_before, last, kept):
    outcome = read("\n".join([*rows_before, last]))
    assert outcome.recording.rows == (3 if kept else 2)


def test_a_quote_that_is_not_closed_sets_the_file_aside_where_it_opens():
    outcome = read('0,1,80\n1,"2,81\n2,3,82\n')
    assert codes(outcome) == [("quote", 3, 2, 1)]
    assert outcome.recording is None


def test_declared_words_and_values_are_missing_on_both_roads():
    rule = ColumnRule("signal", header="capacitance_pF", missing=("ERR", "-1e105", "-77"))
    outcome = read("0,1,80\n1,2,-77\n2,3,ERR\n3,4,-1e105\n4,5,-77.0\n5,6,82\n", rule)
    assert codes(outcome) == [("missing-token", 3, 3, 4)]
    assert [math.isnan(v) for v in outcome.recording.channels[2].values] == [
        False,
        True,
        True,
        True,
        True,
        False,
    ]


def test_directions_are_words_or_signs():
    outcome = read("1,up,80\n2,UP,81\n1,down,80\n0,-1,79\n", header="length_mm,direction,capacitance_pF\n")
    assert outcome.recording.channels[1].values.tolist() == [1.0, 1.0, -1.0, -1.0]
    assert read("1,up,80\n2,aside,81\n", header="length_mm,direction,capacitance_pF\n").recording is None


def test_timestamps_become_seconds():
    text = "2026-03-04T10:00:00.5,1,80\n2026-03-04T10:00:01.25,2,81\n"
    outcome = read(text, header="timestamp,length_mm,capacitance_pF\n")
    time = outcome.recording.channels[0]
    assert time.unit == "s"
    assert (time.values[1] - time.values[0]) == 0.75


def test_constant_columns_name_the_trial_and_mixed_ones_set_aside():
    header = "module,time_s,length_mm,capacitance_pF\n"
    outcome = read("M03,0,1,80\nM03,1,2,81\n", header=header)
    assert outcome.recording.constants == {"module": "M03"}
    assert len(outcome.recording.channels) == 3
    mixed = read("M03,0,1,80\nM04,1,2,81\n", header=header)
    assert mixed.recording is None
    assert [n.code for n in mixed.notices] == ["mixed-identity"]


def test_nul_lines_and_all_blank_rows_are_dropped():
    outcome = read("0,1,80\n\x00\x00\x00\x00\n,,\n1,2,81\n")
    assert codes(outcome) == [("nul", 3, 1, 1), ("blank-line", 4, None, 1)]
    assert outcome.recording.rows == 2


def test_a_file_of_which_no_row_can_be_read_is_set_aside():
    outcome = read("0,1\n1,2\n")
    assert outcome.recording is None
    assert "no-rows" in [n.code for n in outcome.notices]


def test_text_in_columns_that_are_not_read_stays_out_of_the_way():
    outcome = read('0,1,80,"a, #3"\n1,2,81,0x1F\n', header="time_s,length_mm,capacitance_pF,note\n")
    assert rows(outcome) == [[0, 1, 80], [1, 2, 81]]
    assert [n.code for n in outcome.notices] == ["extra-column"]
