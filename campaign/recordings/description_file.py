"""``campaign.toml`` read and checked: every key accounted for, every fault named at once with its line."""

from __future__ import annotations

import re
import tomllib
from dataclasses import dataclass, field, fields
from pathlib import Path

from campaign.notices import CampaignStops, Notice
from campaign.recordings.description import (
    DESCRIPTION_FILE,
    KINDS,
    LIMIT_FAMILIES,
    QUANTITIES,
    READOUT_FAMILIES,
    REFERENCE_FAMILIES,
    SAME_KEYS,
    SHARE_OF_FULL_SCALE,
    TIMESTAMP_UNITS,
    USE_FAMILIES,
    Author,
    ColumnRule,
    Description,
    Geometry,
    LengthReference,
    SignalReference,
)
from campaign.recordings.file_glob import glob_expression, leaves_the_folder
from campaign.recordings.name_pattern import KEYS, PatternError, compile_pattern
from campaign.recordings.plan_table import FORM_CODES, check_plan_file, read_plan
from campaign.recordings.register import shown
from campaign.recordings.toml_tables import CheckedTable, FaultList, suggestion
from campaign.units import QUANTITY_FAMILIES, UnitError, find_unit


def load_description(folder: Path) -> Description:
    """Read and check ``campaign.toml``.

    Parameters
    ----------
    folder
        The campaign folder.

    Returns
    -------
    Description
        Every value checked and in canonical units.

    Raises
    ------
    CampaignStops
        Where the folder or the file is not there or cannot be read, the file is no TOML, or any key or value
        is wrong; it carries all faults found, each with its line where that can be told.
    """
    try:
        data = (folder / DESCRIPTION_FILE).read_bytes()
    except OSError as fault:
        raise CampaignStops([_description_missing(folder, fault)]) from fault
    return read_description(data, shown(folder.resolve().name))


def _description_missing(folder: Path, fault: OSError) -> Notice:
    if not folder.is_dir():
        what, remedy = f"'{folder}' is no folder", "name the campaign folder"
    elif isinstance(fault, FileNotFoundError):
        what = f"'{folder}' has no {DESCRIPTION_FILE}"
        remedy = f"'campaign begin {folder}' writes a first one"
    else:
        what, remedy = f"{DESCRIPTION_FILE} cannot be opened ({fault.strerror})", "make it readable"
    return Notice("no-description", "stops", None, None, None, what, "the campaign is not read", remedy)


def read_description(data: bytes, folder_name: str = "campaign") -> Description:
    """Read a description from the bytes of its file (see :func:`load_description`)."""
    return _read(data, FaultList(DESCRIPTION_FILE, ""), folder_name, to_rehearse=False)


def read_plan_file(data: bytes, name: str) -> Description:
    """Read a plan that is to be rehearsed: a description with ``[plan]`` and without recordings.

    Parameters
    ----------
    data
        The file.
    name
        Of the file, for faults.

    Returns
    -------
    Description
        Its ``planned`` is the design.

    Raises
    ------
    CampaignStops
        With everything that keeps the plan from being rehearsed.
    """
    return _read(data, FaultList(name, "", done="nothing is written"), "Rehearsal", to_rehearse=True)


def _read(data: bytes, faults: FaultList, folder_name: str, to_rehearse: bool) -> Description:
    values = _parse(data, faults)
    if values is None:
        raise CampaignStops(faults.notices)
    description = _read_top(CheckedTable(values, faults), folder_name, to_rehearse)
    if faults.notices:
        raise CampaignStops(faults.notices)
    return description


def _parse(data: bytes, faults: FaultList) -> dict[str, object] | None:
    try:
        faults.text = data.decode("utf-8-sig").replace("\r\n", "\n")
        return tomllib.loads(faults.text)
    except UnicodeDecodeError as fault:
        line = data.count(b"\n", 0, fault.start) + 1
        faults.add("toml-encoding", "the file is not UTF-8", "save it as UTF-8", line)
    except tomllib.TOMLDecodeError as fault:
        what, line_found, column = _syntax_fault(str(fault), faults.text)
        faults.add("toml-syntax", f"the file is no TOML: {what}", "mend the line", line_found, column)
    except RecursionError:
        faults.add("toml-syntax", "the file is no TOML: nested too deeply", "nest tables less deeply")
    return None


