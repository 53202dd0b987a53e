"""What the results hold of one module: its own page and those of its sensors are made from that alone.

A share is small and whole: nothing that a page of the module shows depends on anything else than its share
and :class:`AllModules`, so that any process can make the pages (:mod:`campaign.pages.own_pages`).
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, fields, replace
from typing import Any, Protocol, TypeVar

import pandas as pd

from campaign.analyses.calibration import Calibration
from campaign.analyses.limits import Limits
from campaign.analyses.loop_rates import RateDependence
from campaign.analyses.pressure import Pressure
from campaign.analyses.results import CampaignResults
from campaign.analyses.variance import Variance
from campaign.pages import slugs
from campaign.pages.rows import of_module
from campaign.pages.sensor_axis import sensor_axis
from campaign.pages.sensor_parts import sensor_keys
from campaign.pages.skin_map import SkinMap
from campaign.recordings.intake import Intake

MERITS_OF_MODULES = ("linearity", "hysteresis", "repeatability")
"""Figures of merit in %FSO that a module's page draws, in order."""

READING_COLUMNS_SHOWN = (
    *("module", "sensor", "session", "repetition", "trial", "order", "direction", "nominal_level", "x"),
    *("signal", "unit", "standard_error", "used"),
)
"""Columns of readings that pages of modules and sensors are made from."""

Link = tuple[str, str]
"""Text and address."""


@dataclass(frozen=True)
class AllModules:
    """What the pages of every module and sensor share.

    Attributes
    ----------
    mapped
        The skin map.
    generations
        Generations with lines, in the order of their colours.
    placed_generations
        Generations with rebuilt shapes, in the order of their colours.
    typical_merits
        By figure of merit, the median over the sensors of the campaign, %FSO.
    largest_merit
        The largest of them all, %FSO.
    """

    mapped: SkinMap
    generations: tuple[str, ...]
    placed_generations: tuple[str, ...]
    typical_merits: Mapping[str, float]
    largest_merit: float


@dataclass(frozen=True)
class ModuleShare:
    """What the pages of one module and its sensors are made from, beside :class:`AllModules`.

    Attributes
    ----------
    generation, module
        Whose share it is.
    sensors
        Its sensors, in order.
    results
        The results with the rows of the module alone; what no page of it shows is left out.
    neighbours
        Links to the modules before and after it, ``None`` at the ends.
    keys
        Generation, module and sensor of every page of a sensor.
    sensor_neighbours
        Of every one of *keys*, links to the sensors before and after it.
    """

    generation: str
    module: str
    sensors: tuple[str, ...]
    results: CampaignResults
    neighbours: tuple[Link | None, Link | None]
    keys: tuple[tuple[str, str, str], ...]
    sensor_neighbours: tuple[tuple[Link | None, Link | None], ...]

    @property
    def page_slug(self) -> str:
        """Name of the module's page."""
        return slugs.module_slug(self.module)


def all_modules(results: CampaignResults, mapped: SkinMap) -> AllModules:
    """Return what the pages of every module and sensor share."""
    lines = None if results.calibration is None else results.calibration.sensor_lines
    placements = () if results.layout is None else results.layout.placements
    figures = results.limits.figures
    figures = figures[figures["figure"].isin(MERITS_OF_MODULES)].dropna(subset=["estimate"])
    medians = figures.groupby("figure")["estimate"].median()
    return AllModules(
        mapped,
        () if lines is None else sensor_axis(lines).generations,
        tuple(sorted({placement.generation for placement in placements})),
        {str(name): _told(float(value)) for name, value in medians.items()},
        _told(float(figures["estimate"].max())) if len(figures) else 0.0,
    )


def _told(value: float) -> float:
    """Return *value* to eight digits: what lies below is of no page, and tells equal shares apart."""
    return float(f"{value:.8g}")


def module_shares(results: CampaignResults) -> Iterator[ModuleShare]:
    """Yield the share of every module that a trial names, sorted by generation and module."""
    named = sensor_keys(results)
    sensor_links = [(f"{module} {sensor}", slugs.sensor_href(module, sensor)) for _, module, sensor in named]
    beside = dict(zip(named, _neighbours(sensor_links), strict=True))
    modules = sorted({(generation, module) for generation, module, _ in named})
    links = [(module, slugs.module_href(module)) for _, module in modules]
    for (generation, module), neighbours in zip(modules, _neighbours(links), strict=True):
        keys = tuple(key for key in named if key[:2] == (generation, module))
        yield ModuleShare(
            generation,
            module,
            tuple(sensor for _, own, sensor in named if own == module),
            results_of_module(results, module),
            neighbours,
            keys,
            tuple(beside[key] for key in keys),
        )


def _neighbours(links: Sequence[Link]) -> list[tuple[Link | None, Link | None]]:
    before, after = [None, *links[:-1]], [*links[1:], None]
    return list(zip(before[: len(links)], after[: len(links)], strict=True))


