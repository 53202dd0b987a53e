"""Pressure trials: the actuator beside the sensors inflated and let down at one or more kept lengths."""

from __future__ import annotations

from campaign.recordings.recording import Trial
from campaign.trials.sweep_points import Series
from campaign.trials.sweeps import Influence, SweepFeatures, features_of_sweeps


def features_of_pressure(trial: Trial) -> SweepFeatures:
    """Reduce one pressure trial to sweeps of pressure in kPa, at each kept length.

    Parameters
    ----------
    trial
        With ``pressure_kpa``; a length that is kept, or kept in turn; time where it is recorded.
    """
    return features_of_sweeps(trial, PRESSURE)


def _pressure(trial: Trial) -> tuple[Series, str]:
    return trial.pressure_kpa, "kPa"


PRESSURE = Influence("pressure", "kPa", _pressure, smallest=0.05)
"""Gauge pressure of the actuator."""
