"""Pressure: what inflation does to every sensor, whether one correction serves all, and what is left.

Inflation at a kept distance of the nodes may bow the skin and lengthen it truly. Apparent and real strain
are not separable without the shape, so every coefficient holds for this actuator and mounting.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.analyses.coupling import coupling_table
from campaign.analyses.influence_sensors import (
    SensorKey,
    coefficient_table,
    sensor_fits,
    signal_slopes,
)
from campaign.analyses.influence_spread import InfluenceSpread, influence_spread
from campaign.analyses.influence_sweeps import (
    choose_reference,
    gather_points,
    sweep_table,
    time_labels,
    value_in_use,
)
from campaign.analyses.sensor_figures import FIGURE_COLUMNS, principal_lines
from campaign.methods.influence_model import InfluenceFit, compensate
from campaign.notices import Notice
from campaign.recordings.description import Description
from campaign.recordings.recording import ReferenceQuantity, TrialIdentity
from campaign.recordings.sensor_share import TrialKey
from campaign.trials.logged_pressure import LoggedPressure
from campaign.trials.sweeps import SweepFeatures
from campaign.units import UnitError, parse_quantity

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration

FloatArray = npt.NDArray[np.float64]

PRESSURE_NAMES: dict[str, str] = {
    "coefficient": "per_kpa",
    "per_x": "per_kpa_strain",
    "per_x_low": "per_kpa_strain_low",
    "per_x_high": "per_kpa_strain_high",
    "error_per_unit": "strain_error_per_kpa",
    "error_per_unit_low": "strain_error_per_kpa_low",
    "error_per_unit_high": "strain_error_per_kpa_high",
    "error_in_use": "strain_error_in_use",
    "error_in_use_low": "strain_error_in_use_low",
    "error_in_use_high": "strain_error_in_use_high",
    "error_in_use_uncertainty": "strain_error_in_use_uncertainty",
    "error_in_use_df": "error_df",
    "in_use": "in_use_kpa",
    "influence_low": "low_kpa",
    "influence_high": "high_kpa",
    "x_low": "strain_low",
    "x_high": "strain_high",
    "loop_error": "strain_loop",
    "loop_error_low": "strain_loop_low",
    "loop_error_high": "strain_loop_high",
}
"""Columns of the core's table → columns of the table ``pressure``."""


COMPENSATED_COLUMNS = (
    *("generation", "module", "sensor", "kind", "repetition", "trial", "samples", "before", "after"),
    *("strain_before", "strain_after", "inside"),
)
"""One row a trial of another kind that logs pressure: SD of its signals about their own line over x without
and with the sensor's correction, in signal units and as x; ``inside`` is whether all of it lies within the
range that the correction holds for."""


@dataclass(frozen=True)
class Correction:
    """What takes pressure out of the signal of one sensor, and where it holds.

    Attributes
    ----------
    fit
        The coefficients, x counted from ``origin``.
    origin
        Value of x at which the first coefficient holds.
    slope
        Signal per unit of x, for strain equivalents; NaN where not known.
    low_kpa, high_kpa, x_low, x_high
        Validity range; NaN where the lengths are not known.
    """

    fit: InfluenceFit
    origin: float
    slope: float
    low_kpa: float
    high_kpa: float
    x_low: float
    x_high: float

    def corrected(self, signal: FloatArray, x: FloatArray, pressure_kpa: FloatArray) -> FloatArray:
        """Return signals with what pressure adds taken off; shape (samples,) each."""
        return compensate(signal, x - self.origin, pressure_kpa, self.fit)

    def holds_for(self, x: FloatArray, pressure_kpa: FloatArray) -> npt.NDArray[np.bool_]:
        """Return which samples lie within the range that was measured, to a tenth of it."""
        spare = 0.1 * (self.high_kpa - self.low_kpa)
        inside = (pressure_kpa >= self.low_kpa - spare) & (pressure_kpa <= self.high_kpa + spare)
        if not self.fit.has_change:
            return np.asarray(inside)
        room = 0.1 * (self.x_high - self.x_low)
        return np.asarray(inside & (x >= self.x_low - room) & (x <= self.x_high + room))


