"""Tables as values: what the page shows of them, and the file of each with its schema.

Every table of the site is a file ``tables/NAME.csv`` (UTF-8, comma, point, one header line, full double
precision) described in ``tables/schema.json`` as a tabular data package with Frictionless Table Schemas.
Names and columns of :data:`CONTRACT_COLUMNS` are kept stable.
"""

from __future__ import annotations

import csv
import math
import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from io import StringIO
from typing import Any, Literal

import numpy as np
import orjson
import pandas as pd

from campaign.pages import numbers
from campaign.pages.contract_columns import (
    CONTRACT_COLUMNS,
    SAID_ELSEWHERE,
    describe_column,
    unit_of_column,
)
from campaign.recordings.intake_tables import spelled_paths
from campaign.recordings.recording import ReferenceQuantity

Kind = Literal["number", "integer", "percent", "probability", "text", "code"]


@dataclass(frozen=True)
class Column:
    """One column as the page shows it.

    Attributes
    ----------
    key
        Column of the table's frame.
    head
        Words at the head, without the unit.
    unit
        Unit at the head; empty where there is none.
    kind
        ``number`` (rounded by ``uncertainty`` or ``digits``), ``integer``, ``percent`` (a fraction of one),
        ``probability``, ``text`` or ``code`` (hashes, paths).
    digits
        Significant digits of a number without an uncertainty.
    factor
        What shown numbers are multiplied by (100 for strain shown in %).
    uncertainty
        Column with the uncertainty: then the cell reads ``12.34 ± 0.12``.
    interval
        Columns with the lower and the upper limit: then the cell reads ``0.49 [0.41, 0.58]``.
    href
        Column with each row's link (relative addresses within the site only).
    missing
        What stands for a missing number.
    """

    key: str
    head: str
    unit: str = ""
    kind: Kind = "number"
    digits: int = 4
    factor: float = 1.0
    uncertainty: str | None = None
    interval: tuple[str, str] | None = None
    href: str | None = None
    missing: str = numbers.NOT_IDENTIFIABLE


@dataclass(frozen=True)
class Table:
    """One table of a page.

    Attributes
    ----------
    name
        Name on the page and, without ``source``, of the file ``tables/NAME.csv``.
    caption
        What the table says.
    frame
        The rows. Columns whose names begin with ``_`` (links, labels) are never exported.
    columns
        What the page shows, in order.
    shown_rows
        How many rows the page shows at most; the file is always whole. ``None``: all.
    rows_in_page
        How many of them stand in the page at once; its script adds the others when they are asked for.
    source
        Name of the site's table that these rows are part of; then the link leads to that file and none is
        written for this one.
    note
        Marginal note: how to read this.
    mark
        Columns with the module's and the sensor's id, so that choosing one anywhere marks its rows here.
    """

    name: str
    caption: str
    frame: pd.DataFrame
    columns: tuple[Column, ...]
    shown_rows: int | None = 200
    source: str | None = None
    note: str = ""
    mark: tuple[str, str] = ("module", "sensor")
    rows_in_page: int = 10

    @property
    def file(self) -> str:
        """Address of the CSV file within the site."""
        return f"tables/{self.source or self.name}.csv"


@dataclass(frozen=True)
class Cell:
    """One cell as shown: its text, what it sorts by where the text alone does not say so, where it leads."""

    text: str
    sort: str | None = None
    href: str = ""


def shown_cells(table: Table) -> list[list[Cell]]:
    """Return the cells of the rows that the page shows, row by row, numbers padded to align by the point."""
    frame = _shown(table)
    columns = [_column_cells(frame, column) for column in table.columns]
    return [list(row) for row in zip(*columns, strict=True)]


def _shown(table: Table) -> pd.DataFrame:
    """Return the rows that the page shows."""
    frame, most = table.frame, table.shown_rows
    return frame if most is None or len(frame) <= most else frame.head(most)


def shown_marks(table: Table) -> list[tuple[str, str]]:
    """Return the module and sensor of each shown row, empty where the table has no such columns."""
    frame = _shown(table)
    columns = [_texts_of(frame[key]) if key in frame else [""] * len(frame) for key in table.mark]
    return list(zip(columns[0], columns[1], strict=True))


def _texts_of(values: pd.Series[Any]) -> list[str]:
    return [str(value) for value in values.tolist()]


def csv_bytes(frame: pd.DataFrame, name: str = "") -> bytes:
    """Return the file of a table: contract columns first, then the others, full double precision.

    Raises
    ------
    KeyError
        Where a column of the contract is missing.
    """
    columns = _checked_columns(frame, name)
    return _written(columns, [_fields_of(column, frame[column]) for column in columns])


