"""Encodings, line ends, separators, decimal signs, preambles, headers and units rows, found out or pinned."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from campaign.recordings.description import Description
from campaign.recordings.dialect import (
    Layout,
    UnclosedQuote,
    find_layout,
    is_numeric_field,
    split_fields,
)
from campaign.recordings.encoding import plain_text
from campaign.recordings.remarks import shown

HEADER = "time_s,length_mm,capacitance_pF"
ROWS = "".join(f"{i / 100:.2f},{40 + i / 10:.2f},{80 + i / 7:.3f}\n" for i in range(12))


def layout_of(text: str | bytes, *, by_position: bool = False, **pinned: object) -> Layout:
    data = text if isinstance(text, bytes) else text.encode()
    return find_layout(plain_text(data).data, Description("t", **pinned), by_position=by_position)


def codes(notices: tuple) -> list[tuple[str, int | None, int | None]]:
    return [(n.code, n.line, n.column) for n in notices]


# ---------------------------------------------------------------- bytes → text


@pytest.mark.parametrize(
    ("text", "encoding", "code", "words"),
    [
        ("# Temperatur: 22,5 °C\n# Prüfer: Größe\n", "cp1252", "encoding", "Windows-1252"),
        ("# 温度: 22.5\n# 操作员: 甲\n", "gbk", "encoding", "GBK"),
        ("# 电容传感器 标定\n时间,电容\n", "gbk", "encoding", "GBK"),
        ("# température: 22.5 °C\n", "cp1252", "encoding", "Windows-1252"),
        ("# größe µF\n", "utf-16", "utf-16", "decoded"),
    ],
)
def test_encodings_are_found_out_and_said(text, encoding, code, words):
    plain = plain_text(text.encode(encoding))
    assert plain.data.decode() == text
    [notice] = plain.notices
    assert notice.code == code
    assert words in notice.done


def test_utf16_without_a_mark_is_known_by_its_zeros():
    for codec in ("utf-16-le", "utf-16-be"):
        plain = plain_text((HEADER + "\n" + ROWS).encode(codec))
        assert plain.data.decode() == HEADER + "\n" + ROWS
        assert codes(plain.notices) == [("utf-16", 1, None)]


def test_utf8_needs_no_remark_and_its_mark_has_one():
    assert plain_text("# größe\n".encode()) == plain_text(b"# gr\xc3\xb6\xc3\x9fe\n")
    assert plain_text("# größe\n".encode()).notices == ()
    assert codes(plain_text(b"\xef\xbb\xbfa\n").notices) == [("bom", 1, None)]


def test_a_pinned_encoding_is_kept_to():
    assert plain_text("é\n".encode("cp850"), "cp850").data.decode() == "é\n"
    assert plain_text("é\n".encode("utf-16"), "utf-16").data.decode() == "é\n"
    assert not plain_text("é\n".encode("cp850"), "utf-8").readable
    assert not plain_text(b"a\n", "no-such-encoding").readable


@pytest.mark.parametrize(
    ("data", "expected"),
    [
        (b"a\r\nb\r\n", [("crlf", None, None)]),
        (b"a\rb\r", [("cr", None, None)]),
        (b"a\nb\nc\r\nd\r\n", [("mixed-eol", 3, None)]),
        (b"a\r\nb\n", [("mixed-eol", 2, None)]),
        (b"a\nb\n", []),
    ],
)
def test_line_ends_become_line_feeds(data, expected):
    plain = plain_text(data)
    assert b"\r" not in plain.data
    assert plain.data.count(b"\n") == len(data.replace(b"\r\n", b"\n").replace(b"\r", b"\n").splitlines())
    assert codes(plain.notices) == expected


@pytest.mark.parametrize(
    ("data", "word"),
    [
        (b"\x1f\x8b\x08\x00", "gzip"),
        (b"PK\x03\x04rest", "zip"),
        (b"\x89HDF\r\n\x1a\n", "HDF5"),
        (b"SQLite format 3\x00", "SQLite"),
        (b"%PDF-1.7", "PDF"),
        (bytes(range(1, 9)) * 200, "binary"),
        (b"\x00" * 3000, "binary"),
    ],
)
def test_binary_files_are_named_for_what_they_are(data, word):
    [notice] = plain_text(data).notices
    assert (notice.code, notice.weight, notice.line, notice.column) == ("binary", "set aside", 1, 1)
    assert word in notice.what


@given(st.binary(max_size=300))
def test_any_bytes_become_text_or_are_set_aside(data):
    plain = plain_text(data)
    if plain.readable:
        plain.data.decode()
        assert b"\r" not in plain.data


# ---------------------------------------------------------------- text → layout


@pytest.mark.parametrize("separator", [",", ";", "\t", " "])
@pytest.mark.parametrize("decimal", [".", ","])
def test_separator_and_decimal_sign_are_found_out(separator, decimal):
    if separator == decimal:
        return
    text = (HEADER + "\n" + ROWS).replace(",", separator).replace(".", decimal)
    layout = layout_of(text)
    assert (layout.separator, layout.decimal, layout.fields) == (separator, decimal, 3)
    assert layout.header == ("time_s", "length_mm", "capacitance_pF")
    assert (layout.header_line, layout.first_row_line) == (1, 2)
    assert [n.code for n in layout.notices] == ([] if (separator, decimal) == (",", ".") else ["dialect"])


def test_aligned_blanks_separate_once():
    text = (
        "time_s    length_mm   capacitance_pF\n 0.00      40.0        80.00\n 0.01      40.1        80.14\n"
    )
    assert layout_of(text).fields == 3


def test_whole_numbers_leave_the_decimal_sign_to_the_rest_of_the_file():
    text = "time_s;capacitance_pF\n" + "".join(f"{i};80\n" for i in range(50)) + "50;80,5\n"
    assert layout_of(text).decimal == ","
    assert layout_of("time_s;capacitance_pF\n" + "".join(f"{i};80\n" for i in range(50))).decimal == "."


def test_commas_that_may_group_thousands_are_not_guessed():
    grouped = "time_s;length_mm;capacitance_pF\n" + "".join(
        f"{i};{40 + i},125;{80 + i},250\n" for i in range(9)
    )
    [notice] = layout_of(grouped).notices
    assert (notice.code, notice.weight, notice.line) == ("dialect", "set aside", 2)
    assert layout_of(grouped, decimal=",").decimal == ","
    for proof in ("0,125", "1,25", "1,1250", "1234,125"):
        assert layout_of(grouped + f"9;49,125;{proof}\n").readable


def test_a_pinned_header_may_be_a_comment_and_must_be_there():
    text = "# unit: mm\n# " + HEADER + "\n# logged by hand\n" + ROWS
    layout = layout_of(text, header_row=2)
    assert (layout.header, layout.first_row_line) == (tuple(HEADER.split(",")), 3)
    [notice] = layout_of(HEADER + "\n" + ROWS, header_row=90).notices
    assert (notice.code, notice.line) == ("no-header", 90)


def test_what_the_description_pins_is_kept_to_without_a_remark():
    text = (HEADER + "\n" + ROWS).replace(",", ";").replace(".", ",")
    layout = layout_of(text, separator=";", decimal=",")
    assert (layout.separator, layout.decimal, layout.notices) == (";", ",", ())


def test_a_preamble_without_comment_signs_is_kept_and_said():
    text = "Instrument,LCR bridge\nDate,2026-03-04\nModule: M03\n\n" + HEADER + "\n" + ROWS
    layout = layout_of(text)
    assert layout.preamble == {"instrument": "LCR bridge", "date": "2026-03-04", "module": "M03"}
    assert layout.header_line == 5
    [notice] = layout.notices
    assert (notice.code, notice.line, notice.count) == ("preamble", 1, 3)


def test_a_long_preamble_does_not_hide_the_header():
    text = "".join(f"Setting number {i}: {i}\n" for i in range(900)) + HEADER + "\n" + ROWS
    layout = layout_of(text)
    assert (layout.header_line, layout.fields) == (901, 3)


def test_a_key_twice_is_remarked_on():
    layout = layout_of("# module: M1\n# Module = M2\n" + HEADER + "\n" + ROWS)
    assert layout.preamble["module"] == "M1"
    assert codes(layout.notices) == [("preamble-conflict", 2, None)]


def test_a_pinned_header_row_wins_over_what_looks_like_one():
    text = "channel,place,kind\nA,B,C\n" + HEADER + "\n" + ROWS
    assert layout_of(text, header_row=3).header_line == 3
    assert layout_of(text, header_row=3).header[0] == "time_s"


def test_a_units_row_is_told_from_a_row_of_names():
    layout = layout_of("time;length;C\n[s];[mm];[pF]\n1;2;3\n2;3;4\n")
    assert layout.units == ("s", "mm", "pF")
    assert layout.first_row_line == 3
    assert layout_of("a,b,c\ntime,length,C\n1,2,3\n").header == ("time", "length", "C")


def test_no_header_needs_positions():
    assert not layout_of(ROWS).readable
    layout = layout_of(ROWS, by_position=True)
    assert layout.readable
    assert (layout.header, layout.first_row_line, layout.fields) == (None, 1, 3)


def test_trailing_separators_do_not_move_columns():
    rows = ROWS.replace("\n", ",\n")
    assert (layout_of(HEADER + "\n" + rows).fields, layout_of(HEADER + "\n" + rows).trailing_separator) == (
        3,
        True,
    )
    assert layout_of(HEADER + ",\n" + rows).header == tuple(HEADER.split(","))
    assert layout_of(HEADER + ",\n" + ROWS).trailing_separator is False
    assert layout_of(rows, by_position=True).fields == 3


@pytest.mark.parametrize(
    ("line", "fields"),
    [
        ("1,2,3", ["1", "2", "3"]),
        ('"1,5","2,5"', ["1,5", "2,5"]),
        ('"a ""b"" c",2', ['a "b" c', "2"]),
        ('"",2,', ["", "2", ""]),
        ('5" pipe,2', ['5" pipe', "2"]),
        ("", [""]),
    ],
)
def test_fields_are_cut_at_separators_outside_quotes(line, fields):
    assert split_fields(line, ",") == fields


@pytest.mark.parametrize(("line", "column"), [('"1,2', 1), ('1,"2', 2), ('1,"2"x,3', 2), ('"', 1)])
def test_open_quotes_are_placed(line, column):
    with pytest.raises(UnclosedQuote) as caught:
        split_fields(line, ",")
    assert caught.value.column == column


@given(st.lists(st.text(alphabet='ab,";\t 1', max_size=6), min_size=1, max_size=6))
def test_quoted_fields_come_back(fields):
    line = ",".join('"' + field.replace('"', '""') + '"' for field in fields)
    assert split_fields(line, ",") == fields


@pytest.mark.parametrize(
    "text", ["1", "-1.5", "1,5", ".5", "5.", "1e-3", "1.003.000", "1,083.21", "2026-03-04 10:00:00"]
)
def test_numbers_of_any_dialect_look_like_numbers(text):
    assert is_numeric_field(text)


@pytest.mark.parametrize("text", ["", "a", "1,2,3", "1,", "0x1", "M03", "5 mm", "--", "1.2.3", "time_s"])
def test_other_texts_do_not(text):
    assert not is_numeric_field(text)


def test_text_of_files_is_shown_without_its_control_characters():
    assert shown("a\x1b[31m\u202eb") == "a\\x1b[31m\\u202eb"
    assert shown("8" * 100) == "8" * 60 + "…"
