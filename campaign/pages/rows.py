"""The rows of one sensor or one module of a table, found by one pass over the table.

Pages of sensors and modules ask the same tables for the rows of each in turn; comparing whole columns anew
each time would grow with the square of the campaign. Where only values are wanted, rows come as mappings
(:func:`records_of`): making a table of a few rows costs more than reading all of them.
"""

from __future__ import annotations

import weakref
from collections.abc import Hashable
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

Row = dict[Hashable, Any]

_Places = dict[tuple[str, ...], npt.NDArray[np.int64]]


@dataclass
class _Known:
    """What was found in one table so far."""

    table: weakref.ref[pd.DataFrame]
    length: int
    places: dict[tuple[str, ...], _Places] = field(default_factory=dict)
    records: list[Row] | None = None


_known: dict[int, _Known] = {}


def of_sensor(frame: pd.DataFrame, module: str, sensor: str) -> pd.DataFrame:
    """Return the rows of one sensor (columns ``module`` and ``sensor``) in their order."""
    return _rows(frame, ("module", "sensor"), (module, sensor))


def of_module(frame: pd.DataFrame, module: str) -> pd.DataFrame:
    """Return the rows of one module (column ``module``) in their order."""
    return _rows(frame, ("module",), (module,))


def records_of_sensor(frame: pd.DataFrame, module: str, sensor: str) -> list[Row]:
    """Return the rows of one sensor as mappings; they are shared by all who ask and not to be altered."""
    places = _places(frame, ("module", "sensor")).get((module, sensor))
    if places is None:
        return []
    known = _about(frame)
    if known.records is None:
        known.records = records_of(frame)
    return [known.records[place] for place in places.tolist()]


def records_of(frame: pd.DataFrame) -> list[Row]:
    """Return the rows as mappings of plain values: ``frame.to_dict("records")``, a column at a time."""
    names = list(frame.columns)
    columns = [_plain_values(column) for _, column in frame.items()]
    return [dict(zip(names, row, strict=True)) for row in zip(*columns, strict=True)]


def _plain_values(column: pd.Series) -> list[Any]:
    values: list[Any] = column.tolist()
    if column.dtype == object:
        return [value.item() if isinstance(value, np.generic) else value for value in values]
    return values


def _rows(frame: pd.DataFrame, keys: tuple[str, ...], wanted: tuple[str, ...]) -> pd.DataFrame:
    places = _places(frame, keys).get(wanted)
    if places is None:
        return frame.iloc[:0]
    first, last = int(places[0]), int(places[-1])
    if last - first == len(places) - 1:  # they stand together: nothing is copied
        return frame.iloc[first : last + 1]
    return frame.take(places)


def _places(frame: pd.DataFrame, keys: tuple[str, ...]) -> _Places:
    """Return where the rows of each key are."""
    known = _about(frame)
    found = known.places.get(keys)
    if found is None:
        found = known.places[keys] = _found(frame, keys)
    return found


def _found(frame: pd.DataFrame, keys: tuple[str, ...]) -> _Places:
    """Return the places of the rows of each key, in order: runs of like keys are gone through at once."""
    columns = [np.array([str(value) for value in frame[key].tolist()], dtype=object) for key in keys]
    changes = np.zeros(max(len(frame) - 1, 0), dtype=bool)
    for column in columns:
        changes |= column[1:] != column[:-1]
    ends = [0, *(np.flatnonzero(changes) + 1).tolist(), len(frame)] if len(frame) else []
    found: dict[tuple[str, ...], list[npt.NDArray[np.int64]]] = {}
    for start, end in pairwise(ends):
        found.setdefault(tuple(column[start] for column in columns), []).append(np.arange(start, end))
    return {key: parts[0] if len(parts) == 1 else np.concatenate(parts) for key, parts in found.items()}


def _about(frame: pd.DataFrame) -> _Known:
    """Return what is known of a table; one that has grown or gone is gone through anew."""
    name = id(frame)
    known = _known.get(name)
    if known is None or known.table() is not frame or known.length != len(frame):
        known = _known[name] = _Known(weakref.ref(frame, lambda _: _known.pop(name, None)), len(frame))
    return known
