"""The careful road: lines to values field by field, where nothing is guessed and every loss is a remark."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from campaign.recordings.columns import ColumnPlan
from campaign.recordings.dialect import Layout, UnclosedQuote, is_numeric_field, split_fields
from campaign.recordings.remarks import Remark
from campaign.units import UnitError, parse_timestamp

LONGEST_NUMBER = 64
"""Characters of the longest field that is still taken for a number."""


def _words(text: str) -> frozenset[str]:
    return frozenset(text.split())


MISSING_WORDS = _words(
    "nan -nan +nan null none na n/a #n/a #na nil missing - -- --- ---- ----- ? * *** . 1.#qnan "
    "1.#ind -1.#ind 1.#nan"
)
"""Words for 'no value', beside the empty field (lower case)."""

OVERRANGE_WORDS = _words(
    "over +over -over overload overflow overrange over-range ovld ovl ovf ovrng ofl ol +ol -ol "
    "o.l oor under -under underflow underrange sat saturated"
)
"""Instruments' words for a value beyond the range (lower case)."""

INFINITE_WORDS = _words("inf +inf -inf infinity +infinity -infinity 1.#inf -1.#inf ∞ +∞ -∞")
"""Words for infinity (lower case)."""

DIRECTION_WORDS: dict[str, float] = {
    **dict.fromkeys(("up", "rising", "loading", "increasing", "1", "+1", "1.0"), 1.0),
    **dict.fromkeys(("down", "falling", "unloading", "decreasing", "-1", "-1.0"), -1.0),
}
"""Words for the direction of a step (lower case)."""

_NAN = float("nan")
_EXPONENT = r"(?:[eE][+-]?[0-9]+)?"
_PLAIN = {
    mark: re.compile(rf"[+-]?(?:[0-9]+(?:{re.escape(mark)}[0-9]*)?|{re.escape(mark)}[0-9]+){_EXPONENT}")
    for mark in ".,"
}


@dataclass(frozen=True)
class NumberedLine:
    """One line of a file: its number from 1 and its text without the line end."""

    number: int
    text: str


@dataclass(frozen=True)
class Ending:
    """How the file ends, for the judgement of its last lines.

    Attributes
    ----------
    last_line
        Number of the last line.
    terminated
        Whether it has a line end.
    neighbours
        Texts of the lines before an unterminated last line, up to :data:`NEIGHBOURS` of them.
    """

    last_line: int
    terminated: bool = True
    neighbours: tuple[str, ...] = ()


NEIGHBOURS = 64
"""Lines before an unterminated last one that it is compared with."""


@dataclass
class ParsedLines:
    """Rows that came out of lines.

    Attributes
    ----------
    line_numbers
        Line of every row.
    rows
        One list a row, one float a column read as a number (NaN where missing), in the order of the plan.
    texts
        One list a row, one text a column that is read as text, in the order of the plan.
    remarks
        All that was met on the way.
    """

    line_numbers: list[int] = field(default_factory=list)
    rows: list[list[float]] = field(default_factory=list)
    texts: list[list[str]] = field(default_factory=list)
    remarks: list[Remark] = field(default_factory=list)

    def values(self, columns: int) -> npt.NDArray[np.float64]:
        """Return the rows as an array of shape (rows, columns)."""
        return np.array(self.rows, dtype=np.float64).reshape(len(self.rows), columns)


FieldReader = Callable[[str], tuple[float, str]]
"""From a field to its value and the code of a remark, empty where there is none."""


def parse_lines(
    lines: Sequence[NumberedLine], layout: Layout, columns: Sequence[ColumnPlan], ending: Ending
) -> ParsedLines:
    """Read lines field by field.

    Parameters
    ----------
    lines
        All lines of the table, or those that the gate did not let through, in file order.
    layout
        How lines are cut.
    columns
        The columns to read.
    ending
        How the file ends.

    Returns
    -------
    ParsedLines
        Every line is a row or has a remark that says why not. After a quotation mark that is not closed
        nothing is read any more.
    """
    reader = _LineReader(layout, columns, ending)
    footer = _footer_start(lines, layout, columns, ending.last_line)
    for line in lines[:footer]:
        if not reader.read(line):
            break
    parsed = reader.parsed
    for line in lines[footer:]:
        code = "footer" if line.text.strip() else "blank-line"
        parsed.remarks.append(Remark(code, line.number, 1 if code == "footer" else None, line.text))
    return parsed


