"""Checks across the recordings of a campaign: copies, rival claims, twins, and counts that must add up.

Each check is a pure function of what was kept of the recordings once they were read; none opens a file.
"""

from __future__ import annotations

import unicodedata
from collections import defaultdict
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

from campaign.notices import Notice
from campaign.recordings.description import DESCRIPTION_FILE
from campaign.recordings.file_glob import matches_glob
from campaign.recordings.folder import Survey
from campaign.recordings.identity import SOLE_GENERATION, Identification
from campaign.recordings.name_pattern import NamePattern, distinct_readings, text_to_match
from campaign.recordings.recording import TrialIdentity
from campaign.recordings.register import plain_path, remark_on_id, shown
from campaign.recordings.sensor_share import TrialKey, key_of_trial
from campaign.recordings.toml_tables import suggestion


@dataclass(frozen=True)
class ReadFile:
    """What is kept of a recording once it has been read; its values are not.

    Attributes
    ----------
    file, sha256, size_bytes
        The file.
    rows
        Rows read; 0 where it could not be read.
    identification
        Which trial it is; ``None`` where it could not be read.
    trials
        Identities of its trials, those that are set aside too.
    set_aside
        Codes of the reasons, by trial.
    notices
        Remarks on this file.
    repetition_assumed
        Whether nobody numbers its repetition.
    left_alone, rules_used
        Headers that the description leaves alone, and indices of its column rules that were used.
    """

    file: str
    sha256: str
    size_bytes: int
    rows: int = 0
    identification: Identification | None = None
    trials: tuple[TrialIdentity, ...] = ()
    set_aside: Mapping[TrialKey, tuple[str, ...]] | None = None
    notices: tuple[Notice, ...] = ()
    repetition_assumed: bool = False
    left_alone: tuple[str, ...] = ()
    rules_used: frozenset[int] = frozenset()

    @property
    def kind(self) -> str:
        """Kind of trial, empty where it is not known."""
        return self.identification.values.get("kind", "") if self.identification is not None else ""

    def reasons(self, key: TrialKey) -> tuple[str, ...]:
        """Codes of the reasons for which one of its trials is set aside."""
        return (self.set_aside or {}).get(key, ())


@dataclass(frozen=True)
class Counts:
    """Files of a campaign by what became of them.

    Attributes
    ----------
    files
        Files of the folder.
    used, set_aside, not_recordings
        How many ended on each list.
    trials, trials_used
        Trials that were built, and those that are used.
    """

    files: int
    used: int
    set_aside: int
    not_recordings: int
    trials: int
    trials_used: int

    @property
    def add_up(self) -> bool:
        """Whether every file ended on exactly one list."""
        return self.used + self.set_aside + self.not_recordings == self.files


def _aside(code: str, file: str, what: str, remedy: str) -> Notice:
    return Notice(code, "set aside", file, None, None, what, "not used", remedy)


def check_copies(files: Sequence[ReadFile]) -> dict[str, Notice]:
    """Find recordings with the same bytes: they are one recording, never two repetitions.

    Parameters
    ----------
    files
        Recordings that could be read, sorted by path.

    Returns
    -------
    dict of str to Notice
        By file: a notice on every copy but the first that is identified (the first of all where none is).
    """
    by_hash: dict[str, list[ReadFile]] = defaultdict(list)
    for file in files:
        if file.identification is not None:
            by_hash[file.sha256].append(file)
    notices = {}
    for group in by_hash.values():
        first = next(
            (f for f in group if f.identification is not None and f.identification.settled), group[0]
        )
        for file in group:
            if file is not first:
                what = f"the same bytes as {first.file}"
                remedy = "remove one of them; if a run was repeated, put its own recording here"
                notices[file.file] = _aside("copy", file.file, what, remedy)
    return notices


