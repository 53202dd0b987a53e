"""Campaigns of any size for the benchmarks: the demonstration's design grown in modules and in runs.

The values are those of ``campaign.simulation``; only the writing is another, because numbers are laid out as
text by a fast library. Everything is invented.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from datetime import date
from io import BytesIO
from itertools import chain
from pathlib import Path

import numpy as np
import polars as pl

from campaign.simulation.cyclic import cyclic_recordings
from campaign.simulation.demo import SEED, TEXTS, demo_files, demo_plan, demo_truth
from campaign.simulation.effects import draw_effects
from campaign.simulation.hold import hold_recordings
from campaign.simulation.plan import Batch, Generation, Plan
from campaign.simulation.pressure import pressure_recordings
from campaign.simulation.recording_text import SyntheticRecording
from campaign.simulation.registers import modules_text, sensors_text, sessions_text
from campaign.simulation.schedule import Schedule
from campaign.simulation.staircase import staircase_recordings
from campaign.simulation.thermal import thermal_recordings
from campaign.simulation.truth import Truth

DEMO_MODULES, DEMO_RECORDINGS = 12, 586
"""Modules and recordings of the demonstration: where growth starts."""

DIGITS = 4
"""Digits after the point of every number that is written."""

_STANDS = {"edge": ("invented bench", "edge clamps"), "frame": ("invented frame", "four node pins")}


@dataclass(frozen=True)
class Size:
    """How large a campaign is.

    Attributes
    ----------
    recordings
        Files wanted; the design gives the nearest number it can.
    rows
        Rows of a recording.
    modules
        Modules; ``None``: both modules and runs grow, with the root of the number of recordings.
    """

    recordings: int
    rows: int
    modules: int | None = None

    @property
    def even_modules(self) -> int:
        """Modules, the same number in both generations and both their batches."""
        wanted = self.modules or DEMO_MODULES * (self.recordings / DEMO_RECORDINGS) ** 0.5
        return max(4, 4 * round(wanted / 4))


def write_campaign(size: Size, folder: Path) -> int:
    """Write a campaign of a given size into an empty *folder* and return the number of recordings."""
    truth = demo_truth()
    plan = grown_plan(size)
    schedule = Schedule(date(2025, 2, 3), run_minutes=1)
    for path, data in _texts(plan, truth, schedule).items():
        _write(folder / path, data)
    count = 0
    for recording in _recordings(plan, truth, schedule):
        _write(folder / recording.file, fast_bytes(recording))
        count += 1
    return count


def grown_plan(size: Size) -> Plan:
    """Return the demonstration's design with more modules, more runs and more rows a run."""
    demo, modules = demo_plan(), size.even_modules
    names = [f"M{number + 1:03d}" for number in range(modules)]
    generations = []
    for index, generation in enumerate(demo.generations):
        own = names[index * modules // 2 : (index + 1) * modules // 2]
        half = len(own) // 2
        batches = zip(generation.batches, (own[:half], own[half:]), strict=True)
        generations.append(Generation(generation.name, tuple(Batch(b.name, tuple(m)) for b, m in batches)))
    held = {f"M{number + 1:02d}": name for number, name in enumerate(names)}
    others = size.recordings - modules * (8 + 2) - len(names) // 3 * 2 - 28
    staircases = max(1, round(others / (modules * len(demo.places) * len(demo.sessions))))
    whole = demo.staircase.dwell_s * 17 + demo.staircase.step_s * 16
    assert demo.cyclic is not None
    assert demo.pressure is not None
    assert demo.thermal is not None
    return replace(
        demo,
        generations=tuple(generations),
        omitted=frozenset(),
        repetitions=staircases,
        staircase=replace(demo.staircase, sample_period_s=whole / size.rows),
        cyclic=replace(demo.cyclic, samples_a_cycle=max(8, size.rows // demo.cyclic.cycles)),
        holds=tuple(
            replace(
                hold,
                sensors=tuple((held[module], place) for module, place in hold.sensors if module in held),
                sample_period_s=(hold.duration_s + hold.before_s + hold.after_s) / size.rows,
            )
            for hold in demo.holds
        ),
        pressure=replace(demo.pressure, missing=frozenset(), sample_period_s=378.0 / size.rows),
        thermal=replace(demo.thermal, modules=tuple(names[::3]), sample_period_s=6060.0 / size.rows),
    )


def fast_bytes(recording: SyntheticRecording) -> bytes:
    """Return the file's bytes, every number with the same digits after the point."""
    remarks = "".join(f"# {key}: {value}\n" if value else f"# {key}\n" for key, value in recording.preamble)
    table, stream = pl.DataFrame({c.header: c.values for c in recording.columns}), BytesIO()
    stream.write(remarks.encode())
    table.write_csv(stream, float_precision=DIGITS)
    return stream.getvalue()


def change_one(folder: Path) -> Path:
    """Change one number in the middle of one staircase and return the file: a trial measured anew."""
    path = sorted(folder.glob("trials/*/*_cal_*.csv"))[0]
    lines = path.read_text().split("\n")
    middle = len(lines) // 2
    fields = lines[middle].split(",")
    fields[2] = f"{float(fields[2]) + 0.01:.{DIGITS}f}"
    lines[middle] = ",".join(fields)
    path.write_text("\n".join(lines))
    return path


def _texts(plan: Plan, truth: Truth, schedule: Schedule) -> dict[str, bytes]:
    """The description, the notes and the registers; no faults are put in."""
    details = {generation.name: {"materials": "invented"} for generation in plan.generations}
    registers = {
        "modules.csv": modules_text(plan, details),
        "sensors.csv": sensors_text(plan, truth, SEED, {}),
        "sessions.csv": sessions_text(plan, truth, SEED, schedule, _STANDS),
    }
    demo = demo_files()
    return {path: demo[path] for path in TEXTS} | {name: text.encode() for name, text in registers.items()}


def _recordings(plan: Plan, truth: Truth, schedule: Schedule) -> Iterator[SyntheticRecording]:
    """Every recording as it passes: none is kept."""
    generator = np.random.default_rng(SEED)
    effects = draw_effects(plan, truth, generator)
    return chain(
        staircase_recordings(plan, truth, effects, generator, schedule, SEED),
        cyclic_recordings(plan, truth, effects, schedule, SEED),
        hold_recordings(plan, truth, effects, schedule, SEED),
        pressure_recordings(plan, truth, effects, schedule, SEED),
        thermal_recordings(plan, truth, effects, schedule, SEED),
    )


def _write(path: Path, data: bytes) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(data)
