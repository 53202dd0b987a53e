"""The gate: checks on the bytes of a table that decide which lines a fast reader may have.

A line is *plain* when it has the right number of separators, nothing but the characters of numbers between
them, no field too long for a number and at least one that is not empty. What such a line means is the same
for every reader; every other line goes the careful road. Quotation marks around a number are taken off first.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.recordings.dialect import Layout
from campaign.recordings.line_parser import LONGEST_NUMBER

_NUMERIC = b"0123456789+-eE"

CHUNK_BYTES = 1 << 16
"""Bytes that are looked at together: larger arrays are taken from the system and given back each time."""


@dataclass(frozen=True)
class Gated:
    """What the gate let through of one table.

    Attributes
    ----------
    plain
        The plain lines, with comma, point and line feed as separator, decimal sign and line end.
    plain_lines
        Indices of these lines within the table, from 0, rising.
    other_lines
        Indices of the lines that go the careful road, rising.
    """

    plain: bytes
    plain_lines: npt.NDArray[np.int64]
    other_lines: npt.NDArray[np.int64]


def pass_gate(body: bytes, layout: Layout) -> Gated:
    """Part the lines of a table, all ended by a line feed, into plain ones and others.

    Parameters
    ----------
    body
        The table's lines, from the first row on, each with its line feed.
    layout
        Separator, decimal sign and number of fields.
    """
    if not body or not _has_gate(layout):
        return _all_careful(count_line_feeds(body))
    body = _unquoted(body, layout)
    if number := _plain_throughout(body, layout):
        lines = np.arange(number, dtype=np.int64)
        return Gated(_normalised(body, layout), lines, lines[:0])
    mask, lengths = _plain_mask(body, layout)
    if 2 * np.count_nonzero(mask) < len(mask):
        return _all_careful(len(mask))
    everything = np.arange(len(mask), dtype=np.int64)
    kept = _normalised(_kept_lines(body, mask, lengths), layout)
    return Gated(kept, everything[mask], everything[~mask])


def count_line_feeds(data: bytes) -> int:
    """Return how many line feeds there are; several times faster than the method of bytes."""
    values = np.frombuffer(data, np.uint8)
    starts = range(0, len(values), CHUNK_BYTES)
    return sum(int(np.count_nonzero(values[start : start + CHUNK_BYTES] == 10)) for start in starts)


def _unquoted(body: bytes, layout: Layout) -> bytes:
    """Return the table without the quotation marks of fields that hold nothing but characters of numbers."""
    if b'"' not in body or layout.separator == " ":
        return body
    mark, numeric = re.escape(layout.separator.encode()), re.escape(_numeric(layout))
    return re.sub(rb'(?<![^%b\n])"([%b]+)"(?![^%b\n])' % (mark, numeric, mark), rb"\1", body)


def _all_careful(lines: int) -> Gated:
    everything = np.arange(lines, dtype=np.int64)
    return Gated(b"", everything[:0], everything)


def _has_gate(layout: Layout) -> bool:
    return layout.separator in {",", ";", "\t", " "} and layout.separator != layout.decimal


def _numeric(layout: Layout) -> bytes:
    return _NUMERIC + layout.decimal.encode()


def _plain_throughout(body: bytes, layout: Layout) -> int:
    """Return the number of lines where all are plain; 0 where one is not.

    Nothing but separators and line feeds is left then when the characters of numbers are taken away.
    """
    separator = layout.separator.encode()
    ends = layout.fields - (0 if layout.trailing_separator else 1)
    left = body.translate(None, _numeric(layout))
    lines = len(left) // (ends + 1)
    if left != (separator * ends + b"\n") * lines:
        return 0
    if layout.trailing_separator and body.count(separator + b"\n") != lines:
        return 0
    return lines if _fields_fit(body, layout) else 0


def _fields_fit(body: bytes, layout: Layout) -> bool:
    """Whether every field has the length of a number and none is empty."""
    data = np.frombuffer(body, np.uint8)
    start = 0
    while start < len(data):
        size = _fitting_lines(data[start : start + CHUNK_BYTES], layout)
        if not size:
            return False
        start += size
    return True


def _fitting_lines(part: npt.NDArray[np.uint8], layout: Layout) -> int:
    """Return the bytes of the whole lines that *part* begins with; 0 where there are none or one is unfit."""
    ends, separators = part == 10, part == ord(layout.separator)
    marks = ends | separators
    touching = marks[1:] & marks[:-1]
    if layout.trailing_separator:
        touching &= ~(ends[1:] & separators[:-1])
    at = np.flatnonzero(ends)
    if marks[0] or touching.any() or not len(at):
        return 0
    if (
        _widest_gap(at) <= LONGEST_NUMBER
        or _widest_gap(np.flatnonzero(marks[: at[-1] + 1])) <= LONGEST_NUMBER
    ):
        return int(at[-1]) + 1
    return 0


def _widest_gap(places: npt.NDArray[np.int64]) -> int:
    return max(int(places[0]), int((places[1:] - places[:-1]).max(initial=1)) - 1)


def _plain_mask(body: bytes, layout: Layout) -> tuple[npt.NDArray[np.bool_], npt.NDArray[np.int64]]:
    """Return, for every line, whether it is plain, and its length with the line feed."""
    data = np.frombuffer(body, np.uint8)
    ends = np.flatnonzero(data == 10)
    lengths = np.diff(ends, prepend=-1)
    separator = ord(layout.separator)
    expected = layout.fields - (0 if layout.trailing_separator else 1)
    plain = _holds_numbers(body, layout, expected) & (lengths - 1 > expected)
    if layout.trailing_separator:
        plain &= data[np.maximum(ends - 1, 0)] == separator
    if layout.separator == " ":
        marks = (data == separator) | (data == 10)
        touching = np.flatnonzero(marks & np.append(True, marks[:-1]))
        plain[np.searchsorted(ends, touching)] = False
    if lengths.max() > LONGEST_NUMBER:
        marks = (data == separator) | (data == 10)
        plain &= _longest_field(marks, ends + 1 - lengths) <= LONGEST_NUMBER
    return plain, lengths


def _holds_numbers(body: bytes, layout: Layout, separators: int) -> npt.NDArray[np.bool_]:
    """Whether a line has so many separators and nothing but the characters of numbers besides."""
    left = np.frombuffer(body.translate(None, _numeric(layout)), np.uint8)
    ends = np.flatnonzero(left == 10)
    right = np.diff(ends, prepend=-1) == separators + 1
    strange = np.flatnonzero((left != ord(layout.separator)) & (left != 10))
    right[np.searchsorted(ends, strange)] = False
    return np.asarray(right)


def _kept_lines(body: bytes, kept: npt.NDArray[np.bool_], lengths: npt.NDArray[np.int64]) -> bytes:
    """Return the lines that are kept, stretch by stretch."""
    edges = np.flatnonzero(np.diff(kept, prepend=False, append=False))
    places = np.append(0, np.cumsum(lengths))[edges].tolist()
    return b"".join(body[start:stop] for start, stop in zip(places[::2], places[1::2], strict=True))


def _longest_field(mark: npt.NDArray[np.bool_], starts: npt.NDArray[np.int64]) -> npt.NDArray[np.int64]:
    """Return the length of the longest field of every line."""
    marks = np.flatnonzero(mark)
    lengths = np.diff(marks, prepend=-1) - 1
    first = np.searchsorted(marks, starts)
    return np.maximum.reduceat(lengths, first)


def _normalised(body: bytes, layout: Layout) -> bytes:
    """Return plain lines with comma and point, without trailing separators."""
    if layout.separator != "," or layout.decimal != ".":
        swap = bytes.maketrans((layout.separator + layout.decimal).encode(), b",.")
        body = body.translate(swap)
    return body.replace(b",\n", b"\n") if layout.trailing_separator else body
