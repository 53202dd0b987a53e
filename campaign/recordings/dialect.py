"""How the table of a file is laid out: separator, decimal sign, preamble, header and units row.

Found out file by file from the first lines, and pinned by the description where it says so. Nothing here
reads a value.
"""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import islice

from campaign.notices import Notice
from campaign.recordings.description import Description
from campaign.recordings.remarks import noted, set_aside, shown
from campaign.units import SPELLINGS, looks_like_timestamp, nearest_spelling, unit_of_cell

SEPARATORS: tuple[str, ...] = (",", ";", "\t", " ")
"""Separators that are looked for, in falling order of preference."""

HEADS: tuple[tuple[int, int], ...] = ((1 << 12, 14), (1 << 14, 120), (1 << 18, 4000))
"""Bytes at the start of a file, and lines of them that are no comments, to find the layout out from: the
first, and each further one where the one before holds less than :data:`ENOUGH_ROWS` rows."""

ENOUGH_ROWS = 8

_LOOSE_NUMBER = re.compile(
    r"[ \t]*[+-]?(?:[0-9]{1,3}(?:[.,][0-9]{3})+(?:[.,][0-9]*)?|[0-9]+(?:[.,][0-9]*)?|[.,][0-9]+)"
    r"(?:[eE][+-]?[0-9]+)?(?<!,)[ \t]*"
)
_PROVES_DECIMAL_COMMA = re.compile(
    rb"(?<![0-9])0+,[0-9]|[0-9],[0-9]{1,2}(?![0-9])|[0-9],[0-9]{4}|[0-9]{4},[0-9]"
)
"""A number whose comma cannot group thousands: 0,5 or 12,34 or 0,1234 or 1234,567."""
_COMMENT = "#"


class UnclosedQuote(Exception):  # noqa: N818 - a finding about the file, not an error of the program
    """A quotation mark is not closed on its line, or text follows the closing one; ``column`` from 1."""

    def __init__(self, column: int) -> None:
        self.column = column
        super().__init__(f"column {column}")


@dataclass(frozen=True)
class TableHead:
    """What the layout of a table of plain numbers depends on.

    Attributes
    ----------
    header
        The line of names as it stands.
    row_separator, fields
        How the rows are cut, and into how many fields.
    separator, decimal, by_position
        What the description says of all this.
    """

    header: str
    row_separator: str
    fields: int
    separator: str | None
    decimal: str | None
    by_position: bool


@dataclass(frozen=True)
class Layout:
    """Where the table of a file stands and how its lines are cut into fields.

    Attributes
    ----------
    separator, decimal
        One character each.
    header
        Names of the columns as they stand; ``None`` where the file has none.
    header_line
        Line of the header, from 1; without a header, the first line of the table.
    units
        Cells of the units row, or ``None``.
    fields
        Fields that a complete row has, the empty one after a trailing separator not counted.
    trailing_separator
        Whether every row ends in a separator.
    first_row_line
        Line of the first row, from 1.
    body_start
        Offset of that line in the text's bytes.
    preamble
        ``key: value`` lines before the table, keys in lower case.
    sample
        Fields of the first rows as they stand.
    notices
        Remarks, without a file name; one of weight ``"set aside"`` ends the reading of the file.
    head
        Where the layout follows from the head of the table alone, this; the sample then is plain numbers.
    """

    separator: str
    decimal: str
    header: tuple[str, ...] | None
    header_line: int
    units: tuple[str, ...] | None
    fields: int
    trailing_separator: bool
    first_row_line: int
    body_start: int
    preamble: dict[str, str]
    sample: tuple[tuple[str, ...], ...] = ()
    notices: tuple[Notice, ...] = ()
    head: TableHead | None = None

    @property
    def readable(self) -> bool:
        """Whether there is a table to go on with."""
        return all(notice.weight == "noted" for notice in self.notices)


