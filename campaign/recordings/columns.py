"""Which column of a file is which quantity of whose sensor, in which unit.

Rules of ``[[columns]]`` are tried in file order, those by position before those by header. What no rule
claims is recognised by the usual headers, and what neither knows is not read, with a notice.
"""

from __future__ import annotations

import re
import unicodedata
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from functools import lru_cache

from campaign.notices import Notice
from campaign.recordings.description import TIMESTAMP_UNITS, ColumnRule
from campaign.recordings.dialect import Layout
from campaign.recordings.file_glob import matches_glob
from campaign.recordings.remarks import noted, set_aside, shown
from campaign.units import (
    FAMILIES,
    QUANTITY_FAMILIES,
    UNITLESS_QUANTITIES,
    HeaderParts,
    Unit,
    UnitError,
    find_unit,
    looks_like_timestamp,
    nearest_spelling,
    split_header,
)

REFERENCE_QUANTITIES: tuple[str, ...] = ("length", "elongation", "strain")
"""Quantities of which one is what the signal is calibrated against."""

PLACING_QUANTITIES = frozenset(
    {"time", *REFERENCE_QUANTITIES, "node_x", "node_y", "node_z", "level", "placement", "cycle"}
)
"""A recording needs at least one of these beside its signal."""

IDENTITY_COLUMNS = frozenset(
    {"module", "sensor", "kind", "repetition", "session", "generation", "batch", "channel", "started"}
)
"""Headers of constant columns that say which trial it is."""

_USUAL_NAMES: dict[str, tuple[str, ...]] = {
    "time": ("time",),
    "t": ("time",),
    "zeit": ("time",),
    "temps": ("time",),
    "timestamp": ("time",),
    "datetime": ("time",),
    "elapsed": ("time",),
    "elapsedtime": ("time",),
    "length": ("length",),
    "l": ("length",),
    "L": ("length",),
    "stage": ("length",),
    "stagelength": ("length",),
    "gaugelength": ("length",),
    "elongation": ("elongation", "strain"),
    "stretch": ("elongation", "strain"),
    "extension": ("elongation", "strain"),
    "displacement": ("elongation",),
    "disp": ("elongation",),
    "dl": ("elongation",),
    "dL": ("elongation",),
    "ΔL": ("elongation",),
    "ΔL".casefold(): ("elongation",),
    "strain": ("strain",),
    "epsilon": ("strain",),
    "eps": ("strain",),
    "ε": ("strain",),
    "signal": ("signal",),
    "capacitance": ("signal",),
    "cap": ("signal",),
    "C": ("signal",),
    "Cp": ("signal",),
    "Cs": ("signal",),
    "inductance": ("signal",),
    "voltage": ("signal",),
    "counts": ("signal",),
    "resistance": ("resistance",),
    "R": ("resistance",),
    "phase": ("phase",),
    "pressure": ("pressure",),
    "p": ("pressure",),
    "force": ("force",),
    "F": ("force",),
    "load": ("force",),
    "temperature": ("temperature",),
    "temp": ("temperature",),
    "T": ("temperature",),
    "humidity": ("humidity",),
    "rh": ("humidity",),
    "RH": ("humidity",),
    "level": ("level",),
    "step": ("level",),
    "direction": ("direction",),
    "cycle": ("cycle",),
    "placement": ("placement",),
}
_NAMES_OF_SIGNALS = {"capacitance", "cap", "C", "Cp", "Cs"}


