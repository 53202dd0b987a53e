"""What is true of loops, holds, influences and layouts, generation by generation."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class CyclicTruth:
    """What cycling adds to a sensor's line; its settled loop is that of its staircases.

    Attributes
    ----------
    delay_s
        By how much the logged signal is late against the logged length; it widens loops with rate.
    width_share_per_decade
        Growth of the loop's width a decade of rate above ``reference_rate_per_s``, as a share of it.
    reference_rate_per_s
        Rate at which the loop has the width of the staircases.
    first_width_share
        Extra width of the first cycle after a long rest, as a share of the settled width.
    softening_share
        Extra signal of that cycle, as a share of its change from the lower turn.
    conditioning_cycles
        Cycles in which both extras fall to 1/e.
    recovered
        Share of both extras that has come back when the next run starts.
    run_sd
        SD of a run's width about the sensor's, signal units.
    """

    delay_s: float = 0.0
    width_share_per_decade: float = 0.0
    reference_rate_per_s: float = 0.01
    first_width_share: float = 0.0
    softening_share: float = 0.0
    conditioning_cycles: float = 1.5
    recovered: float = 1.0
    run_sd: float = 0.0

    def remaining(self, cycle: FloatArray, run: int) -> FloatArray:
        """Return the share of the extras left in *cycle* (from 1) of a sensor's *run* (from 1)."""
        start = 1.0 if run == 1 else self.recovered
        return np.asarray(start * np.exp(-(cycle - 1.0) / self.conditioning_cycles))


@dataclass(frozen=True)
class LogarithmicRelaxation:
    """A signal that falls by equal shares of the step in every decade of time: share · log10(1 + t/τ)."""

    share_per_decade: float
    time_s: float = 5.0

    def at(self, time_s: FloatArray) -> FloatArray:
        """Return the share of the step that is gone at *time_s* after it."""
        return np.asarray(self.share_per_decade * np.log10(1.0 + time_s / self.time_s))

    @property
    def words(self) -> str:
        """The law with its values."""
        return (
            f"{100 * self.share_per_decade:g} % of the step × log10(1 + t/τ), τ = {self.time_s:g} s "
            "(logarithmic)"
        )


@dataclass(frozen=True)
class StretchedRelaxation:
    """A stretched exponential (Kohlrausch): share · (1 − exp(−(t/τ)^β))."""

    share: float
    time_s: float = 300.0
    exponent: float = 0.5

    def at(self, time_s: FloatArray) -> FloatArray:
        """Return the share of the step that is gone at *time_s* after it."""
        return np.asarray(self.share * (1.0 - np.exp(-((time_s / self.time_s) ** self.exponent))))

    @property
    def words(self) -> str:
        """The law with its values."""
        return (
            f"{100 * self.share:g} % of the step × (1 − exp(−(t/τ)^β)), τ = {self.time_s:g} s, "
            f"β = {self.exponent:g} (stretched exponential)"
        )


Relaxation = LogarithmicRelaxation | StretchedRelaxation


@dataclass(frozen=True)
class HoldTruth:
    """What time does to a sensor.

    Attributes
    ----------
    relaxation
        How the signal falls at a kept strain, as a share of the step.
    relative_sd
        SD between sensors of that share, relative to it.
    left_after
        Share of the relaxed signal that is still missing right after the return to the rest length.
    recovery_s
        Time constant with which it comes back, in s.
    drift_per_hour, drift_sd
        Slope at rest: mean, and SD between sensors, signal units an hour.
    flicker
        Flicker floor: Allan deviation that 1/f noise alone would show at any averaging time, signal units.
    """

    relaxation: Relaxation = field(default_factory=lambda: LogarithmicRelaxation(0.0))
    relative_sd: float = 0.0
    left_after: float = 0.5
    recovery_s: float = 300.0
    drift_per_hour: float = 0.0
    drift_sd: float = 0.0
    flicker: float = 0.0


@dataclass(frozen=True)
class InfluenceTruth:
    """How an influence p moves the signal: c·p + d·ε·p, and a loop between its way up and its way down.

    Attributes
    ----------
    coefficient, module_sd, sensor_sd, run_sd
        c: mean, SDs between modules, between sensors of a module and between runs, signal units a unit of p.
    per_strain, per_strain_sd
        d: mean and SD between sensors, signal units a unit of p and mm/mm.
    loop, loop_sd
        Rising minus falling signal at mid range: mean, and SD between sensors, signal units.
    origin
        Value of the influence at which it changes nothing.
    outliers
        Sensors whose c is not drawn: module, place and c.
    """

    coefficient: float = 0.0
    module_sd: float = 0.0
    sensor_sd: float = 0.0
    run_sd: float = 0.0
    per_strain: float = 0.0
    per_strain_sd: float = 0.0
    loop: float = 0.0
    loop_sd: float = 0.0
    origin: float = 0.0
    outliers: tuple[tuple[str, str, float], ...] = ()


@dataclass(frozen=True)
class LayoutTruth:
    """What happens to a sensor between its nodes, beside all that happens to it on the stage.

    Attributes
    ----------
    seat_mm
        SD of a sensor's length about the distance of its nodes, drawn once a sensor and placement.
    slips
        Blunders: module, place, run and number of the placement (both from 1), and by how many mm the sensor
        was longer there than the distance of its nodes.
    """

    seat_mm: float = 0.0
    slips: tuple[tuple[str, str, int, int, float], ...] = ()

    def slip_mm(self, module: str, position: str, run: int, placement: int) -> float:
        """Return by how much a sensor's length is wrong in one placement, in mm; 0 without a blunder."""
        where = (module, position, run, placement)
        return sum(slip[4] for slip in self.slips if slip[:4] == where)
