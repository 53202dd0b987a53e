"""All recordings of a synthetic campaign, kind after kind."""

from __future__ import annotations

from datetime import date

import numpy as np

from campaign.simulation.effects import draw_effects
from campaign.simulation.plan import Plan
from campaign.simulation.recording_text import SyntheticRecording
from campaign.simulation.schedule import Schedule
from campaign.simulation.staircase import staircase_recordings
from campaign.simulation.truth import Truth

FIRST_DAY = date(2025, 2, 3)
"""First day of an invented diary where none is given."""


def simulate_recordings(
    plan: Plan, truth: Truth, seed: int, schedule: Schedule | None = None
) -> tuple[SyntheticRecording, ...]:
    """Return the recordings of a synthetic campaign, in a fixed order.

    With the same plan, truth and seed they tell of the same sensors and runs as ``simulate_readings``: a
    plateau's settled mean is the reading's signal but for sample noise. A later kind of trial adds one module
    with a function like ``staircase_recordings`` and one line here.

    Parameters
    ----------
    plan, truth, seed
        As for ``simulate_readings``.
    schedule
        The stand's diary; by default it begins on :data:`FIRST_DAY`.
    """
    diary = schedule or Schedule(FIRST_DAY)
    generator = np.random.default_rng(seed)
    effects = draw_effects(plan, truth, generator)
    return tuple(staircase_recordings(plan, truth, effects, generator, diary, seed))
