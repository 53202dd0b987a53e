"""Two sets of the same tables, figure by figure, with stated tolerances.

The same program on the same machine gives the same bytes. Another machine adds numbers up in another order
(vector units, algebra libraries), and a search ends a little elsewhere: so numbers are compared to tolerances
that depend on how a column comes about, and words, names and counts must be the same.
"""

from __future__ import annotations

import csv
import io
import json
import math
import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass

SCHEMA = "schema.json"


@dataclass(frozen=True)
class Tolerance:
    """How far two figures of one kind of column may lie apart.

    Attributes
    ----------
    kind
        What such columns hold, in words.
    relative
        Of the larger figure, or of a thousandth of the column's largest where that is more.
    absolute
        In the column's unit, beside it.
    """

    kind: str
    relative: float = 0.0
    absolute: float = 0.0

    @property
    def words(self) -> str:
        """The tolerance as it is printed."""
        if math.isinf(self.relative):
            return "not compared"
        if self.absolute:
            return f"{self.absolute:g}"
        return f"{self.relative:g} of the figure" if self.relative else "none: they must be equal"


EXACT = Tolerance("names, words, whole numbers, true and false")
READ = Tolerance(
    "what was read: tables recordings and trials, and what readings.csv holds of recordings", 1e-9
)
COMPUTED = Tolerance("what is computed or estimated", 1e-6)
LIMIT = Tolerance("limits of intervals, expanded uncertainties and degrees of freedom", 1e-4)
PROBABILITY = Tolerance("probabilities", absolute=0.005)
SEARCH = Tolerance("how a search went (evaluations, restarts, what is left at its end)", math.inf)
TOLERANCES = (EXACT, READ, COMPUTED, LIMIT, PROBABILITY, SEARCH)
"""Every kind of column."""

_READ_COLUMNS = re.compile(
    r"(nominal_level|strain|length_mm|elongation_mm|signal|x|time_s|.*_mm|temperature_c|humidity_percent|pressure_kpa)"
)
_LIMITS = re.compile(
    r"(.*_)?(low|high)(_.*)?|expanded.*|.*_expanded.*|df\d?|degrees_of_freedom|coverage_factor|.*half_width.*"
)
_PROBABILITIES = re.compile(r"p|p_.*|.*_p|.*probability|power(_.*)?")
_OF_A_SEARCH = re.compile(r"evaluations|restarts|smallest_cone_eigenvalue|difference")


def tolerance_of(table: str, column: str, kind: str) -> Tolerance:
    """Return the tolerance of a column.

    Parameters
    ----------
    table, column
        Their names.
    kind
        Type in the schema: only ``number`` is compared with a tolerance.
    """
    if table == "fit_certificates" and _OF_A_SEARCH.fullmatch(column):
        return SEARCH
    if kind != "number":
        return EXACT
    if table in ("recordings", "trials") or (table == "readings" and _READ_COLUMNS.fullmatch(column)):
        return READ
    if _PROBABILITIES.fullmatch(column):
        return PROBABILITY
    return LIMIT if _LIMITS.fullmatch(column) else COMPUTED


@dataclass(frozen=True)
class Difference:
    """One figure that differs: where it stands, both values, by how much, what was allowed.

    ``rank`` is the place of its tolerance in :data:`TOLERANCES`: what was read comes first.
    """

    table: str
    row: str
    column: str
    sealed: str
    again: str
    by: str
    allowed: str
    rank: int = 0

    @property
    def sentence(self) -> str:
        """The difference in a line."""
        where = f"tables/{self.table}.csv" + (f", {self.row}" if self.row else "")
        column = f", {self.column}" if self.column else ""
        return f"{where}{column}: sealed {self.sealed}, now {self.again}{self.by}{self.allowed}"


@dataclass(frozen=True)
class TableComparison:
    """What comparing one table came to.

    Attributes
    ----------
    table
        Its name.
    figures
        How many cells were compared.
    same_bytes
        Whether both files are the same to the byte.
    differences
        Every figure beyond its tolerance: what was read first, then in the order of the table.
    """

    table: str
    figures: int
    same_bytes: bool
    differences: tuple[Difference, ...]


def compare_tables(sealed: Mapping[str, bytes], again: Mapping[str, bytes]) -> tuple[TableComparison, ...]:
    """Compare tables of two runs, both by file name with their schema among them.

    Returns
    -------
    tuple of TableComparison
        One a table of either set, sorted by name; a table that one of them lacks is a difference.
    """
    types = _types(sealed.get(SCHEMA, b""))
    names = sorted({name for name in (*sealed, *again) if name.endswith(".csv")})
    return tuple(
        _compare(name.removesuffix(".csv"), sealed.get(name), again.get(name), types) for name in names
    )


