"""What to measure next: precision of a planned campaign from the components of this one, and its price."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import astuple, dataclass, fields

import numpy as np
import pandas as pd

from campaign.analyses.scope import Scope
from campaign.analyses.variance_fit import GenerationFit
from campaign.methods.campaign_design import (
    QUANTILES,
    Allocation,
    Costs,
    Design,
    Reach,
    Strata,
    best_design,
    cheapest_design,
    freedom_of_difference,
    half_width_of_difference,
    optimal_allocation,
    power_of_difference,
    powers_at,
    spread_factors,
    variance_of_mean,
    weights_of_mean,
)
from campaign.methods.identifiability import WEAK
from campaign.methods.variance_ratios import VarianceInterval, sum_of
from campaign.recordings.description import Description
from campaign.recordings.recording import ReferenceQuantity

PLANNING_COLUMNS = (
    "generations",
    "modules",
    "sensors",
    "repetitions",
    "cost",
    "difference_half_width",
    "power",
    "module_sd_low_factor",
    "module_sd_high_factor",
    "components",
    "sessions",
    "difference_half_width_low",
    "difference_half_width_high",
    "power_low",
    "power_high",
    "difference",
    "unit",
)
"""Columns of :attr:`Planning.table`; the first nine are the table's fixed part."""

MEAN_OF_ALL = "mean of the generations"
"""Components that are the mean of those of all generations."""

TABLE_MODULES = (3, 4, 5, 6, 8, 10, 12, 16, 20)
LIVE_MODULES = 40
LIVE_NONCENTRALITY = 8.0
LIVE_STEP = 0.1
WANTED_POWER = 0.8

GENERATIONS = 2
"""Plans compare two generations."""


@dataclass(frozen=True)
class PlanComponents:
    """Components of one reading of a generation's mean at mid range, as strain squared.

    Attributes
    ----------
    name
        Whose they are: a generation, or :data:`MEAN_OF_ALL`.
    strata
        The estimates.
    intervals
        Field of :class:`campaign.methods.campaign_design.Strata` → estimate with 95 % limits (NaN where not
        known).
    weak
        Components that rest on fewer than four degrees of freedom, by what pages call them.
    """

    name: str
    strata: Strata
    intervals: dict[str, VarianceInterval]
    weak: tuple[str, ...]


@dataclass(frozen=True)
class Resolved:
    """What this campaign resolved: the design of each generation and its half-width by the same formula."""

    design: Design
    half_width: float
    power: float
    factors: tuple[float, float]
    cost: float


@dataclass(frozen=True)
class Missing:
    """Something that was not measured or not resolved, and what would mend it (``kind`` of trial or '')."""

    what: str
    kind: str = ""
    remedy: str = ""


@dataclass(frozen=True)
class Planning:
    """Plans for the next campaign.

    Attributes
    ----------
    reference
        What strain stands for.
    components
        Whose components plans may rest on, the mean first where there are several; empty where modules cannot
        be told apart.
    resolved
        The design of this campaign, by the components of the mean; ``None`` without components.
    difference
        The difference that powers are for, in units of the reference.
    difference_is
        Where it comes from: ``strain_error`` (the limit), ``margin`` or ``total`` (the SD of all).
    table
        One row a design, columns :data:`PLANNING_COLUMNS`.
    costs
        As ``[costs]`` has them; ``None`` where they are not stated.
    allocation
        Sensors a module and runs a sensor that are cheapest, before rounding; ``None`` without costs.
    cheapest, best
        The cheapest whole-numbered design with a half-width of at most the difference, and the most precise
        one for what this campaign cost; ``None`` where there is none.
    reach
        How far the searches look.
    missing
        What this campaign lacks.
    reason
        Why nothing can be planned; empty where it can.
    """

    reference: ReferenceQuantity
    components: tuple[PlanComponents, ...]
    resolved: Resolved | None
    difference: float
    difference_is: str
    table: pd.DataFrame
    costs: Costs | None
    allocation: Allocation | None
    cheapest: Design | None
    best: Design | None
    reach: Reach
    missing: tuple[Missing, ...]
    reason: str = ""


def analyse_planning(
    description: Description,
    reference: ReferenceQuantity,
    fits: Sequence[GenerationFit],
    scope: Scope,
) -> Planning:
    """Plan the next campaign from the components of this one.

    Parameters
    ----------
    description
        Costs, limits and margins.
    reference
        What x is.
    fits
        The nested fit of each generation by itself.
    scope
        What was measured and what not.

    Returns
    -------
    Planning
        Without components where no generation tells modules apart; then it says what is missing, no more.
    """
    known = [one for fit in fits if (one := components_of(fit)) is not None]
    missing = tuple(_missing(fits, scope))
    if not known:
        return _nothing(reference, missing, _reason(fits))
    components = (mean_of(known), *known) if len(known) > 1 else tuple(known)
    plan = components[0]
    design = usual_design([fit for fit in fits if components_of(fit) is not None])
    difference, origin = _difference(description, reference, plan)
    costs = costs_of(description)
    reach = Reach(LIVE_MODULES, max(design.sensors, 8), max(design.repetitions * design.sessions, 8))
    return Planning(
        reference=reference,
        components=components,
        resolved=_resolved(plan, design, difference, costs),
        difference=difference,
        difference_is=origin,
        table=planning_table(components, design, difference, costs, reference.unit),
        costs=costs,
        allocation=optimal_allocation(one_mounting(plan.strata, design.sessions), costs) if costs else None,
        cheapest=cheapest_design(plan.strata, costs, difference, reach, design.sessions) if costs else None,
        best=best_design(plan.strata, costs, costs.of(design), reach, design.sessions) if costs else None,
        reach=reach,
        missing=missing,
    )


