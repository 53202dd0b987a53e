"""What one campaign offers for comparing generations: headline figures sensor by sensor, and its SDs."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal

import numpy as np
import pandas as pd
from scipy import special

from campaign.analyses.hold_figures import OF_FULL_SCALE
from campaign.analyses.layout_results import OWN_LINE
from campaign.analyses.sensor_figures import principal_lines, sensor_figures
from campaign.analyses.variance_fit import GenerationFit, is_withheld
from campaign.analyses.variance_frames import ON_NOISE
from campaign.methods.variance_ratios import VarianceInterval
from campaign.recordings.description import Description
from campaign.recordings.recording import TrialIdentity

if TYPE_CHECKING:
    from campaign.analyses.budget import Budget
    from campaign.analyses.calibration import Calibration
    from campaign.analyses.drift import Drift
    from campaign.analyses.hysteresis import Hysteresis
    from campaign.analyses.layout_results import Layout
    from campaign.analyses.pressure import Pressure

Kind = Literal["difference", "ratio"]

RANGE, REACH, FULL_SCALE, RATE, HELD_AT, MID_RANGE = (
    "highest calibrated level",
    "reach of the runs",
    "full scale",
    "rate of the loops",
    "length of the holds",
    "middle of the range",
)
"""Conditions that figures hold at, by the words that a notice uses."""


@dataclass(frozen=True)
class HeadlineFigure:
    """One figure that generations are compared by.

    Attributes
    ----------
    name
        As in the table ``generations`` and in ``[limits.margins]``.
    kind
        How two values are compared where no margin says otherwise.
    smaller_is_better
        Whether less of it is better; else a verdict only says which is larger.
    conditions
        What the figure holds at; it is compared only where these agree.
    is_pooled
        Whether its values hold components that are estimated once for all sensors of a generation: they then
        agree with each other better than they are known, and modules are no units to test by.
    """

    name: str
    kind: Kind
    smaller_is_better: bool
    conditions: tuple[str, ...] = ()
    is_pooled: bool = False


_IN_FULL_SCALE = (RANGE, FULL_SCALE)

SENSOR_FIGURES: tuple[HeadlineFigure, ...] = (
    HeadlineFigure("expanded_uncertainty", "difference", True, (REACH,), is_pooled=True),
    HeadlineFigure("strain_error", "difference", True, (REACH,), is_pooled=True),
    HeadlineFigure("linearity", "difference", True, _IN_FULL_SCALE),
    HeadlineFigure("hysteresis", "difference", True, (REACH, *_IN_FULL_SCALE, RATE)),
    HeadlineFigure("staircase_hysteresis", "difference", True, (REACH, *_IN_FULL_SCALE)),
    HeadlineFigure("repeatability", "difference", True, (FULL_SCALE,)),
    HeadlineFigure("drift_1h", "difference", True, (FULL_SCALE, HELD_AT)),
    HeadlineFigure("slope_per_decade", "difference", True, (FULL_SCALE, HELD_AT)),
    HeadlineFigure("pressure_sensitivity", "difference", True),
    HeadlineFigure("node_error", "difference", True),
    HeadlineFigure("slope", "ratio", False),
    HeadlineFigure("gauge_factor", "ratio", False),
    HeadlineFigure("zero_signal", "ratio", False),
)
"""Figures of which every sensor has a value, in the order in which pages show them."""

LEVELS = (
    "module",
    "sensor",
    "mounting",
    "session",
    "run",
    "repetition",
    "sensor_by_level",
    "residual",
    "total",
)
"""Components whose SDs at mid range are compared."""

SPREAD_FIGURES: tuple[HeadlineFigure, ...] = tuple(
    HeadlineFigure(f"sd_{level}", "ratio", True, (MID_RANGE,)) for level in LEVELS
)

FIGURES: tuple[HeadlineFigure, ...] = (*SENSOR_FIGURES, *SPREAD_FIGURES)
"""Everything that generations are compared by."""

VALUE_COLUMNS = ("figure", "unit", "generation", "batch", "module", "sensor", "position", "value", "noise")
"""Columns of :attr:`Comparable.values`. ``noise`` is how far noise, or few runs, moves a value to one side (a
magnitude upwards by about its standard uncertainty, an SD downwards); NaN where it does not or is unknown."""

_KEYS = ["generation", "module", "sensor"]

_NORMAL = 1.96
"""Half-width of a 95 % interval in standard uncertainties; more where degrees of freedom are few."""


@dataclass(frozen=True)
class Spread:
    """One component of one generation at mid range: its variance as strain squared, and what it is called."""

    generation: str
    level: str
    called: str
    variance: VarianceInterval


@dataclass(frozen=True)
class Comparable:
    """Everything that a campaign offers for comparing generations.

    Attributes
    ----------
    unit
        Unit of the reference (``mm/mm`` or ``mm``).
    values
        One row a figure and sensor, columns :data:`VALUE_COLUMNS`; magnitudes where less is better.
    spreads
        Components of each generation's own fit.
    conditions
        Condition → its value in this campaign, in units of the reference (a second).
    modules
        Generation → number of its modules among the values.
    """

    unit: str
    values: pd.DataFrame
    spreads: tuple[Spread, ...]
    conditions: Mapping[str, float]
    modules: Mapping[str, int]

    @property
    def generations(self) -> tuple[str, ...]:
        """Names of the generations that have any value, sorted."""
        return tuple(sorted(self.modules))

    def renamed(self, labels: Mapping[str, str]) -> Comparable:
        """Return the same with generations named as *labels* say."""
        return replace(
            self,
            values=self.values.assign(generation=self.values["generation"].replace(dict(labels))),
            spreads=tuple(
                replace(s, generation=labels.get(s.generation, s.generation)) for s in self.spreads
            ),
            modules={labels.get(name, name): number for name, number in self.modules.items()},
        )


def comparable_figures(
    description: Description,
    identities: Iterable[TrialIdentity],
    calibration: Calibration | None,
    fits: Iterable[GenerationFit],
    uneven: Iterable[str],
    hysteresis: Hysteresis | None,
    drift: Drift | None,
    pressure: Pressure | None,
    budget: Budget | None = None,
    layout: Layout | None = None,
    geometries: Mapping[str, str] | None = None,
) -> Comparable:
    """Gather every headline figure of a campaign.

    Parameters
    ----------
    description
        Rated range, direction in use.
    identities
        Of the trials that are used: batch and position of every sensor.
    calibration, hysteresis, drift, pressure, budget, layout
        The analyses, ``None`` where not measured.
    geometries
        Module → geometry of its nodes: node errors are compared between modules of one geometry.
    fits
        The nested fit of each generation by itself.
    uneven
        Generations whose noise forbids intervals of repetition and residual.
    """
    parts = [*_of_lines(calibration, description), *_of_loops(hysteresis), *_of_holds(drift)]
    parts += [*_of_pressure(pressure), *_of_budget(budget), *_of_layout(layout, geometries or {})]
    values = _joined(parts, identities)
    known = values.drop_duplicates(["generation", "module"])["generation"].value_counts()
    fits = tuple(fits)
    references = [a.reference for a in (calibration, hysteresis, drift, pressure) if a is not None]
    return Comparable(
        unit=references[0].unit if references else "",
        values=values,
        spreads=tuple(_spreads(fits, set(uneven))),
        conditions=_conditions(calibration, fits, hysteresis, drift),
        modules={str(name): int(number) for name, number in known.items()},
    )


def _joined(parts: list[pd.DataFrame], identities: Iterable[TrialIdentity]) -> pd.DataFrame:
    """All values with batch and position of their sensors; rows without a value are left out."""
    kept = [part for part in parts if len(part)]
    if not kept:
        return pd.DataFrame(columns=list(VALUE_COLUMNS))
    values = pd.concat(kept, ignore_index=True).dropna(subset=["value"])
    known = list(identities)
    places = {(i.generation, i.module, i.sensor): (i.batch, i.position or i.sensor) for i in known}
    batches = {i.module: i.batch for i in known}
    sensors = values[_KEYS].astype(str).itertuples(index=False, name=None)
    owners = [places.get(key, (batches.get(key[1], ""), key[2])) for key in sensors]
    values = values.assign(batch=[b for b, _ in owners], position=[p for _, p in owners])
    return values[list(VALUE_COLUMNS)].reset_index(drop=True)


def _figure(
    name: str,
    unit: str | pd.Series,
    rows: pd.DataFrame,
    values: pd.Series,
    noise: pd.Series | float = math.nan,
) -> pd.DataFrame:
    return rows[_KEYS].assign(figure=name, unit=unit, value=values.astype(float), noise=noise)


def noise_of(figures: pd.DataFrame) -> pd.Series:
    """Return how far noise moves figures of merit to one side, in their unit.

    A magnitude, or the largest of several, grows by about its standard uncertainty in quadrature. The SD of
    normal values with ν degrees of freedom is too small on average by the factor c₄(ν): what that lacks in
    quadrature.

    Source: c₄ as in ISO 7870-2:2013, annex (from memory).
    """
    half = figures["degrees_of_freedom"].astype(float) / 2.0
    share = np.exp(2.0 * (special.gammaln(half + 0.5) - special.gammaln(half))) / half
    lacks: pd.Series = figures["estimate"].astype(float) * np.sqrt(np.maximum(1.0 - share, 0.0))
    return figures["standard_uncertainty"].astype(float).where(figures["kind"] != "spread", lacks)


def _half_width(rows: pd.DataFrame, prefix: str) -> pd.Series:
    return (rows[f"{prefix}high"].astype(float) - rows[f"{prefix}low"].astype(float)) / 2.0


def _of_lines(calibration: Calibration | None, description: Description) -> Iterator[pd.DataFrame]:
    if calibration is None:
        return
    lines = principal_lines(calibration.sensor_lines)
    per = calibration.reference.unit
    per = f"({per})" if "/" in per else per
    yield _figure("zero_signal", lines["unit"], lines, lines["zero_signal"])
    yield _figure("slope", lines["unit"] + f"/{per}", lines, lines["slope"])
    if calibration.reference.name == "strain":
        yield _figure("gauge_factor", "1", lines, lines["gauge_factor"])
    found = sensor_figures(calibration, description)
    names = {name: name for name in ("linearity", "repeatability", "strain_error")}
    for own, name in {**names, "hysteresis": "staircase_hysteresis"}.items():
        rows = found[found["figure"] == own]
        yield _figure(name, rows["unit"], rows, rows["estimate"], noise_of(rows))


def _of_loops(hysteresis: Hysteresis | None) -> Iterator[pd.DataFrame]:
    if hysteresis is not None:
        rows = hysteresis.figures
        yield _figure("hysteresis", rows["unit"], rows, rows["estimate"], noise_of(rows))


def _of_holds(drift: Drift | None) -> Iterator[pd.DataFrame]:
    if drift is None:
        return
    figures = drift.figures
    yield _figure("drift_1h", figures["unit"], figures, figures["estimate"], noise_of(figures))
    stretched = _stretched(drift)
    squares = (_half_width(stretched, "") / _NORMAL) ** 2
    held = stretched.assign(_square=squares).groupby(_KEYS, sort=True)
    slopes = held["percent_fso_per_decade"].mean().abs().reset_index()
    noise = np.sqrt(held["_square"].mean() / held["_square"].count()).reset_index(drop=True)
    yield _figure("slope_per_decade", "%FSO per decade", slopes, slopes["percent_fso_per_decade"], noise)


def _stretched(drift: Drift) -> pd.DataFrame:
    """Holds at a stretched length in per cent of full-scale output."""
    holds = drift.holds
    return holds[(holds["place"] == "stretched") & (holds["percent_of"] == OF_FULL_SCALE)]


def _of_pressure(pressure: Pressure | None) -> Iterator[pd.DataFrame]:
    if pressure is not None:
        table = pressure.table
        unit = f"{pressure.reference.unit} per kPa"
        noise = _half_width(table, "strain_error_per_kpa_") / _NORMAL
        yield _figure("pressure_sensitivity", unit, table, table["strain_error_per_kpa"].abs(), noise)


def _of_budget(budget: Budget | None) -> Iterator[pd.DataFrame]:
    """Expanded uncertainty in use of every measured sensor, where it is largest."""
    if budget is not None:
        totals = budget.totals
        own = totals[totals["worst"].astype(bool) & (totals["sensor"].astype(str) != "")]
        yield _figure("expanded_uncertainty", budget.reference.unit, own, own["expanded_strain"])


def _of_layout(layout: Layout | None, geometries: Mapping[str, str]) -> Iterator[pd.DataFrame]:
    """Node error of every module, read by its sensors' own lines; its geometry stands for the position."""
    if layout is None:
        return
    rows = layout.by_module
    own = rows[(rows["read_by"] == OWN_LINE) & (rows["figure"] == "node error after best fit")]
    named = own.assign(sensor=[geometries.get(str(module), "") for module in own["module"]])
    yield _figure("node_error", "mm", named, named["rms_mm"])


