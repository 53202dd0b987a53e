"""A planned design made into a plan and a truth of the generator: what is assumed, in signal units."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import time
from typing import Any

from campaign.simulation.plan import Batch, Generation, Place, Plan, StaircasePlan
from campaign.simulation.trial_plans import CyclicPlan, HoldPlan, LayoutPlan, SweepPlan, placed
from campaign.simulation.trial_truths import (
    HoldTruth,
    InfluenceTruth,
    LayoutTruth,
    LogarithmicRelaxation,
)
from campaign.simulation.truth import (
    Components,
    GenerationTruth,
    LineSpread,
    LoopWidth,
    SampleNoise,
    SignalLaw,
)

SHAPES: tuple[tuple[float, float, float], ...] = (
    (0.12, 0.12, 0.0),
    (0.75, 0.25, 0.0),
    (0.25, 0.80, 0.0),
    (0.50, 0.55, 0.30),
    (0.40, 0.40, 0.0),
    (0.90, 0.05, 0.0),
)
"""Placements of a rehearsed layout: stretch along and across, and shear, as shares of the highest strain."""


@dataclass(frozen=True)
class AssumedProcess:
    """What is assumed of one generation, in strain: signals divided by the mean slope.

    Attributes
    ----------
    name, signal, gauge_factor
        Of the generation: its mean signal at rest (signal units) and the relative change of it a unit strain.
    lines
        By level (batch, module, sensor, session, repetition): SD at rest (mm/mm), relative SD of the slope,
        correlation of the two.
    sensor_by_level, residual, noise, hysteresis, hysteresis_sd
        SDs, and the loop's width at mid range with its SD between sensors, mm/mm.
    pressure, pressure_sd
        Apparent strain a kPa, and its SD between sensors.
    relaxation
        Share of a step lost in a decade of time.
    seat_mm
        As in :class:`LayoutTruth`.
    """

    name: str
    signal: float
    gauge_factor: float
    lines: Mapping[str, tuple[float, float, float]] = field(default_factory=dict)
    sensor_by_level: float = 0.0
    residual: float = 0.0
    noise: float = 0.0
    hysteresis: float = 0.0
    hysteresis_sd: float = 0.0
    pressure: float = 0.0
    pressure_sd: float = 0.0
    relaxation: float = 0.0
    seat_mm: float = 0.0


def assumed_truth(process: AssumedProcess, mean_rest_length_mm: float) -> GenerationTruth:
    """Return what is true of a generation of which *process* is assumed.

    A sensor of the mean rest length has the mean line; longer ones have a steeper line and the same cable.
    """
    slope = process.signal * process.gauge_factor
    spread: dict[str, Any] = {
        level: LineSpread(zero * slope, relative * slope, correlation)
        for level, (zero, relative, correlation) in process.lines.items()
    }
    spread |= {name: getattr(process, name) * slope for name in ("sensor_by_level", "residual")}
    return GenerationTruth(
        law=SignalLaw(parasitic=process.signal - slope, per_mm=slope / mean_rest_length_mm),
        components=Components(**spread),
        loop=LoopWidth(process.hysteresis * slope, process.hysteresis_sd * slope),
        noise=SampleNoise(white=process.noise * slope),
        hold=HoldTruth(relaxation=LogarithmicRelaxation(process.relaxation)),
        pressure=InfluenceTruth(coefficient=process.pressure * slope, sensor_sd=process.pressure_sd * slope),
        layout=LayoutTruth(seat_mm=process.seat_mm),
    )


def assumed_plan(
    *,
    generations: Sequence[str],
    modules: int,
    batches: int,
    places: tuple[Place, ...],
    sessions: int,
    repetitions: int,
    levels: tuple[float, ...],
    descending: bool,
    kinds: Sequence[str],
    nodes: Mapping[str, tuple[float, float]],
) -> Plan:
    """Return the plan of a design: modules M01, M02, … in building order, mountings 1, 2, ….

    Parameters
    ----------
    generations
        Names.
    modules, batches
        Modules and batches a generation; 0 batches: not recorded.
    places, sessions, repetitions, levels, descending
        As in :class:`Plan` and :class:`StaircasePlan`.
    kinds
        Kinds of trial that are run: loops at the first two places, an hour's hold at the first one, inflation
        of all sensors, six placements of the nodes.
    nodes
        Of the unstretched module, in mm; needed for layouts.
    """
    positions = tuple(place.position for place in places)
    names = [f"M{number + 1:02d}" for number in range(len(generations) * modules)]
    built = tuple(
        Generation(name, _batches(index, batches, names[index * modules : (index + 1) * modules]))
        for index, name in enumerate(generations)
    )
    top, first = levels[-1], "1"
    held = tuple((module, positions[0]) for module in names)
    return Plan(
        generations=built,
        places=places,
        sessions=tuple(str(number + 1) for number in range(sessions)),
        repetitions=repetitions,
        staircase=StaircasePlan(levels=levels, descending=descending, sample_period_s=1.0),
        cyclic=CyclicPlan(positions[:2], cycles=8, low=levels[0], high=top, samples_a_cycle=60, session=first)
        if "cyclic" in kinds
        else None,
        holds=(HoldPlan(held, strain=top, sample_period_s=4.0, session=first, start=time(17, 0)),)
        if "hold" in kinds
        else (),
        pressure=SweepPlan(positions, strains=(levels[0], top / 2), sample_period_s=2.0)
        if "pressure" in kinds
        else None,
        layout=_layout(dict(nodes), top) if "layout" in kinds else None,
    )


def _batches(generation: int, batches: int, modules: list[str]) -> tuple[Batch, ...]:
    if batches == 0:
        return (Batch("", tuple(modules)),)
    bounds = [number * len(modules) // batches for number in range(batches + 1)]
    return tuple(
        Batch(f"{generation + 1}-{number + 1}", tuple(modules[bounds[number] : bounds[number + 1]]))
        for number in range(batches)
    )


def _layout(nodes: dict[str, tuple[float, float]], top: float) -> LayoutPlan:
    shapes = [placed(nodes, 1.0 + top * a, 1.0 + top * b, shear=top * s) for a, b, s in SHAPES]
    return LayoutPlan(tuple(nodes), tuple(shapes))