@dataclass(frozen=True)
class ColumnPlan:
    """How one column of a file is to be read.

    Attributes
    ----------
    position
        Place in the file, from 1.
    header
        As it stands in the file; empty without a header.
    quantity
        A quantity of the campaign format, or the key for an identity column (``"module"``, …).
    content
        ``"number"``, ``"timestamp"``, ``"direction"`` (words or ±1) or ``"identity"`` (text).
    unit
        ``None`` where the quantity needs none.
    sensor, repetition, node, along
        Whose column it is, where header or description say so.
    offset_mm
        Added to lengths.
    thousands, decimal
        Marks of this column where the description gives them; ``None``: those of the file.
    missing
        Further words or values that stand for "no value".
    """

    position: int
    header: str
    quantity: str
    content: str = "number"
    unit: Unit | None = None
    sensor: str | None = None
    repetition: int | None = None
    node: str | None = None
    along: tuple[str, ...] = ()
    offset_mm: float = 0.0
    thousands: str | None = None
    decimal: str | None = None
    missing: tuple[str, ...] = ()

    @property
    def owner(self) -> tuple[str, str | None, int | None, str | None, tuple[str, ...]]:
        """What must be unique among the columns of a file."""
        return self.quantity, self.sensor, self.repetition, self.node, self.along

    @property
    def is_plain(self) -> bool:
        """Whether it holds plain numbers in the file's own dialect, which the fast reader can take."""
        return self.content == "number" and self.thousands is None and self.decimal is None


@dataclass(frozen=True)
class TablePlan:
    """How the columns of a file are to be read.

    Attributes
    ----------
    columns
        Those that are read, in file order.
    left_alone
        Headers of columns that the description says to leave alone, in file order.
    notices
        Without a file name; one of weight ``"set aside"`` ends the reading of the file.
    rules_used
        Indices of the description's column rules that matched a column of this file.
    """

    columns: tuple[ColumnPlan, ...]
    left_alone: tuple[str, ...] = ()
    notices: tuple[Notice, ...] = ()
    rules_used: frozenset[int] = field(default_factory=frozenset)

    @property
    def readable(self) -> bool:
        """Whether the file can be read so."""
        return all(notice.weight == "noted" for notice in self.notices)


# ---------------------------------------------------------------- rules


def rules_of_file(rules: Sequence[ColumnRule], file: str) -> tuple[tuple[int, ColumnRule], ...]:
    """Return (index, rule) of those column rules that serve *file*, a path from the campaign folder."""
    return tuple(
        (i, rule) for i, rule in enumerate(rules) if rule.files is None or matches_glob(file, rule.files)
    )


@lru_cache(maxsize=1024)
def header_expression(pattern: str) -> re.Pattern[str]:
    """Return the regular expression of a rule's header.

    Blanks match any run of blanks or none, ``*`` any text, ``{sensor}`` and ``{node}`` a text,
    ``{repetition}`` a whole number.
    """
    words = {
        "{sensor}": r"(?P<sensor>.+?)",
        "{node}": r"(?P<node>.+?)",
        "{repetition}": r"(?P<repetition>[0-9]+)",
        "*": r".*",
    }
    pieces = re.split(r"(\{sensor\}|\{node\}|\{repetition\}|\*|\s+)", _tidy(pattern))
    return re.compile(
        "".join(r"\s*" if p.isspace() else words.get(p, re.escape(p)) for p in pieces), re.DOTALL
    )


def _tidy(header: str) -> str:
    return unicodedata.normalize("NFC", header.strip())


def match_rule(
    rules: Sequence[tuple[int, ColumnRule]], position: int, header: str
) -> tuple[int, ColumnRule, dict[str, str]] | None:
    """Return index, rule and what its placeholders stand for, of the first rule that claims a column."""
    for index, rule in rules:
        if rule.position == position:
            return index, rule, {}
    tidy = _tidy(header)
    for index, rule in rules:
        if rule.position is None and rule.header is not None:
            match = header_expression(rule.header).fullmatch(tidy)
            if match:
                return index, rule, {k: v for k, v in match.groupdict().items() if v is not None}
    return None


# ---------------------------------------------------------------- plan


def plan_columns(layout: Layout, rules: Sequence[ColumnRule], file: str) -> TablePlan:
    """Settle what every column of a file is.

    Parameters
    ----------
    layout
        Header, units row and a sample of the rows.
    rules
        All ``[[columns]]`` of the description.
    file
        Path from the campaign folder, for ``files =`` of the rules.
    """
    return plan_of_rules(layout, rules_of_file(rules, file))


