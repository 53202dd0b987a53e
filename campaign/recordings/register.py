"""The registers of a campaign: ``modules.csv``, ``sensors.csv``, ``sessions.csv`` and ``trials.csv``.

A register is one CSV table with one row a thing. Free columns are kept. A register whose columns cannot be
told apart stops the campaign, for what it would have said cannot be known; a single broken row is left out,
with a notice, and what it names is not guessed.
"""

from __future__ import annotations

import csv
import io
import re
import unicodedata
from collections import Counter, defaultdict
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import lru_cache
from pathlib import Path

from campaign.notices import Notice, Weight
from campaign.recordings.toml_tables import nearest
from campaign.units import UnitError, parse_quantity

REGISTERS: dict[str, tuple[str, ...]] = {
    "modules": ("module",),
    "sensors": ("module", "sensor"),
    "sessions": ("session",),
    "trials": ("file",),
}
"""Registers and the columns that each must have; they name a row (a session may also name its module)."""

KNOWN_COLUMNS: dict[str, tuple[str, ...]] = {
    "modules": ("module", "generation", "batch", "materials", "cure", "built", "geometry", "fate", "reason"),
    "sensors": (
        "module",
        "sensor",
        "position",
        "from",
        "to",
        "rest_length",
        "rest_length_uncertainty",
        "rest_length_method",
        "fate",
        "failed_at_cycle",
        "reason",
    ),
    "sessions": (
        "session",
        "module",
        "started",
        "stand",
        "grip",
        "preload",
        "temperature",
        "humidity",
        "operator",
    ),
    "trials": (
        "file",
        "kind",
        "generation",
        "batch",
        "module",
        "sensor",
        "repetition",
        "session",
        "started",
        "channel",
        "conditioning_cycles",
        "conditioning_strain",
        "use",
        "reason",
    ),
}
"""Columns with a meaning; a register may have any others, which are kept as they are."""

ID_COLUMNS = ("module", "sensor", "session", "generation", "batch")
"""Columns that hold ids."""

TEXT_COLUMNS = ("position", "from", "to", "started", "channel")
"""Columns that hold no ids but stand in tables beside them: a text that an id could not be is left out."""

LONG_ID = 64
"""Characters above which an id is noted as long."""

FATE_SET_ASIDE = re.compile(
    r"set.aside|\bdead\b|before.test|not.tested|unusable|broken|torn|short.?(?:ed|circuit)|open.circuit"
    r"|excluded|discarded|scrapped",
    re.IGNORECASE,
)
"""Words of a ``fate`` column that leave a module or sensor out of use; ``failed`` alone (later) does not."""

_FORMULA_SIGNS = ("=", "+", "-", "−", "@", "＝", "＋", "－", "＠")


def tidy_id(text: str) -> str:
    """Return an id without blanks around it and in composed form (one ``é``, however it was typed)."""
    return unicodedata.normalize("NFC", text).strip()


def shown(text: str) -> str:
    """Return a text in which what cannot be seen (controls, direction marks) is spelled out."""
    return "".join(c if _is_visible(c) else c.encode("unicode_escape").decode() for c in text)


def _is_visible(character: str) -> bool:
    return unicodedata.category(character) not in {"Cc", "Cf", "Cs", "Co", "Zl", "Zp"}


def refusal_of_id(text: str) -> str | None:
    """Say why an id is refused, or return ``None`` where it is taken.

    Ids that a spreadsheet would run as a formula are refused, never altered: tables show ids as they are. Ids
    with characters that nobody sees are refused because two of them would look the same.
    """
    if text.startswith(_FORMULA_SIGNS):
        return f"begins with '{text[0]}', which spreadsheets take for a formula"
    if not all(_is_visible(c) for c in text):
        return "holds characters that cannot be seen (controls or direction marks)"
    return None


def path_in_tables(path: str) -> str:
    """Return a path as tables spell it: ``./`` before one that spreadsheets would take for a formula."""
    return f"./{path}" if path.startswith(_FORMULA_SIGNS) else path


def remark_on_id(text: str) -> str | None:
    """Say what is unusual about an id that is taken all the same, or return ``None``."""
    if ".." in re.split(r"[/\\]", text) or text.startswith("/"):
        return "looks like a path; it is kept as text and no file is named after it"
    if len(text) > LONG_ID:
        return f"has {len(text)} characters; file names carry its beginning and a mark"
    return None


