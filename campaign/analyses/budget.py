"""The budget of a reading in use: what adds up to its uncertainty, for every sensor and for new ones.

All sources come from one decomposition, so that none is counted twice. What happens within a calibration run
is in its line and scatter: a budget adds only what use adds to that (time from when a reading of the
calibration had settled on; temperature beyond what moved between runs).
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from campaign.analyses.budget_influences import HoldSource, InfluenceSource, hold_source, influence_sources
from campaign.analyses.budget_model import (
    ACROSS,
    NOT_KNOWN,
    PRESSURE,
    TEMPERATURE,
    TIME,
    BudgetInUse,
    BudgetPlace,
    BudgetSubject,
    Course,
    Effect,
    FixedPart,
    SourceInUse,
    UseConditions,
    budget_in_use,
    conditions_of_use,
    worst_of,
)
from campaign.analyses.budget_new_sensors import new_sensor_parts
from campaign.analyses.budget_sensors import fixed_parts, readout_step
from campaign.analyses.line_sources import LineSources
from campaign.analyses.sensor_figures import FIGURE_COLUMNS
from campaign.analyses.shared_work import do_all
from campaign.analyses.variance_fit import PLACES, GenerationFit, choose_places
from campaign.methods.conformity import spread_interval
from campaign.methods.monte_carlo import OutputDistribution
from campaign.methods.uncertainty_budget import BudgetLine, draw_budget
from campaign.recordings.description import Description
from campaign.recordings.recording import ReferenceQuantity
from campaign.workers.workshop import Workshop

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration
    from campaign.analyses.drift import Drift
    from campaign.analyses.hysteresis import Hysteresis
    from campaign.analyses.influences import Influences
    from campaign.analyses.pressure import Pressure
    from campaign.analyses.variance import Variance

SensorKey = tuple[str, str, str]

BUDGET_COLUMNS = (
    *("generation", "module", "sensor", "source", "standard_uncertainty", "distribution", "divisor"),
    *("sensitivity", "contribution_strain", "df", "unit", "place", "strain", "share", "label", "why"),
)
"""Columns of :attr:`Budget.table`. A source of two lines (what is known of it, and what is not) is one row:
its standard uncertainty is the larger line's, its sensitivity the contribution over that."""

TOTAL_COLUMNS = (
    *("generation", "module", "sensor", "place", "strain", "standard_uncertainty_strain", "df"),
    *("coverage_factor", "expanded_strain", "at_least", "missing", "worst"),
    *("monte_carlo_low", "monte_carlo_high", "non_normal_share"),
)
"""Columns of :attr:`Budget.totals`."""

DRAWS = 40_000
"""Draws of the Monte Carlo beside a budget: ends of its interval to about one per cent."""

_NO_OUTPUT = 1e-9
"""Share of the signal below which a change over the whole range is rounding."""

_TOLD_APART = 2.0
"""Standard uncertainties of a new run's slope that the slope must exceed."""

DOMINATES = 0.5
"""Share of the variance from which sources that are not normal dominate."""


@dataclass(frozen=True)
class Budget:
    """Budgets of all sensors, and of a new sensor of each generation read by the generation's line.

    Attributes
    ----------
    reference
        What x is.
    subjects
        New sensors first, then sensors, each sorted.
    conditions
        Those of ``[use]``.
    worst
        Budget of every subject under them, at the place where U is largest, in the order of ``subjects``.
    table
        One row a subject, place and source, columns of :data:`BUDGET_COLUMNS`.
    totals
        One row a subject and place, columns of :data:`TOTAL_COLUMNS`.
    figures
        ``strain_error`` of every sensor, to be judged by its limit; columns of
        :data:`campaign.analyses.sensor_figures.FIGURE_COLUMNS`.
    missing
        Sensor → the sources that are not known: with any its U can be too large already, never small enough.
    without_new
        Generations for which no budget of a new sensor could be made.
    """

    reference: ReferenceQuantity
    subjects: tuple[BudgetSubject, ...]
    conditions: UseConditions
    worst: tuple[BudgetInUse, ...]
    table: pd.DataFrame
    totals: pd.DataFrame
    figures: pd.DataFrame
    missing: Mapping[SensorKey, tuple[str, ...]]
    without_new: tuple[str, ...] = ()

    def of_new_sensors(self) -> tuple[BudgetInUse, ...]:
        """Return the worst budgets of new sensors, one a generation."""
        return tuple(found for found in self.worst if found.subject.is_new)

    def of_sensors(self) -> tuple[BudgetInUse, ...]:
        """Return the worst budgets of measured sensors."""
        return tuple(found for found in self.worst if not found.subject.is_new)


