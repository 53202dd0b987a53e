"""Pressure trials: the actuator under a panel inflated and let down at kept lengths."""

from __future__ import annotations

from collections.abc import Iterator

from campaign.simulation.effects import Effects
from campaign.simulation.plan import Plan
from campaign.simulation.recording_text import SyntheticRecording
from campaign.simulation.schedule import Schedule
from campaign.simulation.sweep import SweepKind, sweep_recordings
from campaign.simulation.truth import Truth

PRESSURE = SweepKind(word="inflate", stream=5, header="pressure_kPa", digits=2, noise=0.02)


def pressure_recordings(
    plan: Plan, truth: Truth, effects: Effects, schedule: Schedule, seed: int
) -> Iterator[SyntheticRecording]:
    """Yield the log of every inflation, one wide file a run of a module; nothing without a plan for them."""
    if plan.pressure is not None:
        yield from sweep_recordings(plan, plan.pressure, PRESSURE, truth, effects, schedule, seed)