@dataclass(frozen=True)
class BeforeAfter:
    """SD of a trial's signals about their own line, without and with a correction (signal units, and x)."""

    before: float
    after: float
    before_as_x: float
    after_as_x: float
    samples: int
    samples_outside: int


@dataclass(frozen=True)
class Pressure:
    """What the pressure trials of a campaign say.

    Attributes
    ----------
    reference
        What x is.
    table
        One row a sensor: the columns of the table ``pressure`` of the site, with limits, counts, validity
        range, value in use, hysteresis in pressure (``strain_loop``, rising minus falling at mid range, as
        strain) and residual SDs as strain (``strain_residual_sd_before``, ``…_after``).
    sweeps, points
        One row a sweep (:data:`campaign.analyses.influence_sweeps.SWEEP_COLUMNS`); the points behind them.
    curves
        (trial, sensor, repetition, sweep) → pressure in kPa and signal, thinned for drawing.
    spread
        The nested model, and what every correction leaves.
    corrections
        Sensor → its correction.
    coupling
        Neighbours that moved while only another sensor was strained
        (:data:`campaign.analyses.coupling.COUPLING_COLUMNS`).
    compensated
        Trials of other kinds that log pressure, with and without their sensor's correction
        (:data:`COMPENSATED_COLUMNS`).
    figures
        The error at the pressure in use of every sensor, to be judged by ``[limits] pressure_error``; columns
        of :data:`campaign.analyses.sensor_figures.FIGURE_COLUMNS`.
    in_use_kpa, rated
        Pressure that errors are stated at, and whether ``[use]`` named it.
    unit
        Unit of the signals, ``various`` where sensors differ.
    labels
        What all coefficients must be read with, by short name.
    notices
        What could not be told, and why.
    """

    reference: ReferenceQuantity
    table: pd.DataFrame
    sweeps: pd.DataFrame
    points: pd.DataFrame
    curves: dict[tuple[str, str, int, int], tuple[FloatArray, FloatArray]]
    spread: InfluenceSpread
    corrections: dict[SensorKey, Correction]
    coupling: pd.DataFrame
    compensated: pd.DataFrame
    figures: pd.DataFrame
    in_use_kpa: float
    rated: bool
    unit: str
    labels: dict[str, str] = field(default_factory=dict)
    notices: tuple[Notice, ...] = ()


def analyse_pressure(
    features: Mapping[TrialKey, SweepFeatures],
    calibration: Calibration | None,
    description: Description,
    logged: Iterable[tuple[TrialIdentity, LoggedPressure]] = (),
) -> Pressure | None:
    """Analyse the pressure trials of a campaign.

    Parameters
    ----------
    features
        Trials reduced to sweeps; those of other influences are passed over.
    calibration
        The sensors' lines, which turn signals into strains; ``None`` where there are none (then the levels of
        the sweeps at several lengths do, where there are such).
    description
        Pressure in use.
    logged
        Trials of other kinds that log pressure beside their own course: whose, and what they keep of it.

    Returns
    -------
    Pressure or None
        ``None`` where no trial holds a sweep of pressure.
    """
    own = [found for found in features.values() if found.influence == "pressure" and len(found.points)]
    if not own:
        return None
    reference = calibration.reference if calibration is not None else choose_reference(own)
    points = gather_points(own, reference)
    sweeps = sweep_table(points)
    origin = float(sweeps["x"].min()) if reference.name == "length" else 0.0
    fits, slopes = sensor_fits(sweeps, origin), signal_slopes(sweeps, calibration)
    in_use, rated = value_in_use(_stated_pressure(description), "pressure", sweeps)
    core = coefficient_table(points, sweeps, fits, slopes, origin, in_use)
    units = sorted(set(sweeps["unit"].astype(str)))
    spread = influence_spread(points, sweeps, slopes, "pressure")
    table = _pressure_table(core, spread)
    corrections = _corrections(core, fits, origin)
    return Pressure(
        reference,
        table,
        sweeps,
        points,
        _curves(own),
        spread,
        corrections,
        coupling_table(features, calibration),
        _compensated(logged, corrections, reference.name),
        pressure_figures(table, reference, calibration, description),
        in_use,
        rated,
        units[0] if len(units) == 1 else "various",
        time_labels(sweeps, "pressure"),
        (*spread.notices, *_one_length_notices(core)),
    )