def plan_of_rules(layout: Layout, rules: Sequence[tuple[int, ColumnRule]]) -> TablePlan:
    """The same by the rules that serve the file, from :func:`rules_of_file`."""
    return _Planner(layout, rules).plan()


class _Planner:
    """Gathers columns and notices of one file; lives for the length of one call."""

    def __init__(self, layout: Layout, rules: Sequence[tuple[int, ColumnRule]]) -> None:
        self.layout = layout
        self.rules = rules
        self.columns: list[ColumnPlan] = []
        self.left_alone: list[str] = []
        self.extra: list[tuple[int, str]] = []
        self.spacers: list[int] = []
        self.notices: list[Notice] = []
        self.used: set[int] = set()

    @property
    def line(self) -> int:
        return self.layout.header_line

    def header(self, position: int) -> str:
        return self.layout.header[position - 1] if self.layout.header is not None else ""

    def plan(self) -> TablePlan:
        unclaimed = [p for p in range(1, self.layout.fields + 1) if not self.take_by_rule(p)]
        served = {column.quantity for column in self.columns}
        for position in unclaimed:
            self.take_by_name(position, served)
        self.settle_resistance()
        self.columns.sort(key=lambda column: column.position)
        self.drop_further_clocks()
        self.check_positions()
        self.check_unique()
        self.check_complete()
        self.remark()
        return TablePlan(
            tuple(self.columns), tuple(self.left_alone), tuple(self.notices), frozenset(self.used)
        )

    def note(
        self, code: str, column: int | None, what: str, done: str, remedy: str = "", count: int = 1
    ) -> None:
        self.notices.append(noted(code, self.line, column, what, done, remedy, count))

    def set_aside(self, code: str, column: int | None, what: str, remedy: str) -> None:
        self.notices.append(set_aside(code, self.line, column, what, remedy))

    def take_by_rule(self, position: int) -> bool:
        header = self.header(position)
        found = match_rule(self.rules, position, header)
        if found is None:
            return False
        index, rule, placeholders = found
        self.used.add(index)
        if rule.quantity == "ignore":
            self.left_alone.append(header.strip() or f"column {position}")
            return True
        repetition = placeholders.get("repetition")
        column = ColumnPlan(
            position,
            header,
            rule.quantity,
            sensor=placeholders.get("sensor", rule.sensor),
            repetition=int(repetition) if repetition is not None else rule.repetition,
            node=placeholders.get("node", rule.node),
            along=rule.along,
            offset_mm=rule.offset_mm,
            thousands=rule.thousands,
            decimal=rule.decimal,
            missing=rule.missing,
        )
        self.add(column, rule.unit, self.unit_in_file(position, rule))
        return True

    def unit_in_file(self, position: int, rule: ColumnRule | None) -> str | None:
        """Return the unit that units row or header state, as text.

        Of a rule with placeholders its own header is taken: ``C_{sensor}`` makes no farad of the sensor F.
        """
        units = self.layout.units or ()
        cell = units[position - 1].strip() if position <= len(units) else ""
        header = self.header(position)
        if not cell and header.strip().casefold() in FAMILIES["counts"].scales:
            return "counts"
        if rule is not None and rule.header is not None and re.search(r"[{*]", rule.header):
            header = re.sub(r"\{\w+\}|\*", "·", rule.header)
        stated = split_header(header).unit if header.strip() else None
        return cell or (stated if stated != "·" else None)

    def take_by_name(self, position: int, served: set[str]) -> None:
        header = self.header(position)
        if not header.strip():
            if self.is_empty(position):
                self.spacers.append(position)
            else:
                self.extra.append((position, ""))
            return
        if header.strip().casefold() in IDENTITY_COLUMNS:
            self.columns.append(ColumnPlan(position, header, header.strip().casefold(), content="identity"))
            return
        quantities = usual_quantities(split_header(header))
        if not quantities or served & set(quantities) or not _may_be_a_unit(split_header(header), quantities):
            self.extra.append((position, header))
            return
        unit = self.unit_in_file(position, None)
        quantity = next((q for q in quantities if unit is not None and _takes(q, unit)), quantities[0])
        self.add(ColumnPlan(position, header, quantity), None, unit)

    def is_empty(self, position: int) -> bool:
        return all(position > len(row) or not row[position - 1].strip() for row in self.layout.sample)

    def add(self, column: ColumnPlan, ruled: str | None, in_file: str | None) -> None:
        """Settle the unit of a column, and take it in."""
        if column.quantity == "direction":
            self.columns.append(replace(column, content="direction"))
            return
        if column.quantity == "time" and self.is_timestamp(column.position, ruled, in_file):
            self.columns.append(replace(column, content="timestamp", unit=Unit("s", FAMILIES["time"])))
            return
        try:
            unit = self.settled_unit(column, ruled, in_file)
        except UnitError as error:
            remedy = 'give the unit by its exact symbol in the header, or by unit = "…" in [[columns]]'
            self.set_aside("unit", column.position, f"{self.called(column)}: {error}", remedy)
            return
        self.columns.append(replace(column, unit=unit))

    def called(self, column: ColumnPlan) -> str:
        return (
            f"column '{shown(column.header.strip())}'"
            if column.header.strip()
            else f"column {column.position}"
        )

    def is_timestamp(self, position: int, ruled: str | None, in_file: str | None) -> bool:
        if ruled is not None:
            return ruled.casefold() in TIMESTAMP_UNITS
        cells = [row[position - 1] for row in self.layout.sample if position <= len(row)]
        return in_file is None and any(map(looks_like_timestamp, cells[:3]))

    def settled_unit(self, column: ColumnPlan, ruled: str | None, in_file: str | None) -> Unit | None:
        families = _families_of(column)
        if column.quantity in UNITLESS_QUANTITIES and ruled is None:
            return None
        if ruled is None:
            if in_file is None:
                raise UnitError("no unit is given")
            return find_unit(in_file, families)
        unit = find_unit(ruled, families)
        if in_file is not None and in_file != ruled and not _same_unit(in_file, unit, families):
            what = f"{self.called(column)} states '{shown(in_file)}', the description '{ruled}'"
            self.note("unit-overruled", column.position, what, "the description holds")
        return unit

    def settle_resistance(self) -> None:
        """Let a resistance stand as the signal where there is no other."""
        if not any(column.quantity == "signal" for column in self.columns):
            self.columns = [
                replace(c, quantity="signal") if c.quantity == "resistance" and c.sensor is None else c
                for c in self.columns
            ]

    def drop_further_clocks(self) -> None:
        clocks = [c for c in self.columns if c.quantity == "time" and c.sensor is None]
        if len(clocks) > 1 and len({c.header for c in clocks}) == len(clocks):
            others = clocks[1:]
            self.columns = [c for c in self.columns if c not in others]
            names = ", ".join(self.called(c) for c in others)
            self.note(
                "several-clocks",
                others[0].position,
                f"besides {self.called(clocks[0])} there are more clocks: {names}",
                "the first is the time, the others are not read",
                'name the clock in [[columns]] and give the others quantity = "ignore"',
                len(others),
            )

    def check_positions(self) -> None:
        for _, rule in self.rules:
            if rule.position is not None and rule.position > self.layout.fields:
                what = f"the description names column {rule.position}, the file has {self.layout.fields}"
                self.note(
                    "column-not-found", rule.position, what, "nothing is read for it", "correct position"
                )

    def check_unique(self) -> None:
        seen: dict[object, ColumnPlan] = {}
        for column in self.columns:
            first = seen.setdefault(column.owner, column)
            if first is not column:
                both = f"{self.called(column)} and {self.called(first)} (column {first.position})"
                what = f"{both} both give {column.quantity}"
                remedy = 'name the right one in [[columns]] and give the other quantity = "ignore"'
                self.set_aside("duplicate-column", column.position, what, remedy)

    def check_complete(self) -> None:
        if not self.rules_allow():
            return
        quantities = {column.quantity for column in self.columns}
        wanting = (
            [] if quantities & PLACING_QUANTITIES else ["a time or a reference (length, elongation, strain)"]
        )
        wanting += [] if "signal" in quantities else ["a signal"]
        if wanting:
            found = ", ".join(self.called(c) for c in self.columns) or "none that is recognised"
            what = f"no column gives {' and '.join(wanting)}; columns read: {found}"
            self.set_aside("missing-column", None, what, "say in [[columns]] which column is which quantity")

    def rules_allow(self) -> bool:
        """Whether nothing worse has been said yet: a column without its unit is not also missing."""
        return all(notice.weight == "noted" for notice in self.notices)

    def remark(self) -> None:
        """Remark on columns that are not read, and on conversions."""
        if self.extra:
            names = ", ".join(
                f"'{shown(h.strip())}'" if h.strip() else f"unnamed ({p})" for p, h in self.extra
            )
            what = f"not accounted for: {names}"
            remedy = 'say what it is in [[columns]], or quantity = "ignore"'
            self.note("extra-column", self.extra[0][0], what, "not read", remedy, len(self.extra))
        if self.spacers:
            what = "columns without name or values"
            self.note("spacer-column", self.spacers[0], what, "passed over", count=len(self.spacers))
        changed = [c for c in self.columns if c.unit is not None and not c.unit.is_canonical]
        if changed:
            parts = ", ".join(f"{self.called(c)} to {c.unit.family.canonical}" for c in changed if c.unit)
            self.note("converted", None, f"other units than ours: {parts}", "converted", count=len(changed))
        moved = [c for c in self.columns if c.offset_mm]
        for column in moved:
            what = f"the description adds {column.offset_mm:g} mm to {self.called(column)}"
            self.note("converted", column.position, what, "added")


