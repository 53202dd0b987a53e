"""A campaign folder read once: every recording reduced to what analyses need, and none of them held."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TypeVar

import pandas as pd

from campaign.analyses.calibration import Calibration, analyse_calibration
from campaign.analyses.shared_work import keep
from campaign.notices import Notice, sort_notices
from campaign.recordings.description import Description
from campaign.recordings.intake import Intake, run_intake
from campaign.recordings.sensor_share import TrialKey
from campaign.recordings.shared_reading import Progress
from campaign.trials.features import TrialFeatures
from campaign.trials.readings import Readings, collect_readings
from campaign.trials.reduction import reduce_trial
from campaign.trials.staircase import StaircaseFeatures
from campaign.workers.workshop import Workshop

Features = TypeVar("Features", bound=TrialFeatures)


@dataclass(frozen=True)
class CampaignRead:
    """A campaign folder after its files were read once: no recording is held any more.

    Attributes
    ----------
    intake
        Every file with its fate; notices of the trial stage included.
    readings
        Plateaus of the staircases; those that the registers set aside are there and marked as not used.
    readings_with_put_back
        The same with those that the registers set aside marked as used; ``None`` where there are none.
    features
        What the used trials of every other kind were reduced to, by trial in reading order.
    features_put_back
        The same of sound trials that the registers set aside.
    """

    intake: Intake
    readings: Readings
    readings_with_put_back: Readings | None
    features: dict[TrialKey, TrialFeatures] = field(default_factory=dict)
    features_put_back: dict[TrialKey, TrialFeatures] = field(default_factory=dict)

    def of_type(self, kept: type[Features]) -> dict[TrialKey, Features]:
        """Return the features of one type, by trial in reading order."""
        return {key: found for key, found in self.features.items() if isinstance(found, kept)}

    def with_put_back(self, kept: type[Features]) -> dict[TrialKey, Features]:
        """Return the features of one type with those set aside put back; empty where none were."""
        aside = {key: found for key, found in self.features_put_back.items() if isinstance(found, kept)}
        return self.of_type(kept) | aside if aside else {}


def read_campaign(
    folder: Path,
    output: Path | None = None,
    progress: Progress | None = None,
    workshop: Workshop | None = None,
) -> CampaignRead:
    """Read every recording of *folder* once and keep what its trials are reduced to.

    What comes of it is the same, to the last bit, whoever of the *workshop* read it and whenever.

    Raises
    ------
    CampaignStops
        Where the folder cannot be read or no trial can be used.
    """
    intake, features = run_intake(
        folder, reduce_trial, output, progress, keep_put_back=True, workshop=workshop
    )
    staircases = {key: found for key, found in features.items() if isinstance(found, StaircaseFeatures)}
    reduced = {key: found for key, found in features.items() if found is not None and key not in staircases}
    others = {key: found for key, found in reduced.items() if key in intake.used}
    aside = {key: found for key, found in reduced.items() if key in intake.put_back}
    notices = [n for k, found in features.items() if found and k in intake.used for n in found.notices]
    sensors_aside = sensors_set_aside(intake)
    readings = _readings(intake, staircases, lambda key: key in intake.used, sensors_aside)
    put_back = _readings(intake, staircases, lambda _: True) if intake.put_back & staircases.keys() else None
    noted = with_notices(intake, [*notices, *readings.notices])
    return CampaignRead(noted, readings, put_back, others, aside)


def sensors_set_aside(intake: Intake) -> frozenset[tuple[str, str]]:
    """Return (module, sensor) of the sensors of which no trial is used although sound ones were read."""
    used = {_sensor(intake, key) for key in intake.used}
    return frozenset(_sensor(intake, key) for key in intake.put_back) - used


def _sensor(intake: Intake, key: TrialKey) -> tuple[str, str]:
    identity = intake.identities[key]
    return identity.module, identity.sensor


def _readings(
    intake: Intake,
    staircases: Mapping[TrialKey, StaircaseFeatures],
    wanted: Callable[[TrialKey], bool],
    sensors_aside: frozenset[tuple[str, str]] = frozenset(),
) -> Readings:
    """Put the readings of wanted trials together; those of sensors aside are in it, marked as not used."""
    parts = [
        found.readings
        for key, found in staircases.items()
        if wanted(key) or _sensor(intake, key) in sensors_aside
    ]
    return collect_readings(parts, sensors_aside)


def calibrate(readings: Readings, intake: Intake, workshop: Workshop | None = None) -> Calibration:
    """Return every sensor's line from *readings*, with what the campaign's registers say of the sensors.

    It is taken from an earlier run where that had the same readings, description and register of sensors.
    """
    files, every = sorted(set(readings.table["trial"].astype(str))), intake.file_hashes
    hashes = {file: every[file] for file in files if file in every}
    task = readings, intake.description, intake.sensors, hashes
    return keep(_calibration, task, workshop or Workshop())


def _calibration(task: tuple[Readings, Description, pd.DataFrame, dict[str, str]]) -> tuple[Calibration]:
    return (analyse_calibration(*task),)


def with_notices(intake: Intake, notices: list[Notice]) -> Intake:
    """Return *intake* with the notices of a later stage added, counted on the recordings they are about."""
    recordings: pd.DataFrame = intake.recordings.copy()
    more = pd.Series([notice.file for notice in notices], dtype="object").value_counts()
    recordings["notices"] += recordings["file"].map(more).fillna(0).astype("int64")
    return replace(intake, recordings=recordings, notices=sort_notices([*intake.notices, *notices]))


def silent(_what: str, _done: int, _total: int) -> None:
    """Tell nobody."""