def check_claims(files: Sequence[ReadFile], copies: Mapping[str, Notice]) -> dict[TrialKey, Notice]:
    """Find recordings with different bytes that claim to be the same trial.

    The claim is kind, module, sensor, repetition and session, and any set-point that the name states (runs at
    1 bar and at 3 bar are no rivals).

    Returns
    -------
    dict of TrialKey to Notice
        A notice on every one of the rivals, naming another.
    """
    claims: dict[tuple[object, ...], list[TrialIdentity]] = defaultdict(list)
    for file in files:
        if file.file in copies or file.identification is None:
            continue
        conditions = tuple(sorted(file.identification.set_points.items()))
        for trial in {key_of_trial(trial): trial for trial in file.trials}.values():
            claim = (trial.kind, trial.module, trial.sensor, trial.repetition, trial.session, conditions)
            claims[claim].append(trial)
    notices = {}
    for rivals in claims.values():
        for trial in rivals if len(rivals) > 1 else ():
            others = [rival.file for rival in rivals if rival is not trial]
            notices[key_of_trial(trial)] = _rival(trial, others)
    return notices


def _rival(trial: TrialIdentity, others: Sequence[str]) -> Notice:
    session = f", session {trial.session}" if trial.session else ""
    name = f"{trial.kind} of {trial.module} {trial.sensor}, repetition {trial.repetition}{session}"
    more = f" and {len(others) - 1} more" if len(others) > 1 else ""
    what = f"claims to be the {shown(name)}, as {others[0]}{more} does with other bytes"
    return _aside("rival-claim", trial.file, what, "say in trials.csv which is which")


def check_generations(trials: Iterable[TrialIdentity], named: bool) -> dict[TrialKey, Notice]:
    """Set aside trials without a generation where only some recordings name theirs themselves."""
    if named:
        return {}
    listed = list(trials)
    stated = {trial.generation for trial in listed} - {SOLE_GENERATION}
    if not stated:
        return {}
    what = f"nobody says the generation of this trial, though others are of '{shown(min(stated))}'"
    return {
        key_of_trial(trial): _aside("generation-missing", trial.file, what, "add it to modules.csv")
        for trial in listed
        if trial.generation == SOLE_GENERATION
    }


def check_ids(trials: Iterable[TrialIdentity]) -> list[Notice]:
    """Note ids that are unusual, and ids that differ in upper and lower case only."""
    notices = []
    files: dict[tuple[str, str], str] = {}
    for trial in trials:
        for key in ("generation", "batch", "module", "sensor", "session"):
            files.setdefault((key, getattr(trial, key)), trial.file)
    twins: dict[tuple[str, str], list[str]] = defaultdict(list)
    for (key, value), file in files.items():
        twins[key, unicodedata.normalize("NFKC", value).casefold()].append(value)
        if (remark := remark_on_id(value)) is not None:
            what = f"the {key} '{shown(value)[:80]}' {remark}"
            notices.append(Notice("id-unusual", "noted", file, None, None, what, "kept"))
    for (key, _), values in twins.items():
        if len(values) > 1:
            what = f"the {key}s {' and '.join(f'{shown(v)!r}' for v in values)} look alike"
            remedy = "write them in one way if they are one"
            file = files[key, values[1]]
            notices.append(Notice("id-twins", "noted", file, None, None, what, "kept apart", remedy))
    return notices


def check_trial_rows(survey: Survey) -> list[Notice]:
    """Note rows of ``trials.csv`` for files that are not there, or that are not named as recordings."""
    by_name = {plain_path(file.file): file for file in survey.files}
    named = tuple(name for name, file in by_name.items() if file.list != "not a recording")
    notices = []
    for row in survey.registers.trials.rows:
        name = plain_path(row.get("file"))
        file = by_name.get(name)
        if file is None:
            what = f"the row names '{shown(row.get('file'))}', which is not in the folder"
            remedy = suggestion(name, named) if len(named) < 2000 else "check the path"
            notices.append(_of_row("register-file-missing", row.line, what, remedy))
        elif file.list == "not a recording":
            what = f"the row names '{file.file}', which no pattern of [recordings] files matches"
            notices.append(_of_row("register-file-unnamed", row.line, what, "add a pattern for it"))
    return notices