def analyse_budget(
    description: Description,
    calibration: Calibration | None,
    variance: Variance | None,
    hysteresis: Hysteresis | None = None,
    drift: Drift | None = None,
    pressure: Pressure | None = None,
    influences: Influences | None = None,
    workshop: Workshop | None = None,
) -> Budget | None:
    """Make the budgets of a campaign.

    Parameters
    ----------
    description
        Conditions of use and uncertainty of reference and readout.
    calibration, variance
        Lines of the sensors and the nested fit of every generation.
    hysteresis, drift, pressure, influences
        What else was measured.
    workshop
        What earlier runs drew; nothing where ``None``.

    Returns
    -------
    Budget or None
        ``None`` without a calibrated sensor.
    """
    if calibration is None or not _that_read(calibration):
        return None
    maker = _Maker.of(description, calibration, variance, hysteresis, drift, pressure, influences)
    fits = variance.by_generation if variance is not None else ()
    new = [s for fit in fits if fit.mean_slope and (s := maker.new_sensor(fit)) is not None]
    subjects = (*new, *maker.sensors())
    conditions, unit = conditions_of_use(description), calibration.reference.unit
    by_subject = [[budget_in_use(s, place, conditions) for place in s.places] for s in subjects]
    every = [budget for own in by_subject for budget in own]
    worst = tuple(worst_of(own) for own in by_subject)
    generations = {subject.generation for subject in subjects}
    return Budget(
        calibration.reference,
        subjects,
        conditions,
        worst,
        pd.DataFrame([row for one in every for row in _rows(one, unit)], columns=list(BUDGET_COLUMNS)),
        _totals(every, worst, variance.seed if variance is not None else 0, workshop or Workshop()),
        _figures(worst, calibration.reference),
        {_key(found.subject): found.unknown for found in worst if not found.subject.is_new},
        tuple(sorted(generations - {s.generation for s in new})),
    )


