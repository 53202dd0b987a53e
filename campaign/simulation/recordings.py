"""All recordings of a synthetic campaign, kind after kind."""

from __future__ import annotations

from datetime import date

import numpy as np

from campaign.simulation.cyclic import cyclic_recordings
from campaign.simulation.effects import draw_effects
from campaign.simulation.hold import hold_recordings
from campaign.simulation.layout import layout_recordings
from campaign.simulation.plan import Plan
from campaign.simulation.pressure import pressure_recordings
from campaign.simulation.recording_text import SyntheticRecording
from campaign.simulation.schedule import Schedule
from campaign.simulation.staircase import staircase_recordings
from campaign.simulation.thermal import thermal_recordings
from campaign.simulation.truth import Truth

FIRST_DAY = date(2025, 2, 3)
"""First day of an invented diary where none is given."""


def simulate_recordings(
    plan: Plan, truth: Truth, seed: int, schedule: Schedule | None = None
) -> tuple[SyntheticRecording, ...]:
    """Return the recordings of a synthetic campaign, in a fixed order.

    With the same plan, truth and seed they tell of the same sensors and runs as ``simulate_readings``: a
    plateau's settled mean is the reading's signal but for sample noise. The other kinds of trial have
    streams of random numbers of their own: planning them changes no staircase.

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
    return (
        *staircase_recordings(plan, truth, effects, generator, diary, seed),
        *cyclic_recordings(plan, truth, effects, diary, seed),
        *hold_recordings(plan, truth, effects, diary, seed),
        *pressure_recordings(plan, truth, effects, diary, seed),
        *thermal_recordings(plan, truth, effects, diary, seed),
        *layout_recordings(plan, truth, effects, diary, seed),
    )
