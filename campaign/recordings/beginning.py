"""A first ``campaign.toml``: what a tree of recordings gives away, every guess marked as a guess."""

from __future__ import annotations

import json
import re
from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from itertools import takewhile
from pathlib import Path

import numpy as np

from campaign.notices import CampaignStops, Notice
from campaign.recordings.columns import ColumnPlan, TablePlan, plan_columns
from campaign.recordings.description import DESCRIPTION_FILE, KINDS, ColumnRule, Description
from campaign.recordings.dialect import Layout, find_layout
from campaign.recordings.encoding import plain_text
from campaign.recordings.folder import list_files
from campaign.recordings.name_guess import NameGuess, guess_pattern, kind_of_word
from campaign.recordings.name_pattern import compile_pattern, read_name
from campaign.recordings.register import REGISTERS, shown
from campaign.units import FAMILIES, QUANTITY_FAMILIES, split_header

ENDINGS = (".csv", ".txt", ".tsv", ".dat", ".log", ".asc")
"""Endings under which recordings are looked for."""

SAMPLED_FILES = 40
"""Recordings that are looked into, spread over the tree."""

SAMPLED_BYTES = 200_000
"""Bytes of each that are looked at."""


@dataclass(frozen=True)
class Look:
    """What one recording gives away; ``wide`` is the guessed pattern of headers with a sensor in them."""

    file: str
    layout: Layout
    plan: TablePlan
    wide: str | None = None


def write_first_description(folder: Path) -> Path:
    """Look at a tree of recordings and write a first ``campaign.toml`` into it.

    Parameters
    ----------
    folder
        The folder that holds the recordings; its files are left as they are.

    Returns
    -------
    pathlib.Path
        The file written.

    Raises
    ------
    CampaignStops
        Where the folder is none, has a description already, or holds nothing that looks like a recording.
    """
    if not folder.is_dir():
        raise _stops(
            "no-description", f"'{folder}' is no folder", "name the folder that holds the recordings"
        )
    path = folder / DESCRIPTION_FILE
    if path.exists() or path.is_symlink():
        raise _stops("description-there", f"'{path}' is there already", "edit it, or move it away")
    text = first_description(folder)
    with path.open("x", encoding="utf-8", newline="\n") as stream:
        stream.write(text)
    return path


def _stops(code: str, what: str, remedy: str) -> CampaignStops:
    return CampaignStops([Notice(code, "stops", None, None, None, what, "nothing is written", remedy)])


def first_description(folder: Path) -> str:
    """Return the text of a first description of a folder (see :func:`write_first_description`)."""
    files = [(name, location) for name, location in list_files(folder) if _may_be_recording(name)]
    if not files:
        what = f"no file of '{folder}' ends in {', '.join(ENDINGS)}"
        raise _stops("no-recordings", what, "put the recordings there, or write campaign.toml by hand")
    ending = Counter(_ending(name) for name, _ in files).most_common(1)[0][0]
    chosen = [(name, location) for name, location in files if _ending(name) == ending]
    names = [name for name, _ in chosen]
    looks = _with_wide_columns([look for file in _spread(chosen) if (look := _look(*file)) is not None])
    others = Counter(_ending(name) for name, _ in files if _ending(name) != ending)
    lines = [*_head(folder), *_recordings(names, others, looks, folder), *_columns(looks), *_tail()]
    return re.sub(r"\n{3,}", "\n\n", "\n".join(lines) + "\n")


def _may_be_recording(name: str) -> bool:
    parts = name.split("/")
    register = len(parts) == 1 and parts[0].removesuffix(".csv") in REGISTERS
    hidden = any(part.startswith(".") for part in parts)
    return not register and not hidden and parts[0] != "notes" and _ending(name).lower() in ENDINGS


def _ending(name: str) -> str:
    return Path(name).suffix