def _syntax_fault(message: str, text: str) -> tuple[str, int | None, int | None]:
    what, _, place = message.partition(" (at ")
    if found := re.search(r"line (\d+), column (\d+)", place):
        return what[:1].lower() + what[1:], int(found.group(1)), int(found.group(2))
    return what[:1].lower() + what[1:], text.count("\n") + 1 if "end of document" in place else None, None


@dataclass
class _Remarks:
    """Notices on a description that do not stop it."""

    notices: list[Notice] = field(default_factory=list)

    def note(self, table: CheckedTable, key: str, code: str, what: str, done: str, remedy: str = "") -> None:
        line = table.line(key)
        self.notices.append(Notice(code, "noted", DESCRIPTION_FILE, line, None, what, done, remedy))


def _read_top(top: CheckedTable, folder_name: str, to_rehearse: bool) -> Description:
    remarks = _Remarks()
    _check_format(top, remarks)
    sections = [
        _read_campaign(top.table("campaign"), folder_name, remarks, top),
        _read_recordings(top.table("recordings")),
        _read_reference(top.table("reference"), remarks),
        _read_readout(top.table("readout")),
        _read_use(top.table("use")),
        _read_range(top.table("range")),
        _read_limits(top.table("limits")),
        _read_rest(top),
    ]
    sections.append(_read_plan(top, sections, to_rehearse))
    columns = tuple(_read_column(table) for table in top.tables("columns"))
    top.finish()
    merged = {key: value for section in sections for key, value in section.items()}
    return Description(columns=columns, text=top.faults.text, notices=tuple(remarks.notices), **merged)  # type: ignore[arg-type]


def _check_format(top: CheckedTable, remarks: _Remarks) -> None:
    if "format" not in top.values:
        top.take("format")
        what = "the format of the description is not stated"
        remarks.note(
            top, "format", "format-unstated", what, "taken as format = 1", "write format = 1 at the top"
        )
    elif top.whole_number("format") not in (None, 1):
        top.fault("unknown-format", "format", f"{top.values['format']!r} is not known", "write format = 1")


def _read_campaign(
    table: CheckedTable | None, folder_name: str, remarks: _Remarks, top: CheckedTable
) -> dict[str, object]:
    title = table.text("title") if table is not None else ""
    if not title:
        what = "the campaign has no title"
        remarks.note(
            top, "campaign", "no-title", what, "titled by its folder", 'write title = "…" in [campaign]'
        )
    if table is None:
        return {"title": folder_name}
    simulated, rehearsal = table.truth("simulated"), table.truth("rehearsal")
    values: dict[str, object] = {
        "title": title or folder_name,
        "simulated": simulated or rehearsal,
        "rehearsal": rehearsal,
    }
    values |= {key: table.text(key) for key in ("description", "licence")}
    values |= {key: table.day(key) for key in ("date", "first_day", "last_day")}
    values["authors"] = tuple(_read_author(author) for author in table.tables("authors"))
    table.finish()
    return values


def _read_author(table: CheckedTable) -> Author:
    author = Author(table.text("name"), table.text("affiliation"), table.text("orcid"))
    if not author.name and "name" not in table.values:
        table.fault("value-missing", "name", "an author has no name", 'write name = "…"')
    table.finish()
    return author


def _read_recordings(table: CheckedTable | None) -> dict[str, object]:
    if table is None:
        return {}
    defaults = {f.name: f.default for f in fields(Description)}
    values: dict[str, object] = {
        "files": table.texts("files", defaults["files"]),  # type: ignore[arg-type]
        "names": table.texts("name"),
        "separator": _one_of(table, "separator", _SEPARATORS),
        "decimal": _one_of(table, "decimal", (".", ",")),
        "encoding": _read_encoding(table),
        "header_row": table.whole_number("header_row"),
        "split_where_time_restarts": table.truth("split_where_time_restarts"),
    }
    for pattern in values["files"]:  # type: ignore[attr-defined]
        _check_glob(table, "files", pattern)
    for pattern in values["names"]:  # type: ignore[attr-defined]
        _check_pattern(table, pattern)
    same, kinds = table.table("same"), table.table("kinds")
    values["same"] = _read_same(same) if same is not None else {}
    values["kinds"] = _read_kinds(kinds) if kinds is not None else {}
    table.finish()
    return values


_SEPARATORS = (",", ";", "\t", "|", " ", ":")