@dataclass(frozen=True)
class RegisterRow:
    """One row of a register.

    Attributes
    ----------
    line
        Line of the file on which the row begins.
    values
        Texts by column, blanks around them removed.
    """

    line: int
    values: dict[str, str]

    def get(self, column: str) -> str:
        """Return the text of a column, empty where the register has none."""
        return self.values.get(column, "")


@dataclass(frozen=True)
class Register:
    """One register as read.

    Attributes
    ----------
    name
        ``"modules"``, ``"sensors"``, ``"sessions"`` or ``"trials"``.
    columns
        Column names in file order; empty where the folder has no such register.
    rows
        Rows that can be relied upon, in file order.
    refused
        Key of a row that cannot be relied upon (two rows that differ, a refused id), with the reason.
    """

    name: str
    columns: tuple[str, ...] = ()
    rows: tuple[RegisterRow, ...] = ()
    refused: dict[tuple[str, ...], str] = field(default_factory=dict)

    @property
    def file(self) -> str:
        """Name of the register's file."""
        return f"{self.name}.csv"

    @property
    def present(self) -> bool:
        """Whether the folder has this register."""
        return bool(self.columns)

    def by_key(self) -> dict[tuple[str, ...], RegisterRow]:
        """Return the rows by their key (see :func:`key_of`)."""
        return {key_of(self.name, row.values): row for row in self.rows}


@dataclass(frozen=True)
class Registers:
    """The four registers of a campaign, with what was remarked while they were read."""

    modules: Register = field(default_factory=lambda: Register("modules"))
    sensors: Register = field(default_factory=lambda: Register("sensors"))
    sessions: Register = field(default_factory=lambda: Register("sessions"))
    trials: Register = field(default_factory=lambda: Register("trials"))
    notices: tuple[Notice, ...] = ()

    def all(self) -> tuple[Register, ...]:
        """Return the registers in fixed order."""
        return (self.modules, self.sensors, self.sessions, self.trials)


def plain_path(text: str) -> str:
    """Return a path from the campaign folder in the one form in which paths are compared."""
    return unicodedata.normalize("NFC", text.replace("\\", "/")).removeprefix("./")


def key_of(name: str, values: Mapping[str, str]) -> tuple[str, ...]:
    """Return what names a row of register *name*: its required columns, and the module of a session."""
    columns = ("session", "module") if name == "sessions" else REGISTERS[name]
    key = tuple(values.get(column, "") for column in columns)
    return (plain_path(key[0]),) if name == "trials" else key


def read_registers(folder: Path) -> Registers:
    """Read the registers that stand in a campaign folder.

    Parameters
    ----------
    folder
        The campaign folder.

    Returns
    -------
    Registers
        Notices of weight ``"stops"`` among its notices mean that a register cannot be relied upon at all.
    """
    read: dict[str, Register] = {}
    notices: list[Notice] = []
    for name in REGISTERS:
        read[name], remarks = _read_register_file(folder, name)
        notices += remarks
    return Registers(read["modules"], read["sensors"], read["sessions"], read["trials"], tuple(notices))


def _read_register_file(folder: Path, name: str) -> tuple[Register, list[Notice]]:
    path = folder / f"{name}.csv"
    try:
        data = path.read_bytes()
    except (FileNotFoundError, NotADirectoryError):
        return Register(name), []
    except OSError as fault:
        what = f"the register cannot be opened ({fault.strerror})"
        return Register(name), [
            _notice("unreadable-register", "stops", path.name, None, what, "make it readable")
        ]
    return read_register(name, data)


def read_register(name: str, data: bytes) -> tuple[Register, list[Notice]]:
    """Read one register.

    Parameters
    ----------
    name
        ``"modules"``, ``"sensors"``, ``"sessions"`` or ``"trials"``.
    data
        The bytes: CSV with ``,``, ``;`` or tab, in UTF-8, UTF-16 with a byte order mark or CP1252.

    Returns
    -------
    tuple of Register and list of Notice
        The rows that can be relied upon, and every remark.
    """
    file = f"{name}.csv"
    text, notices = _decode(file, data)
    if "\0" in text:
        what = "the register holds NUL characters: it is no text"
        return Register(name), [
            _notice("register-not-text", "stops", file, 1, what, "save it as CSV in UTF-8")
        ]
    lines, fault = _split(file, text)
    if fault is not None:
        return Register(name), [*notices, fault]
    if not lines:
        what = "the register is empty"
        return Register(name), [
            _notice("register-empty", "stops", file, 1, what, "add a header or remove it")
        ]
    header_line, header = lines[0][0], tuple(_column_name(cell) for cell in lines[0][1])
    notices += _check_header(name, header_line, header)
    if any(n.weight == "stops" for n in notices):
        return Register(name), notices
    rows, remarks = _check_widths(file, header, lines[1:])
    notices += remarks
    rows, refused, remarks = _check_keys(name, rows)
    return Register(name, header, tuple(rows), refused), [*notices, *remarks, *_check_numbers(name, rows)]