def _footer_start(
    lines: Sequence[NumberedLine], layout: Layout, columns: Sequence[ColumnPlan], last_line: int
) -> int:
    """Return the index of the first of the closing lines that are words, not values."""
    first_is_number = any(c.position == 1 and c.content == "number" for c in columns)
    start, expected = len(lines), last_line
    for index in range(len(lines) - 1, -1, -1):
        line = lines[index]
        if line.number != expected or (
            line.text.strip() and not _is_words(line.text, layout, first_is_number)
        ):
            break
        expected -= 1
        if line.text.strip():
            start = index
    return start


def _is_words(line: str, layout: Layout, first_is_number: bool) -> bool:
    try:
        fields = split_fields(line, layout.separator)
    except UnclosedQuote:
        return False
    first = fields[0].strip() if fields else ""
    if not first[:1].isalpha() or _is_word_for_no_value(first) or _repeats_header(fields, layout):
        return False
    return first_is_number or len(fields) != layout.fields + layout.trailing_separator


def _is_word_for_no_value(text: str) -> bool:
    folded = text.casefold()
    return folded in MISSING_WORDS or folded in OVERRANGE_WORDS or folded in INFINITE_WORDS


def _repeats_header(fields: Sequence[str], layout: Layout) -> bool:
    if layout.header is None:
        return False
    kept = [text.strip() for text in fields[: len(layout.header)]]
    return kept == [name.strip() for name in layout.header] and not any(
        f.strip() for f in fields[len(kept) :]
    )


def _repeats_units(fields: Sequence[str], layout: Layout) -> bool:
    if layout.units is None:
        return False
    return [text.strip(" []()") for text in fields] == [unit.strip(" []()") for unit in layout.units]


class _LineReader:
    """Reads the lines of one file one after the other."""

    def __init__(self, layout: Layout, columns: Sequence[ColumnPlan], ending: Ending) -> None:
        self.layout = layout
        self.ending = ending
        self.parsed = ParsedLines()
        self.expected = layout.fields + (1 if layout.trailing_separator else 0)
        self.numbers = [
            (c.position, field_reader(c, layout.decimal)) for c in columns if c.content != "identity"
        ]
        self.words = [c.position for c in columns if c.content == "identity"]

    def remark(self, code: str, line: int, column: int | None = None, text: str = "") -> None:
        self.parsed.remarks.append(Remark(code, line, column, text))

    def read(self, line: NumberedLine) -> bool:
        """Read one line; False where nothing after it can be trusted."""
        if "\x00" in line.text:
            self.remark("nul", line.number, 1)
            return True
        try:
            fields = split_fields(line.text, self.layout.separator)
        except UnclosedQuote as quote:
            if self.is_comment(line.text, []):
                self.remark("comment-line", line.number, None, line.text)
                return True
            self.remark("quote", line.number, quote.column)
            return False
        if self.passed_over(line, fields) or self.is_cut(line, fields):
            return True
        self.read_row(line.number, fields)
        return True

    def is_comment(self, text: str, fields: Sequence[str]) -> bool:
        """Whether a line is a comment; a row whose first value is ``#N/A`` is none."""
        if not text.lstrip().startswith("#"):
            return False
        return len(fields) != self.expected or not any(map(is_numeric_field, fields))

    def passed_over(self, line: NumberedLine, fields: Sequence[str]) -> bool:
        """Whether a line is no row: blank, a comment, the header again."""
        if not any(text.strip() for text in fields):
            self.remark("blank-line", line.number)
        elif self.is_comment(line.text, fields):
            self.remark("comment-line", line.number, None, line.text)
        elif _repeats_header(fields, self.layout) or _repeats_units(fields, self.layout):
            self.remark("repeated-header", line.number)
        else:
            return False
        return True

    def is_cut(self, line: NumberedLine, fields: list[str]) -> bool:
        """Whether a row has lost or won fields, or its end; then it is dropped."""
        last = line.number == self.ending.last_line and not self.ending.terminated
        given = len(fields)
        if given != self.expected or (self.layout.trailing_separator and fields[-1].strip()):
            if last and given <= self.expected:
                self.remark("truncated", line.number, given, line.text)
            else:
                self.remark("ragged", line.number, min(given, self.layout.fields) + 1, line.text)
            return True
        if not last:
            return False
        if self.layout.trailing_separator or self.is_as_long_as_neighbours(line.text, fields[-1]):
            self.remark("no-final-newline", line.number)
            return False
        self.remark("truncated", line.number, given, line.text)
        return True

    def is_as_long_as_neighbours(self, text: str, last: str) -> bool:
        """Whether the last field of an unterminated line has as many digits as those above it ever have."""
        if text.rstrip().endswith('"') and self.layout.separator != " ":
            return True
        mark = self.layout.decimal
        above = [self.last_field(neighbour) for neighbour in self.ending.neighbours]
        lengths = [_digits(field, mark) for field in above if field is not None and is_numeric_field(field)]
        if not lengths:
            return True
        longest = [max(length[part] for length in lengths) for part in range(3)]
        mine = _digits(last, mark)
        parts = slice(1, 3) if longest[1] or longest[2] else slice(0, 1)
        return is_numeric_field(last) and all(m >= n for m, n in zip(list(mine)[parts], longest[parts]))

    def last_field(self, text: str) -> str | None:
        try:
            fields = split_fields(text, self.layout.separator)
        except UnclosedQuote:
            return None
        return fields[-1] if len(fields) == self.expected else None

    def read_row(self, number: int, fields: Sequence[str]) -> None:
        row: list[float] = []
        for position, read in self.numbers:
            value, code = read(fields[position - 1])
            if code:
                self.remark(code, number, position, fields[position - 1][:200])
            row.append(value)
        self.parsed.rows.append(row)
        self.parsed.texts.append([fields[position - 1].strip() for position in self.words])
        self.parsed.line_numbers.append(number)