def _one_of(table: CheckedTable, key: str, known: tuple[str, ...]) -> str | None:
    value = table.text(key) or None
    if value is None or value in known:
        return value
    table.fault("wrong-value", key, f"{value!r} cannot be used", f"use one of {', '.join(map(repr, known))}")
    return None


def _read_encoding(table: CheckedTable) -> str | None:
    value = table.text("encoding") or None
    if value is None:
        return None
    try:
        "".encode(value)
        b"".decode(value)
    except (LookupError, ValueError):
        known = ("utf-8", "utf-16", "utf-16-le", "utf-16-be", "cp1252", "latin-1", "gbk", "shift_jis")
        table.fault(
            "wrong-value", "encoding", f"'{value}' is no known text encoding", suggestion(value, known)
        )
        return None
    return value


def _check_glob(table: CheckedTable, key: str, pattern: str) -> None:
    if not pattern or leaves_the_folder(pattern):
        what = f"'{pattern}' does not stay in the campaign folder"
        table.fault("wrong-value", key, what, "name files from the campaign folder, such as trials/**/*.csv")
        return
    try:
        glob_expression(pattern)
    except re.error:
        table.fault("wrong-value", key, f"'{pattern}' is no file pattern", "check what stands in […]")


def _check_pattern(table: CheckedTable, pattern: str) -> None:
    try:
        compile_pattern(pattern)
    except PatternError as fault:
        word = str(fault)
        if word in ("{", "}"):
            what, remedy = f"'{pattern}' has a '{word}' without its partner", "pair the braces"
        elif word:
            what, remedy = f"'{pattern}' has the unknown key '{word}'", suggestion(word, KEYS)
        else:
            what, remedy = f"'{pattern}' holds no key", "name what the file names carry, such as {module}"
        table.fault("wrong-pattern", "name", what, remedy)


def _read_same(table: CheckedTable) -> dict[str, str]:
    same = {key: word for key in SAME_KEYS if (word := table.word(key))}
    if (kind := same.get("kind")) is not None and not kind.strip():
        table.fault("wrong-value", "kind", "is empty", "name a kind of trial")
    table.finish()
    return same


def _read_kinds(table: CheckedTable) -> dict[str, str]:
    """Read the lab's own words; what they stand for must be ours."""
    return {word: kind for word in table.values if (kind := table.choice(word, KINDS, "kind")) is not None}


def _read_column(table: CheckedTable) -> ColumnRule:
    quantity = table.choice("quantity", QUANTITIES, "quantity")
    if "quantity" not in table.values:
        table.fault("value-missing", "quantity", "is not stated", f"write one of {', '.join(QUANTITIES)}")
    rule = ColumnRule(
        quantity=quantity or "ignore",
        header=table.text("header") or None,
        position=table.whole_number("position"),
        unit=table.text("unit") or None,
        thousands=_one_of(table, "thousands", (".", ",", "'", "’", " ", "\u00a0", "\u202f")),
        decimal=_one_of(table, "decimal", (".", ",")),
        missing=table.texts("missing"),
        files=table.text("files") or None,
        sensor=table.word("sensor") or None,
        repetition=table.whole_number("repetition"),
        node=table.word("node") or None,
        along=table.texts("along"),
        offset_mm=table.quantity("offset", ("length",), bare_unit="mm", default=0.0),
    )
    _check_column(table, rule, quantity)
    table.finish()
    return rule


def _check_column(table: CheckedTable, rule: ColumnRule, quantity: str | None) -> None:
    if rule.header is None and rule.position is None and "position" not in table.values:
        table.fault("value-missing", "header", "neither header nor position is stated", "state one of them")
    if rule.header is not None and (unknown := set(_braces(rule.header)) - {"sensor", "repetition", "node"}):
        word = sorted(unknown)[0]
        known = ("sensor", "repetition", "node")
        table.fault("wrong-pattern", "header", f"has the unknown key '{word}'", suggestion(word, known))
    if rule.files is not None:
        _check_glob(table, "files", rule.files)
    if rule.unit is None or quantity is None:
        return
    if quantity == "ignore":
        return
    if quantity == "time" and rule.unit.casefold() in TIMESTAMP_UNITS:
        return
    try:
        find_unit(rule.unit, QUANTITY_FAMILIES[quantity])
    except UnitError as fault:
        table.fault("wrong-unit", "unit", str(fault), f"state a unit of {quantity}")


