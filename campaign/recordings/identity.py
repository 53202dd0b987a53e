"""Who says which trial a recording is: registers, preamble, name, constant columns, description, in order.

Nothing is guessed. Where two of them disagree, or none says what is needed, the recording is set aside and
the notice shows what each one says.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field

from campaign.notices import Notice
from campaign.recordings.description import KINDS, Description
from campaign.recordings.name_pattern import SET_POINTS, NamePattern, NameReading, compile_pattern, read_name
from campaign.recordings.name_pattern import same_reading as differing_keys
from campaign.recordings.recording import Recording
from campaign.recordings.register import (
    FATE_SET_ASIDE,
    ID_COLUMNS,
    RegisterRow,
    Registers,
    plain_path,
    refusal_of_id,
    shown,
    tidy_id,
)
from campaign.recordings.toml_tables import suggestion

COMPARED_KEYS = ("kind", "module", "sensor", "repetition", "session", "generation", "batch")
"""What must not be said in two ways."""

CARRIED_KEYS = ("started", "channel", "position")
"""What is taken from the first that says it."""

SOLE_GENERATION = "generation 1"
"""Name of the generation where the campaign names none."""

BY_REQUEST = "left-out-by-request"
"""Code of the notice on a recording with ``use = no``: it never changes the exit status."""

SET_ASIDE_BY_THE_LAB = frozenset({BY_REQUEST, "module-set-aside", "sensor-set-aside"})
"""Codes of notices on what is sound but set aside by a register: it can be put back, to compare."""

NO = frozenset({"no", "n", "false", "0", "non", "nein"})
YES = frozenset({"", "yes", "y", "true", "1", "oui", "ja"})


@dataclass(frozen=True)
class Statement:
    """What one source says of a recording.

    Attributes
    ----------
    source
        In words, for notices: ``"trials.csv, line 4"``, ``"the preamble"``, ``"the name"``, ….
    values
        What it says, by key.
    yields
        Whether it gives way to a name or a register without a conflict (``[recordings.same]`` does).
    """

    source: str
    values: Mapping[str, str]
    yields: bool = False


@dataclass(frozen=True)
class Identification:
    """What is settled of a recording.

    Attributes
    ----------
    file
        The recording.
    values
        Settled values by key (``module``, ``kind``, …); a key that nobody names is absent.
    sources
        Who said it, by key.
    set_points
        Conditions that the name states (``length``, ``pressure``, …), as written.
    notices
        Remarks; one of weight ``"set aside"`` means that the recording is not used.
    """

    file: str
    values: dict[str, str] = field(default_factory=dict)
    sources: dict[str, str] = field(default_factory=dict)
    set_points: dict[str, str] = field(default_factory=dict)
    notices: tuple[Notice, ...] = ()

    @property
    def reasons(self) -> tuple[str, ...]:
        """Codes of the notices that set the recording aside."""
        return tuple(notice.code for notice in self.notices if notice.weight == "set aside")

    @property
    def settled(self) -> bool:
        """Whether it is known which trial it is, though the lab itself may have set it aside."""
        return set(self.reasons) <= SET_ASIDE_BY_THE_LAB


@dataclass(frozen=True)
class NamingRules:
    """What is needed to identify a recording, made once a campaign.

    Attributes
    ----------
    description, registers
        What the lab says.
    patterns
        Compiled patterns of names.
    kinds
        Word in lower case → our kind: ours and the lab's own.
    generations_are_named
        Whether registers, patterns or description name generations: one without is then set aside.
    """

    description: Description
    registers: Registers
    patterns: tuple[NamePattern, ...]
    kinds: dict[str, str]
    generations_are_named: bool
    trial_rows: dict[tuple[str, ...], RegisterRow]
    module_rows: dict[tuple[str, ...], RegisterRow]
    sensor_rows: dict[tuple[str, ...], RegisterRow]


def naming_rules(description: Description, registers: Registers) -> NamingRules:
    """Prepare the identification of a campaign's recordings."""
    patterns = tuple(compile_pattern(text) for text in description.names)
    kinds = {kind: kind for kind in KINDS} | {word.lower(): kind for word, kind in description.kinds.items()}
    named = (
        "generation" in description.same
        or any("generation" in pattern.keys for pattern in patterns)
        or any(row.get("generation") for row in (*registers.modules.rows, *registers.trials.rows))
    )
    return NamingRules(
        description,
        registers,
        patterns,
        kinds,
        named,
        registers.trials.by_key(),
        registers.modules.by_key(),
        registers.sensors.by_key(),
    )