@dataclass(frozen=True)
class _Maker:
    """All that subjects are made from."""

    description: Description
    calibration: Calibration
    lines: Mapping[SensorKey, list[LineSources]]
    units: Mapping[SensorKey, str]
    places: Mapping[str, float]
    influences: Mapping[str, InfluenceSource]
    holds: HoldSource | None
    loops: Mapping[SensorKey, float]
    loop_rate: float

    @classmethod
    def of(
        cls,
        description: Description,
        calibration: Calibration,
        variance: Variance | None,
        hysteresis: Hysteresis | None,
        drift: Drift | None,
        pressure: Pressure | None,
        influences: Influences | None,
    ) -> _Maker:
        lines: dict[SensorKey, list[LineSources]] = {}
        for line in _that_read(calibration):
            lines.setdefault(line.key, []).append(line)
        places = _places(description, calibration, variance)
        scales = {key: own[0].full_scale_output / own[0].slope for key, own in lines.items()}
        return cls(
            description,
            calibration,
            lines,
            {(r.generation, r.module, r.sensor): r.unit for r in calibration.records},
            places,
            influence_sources(pressure, influences),
            hold_source(drift, scales, places["full"] - min(places["zero"], 0.0)),
            _half_loops(hysteresis),
            hysteresis.rate_per_s if hysteresis is not None else math.nan,
        )

    def sensors(self) -> list[BudgetSubject]:
        """Return every calibrated sensor with its own line."""
        return [self._sensor(key, own) for key, own in sorted(self.lines.items())]

    def _sensor(self, key: SensorKey, lines: list[LineSources]) -> BudgetSubject:
        standing = lines[0]
        stated = self.description.length_reference.stated
        step = readout_step(self.description)
        places = []
        for name, place in self.places.items():
            x = min(max(place, standing.x_low), standing.x_high)
            fixed = fixed_parts(lines, x, step, stated)
            places.append(self._place(name, x, fixed, key, standing))
        unit = self.units[key]
        return BudgetSubject(*key, unit, tuple(places), self.loops.get(key, math.nan), self.loop_rate)

    def new_sensor(self, fit: GenerationFit) -> BudgetSubject | None:
        """Return a new sensor of the generation of *fit*; None where no sensor of it is calibrated."""
        alike = [own[0] for key, own in sorted(self.lines.items()) if key[0] == fit.generation]
        if not alike:
            return None
        scale = [self._scale_sd(x, alike[0].recorded) for x in self.places.values()]
        parts = new_sensor_parts(fit, list(self.places.values()), readout_step(self.description), scale)
        key = (fit.generation, "", "")
        usual = replace(
            alike[0],
            slope=fit.mean_slope,
            settled_s=_median(line.settled_s for line in alike),
            temperature_variance=_median(line.temperature_variance for line in alike),
        )
        places = [
            self._place(name, x, fixed, key, usual)
            for (name, x), fixed in zip(self.places.items(), parts, strict=True)
        ]
        half = _root_mean_square(self.loops[k] for k in self.loops if k[0] == fit.generation)
        return BudgetSubject(*key, self.units[alike[0].key], tuple(places), half, self.loop_rate)

    def _scale_sd(self, x: float, recorded: str) -> float:
        """Standard uncertainty of x by the scale of the reference, which all calibrations share."""
        reference = self.description.length_reference
        if not reference.stated:
            return math.nan
        scale = reference.scale_relative if reference.scale_relative > 0 else 0.0
        from_rest = self.calibration.reference.name == "strain" and recorded == "length"
        return scale * abs(x + (1.0 if from_rest else 0.0))

    def _place(
        self, name: str, x: float, fixed: Mapping[str, FixedPart], key: SensorKey, line: LineSources
    ) -> BudgetPlace:
        missing: dict[str, str] = {}
        effects: dict[str, Effect] = {}
        for source in (PRESSURE, TEMPERATURE, ACROSS):
            effect = self._effect(source, key, x, line.slope)
            if effect is None:
                missing[source] = _WHY[source] if source not in self.influences else _TOO_FEW
            else:
                effects[source] = effect
        if TEMPERATURE in effects and math.isfinite(line.temperature_variance):
            effects[TEMPERATURE] = replace(effects[TEMPERATURE], inside=line.temperature_variance)
        course = self._course(key, x, line.settled_s)
        if course is None:
            missing[TIME] = _WHY[TIME] if self.holds is None else "no hold at such a length, or too few"
        return BudgetPlace(name, x, fixed, effects, course, missing)

    def _effect(self, source: str, key: SensorKey, x: float, slope: float) -> Effect | None:
        measured = self.influences.get(source)
        if measured is None:
            return None
        return measured.own(key, x, slope) or measured.shared(key[0], x)

    def _course(self, key: SensorKey, x: float, settled_s: float) -> Course | None:
        if self.holds is None:
            return None
        return self.holds.own(key, x, settled_s) or self.holds.shared(key[0], x, settled_s)


_WHY: Mapping[str, str] = {
    TIME: "no holds were run",
    PRESSURE: "no pressure was swept",
    TEMPERATURE: "no temperature was swept",
    ACROSS: "no sensor was stretched across its axis",
}
_TOO_FEW = "too few sensors of this generation were tried"