def split_fields(line: str, separator: str) -> list[str]:
    """Cut a line into fields; quoted fields may hold the separator, a doubled quotation mark stands for one.

    Raises
    ------
    UnclosedQuote
        When a quotation mark is not closed on the line, or text follows the closing one.
    """
    if separator == " ":
        return line.split()
    if '"' not in line:
        return line.split(separator)
    return list(_quoted_fields(line, separator))


def _quoted_fields(line: str, separator: str) -> list[str]:
    fields: list[str] = []
    start = 0
    while True:
        if line.startswith('"', start):
            field, end = _quoted_field(line, start, separator, len(fields) + 1)
        else:
            found = line.find(separator, start)
            end = len(line) if found < 0 else found
            field = line[start:end]
        fields.append(field)
        if end >= len(line):
            return fields
        start = end + 1


def _quoted_field(line: str, start: int, separator: str, column: int) -> tuple[str, int]:
    at = start + 1
    while True:
        close = line.find('"', at)
        if close < 0:
            raise UnclosedQuote(column)
        if not line.startswith('"', close + 1):
            break
        at = close + 2
    end = close + 1
    if end < len(line) and not line.startswith(separator, end):
        raise UnclosedQuote(column)
    return line[start + 1 : close].replace('""', '"'), end


def _split_leniently(line: str, separator: str) -> list[str]:
    try:
        return split_fields(line, separator)
    except UnclosedQuote:
        return line.split(separator)


def is_numeric_field(text: str) -> bool:
    """Return whether a field looks like a number, in any dialect, or a timestamp."""
    return _LOOSE_NUMBER.fullmatch(text) is not None or (":" in text and looks_like_timestamp(text))


@dataclass(frozen=True)
class _Cut:
    """One line cut into fields, how many of them are filled, and those that look like numbers."""

    fields: list[str]
    filled: int
    numbers: list[str]

    def __len__(self) -> int:
        return len(self.fields)

    @property
    def is_row(self) -> bool:
        """Whether it looks like a row of values: some number in it, and numbers are not the exception."""
        return bool(self.numbers) and 3 * len(self.numbers) >= self.filled


def _cut(line: str, separator: str) -> _Cut:
    fields = _split_leniently(line, separator)
    numbers = [field for field in fields if is_numeric_field(field)]
    if len(numbers) == len(fields):
        return _Cut(fields, len(fields), numbers)
    return _Cut(fields, sum(not field.isspace() and field != "" for field in fields), numbers)


@dataclass(frozen=True)
class _Guess:
    """How the sample lines look when cut by one separator."""

    separator: str
    rows: list[_Cut]
    fields: int
    score: float


def find_layout(text: bytes, description: Description, *, by_position: bool) -> Layout:
    """Find out where the table stands and how it is cut.

    Parameters
    ----------
    text
        UTF-8 with line feeds, from :func:`plain_text`.
    description
        Its ``separator``, ``decimal`` and ``header_row`` are kept to where given.
    by_position
        Whether the description names columns of this file by position, so that a header may be wanting.
    """
    lines, table, guess = _looked_over(text, description)
    layout = replace(_arranged(lines, table, guess, description, by_position), sample=_sample(guess))
    layout = replace(layout, decimal=description.decimal or _decimal_sign(guess, text, layout))
    layout = replace(layout, body_start=_offset_of_line(text, layout.first_row_line))
    return replace(layout, notices=(*layout.notices, *_dialect_notices(layout, description, text)))


def _sample(guess: _Guess) -> tuple[tuple[str, ...], ...]:
    return tuple(tuple(row.fields) for row in guess.rows if row.is_row)


def _looked_over(text: bytes, description: Description) -> tuple[list[str], list[int], _Guess]:
    """Return the lines at the start, the indices of those that are no comments, and how they are best cut."""
    for size, most in HEADS:
        lines = _head_lines(text, size, most, description.header_row)
        pinned = (description.header_row or 0) - 1
        if 0 <= pinned < len(lines):
            lines[pinned] = _uncommented(lines[pinned])
        of_table = (i for i in range(max(pinned, 0), len(lines)) if is_of_table(lines[i]))
        table = list(islice(of_table, most))
        guess = _best_guess([lines[i] for i in table], description.separator)
        if len(text) <= size or sum(row.is_row for row in guess.rows) >= ENOUGH_ROWS:
            break
    return lines, table, guess


