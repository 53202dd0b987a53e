"""What a trial is reduced to while its recording is in memory, by kind of trial."""

from __future__ import annotations

from collections.abc import Callable

from campaign.recordings.recording import Trial
from campaign.trials.cyclic import features_of_cyclic
from campaign.trials.endurance import features_of_endurance
from campaign.trials.features import TrialFeatures
from campaign.trials.hold import features_of_blank, features_of_hold
from campaign.trials.influences import (
    features_of_bend,
    features_of_contact,
    features_of_offaxis,
    features_of_proximity,
    features_of_thermal,
)
from campaign.trials.layout import features_of_layout
from campaign.trials.pressure import features_of_pressure
from campaign.trials.staircase import readings_of_staircase

REDUCED_BY: dict[str, Callable[[Trial], TrialFeatures]] = {
    "staircase": readings_of_staircase,
    "cyclic": features_of_cyclic,
    "endurance": features_of_endurance,
    "hold": features_of_hold,
    "blank": features_of_blank,
    "pressure": features_of_pressure,
    "layout": features_of_layout,
    "offaxis": features_of_offaxis,
    "thermal": features_of_thermal,
    "contact": features_of_contact,
    "proximity": features_of_proximity,
    "bend": features_of_bend,
}
"""What a trial is reduced to while its recording is in memory, by kind: the kinds that are analysed."""


def reduce_trial(trial: Trial) -> TrialFeatures | None:
    """Return what is kept of a trial; ``None`` for kinds that are accounted for but not analysed yet."""
    reduced = REDUCED_BY.get(trial.identity.kind)
    return reduced(trial) if reduced is not None else None