def _notice(
    code: str,
    weight: Weight,
    file: str,
    line: int | None,
    what: str,
    remedy: str,
    done: str = "",
    column: int | None = None,
) -> Notice:
    done = done or {"stops": "the campaign is not read", "set aside": "the row is not used"}.get(
        weight, "kept"
    )
    return Notice(code, weight, file, line, column, what, done, remedy)


def _decode(file: str, data: bytes) -> tuple[str, list[Notice]]:
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        return data.decode("utf-16", errors="replace"), []
    try:
        return data.decode("utf-8-sig"), []
    except UnicodeDecodeError as fault:
        line = data.count(b"\n", 0, fault.start) + 1
        what = "the register is not UTF-8"
        notice = _notice("register-encoding", "noted", file, line, what, "save it as UTF-8", "read as CP1252")
        return data.decode("cp1252", errors="replace"), [notice]


def _split(file: str, text: str) -> tuple[list[tuple[int, list[str]]], Notice | None]:
    first = text.lstrip("\r\n").splitlines()[0] if text.strip() else ""
    counts = {mark: first.count(mark) for mark in (",", ";", "\t")}
    separator = max(counts, key=lambda mark: counts[mark])
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=separator, strict=True)
    lines: list[tuple[int, list[str]]] = []
    begins = 1
    try:
        for cells in reader:
            if any(cell.strip() for cell in cells):
                lines.append((begins, [cell.strip() for cell in cells]))
            begins = reader.line_num + 1
    except csv.Error as fault:
        what = f"the quotes do not pair up from here ({fault})"
        return [], _notice("register-quotes", "stops", file, begins, what, "close the quote")
    return lines, None


def _column_name(cell: str) -> str:
    """Return a header as a column name: ``Rest length [mm]`` and ``rest_length_mm`` are ``rest_length``."""
    name = re.sub(r"\s*[\[(]\s*mm\s*[\])]$|_mm$", "", cell.strip().lower())
    return re.sub(r"[\s\-]+", "_", name)


def _check_header(name: str, line: int, header: Sequence[str]) -> list[Notice]:
    file = f"{name}.csv"
    notices = [
        _notice("register-column-missing", "stops", file, line, *_missing_column(column, header))
        for column in REGISTERS[name]
        if column not in header
    ]
    for column, count in Counter(filter(None, header)).items():
        if count > 1:
            what = f"{count} columns are named '{column}'"
            notices.append(_notice("register-column-twice", "stops", file, line, what, "keep one of them"))
    for column in filter(None, header):
        near = nearest(column, KNOWN_COLUMNS[name], 0.8) if column not in KNOWN_COLUMNS[name] else None
        if near is not None and near not in (*header, *REGISTERS[name]):
            what = f"the column '{column}' is not known; did you mean '{near}'?"
            notices.append(
                _notice("register-column-unknown", "noted", file, line, what, f"rename it to '{near}'")
            )
    return notices


def _missing_column(column: str, header: Sequence[str]) -> tuple[str, str]:
    near = nearest(column, [h for h in header if h])
    return f"there is no column '{column}'", f"rename '{near}'?" if near else f"add a column '{column}'"


def _check_widths(
    file: str, header: Sequence[str], lines: Iterable[tuple[int, list[str]]]
) -> tuple[list[RegisterRow], list[Notice]]:
    rows, notices = [], []
    for line, cells in lines:
        extra = cells[len(header) :]
        if len(cells) < len(header) or any(extra):
            what = f"the row has {len(cells)} fields, the header {len(header)}"
            remedy = "put texts with separators in quotes"
            notices.append(_notice("register-row-ragged", "set aside", file, line, what, remedy))
        else:
            rows.append(
                RegisterRow(line, {name: cell for name, cell in zip(header, cells, strict=False) if name})
            )
    return [RegisterRow(row.line, _tidy(row.values)) for row in rows], notices


