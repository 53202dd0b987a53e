"""An uncertainty budget that follows the conditions of use: time, pressure, temperature, strain across.

The error of a strain read from one signal by a line is a sum of independent parts. Parts that do not depend
on the conditions are lines of the budget as they stand; the others are coefficients that conditions turn into
lines. The script of the budget page does the same (``site_templates/js/budget.js``); tests hold it to this.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from campaign.methods.uncertainty_budget import BudgetLine, CombinedUncertainty, combine
from campaign.recordings.description import Description
from campaign.units import UnitError, parse_quantity

LINE = "calibration line"
SENSORS = "sensor to sensor"
MOUNTING = "remounting"
RUN = "run to run"
LACK = "lack of fit"
NOISE = "reading noise"
LOOP = "hysteresis"
TIME = "drift or creep"
PRESSURE = "pressure"
TEMPERATURE = "temperature"
ACROSS = "cross-axis"
REFERENCE = "reference length"
RESOLUTION = "signal resolution"
RATE = "rate of stretch"
SOURCES = (
    *(LINE, SENSORS, MOUNTING, RUN, LACK, NOISE, LOOP, TIME, PRESSURE),
    *(TEMPERATURE, ACROSS, REFERENCE, RESOLUTION, RATE),
)
"""All sources, in the order of tables."""

COUNTED, CONTAINED, ABSENT, NOT_KNOWN = "counted", "contained", "not in use", "unknown"
"""What becomes of a source: it adds to U; it is inside another source already; the conditions of use do not
hold it; it is not known, so that U is at least what the others come to. A source that was not measured is
unknown, unless the conditions state that there is none of it."""

NOT_STATED: Mapping[str, str] = {
    TIME: "[use] states no time: taken as read when the zero is taken",
    PRESSURE: "[use] states no pressure: taken as none",
    TEMPERATURE: "[use] states no range of temperature: taken as that of the calibration",
    ACROSS: "[use] states no transverse strain: taken as none",
}
"""Why a source that was measured does not count."""

UNIFORM = math.sqrt(3.0)
"""A change that may have gone any part of its way has the root mean square change/√3."""


@dataclass(frozen=True)
class UseConditions:
    """The conditions that an uncertainty in use is stated for; NaN where they are not stated.

    Attributes
    ----------
    direction
        ``unknown``, ``rising`` or ``falling``: how the length was approached.
    time_since_zero_s
        Longest time since the zero was taken, s.
    pressure_kpa
        Pressure up to which readings are taken.
    pressure_corrected
        Whether pressure is measured and taken off by the sensor's (else the generation's) coefficient.
    temperature_range_k
        Whole width of the range of temperature, about that of the calibration.
    transverse_strain
        Strain across the axis up to which readings are taken, mm/mm.
    rate_per_s
        Rate of stretch, units of the reference a second.
    """

    direction: str = "unknown"
    time_since_zero_s: float = math.nan
    pressure_kpa: float = math.nan
    pressure_corrected: bool = False
    temperature_range_k: float = math.nan
    transverse_strain: float = math.nan
    rate_per_s: float = math.nan


def conditions_of_use(description: Description) -> UseConditions:
    """Return the conditions that ``[use]`` states."""

    def stated(key: str, family: str) -> float:
        try:
            return parse_quantity(description.use[key], (family,)).value
        except (KeyError, UnitError):
            return math.nan

    return UseConditions(
        direction=description.use.get("direction", "unknown"),
        time_since_zero_s=stated("time_since_zero", "time"),
        pressure_kpa=stated("pressure", "pressure"),
        temperature_range_k=stated("temperature_range", "temperature difference"),
        transverse_strain=stated("transverse_strain", "strain"),
        rate_per_s=stated("rate", "rate"),
    )


@dataclass(frozen=True)
class Effect:
    """What an influence does to a reading at one place, in units of x per unit of the influence.

    Attributes
    ----------
    value
        Its size, sign included; it is not corrected for unless conditions say so.
    spread, degrees_of_freedom
        Standard uncertainty of the value for a sensor and occasion in use.
    farthest
        Largest amount of the influence that the campaign supports.
    inside
        Variance of the influence among calibration runs, which run and mounting hold already.
    owner
        Whose coefficient it is: the sensor's own, or that of its generation's sensors.
    """

    value: float
    spread: float
    degrees_of_freedom: float
    farthest: float
    inside: float = 0.0
    owner: str = ""


@dataclass(frozen=True)
class Course:
    """What time does at one place: change a decade of time and an hour, units of x, with their spreads.

    Time counts from ``start_s``, what a reading of the calibration had settled for: earlier change is in the
    line. ``farthest_s`` is as far as the holds support.
    """

    per_decade: float
    per_decade_spread: float
    per_hour: float
    per_hour_spread: float
    degrees_of_freedom: float
    start_s: float
    farthest_s: float
    owner: str = ""

    def over(self, time_s: float) -> tuple[float, float]:
        """Return change and its spread from the settled reading to *time_s* after zeroing."""
        decades = math.log10(max(time_s / self.start_s, 1.0))
        hours = max(time_s - self.start_s, 0.0) / 3600.0
        change = self.per_decade * decades + self.per_hour * hours
        return change, math.hypot(self.per_decade_spread * decades, self.per_hour_spread * hours)


@dataclass(frozen=True)
class FixedPart:
    """What a budget holds whatever time, pressure and temperature do, for one direction of approach.

    ``lines`` are counted; ``contained`` and ``unknown`` map other sources to the reason.
    """

    lines: tuple[BudgetLine, ...]
    contained: Mapping[str, str] = field(default_factory=dict)
    unknown: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class BudgetPlace:
    """The budget of one subject at one strain.

    Attributes
    ----------
    name, x
        ``zero``, ``mid`` or ``full``, and the value of the reference there.
    fixed
        Direction of approach → what does not depend on the other conditions.
    effects
        Pressure, temperature and strain across → coefficient; absent where not measured.
    course
        What time does; ``None`` where no hold says it.
    missing
        Source → why it has no coefficient here.
    """

    name: str
    x: float
    fixed: Mapping[str, FixedPart]
    effects: Mapping[str, Effect]
    course: Course | None
    missing: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class BudgetSubject:
    """Whose budget: a sensor with its own line, or a new one read by the line of its generation.

    ``module`` and ``sensor`` of a new one are empty. ``unit`` is that of its signal. ``dynamic_half_loop`` is
    half the width of its loops at ``dynamic_rate_per_s``, units of x; NaN without.
    """

    generation: str
    module: str
    sensor: str
    unit: str
    places: tuple[BudgetPlace, ...]
    dynamic_half_loop: float = math.nan
    dynamic_rate_per_s: float = math.nan

    @property
    def is_new(self) -> bool:
        """Whether it is a sensor that was not calibrated."""
        return self.sensor == ""

    @property
    def name(self) -> str:
        """What it is called in sentences."""
        return f"a new sensor of {self.generation}" if self.is_new else f"{self.module} {self.sensor}"


@dataclass(frozen=True)
class SourceInUse:
    """One source under given conditions: its lines (none unless counted), and what becomes of it.

    ``incomplete`` says that a part of it is not known although others count.
    """

    source: str
    lines: tuple[BudgetLine, ...]
    status: str
    why: str = ""
    incomplete: bool = False

    @property
    def contribution(self) -> float:
        """Standard uncertainty that it gives, units of x; NaN where unknown."""
        if self.status == NOT_KNOWN:
            return math.nan
        return math.sqrt(sum(line.contribution**2 for line in self.lines))


@dataclass(frozen=True)
class BudgetInUse:
    """A whole budget at one place under given conditions.

    ``unknown`` names the sources that are missing: with any of them U is at least ``combined``.
    """

    subject: BudgetSubject
    place: BudgetPlace
    sources: tuple[SourceInUse, ...]
    combined: CombinedUncertainty

    @property
    def lines(self) -> tuple[BudgetLine, ...]:
        """All lines that count."""
        return tuple(line for source in self.sources for line in source.lines)

    @property
    def unknown(self) -> tuple[str, ...]:
        """Sources that are not known."""
        open_ended = (s for s in self.sources if s.status == NOT_KNOWN or s.incomplete)
        return tuple(source.source for source in open_ended)

    @property
    def is_at_least(self) -> bool:
        """Whether a source is missing."""
        return bool(self.unknown)


def budget_in_use(subject: BudgetSubject, place: BudgetPlace, conditions: UseConditions) -> BudgetInUse:
    """Return the budget of *subject* at *place* under *conditions*."""
    fixed = place.fixed.get(conditions.direction) or place.fixed["unknown"]
    found = {
        source: SourceInUse(
            source,
            own,
            COUNTED,
            fixed.unknown.get(source, fixed.contained.get(source, "")),
            incomplete=source in fixed.unknown,
        )
        for source in SOURCES
        if (own := tuple(line for line in fixed.lines if line.source == source))
    }
    for status, reasons in ((CONTAINED, fixed.contained), (NOT_KNOWN, fixed.unknown)):
        found |= {s: SourceInUse(s, (), status, why) for s, why in reasons.items() if s not in found}
    found |= _moving(subject, place, conditions, found)
    sources = tuple(found[source] for source in SOURCES if source in found)
    combined = combine([line for source in sources for line in source.lines])
    return BudgetInUse(subject, place, sources, combined)


def worst_in_use(subject: BudgetSubject, conditions: UseConditions) -> BudgetInUse:
    """Return the budget at the place where U is largest."""
    return worst_of([budget_in_use(subject, place, conditions) for place in subject.places])


def worst_of(found: Sequence[BudgetInUse]) -> BudgetInUse:
    """Return that one of a subject's budgets whose U is largest."""
    return max(found, key=lambda budget: budget.combined.expanded_uncertainty)


