"""Tables of a TOML file read with checks: every key accounted for, every fault gathered with its line."""

from __future__ import annotations

import datetime
import difflib
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field

from campaign.notices import Notice
from campaign.units import UnitError, parse_quantity

_LONGEST_NUMBER = re.compile(r"[eE][+-]?\d{4,}")
_HEADER = re.compile(r"\s*(\[\[?)\s*([^\[\]]+?)\s*\]")


def nearest(word: str, known: Iterable[str], likeness: float = 0.5) -> str | None:
    """Return the known word that looks most like *word*, or ``None`` where none comes near.

    Parameters
    ----------
    word
        What was written.
    known
        What could have been meant.
    likeness
        Least likeness, between 0 (anything) and 1 (the same).
    """
    by_lower_case = {k.lower(): k for k in known}
    found = difflib.get_close_matches(word.lower(), by_lower_case, n=1, cutoff=likeness)
    return by_lower_case[found[0]] if found else None


def suggestion(word: str, known: Sequence[str]) -> str:
    """Say which known word may have been meant, else list the known ones."""
    near = nearest(word, known)
    return f"did you mean '{near}'?" if near is not None else "known are: " + ", ".join(sorted(known))


def _parts(dotted: str) -> tuple[str, ...]:
    return tuple(part.strip().strip("\"'") for part in dotted.split("."))


def _says_key(line: str, key: str) -> bool:
    return re.match(rf"\s*[\"']?{re.escape(key)}[\"']?\s*(=|\.)", line) is not None


def find_line(text: str, path: Sequence[str], key: str | None, index: int = 0) -> int | None:
    """Find the line on which a key of a table stands.

    Parameters
    ----------
    text
        The TOML file.
    path
        Names of the table and of those around it, outermost first; empty for the top of the file.
    key
        The key; ``None`` for the table's own head.
    index
        Which table of an array of tables, from 0.

    Returns
    -------
    int or None
        Line from 1; of the nearest thing around it (an inline table's own key, the head of the table) where
        the key itself is not found.
    """
    wanted = tuple(path)
    current: tuple[str, ...] = ()
    seen = -1
    head: int | None = None
    for number, line in enumerate(text.splitlines(), start=1):
        if header := _HEADER.match(line):
            current = _parts(header.group(2))
            if key is not None and current[: len(wanted) + 1] == (*wanted, key):
                return number
            if current == wanted:
                seen += 1
                head = number if seen == index or header.group(1) == "[" else head
        elif key is not None and current == wanted and max(seen, 0) == index and _says_key(line, key):
            return number
    if head is not None or not wanted:
        return head
    return find_line(text, wanted[:-1], wanted[-1])


@dataclass
class FaultList:
    """Faults of one TOML file, gathered so that all can be named at once.

    Attributes
    ----------
    file
        Name of the file, as notices show it.
    text
        The file as it stands, for finding lines.
    notices
        What was found so far, of weight ``"stops"``.
    done
        What the program does about a fault.
    """

    file: str
    text: str
    notices: list[Notice] = field(default_factory=list)
    done: str = "the campaign is not read"

    def add(
        self, code: str, what: str, remedy: str, line: int | None = None, column: int | None = None
    ) -> None:
        """Note one fault that stops the campaign."""
        self.notices.append(Notice(code, "stops", self.file, line, column, what, self.done, remedy))