def _places(
    description: Description, calibration: Calibration, variance: Variance | None
) -> dict[str, float]:
    """Zero, mid and full scale: where components of spread are stated, else by the same rule."""
    if variance is not None and variance.fits:
        return {name: float(variance.fits[0].places[name]) for name in PLACES}
    reference = calibration.reference
    rated = {"strain": description.range_strain, "elongation": description.range_elongation_mm}
    x = calibration.readings.loc[calibration.readings["used"], "x"].to_numpy(float)
    return choose_places(
        x[np.isfinite(x)], rated.get(reference.name, math.nan), has_zero=reference.name != "length"
    )


def _half_loops(hysteresis: Hysteresis | None) -> dict[SensorKey, float]:
    """Half the root-mean-square settled width of every sensor's loops as x, where a line gives the scale."""
    if hysteresis is None or hysteresis.curves_of_width.empty:
        return {}
    keys = ["generation", "module", "sensor"]
    sensors = hysteresis.sensors.set_index(keys)
    scale = sensors["full_scale_output"] / 100.0 / sensors["slope"].abs()
    square = hysteresis.curves_of_width.assign(s=hysteresis.curves_of_width["width_percent_fso"] ** 2)
    widths = np.sqrt(square.groupby(keys)["s"].mean()) * scale / 2.0
    return {(str(k[0]), str(k[1]), str(k[2])): float(v) for k, v in widths.items() if math.isfinite(v)}


def _that_read(calibration: Calibration) -> list[LineSources]:
    """Lines that a signal can be read by."""
    return [line for line in calibration.line_sources if _reads(line)]


def _reads(line: LineSources) -> bool:
    """Whether the slope is told from zero (g < 1, as for the interval of a reading)."""
    output = abs(line.slope) * (line.x_high - line.x_low)
    spread = float(np.nan_to_num(line.line[1, 1] + line.mounting[1, 1] + line.run[1, 1]))
    return output > _NO_OUTPUT * abs(line.intercept) and line.slope**2 > _TOLD_APART**2 * spread


def _median(values: Iterable[float]) -> float:
    known = [value for value in values if math.isfinite(value)]
    return float(np.median(known)) if known else math.nan


def _root_mean_square(values: Iterable[float]) -> float:
    known = np.array(list(values))
    return float(np.sqrt(np.mean(known**2))) if len(known) else math.nan


def _key(subject: BudgetSubject) -> SensorKey:
    return subject.generation, subject.module, subject.sensor


# --- tables


def _unit_of_input(found: SourceInUse, subject: BudgetSubject, unit: str) -> str:
    """Unit of the standard uncertainty of a source's input; *unit* is that of the reference."""
    usual = unit if found.source == TIME or found.lines[0].sensitivity == 1.0 else subject.unit
    return {PRESSURE: "kPa", TEMPERATURE: "K", ACROSS: "mm/mm"}.get(found.source, usual)


def _rows(budget: BudgetInUse, unit: str) -> Iterable[dict[str, object]]:
    """One row a source."""
    subject, whole = budget.subject, budget.combined.standard_uncertainty**2
    for found in budget.sources:
        yield {
            "generation": subject.generation,
            "module": subject.module,
            "sensor": subject.sensor,
            "source": found.source,
            **_of_lines(found),
            "unit": _unit_of_input(found, subject, unit) if found.lines else "",
            "place": budget.place.name,
            "strain": budget.place.x,
            "share": found.contribution**2 / whole if found.status != NOT_KNOWN and whole else math.nan,
            "label": found.status,
            "why": found.why,
        }


def _of_lines(found: SourceInUse) -> dict[str, object]:
    """Standard uncertainty, distribution, divisor, sensitivity and degrees of freedom of the main line."""
    if not found.lines:
        nothing = 0.0 if found.status != NOT_KNOWN else math.nan
        blank = dict.fromkeys(("standard_uncertainty", "divisor", "sensitivity", "df"), math.nan)
        return {**blank, "distribution": "", "contribution_strain": nothing}
    main = max(found.lines, key=lambda line: line.contribution)
    whole, standard = found.contribution, main.standard_uncertainty
    return {
        "standard_uncertainty": standard,
        "distribution": main.shape,
        "divisor": main.divisor,
        "sensitivity": whole / standard if standard else 0.0,
        "contribution_strain": whole,
        "df": min(line.degrees_of_freedom for line in found.lines),
    }


