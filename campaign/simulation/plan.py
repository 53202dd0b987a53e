"""What is run in a synthetic campaign: generations, batches, modules, places, mountings, runs, levels."""

from __future__ import annotations

from dataclasses import dataclass, field
from math import hypot

from campaign.simulation.trial_plans import CyclicPlan, HoldPlan, LayoutPlan, SweepPlan


@dataclass(frozen=True)
class Place:
    """Where a sensor sits in every module.

    Attributes
    ----------
    position
        Name of the place; it is also the sensor's id in its module.
    rest_length_mm
        Nominal unstretched length of a sensor there.
    start, end
        Nodes that the sensor joins; empty where the plan has no geometry.
    """

    position: str
    rest_length_mm: float
    start: str = ""
    end: str = ""


@dataclass(frozen=True)
class Batch:
    """Modules cast together; an empty name means that batches are not recorded."""

    name: str
    modules: tuple[str, ...]


@dataclass(frozen=True)
class Generation:
    """One process revision and the batches made by it."""

    name: str
    batches: tuple[Batch, ...]

    @property
    def modules(self) -> tuple[str, ...]:
        """Names of all modules of the generation, in building order."""
        return tuple(module for batch in self.batches for module in batch.modules)


@dataclass(frozen=True)
class RunKey:
    """Which run is meant: module, sensor, session and repetition."""

    module: str
    sensor: str
    session: str
    repetition: int


@dataclass(frozen=True)
class StaircasePlan:
    """One staircase: known lengths in steps.

    Attributes
    ----------
    levels
        Strains in mm/mm, in the order in which they are climbed.
    descending
        Whether the same levels are stepped down again; the highest is then the turning reading.
    dwell_s, step_s, sample_period_s
        Time kept at a level, time of the move between two, and time between two rows of the log, in seconds.
    """

    levels: tuple[float, ...] = (0.0, 0.05, 0.10, 0.15, 0.20, 0.25, 0.30, 0.35, 0.40)
    descending: bool = False
    dwell_s: float = 13.0
    step_s: float = 1.0
    sample_period_s: float = 0.5

    def __post_init__(self) -> None:
        if len(self.levels) < 1:
            raise ValueError("a staircase needs at least one level")
        if self.dwell_s <= 0 or self.step_s < 0 or self.sample_period_s <= 0:
            raise ValueError("dwell and sample period must be positive, the step's time not negative")

    @property
    def visits(self) -> tuple[tuple[int, str], ...]:
        """Index of the level and direction (rising, turning, falling) of every plateau, in order."""
        top = len(self.levels) - 1
        if not self.descending or top == 0:
            return tuple((index, "rising") for index in range(top + 1))
        climb = [(index, "rising") for index in range(top)]
        descent = [(index, "falling") for index in reversed(range(top))]
        return (*climb, (top, "turning"), *descent)


@dataclass(frozen=True)
class Plan:
    """The whole design of a synthetic campaign.

    Attributes
    ----------
    generations
        Generations with their batches and modules.
    places
        Places of a module, the same in every module.
    sessions
        Names of the mountings of each module; ``("",)`` means one mounting, not recorded.
    repetitions
        Runs of the same kind on the same sensor within one mounting.
    staircase
        What one staircase run does.
    shared_runs
        ``True``: one run carries all sensors of a module (wide files); ``False``: sensors run one at a time.
    omitted
        Staircase runs that were not made (with shared runs: sensors that were not connected in that run).
    cyclic, holds, pressure, thermal, layout
        What is run besides staircases; ``None`` or empty: nothing.
    """

    generations: tuple[Generation, ...]
    places: tuple[Place, ...]
    sessions: tuple[str, ...] = ("",)
    repetitions: int = 3
    staircase: StaircasePlan = field(default_factory=StaircasePlan)
    shared_runs: bool = False
    omitted: frozenset[RunKey] = frozenset()
    cyclic: CyclicPlan | None = None
    holds: tuple[HoldPlan, ...] = ()
    pressure: SweepPlan | None = None
    thermal: SweepPlan | None = None
    layout: LayoutPlan | None = None

    def __post_init__(self) -> None:
        modules = self.modules
        if not modules or not self.places or not self.sessions or self.repetitions < 1:
            raise ValueError("a plan needs at least one module, place, session and repetition")
        if len(set(modules)) < len(modules):
            raise ValueError("two modules of a plan have the same name")
        if len({place.position for place in self.places}) < len(self.places):
            raise ValueError("two places of a plan have the same name")

    @property
    def modules(self) -> tuple[str, ...]:
        """Names of all modules, generation by generation."""
        return tuple(module for generation in self.generations for module in generation.modules)


def regular_plan(
    *,
    generations: int = 1,
    batches: int = 0,
    modules: int = 6,
    sensors: int = 5,
    sessions: int = 0,
    repetitions: int = 3,
    levels: int = 8,
    highest_strain: float = 0.40,
    descending: bool = False,
    shared_runs: bool = False,
    rest_length_mm: float = 80.0,
    omitted: frozenset[RunKey] = frozenset(),
) -> Plan:
    """Return a balanced plan whose places are all alike.

    Parameters
    ----------
    generations, modules, sensors, repetitions, levels
        Numbers of generations, modules a generation, sensors a module, runs a mounting, levels a staircase.
    batches
        Batches a generation, of as equal size as can be; 0: not recorded.
    sessions
        Mountings a module; 0: one, not recorded.
    highest_strain
        Highest level in mm/mm; levels are equally spaced from zero.
    descending, shared_runs, omitted
        As in :class:`StaircasePlan` and :class:`Plan`.
    rest_length_mm
        Rest length of every sensor, so that places differ in nothing.

    Returns
    -------
    Plan
        Modules ``M01``…, sensors ``S1``…, generations ``generation 1``….
    """
    steps = max(levels - 1, 1)
    return Plan(
        generations=tuple(_regular_generation(index, batches, modules) for index in range(generations)),
        places=tuple(Place(f"S{index + 1}", rest_length_mm) for index in range(sensors)),
        sessions=tuple(str(index + 1) for index in range(sessions)) or ("",),
        repetitions=repetitions,
        staircase=StaircasePlan(
            levels=tuple(highest_strain * index / steps for index in range(levels)), descending=descending
        ),
        shared_runs=shared_runs,
        omitted=omitted,
    )


def _regular_generation(index: int, batches: int, modules: int) -> Generation:
    names = [f"M{index * modules + number + 1:02d}" for number in range(modules)]
    if batches == 0:
        return Generation(f"generation {index + 1}", (Batch("", tuple(names)),))
    groups = [
        names[number * modules // batches : (number + 1) * modules // batches] for number in range(batches)
    ]
    return Generation(
        f"generation {index + 1}",
        tuple(Batch(f"{index + 1}-{number + 1}", tuple(group)) for number, group in enumerate(groups)),
    )


def panel_places(
    nodes: dict[str, tuple[float, float]], edges: tuple[tuple[str, str], ...]
) -> tuple[Place, ...]:
    """Return the places of a panel whose sensors join nodes.

    Parameters
    ----------
    nodes
        Coordinates (x, y) of the unstretched panel in mm, by node name.
    edges
        Pairs of node names; the place is named by joining them.
    """
    return tuple(
        Place(
            f"{start}{end}",
            hypot(nodes[end][0] - nodes[start][0], nodes[end][1] - nodes[start][1]),
            start,
            end,
        )
        for start, end in edges
    )