@dataclass
class CheckedTable:
    """One table of a TOML file; values are taken by key and kind, faults go to the list.

    A value that is taken counts as known; :meth:`finish` names every key that nobody took.
    """

    values: dict[str, object]
    faults: FaultList
    path: tuple[str, ...] = ()
    index: int = 0
    known: list[str] = field(default_factory=list)

    @property
    def name(self) -> str:
        """The table as a reader finds it in the file, such as ``[reference]``."""
        return f"[{'.'.join(self.path)}]" if self.path else "the top of the file"

    def line(self, key: str | None = None) -> int | None:
        """Line of a key of this table, or of its head."""
        return find_line(self.faults.text, self.path, key, self.index)

    def fault(self, code: str, key: str, what: str, remedy: str) -> None:
        """Note a fault of one key."""
        self.faults.add(code, f"{self.name} {key}: {what}", remedy, self.line(key))

    def take(self, key: str) -> object | None:
        """Return the raw value, ``None`` where it is not given, and count the key as known."""
        if key not in self.known:
            self.known.append(key)
        return self.values.get(key)

    def _wrong(self, key: str, value: object, wanted: str) -> None:
        self.fault("wrong-type", key, f"{value!r} is not {wanted}", f"write {wanted}")

    def text(self, key: str, default: str = "") -> str:
        """Take a text."""
        value = self.take(key)
        if value is None or isinstance(value, str):
            return default if value is None else value
        self._wrong(key, value, 'a text in quotes, such as "…"')
        return default

    def day(self, key: str) -> str:
        """Take a date, written as a TOML date or as ISO 8601 text, as ISO 8601 text."""
        value = self.take(key)
        if value is None:
            return ""
        if isinstance(value, datetime.datetime | datetime.date):
            return value.isoformat()
        if isinstance(value, str):
            try:
                datetime.datetime.fromisoformat(value)
            except ValueError:
                pass
            else:
                return value
        self._wrong(key, value, "a date such as 2026-03-31")
        return ""

    def word(self, key: str) -> str:
        """Take a text, number or truth value as text (ids and names may be written as numbers)."""
        value = self.take(key)
        if value is None:
            return ""
        if isinstance(value, bool):
            return "true" if value else "false"
        if isinstance(value, str | int | float):
            return str(value)
        if isinstance(value, datetime.datetime | datetime.date):
            return value.isoformat()
        self._wrong(key, value, "a text or a number")
        return ""

    def number(self, key: str, default: float = float("nan")) -> float:
        """Take a finite number."""
        value = self.take(key)
        if value is None:
            return default
        if isinstance(value, int | float) and not isinstance(value, bool) and abs(value) < float("inf"):
            return float(value)
        self._wrong(key, value, "a number")
        return default

    def quantity_and_unit(
        self,
        key: str,
        families: tuple[str, ...],
        bare_unit: str = "",
        default: float = float("nan"),
    ) -> tuple[float, str]:
        """Take a quantity of some unit families in its canonical unit; a bare number is in *bare_unit*."""
        value = self.take(key)
        if value is None:
            return default, ""
        if isinstance(value, bool) or not isinstance(value, str | int | float):
            what, remedy = f"{value!r} is no quantity", 'write a number with a unit, such as "0.05 mm"'
            self.fault("wrong-type", key, what, remedy)
            return default, ""
        text = value.strip() if isinstance(value, str) else f"{value!r} {bare_unit}"
        try:
            if _LONGEST_NUMBER.search(text):
                raise UnitError(f"'{text}' is out of all bounds")
            quantity = parse_quantity(text, families)
        except (UnitError, OverflowError) as fault:
            self.fault("wrong-unit", key, str(fault), f"state a quantity of {' or '.join(families)}")
            return default, ""
        return quantity.value, quantity.unit

    def quantity(
        self,
        key: str,
        families: tuple[str, ...],
        bare_unit: str = "",
        default: float = float("nan"),
    ) -> float:
        """Take a quantity as :meth:`quantity_and_unit` does, without its unit."""
        return self.quantity_and_unit(key, families, bare_unit, default)[0]

    def whole_number(self, key: str, least: int = 1) -> int | None:
        """Take a whole number of at least *least*."""
        value = self.take(key)
        if value is None:
            return None
        if isinstance(value, int) and not isinstance(value, bool) and value >= least:
            return value
        self._wrong(key, value, f"a whole number from {least}")
        return None

    def truth(self, key: str) -> bool:
        """Take ``true`` or ``false``; false where not given."""
        value = self.take(key)
        if value is None or isinstance(value, bool):
            return bool(value)
        self._wrong(key, value, "true or false")
        return False

    def texts(self, key: str, default: tuple[str, ...] = ()) -> tuple[str, ...]:
        """Take one text or a list of texts."""
        value = self.take(key)
        if value is None:
            return default
        items = [value] if isinstance(value, str) else value
        if isinstance(items, list) and all(isinstance(item, str) for item in items):
            return tuple(items)
        self._wrong(key, value, "a text or a list of texts")
        return default

    def choice(self, key: str, known: Sequence[str], kind: str) -> str | None:
        """Take one of some known words."""
        value = self.text(key) or None
        if value is None or value in known:
            return value
        self.fault(f"unknown-{kind}", key, f"'{value}' is not a known {kind}", suggestion(value, known))
        return None

    def table(self, key: str) -> CheckedTable | None:
        """Take a table inside this one; ``None`` where it is not given."""
        value = self.take(key)
        if value is None:
            return None
        if isinstance(value, dict):
            return CheckedTable(value, self.faults, (*self.path, key))
        self._wrong(key, value, f"a table, [{'.'.join((*self.path, key))}]")
        return None

    def tables(self, key: str) -> list[CheckedTable]:
        """Take a list of tables, ``[[key]]`` or inline."""
        value = self.take(key)
        if value is None:
            return []
        if isinstance(value, list) and all(isinstance(item, dict) for item in value):
            return [CheckedTable(v, self.faults, (*self.path, key), i) for i, v in enumerate(value)]
        self._wrong(key, value, f"a list of tables, [[{'.'.join((*self.path, key))}]]")
        return []

    def words(self) -> dict[str, str]:
        """Take everything as texts: for tables whose keys are the lab's own."""
        return {key: self.word(key) for key in self.values}

    def finish(self) -> None:
        """Name every key that nobody took, each with the nearest known one."""
        for key in self.values:
            if key not in self.known:
                self.faults.add(
                    "unknown-key",
                    f"{self.name} has no key '{key}'",
                    suggestion(key, self.known),
                    self.line(key),
                )