def identify(recording: Recording, rules: NamingRules) -> Identification:
    """Settle which trial a recording is.

    Parameters
    ----------
    recording
        As read; its preamble and constant columns are heard.
    rules
        From :func:`naming_rules`.

    Returns
    -------
    Identification
        ``sensor`` may be absent: the columns of a wide file name their sensors themselves.
    """
    file = recording.file
    name = read_name(file, rules.patterns, tuple(rules.kinds))
    row = rules.trial_rows.get((plain_path(file),))
    statements = tuple(_statements(recording, name, row, rules))
    values, sources, notices = _settle(file, statements)
    notices += _check_name(file, name)
    notices += _check_row(file, row, rules)
    notices += _translate(file, values, sources, rules)
    notices += _check_ids(file, values, sources)
    notices += _leave_out_refused_texts(file, values, sources)
    notices += _add_module(file, values, sources, rules)
    notices += _check_needed(file, values, name, rules)
    set_points = {key: name.values[key] for key in SET_POINTS if key in name.values}
    return Identification(file, values, sources, set_points, tuple(notices))


def _statements(
    recording: Recording, name: NameReading, row: RegisterRow | None, rules: NamingRules
) -> Iterator[Statement]:
    """Yield what each source says, in falling order of precedence."""
    if row is not None:
        yield Statement(f"trials.csv, line {row.line}", row.values)
    yield Statement("the preamble", recording.preamble)
    yield Statement("the name", name.values)
    yield Statement("a constant column", recording.constants)
    yield Statement("[recordings.same]", rules.description.same, yields=True)


def _settle(
    file: str, statements: tuple[Statement, ...]
) -> tuple[dict[str, str], dict[str, str], list[Notice]]:
    values: dict[str, str] = {}
    sources: dict[str, str] = {}
    notices: list[Notice] = []
    for key in (*COMPARED_KEYS, *CARRIED_KEYS):
        said = [(s, tidy_id(s.values[key])) for s in statements if s.values.get(key, "").strip()]
        if not said:
            continue
        values[key], sources[key] = said[0][1], said[0][0].source
        others = [(s, v) for s, v in said[1:] if _plain(key, v) != _plain(key, values[key])]
        others = [(s, v) for s, v in others if not (s.yields and _outranks_same(sources[key]))]
        if others and key in COMPARED_KEYS:
            notices.append(_conflict(file, key, [said[0], *others]))
    return values, sources, notices


def _outranks_same(source: str) -> bool:
    """``[recordings.same]`` is for what no name or register says."""
    return source == "the name" or source.startswith("trials.csv")


def _plain(key: str, value: str) -> str:
    if key == "repetition" and value.isascii() and value.isdigit():
        return str(int(value))
    return value.lower() if key == "kind" else value


def _conflict(file: str, key: str, said: list[tuple[Statement, str]]) -> Notice:
    what = f"the {key} is " + " but ".join(f"'{shown(v)}' by {s.source}" for s, v in said)
    done, remedy = "nothing is guessed: not used", "mend the one that is wrong"
    return Notice("identity-conflict", "set aside", file, None, None, what, done, remedy)


def _check_name(file: str, name: NameReading) -> list[Notice]:
    if not name.ambiguous:
        return []
    first, second = name.ambiguous
    keys = differing_keys(first, second)
    readings = " or as ".join(
        ", ".join(f"{k} '{shown(r.get(k, ''))}'" for k in keys) for r in (first, second)
    )
    what = f"the pattern '{name.pattern}' reads the name as {readings}"
    remedy = "use a pattern that reads it in one way, or name the file in trials.csv"
    return [Notice("name-ambiguous", "set aside", file, None, None, what, "not used", remedy)]


def _check_row(file: str, row: RegisterRow | None, rules: NamingRules) -> list[Notice]:
    reason = rules.registers.trials.refused.get((plain_path(file),))
    if reason is not None:
        return [_aside(file, "register-row-refused", reason, "mend the row")]
    if row is None or row.get("use").lower() in YES:
        return []
    if row.get("use").lower() not in NO:
        what = f"trials.csv, line {row.line}: use is '{shown(row.get('use'))}', neither yes nor no"
        return [Notice("use-unclear", "set aside", file, None, None, what, "not used", "write yes or no")]
    if not row.get("reason"):
        what = f"trials.csv, line {row.line}: use = no, and no reason is given"
        return [Notice("reason-missing", "set aside", file, None, None, what, "not used", "write the reason")]
    what = f"left out by request: {shown(row.get('reason'))}"
    return [Notice(BY_REQUEST, "set aside", file, None, None, what, "not used")]


def _translate(
    file: str, values: dict[str, str], sources: Mapping[str, str], rules: NamingRules
) -> list[Notice]:
    """Turn kind and repetition into our words, in place."""
    notices = []
    if (word := values.get("kind")) is not None:
        if (kind := rules.kinds.get(word.lower())) is None:
            what = f"'{shown(word)}' ({sources['kind']}) is no known kind of trial"
            remedy = suggestion(word, tuple(rules.kinds)) + "; own words go into [recordings.kinds]"
            notices.append(Notice("kind-unknown", "set aside", file, None, None, what, "not used", remedy))
            del values["kind"]
        else:
            values["kind"] = kind
    if (number := values.get("repetition")) is not None:
        if number.isascii() and number.isdigit() and len(number) < 10:
            values["repetition"] = str(int(number))
        else:
            what = f"the repetition '{shown(number)}' ({sources['repetition']}) is no whole number"
            remedy = "number the repetitions"
            notices.append(
                Notice("repetition-unreadable", "set aside", file, None, None, what, "not used", remedy)
            )
            del values["repetition"]
    return notices


