"""The fast road: plain lines of many files, joined and read at once by pandas' C parser.

Reading joined batches of about 1 MB is up to twice as fast as reading file by file. Numbers come out as
the nearest doubles, to the last bit (pandas from 3.1 on; the tests hold it to that).
"""

from __future__ import annotations

import io
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd

BATCH_BYTES = 1 << 20
"""Bytes that are joined before they are read: what a call costs is little then, and the rest stays near."""


@dataclass(frozen=True)
class PlainTable:
    """Lines that the gate let through.

    Attributes
    ----------
    data
        Lines with comma, point and line feed.
    rows, fields
        Their number and the fields of each.
    """

    data: bytes
    rows: int
    fields: int


def read_plain(tables: Sequence[PlainTable]) -> list[npt.NDArray[np.float64] | None]:
    """Read plain tables; returns arrays of shape (rows, fields) in the given order, NaN for empty fields.

    ``None`` stands for a table that the reader refuses (``1.2.3`` is made of the characters of numbers, too):
    such a table goes the careful road whole.
    """
    values: list[npt.NDArray[np.float64] | None] = [None] * len(tables)
    for batch in _batches(tables):
        for index, read in zip(batch, _read_batch([tables[i] for i in batch])):
            values[index] = read
    return values


def _batches(tables: Sequence[PlainTable]) -> Iterator[list[int]]:
    """Yield indices of tables with equal numbers of fields, about :data:`BATCH_BYTES` at a time."""
    waiting: dict[int, list[int]] = {}
    sizes: dict[int, int] = {}
    for index, table in enumerate(tables):
        if not table.rows:
            continue
        waiting.setdefault(table.fields, []).append(index)
        sizes[table.fields] = sizes.get(table.fields, 0) + len(table.data)
        if sizes[table.fields] >= BATCH_BYTES:
            yield waiting.pop(table.fields)
            sizes[table.fields] = 0
    yield from waiting.values()


def _read_batch(tables: Sequence[PlainTable]) -> list[npt.NDArray[np.float64] | None]:
    """Read tables with equal numbers of fields at once; where that fails, by halves to find the culprit."""
    joined = _parse(b"".join(table.data for table in tables), tables[0].fields)
    if joined is not None and len(joined) == sum(table.rows for table in tables):
        cuts = np.cumsum([table.rows for table in tables])[:-1]
        return list(np.split(joined, cuts))
    if len(tables) == 1:
        return [None]
    half = len(tables) // 2
    return [*_read_batch(tables[:half]), *_read_batch(tables[half:])]


def _parse(data: bytes, fields: int) -> npt.NDArray[np.float64] | None:
    try:
        frame = pd.read_csv(
            io.BytesIO(data),
            header=None,
            names=range(fields),
            dtype="float64",
            index_col=False,
            engine="c",
            keep_default_na=False,
            na_values=[""],
            skip_blank_lines=False,
            low_memory=False,
        )
    except (ValueError, pd.errors.ParserError):
        return None
    return frame.to_numpy()
