"""The one step that every recording goes through: opened, hashed, read, identified, reduced.

It is a pure function of a task: it holds nothing, writes nothing, and gives the same in any process and when
done again. A recording on which it fails is set aside with a notice and costs no other recording anything.
"""

from __future__ import annotations

import hashlib
import os
import traceback
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from functools import cache
from pathlib import Path

from campaign.keeping.value_codec import NotKept, encode
from campaign.notices import Notice
from campaign.recordings.checks import ReadFile
from campaign.recordings.folder import SurveyedFile
from campaign.recordings.identity import (
    SET_ASIDE_BY_THE_LAB,
    SOLE_GENERATION,
    Identification,
    NamingRules,
    identify,
)
from campaign.recordings.reading import ReadOutcome, RecordingBytes, read_recordings
from campaign.recordings.recording import Recording, Trial
from campaign.recordings.sensor_share import Shares, TrialKey, key_of_trial, trials_of_recording
from campaign.recordings.steering import module_steering

_OURS = Path(__file__).parents[1]


@dataclass(frozen=True)
class ListedRecording:
    """A recording that is to be read.

    Attributes
    ----------
    file
        As surveyed.
    known
        SHA-256 of contents whose results are there already: a file with one of them is not read again.
    """

    file: SurveyedFile
    known: tuple[str, ...] = ()


@dataclass(frozen=True)
class ReadingTask:
    """Some recordings that are read together.

    Attributes
    ----------
    recordings
        In the order of their paths.
    rules
        From :func:`campaign.recordings.steering.steering_rules`.
    reduce
        Makes of a trial what is kept of it; a function of a module where another process does the task.
    with_bytes
        Whether results are handed over with their bytes, which can be kept.
    bytes_alone
        Whether they are handed over as bytes and no more: from another process.
    """

    recordings: tuple[ListedRecording, ...]
    rules: NamingRules
    reduce: Callable[[Trial], object]
    with_bytes: bool = False
    bytes_alone: bool = False


@dataclass(frozen=True)
class Taken:
    """What is kept of one recording: what became of it and what its trials were reduced to.

    Attributes
    ----------
    read
        The recording without its values.
    features
        By trial, what ``reduce`` made of it; trials known to be set aside are not among them.
    registers
        Digest of what the registers say of its module: results hold as long as they say the same.
    """

    read: ReadFile
    features: dict[TrialKey, object]
    registers: str


@dataclass(frozen=True)
class StepResult:
    """What came of one recording.

    Attributes
    ----------
    file
        Path from the campaign folder.
    sha256
        Of the bytes; empty where the file was not opened.
    taken
        What is kept; ``None`` where the content was known, or where it is handed over as its bytes.
    data
        Its bytes; empty where they are not wanted or cannot be had.
    """

    file: str
    sha256: str
    taken: Taken | None
    data: bytes = b""


def read_task(task: ReadingTask) -> tuple[StepResult, ...]:
    """Read the recordings of a task; one result each, in their order."""
    results: dict[str, StepResult] = {}
    items: list[RecordingBytes] = []
    for recording in task.recordings:
        data, fault = open_recording(recording.file)
        if data is None:
            read = _unread(recording.file, fault)
            results[read.file] = _handed_over(Taken(read, {}, ""), task)
            continue
        sha256 = hashlib.sha256(data).hexdigest()
        if sha256 in recording.known:
            results[recording.file.file] = StepResult(recording.file.file, sha256, None)
        else:
            items.append(RecordingBytes(recording.file.file, data, sha256))
    results |= {result.file: result for result in _read(items, task)}
    return tuple(results[recording.file.file] for recording in task.recordings)


def split_task(task: ReadingTask) -> Iterator[ReadingTask]:
    """Part a task into its recordings."""
    for recording in task.recordings:
        yield replace(task, recordings=(recording,))


def worker_died(task: ReadingTask) -> tuple[StepResult, ...]:
    """Return what stands for recordings that the process reading them died of."""
    what = "the process that read this file died of it, twice"
    remedy = "look whether the file is far larger than others, or needs more memory than there is"
    results = []
    for recording in task.recordings:
        notice = _not_read(recording.file, "reader-died", what, remedy)
        taken = Taken(_unread(recording.file, notice), {}, "")
        results.append(StepResult(recording.file.file, "", taken))
    return tuple(results)


def _read(items: list[RecordingBytes], task: ReadingTask) -> Iterator[StepResult]:
    """Read together what can be read together, and one by one where that fails."""
    try:
        outcomes = read_recordings(items, task.rules.description)
    except Exception as fault:
        if len(items) > 1:
            for item in items:
                yield from _read([item], task)
        else:
            yield _failed(items[0], fault)
        return
    registers = cache(lambda module: module_steering(module, task.rules))
    for item, outcome in zip(items, outcomes, strict=True):
        try:
            taken = _taken(outcome, task, registers)
        except Exception as fault:
            yield _failed(item, fault)
        else:
            yield _handed_over(taken, task)


