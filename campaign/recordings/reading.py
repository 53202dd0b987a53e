"""Bytes in, values out: recordings read in batches, every line and field accounted for.

Nothing here opens a file, writes one or keeps anything: :func:`read_recordings` can be called in any order,
in any process, and again.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt

from campaign.notices import Notice
from campaign.recordings.columns import ColumnPlan, TablePlan, rules_of_file
from campaign.recordings.description import Description
from campaign.recordings.dialect import Layout
from campaign.recordings.encoding import plain_text
from campaign.recordings.fast_reader import PlainTable, read_plain
from campaign.recordings.gate import Gated, count_line_feeds, pass_gate
from campaign.recordings.layout_in_common import layout_of_file, plan_of_file
from campaign.recordings.line_parser import NEIGHBOURS, Ending, NumberedLine, ParsedLines, parse_lines
from campaign.recordings.recording import Channel, Recording
from campaign.recordings.remarks import Remark, gather_remarks
from campaign.recordings.series_checks import check_clock, check_repeats, check_stuck, without_sentinels

FloatArray = npt.NDArray[np.float64]
LineNumbers = npt.NDArray[np.int64]


@dataclass(frozen=True)
class RecordingBytes:
    """A file that is to be read: its path from the campaign folder with forward slashes, and its bytes.

    ``sha256`` is that of the bytes where it is known already, else empty.
    """

    file: str
    data: bytes
    sha256: str = ""


@dataclass(frozen=True)
class ReadOutcome:
    """What became of one file.

    Attributes
    ----------
    file
        Path from the campaign folder.
    sha256, size_bytes
        Of its bytes.
    recording
        ``None`` where the file is set aside; a notice then says why.
    notices
        All remarks on the file, in the order of its lines.
    left_alone
        Headers of columns that the description says to leave alone.
    rules_used
        Indices of the description's column rules that matched a column.
    """

    file: str
    sha256: str
    size_bytes: int
    recording: Recording | None
    notices: tuple[Notice, ...]
    left_alone: tuple[str, ...] = ()
    rules_used: frozenset[int] = field(default_factory=frozenset)


@dataclass(frozen=True)
class _Table:
    """One file on its way: laid out, planned, parted by the gate."""

    item: RecordingBytes
    sha256: str
    layout: Layout
    plan: TablePlan
    notices: tuple[Notice, ...]
    body: bytes
    ending: Ending
    gated: Gated

    def line(self, index: int) -> int:
        """Line number of the table's line *index*, from 0."""
        return self.layout.first_row_line + index


def read_recordings(
    items: Sequence[RecordingBytes], description: Description, *, careful: bool = False
) -> list[ReadOutcome]:
    """Read files into canonical units.

    Parameters
    ----------
    items
        Paths and bytes; any number, a few megabytes at a time serve best.
    description
        How recordings are laid out and which column is which.
    careful
        Take every line the careful road, for comparison; the outcome is the same.

    Returns
    -------
    list of ReadOutcome
        One an item, in the given order.
    """
    prepared = [_prepared(item, description, careful) for item in items]
    tables = [entry for entry in prepared if isinstance(entry, _Table)]
    plain = [PlainTable(t.gated.plain, len(t.gated.plain_lines), t.layout.fields) for t in tables]
    read = iter(zip(tables, read_plain(plain)))
    return [_finished(*next(read)) if isinstance(entry, _Table) else entry for entry in prepared]


def _prepared(item: RecordingBytes, description: Description, careful: bool) -> _Table | ReadOutcome:
    """Decode, lay out, plan and part one file, or say why it is set aside."""
    sha256 = item.sha256 or hashlib.sha256(item.data).hexdigest()
    text = plain_text(item.data, description.encoding)
    if not text.readable:
        return _outcome(item, sha256, text.notices)
    rules = rules_of_file(description.columns, item.file)
    by_position = any(rule.position is not None for _, rule in rules)
    layout = layout_of_file(text.data, description, by_position=by_position)
    notices = (*text.notices, *layout.notices)
    if not layout.readable:
        return _outcome(item, sha256, notices)
    body, ending = _body(text.data, layout)
    if not body or body.isspace():
        empty = Remark("no-rows", layout.header_line, None, words="below the header")
        return _outcome(item, sha256, (*notices, *gather_remarks([empty])))
    plan = plan_of_file(layout, description.columns, item.file)
    notices = (*notices, *plan.notices)
    if not plan.readable:
        return _outcome(item, sha256, notices, plan)
    gated = _gated(body, layout, plan, ending, careful)
    return _Table(item, sha256, layout, plan, notices, body, ending, gated)


