"""Trials of the other influences: temperature, strain across, a load, a grounded body, curvature.

Each is a sweep as pressure is (:mod:`campaign.trials.sweeps`); only what is swept differs. Where the quantity
itself is not recorded, the ``level`` column stands for it and coefficients are per step of that column.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from campaign.recordings.recording import Trial
from campaign.trials.sweep_points import Series
from campaign.trials.sweeps import STEP, Influence, SweepFeatures, features_of_sweeps


def features_of_thermal(trial: Trial) -> SweepFeatures:
    """Reduce a trial in which the temperature is swept at a kept length (°C)."""
    return features_of_sweeps(trial, TEMPERATURE)


def features_of_offaxis(trial: Trial) -> SweepFeatures:
    """Reduce a trial in which the module is stretched across the sensor's axis.

    The recorded strain is that across; where a length or an elongation is recorded, the strain across is its
    change over the shortest length of the trial (an elongation alone stays in mm).
    """
    return features_of_sweeps(trial, TRANSVERSE)


def features_of_contact(trial: Trial) -> SweepFeatures:
    """Reduce a trial in which a load rests on the skin: force in N, else pressure in kPa."""
    return features_of_sweeps(trial, CONTACT)


def features_of_proximity(trial: Trial) -> SweepFeatures:
    """Reduce a trial in which a grounded body comes near: the recorded length is its distance.

    The influence is one over the distance, in 1/mm, since the stray capacitance of a plate near a grounded
    body is inverse to the distance.
    """
    return features_of_sweeps(trial, PROXIMITY)


def features_of_bend(trial: Trial) -> SweepFeatures:
    """Reduce a trial in which the skin is bent at constant length.

    A recorded length that varies is the radius of the bend, and the influence the curvature in 1/m.
    """
    return features_of_sweeps(trial, BEND)


def _temperature(trial: Trial) -> tuple[Series, str]:
    return trial.temperature_c, "°C"


def _strain_across(trial: Trial) -> tuple[Series, str]:
    if trial.reference == "strain" and _varies(trial.strain):
        return trial.strain, "mm/mm"
    if trial.reference == "length" and trial.length_mm is not None and _varies(trial.length_mm):
        shortest = float(np.nanmin(trial.length_mm))
        return (trial.length_mm / shortest - 1.0, "mm/mm") if shortest > 0 else (None, "mm/mm")
    if _varies(trial.elongation_mm):
        return trial.elongation_mm, "mm"
    return trial.level, STEP


def _load(trial: Trial) -> tuple[Series, str]:
    if trial.force_n is not None:
        return trial.force_n, "N"
    return (trial.pressure_kpa, "kPa") if trial.pressure_kpa is not None else (trial.level, STEP)


def _inverse_of_length(factor: float, unit: str) -> Callable[[Trial], tuple[Series, str]]:
    """Give one over the recorded length, times *factor*; the level column where no length varies."""

    def values(trial: Trial) -> tuple[Series, str]:
        length = trial.length_mm if trial.reference == "length" else None
        if length is None or not _varies(length):
            return trial.level, STEP
        positive = np.where(length > 0, length, np.nan)
        return factor / positive, unit

    return values


def _varies(series: Series) -> bool:
    if series is None or not np.isfinite(series).any():
        return False
    return bool(np.nanmax(series) - np.nanmin(series) > 1e-6 * np.nanmax(np.abs(series)))


TEMPERATURE = Influence("temperature", "°C", _temperature, smallest=0.5)
TRANSVERSE = Influence("transverse", "mm/mm", _strain_across, moves_length=True)
CONTACT = Influence("contact", "N", _load)
PROXIMITY = Influence("proximity", "1/mm", _inverse_of_length(1.0, "1/mm"), moves_length=True)
BEND = Influence("bend", "1/m", _inverse_of_length(1000.0, "1/m"), moves_length=True)
"""What is swept in each kind, in the unit in which coefficients are given."""
