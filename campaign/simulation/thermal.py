"""Thermal trials: the air about a panel warmed and cooled at kept lengths."""

from __future__ import annotations

from collections.abc import Iterator

from campaign.simulation.effects import Effects
from campaign.simulation.plan import Plan
from campaign.simulation.recording_text import SyntheticRecording
from campaign.simulation.schedule import Schedule
from campaign.simulation.sweep import SweepKind, sweep_recordings
from campaign.simulation.truth import Truth

THERMAL = SweepKind(word="warm", stream=7, header="ambient_C", digits=2, noise=0.02, is_temperature=True)


def thermal_recordings(
    plan: Plan, truth: Truth, effects: Effects, schedule: Schedule, seed: int
) -> Iterator[SyntheticRecording]:
    """Yield the log of every warming, one wide file a run of a module; nothing without a plan for them."""
    if plan.thermal is not None:
        yield from sweep_recordings(plan, plan.thermal, THERMAL, truth, effects, schedule, seed)