def _stated_pressure(description: Description) -> dict[str, float]:
    """The pressure of ``[use]`` in kPa, where it is given."""
    text = description.use.get("pressure", "")
    try:
        return {"pressure": parse_quantity(text, ("pressure",)).value} if text else {}
    except UnitError:
        return {}


def _pressure_table(core: pd.DataFrame, spread: InfluenceSpread) -> pd.DataFrame:
    """The core's table by the names of the contract, residual SDs as strain beside those in signal units."""
    divisor = core["slope"].abs().where(core["slope"] != 0)
    return core.rename(columns=PRESSURE_NAMES).assign(
        strain_residual_sd_before=core["residual_sd_before"] / divisor,
        strain_residual_sd_after=core["residual_sd_after"] / divisor,
        one_correction=[spread.answers.get(str(g), "not decided") for g in core["generation"]],
    )


def _curves(
    features: list[SweepFeatures],
) -> dict[tuple[str, str, int, int], tuple[FloatArray, FloatArray]]:
    return {
        (found.identity.file, found.identity.sensor, found.identity.repetition, sweep): curve
        for found in features
        for sweep, curve in found.curves.items()
    }


def _corrections(
    core: pd.DataFrame, fits: Mapping[SensorKey, InfluenceFit], origin: float
) -> dict[SensorKey, Correction]:
    made = {}
    for row in core.to_dict("records"):
        key = (str(row["generation"]), str(row["module"]), str(row["sensor"]))
        made[key] = Correction(
            fits[key],
            origin,
            float(row["slope"]),
            float(row["influence_low"]),
            float(row["influence_high"]),
            float(row["x_low"]),
            float(row["x_high"]),
        )
    return made


def _one_length_notices(core: pd.DataFrame) -> tuple[Notice, ...]:
    single = core[core["lengths"] < 2]
    if single.empty:
        return ()
    names = ", ".join(f"{r['module']} {r['sensor']}" for r in single.head(6).to_dict("records"))
    more = f" and {len(single) - 6} more" if len(single) > 6 else ""
    what = f"pressure was swept at one known length only: {names}{more}"
    done = "the change of the coefficient with strain is not identifiable for them"
    remedy = "sweep at two or more kept lengths"
    return (Notice("one-length", "noted", None, None, None, what, done, remedy, len(single)),)


def _compensated(
    logged: Iterable[tuple[TrialIdentity, LoggedPressure]],
    corrections: Mapping[SensorKey, Correction],
    reference: str,
) -> pd.DataFrame:
    """One row a trial of another kind that logs pressure and whose sensor has a correction."""
    rows = []
    for who, kept in logged:
        correction = corrections.get((who.generation, who.module, who.sensor))
        if correction is None or reference not in kept.products:
            continue
        at_origin, per_x = np.nan_to_num(correction.fit.coefficients).tolist()
        before = kept.spread(reference, 0.0, 0.0, correction.origin)
        after = kept.spread(reference, at_origin, per_x, correction.origin)
        divisor = abs(correction.slope) or math.nan
        ends = np.array(kept.x_range[reference]), np.array([kept.low_kpa, kept.high_kpa])
        row = {name: getattr(who, name) for name in ("generation", "module", "sensor", "kind", "repetition")}
        row |= {"trial": who.file, "samples": kept.samples, "before": before, "after": after}
        row |= {"strain_before": before / divisor, "strain_after": after / divisor}
        rows.append(row | {"inside": bool(correction.holds_for(*ends).all())})
    return pd.DataFrame(rows, columns=list(COMPENSATED_COLUMNS))