def _moving(
    subject: BudgetSubject, place: BudgetPlace, use: UseConditions, found: Mapping[str, SourceInUse]
) -> dict[str, SourceInUse]:
    """The sources that depend on the conditions."""
    moving = {TIME: _time(place, use.time_since_zero_s)}
    moving[PRESSURE] = _effect(place, PRESSURE, use.pressure_kpa, corrected=use.pressure_corrected)
    moving[TEMPERATURE] = _effect(place, TEMPERATURE, use.temperature_range_k / 2.0)
    moving[ACROSS] = _effect(place, ACROSS, use.transverse_strain)
    return moving | _rate(subject, use, found)


def _time(place: BudgetPlace, time_s: float) -> SourceInUse:
    if time_s == 0.0:
        return SourceInUse(TIME, (), ABSENT, "read as the zero is taken")
    if place.course is None:
        return SourceInUse(TIME, (), NOT_KNOWN, place.missing[TIME])
    if math.isnan(time_s):
        return SourceInUse(TIME, (), ABSENT, NOT_STATED[TIME])
    if time_s > place.course.farthest_s:
        return SourceInUse(TIME, (), NOT_KNOWN, "the holds are too short to say it for that time")
    change, spread = place.course.over(time_s)
    known = BudgetLine(TIME, change, "rectangular")
    unsure = BudgetLine(TIME, spread / UNIFORM, "t", 1.0, place.course.degrees_of_freedom)
    return SourceInUse(TIME, _that_count(known, unsure), COUNTED, place.course.owner)