def _types(schema: bytes) -> dict[tuple[str, str], str]:
    """Type of every column by table and name; empty where the schema cannot be read."""
    try:
        resources = json.loads(schema)["resources"]
        return {(r["name"], f["name"]): f["type"] for r in resources for f in r["schema"]["fields"]}
    except (ValueError, KeyError, TypeError):
        return {}


def _compare(
    table: str, sealed: bytes | None, again: bytes | None, types: Mapping[tuple[str, str], str]
) -> TableComparison:
    if sealed is None or again is None:
        was, now = ("there" if side is not None else "missing" for side in (sealed, again))
        return TableComparison(table, 0, False, (Difference(table, "", "", was, now, "", ""),))
    old, new = _rows(sealed), _rows(again)
    figures = sum(len(row) for row in old[1:])
    if sealed == again:
        return TableComparison(table, figures, True, ())
    differences = tuple(sorted(_differences(table, old, new, types), key=lambda d: d.rank))
    return TableComparison(table, figures, False, differences)


def _rows(content: bytes) -> list[list[str]]:
    """Rows of a file; as one cell a line where it is no CSV at all."""
    text = content.decode("utf-8", "backslashreplace")
    try:
        return list(csv.reader(io.StringIO(text, newline="")))
    except csv.Error:
        return [[line] for line in text.splitlines()]


def _differences(
    table: str, old: list[list[str]], new: list[list[str]], types: Mapping[tuple[str, str], str]
) -> Iterator[Difference]:
    heads = [rows[0] if rows else [] for rows in (old, new)]
    yield from _columns_apart(table, *heads)
    if len(old) != len(new):
        yield Difference(table, "", "rows", str(len(old) - 1), str(len(new) - 1), "", "")
    common = [name for name in heads[0] if name in heads[1]]
    places = {name: (heads[0].index(name), heads[1].index(name)) for name in common}
    scales = {name: _largest(old[1:], places[name][0]) for name in common}
    for number, (before, after) in enumerate(zip(old[1:], new[1:]), 1):
        for name, (i, j) in places.items():
            pair = (_cell(before, i), _cell(after, j))
            tolerance = tolerance_of(table, name, types.get((table, name), "number"))
            if pair[0] != pair[1] and not _agree(*pair, tolerance, scales[name]):
                row = _named(number, heads[0], before, types, table)
                was, now = (_shown(cell) for cell in pair)
                rank = TOLERANCES.index(tolerance)
                yield Difference(table, row, name, was, now, _by(*pair), _allowed(tolerance), rank)


def _columns_apart(table: str, old: list[str], new: list[str]) -> Iterator[Difference]:
    for name in old:
        if name not in new:
            yield Difference(table, "", name, "a column", "missing", "", "")
    for name in new:
        if name not in old:
            yield Difference(table, "", name, "no such column", "a column", "", "")


def _cell(row: list[str], place: int) -> str:
    return row[place] if place < len(row) else ""


def _largest(rows: list[list[str]], place: int) -> float:
    found = (abs(_number(_cell(row, place))) for row in rows)
    return max((value for value in found if math.isfinite(value)), default=0.0)


def _agree(sealed: str, again: str, tolerance: Tolerance, scale: float) -> bool:
    if tolerance is SEARCH:
        return True
    old, new = _number(sealed), _number(again)
    if not (math.isfinite(old) and math.isfinite(new)):
        return False
    apart = abs(old - new)
    return apart <= tolerance.absolute + tolerance.relative * max(abs(old), abs(new), scale / 1000)


def _number(text: str) -> float:
    """The number of a cell; NaN where it is empty or none."""
    try:
        return float(text)
    except ValueError:
        return math.nan


def _by(sealed: str, again: str) -> str:
    old, new = _number(sealed), _number(again)
    if not (math.isfinite(old) and math.isfinite(new)):
        return ""
    share = f" ({(new - old) / old:+.2g} of it)" if old else ""
    return f", {new - old:+.3g}{share}"


def _allowed(tolerance: Tolerance) -> str:
    return f"; allowed {tolerance.words}" if tolerance.relative or tolerance.absolute else ""


def _shown(cell: str) -> str:
    return cell if cell else "(empty)"


def _named(
    number: int, head: list[str], row: list[str], types: Mapping[tuple[str, str], str], table: str
) -> str:
    """A row by its number and the words in its first columns."""
    words = [
        _cell(row, place)
        for place, name in enumerate(head)
        if types.get((table, name)) == "string" and _cell(row, place)
    ]
    return f"row {number}" + (f" ({', '.join(words[:4])})" if words else "")