def _braces(header: str) -> list[str]:
    return re.findall(r"\{(\w*)\}", header)


def _uncertainty(table: CheckedTable, key: str, families: tuple[str, ...]) -> tuple[float, str]:
    value, unit = table.quantity_and_unit(key, families)
    if value < 0:
        table.fault(
            "wrong-value", key, "a standard uncertainty is not negative", "write it as a positive number"
        )
    return value, unit


_ALONE = "taken as the random part of each reading's standard uncertainty"


def _read_reference(table: CheckedTable | None, remarks: _Remarks) -> dict[str, object]:
    if table is None:
        return {}
    values: dict[str, object] = {
        "length_reference": _read_length_reference(table, remarks),
        "signal_reference": _read_signal_reference(table, remarks),
        "node_reference_mm": _uncertainty(table, "node", ("length",))[0],
    }
    table.finish()
    return values


def _note_alone(table: CheckedTable, key: str, remarks: _Remarks) -> None:
    what = f"[reference] {key} gives one value alone"
    remedy = (
        "state scale, zero, backlash and random apart"
        if key == "length"
        else "state gain, offset, resolution"
    )
    remarks.note(table, key, "reference-one-value", what, _ALONE, remedy)


def _read_length_reference(reference: CheckedTable, remarks: _Remarks) -> LengthReference:
    if not isinstance(reference.values.get("length"), dict):
        random = _uncertainty(reference, "length", ("length",))[0]
        if "length" in reference.values:
            _note_alone(reference, "length", remarks)
        return LengthReference(random_mm=random)
    table = reference.table("length")
    assert table is not None
    found = LengthReference(
        scale_relative=_uncertainty(table, "scale", ("ratio",))[0],
        zero_mm=_uncertainty(table, "zero", ("length",))[0],
        backlash_mm=_uncertainty(table, "backlash", ("length",))[0],
        random_mm=_uncertainty(table, "random", ("length",))[0],
        certificate=table.text("certificate"),
        calibrated=table.day("calibrated"),
    )
    table.finish()
    return found


def _read_signal_reference(reference: CheckedTable, remarks: _Remarks) -> SignalReference:
    families = QUANTITY_FAMILIES["signal"]
    if not isinstance(reference.values.get("signal"), dict):
        random, unit = _uncertainty(reference, "signal", families)
        if "signal" in reference.values:
            _note_alone(reference, "signal", remarks)
        return SignalReference(random=random, unit=unit)
    table = reference.table("signal")
    assert table is not None
    gain = _uncertainty(table, "gain", ("ratio",))[0]
    parts = {key: _uncertainty(table, key, families) for key in ("offset", "resolution", "random")}
    units = sorted({unit for _, unit in parts.values() if unit})
    if len(units) > 1:
        table.fault("wrong-unit", "offset", f"units differ ({' and '.join(units)})", "state all of one kind")
    table.finish()
    return SignalReference(
        gain, parts["offset"][0], parts["resolution"][0], "".join(units[:1]), parts["random"][0]
    )


def _read_readout(table: CheckedTable | None) -> dict[str, object]:
    if table is None:
        return {}
    for key, families in READOUT_FAMILIES.items():
        table.quantity(key, families)
    table.text("instrument")
    table.choice("model", ("parallel", "series"), "model")
    table.truth("open_correction")
    table.finish()
    return {"readout": table.words()}


def _read_use(table: CheckedTable | None) -> dict[str, object]:
    if table is None:
        return {}
    for key, families in USE_FAMILIES.items():
        table.quantity(key, families)
    table.choice("direction", ("unknown", "rising", "falling"), "direction")
    table.finish()
    return {"use": table.words()}


def _read_range(table: CheckedTable | None) -> dict[str, object]:
    if table is None:
        return {}
    values = {
        "range_strain": table.quantity("strain", ("strain",)),
        "range_elongation_mm": table.quantity("elongation", ("length",), bare_unit="mm"),
    }
    for key, value in zip(("strain", "elongation"), values.values(), strict=True):
        if value <= 0:
            table.fault("wrong-value", key, "a full scale is greater than zero", "write the rated full scale")
    table.finish()
    return dict(values)