def _digits(text: str, mark: str) -> tuple[int, int, int]:
    """Digits before and after the decimal sign and in the exponent."""
    mantissa, _, exponent = text.strip().casefold().partition("e")
    whole, _, decimals = mantissa.rpartition(mark) if mark in mantissa else (mantissa, "", "")
    return len(whole.strip("+-")), len(decimals), len(exponent.strip("+-"))


# ---------------------------------------------------------------- fields


def field_reader(column: ColumnPlan, decimal: str) -> FieldReader:
    """Return the function that reads the fields of one column; see :data:`FieldReader`."""
    if column.content == "timestamp":
        return _read_timestamp
    if column.content == "direction":
        return _read_direction
    return _number_reader(column, column.decimal or decimal)


def _number_reader(column: ColumnPlan, decimal: str) -> FieldReader:
    plain = _PLAIN[decimal]
    thousands = column.thousands
    missing = frozenset(word.strip().casefold() for word in column.missing)
    grouped = _grouped_expression(thousands, decimal) if thousands is not None else None

    def read(text: str) -> tuple[float, str]:
        text = text.strip(" \t")
        if len(text) > LONGEST_NUMBER:
            return _NAN, "field-length"
        if grouped is not None and grouped.fullmatch(text):
            return float(_ungrouped(text, thousands or "", decimal)), ""
        if plain.fullmatch(text) and thousands != decimal:
            return float(text.replace(decimal, ".")), ""
        return _NAN, _code_of_word(text, missing)

    return read


def _grouped_expression(thousands: str, decimal: str) -> re.Pattern[str]:
    group, mark = re.escape(thousands), re.escape(decimal)
    if thousands == decimal:
        return re.compile(rf"[+-]?[0-9]{{1,3}}(?:{group}[0-9]{{3}})*{mark}[0-9]+")
    return re.compile(rf"[+-]?[0-9]{{1,3}}(?:{group}[0-9]{{3}})+(?:{mark}[0-9]*)?{_EXPONENT}")


def _ungrouped(text: str, thousands: str, decimal: str) -> str:
    if thousands == decimal:
        whole, _, decimals = text.rpartition(decimal)
        return whole.replace(thousands, "") + "." + decimals
    return text.replace(thousands, "").replace(decimal, ".")


def _code_of_word(text: str, missing: frozenset[str]) -> str:
    folded = text.casefold()
    if folded in OVERRANGE_WORDS:
        return "overrange"
    if not folded or folded in missing or folded in MISSING_WORDS:
        return "missing-token"
    return "non-finite" if folded in INFINITE_WORDS else "number"


def _read_timestamp(text: str) -> tuple[float, str]:
    try:
        return parse_timestamp(text), ""
    except UnitError:
        return _NAN, _code_of_word(text.strip(), frozenset())


def _read_direction(text: str) -> tuple[float, str]:
    value = DIRECTION_WORDS.get(text.strip().casefold())
    return (value, "") if value is not None else (_NAN, _code_of_word(text.strip(), frozenset()))