def is_of_table(line: str) -> bool:
    """Return whether a line is neither blank nor a comment."""
    text = line.lstrip()
    return bool(text) and not text.startswith(_COMMENT)


def _head_lines(text: bytes, size: int, most: int, header_row: int | None) -> list[str]:
    if header_row is not None:
        lines = text.split(b"\n", header_row + most)
        return [line.decode(errors="replace") for line in lines[: header_row + most]]
    head = text[:size]
    cut = head.rfind(b"\n") + 1 if len(text) > size else len(head)
    return (head[:cut] if cut else head).decode(errors="replace").removesuffix("\n").split("\n")


def _offset_of_line(text: bytes, line: int) -> int:
    at = 0
    for _ in range(line - 1):
        found = text.find(b"\n", at)
        if found < 0:
            return len(text)
        at = found + 1
    return at


def _best_guess(sample: Sequence[str], pinned: str | None) -> _Guess:
    """Cut the sample by every separator and return the cut with the most numbers in rows of equal length."""
    present = [separator for separator in SEPARATORS if any(separator in line for line in sample)]
    guesses = [_guess(sample, separator) for separator in ([pinned] if pinned else present or SEPARATORS[:1])]
    return max(guesses, key=lambda g: (g.score, g.fields))


def _guess(sample: Sequence[str], separator: str) -> _Guess:
    rows = [_cut(line, separator) for line in sample]
    numeric = [row for row in rows if row.is_row]
    if not numeric:
        widest = max(map(len, rows), default=0)
        return _Guess(separator, rows, widest, -1.0 + 0.001 * widest)
    fields = Counter(map(len, numeric)).most_common(1)[0][0]
    share = sum(len(row.numbers) / row.filled for row in numeric if len(row) == fields) / len(numeric)
    named = any(len(row) - fields in (-1, 0, 1) and not row.is_row for row in rows)
    return _Guess(separator, rows, fields, share + (0.5 if named else 0.0) + (0.25 if fields > 1 else 0.0))


def _decimal_sign(guess: _Guess, text: bytes, layout: Layout) -> str:
    """Return the decimal sign of most of the sample's numbers; all whole: of the rest of the file."""
    numbers = [number for row in guess.rows if row.is_row for number in row.numbers]
    with_comma, with_point = ([n for n in numbers if mark in n] for mark in ",.")
    commas = sum(n.count(",") == 1 and "." not in n for n in with_comma)
    points = sum(n.count(".") == 1 and "," not in n for n in with_point)
    if commas or points:
        return "," if commas > points else "."
    body = text[_offset_of_line(text, layout.first_row_line) :]
    only_commas = re.search(rb"[0-9],[0-9]", body) is not None and re.search(rb"[0-9]\.[0-9]", body) is None
    return "," if layout.separator != "," and only_commas else "."


def _arranged(
    lines: Sequence[str], table: Sequence[int], guess: _Guess, description: Description, by_position: bool
) -> Layout:
    """Find header, units row and first row among the lines of the table."""
    rows = dict(zip(table, guess.rows))
    first = next((i for i, row in rows.items() if row.is_row and len(row) == guess.fields), None)
    names = _header_place(rows, first, guess, description.header_row)
    bare = Layout(guess.separator, ".", None, 1, None, guess.fields, False, 1, 0, {})
    if names is None and description.header_row is not None:
        what = f"line {description.header_row}, which the description pins as the header, is empty or missing"
        notice = set_aside(
            "no-header", description.header_row, None, what, "correct header_row in [recordings]"
        )
        return replace(bare, notices=(notice,))
    if names is None:
        return _without_header(lines, first, rows, bare, by_position)
    header_at, units_at = names
    below = units_at if units_at is not None else header_at
    start = next((i for i in table if i > below), len(lines))
    layout = replace(
        bare,
        header=tuple(rows[header_at].fields),
        header_line=header_at + 1,
        units=tuple(map(unit_of_cell, rows[units_at].fields)) if units_at is not None else None,
        first_row_line=below + 2,
    )
    layout = _with_trailing(layout, [row for i, row in rows.items() if i >= start and row.is_row])
    layout = _with_preamble(layout, lines, header_at)
    if units_at is None:
        return layout
    note = noted(
        "units-row", units_at + 1, None, "a row below the header gives the units", "units taken from it"
    )
    return replace(layout, notices=(*layout.notices, note))