def _spread(files: Sequence[tuple[str, Path]]) -> list[tuple[str, Path]]:
    """Some of many files, from all over the tree."""
    step = max(1, len(files) // SAMPLED_FILES)
    return list(files[::step])[:SAMPLED_FILES]


def _look(name: str, location: Path) -> Look | None:
    """Look into one recording; ``None`` where it cannot be read as a table."""
    try:
        with location.open("rb") as stream:
            data = stream.read(SAMPLED_BYTES)
    except OSError:
        return None
    whole = data if len(data) < SAMPLED_BYTES else data[: data.rfind(b"\n") + 1]
    text = plain_text(whole)
    if not text.readable:
        return None
    layout = find_layout(text.data, Description("look"), by_position=False)
    if not layout.readable:
        layout = find_layout(text.data, Description("look"), by_position=True)
    return Look(name, layout, plan_columns(layout, (), name)) if layout.readable else None


def _with_wide_columns(looks: Sequence[Look]) -> list[Look]:
    """Take signals side by side for one column a sensor, where headers look so."""
    return [
        replace(look, wide=wide, plan=plan_columns(look.layout, [ColumnRule("signal", wide)], look.file))
        if (wide := wide_header(_unread_signals(look))) is not None
        else look
        for look in looks
    ]


def _unread_signals(look: Look) -> list[str]:
    """Headers with a unit of capacitance that are not recognised."""
    recognised = {column.header for column in look.plan.columns}
    units = FAMILIES["capacitance"].scales
    headers = look.layout.header or ()
    return [h.strip() for h in headers if h not in recognised and (split_header(h).unit or "") in units]


def wide_header(headers: Sequence[str]) -> str | None:
    """Return the pattern, ``C_{sensor} (pF)``, of headers that differ in one word only, else ``None``.

    Parameters
    ----------
    headers
        At least two of them, else there is nothing to compare.
    """
    if len(headers) < 2 or any(set(header) & set("{}*") for header in headers):
        return None
    begin, end = _shared_beginning(headers), _shared_beginning([header[::-1] for header in headers])
    words = [header[begin : len(header) - end] for header in headers]
    if not all(words) or len(set(words)) < len(words):
        return None
    return f"{headers[0][:begin]}{{sensor}}{headers[0][len(headers[0]) - end :]}"


def _shared_beginning(texts: Sequence[str]) -> int:
    """Characters that texts begin with alike, up to the last that is neither letter nor digit."""
    alike = takewhile(lambda characters: len(set(characters)) == 1, zip(*texts, strict=False))
    shared = "".join(characters[0] for characters in alike)
    return len(re.sub(r"[^\W_]+$", "", shared))


def _quoted(text: str) -> str:
    return json.dumps(shown(text), ensure_ascii=False)


def _head(folder: Path) -> Iterator[str]:
    yield "# A first description, made by looking at the recordings."
    yield "# Lines marked 'guess' are guesses: look them over."
    yield "format = 1"
    yield ""
    yield "[campaign]"
    yield f"title = {_quoted(folder.resolve().name)}   # guess: the folder's name"
    yield ""


def _recordings(
    names: Sequence[str], others: Counter[str], looks: Sequence[Look], folder: Path
) -> Iterator[str]:
    guess = _agreeing(guess_pattern(names), looks)
    yield "[recordings]"
    yield f"files = {_quoted(_glob(names))}   # guess: recordings matched: {len(names)}"
    for ending, count in others.most_common():
        yield f"# not matched: {count} files that end in {_quoted(ending)}"
    if guess is not None:
        yield f"name = {_quoted(guess.pattern)}   # guess: {_share(guess)}, such as {_quoted(guess.example)}"
    yield from _dialects(looks)
    yield from _same(guess, looks, folder)
    yield from _kinds(guess, looks)
    yield ""


def _glob(names: Sequence[str]) -> str:
    ending = _ending(names[0])
    if all("/" not in name for name in names):
        return f"*{ending}"
    tops = {name.split("/", 1)[0] if "/" in name else "" for name in names}
    return f"{tops.pop()}/**/*{ending}" if len(tops) == 1 else f"**/*{ending}"


def _share(guess: NameGuess) -> str:
    return f"fits {guess.matched} of {guess.names} names"


def _agreeing(guess: NameGuess | None, looks: Sequence[Look]) -> NameGuess | None:
    """Leave out of a guessed pattern what the preambles of the recordings never agree with."""
    if guess is None:
        return None
    pattern = guess.pattern
    for key in guess.keys:
        said = [(_read_by(guess, look).get(key), look.layout.preamble.get(key)) for look in looks]
        compared = [
            (by_name, inside) for by_name, inside in said if by_name is not None and inside is not None
        ]
        if compared and not any(_alike(by_name, inside) for by_name, inside in compared):
            pattern = pattern.replace(f"{{{key}}}", "{ignore}")
    agreeing = replace(guess, pattern=pattern)
    return agreeing if set(agreeing.keys) - {"ignore"} else None


def _read_by(guess: NameGuess, look: Look) -> dict[str, str]:
    words = tuple(word for word, _ in guess.kinds)
    return read_name(look.file, [compile_pattern(guess.pattern)], words).values


def _alike(by_name: str, inside: str) -> bool:
    return by_name.lstrip("0") == inside.strip().lstrip("0")


_NAMES_OF_SEPARATORS = {"\t": "tab", " ": "blank", ",": "comma", ";": "semicolon"}


def _dialects(looks: Sequence[Look]) -> Iterator[str]:
    """Say what separators and decimal signs were found; they are found out file by file and need no key."""
    counts = Counter((look.layout.separator, look.layout.decimal) for look in looks)
    for (separator, decimal), count in counts.most_common():
        name = _NAMES_OF_SEPARATORS.get(separator, separator)
        sign = "point" if decimal == "." else "comma"
        yield f"# {count} of {len(looks)} looked into: fields separated by {name}, decimal {sign}"


_NEEDED = ("module", "sensor", "kind")


def _same(guess: NameGuess | None, looks: Sequence[Look], folder: Path) -> Iterator[str]:
    """Fill in what nothing names: it then holds for all recordings."""
    named = set(guess.keys) if guess is not None else set()
    named = named.union(*(_named_inside(look) for look in looks))
    guesses = {"module": folder.resolve().name, "sensor": "S1", "kind": "staircase"}
    missing = [key for key in _NEEDED if key not in named]
    if missing:
        yield ""
        yield "[recordings.same]"
    for key in missing:
        yield f"{key} = {_quoted(guesses[key])}   # guess: nothing names the {key}, so it is one for all"


def _named_inside(look: Look) -> set[str]:
    """Keys that the recording itself names: preamble, constant columns, headers with a sensor."""
    inside = set(look.layout.preamble)
    inside |= {column.quantity for column in look.plan.columns if column.content == "identity"}
    return inside | ({"sensor"} if any(column.sensor for column in look.plan.columns) else set())


def _kinds(guess: NameGuess | None, looks: Sequence[Look]) -> Iterator[str]:
    """Translate the lab's own words, those of the names and those inside the recordings."""
    words = {word for word, _ in guess.kinds} if guess is not None and "kind" in guess.keys else set()
    words |= {look.layout.preamble["kind"].strip() for look in looks if look.layout.preamble.get("kind")}
    own = [(word, kind_of_word(word)) for word in sorted(words) if word.lower() not in KINDS]
    if own:
        yield ""
        yield "[recordings.kinds]"
    for word, kind in own:
        line = f"{_quoted(word)} = {_quoted(kind or 'staircase')}"
        yield f"{line}   # guess" if kind else f"# {line}   # what kind of trial this word means is not known"


def _columns(looks: Sequence[Look]) -> Iterator[str]:
    """Describe the columns: those recognised as comments, the others as tables to fill in."""
    described: set[object] = set()
    taken = {column.quantity for look in looks for column in look.plan.columns}
    for look in looks:
        recognised = {column.position: column for column in look.plan.columns}
        header = look.layout.header
        for position in range(1, look.layout.fields + 1):
            name = header[position - 1] if header is not None else None
            key = position if name is None else name.strip()
            if key in described or key == "":
                continue
            described.add(key)
            if look.wide is not None and position in recognised and recognised[position].sensor is not None:
                if look.wide not in described:
                    described.add(look.wide)
                    yield from _table(look, position, look.wide, "signal", "", "one column a sensor")
            elif position in recognised and name is not None:
                yield _recognised(name, recognised[position])
            else:
                quantity, unit, why = _guess_quantity(look, position, name, taken)
                taken.add(quantity)
                yield from _table(look, position, name, quantity, unit, why)


def _recognised(name: str, column: ColumnPlan) -> str:
    unit = f" in {column.unit.spelling}" if column.unit is not None else ""
    return f"# column {_quoted(name)}: {column.quantity}{unit} by its usual header; no table is needed"


def _table(look: Look, position: int, name: str | None, quantity: str, unit: str, why: str) -> Iterator[str]:
    """Write one ``[[columns]]`` table."""
    yield ""
    yield "[[columns]]"
    by_name = name is not None and (name == look.wide or not set(name) & set("{}"))
    yield f"header = {_quoted(name.strip())}" if name is not None and by_name else f"position = {position}"
    example = look.layout.sample[0][position - 1] if look.layout.sample else ""
    yield f"quantity = {_quoted(quantity)}   # guess: {why}; its first value is {_quoted(example[:40])}"
    if unit:
        yield f"unit = {_quoted(unit)}   # guess"


_BY_UNIT = ("temperature", "pressure", "force", "signal", "length")
"""Quantities that the unit in an unusual header hints at, in the order in which they are tried."""


def _guess_quantity(look: Look, position: int, name: str | None, taken: set[str]) -> tuple[str, str, str]:
    """Guess what a column is, by the unit in its header or, without a header, by its values."""
    if name is None:
        return _guess_by_values(look, position)
    unit = split_header(name).unit or ""
    for quantity in _BY_UNIT:
        families = ("capacitance",) if quantity == "signal" else QUANTITY_FAMILIES[quantity]
        if unit and quantity not in taken and any(unit in FAMILIES[family].scales for family in families):
            return quantity, unit, "by its unit"
    return "ignore", "", "not recognised"


def _guess_by_values(look: Look, position: int) -> tuple[str, str, str]:
    """Guess what a column without a header is: a first column that only grows is a time."""
    try:
        values = np.array([float(row[position - 1].replace(",", ".")) for row in look.layout.sample])
    except (ValueError, IndexError):
        return "ignore", "", "not numbers throughout"
    if position == 1 and values.size > 2 and bool(np.all(np.diff(values) > 0)):
        return "time", "ms" if float(np.median(np.diff(values))) >= 1 else "s", "it only grows"
    return "ignore", "", "nothing says what it is"


def _tail() -> Iterator[str]:
    yield ""
    yield "# What else can be said; nothing of it is guessed:"
    yield "#"
    yield "# [reference]                    # standard uncertainties of what counts as known"
    yield '# length = { scale = "0.0005", zero = "0.05 mm", backlash = "0.02 mm", random = "0.01 mm" }'
    yield '# signal = { gain = "0.001", offset = "0.01 pF", resolution = "0.001 pF" }'
    yield "#"
    yield "# [range]"
    yield "# strain = 0.40                  # rated full scale"
    yield "#"
    yield "# [limits]"
    yield '# linearity = "2 %FSO"'
    yield "#"
    yield "# sensors.csv beside this file: module,sensor,position,rest_length (else all stays in mm)"
    yield "# modules.csv beside this file: module,generation,batch"
