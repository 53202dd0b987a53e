"""Rows of tables by group as places in arrays, and the rows of many small tables as one table.

A table a group is handy where groups are few. Where there are hundreds, making them costs far more than
what is computed from them.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.trials.readings import one_a_table

IntArray = npt.NDArray[np.int64]
Columns = dict[str, npt.NDArray[Any]]
"""Columns of a table, or of some of its rows, by name."""


def columns_of(table: pd.DataFrame, names: Sequence[str]) -> Columns:
    """Return columns of *table* as arrays, texts as objects."""
    found = {name: table[name] for name in names}
    return {
        name: column.to_numpy() if isinstance(column.dtype, np.dtype) else column.to_numpy(object)
        for name, column in found.items()
    }


def at(columns: Columns, places: IntArray) -> Columns:
    """Return the rows at *places* of some columns."""
    return {name: values[places] for name, values in columns.items()}


def places_by(codes: IntArray) -> list[IntArray]:
    """Return the places of every code from 0 that occurs, in the order of the codes, rising in each."""
    order = np.argsort(codes, kind="stable")
    order = order[np.searchsorted(codes[order], 0) :]
    return np.split(order, np.flatnonzero(np.diff(codes[order])) + 1) if len(order) else []


def groups_by(
    table: pd.DataFrame, keys: Sequence[str], *, sort: bool = True
) -> list[tuple[tuple[str, ...], IntArray]]:
    """Return every group's key, as texts, and the places of its rows in *table*.

    Parameters
    ----------
    table, keys
        The table, and the columns that name its groups; rows without one of them belong to none.
    sort
        Whether groups come in the order of their keys; else in that of their first rows.
    """
    numbers = table.groupby(list(keys), sort=sort).ngroup().fillna(-1)
    codes = np.asarray(numbers, dtype=np.int64)
    places = places_by(codes)
    named = columns_of(table, keys)
    return [(tuple(str(named[key][own[0]]) for key in keys), own) for own in places]


def columns_of_all(tables: Sequence[pd.DataFrame], names: Sequence[str]) -> Columns:
    """Return columns of several tables, at least one, one after another."""
    every = [columns_of(table, names) for table in tables]
    return {name: np.concatenate([own[name] for own in every]) for name in names}


def rows_of_all(
    tables: Sequence[pd.DataFrame], shared: Mapping[str, Sequence[Any]], names: Sequence[str] | None = None
) -> pd.DataFrame:
    """Return the rows of *tables*, one after another, with further columns.

    Parameters
    ----------
    tables
        Tables of the same columns, at least one.
    shared
        Name of a column → its value for all rows of each table.
    names
        Columns that are wanted; all where ``None``.
    """
    counts = [len(table) for table in tables]
    columns = columns_of_all(tables, list(tables[0].columns if names is None else names))
    columns |= {name: np.repeat(one_a_table(values), counts) for name, values in shared.items()}
    return pd.DataFrame(columns)
