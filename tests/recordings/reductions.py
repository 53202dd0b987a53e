"""What trials are reduced to in tests of shared reading: functions that other processes can call."""

from __future__ import annotations

import os
import signal

from campaign.recordings.recording import Trial


def largest(trial: Trial) -> tuple[float, float]:
    """Return the largest signal, and the rest length."""
    return float(trial.signal.max()), trial.identity.rest_length_mm


def smallest(trial: Trial) -> tuple[float, float]:
    """Return the smallest signal, and the rest length."""
    return float(trial.signal.min()), trial.identity.rest_length_mm


def die_of_m03(trial: Trial) -> tuple[float, float]:
    """Kill the process that reduces module M03."""
    if trial.identity.module == "M03":
        os.kill(os.getpid(), signal.SIGKILL)
    return largest(trial)


def fail_on_m03(trial: Trial) -> tuple[float, float]:
    """Raise for module M03."""
    return largest(trial)[trial.identity.module == "M03" :][1], 0.0