def _outcome(
    item: RecordingBytes,
    sha256: str,
    notices: Sequence[Notice],
    plan: TablePlan | None = None,
    recording: Recording | None = None,
) -> ReadOutcome:
    placed = sorted(
        (notice.at(item.file) for notice in notices), key=lambda n: (n.line or 0, n.column or 0, n.code)
    )
    left_alone, rules_used = (
        (plan.left_alone, plan.rules_used) if plan is not None else ((), frozenset[int]())
    )
    return ReadOutcome(item.file, sha256, len(item.data), recording, tuple(placed), left_alone, rules_used)


def _body(text: bytes, layout: Layout) -> tuple[bytes, Ending]:
    """Return the table's lines and how they end."""
    body = text[layout.body_start :]
    terminated = body.endswith(b"\n")
    lines = count_line_feeds(body) + (0 if terminated else 1)
    last = layout.first_row_line + lines - 1
    if terminated or not body:
        return body, Ending(last)
    above = [line.decode() for line in body.rsplit(b"\n", NEIGHBOURS + 1)[-NEIGHBOURS - 1 : -1]]
    return body, Ending(last, False, tuple(above))


def _gated(body: bytes, layout: Layout, plan: TablePlan, ending: Ending, careful: bool) -> Gated:
    """Part the lines; an unterminated last line always goes the careful road."""
    whole = body[: body.rfind(b"\n") + 1]
    lines = ending.last_line - layout.first_row_line + (1 if ending.terminated else 0)
    if careful or not all(column.is_plain for column in plan.columns):
        everything = np.arange(lines, dtype=np.int64)
        gated = Gated(b"", everything[:0], everything)
    else:
        gated = pass_gate(whole, layout)
    if len(whole) == len(body):
        return gated
    return replace(gated, other_lines=np.append(gated.other_lines, lines))


# ---------------------------------------------------------------- values


@dataclass(frozen=True)
class _Rows:
    """Rows of one file in file order, in the units of the file; identity columns left out."""

    values: FloatArray
    lines: LineNumbers
    texts: tuple[tuple[str, ...], ...]
    remarks: tuple[Remark, ...]


def _finished(table: _Table, plain: FloatArray | None) -> ReadOutcome:
    """Join both roads, judge the values, and hand over the recording."""
    rows = _joined(table, plain)
    remarks = list(rows.remarks)
    if any(remark.code == "quote" for remark in remarks):
        return _outcome(table.item, table.sha256, (*table.notices, *gather_remarks(remarks)), table.plan)
    if not len(rows.lines):
        remarks.append(Remark("no-rows", table.layout.header_line, None, words="of those below the header"))
    columns = [column for column in table.plan.columns if column.content != "identity"]
    series, found = _series(columns, rows) if len(rows.lines) else ([], [])
    constants, mixed = _constants(table.plan.columns, rows)
    notices = (*table.notices, *gather_remarks([*remarks, *found, *mixed]))
    if any(notice.weight == "set aside" for notice in notices):
        return _outcome(table.item, table.sha256, notices, table.plan)
    recording = Recording(
        table.item.file,
        table.sha256,
        len(table.item.data),
        len(rows.lines),
        tuple(map(_channel, columns, series)),
        table.layout.preamble,
        rows.lines,
        constants,
    )
    return _outcome(table.item, table.sha256, notices, table.plan, recording)


def _joined(table: _Table, plain: FloatArray | None) -> _Rows:
    """Return the rows of both roads in file order; lines that the fast reader finds odd are read again."""
    columns = [column for column in table.plan.columns if column.content != "identity"]
    places = [column.position - 1 for column in columns]
    fast_lines = table.gated.plain_lines
    if plain is None:
        plain, fast_lines, finite = np.empty((0, table.layout.fields)), fast_lines[:0], True
        careful_lines = np.union1d(table.gated.plain_lines, table.gated.other_lines)
    else:
        careful_lines = table.gated.other_lines
        if not (finite := bool(np.isfinite(plain).all())) and (infinite := np.isinf(plain).any(axis=1)).any():
            careful_lines = np.union1d(careful_lines, fast_lines[infinite])
            plain, fast_lines = plain[~infinite], fast_lines[~infinite]
    parsed = _parsed(table, careful_lines)
    lines = fast_lines + table.layout.first_row_line
    if (unclosed := _unclosed_line(parsed)) is not None:
        before = lines < unclosed
        plain, lines = plain[before], lines[before]
    fast = _chosen(plain, places)
    remarks = parsed.remarks if finite else (*parsed.remarks, *_empty_fields(fast, lines, columns))
    if not parsed.line_numbers:
        return _Rows(fast, lines, (), tuple(remarks))
    values = np.concatenate([fast, parsed.values(len(columns))])
    lines = np.concatenate([lines, np.array(parsed.line_numbers, dtype=np.int64)])
    order = np.argsort(lines, kind="stable")
    return _Rows(
        _chosen(values[order], slice(None)), lines[order], tuple(map(tuple, parsed.texts)), tuple(remarks)
    )