def _may_be_a_unit(parts: HeaderParts, quantities: tuple[str, ...]) -> bool:
    """Whether an unmarked end of a header is a unit of the quantity: the end of ``pressure_min`` is none."""
    if parts.unit is None or parts.marked:
        return True
    return any(nearest_spelling(parts.unit, QUANTITY_FAMILIES[quantity]) for quantity in quantities)


def _takes(quantity: str, unit: str) -> bool:
    return any(unit in FAMILIES[name].scales for name in QUANTITY_FAMILIES[quantity])


def _same_unit(in_file: str, unit: Unit, families: tuple[str, ...]) -> bool:
    try:
        other = find_unit(in_file, families)
    except UnitError:
        return False
    return other.family is unit.family and other.scale == unit.scale


def _families_of(column: ColumnPlan) -> tuple[str, ...]:
    """Families for a column; a capacitance by name takes units of capacitance only."""
    if column.quantity == "signal":
        name = split_header(column.header).name
        if name in _NAMES_OF_SIGNALS or name.casefold() in _NAMES_OF_SIGNALS:
            return ("capacitance", *(f for f in QUANTITY_FAMILIES["signal"] if f != "capacitance"))
    return QUANTITY_FAMILIES[column.quantity]


def usual_quantities(parts: HeaderParts) -> tuple[str, ...]:
    """Return the quantities that a usual name may stand for, most likely first; empty for other names."""
    name = re.sub(r"[\s_\-]+", "", unicodedata.normalize("NFC", parts.name))
    if name in _USUAL_NAMES:
        return _USUAL_NAMES[name]
    return _USUAL_NAMES.get(name.casefold(), ()) if len(name) > 1 else ()