def _tidy(values: dict[str, str]) -> dict[str, str]:
    return {name: tidy_id(text) if name in ID_COLUMNS else text for name, text in values.items()}


def _check_keys(
    name: str, rows: Sequence[RegisterRow]
) -> tuple[list[RegisterRow], dict[tuple[str, ...], str], list[Notice]]:
    file = f"{name}.csv"
    refused: dict[tuple[str, ...], str] = {}
    notices: list[Notice] = []
    by_key: dict[tuple[str, ...], list[RegisterRow]] = defaultdict(list)
    for row in rows:
        key = key_of(name, row.values)
        if not all(row.get(column) for column in REGISTERS[name]):
            what = f"the row names no {' and '.join(c for c in REGISTERS[name] if not row.get(c))}"
            notices.append(_notice("register-row-nameless", "set aside", file, row.line, what, "fill it in"))
            continue
        reasons = [(c, r) for c in ID_COLUMNS if row.get(c) and (r := refusal_of_id(row.get(c))) is not None]
        if reasons:
            column, reason = reasons[0]
            what = f"the {column} '{shown(row.get(column))}' {reason}"
            refused[key] = what
            notices.append(_notice("id-refused", "set aside", file, row.line, what, "give it another id"))
            continue
        row, remarks = _without_refused_texts(file, row)
        notices += remarks
        by_key[key].append(row)
    kept = []
    for key, group in by_key.items():
        if all(row.values == group[0].values for row in group):
            kept.append(group[0])
        else:
            refused[key] = f"{file} has {len(group)} rows for {' '.join(filter(None, key))} that differ"
        if len(group) > 1:
            notices.append(_twice(file, key, group, key in refused))
    return kept, refused, notices


def _without_refused_texts(file: str, row: RegisterRow) -> tuple[RegisterRow, list[Notice]]:
    """Leave out texts that tables would show beside ids though no id could be like them."""
    refused = {c: r for c in TEXT_COLUMNS if row.get(c) and (r := refusal_of_id(row.get(c))) is not None}
    notices = [
        _notice(
            "text-refused",
            "noted",
            file,
            row.line,
            f"the {column} '{shown(row.get(column))}' {reason}",
            "write it otherwise",
            "left out",
        )
        for column, reason in refused.items()
    ]
    return RegisterRow(row.line, row.values | dict.fromkeys(refused, "")), notices


def _twice(file: str, key: tuple[str, ...], group: Sequence[RegisterRow], differ: bool) -> Notice:
    places = " and ".join(str(row.line) for row in group)
    name = shown(" ".join(filter(None, key)))
    if not differ:
        what = f"lines {places} say the same of {name}"
        return _notice("register-row-repeated", "noted", file, group[1].line, what, "keep one", "read once")
    columns = sorted(c for c in group[0].values if len({row.get(c) for row in group}) > 1)
    what = f"lines {places} say different things of {name} ({', '.join(columns)})"
    done = f"none of them is believed; what belongs to {name} is set aside"
    return _notice("register-row-conflict", "set aside", file, group[1].line, what, "keep one row", done)


def _check_numbers(name: str, rows: Iterable[RegisterRow]) -> list[Notice]:
    if name != "sensors":
        return []
    notices = []
    for row in rows:
        for column in ("rest_length", "rest_length_uncertainty"):
            try:
                rest_length_mm(row, column)
            except UnitError as fault:
                what = shown(f"{column} of {row.get('module')} {row.get('sensor')}: {fault}")
                done, remedy = "taken as unknown; none is invented", "write the unstretched length in mm"
                notices.append(
                    _notice("rest-length-unreadable", "noted", f"{name}.csv", row.line, what, remedy, done)
                )
    return notices


def rest_length_mm(row: RegisterRow | None, column: str = "rest_length") -> float:
    """Return a length of a row of ``sensors.csv`` in mm (a bare number is in mm), NaN where it is empty.

    Raises
    ------
    UnitError
        Where the text is no positive length.
    """
    text = row.get(column) if row is not None else ""
    if not text:
        return float("nan")
    value = _parsed_mm(text if text[-1].isalpha() else f"{text} mm")
    if value < 0 or (value == 0 and column == "rest_length"):
        raise UnitError(f"'{text}' is not a positive length")
    return value


@lru_cache(maxsize=1024)
def _parsed_mm(text: str) -> float:
    """The same few texts are asked for by every recording of a sensor."""
    return parse_quantity(text, ("length",)).value
