"""Layout trials: a module held at known node positions.

Shapes are not rebuilt yet. What is kept is what a correction for pressure needs: where the trial logs
pressure beside its signals, the correction found in pressure trials is offered and shown before and after.
"""

from __future__ import annotations

from dataclasses import dataclass

from campaign.notices import Notice
from campaign.recordings.recording import Trial, TrialIdentity
from campaign.trials.logged_pressure import LoggedPressure, logged_pressure


@dataclass(frozen=True)
class LayoutFeatures:
    """What is kept of one sensor's share of a layout trial.

    Attributes
    ----------
    identity
        Whose trial it is.
    logged
        Pressure that was logged beside the signal; ``None`` where none was, or it stood still.
    notices
        What a reader should know about the trial.
    """

    identity: TrialIdentity
    logged: LoggedPressure | None
    notices: tuple[Notice, ...] = ()


def features_of_layout(trial: Trial) -> LayoutFeatures:
    """Reduce one sensor's share of a layout trial; its length is that between its nodes, in mm."""
    return LayoutFeatures(trial.identity, logged_pressure(trial))
