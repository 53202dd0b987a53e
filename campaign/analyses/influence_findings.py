"""What page 0 and page 7 say of pressure and the other influences, as facts without words."""

from __future__ import annotations

import math
from dataclasses import dataclass

import pandas as pd

from campaign.analyses.findings import Finding, SensorFigure, sum_up, verdict_of_limit
from campaign.analyses.influence_spread import BOTH
from campaign.analyses.influences import Influences
from campaign.analyses.limits import Limits
from campaign.analyses.pressure import Pressure


@dataclass(frozen=True)
class PressureFact:
    """Pressure in one generation.

    Attributes
    ----------
    generation
        Its name.
    figure
        The uncorrected error at the pressure in use, magnitude, of every sensor; ``None`` where no slope
        turns signals into x or the pressure in use was not reached.
    in_use_kpa, rated
        That pressure, and whether ``[use]`` named it.
    answer
        Whether one correction serves all sensors: ``yes``, ``no`` or ``not decided``.
    spread, spread_low, spread_high
        SD between sensors (modules and sensors together where both are told) of the error per kPa; NaN where
        not identifiable.
    mean, mean_low, mean_high
        Mean error per kPa at the middle of the lengths.
    before, common, own
        SD of what remains without correction, with one for the generation and with the sensor's own, left
        out; NaN where not identifiable.
    module_p, sensor_p
        Adjusted p of the tests that modules, and sensors of a module, are alike.
    sensors, modules
        Counts.
    """

    generation: str
    figure: SensorFigure | None
    in_use_kpa: float
    rated: bool
    answer: str
    spread: float
    spread_low: float
    spread_high: float
    mean: float
    mean_low: float
    mean_high: float
    before: float
    common: float
    own: float
    module_p: float
    sensor_p: float
    sensors: int
    modules: int


@dataclass(frozen=True)
class InfluenceFact:
    """One influence in one generation: the mean over sensors by modules, and the sensor that it moves most.

    ``name`` is the influence, ``kind`` what the figure is: ``relative`` (cross-axis sensitivity in per cent,
    per cent of the zero signal per unit), ``strain`` (apparent x per unit) or ``signal``.
    """

    name: str
    kind: str
    unit: str
    figure: SensorFigure
    answer: str
    signed_mean: float


@dataclass(frozen=True)
class CouplingFact:
    """Neighbours that moved while one sensor alone was strained: how many of how many pairs, the largest."""

    pairs: int
    moving: int
    module: str
    sensor: str
    strained: str
    relative: float


def pressure_facts(
    pressure: Pressure | None, limits: Limits, put_back: Pressure | None = None
) -> tuple[PressureFact, ...]:
    """Return the facts of every generation whose sensors were swept in pressure.

    *put_back* holds them with everything that was set aside put back, ``None`` where no sweeps were.
    """
    if pressure is None:
        return ()
    return tuple(
        _pressure_fact(str(generation), rows, pressure, limits, put_back)
        for generation, rows in pressure.table.groupby("generation", sort=True)
    )


def _errors(rows: pd.DataFrame) -> pd.DataFrame:
    return rows[["generation", "module", "sensor"]].assign(value=rows["strain_error_in_use"].abs())


def _pressure_fact(
    generation: str, rows: pd.DataFrame, pressure: Pressure, limits: Limits, put_back: Pressure | None
) -> PressureFact:
    same = put_back is not None and put_back.in_use_kpa == pressure.in_use_kpa
    also = _errors(put_back.table) if put_back is not None and same else None
    summed = sum_up(_errors(rows), _limit_in_x(pressure, limits), also)
    components = pressure.spread.components
    own = components[(components["generation"] == generation) & (components["what"] == "error")]
    parts = own.set_index("component")
    serving = pressure.spread.serving
    left = serving[serving["generation"] == generation].set_index("correction")["sd"]
    widest = next((n for n in (BOTH, "sensor", "module") if n in parts.index), "")
    spread, mean = _triple(parts, widest), _triple(parts, "mean")
    tests = parts["p_adjusted"]
    one_each = rows["module"].nunique() == len(rows)
    return PressureFact(
        generation,
        summed[0] if summed else None,
        pressure.in_use_kpa,
        pressure.rated,
        pressure.spread.answers.get(generation, "not decided"),
        spread[0],
        spread[1],
        spread[2],
        mean[0],
        mean[1],
        mean[2],
        float(left.get("none", math.nan)),
        float(left.get("generation", math.nan)),
        float(left.get("sensor", math.nan)),
        float(tests.get("module", math.nan)),
        float(tests.get("sensor", tests.get(BOTH, math.nan) if one_each else math.nan)),
        len(rows),
        int(rows["module"].nunique()),
    )