def _read_limits(table: CheckedTable | None) -> dict[str, object]:
    if table is None:
        return {}
    values: dict[str, object] = {
        "limits": {
            key: table.quantity_and_unit(key, families)
            for key, families in LIMIT_FAMILIES.items()
            if key in table.values
        }
    }
    for key in LIMIT_FAMILIES:
        table.take(key)
    margins = table.table("margins")
    if margins is not None:
        values["margins"] = {key: _read_margin(margins, key) for key in margins.values}
    table.finish()
    return values


def _read_margin(margins: CheckedTable, key: str) -> tuple[float, str]:
    """Read an equivalence margin: a limit's own units first, then any known one; per cent is a ratio."""
    any_known = (*SHARE_OF_FULL_SCALE, "ratio", *REFERENCE_FAMILIES, "time", *QUANTITY_FAMILIES["signal"])
    families = (*LIMIT_FAMILIES.get(key, ()), *any_known)
    return margins.quantity_and_unit(key, families)


def _read_rest(top: CheckedTable) -> dict[str, object]:
    values: dict[str, object] = {}
    geometry = top.table("geometry")
    if geometry is not None:
        tables = [geometry.table(name) for name in geometry.values]
        values["geometries"] = {
            table.path[-1]: _read_geometry(table) for table in tables if table is not None
        }
    if (electrode := top.table("electrode")) is not None:
        values["electrode_resistance_ohm"] = electrode.quantity("resistance", ("resistance",))
        electrode.finish()
    if (costs := top.table("costs")) is not None:
        values["costs"] = {key: costs.number(key) for key in _COSTS if costs.take(key) is not None}
        costs.finish()
    if (site := top.table("site")) is not None:
        values["plot_library"] = site.text("plot_library") or None
        site.finish()
    values["earlier"] = tuple(_read_earlier(table) for table in top.tables("earlier"))
    return values


def _read_plan(top: CheckedTable, sections: list[dict[str, object]], to_rehearse: bool) -> dict[str, object]:
    """Read ``[plan]``; what only a rehearsal needs of it does not stop a description."""
    if to_rehearse:
        check_plan_file(top)
    if (table := top.table("plan")) is None:
        return {}
    read = {key: value for section in sections for key, value in section.items()}
    geometries: dict[str, Geometry] = read.get("geometries", {})  # type: ignore[assignment]
    range_strain: float = read.get("range_strain", float("nan"))  # type: ignore[assignment]
    planned, faults = read_plan(table, geometries, range_strain)
    top.faults.notices += [fault for fault in faults if to_rehearse or fault.code in FORM_CODES]
    return {"plan": dict(table.values), "planned": planned}


_COSTS = ("module", "sensor", "repetition")


def _read_earlier(table: CheckedTable) -> dict[str, str]:
    """Return ``folder`` or ``archive`` as written, one of the two."""
    stated: dict[str, str] = {key: table.text(key) for key in ("folder", "archive") if key in table.values}
    remedy = "name an earlier campaign's folder or archive"
    if not stated:
        table.fault("value-missing", "folder", "is not stated", remedy)
    elif len(stated) > 1:
        table.fault("wrong-value", "archive", "stands beside a folder", "name one of the two")
    elif "archive" in stated and not stated["archive"]:
        table.fault("value-missing", "archive", "is empty", remedy)
    table.finish()
    return stated


def _is_number(value: object) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool)


def _read_geometry(table: CheckedTable) -> Geometry:
    nodes = table.table("nodes")
    places = _read_nodes(nodes) if nodes is not None else {}
    if nodes is None:
        table.fault("value-missing", "nodes", "are not stated", "write nodes = { A = [0, 0], B = [90, 0] }")
    datum = table.texts("datum")
    if any(node not in places for node in datum) or len(datum) not in (0, 2) or len(set(datum)) != len(datum):
        known = ", ".join(places)
        table.fault(
            "wrong-value", "datum", f"{list(datum)} are not two of the nodes ({known})", "name two nodes"
        )
    table.finish()
    return Geometry(table.path[-1], places, datum)


def _read_nodes(nodes: CheckedTable) -> dict[str, tuple[float, float]]:
    places: dict[str, tuple[float, float]] = {}
    for name in nodes.values:
        place = nodes.take(name)
        if isinstance(place, list) and len(place) == 2 and all(_is_number(value) for value in place):
            places[name] = (float(place[0]), float(place[1]))
        else:
            nodes.fault("wrong-type", name, f"{place!r} is no place", "write x and y in mm, such as [90, 0]")
    return places
