"""Layouts and column plans that many files have in common, found once.

Files of one instrument differ in their comments and their values, hardly ever in how their tables are laid
out. Where the table of a file begins with a line of names and with rows of nothing but plain numbers, its
layout follows from that line and the number of fields alone: it is found for one such table, by the rules
for all others, and moved to the line on which the table of the file begins.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import replace
from functools import lru_cache

from campaign.notices import Notice
from campaign.recordings.columns import TablePlan, plan_columns, plan_of_rules, rules_of_file
from campaign.recordings.description import ColumnRule, Description
from campaign.recordings.dialect import (
    HEADS,
    Layout,
    TableHead,
    find_layout,
    is_numeric_field,
    is_of_table,
    read_preamble,
)

HEAD_BYTES, TABLE_LINES = HEADS[0]
ROWS = TABLE_LINES - 1

MOST_COMMENTS = 40

_NUMBER = rb"[+-]?[0-9]+(?:\.[0-9]*)?(?:[eE][+-]?[0-9]+)?"
_ROWS = {
    separator: re.compile(rb"(?:%b(?:%b%b)+\n){%d}" % (_NUMBER, separator.encode(), _NUMBER, ROWS))
    for separator in (",", ";", "\t")
}
_SEPARATOR = re.compile(rb"[0-9.eE+-]+([,;\t])")


def layout_of_file(text: bytes, description: Description, *, by_position: bool) -> Layout:
    """Find out where the table stands and how it is cut.

    Parameters and result are those of :func:`campaign.recordings.dialect.find_layout`, and so is the answer.
    """
    found = _layout_in_common(text, description, by_position) if description.header_row is None else None
    return found if found is not None else find_layout(text, description, by_position=by_position)


def plan_of_file(layout: Layout, rules: Sequence[ColumnRule], file: str) -> TablePlan:
    """Settle what every column of a file is.

    Parameters and result are those of :func:`campaign.recordings.columns.plan_columns`, and so is the answer.
    """
    if layout.head is None:
        return plan_columns(layout, rules, file)
    plan = _plan_in_common(layout.head, rules_of_file(rules, file))
    return replace(plan, notices=_moved(plan.notices, layout.header_line - 1))


def _layout_in_common(text: bytes, description: Description, by_position: bool) -> Layout | None:
    """The layout of a usual table; ``None`` where the table is another, or its layout cannot be told so."""
    comments: list[str] = []
    start = 0
    while True:
        end = text.find(b"\n", start, HEAD_BYTES)
        if end < 0 or len(comments) > MOST_COMMENTS:
            return None
        line = text[start:end].decode(errors="replace")
        if is_of_table(line):
            break
        comments.append(line)
        start = end + 1
    body = end + 1
    first = _SEPARATOR.match(text, body, HEAD_BYTES)
    rows = _ROWS[first[1].decode()].match(text, body, HEAD_BYTES) if first is not None else None
    if first is None or rows is None:
        return None
    separator = first[1].decode()
    lines = rows[0].decode().split("\n")[:-1]
    sample = tuple(tuple(row.split(separator)) for row in lines)
    alike = {len(row) for row in sample} == {len(sample[0])} and "." in rows[0].decode()
    if not alike or any(map(is_numeric_field, lines)):  # a whole row that could be one number
        return None
    head = TableHead(line, separator, len(sample[0]), description.separator, description.decimal, by_position)
    common = _layout_of_head(head)
    preamble = read_preamble(common, comments)
    if common.separator != separator or common.header is None or preamble is None:
        return None
    return replace(
        common,
        header_line=common.header_line + len(comments),
        first_row_line=common.first_row_line + len(comments),
        body_start=body,
        preamble=preamble,
        sample=sample,
        notices=_moved(common.notices, len(comments)),
        head=head,
    )


@lru_cache(maxsize=256)
def _layout_of_head(head: TableHead) -> Layout:
    """The layout of a file that is nothing but a line of names and rows of plain numbers."""
    row = head.row_separator.join(["0.5"] * head.fields)
    text = "\n".join([head.header, *[row] * ROWS, ""]).encode()
    description = Description("", separator=head.separator, decimal=head.decimal)
    return find_layout(text, description, by_position=head.by_position)


@lru_cache(maxsize=256)
def _plan_in_common(head: TableHead, rules: tuple[tuple[int, ColumnRule], ...]) -> TablePlan:
    return plan_of_rules(_layout_of_head(head), rules)


def _moved(notices: tuple[Notice, ...], lines: int) -> tuple[Notice, ...]:
    if not lines:
        return notices
    return tuple(replace(n, line=n.line + lines) if n.line is not None else n for n in notices)