def _totals(
    every: list[BudgetInUse], worst: tuple[BudgetInUse, ...], seed: int, workshop: Workshop
) -> pd.DataFrame:
    headline = {(_key(b.subject), b.place.name) for b in worst}
    chosen = [(_key(budget.subject), budget.place.name) in headline for budget in every]
    shares = [non_normal_share(budget) for budget in every]
    wanted = [own and share > DOMINATES for own, share in zip(chosen, shares, strict=True)]
    tasks = [(budget.lines, seed) for budget, own in zip(every, wanted, strict=True) if own]
    drawn = iter(do_all(_drawn, tasks, workshop, lambda _: False))
    rows = [
        _total(budget, own, share, next(drawn) if draws else None)
        for budget, own, share, draws in zip(every, chosen, shares, wanted, strict=True)
    ]
    return pd.DataFrame(rows, columns=list(TOTAL_COLUMNS))


def _drawn(task: tuple[tuple[BudgetLine, ...], int]) -> tuple[OutputDistribution]:
    lines, seed = task
    return (draw_budget(lines, seed=seed % 2**63, trials=DRAWS),)


def _total(
    budget: BudgetInUse, worst: bool, share: float, drawn: OutputDistribution | None
) -> dict[str, object]:
    low, high = drawn.symmetric if drawn is not None else (math.nan, math.nan)
    return {
        "generation": budget.subject.generation,
        "module": budget.subject.module,
        "sensor": budget.subject.sensor,
        "place": budget.place.name,
        "strain": budget.place.x,
        "standard_uncertainty_strain": budget.combined.standard_uncertainty,
        "df": budget.combined.degrees_of_freedom,
        "coverage_factor": budget.combined.coverage_factor,
        "expanded_strain": budget.combined.expanded_uncertainty,
        "at_least": budget.is_at_least,
        "missing": ", ".join(budget.unknown),
        "worst": worst,
        "monte_carlo_low": low,
        "monte_carlo_high": high,
        "non_normal_share": share,
    }


def non_normal_share(budget: BudgetInUse) -> float:
    """Return the share of the variance that rectangular and two-point lines hold."""
    whole = budget.combined.standard_uncertainty**2
    own = sum(line.contribution**2 for line in budget.lines if line.shape in ("rectangular", "two-point"))
    return own / whole if whole > 0 else 0.0


def monte_carlo(budget: BudgetInUse, seed: int, draws: int = DRAWS) -> OutputDistribution:
    """Return the distribution of the error by Monte Carlo (JCGM 101)."""
    return draw_budget(budget.lines, seed=seed % 2**63, trials=draws)


def _figures(worst: tuple[BudgetInUse, ...], reference: ReferenceQuantity) -> pd.DataFrame:
    """``strain_error`` of every sensor; without run-to-run spread there is none."""
    rows = []
    for budget in worst:
        if budget.subject.is_new:
            continue
        has_runs = any(line.group for line in budget.lines)
        expanded = budget.combined.expanded_uncertainty if has_runs else math.nan
        freedom = budget.combined.degrees_of_freedom if has_runs else math.nan
        low, high = spread_interval(expanded, freedom) if has_runs else (math.nan, math.nan)
        who = dict(zip(("generation", "module", "sensor"), _key(budget.subject), strict=True))
        rows.append(
            {
                **who,
                "figure": "strain_error",
                "unit": reference.unit,
                "estimate": expanded,
                "low": low,
                "high": high,
                "standard_uncertainty": math.nan,
                "degrees_of_freedom": freedom,
                "kind": "spread",
            }
        )
    return pd.DataFrame(rows, columns=list(FIGURE_COLUMNS))