def _header_place(
    rows: dict[int, _Cut], first: int | None, guess: _Guess, header_row: int | None
) -> tuple[int, int | None] | None:
    """Return the indices of header and units row (or ``None``) among the lines before the first row."""
    above = [i for i in rows if first is None or i < first]
    if header_row is not None:
        header = header_row - 1
        if header not in rows:
            return None
        units = next((i for i in above if i > header and _is_units_row(rows[i].fields)), None)
        return header, units
    allowed = (guess.fields - 1, guess.fields, guess.fields + 1) if guess.fields > 1 else (1,)
    candidates = [i for i in above if len(rows[i]) in allowed and not rows[i].numbers]
    if not candidates:
        return None
    last = candidates[-1]
    if len(candidates) > 1 and _is_units_row(rows[last].fields):
        return candidates[-2], last
    return last, None


def _is_units_row(row: Sequence[str]) -> bool:
    cells = [unit_of_cell(cell) for cell in row if cell.strip()]
    known = [cell in SPELLINGS or nearest_spelling(cell) is not None for cell in cells]
    return bool(known) and sum(known) * 2 > len(known)


def _without_header(
    lines: Sequence[str], first: int | None, rows: dict[int, _Cut], bare: Layout, by_position: bool
) -> Layout:
    """Lay out a file whose table has no line of names: in a comment, by position, or not at all."""
    if first is None:
        code, what = ("no-header", "the file holds no table, only comments or words")
        notice = set_aside(code, max(1, len(lines)), None, what, "export the recording again")
        return replace(_with_preamble(bare, lines, len(lines)), notices=(notice,))
    named = _named_in_comment(lines, first, bare)
    if named is not None:
        return _with_trailing(named, list(rows.values()))
    layout = replace(bare, header_line=first + 1, first_row_line=first + 1)
    layout = _with_trailing(_with_preamble(layout, lines, first), [r for r in rows.values() if r.is_row])
    if by_position:
        return layout
    what = "the first line of the table holds numbers, no names"
    remedy = "name the columns by position: [[columns]] position = 1, quantity = …"
    return replace(layout, notices=(*layout.notices, set_aside("no-header", first + 1, None, what, remedy)))


def _named_in_comment(lines: Sequence[str], first: int, bare: Layout) -> Layout | None:
    """Return the layout whose header is the last comment before the first row, if that names columns."""
    comments = [i for i in range(first) if lines[i].lstrip().startswith(_COMMENT)]
    if not comments:
        return None
    names = _split_leniently(_uncommented(lines[comments[-1]]), bare.separator)
    if len(names) < 2 or len(names) != bare.fields or any(map(is_numeric_field, names)):
        return None
    line = comments[-1] + 1
    layout = replace(bare, header=tuple(names), header_line=line, first_row_line=first + 1)
    layout = _with_preamble(layout, lines, comments[-1])
    note = noted(
        "header-in-comment", line, None, "the last comment line names the columns", "taken as the header"
    )
    return replace(layout, notices=(note, *layout.notices))


def _uncommented(line: str) -> str:
    return line.strip().lstrip(_COMMENT).strip()


