"""From a campaign folder to trials: every recording read once, reduced at once, and accounted for.

Values are not kept: a trial is handed to the caller's function while its recording is in memory, and only
what that function returns stays.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TypeVar, cast

import pandas as pd

from campaign.notices import CampaignStops, Notice, sort_notices
from campaign.recordings.checks import (
    Counts,
    ReadFile,
    check_assumptions,
    check_claims,
    check_copies,
    check_generations,
    check_ids,
    check_rules,
    check_trial_rows,
    nothing_usable,
)
from campaign.recordings.description import Description
from campaign.recordings.folder import Survey, survey_folder
from campaign.recordings.identity import (
    BY_REQUEST,
    SET_ASIDE_BY_THE_LAB,
    NamingRules,
    naming_rules,
)
from campaign.recordings.intake_tables import (
    modules_table,
    recordings_table,
    sensors_table,
    sessions_table,
    trials_table,
)
from campaign.recordings.recording import Trial, TrialIdentity
from campaign.recordings.sensor_share import TrialKey, key_of_trial
from campaign.recordings.shared_reading import Progress, take_recordings
from campaign.workers.workshop import Workshop

T = TypeVar("T")


@dataclass(frozen=True)
class Intake:
    """What was read, and what became of every file.

    Attributes
    ----------
    description
        ``campaign.toml``, checked.
    recordings
        One row a file, sorted by path: file, sha256 (empty where it was not opened), bytes, kind (empty
        where not known), fate (``used``, ``set aside``, ``not a recording``), rows, notices (how many).
    trials
        One row a trial (file × sensor × repetition): file, kind, generation, batch, module, sensor,
        repetition, session, started, fate (``used``, ``set aside``).
    notices
        All remarks on the input, heaviest first.
    modules, sensors, sessions
        The registers with all their columns as text, one row also for what is used but not listed.
        ``sensors`` has rest_length_mm and rest_length_uncertainty_mm besides (float, NaN where not known);
        ``modules`` holds the generation and batch that were settled.
    identities
        By key (file, sensor, repetition), the identity of every trial that was built.
    used
        Keys of the trials that are used.
    put_back
        Keys of sound trials that a register sets aside (``use = no``, the fate of a sensor or module).
    counts
        Files by fate; they add up.
    other_campaigns
        Folders inside that are campaigns of their own.
    left_alone
        Headers of columns that the description says to leave alone, with the number of files that have them.
    set_aside_unasked
        How many notices set something aside without ``use = no`` having asked for it.
    """

    description: Description
    recordings: pd.DataFrame
    trials: pd.DataFrame
    notices: tuple[Notice, ...]
    modules: pd.DataFrame
    sensors: pd.DataFrame
    sessions: pd.DataFrame
    identities: dict[TrialKey, TrialIdentity]
    used: frozenset[TrialKey]
    put_back: frozenset[TrialKey]
    counts: Counts
    other_campaigns: tuple[str, ...] = ()
    left_alone: tuple[tuple[str, int], ...] = ()
    set_aside_unasked: int = 0

    @property
    def used_identities(self) -> tuple[TrialIdentity, ...]:
        """Identities of the trials that are used, in reading order."""
        return tuple(identity for key, identity in self.identities.items() if key in self.used)

    @property
    def file_hashes(self) -> dict[str, str]:
        """SHA-256 by file, of the files that were opened."""
        opened = self.recordings[self.recordings["sha256"] != ""]
        return dict(zip(opened["file"], opened["sha256"], strict=True))


class NothingUsable(CampaignStops):
    """No recording of the campaign can be used.

    Attributes
    ----------
    intake
        The whole intake, so that every notice can be shown.
    """

    def __init__(self, fault: Notice, intake: Intake) -> None:
        super().__init__([fault])
        self.intake = replace(intake, notices=sort_notices([fault, *intake.notices]))


def run_intake(
    folder: Path,
    reduce: Callable[[Trial], T],
    output: Path | None = None,
    progress: Progress | None = None,
    *,
    keep_put_back: bool = False,
    workshop: Workshop | None = None,
) -> tuple[Intake, dict[TrialKey, T]]:
    """Read a campaign folder once, reducing each trial while its recording is in memory.

    Parameters
    ----------
    folder
        The campaign folder.
    reduce
        Makes of a trial what is to be kept of it; it is not called for trials known to be set aside.
    output
        Where a report is written to; its files are not counted.
    progress
        Told how many bytes are read.
    keep_put_back
        Whether the results of sound trials that a register sets aside are kept too; their keys are in
        ``Intake.put_back``, never in ``Intake.used``.
    workshop
        Who reads, and where results of earlier runs are; this process alone where ``None``.

    Returns
    -------
    tuple of Intake and dict
        The intake, and the results by trial in reading order.

    Raises
    ------
    CampaignStops
        Where the folder cannot be read; :class:`NothingUsable` where no trial can be used.
    """
    survey = survey_folder(folder, output)
    rules = naming_rules(survey.description, survey.registers)
    results: dict[TrialKey, T] = {}
    read: list[ReadFile] = []
    for taken in take_recordings(
        survey.recordings, rules, reduce, workshop or Workshop(), progress or _silent
    ):
        read.append(taken.read)
        results |= cast(dict[TrialKey, T], taken.features)
    intake = settle(survey, rules, read)
    if (fault := nothing_usable(intake.counts)) is not None:
        raise NothingUsable(fault, intake)
    kept = intake.used | intake.put_back if keep_put_back else intake.used
    return intake, {key: result for key, result in results.items() if key in kept}


def inspect_folder(folder: Path, output: Path | None = None, progress: Progress | None = None) -> Intake:
    """Read and check a campaign folder, keeping no values (see :func:`run_intake`)."""
    return run_intake(folder, lambda _: None, output, progress)[0]


def _silent(_what: str, _done: int, _total: int) -> None:
    """Say nothing of progress."""


def settle(survey: Survey, rules: NamingRules, read: Sequence[ReadFile]) -> Intake:
    """Decide what becomes of every file and trial, once all have been read.

    Parameters
    ----------
    survey
        The folder.
    rules
        From :func:`campaign.recordings.identity.naming_rules`.
    read
        What was kept of each recording, sorted by path.

    Returns
    -------
    Intake
        With counts that add up.
    """
    copies = check_copies(read)
    rivals = check_claims(read, copies)
    of_no_generation = check_generations((t for f in read for t in f.trials), rules.generations_are_named)
    reasons = {
        key: _reasons(file, key, copies, rivals, of_no_generation)
        for file in read
        for key in map(key_of_trial, file.trials)
    }
    identities = {key_of_trial(trial): trial for file in read for trial in file.trials}
    used = frozenset(key for key, codes in reasons.items() if not codes)
    put_back = frozenset(
        key for key, codes in reasons.items() if codes and set(codes) <= SET_ASIDE_BY_THE_LAB
    )
    across = (*copies.values(), *rivals.values(), *of_no_generation.values())
    used_identities = [identity for key, identity in identities.items() if key in used]
    notices = sort_notices(
        dict.fromkeys(
            (
                *survey.notices,
                *(notice for file in read for notice in file.notices),
                *across,
                *check_ids(identities.values()),
                *check_trial_rows(survey),
                *check_assumptions(survey, read, used_identities),
                *check_rules(survey, rules.patterns, read),
            )
        )
    )
    recordings = recordings_table(survey, read, used, notices)
    return Intake(
        description=survey.description,
        recordings=recordings,
        trials=trials_table(identities, used),
        notices=notices,
        modules=modules_table(survey.registers.modules, used_identities),
        sensors=sensors_table(survey.registers.sensors, used_identities),
        sessions=sessions_table(survey.registers.sessions, used_identities),
        identities=identities,
        used=used,
        put_back=put_back,
        counts=_count(recordings, identities, used),
        other_campaigns=survey.other_campaigns,
        left_alone=tuple(sorted(Counter(header for file in read for header in file.left_alone).items())),
        set_aside_unasked=sum(n.weight == "set aside" and n.code != BY_REQUEST for n in notices),
    )


def _reasons(
    file: ReadFile, key: TrialKey, copies: Mapping[str, Notice], *across: Mapping[TrialKey, Notice]
) -> tuple[str, ...]:
    """Codes of all reasons for which a trial is set aside; none: it is used."""
    copied = [copies[file.file].code] if file.file in copies else []
    return (*file.reasons(key), *copied, *(notices[key].code for notices in across if key in notices))


def _count(
    recordings: pd.DataFrame, identities: dict[TrialKey, TrialIdentity], used: frozenset[TrialKey]
) -> Counts:
    fates = recordings["fate"].value_counts()
    return Counts(
        files=len(recordings),
        used=int(fates.get("used", 0)),
        set_aside=int(fates.get("set aside", 0)),
        not_recordings=int(fates.get("not a recording", 0)),
        trials=len(identities),
        trials_used=len(used),
    )
