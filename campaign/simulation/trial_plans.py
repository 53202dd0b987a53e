"""What is run besides staircases: loops, holds, sweeps of pressure or temperature, and layouts."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import time


@dataclass(frozen=True)
class CyclicPlan:
    """Stretch and release at constant speed between two strains, every sensor by itself.

    Attributes
    ----------
    positions
        Places that are run, in every module.
    rates_per_s
        Speeds in mm/mm a second. Rates take turns: one run at each, then all again, so that no rate is
        favoured by what came before; a sensor's runs are numbered from 1 in that order.
    repetitions
        Runs at each rate.
    cycles, low, high
        Cycles of a run, and the strains between which they go (mm/mm).
    samples_a_cycle
        Rows of the log while a cycle moves, whatever its rate.
    session, start, run_minutes
        Mounting in which they are run, time of the first run, and from one run's start to the next.
    """

    positions: tuple[str, ...]
    rates_per_s: tuple[float, ...] = (0.01, 0.1)
    repetitions: int = 2
    cycles: int = 12
    low: float = 0.0
    high: float = 0.40
    samples_a_cycle: int = 80
    session: str = ""
    start: time = time(11, 30)
    run_minutes: int = 20

    def __post_init__(self) -> None:
        if not self.rates_per_s or min(self.rates_per_s) <= 0 or self.high <= self.low:
            raise ValueError("rates must be positive, and the upper strain above the lower one")
        if min(self.repetitions, self.cycles) < 1 or self.samples_a_cycle < 8:
            raise ValueError("a cyclic run needs a cycle and eight samples of it")

    @property
    def run_rates_per_s(self) -> tuple[float, ...]:
        """Rate of every run of a sensor, in the order of running."""
        return self.rates_per_s * self.repetitions


@dataclass(frozen=True)
class HoldPlan:
    """One strain kept for long, with the rest length kept before and after where it is not the rest length.

    Attributes
    ----------
    sensors
        Pairs of module and place.
    strain
        What is kept, in mm/mm; 0: a hold at rest, with no motion at all.
    repetition
        Number of the run among the sensor's holds.
    duration_s, before_s, after_s, ramp_s
        Times of the hold, of the rest before and after it, and of each move, in s.
    sample_period_s
        Between two rows of the log.
    warming_k
        Step of the room's temperature half-way through the hold, in K.
    session, start
        Mounting in which it is run, and the time at which it starts.
    """

    sensors: tuple[tuple[str, str], ...]
    strain: float = 0.0
    repetition: int = 1
    duration_s: float = 3600.0
    before_s: float = 60.0
    after_s: float = 300.0
    ramp_s: float = 4.0
    sample_period_s: float = 2.0
    warming_k: float = 0.0
    session: str = ""
    start: time = time(14, 30)

    def __post_init__(self) -> None:
        if (
            min(self.duration_s, self.ramp_s, self.sample_period_s) <= 0
            or min(self.before_s, self.after_s) < 0
        ):
            raise ValueError("times of a hold must be positive")

    @property
    def at_rest(self) -> bool:
        """Whether nothing moves."""
        return self.strain == 0.0


@dataclass(frozen=True)
class SweepPlan:
    """An influence swept up and down at one kept strain after another, all sensors of a module at once.

    Attributes
    ----------
    positions
        Places that are logged, one pair of columns each.
    modules
        Modules that are run; empty: all.
    missing
        Pairs of module and place that are not connected.
    strains
        Strains kept in turn, in mm/mm; every second run takes them in reverse.
    low, high
        Range of the influence, in its unit.
    leg_s, move_s, sample_period_s
        Time of a way up or down, of a move to the next strain, and between two rows, in s.
    repetitions
        Runs of a module.
    session, start, run_minutes
        The frame is a mounting of its own, made on the day of the module's first one: its name, the time of
        the first run, and from one run's start to the next.
    """

    positions: tuple[str, ...]
    modules: tuple[str, ...] = ()
    missing: frozenset[tuple[str, str]] = frozenset()
    strains: tuple[float, ...] = (0.0, 0.15, 0.30)
    low: float = 0.0
    high: float = 20.0
    leg_s: float = 60.0
    move_s: float = 6.0
    sample_period_s: float = 1.0
    repetitions: int = 2
    session: str = "F"
    start: time = time(13, 0)
    run_minutes: int = 10

    def __post_init__(self) -> None:
        if not self.strains or not self.positions or self.high <= self.low or self.repetitions < 1:
            raise ValueError("a sweep needs a place, a strain, a run and a range that rises")
        if min(self.leg_s, self.move_s, self.sample_period_s) <= 0:
            raise ValueError("times of a sweep must be positive")


@dataclass(frozen=True)
class LayoutPlan:
    """A module pinned by its nodes at one known shape after another, all its sensors logged at once.

    Attributes
    ----------
    nodes
        Names of the nodes.
    placements
        Places (x, y) of the nodes in mm, node by node, one placement after another: what is stated of the
        support points.
    modules
        Modules that are run; empty: all.
    missing
        Pairs of module and place that are not connected.
    samples, sample_period_s, placement_s
        Rows logged at a placement, time between two, and from one placement to the next, in s.
    repetitions
        Runs of a module; every second run takes the placements in reverse.
    session, start, run_minutes
        The frame is a mounting of its own, as in :class:`SweepPlan`.
    """

    nodes: tuple[str, ...]
    placements: tuple[tuple[tuple[float, float], ...], ...]
    modules: tuple[str, ...] = ()
    missing: frozenset[tuple[str, str]] = frozenset()
    samples: int = 5
    sample_period_s: float = 2.0
    placement_s: float = 60.0
    repetitions: int = 1
    session: str = "F"
    start: time = time(13, 30)
    run_minutes: int = 15

    def __post_init__(self) -> None:
        if not self.placements or any(len(places) != len(self.nodes) for places in self.placements):
            raise ValueError("a layout needs a placement, and every placement a place for every node")
        if min(self.samples, self.repetitions) < 1 or min(self.sample_period_s, self.placement_s) <= 0:
            raise ValueError("a layout needs a row, a run and positive times")

    def order(self, run: int) -> tuple[int, ...]:
        """Return the indices of the placements in the order in which *run* (from 1) takes them."""
        indices = range(len(self.placements))
        return tuple(indices if run % 2 else reversed(indices))


def placed(
    nodes: dict[str, tuple[float, float]],
    along: float = 1.0,
    across: float = 1.0,
    shear: float = 0.0,
    moved: dict[str, tuple[float, float]] | None = None,
) -> tuple[tuple[float, float], ...]:
    """Return places of the nodes after a stretch along x and y, a shear, and moves of single nodes (mm)."""
    further = moved or {}
    return tuple(
        (
            round(along * x + shear * y + further.get(name, (0.0, 0.0))[0], 2),
            round(across * y + further.get(name, (0.0, 0.0))[1], 2),
        )
        for name, (x, y) in nodes.items()
    )