def _check_ids(file: str, values: Mapping[str, str], sources: Mapping[str, str]) -> list[Notice]:
    return [
        notice
        for key in ID_COLUMNS
        if key in values and (notice := refused_id(file, key, values[key], sources[key])) is not None
    ]


def _leave_out_refused_texts(file: str, values: dict[str, str], sources: Mapping[str, str]) -> list[Notice]:
    """Leave out, in place, what is carried into tables beside the ids though no id could be like it."""
    reasons = {key: refusal_of_id(values[key]) for key in CARRIED_KEYS if key in values}
    notices = []
    for key, reason in reasons.items():
        if reason is not None:
            what = f"the {key} '{shown(values.pop(key))}' ({sources[key]}) {reason}"
            remedy = "write it otherwise"
            notices.append(Notice("text-refused", "noted", file, None, None, what, "left out", remedy))
    return notices


def refused_id(file: str, key: str, value: str, source: str) -> Notice | None:
    """Return the notice that an id is refused, or ``None`` where it is taken."""
    reason = refusal_of_id(value)
    if reason is None:
        return None
    what = f"the {key} '{shown(value)}' ({source}) {reason}"
    return Notice("id-refused", "set aside", file, None, None, what, "not used", "give it another id")


def _add_module(
    file: str, values: dict[str, str], sources: dict[str, str], rules: NamingRules
) -> list[Notice]:
    """Add what ``modules.csv`` says of the module, in place."""
    module = values.get("module")
    if module is None:
        return []
    if (reason := rules.registers.modules.refused.get((module,))) is not None:
        return [_aside(file, "register-row-refused", reason)]
    row = rules.module_rows.get((module,))
    if row is None:
        return _unknown_module(file, module, rules)
    notices = []
    for key in ("generation", "batch"):
        said = row.get(key)
        if not said:
            continue
        if key in values and values[key] != said and sources[key] != "[recordings.same]":
            what = (
                f"the {key} is '{values[key]}' by {sources[key]} but '{said}' by modules.csv, line {row.line}"
            )
            notices.append(_aside(file, "identity-conflict", what, "mend the one that is wrong"))
        values[key], sources[key] = said, f"modules.csv, line {row.line}"
    if FATE_SET_ASIDE.search(row.get("fate")):
        notices.append(_aside(file, "module-set-aside", _fate(f"module {module}", row)))
    return notices


def _aside(file: str, code: str, what: str, remedy: str = "") -> Notice:
    return Notice(code, "set aside", file, None, None, shown(what), "not used", remedy)


def _fate(name: str, row: RegisterRow) -> str:
    return ": ".join(filter(None, (f"{name}, {row.get('fate')}", row.get("reason"))))


def _unknown_module(file: str, module: str, rules: NamingRules) -> list[Notice]:
    if not rules.registers.modules.present:
        return []
    known = tuple(row.get("module") for row in rules.registers.modules.rows)
    what = f"modules.csv has no module '{shown(module)}'"
    remedy = suggestion(module, known) if known else "add a row for it"
    return [Notice("module-not-listed", "noted", file, None, None, what, "used as it is named", remedy)]


def fate_of_sensor(file: str, module: str, sensor: str, rules: NamingRules) -> Notice | None:
    """Return the notice that ``sensors.csv`` sets a sensor aside, or ``None``."""
    if (reason := rules.registers.sensors.refused.get((module, sensor))) is not None:
        return _aside(file, "register-row-refused", reason)
    row = rules.sensor_rows.get((module, sensor))
    if row is None or not FATE_SET_ASIDE.search(row.get("fate")):
        return None
    return _aside(file, "sensor-set-aside", _fate(f"sensor {module} {sensor}", row))


def _check_needed(
    file: str, values: Mapping[str, str], name: NameReading, rules: NamingRules
) -> list[Notice]:
    """Name what nobody says though it is needed."""
    if name.ambiguous:
        return []
    missing = [key for key in ("module", "kind") if key not in values]
    if missing:
        hint = (
            ""
            if name.pattern is not None or not rules.patterns
            else "; no pattern of [recordings] name matches"
        )
        what = f"nobody says the {' and the '.join(missing)} of this recording{hint}"
        remedy = "name it in trials.csv, a preamble line, the file's name or [recordings.same]"
        return [Notice("identity-missing", "set aside", file, None, None, what, "not used", remedy)]
    disbelieved = (values["module"],) in rules.registers.modules.refused
    if "generation" not in values and rules.generations_are_named and not disbelieved:
        what = f"nobody says the generation of module '{shown(values['module'])}', though others have one"
        remedy = "add it to modules.csv"
        return [Notice("generation-missing", "set aside", file, None, None, what, "not used", remedy)]
    return []