def _taken(outcome: ReadOutcome, task: ReadingTask, registers: Callable[[str], str]) -> Taken:
    file, trials = _identified(outcome, task.rules)
    wanted = (
        trial for trial in trials if set(file.reasons(key_of_trial(trial.identity))) <= SET_ASIDE_BY_THE_LAB
    )
    features = {key_of_trial(trial.identity): task.reduce(trial) for trial in wanted}
    return Taken(file, features, registers(module_of(file)))


def module_of(file: ReadFile) -> str:
    """Return the module of a recording, empty where it is not known."""
    return file.identification.values.get("module", "") if file.identification is not None else ""


def _handed_over(taken: Taken, task: ReadingTask) -> StepResult:
    """Return a result, with its bytes or as bytes where that is wanted and can be had."""
    file, sha256 = taken.read.file, taken.read.sha256
    if not (task.with_bytes or task.bytes_alone):
        return StepResult(file, sha256, taken)
    try:
        data = encode(taken)
    except NotKept:
        return StepResult(file, sha256, taken)
    return StepResult(file, sha256, None if task.bytes_alone else taken, data)


def _failed(item: RecordingBytes, fault: Exception) -> StepResult:
    """Set aside a recording on which the program failed, saying where, in the same words wherever it ran."""
    what = f"the program failed on this file ({type(fault).__name__}{_place(fault)})"
    notice = Notice(
        "reading-failed", "set aside", item.file, None, None, what, "not used", "report it with the file"
    )
    read = ReadFile(item.file, item.sha256, len(item.data), notices=(notice,))
    return StepResult(item.file, item.sha256, Taken(read, {}, ""))


def _place(fault: Exception) -> str:
    """Return the innermost line of ours that a fault passed through."""
    ours = [f for f in traceback.extract_tb(fault.__traceback__) if Path(f.filename).is_relative_to(_OURS)]
    if not ours:
        return ""
    return f" in {Path(ours[-1].filename).relative_to(_OURS).as_posix()}, line {ours[-1].lineno}"


def open_recording(file: SurveyedFile) -> tuple[bytes | None, Notice | None]:
    """Return the bytes of a file, or the notice that says why there are none.

    A file that changed after the folder was surveyed, or while it is read, is not taken.
    """
    try:
        with file.location.open("rb") as stream:
            data = stream.read()
            after = os.fstat(stream.fileno())
    except FileNotFoundError:
        return None, _not_read(file, "vanished", "the file was gone when it was to be read", "run again")
    except OSError as fault:
        what = f"the file cannot be opened ({fault.strerror})"
        return None, _not_read(file, "unreadable-file", what, "make it readable")
    if (after.st_size, after.st_mtime_ns) != (file.size_bytes, file.modified_ns) or len(
        data
    ) != file.size_bytes:
        what = f"the file changed while the folder was read ({file.size_bytes} bytes, then {after.st_size})"
        return None, _not_read(file, "changed-while-read", what, "run again when nothing is being logged")
    return data, None


def _unread(file: SurveyedFile, fault: Notice | None) -> ReadFile:
    return ReadFile(file.file, "", file.size_bytes, notices=(fault,) if fault is not None else ())


def _not_read(file: SurveyedFile, code: str, what: str, remedy: str) -> Notice:
    return Notice(code, "set aside", file.file, None, None, what, "not read", remedy)


def _identified(outcome: ReadOutcome, rules: NamingRules) -> tuple[ReadFile, tuple[Trial, ...]]:
    """Identify one recording and build its trials; what is returned first holds no values."""
    file = ReadFile(
        outcome.file,
        outcome.sha256,
        outcome.size_bytes,
        notices=outcome.notices,
        left_alone=outcome.left_alone,
        rules_used=outcome.rules_used,
    )
    if outcome.recording is None:
        return file, ()
    identification = _with_sole_generation(identify(outcome.recording, rules), rules)
    shares = _shares(outcome.recording, identification, rules)
    identities = tuple(trial.identity for trial in shares.trials)
    reasons = {
        key_of_trial(i): (*identification.reasons, *shares.set_aside.get(key_of_trial(i), ()))
        for i in identities
    }
    read = replace(
        file,
        rows=outcome.recording.rows,
        identification=identification,
        trials=identities,
        set_aside=reasons,
        notices=(*outcome.notices, *identification.notices, *shares.notices),
        repetition_assumed=shares.repetition_assumed,
    )
    return read, shares.trials


def _with_sole_generation(identification: Identification, rules: NamingRules) -> Identification:
    if rules.generations_are_named or "generation" in identification.values:
        return identification
    return replace(identification, values=identification.values | {"generation": SOLE_GENERATION})


def _shares(recording: Recording, identification: Identification, rules: NamingRules) -> Shares:
    if not identification.settled:
        return Shares((), {}, ())
    return trials_of_recording(recording, identification, rules)