def _effect(place: BudgetPlace, source: str, amount: float, *, corrected: bool = False) -> SourceInUse:
    """An influence of anything up to *amount* (temperature: on either side).

    What is known of its effect is a rectangle, what is not known is t; corrected, only the latter is left.
    """
    if amount == 0.0:
        return SourceInUse(source, (), ABSENT, "none in the conditions of use")
    effect = place.effects.get(source)
    if effect is None:
        return SourceInUse(source, (), NOT_KNOWN, place.missing[source])
    if math.isnan(amount):
        return SourceInUse(source, (), ABSENT, NOT_STATED[source])
    if amount > effect.farthest:
        return SourceInUse(source, (), NOT_KNOWN, "beyond what was measured")
    left = math.sqrt(max(amount**2 - 3.0 * effect.inside, 0.0))
    if left == 0.0:
        return SourceInUse(source, (), CONTAINED, "calibration runs held as much of it: inside run to run")
    known = BudgetLine(source, left, "rectangular", 0.0 if corrected else effect.value)
    unsure = BudgetLine(source, left / UNIFORM, "t", effect.spread, effect.degrees_of_freedom)
    return SourceInUse(source, _that_count(known, unsure), COUNTED, effect.owner)


def _that_count(*lines: BudgetLine) -> tuple[BudgetLine, ...]:
    return tuple(line for line in lines if line.contribution > 0)


def _rate(
    subject: BudgetSubject, use: UseConditions, found: Mapping[str, SourceInUse]
) -> dict[str, SourceInUse]:
    """A stated rate takes the loop from cycles at about that rate, or leaves what it adds unknown."""
    if math.isnan(use.rate_per_s):
        return {}
    ratio = use.rate_per_s / subject.dynamic_rate_per_s
    if not 1.0 / 3.0 <= ratio <= 3.0:
        why = "no loops were run at about that rate"
        return {RATE: SourceInUse(RATE, (), NOT_KNOWN, why)}
    inside = SourceInUse(RATE, (), CONTAINED, "the loops were run at about that rate")
    if use.direction != "unknown":
        return {RATE: inside}
    line = BudgetLine(LOOP, subject.dynamic_half_loop, "two-point")
    others = tuple(own for own in found[LOOP].lines if own.shape == "t") if LOOP in found else ()
    return {LOOP: SourceInUse(LOOP, (line, *others), COUNTED, "loops of cyclic trials"), RATE: inside}