def _spreads(fits: Iterable[GenerationFit], uneven: set[str]) -> Iterator[Spread]:
    """Components that may be stated: at least four degrees of freedom, noise alike within runs."""
    for fit in fits:
        if not fit.mean_slope:
            continue
        square = 1.0 / fit.mean_slope**2
        for component in fit.components:
            if component.name not in LEVELS or is_withheld(component):
                continue
            unsound = component.name in ON_NOISE and fit.generation in uneven
            variance = _scaled(fit.variance_at(component.name, "mid"), square, unsound)
            yield Spread(fit.generation, component.name, component.called, variance)
        yield Spread(fit.generation, "total", "total", _scaled(fit.total_at("mid"), square, False))


def _scaled(variance: VarianceInterval, square: float, unsound: bool) -> VarianceInterval:
    limits = (math.nan, math.nan) if unsound else (variance.low * square, variance.high * square)
    return VarianceInterval(variance.estimate * square, *limits)


def _conditions(
    calibration: Calibration | None,
    fits: tuple[GenerationFit, ...],
    hysteresis: Hysteresis | None,
    drift: Drift | None,
) -> dict[str, float]:
    found: dict[str, float] = {}
    if calibration is not None and len(calibration.sensor_lines):
        lines = principal_lines(calibration.sensor_lines)
        found[RANGE] = found[REACH] = float(lines["strain_high"].median())
        found[FULL_SCALE] = float((lines["full_scale_output"] / lines["slope"].abs()).median())
    if fits:
        found[MID_RANGE] = float(fits[0].places["mid"])
    if hysteresis is not None:
        found[RATE] = hysteresis.rate_per_s
    if drift is not None and len(rows := _stretched(drift)):
        found[HELD_AT] = float(rows["strain"].mean())
    return {name: value for name, value in found.items() if math.isfinite(value)}
