"""A planned campaign as a value: what is to be run, and the spread that is assumed for it."""

from __future__ import annotations

import math
from dataclasses import dataclass, field

REHEARSED_KINDS: tuple[str, ...] = ("staircase", "cyclic", "hold", "pressure", "layout")
"""Kinds of trial that a rehearsal can run; staircases always."""

LINE_LEVELS: tuple[str, ...] = ("batch", "module", "sensor", "session", "repetition")
"""Levels whose spread is that of a line."""


@dataclass(frozen=True)
class PlannedLine:
    """Assumed spread of a level, as strain: signal divided by the generation's mean slope.

    Attributes
    ----------
    zero
        SD at rest, mm/mm.
    slope
        SD of the slope as a share of the mean slope.
    correlation
        Between the two, −1 to 1.
    """

    zero: float = 0.0
    slope: float = 0.0
    correlation: float = 0.0

    def sd_at(self, strain: float) -> float:
        """Return the SD in mm/mm at *strain* (mm/mm)."""
        along = self.slope * strain
        square = self.zero**2 + 2.0 * self.correlation * self.zero * along + along**2
        return math.sqrt(max(square, 0.0))


@dataclass(frozen=True)
class PlannedGeneration:
    """What is assumed of one generation; strains are signals divided by its mean slope.

    Attributes
    ----------
    name
        Of the generation.
    signal_pf, gauge_factor
        Mean signal at rest in pF, and its relative change a unit strain, of a sensor of the mean rest length.
    batch, module, sensor, session, repetition
        Spread of lines.
    sensor_by_level, residual, noise
        SDs in mm/mm: what a sensor repeats at a level, of a reading, of a sample.
    hysteresis, hysteresis_sd
        Width of the staircases' loop at mid range, falling minus rising, and its SD between sensors, mm/mm.
    pressure, pressure_sd
        Apparent strain a kPa, and its SD between sensors, mm/mm.
    relaxation
        Share of a step that is lost in a decade of time at a kept length.
    seat_mm
        SD of a sensor's length about the distance of its nodes in layout trials.
    """

    name: str
    signal_pf: float = 100.0
    gauge_factor: float = 1.0
    batch: PlannedLine = field(default_factory=PlannedLine)
    module: PlannedLine = field(default_factory=PlannedLine)
    sensor: PlannedLine = field(default_factory=PlannedLine)
    session: PlannedLine = field(default_factory=PlannedLine)
    repetition: PlannedLine = field(default_factory=PlannedLine)
    sensor_by_level: float = 0.0
    residual: float = 0.0
    noise: float = 0.0
    hysteresis: float = 0.0
    hysteresis_sd: float = 0.0
    pressure: float = 0.0
    pressure_sd: float = 0.0
    relaxation: float = 0.0
    seat_mm: float = 0.0

    @property
    def slope_pf(self) -> float:
        """Mean slope in pF a unit strain."""
        return self.signal_pf * self.gauge_factor

    def sd_at(self, level: str, strain: float) -> float:
        """Return the assumed SD of a level or of ``sensor_by_level``, ``residual`` at *strain*, in mm/mm."""
        own = getattr(self, level)
        return own.sd_at(strain) if isinstance(own, PlannedLine) else float(own)


@dataclass(frozen=True)
class PlannedPlace:
    """Where a sensor sits in every module: its name, rest length in mm, and nodes (empty: no geometry)."""

    position: str
    rest_length_mm: float
    start: str = ""
    end: str = ""


@dataclass(frozen=True)
class PlannedDesign:
    """The whole of ``[plan]``, checked.

    Attributes
    ----------
    generations
        What is assumed of each.
    modules, batches
        Modules and batches a generation (0 batches: not recorded).
    places
        Places of the sensors of a module.
    sessions, repetitions
        Mountings of a module, and runs of a sensor within one.
    levels
        Strains of a staircase, rising, mm/mm.
    descending
        Whether staircases also come down.
    kinds
        Kinds of trial, staircase first.
    geometry
        Name of the geometry that the places belong to; empty without one.
    """

    generations: tuple[PlannedGeneration, ...]
    modules: int
    batches: int
    places: tuple[PlannedPlace, ...]
    sessions: int
    repetitions: int
    levels: tuple[float, ...]
    descending: bool
    kinds: tuple[str, ...] = ("staircase",)
    geometry: str = ""

    @property
    def mean_rest_length_mm(self) -> float:
        """Mean rest length of the places, in mm."""
        return sum(place.rest_length_mm for place in self.places) / len(self.places)