def before_and_after(
    correction: Correction, signal: FloatArray, x: FloatArray, pressure_kpa: FloatArray
) -> BeforeAfter | None:
    """Return what a correction does to a trial of another kind that logs pressure too.

    Parameters
    ----------
    correction
        Of the trial's sensor.
    signal, x, pressure_kpa
        Shape (samples,): the trial's series, x in the campaign's reference.

    Returns
    -------
    BeforeAfter or None
        SDs about the trial's own least-squares line of signal against x; ``None`` with fewer than 3 complete
        samples or a pressure that stands still.
    """
    known = np.isfinite(signal) & np.isfinite(x) & np.isfinite(pressure_kpa)
    if known.sum() < 3 or np.ptp(pressure_kpa[known]) == 0:
        return None
    y, own_x, own_p = signal[known], x[known], pressure_kpa[known]
    before = _sd_about_line(own_x, y)
    after = _sd_about_line(own_x, correction.corrected(y, own_x, own_p))
    divisor = abs(correction.slope) or math.nan
    outside = int((~correction.holds_for(own_x, own_p)).sum())
    return BeforeAfter(before, after, before / divisor, after / divisor, int(known.sum()), outside)


def _sd_about_line(x: FloatArray, y: FloatArray) -> float:
    columns = 2 if np.ptp(x) > 0 else 1
    design = np.column_stack([np.ones(len(x)), x - x.mean()])[:, :columns]
    rest = y - design @ np.linalg.lstsq(design, y, rcond=None)[0]
    return float(np.sqrt(rest @ rest / max(len(y) - columns, 1)))


def pressure_figures(
    table: pd.DataFrame,
    reference: ReferenceQuantity,
    calibration: Calibration | None,
    description: Description,
) -> pd.DataFrame:
    """Return the error by pressure of every sensor as figures to be judged by ``[limits] pressure_error``.

    Parameters
    ----------
    table
        The table ``pressure``.
    reference
        What x is.
    calibration
        Full-scale outputs, for a limit in %FSO.
    description
        The limit, for its unit.

    Returns
    -------
    DataFrame
        Columns of :data:`campaign.analyses.sensor_figures.FIGURE_COLUMNS`: the magnitude of the uncorrected
        error at the pressure in use, in the unit of the limit; empty where it cannot be given in that unit.
    """
    unit = description.limits.get("pressure_error", (math.nan, reference.unit))[1]
    factors = _factors_to(unit, table, reference, calibration)
    if factors is None:
        return pd.DataFrame(columns=list(FIGURE_COLUMNS))
    estimate = table["strain_error_in_use"].abs() * factors
    reach = (table["strain_error_in_use_high"] - table["strain_error_in_use_low"]) / 2 * factors
    return table[["generation", "module", "sensor"]].assign(
        figure="pressure_error",
        unit=unit,
        estimate=estimate,
        low=(estimate - reach).clip(lower=0.0),
        high=estimate + reach,
        standard_uncertainty=table["strain_error_in_use_uncertainty"] * factors,
        degrees_of_freedom=table["error_df"].astype(float),
        kind="estimate",
    )[list(FIGURE_COLUMNS)]


def _factors_to(
    unit: str, table: pd.DataFrame, reference: ReferenceQuantity, calibration: Calibration | None
) -> pd.Series | None:
    """Factor from x to *unit* for every sensor; ``None`` where there is none."""
    if unit == reference.unit:
        return pd.Series(1.0, index=table.index)
    if unit != "%FSO" or calibration is None or calibration.sensor_lines.empty:
        return None
    lines = principal_lines(calibration.sensor_lines).set_index(["generation", "module", "sensor"])
    full = lines["full_scale_output"] / lines["slope"].abs()
    keys = pd.MultiIndex.from_frame(table[["generation", "module", "sensor"]])
    return pd.Series(100.0 / full.reindex(keys).to_numpy(float), index=table.index)