def _limit_in_x(pressure: Pressure, limits: Limits) -> float:
    """The limit on the error by pressure where it stands in units of x; NaN else."""
    rows = limits.table[limits.table["limit"] == "pressure_error"]
    if rows.empty or str(rows["unit"].iloc[0]) != pressure.reference.unit:
        return math.nan
    return float(rows["value"].iloc[0])


def _triple(parts: pd.DataFrame, name: str) -> tuple[float, float, float]:
    if name not in parts.index:
        return math.nan, math.nan, math.nan
    estimate, low, high = parts.loc[[name], ["estimate", "low", "high"]].to_numpy(float)[0].tolist()
    return estimate, low, high


def influence_facts(influences: Influences | None) -> tuple[InfluenceFact, ...]:
    """Return the facts of every other influence, generation by generation."""
    if influences is None:
        return ()
    made = []
    for result in influences.results:
        unit = {"°C": "K"}.get(result.unit, result.unit)
        table = influences.of(result.influence)
        table = table[table["influence_unit"] == unit]
        for generation, rows in table.groupby("generation", sort=True):
            fact = _influence_fact(result.influence, unit, rows, result.spread.answers.get(str(generation)))
            made += [fact] if fact is not None else []
    return tuple(made)


def _influence_fact(name: str, unit: str, rows: pd.DataFrame, answer: str | None) -> InfluenceFact | None:
    choices = {"relative": "relative_percent", "strain": "strain_equivalent", "signal": "coefficient"}
    order = ("relative", "strain", "signal") if name == "transverse" else ("strain", "relative", "signal")
    for kind in order:
        values = rows[["generation", "module", "sensor"]].assign(value=rows[choices[kind]].abs())
        summed = sum_up(values, math.nan)
        if summed:
            said = str(rows["unit"].iloc[0]) if kind == "signal" else unit
            mean = float(rows[choices[kind]].mean())
            return InfluenceFact(name, kind, said, summed[0], answer or "not decided", mean)
    return None


def coupling_fact(pressure: Pressure | None) -> CouplingFact | None:
    """Return what the neighbours did; ``None`` where no recording could say."""
    if pressure is None or pressure.coupling.empty:
        return None
    table = pressure.coupling
    moving = table[table["moves"]]
    rows = moving if len(moving) else table
    size = rows["relative"].abs().fillna(-1.0) if rows["relative"].notna().any() else -rows["p"]
    first = rows.iloc[int(size.to_numpy(float).argmax())]
    return CouplingFact(
        len(table),
        len(moving),
        str(first["module"]),
        str(first["sensor"]),
        str(first["strained"]),
        float(first["relative"]),
    )


def influence_findings(
    pressure: Pressure | None,
    influences: Influences | None,
    limits: Limits,
    put_back: Pressure | None = None,
) -> list[Finding]:
    """Return the findings of page 0 on pressure, coupling and the other influences."""
    made: list[Finding] = []
    facts = pressure_facts(pressure, limits, put_back)
    if facts:
        made.append(Finding("pressure", facts, verdict_of_limit(limits, "pressure_error"), "pressure_error"))
    coupled = coupling_fact(pressure)
    if coupled is not None:
        made.append(Finding("coupling", (coupled,)))
    others = influence_facts(influences)
    if others:
        made.append(Finding("influences", others))
    return made