def costs_of(description: Description) -> Costs | None:
    """Return ``[costs]`` where all three are stated."""
    stated = description.costs
    names = [field.name for field in fields(Costs)]
    return Costs(**{name: stated[name] for name in names}) if all(n in stated for n in names) else None


_STRATUM_OF = {
    "module": "module",
    "mounting": "module_mounting",
    "run": "module_run",
    "sensor": "sensor",
    "session": "sensor_mounting",
    "repetition": "sensor_run",
}
"""Component of the nested model → what has to be repeated to average it out."""


def components_of(fit: GenerationFit) -> PlanComponents | None:
    """Return the components of a generation at mid range, or ``None`` where modules cannot be told apart.

    A sensor's value is that of its line: what repeats at a level in every run adds to the sensor, and the
    noise of a reading to the run, both divided by the number of levels.
    """
    counts = fit.model.counts
    names = {component.name: component for component in fit.components}
    lone = counts.sensors == counts.modules and counts.modules > counts.generations
    if not fit.mean_slope or not ("module" in names or lone):
        return None
    square = 1.0 / fit.mean_slope**2
    levels = max(counts.run_levels, 1)
    parts: dict[str, list[VarianceInterval]] = {field.name: [] for field in fields(Strata)}
    for name in names:
        stratum, divisor = _STRATUM_OF.get(name, ""), 1.0
        if name == "sensor_by_level":
            stratum, divisor = "sensor", float(levels)
        elif name == "residual":
            stratum, divisor = "sensor_run", float(max(counts.run_readings, 1))
        if lone and "module" not in names and stratum == "sensor":
            stratum = "module"
        if stratum:
            parts[stratum].append(_scaled(fit.variance_at(name, "mid"), square / divisor))
    intervals = {stratum: sum_of(found) for stratum, found in parts.items()}
    weak = [c.called for n, c in names.items() if n in _STRATUM_OF and c.degrees_of_freedom < WEAK]
    strata = Strata(**{stratum: interval.estimate for stratum, interval in intervals.items()})
    return PlanComponents(fit.generation, strata, intervals, tuple(weak))


def _scaled(variance: VarianceInterval, factor: float) -> VarianceInterval:
    return VarianceInterval(variance.estimate * factor, variance.low * factor, variance.high * factor)


def mean_of(components: Sequence[PlanComponents]) -> PlanComponents:
    """Return the mean of the components of several generations."""
    share = 1.0 / len(components)
    names = [field.name for field in fields(Strata)]
    intervals = {n: sum_of([_scaled(c.intervals[n], share) for c in components]) for n in names}
    strata = Strata(**{name: interval.estimate for name, interval in intervals.items()})
    weak = tuple(dict.fromkeys(called for c in components for called in c.weak))
    return PlanComponents(MEAN_OF_ALL, strata, intervals, weak)


def variance_with_limits(components: PlanComponents, design: Design) -> VarianceInterval:
    """Return the variance of a difference of two means of *design*, with limits from those of components."""
    weights = weights_of_mean(design)
    parts = [_scaled(components.intervals[name], GENERATIONS * weight) for name, weight in weights.items()]
    return sum_of([part for part in parts if part.estimate > 0 or part.high > 0])


def usual_design(fits: Sequence[GenerationFit]) -> Design:
    """Return what the generations have in the usual case: modules, sensors, runs a mounting, mountings."""
    counts = [fit.model.counts for fit in fits]
    modules = min(c.modules for c in counts)
    sensors = round(sum(c.sensors for c in counts) / sum(c.modules for c in counts))
    sessions = round(sum(c.sessions for c in counts) / sum(c.sensors for c in counts))
    runs = round(sum(c.runs for c in counts) / sum(c.sessions for c in counts))
    return Design(modules, max(sensors, 1), max(runs, 1), max(sessions, 1))


def one_mounting(strata: Strata, sessions: int) -> Strata:
    """Return the components with mountings folded into modules and sensors, for a fixed number of them."""
    return Strata(
        module=strata.module + strata.module_mounting / sessions,
        sensor=strata.sensor + strata.sensor_mounting / sessions,
        sensor_run=strata.sensor_run,
        module_run=strata.module_run,
    )


def _difference(
    description: Description, reference: ReferenceQuantity, plan: PlanComponents
) -> tuple[float, str]:
    """The difference to plan for: the limit of the error in use, else the SD of single sensors."""
    value, unit = description.limits.get("strain_error", (math.nan, ""))
    if unit == reference.unit and value > 0:
        return value, "strain_error"
    return math.sqrt(variance_of_mean(plan.strata, Design(1, 1, 1))), "total"