def drawn_csv_bytes(frame: pd.DataFrame) -> bytes:
    """Return the file of a figure: columns of numbers to :data:`DIGITS_OF_FIGURES` of their largest one.

    Files of figures hold no more: what was measured has fewer digits, a picture shows four, and what was
    computed stands in full precision in the tables.
    """
    columns = _checked_columns(frame, "")
    return _written(columns, [_drawn_fields_of(column, frame[column]) for column in columns])


def _written(columns: Sequence[str], fields: Sequence[Sequence[object]]) -> bytes:
    stream = StringIO(newline="")
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(columns)
    writer.writerows(zip(*fields, strict=True))
    return stream.getvalue().encode("utf-8")


def _drawn_fields_of(column: str, values: pd.Series[Any]) -> list[object]:
    if values.dtype != np.dtype(float):
        return _fields_of(column, values)
    held = values.to_numpy()
    return _number_fields(np.round(held, _decimals_of_figures(held)))


def _fields_of(column: str, values: pd.Series[Any]) -> list[object]:
    """Fields of a column: nothing where a value is missing, infinity as a Table Schema spells it.

    Truth values are true and false, and no file's name is spelled so that a spreadsheet runs it.
    """
    if column == "file":
        values = spelled_paths(values.to_frame("file"))["file"]
    held = values.to_numpy()
    if values.dtype == np.dtype(float):
        return _number_fields(held)
    fields: list[object] = values.tolist()
    if held.dtype.kind == "b":
        return ["true" if held else "false" for held in fields]
    if held.dtype.kind in "iu":
        return fields
    for row in np.flatnonzero(pd.isna(held)).tolist():
        fields[row] = None
    return fields


def _number_fields(held: np.ndarray[Any, Any]) -> list[object]:
    """Fields of doubles: the shortest text that leads back to the very same number."""
    if not len(held):
        return []
    written = orjson.dumps(np.ascontiguousarray(held), option=orjson.OPT_SERIALIZE_NUMPY)
    fields: list[object] = list(written.decode("ascii")[1:-1].split(","))
    for row in np.flatnonzero(~np.isfinite(held)).tolist():
        fields[row] = None if math.isnan(held[row]) else "INF" if held[row] > 0 else "-INF"
    return fields


def exported_frame(frame: pd.DataFrame, name: str = "") -> pd.DataFrame:
    """Return what table *name* exports of *frame*, in order, truth values as true and false."""
    exported = spelled_paths(frame[_checked_columns(frame, name)])
    truths = [str(column) for column, kind in exported.dtypes.items() if kind == np.dtype(bool)]
    words = {column: exported[column].map({True: "true", False: "false"}) for column in truths}
    return exported.assign(**words) if words else exported


def _checked_columns(frame: pd.DataFrame, name: str) -> list[str]:
    missing = [column for column in contract_of(name, frame) if column not in frame]
    if missing:
        raise KeyError(f"table {name} lacks {', '.join(missing)}")
    return exported_columns(frame, name)


def exported_columns(frame: pd.DataFrame, name: str = "") -> list[str]:
    """Return the columns that table *name* exports of *frame*, in order.

    Columns of :data:`SAID_ELSEWHERE` are left out where the column that leads to the same is there.
    """
    contract = contract_of(name, frame)
    left_out = {column for column, by in SAID_ELSEWHERE.get(name, {}).items() if by in frame}
    apart = left_out.union(contract)
    return [*contract, *(c for c in frame.columns if c not in apart and not str(c).startswith("_"))]


def contract_of(name: str, frame: pd.DataFrame) -> list[str]:
    """Return the contract columns of table *name*, renamed to millimetres where *frame* is in millimetres."""
    return [
        column if column in frame else _millimetre_name_in(column, frame)
        for column in CONTRACT_COLUMNS.get(name, ())
    ]


def in_reference(frame: pd.DataFrame, reference: ReferenceQuantity) -> pd.DataFrame:
    """Return *frame* with its ``strain…`` columns renamed where the campaign is in millimetres.

    ``strain_low`` becomes ``elongation_low_mm`` (or ``length_low_mm``); a strain column whose new name is
    already taken is dropped (it holds nothing there). With strain as the reference the frame is returned as
    it is.
    """
    if reference.name == "strain":
        return frame
    names = {c: millimetre_name(str(c), reference.name) for c in frame.columns if "strain" in str(c)}
    taken = [old for old, new in names.items() if new in frame.columns]
    return frame.drop(columns=taken).rename(columns=names)


DIGITS_OF_FIGURES = 6
"""Significant digits of numbers in the files of figures, of each column's largest number."""


def without_told_trial(frame: pd.DataFrame) -> pd.DataFrame:
    """Return rows of one sensor without their trial where the repetition tells which it is.

    The tables of loops and of sweeps hold the trial of every repetition.
    """
    runs = set(zip(frame["repetition"].tolist(), frame["trial"].tolist(), strict=True))
    told = len(runs) and len(runs) == len({repetition for repetition, _ in runs})
    return frame.drop(columns="trial") if told else frame


