"""The gate and the fast reader: only what every reader must read alike goes through."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from campaign.recordings.description import Description
from campaign.recordings.dialect import Layout, find_layout
from campaign.recordings.fast_reader import PlainTable, read_plain
from campaign.recordings.gate import pass_gate
from campaign.recordings.reading import RecordingBytes, read_recordings


def layout(separator: str = ",", decimal: str = ".", fields: int = 3, *, trailing: bool = False) -> Layout:
    return Layout(separator, decimal, None, 1, None, fields, trailing, 1, 0, {})


def test_plain_tables_go_through_whole_and_in_one_dialect():
    gated = pass_gate(b"1,5;2;-3e4\n4;5;,5\n", layout(";", ","))
    assert gated.plain == b"1.5,2,-3e4\n4,5,.5\n"
    assert gated.plain_lines.tolist() == [0, 1]
    assert gated.other_lines.tolist() == []


@pytest.mark.parametrize(
    "line",
    [
        b"1,2",
        b"1,2,3,4",
        b",,",
        b'"",2,"3""',
        b'1,"2,3"',
        b"1,2,x",
        b"1,2,3 ",
        b"",
        b"1,2,3\x00",
        b"1,2," + b"3" * 65,
    ],
)
@pytest.mark.parametrize("place", [0, 1, 3])
def test_other_lines_are_held_back_and_only_they(line, place):
    lines = [b"1,2,3", b"4,5,6", b"7,8,9"]
    lines.insert(place, line)
    gated = pass_gate(b"".join(text + b"\n" for text in lines), layout())
    assert gated.other_lines.tolist() == [place]
    assert gated.plain == b"1,2,3\n4,5,6\n7,8,9\n"


def test_empty_fields_and_quoted_numbers_are_plain():
    gated = pass_gate(b'1,,3\n,2,\n"4","-5.5",6\n"",8,9\n', layout())
    assert gated.other_lines.tolist() == [3]
    assert gated.plain == b"1,,3\n,2,\n4,-5.5,6\n"
    [read] = read_plain([PlainTable(gated.plain, 3, 3)])
    assert np.array_equal(read, [[1, np.nan, 3], [np.nan, 2, np.nan], [4, -5.5, 6]], equal_nan=True)


def test_trailing_separators_are_part_of_a_plain_line():
    gated = pass_gate(b"1,2,3,\n4,5,6,\n7,8,9\n1,2,,\n1,2,3,\n", layout(trailing=True))
    assert gated.other_lines.tolist() == [2]
    assert gated.plain == b"1,2,3\n4,5,6\n1,2,\n1,2,3\n"
    assert pass_gate(b"1,2,3,\n4,5,6,\n", layout(trailing=True)).plain == b"1,2,3\n4,5,6\n"


def test_mostly_odd_tables_go_the_careful_road_whole():
    gated = pass_gate(b"1,2,3\n" + b"x,2,3\n" * 5, layout())
    assert gated.plain == b""
    assert len(gated.other_lines) == 6


def test_tables_of_many_files_are_read_at_once_and_come_back_in_order():
    tables = [
        PlainTable(b"1,2\n3,4\n", 2, 2),
        PlainTable(b"5,6,7\n", 1, 3),
        PlainTable(b"8,9\n", 1, 2),
        PlainTable(b"", 0, 2),
    ]
    first, second, third, fourth = read_plain(tables)
    assert first.tolist() == [[1, 2], [3, 4]]
    assert second.tolist() == [[5, 6, 7]]
    assert third.tolist() == [[8, 9]]
    assert fourth is None


def test_one_table_that_is_refused_does_not_spoil_the_others():
    tables = [PlainTable(b"1,2\n", 1, 2), PlainTable(b"1.2.3,4\n", 1, 2), PlainTable(b"5,6\n", 1, 2)]
    first, second, third = read_plain(tables)
    assert (first.tolist(), second, third.tolist()) == ([[1, 2]], None, [[5, 6]])


def test_the_fast_reader_refuses_every_misspelt_number():
    """Every text of up to four characters of numbers is taken only where Python takes it, and alike."""
    texts = ["".join(t) for n in (1, 2, 3, 4) for t in itertools.product("1.+-e", repeat=n)]
    for text in texts:
        [read] = read_plain([PlainTable(f"{text},1\n".encode(), 1, 2)])
        try:
            value = float(text)
        except ValueError:
            assert read is None, text
        else:
            assert read is not None, text
            assert read[0, 0] == value


def test_doubles_are_read_to_the_last_bit():
    rng = np.random.default_rng(20)
    values = rng.normal(size=50_000) * 10.0 ** rng.uniform(-30, 30, 50_000)
    texts = [repr(float(v)) for v in values]
    [read] = read_plain([PlainTable(("\n".join(texts) + "\n").encode(), len(texts), 1)])
    assert np.array_equal(read[:, 0], values)


def test_values_too_large_for_a_double_go_the_careful_road():
    text = "time_s,length_mm,capacitance_pF\n0,1,80\n1,2,1e400\n2,3,81\n"
    [outcome] = read_recordings([RecordingBytes("a.csv", text.encode())], Description("t"))
    assert [(n.code, n.line, n.column) for n in outcome.notices] == [("sentinel", 3, 3)]


def test_files_of_many_dialects_in_one_call_are_read_as_each_alone():
    rows = [(i / 10, 40 + i / 4, 80 + i / 8) for i in range(30)]
    items = []
    for number, (separator, decimal) in enumerate(itertools.product(",;\t ", ".,")):
        if separator != decimal:
            lines = [separator.join(f"{v:.3f}".replace(".", decimal) for v in row) for row in rows]
            header = separator.join(("time_s", "length_mm", "capacitance_pF"))
            items.append(RecordingBytes(f"{number}.csv", "\n".join([header, *lines, ""]).encode()))
    for outcome in read_recordings(items, Description("t")):
        assert [tuple(row) for row in zip(*(c.values for c in outcome.recording.channels))] == rows


def test_the_gate_takes_what_a_layout_finds():
    text = b"a,b,c\n1,2,3\n4,5,6\n"
    found = find_layout(text, Description("t"), by_position=False)
    assert len(pass_gate(text[found.body_start :], found).plain_lines) == 2
