"""The tables of an intake: files, trials, notices and registers, one row a thing."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable, Sequence

import pandas as pd

from campaign.notices import Notice
from campaign.recordings.checks import ReadFile
from campaign.recordings.folder import LARGEST_RECORDING_BYTES, Survey, SurveyedFile
from campaign.recordings.recording import TrialIdentity
from campaign.recordings.register import (
    ID_COLUMNS,
    KNOWN_COLUMNS,
    Register,
    path_in_tables,
    refusal_of_id,
    rest_length_mm,
)
from campaign.recordings.sensor_share import TrialKey, key_of_trial
from campaign.units import UnitError

RECORDING_COLUMNS = ("file", "sha256", "bytes", "kind", "fate", "rows", "notices")
TRIAL_COLUMNS = (
    "file",
    "kind",
    "generation",
    "batch",
    "module",
    "sensor",
    "repetition",
    "session",
    "started",
    "fate",
)
NOTICE_COLUMNS = ("code", "weight", "file", "line", "column", "what", "done", "remedy")


def recordings_table(
    survey: Survey, read: Sequence[ReadFile], used: frozenset[TrialKey], notices: Iterable[Notice]
) -> pd.DataFrame:
    """Return one row a file: file, sha256, bytes, kind, fate, rows and the number of its notices."""
    by_file = {file.file: file for file in read}
    remarks: dict[str, int] = {}
    for notice in notices:
        if notice.file is not None:
            remarks[notice.file] = remarks.get(notice.file, 0) + 1
    rows = []
    for file in survey.files:
        known = by_file.get(file.file)
        if known is None:
            sha256, kind, count = _hash(file) if file.list == "not a recording" else "", "", 0
            fate: str = file.list
        else:
            sha256, kind, count = known.sha256, known.kind, known.rows
            fate = "used" if any(key_of_trial(trial) in used for trial in known.trials) else "set aside"
        rows.append((file.file, sha256, file.size_bytes, kind, fate, count, remarks.get(file.file, 0)))
    return pd.DataFrame(rows, columns=list(RECORDING_COLUMNS))


def _hash(file: SurveyedFile) -> str:
    """Return the hash of a file that is no recording; empty where it cannot be opened."""
    if file.what in ("link", "no ordinary file", "gone") or file.size_bytes > LARGEST_RECORDING_BYTES:
        return ""
    try:
        with file.location.open("rb") as stream:
            return hashlib.file_digest(stream, "sha256").hexdigest()
    except OSError:
        return ""


def trials_table(identities: dict[TrialKey, TrialIdentity], used: frozenset[TrialKey]) -> pd.DataFrame:
    """Return one row a trial with its identity (no refused id) and its fate, ``used`` or ``set aside``."""
    rows = [
        (*(_as_id(name, getattr(trial, name)) for name in TRIAL_COLUMNS[:-1]), _fate(key in used))
        for key, trial in identities.items()
    ]
    return pd.DataFrame(rows, columns=list(TRIAL_COLUMNS))


def _as_id(column: str, value: object) -> object:
    return "" if column in ID_COLUMNS and refusal_of_id(str(value)) is not None else value


def _fate(used: bool) -> str:
    return "used" if used else "set aside"


def spelled_paths(table: pd.DataFrame) -> pd.DataFrame:
    """Return a table to be written, its files spelled so that no spreadsheet runs one as a formula."""
    if "file" not in table:
        return table
    return table.assign(file=[path_in_tables(path) if path else path for path in table["file"].tolist()])


def notices_table(notices: Iterable[Notice]) -> pd.DataFrame:
    """Return notices as a table: code, weight, file, line, column, what, done, remedy."""
    rows = [tuple(getattr(notice, name) for name in NOTICE_COLUMNS) for notice in notices]
    table = pd.DataFrame(rows, columns=list(NOTICE_COLUMNS), dtype=object)
    return table.astype({"line": "Int64", "column": "Int64"}).assign(file=table["file"].fillna(""))


def _register_table(register: Register, extra: Iterable[dict[str, str]]) -> pd.DataFrame:
    """Return a register as text columns, its known ones first, then its free ones, and rows that it lacks."""
    free = [column for column in register.columns if column and column not in KNOWN_COLUMNS[register.name]]
    columns = [*KNOWN_COLUMNS[register.name], *free]
    rows = [row.values for row in register.rows] + list(extra)
    return pd.DataFrame([[row.get(c, "") for c in columns] for row in rows], columns=columns, dtype=object)


def modules_table(register: Register, used: Sequence[TrialIdentity]) -> pd.DataFrame:
    """Return ``modules.csv`` as text columns, unlisted modules too, with the settled generation and batch."""
    listed = {row.get("module") for row in register.rows}
    settled = {trial.module: trial for trial in used}
    table = _register_table(register, [{"module": m} for m in sorted(settled) if m not in listed])
    for column in ("generation", "batch"):
        known = {module: getattr(trial, column) for module, trial in settled.items()}
        table[column] = [known.get(m) or said for m, said in zip(table["module"], table[column], strict=True)]
    return table


def sensors_table(register: Register, used: Sequence[TrialIdentity]) -> pd.DataFrame:
    """Return ``sensors.csv`` as text columns, unlisted sensors too, with rest lengths in mm or NaN."""
    listed = {(row.get("module"), row.get("sensor")) for row in register.rows}
    unlisted = sorted({(trial.module, trial.sensor) for trial in used} - listed)
    table = _register_table(register, [{"module": module, "sensor": sensor} for module, sensor in unlisted])
    for column in ("rest_length", "rest_length_uncertainty"):
        lengths = [_length(register, index, column) for index in range(len(table))]
        table[f"{column}_mm"] = pd.Series(lengths, dtype="float64")
    return table


def _length(register: Register, index: int, column: str) -> float:
    try:
        return rest_length_mm(register.rows[index] if index < len(register.rows) else None, column)
    except UnitError:
        return float("nan")


def sessions_table(register: Register, used: Sequence[TrialIdentity]) -> pd.DataFrame:
    """Return ``sessions.csv`` as text columns, with a row for each session that is used but not listed."""
    listed = {(row.get("session"), row.get("module")) for row in register.rows}
    seen = sorted({(trial.session, trial.module) for trial in used if trial.session})
    unlisted = [
        {"session": session, "module": module}
        for session, module in seen
        if (session, module) not in listed and (session, "") not in listed
    ]
    return _register_table(register, unlisted)