def _with_trailing(layout: Layout, rows: Sequence[_Cut]) -> Layout:
    """Settle how many fields a row has, and take the empty field after a trailing separator off."""
    header = layout.header
    regular = Counter(len(row) for row in rows).most_common(1)[0][0] if rows else layout.fields
    ends_empty = bool(rows) and all(not row.fields[-1].strip() for row in rows if len(row) == regular)
    if header is None:
        trailing = ends_empty and regular > 1
        return _trailing_noted(replace(layout, fields=regular - trailing), trailing, layout.first_row_line)
    unnamed_end = len(header) > 1 and not header[-1].strip()
    if unnamed_end and (ends_empty or not rows or regular == len(header) - 1):
        kept = tuple(header[:-1])
        trailing = bool(rows) and regular == len(header)
        return _trailing_noted(
            replace(layout, header=kept, fields=len(kept)), trailing, layout.header_line, True
        )
    trailing = ends_empty and regular == len(header) + 1
    return _trailing_noted(replace(layout, fields=len(header)), trailing, layout.first_row_line)


def _trailing_noted(layout: Layout, trailing: bool, line: int, header_too: bool = False) -> Layout:
    if not trailing and not header_too:
        return layout
    what = "the header ends in a separator" if header_too and not trailing else "rows end in a separator"
    done = "the empty last field is taken off; no column moves"
    note = noted("trailing-delimiter", line, layout.fields + 1, what, done)
    return replace(layout, trailing_separator=trailing, notices=(*layout.notices, note))


def _with_preamble(layout: Layout, lines: Sequence[str], end: int) -> Layout:
    """Read ``key: value`` lines before line index *end*."""
    preamble: dict[str, str] = {}
    notices: list[Notice] = []
    bare = [i for i in range(end) if lines[i].strip() and not lines[i].lstrip().startswith(_COMMENT)]
    for i in range(end):
        key, value = _key_and_value(lines[i], layout.separator)
        if key and preamble.setdefault(key, value) != value:
            what = f"the preamble gives '{shown(key)}' twice: '{shown(preamble[key])}' and '{shown(value)}'"
            notices.append(
                noted("preamble-conflict", i + 1, None, what, "the first is kept", "correct the preamble")
            )
    if bare:
        what = (
            f"{len(bare)} lines before the header carry no comment sign"
            if len(bare) > 1
            else ("a line before the header carries no comment sign")
        )
        note = noted("preamble", bare[0] + 1, None, f"{what}: '{shown(lines[bare[0]])}'", "kept as preamble")
        notices.append(replace(note, count=len(bare)))
    return replace(layout, preamble=preamble, notices=(*layout.notices, *notices))


def read_preamble(layout: Layout, lines: Sequence[str]) -> dict[str, str] | None:
    """Return what the comment *lines* before a table say; ``None`` where there is something to remark on."""
    found = _with_preamble(replace(layout, notices=()), lines, len(lines))
    return found.preamble if not found.notices else None


def _key_and_value(line: str, separator: str) -> tuple[str, str]:
    text = _uncommented(line)
    marks = [mark for mark in (":", "=", separator) if mark.strip() and mark in text]
    if not marks:
        return "", ""
    mark = min(marks, key=text.index)
    key, _, value = text.partition(mark)
    return key.strip().strip('"').casefold(), value.strip().strip(separator).strip().strip('"')


_SEPARATOR_WORDS = {",": "comma", ";": "semicolon", "\t": "tab", " ": "blanks"}


def _dialect_notices(layout: Layout, description: Description, text: bytes) -> tuple[Notice, ...]:
    """Remark on a separator or decimal sign that was found out and is not the usual one."""
    unusual = layout.separator != "," and description.separator is None
    comma = layout.decimal == "," and description.decimal is None
    if not layout.readable or not (unusual or comma):
        return ()
    if comma and _PROVES_DECIMAL_COMMA.search(text, layout.body_start) is None:
        what = "every comma in a number may mark the decimals or group thousands (1,234)"
        remedy = 'say decimal = "," in [recordings], or thousands = "," in [[columns]]'
        return (set_aside("dialect", layout.first_row_line, None, what, remedy),)
    line = layout.header_line if unusual else layout.first_row_line
    parts = [f"fields are separated by {_SEPARATOR_WORDS[layout.separator]}"] if unusual else []
    parts += ["the decimal sign is a comma"] if comma else []
    remedy = "if that is wrong, pin separator and decimal in [recordings]"
    return (noted("dialect", line, None, " and ".join(parts), "read so", remedy),)