def _chosen(values: FloatArray, columns: list[int] | slice) -> FloatArray:
    """Return a copy of some columns, each of them whole in memory."""
    return np.array(values[:, columns], order="F")


def _unclosed_line(parsed: ParsedLines) -> int | None:
    """Return the line whose quotation mark is not closed: what follows it counts for nothing."""
    return min((r.line or 0 for r in parsed.remarks if r.code == "quote"), default=None)


def _empty_fields(values: FloatArray, lines: LineNumbers, columns: Sequence[ColumnPlan]) -> list[Remark]:
    """Remark on what the fast reader found empty, one remark a column."""
    remarks = []
    for index in np.flatnonzero(np.isnan(values).any(axis=0)):
        empty = np.isnan(values[:, index])
        first = int(lines[np.argmax(empty)])
        remarks.append(Remark("missing-token", first, columns[int(index)].position, "", int(empty.sum())))
    return remarks


def _parsed(table: _Table, indices: LineNumbers) -> ParsedLines:
    if not len(indices):
        return ParsedLines()
    lines = [NumberedLine(table.line(i), text) for i, text in _texts(table.body, indices)]
    return parse_lines(lines, table.layout, table.plan.columns, table.ending)


def _texts(body: bytes, indices: LineNumbers) -> list[tuple[int, str]]:
    """Return (index, text) of some of the lines of a table."""
    ends = np.append(np.flatnonzero(np.frombuffer(body, np.uint8) == ord("\n")), len(body))
    starts = np.append(0, ends[:-1] + 1)
    places = zip(indices.tolist(), starts[indices].tolist(), ends[indices].tolist())
    return [(index, body[start:end].decode()) for index, start, end in places]


def _series(columns: Sequence[ColumnPlan], rows: _Rows) -> tuple[list[FloatArray], list[Remark]]:
    """Return every column in its canonical unit, with remarks on what the values give away."""
    series: list[FloatArray] = []
    remarks: list[Remark] = []
    for index, column in enumerate(columns):
        values, found = without_sentinels(column, rows.values[:, index], rows.lines)
        series.append(np.ascontiguousarray(values))
        remarks.extend(found)
    for index, column in enumerate(columns):
        if column.quantity == "time":
            remarks.extend(check_clock(column, series[index], rows.values[:, index], rows.lines))
            if column.sensor is None:
                remarks.extend(check_repeats(column, rows.values, index, rows.lines))
    remarks.extend(check_stuck(columns, series, rows.lines))
    moved = [s + c.offset_mm if c.offset_mm else s for c, s in zip(columns, series)]
    return moved, remarks


def _constants(columns: Sequence[ColumnPlan], rows: _Rows) -> tuple[dict[str, str], list[Remark]]:
    """Return what constant columns say of the trial, and a remark on each that is not constant."""
    constants: dict[str, str] = {}
    remarks = []
    for index, column in enumerate(c for c in columns if c.content == "identity"):
        values = list(dict.fromkeys(row[index] for row in rows.texts if row[index]))
        if len(values) == 1:
            constants[column.quantity] = values[0]
        elif values:
            remarks.append(
                Remark("mixed-identity", int(rows.lines[0]), column.position, ", ".join(values[:4]))
            )
    return constants, remarks


def _channel(column: ColumnPlan, values: FloatArray) -> Channel:
    unit = column.unit.family.canonical if column.unit is not None else ""
    return Channel(
        column.quantity,
        unit,
        values,
        column.header.strip(),
        column.position,
        column.sensor,
        column.repetition,
        column.node,
        column.along,
    )