def _decimals_of_figures(values: np.ndarray[Any, Any]) -> int:
    finite = np.abs(values[np.isfinite(values)])
    largest = float(finite.max()) if finite.size else 0.0
    last = DIGITS_OF_FIGURES - 1
    return last - math.floor(math.log10(largest)) if largest > 0 else last


def millimetre_name(column: str, quantity: str) -> str:
    """Return the name that a strain column has in a campaign whose reference is a length in mm."""
    return column.replace("strain", quantity) + "_mm"


def schema_bytes(frames: Mapping[str, pd.DataFrame], origin: str = "") -> bytes:
    """Return ``tables/schema.json``: one resource a table, with every column's type, unit and meaning.

    *origin* says what the data are where nothing was measured; it stands with the package and every table.
    """
    said = {"description": origin} if origin else {}
    resources = [
        {
            "name": name,
            "path": f"{name}.csv",
            "profile": "tabular-data-resource",
            "encoding": "utf-8",
            **said,
            "schema": {"fields": _fields(exported_frame(frames[name], name)), "missingValues": [""]},
        }
        for name in sorted(frames)
    ]
    package = {"profile": "tabular-data-package", "name": "tables", **said, "resources": resources}
    return orjson.dumps(package, option=orjson.OPT_INDENT_2) + b"\n"


def _column_cells(frame: pd.DataFrame, column: Column) -> list[Cell]:
    values = frame[column.key].tolist()
    hrefs = frame[column.href].tolist() if column.href else [""] * len(values)
    if column.kind in ("text", "code"):
        return [Cell(_text(v), None, h) for v, h in zip(values, hrefs, strict=True)]
    scaled = [_number(v) * column.factor for v in values]
    texts = numbers.aligned(_number_texts(frame, column, scaled))
    return [Cell(t, sort_beside(t, v), h) for t, v, h in zip(texts, scaled, hrefs, strict=True)]


_LEADING_NUMBER = re.compile(r"[\s\u2007]*([-−]?)(\d+(?:\.(\d+))?)(?![\d.e\s×]*[e×])")


def sort_beside(text: str, value: float) -> str | None:
    """Return what a cell sorts by, or ``None`` where the number that its text begins with says it."""
    begins = _LEADING_NUMBER.match(text)
    if math.isnan(value):
        return None if begins is None else ""
    if begins is not None:
        shown = float(begins[2]) * (-1.0 if begins[1] else 1.0)
        if abs(shown - value) <= 0.51 * 10.0 ** -len(begins[3] or ""):
            return None
    return f"{value:.7g}"


def _number_texts(frame: pd.DataFrame, column: Column, scaled: list[float]) -> list[str]:
    if column.uncertainty is not None:
        spread = [_number(u) * column.factor for u in frame[column.uncertainty]]
        return [numbers.measured(v, u, missing=column.missing) for v, u in zip(scaled, spread, strict=True)]
    if column.interval is not None:
        low, high = ([_number(v) * column.factor for v in frame[key]] for key in column.interval)
        triples = zip(scaled, low, high, strict=True)
        return [numbers.interval(v, a, b, missing=column.missing) for v, a, b in triples]
    return [_single_number(v, column) for v in scaled]


def _single_number(value: float, column: Column) -> str:
    if column.kind == "integer":
        return numbers.whole(value, missing=column.missing)
    if column.kind == "percent":
        return numbers.percent(value, missing=column.missing)
    if column.kind == "probability":
        return numbers.probability(value, missing=column.missing).removeprefix("p ").removeprefix("= ")
    return numbers.significant(value, column.digits, missing=column.missing)


def _number(value: object) -> float:
    try:
        return math.nan if value is None or value is pd.NA else float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError):
        return math.nan


def _text(value: object) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    missing = value is None or value is pd.NA or (isinstance(value, float) and math.isnan(value))
    return "" if missing else str(value)


def _millimetre_name_in(column: str, frame: pd.DataFrame) -> str:
    candidates = [millimetre_name(column, quantity) for quantity in ("elongation", "length")]
    return next((name for name in candidates if name in frame), column)


def _fields(frame: pd.DataFrame) -> list[dict[str, str]]:
    return [_field(str(name), frame[name]) for name in frame.columns]


def _field(name: str, values: pd.Series[Any]) -> dict[str, str]:
    field = {"name": name, "type": _field_type(values)}
    unit, description = unit_of_column(name), describe_column(name)
    return field | ({"unit": unit} if unit else {}) | ({"description": description} if description else {})


def _field_type(values: pd.Series[Any]) -> str:
    if pd.api.types.is_integer_dtype(values):
        return "integer"
    if pd.api.types.is_numeric_dtype(values):
        return "number"
    return "boolean" if len(values) and set(_unique(values)) <= {"true", "false"} else "string"


def _unique(values: pd.Series[Any]) -> Iterable[object]:
    return values.unique().tolist()