def _of_row(code: str, line: int, what: str, remedy: str) -> Notice:
    return Notice(
        code, "noted", "trials.csv", line, None, what, "the row says nothing of any recording", remedy
    )


def check_assumptions(
    survey: Survey, files: Sequence[ReadFile], used: Sequence[TrialIdentity]
) -> list[Notice]:
    """Say once a campaign what was taken as read: generation, repetitions, unknown rest lengths."""
    notices = []
    if used and all(trial.generation == SOLE_GENERATION for trial in used) and not _names_generation(survey):
        what = "no generation is named anywhere"
        done, remedy = f"all modules are '{SOLE_GENERATION}'", "name it in modules.csv"
        notices.append(_assumed("generation-assumed", what, done, remedy))
    assumed = [file.file for file in files if file.repetition_assumed and file.trials]
    if assumed:
        what = f"recordings that number no repetition: {len(assumed)}, the first {assumed[0]}"
        remedy = "number repetitions in the name, trials.csv or a header"
        notices.append(_assumed("repetition-assumed", what, "taken as repetition 1", remedy, len(assumed)))
    unknown = sorted({(t.module, t.sensor) for t in used if t.rest_length_mm != t.rest_length_mm})
    if unknown:
        first = shown(" ".join(unknown[0]))
        what = f"rest lengths that are not known: {len(unknown)}, the first of {first}"
        done, remedy = "none is invented: no strain is derived for them", "add rest_length to sensors.csv"
        notices.append(_assumed("rest-length-unknown", what, done, remedy, len(unknown)))
    return notices


def _assumed(code: str, what: str, done: str, remedy: str, count: int = 1) -> Notice:
    return Notice(code, "noted", None, None, None, what, done, remedy, count)


def _names_generation(survey: Survey) -> bool:
    rows = (*survey.registers.modules.rows, *survey.registers.trials.rows)
    return SOLE_GENERATION in {row.get("generation") for row in rows} | {
        survey.description.same.get("generation")
    }


def check_rules(survey: Survey, patterns: Sequence[NamePattern], files: Sequence[ReadFile]) -> list[Notice]:
    """Note patterns and column tables of the description that match nothing, and columns left alone."""
    found: list[tuple[str, str]] = []
    names = [file.file for file in survey.recordings]
    for pattern in survey.description.files:
        if not any(matches_glob(file.file, pattern) for file in survey.files):
            found.append(("files-match-nothing", f"[recordings] files '{pattern}' matches no file"))
    for compiled in patterns:
        if not any(distinct_readings(compiled, text_to_match(compiled, name), None) for name in names):
            what = f"[recordings] name '{compiled.text}' matches none of {len(names)} recordings"
            found.append(("name-matches-nothing", what))
    left_alone = dict.fromkeys(header for file in files for header in file.left_alone)
    used = frozenset().union(*(file.rules_used for file in files))
    for index, rule in enumerate(survey.description.columns):
        if index not in used and any(file.rows for file in files):
            column = f"header '{rule.header}'" if rule.header is not None else f"position {rule.position}"
            found.append(("columns-match-nothing", f"[[columns]] {index + 1}, {column}, matches no column"))
    remedy = "mend it, or take it out"
    notices = [
        Notice(code, "noted", DESCRIPTION_FILE, None, None, what, "nothing is read by it", remedy)
        for code, what in found
    ]
    if left_alone:
        what = "columns to be left alone: " + ", ".join(f"'{shown(header)}'" for header in left_alone)
        notices.append(_assumed("left-alone", what, "not read, as the description says", "", len(left_alone)))
    return notices


def nothing_usable(counts: Counts) -> Notice | None:
    """Return the notice that no trial is usable, or ``None`` where one is."""
    if counts.used:
        return None
    many = counts.set_aside != 1
    what = f"no trial is usable: {counts.set_aside} {'recordings are' if many else 'recording is'} set aside"
    what += ", each with its notice" if many else "; its notice says why"
    remedy = "mend one of them" if many else "mend it"
    return Notice("no-usable-trial", "stops", None, None, None, what, "no report is written", remedy)
