"""The registers of a synthetic campaign: modules.csv, sensors.csv, sessions.csv as texts."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Mapping, Sequence

import numpy as np

from campaign.simulation.effects import draw_effects
from campaign.simulation.plan import Plan
from campaign.simulation.schedule import Schedule
from campaign.simulation.sweep import framed_sensor
from campaign.simulation.truth import Truth


def csv_text(header: Sequence[str], rows: Iterable[Sequence[object]]) -> str:
    """Return a table as comma-separated text with one header line."""
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(header)
    writer.writerows(rows)
    return stream.getvalue()


def joined_text(first: str, second: str) -> str:
    """Return two registers of the same columns as one."""
    header, rows = second.split("\n", 1)
    if not first.startswith(f"{header}\n"):
        raise ValueError("two registers with other columns cannot be joined")
    return first + rows


def modules_text(plan: Plan, details: Mapping[str, Mapping[str, str]]) -> str:
    """Return ``modules.csv``: module, generation, batch, and the columns of *details* (by generation)."""
    columns = list(next(iter(details.values()))) if details else []
    rows = [
        [module, generation.name, batch.name, *(details[generation.name][column] for column in columns)]
        for generation in plan.generations
        for batch in generation.batches
        for module in batch.modules
    ]
    return csv_text(["module", "generation", "batch", *columns], rows)


def sensors_text(
    plan: Plan, truth: Truth, seed: int, fates: Mapping[tuple[str, str], tuple[str, str]]
) -> str:
    """Return ``sensors.csv``; *fates* maps (module, sensor) to its fate and the reason."""
    effects = draw_effects(plan, truth, np.random.default_rng(seed))
    uncertainty = f"{truth.stand.rest_length_mm:g}"
    rows = []
    for index, module in enumerate(plan.modules):
        for number, place in enumerate(plan.places):
            rest = f"{effects.rest_length_mm[index * len(plan.places) + number]:.2f}"
            fate, reason = fates.get((module, place.position), ("", ""))
            names = (module, place.position, place.position, place.start, place.end)
            rows.append([*names, rest, uncertainty, "optical comparator (invented)", fate, reason])
    header = ["module", "sensor", "position", "from", "to", "rest_length", "rest_length_uncertainty"]
    return csv_text([*header, "rest_length_method", "fate", "reason"], rows)


def sessions_text(
    plan: Plan, truth: Truth, seed: int, schedule: Schedule, stands: Mapping[str, tuple[str, str]]
) -> str:
    """Return ``sessions.csv``: one row a mounting of a module, with day, stand, grip and temperature (°C).

    *stands* gives stand and grip of mountings edge by edge (``"edge"``) and in the frame (``"frame"``).
    """
    effects = draw_effects(plan, truth, np.random.default_rng(seed))
    rows = []
    for index, module in enumerate(plan.modules):
        for number, session in enumerate(plan.sessions):
            day = schedule.mounting_day(plan, module, session)
            warmth = effects.temperature_c[index * len(plan.sessions) + number]
            started = f"{day.isoformat()}T{schedule.first_hour.isoformat()}"
            rows.append([session, module, started, *stands["edge"], f"{warmth:.1f}"])
        framed = next(
            (f for f in (plan.pressure, plan.layout) if f and module in (f.modules or plan.modules)), None
        )
        if framed is not None:
            sensor = framed_sensor(plan, truth, effects, module, plan.places[0].position, seed)
            day = schedule.mounting_day(plan, module, plan.sessions[0])
            started = f"{day.isoformat()}T{framed.start.isoformat()}"
            rows.append([framed.session, module, started, *stands["frame"], f"{sensor.temperature_c:.1f}"])
    return csv_text(["session", "module", "started", "stand", "grip", "temperature"], rows)