def results_of_module(results: CampaignResults, module: str) -> CampaignResults:
    """Return the results with the rows of *module* alone in all tables that its pages are made from.

    What they are not made from is left out, or empty where there must be something.
    """
    changed: dict[str, Any] = {
        "intake": _own_intake(results.intake, module),
        "readings": replace(results.readings, table=_shown(results.readings.table, module), notices=()),
        "limits": _own_limits(results.limits, module),
        "variance": None if results.variance is None else _own_variance(results.variance, module),
        "findings": replace(results.findings, findings=()),
        "residuals": None,
        "calibration_effort": None,
        "generations": None,
        "planning": None,
        "rehearsal": None,
        "earlier": (),
        "notices": (),
    }
    if results.calibration is not None:
        changed["calibration"] = _own_calibration(results.calibration, module)
    if (loops := results.hysteresis) is not None:
        own = _own_parts(loops, module, "loops", "sensors", "outlines")
        changed["hysteresis"] = replace(own, rates=_own_rates(loops.rates, module))
    if results.drift is not None:
        changed["drift"] = replace(_own_parts(results.drift, module, "holds", "curves"), zero=None)
    if results.pressure is not None:
        changed["pressure"] = _own_pressure(results.pressure, module)
    if results.influences is not None:
        changed["influences"] = _own_parts(results.influences, module, "table")
    if results.endurance is not None:
        changed["endurance"] = _own_parts(results.endurance, module, "sensors")
    if (budget := results.budget) is not None:
        worst = tuple(found for found in budget.worst if found.subject.module == module)
        changed["budget"] = replace(_own_parts(budget, module), worst=worst, missing={})
    if results.layout is not None:
        changed["layout"] = _own_parts(results.layout, module, "placements", "edges")
    return replace(results, **changed)


def _own_rates(rates: RateDependence, module: str) -> RateDependence:
    """Return the delays of the sensors of *module*, to six digits: a fit of all sensors ends no closer."""
    own = _own_parts(rates, module, "sensors")
    names = [name for name in ("module", "sensor", *_DELAYS) if name in own.sensors]
    shown = own.sensors[names]
    digits = {
        name: [float(f"{value:.6g}") for value in shown[name].tolist()] for name in _DELAYS if name in shown
    }
    return replace(own, sensors=shown.assign(**digits))


_DELAYS = ("delay_s", "delay_low_s", "delay_high_s")


def _own_variance(variance: Variance, module: str) -> Variance:
    own = _own_parts(variance, module, "effects")
    return replace(own, noise={}, settling={}, covariates={}, seed=0)


def _own_intake(intake: Intake, module: str) -> Intake:
    own = _own_parts(intake, module, "trials", "modules", "sensors")
    return replace(own, identities={}, used=frozenset(), put_back=frozenset())


def _own_limits(limits: Limits, module: str) -> Limits:
    return _own_parts(limits, module, "table", "figures")


def _own_calibration(calibration: Calibration, module: str) -> Calibration:
    tables = "sensor_lines", "run_lines", "level_hysteresis", "ordinary_lines"
    own = _own_parts(calibration, module, *tables, "records")
    return replace(own, readings=_shown(calibration.readings, module))


def _shown(readings: pd.DataFrame, module: str) -> pd.DataFrame:
    """Return the readings of *module* with the columns that its pages are made from."""
    return of_module(readings, module)[[name for name in READING_COLUMNS_SHOWN if name in readings]]


def _own_pressure(pressure: Pressure, module: str) -> Pressure:
    own = _own_parts(pressure, module, "table", "sweeps", "points")
    runs = set(zip(own.sweeps["trial"].tolist(), own.sweeps["sensor"].tolist(), strict=True))
    curves = {key: curve for key, curve in pressure.curves.items() if key[:2] in runs}
    spread = replace(_own_parts(pressure.spread, module), answers={}, fits={})
    return replace(own, curves=curves, spread=spread, corrections={})


class _OfModule(Protocol):
    @property
    def module(self) -> str: ...


_Whole = TypeVar("_Whole")
_Thing = TypeVar("_Thing", bound=_OfModule)


def _own_parts(whole: _Whole, module: str, *kept: str) -> _Whole:
    """Return *whole* with what is of *module* in the tables and tuples *kept*, and the others empty."""
    changed: dict[str, Any] = {}
    for field in fields(whole):  # type: ignore[arg-type]
        value = getattr(whole, field.name)
        if isinstance(value, pd.DataFrame):
            has_modules = "module" in value and field.name in kept
            changed[field.name] = of_module(value, module) if has_modules else value.iloc[:0]
        elif isinstance(value, tuple) and not all(isinstance(part, str) for part in value):
            changed[field.name] = _own_things(value, module) if field.name in kept else ()
    return replace(whole, **changed)  # type: ignore[type-var]


def _own_things(things: Sequence[_Thing], module: str) -> tuple[_Thing, ...]:
    return tuple(thing for thing in things if thing.module == module)