def _resolved(plan: PlanComponents, design: Design, difference: float, costs: Costs | None) -> Resolved:
    if design.modules < 2:
        return Resolved(
            design, math.nan, math.nan, (math.nan, math.nan), costs.of(design) if costs else math.nan
        )
    variance = GENERATIONS * variance_of_mean(plan.strata, design)
    freedom = freedom_of_difference(design.modules)
    return Resolved(
        design=design,
        half_width=half_width_of_difference(variance, freedom),
        power=power_of_difference(difference, variance, freedom),
        factors=spread_factors(design.modules),
        cost=costs.of(design) if costs else math.nan,
    )


def planning_table(
    components: Sequence[PlanComponents],
    present: Design,
    difference: float,
    costs: Costs | None,
    unit: str,
) -> pd.DataFrame:
    """Return half-width, power and limits of a module SD for designs about the present one.

    Numbers of modules as in :data:`TABLE_MODULES`; sensors and runs as they are, and either one halved; one
    and the present number of mountings.
    """
    rows = [_row(one, design, difference, costs, unit) for one in components for design in _designs(present)]
    return pd.DataFrame(rows, columns=list(PLANNING_COLUMNS))


def _designs(present: Design) -> Iterator[Design]:
    half = (max(present.sensors // 2, 1), max(present.repetitions // 2, 1))
    within = dict.fromkeys(
        (
            (present.sensors, present.repetitions, present.sessions),
            (half[0], present.repetitions, present.sessions),
            (present.sensors, half[1], present.sessions),
            (present.sensors, present.repetitions, 1),
        )
    )
    for sensors, repetitions, sessions in within:
        for modules in sorted({*TABLE_MODULES, present.modules} - {1}):
            yield Design(modules, sensors, repetitions, sessions)


def _row(
    components: PlanComponents, design: Design, difference: float, costs: Costs | None, unit: str
) -> dict[str, object]:
    variance = variance_with_limits(components, design)
    freedom = freedom_of_difference(design.modules)
    widths = [half_width_of_difference(v, freedom) for v in astuple(variance)]
    powers = [power_of_difference(difference, v, freedom) if v >= 0 else math.nan for v in astuple(variance)]
    low, high = spread_factors(design.modules)
    return {
        "generations": GENERATIONS,
        "modules": design.modules,
        "sensors": design.sensors,
        "repetitions": design.repetitions,
        "cost": costs.of(design) if costs else math.nan,
        "difference_half_width": widths[0],
        "power": powers[0],
        "module_sd_low_factor": low,
        "module_sd_high_factor": high,
        "components": components.name,
        "sessions": design.sessions,
        "difference_half_width_low": widths[1],
        "difference_half_width_high": widths[2],
        "power_low": powers[2],
        "power_high": powers[1],
        "difference": difference,
        "unit": unit,
    }


def power_grid() -> list[list[float]]:
    """Return the power of the test at each noncentrality (columns) for 2 modules and more (rows).

    Noncentralities run from 0 to :data:`LIVE_NONCENTRALITY` in steps of :data:`LIVE_STEP`.
    """
    places = range(round(LIVE_NONCENTRALITY / LIVE_STEP) + 1)
    noncentralities = np.array([place * LIVE_STEP for place in places], dtype=np.float64)
    return [
        powers_at(noncentralities, freedom_of_difference(modules)).tolist()
        for modules in range(2, LIVE_MODULES + 1)
    ]


def quantiles() -> list[float]:
    """Return the 97.5 % quantile of Student's t for 2 modules a generation and more."""
    return [QUANTILES[freedom_of_difference(modules)] for modules in range(2, LIVE_MODULES + 1)]


def _reason(fits: Sequence[GenerationFit]) -> str:
    return "modules" if fits else "staircases"


def _nothing(reference: ReferenceQuantity, missing: tuple[Missing, ...], reason: str) -> Planning:
    return Planning(
        reference=reference,
        components=(),
        resolved=None,
        difference=math.nan,
        difference_is="",
        table=pd.DataFrame(columns=list(PLANNING_COLUMNS)),
        costs=None,
        allocation=None,
        cheapest=None,
        best=None,
        reach=Reach(LIVE_MODULES, 8, 8),
        missing=missing,
        reason=reason,
    )


def _missing(fits: Sequence[GenerationFit], scope: Scope) -> Iterator[Missing]:
    """What would most change what can be said: the design first, then kinds of trial."""
    if scope.generations < 2:
        yield Missing("second generation")
    for fit in fits:
        counts = fit.model.counts
        if counts.modules < 3:
            yield Missing("modules", remedy=fit.generation)
        if 0 < counts.batches < 3:
            yield Missing("batches", remedy=fit.generation)
        if counts.sessions <= counts.sensors:
            yield Missing("mountings", remedy=fit.generation)
        if counts.runs <= counts.sessions:
            yield Missing("runs", remedy=fit.generation)
    for kind in scope.not_measured:
        yield Missing("kind", kind=kind)
