"""The other influences: temperature, strain across, contact, nearness of a grounded body, bending.

The same form and code as for pressure; each kind has its own headline: the temperature coefficients of zero
and of sensitivity, the cross-axis sensitivity in per cent of the sensitivity along the axis.
"""

from __future__ import annotations

import math
from collections.abc import Hashable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from campaign.analyses.influence_sensors import coefficient_table, sensor_fits, signal_slopes
from campaign.analyses.influence_spread import InfluenceSpread, influence_spread
from campaign.analyses.influence_sweeps import (
    choose_reference,
    gather_points,
    sweep_table,
    time_labels,
    value_in_use,
)
from campaign.notices import Notice
from campaign.recordings.description import Description
from campaign.recordings.recording import ReferenceQuantity
from campaign.recordings.sensor_share import TrialKey
from campaign.trials.sweeps import SweepFeatures
from campaign.units import UnitError, parse_quantity

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration

INFLUENCES = ("temperature", "transverse", "contact", "proximity", "bend")
"""In the order of pages."""

INFLUENCE_COLUMNS = (
    *("generation", "module", "sensor", "influence", "coefficient", "low", "high", "unit"),
    *("strain_equivalent", "strain_equivalent_low", "strain_equivalent_high"),
    *("per_strain", "per_strain_low", "per_strain_high"),
    *("relative_percent", "relative_percent_low", "relative_percent_high"),
    *("sensitivity_percent", "sensitivity_percent_low", "sensitivity_percent_high"),
    *("position", "influence_unit", "influence_low", "influence_high", "zero_at", "in_use"),
    *("strain_error_in_use", "strain_error_in_use_low", "strain_error_in_use_high"),
    *("residual_sd_before", "residual_sd_after", "left_out_by", "sweeps", "runs", "lengths"),
    *("df", "variance_source", "one_correction", "label"),
)
"""One row a sensor and influence.

``coefficient`` is in ``unit``, the signal's over the influence's; ``strain_equivalent`` is the apparent
strain per unit of the influence. ``relative_percent`` is the headline: per cent of the zero signal per kelvin
for temperature, cross-axis sensitivity for strain across, NaN else; ``sensitivity_percent`` the change of
the sensitivity in per cent per kelvin.
"""


@dataclass(frozen=True)
class InfluenceResult:
    """One influence in one unit: its sweeps, their zero, and the spread over modules and sensors."""

    influence: str
    unit: str
    zero: float
    in_use: float
    rated: bool
    sweeps: pd.DataFrame
    points: pd.DataFrame
    spread: InfluenceSpread
    labels: dict[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class Influences:
    """What the trials of all influences but pressure say.

    Attributes
    ----------
    reference
        What x is.
    table
        Columns of :data:`INFLUENCE_COLUMNS`, the table ``influences`` of the site.
    results
        One an influence and unit, in the order of :data:`INFLUENCES`.
    notices
        What could not be told, and why.
    """

    reference: ReferenceQuantity
    table: pd.DataFrame
    results: tuple[InfluenceResult, ...]
    notices: tuple[Notice, ...] = ()

    def of(self, influence: str) -> pd.DataFrame:
        """Return the rows of one influence."""
        return self.table[self.table["influence"] == influence]


def analyse_influences(
    features: Mapping[TrialKey, SweepFeatures], calibration: Calibration | None, description: Description
) -> Influences | None:
    """Analyse the trials of all influences but pressure.

    Parameters
    ----------
    features
        Trials reduced to sweeps; those of pressure are passed over.
    calibration
        The sensors' lines, or ``None``.
    description
        Temperature range in use.

    Returns
    -------
    Influences or None
        ``None`` where no trial holds a sweep.
    """
    own = [f for f in features.values() if f.influence in INFLUENCES and len(f.points)]
    if not own:
        return None
    reference = calibration.reference if calibration is not None else choose_reference(own)
    results, tables = [], []
    notices: list[Notice] = []
    for influence, unit in sorted(
        {(f.influence, f.unit) for f in own}, key=lambda pair: (INFLUENCES.index(pair[0]), pair[1])
    ):
        alike = [f for f in own if (f.influence, f.unit) == (influence, unit)]
        result, table = _one(influence, unit, alike, reference, calibration, description)
        results.append(result)
        tables.append(table)
        notices += result.spread.notices
    whole = pd.concat(tables, ignore_index=True)
    return Influences(reference, whole, tuple(results), tuple(notices))


def _one(
    influence: str,
    unit: str,
    features: list[SweepFeatures],
    reference: ReferenceQuantity,
    calibration: Calibration | None,
    description: Description,
) -> tuple[InfluenceResult, pd.DataFrame]:
    zero = zero_of(influence, features)
    points = gather_points(features, reference, zero)
    sweeps = sweep_table(points)
    known = sweeps["x"].notna().any()
    origin = float(sweeps["x"].min()) if reference.name == "length" and known else 0.0
    slopes = signal_slopes(sweeps, calibration)
    fits = sensor_fits(sweeps, origin)
    in_use, rated = value_in_use(_stated_range(description), influence, sweeps)
    core = coefficient_table(points, sweeps, fits, slopes, origin, in_use)
    spread = influence_spread(points, sweeps, slopes, influence)
    labels = time_labels(sweeps, influence)
    result = InfluenceResult(influence, unit, zero, in_use, rated, sweeps, points, spread, labels)
    rows = [_influence_row(row, influence, unit, zero, spread) for row in core.to_dict("records")]
    return result, pd.DataFrame(rows, columns=list(INFLUENCE_COLUMNS))


def zero_of(influence: str, features: list[SweepFeatures]) -> float:
    """Return the value that counts as none of the influence: for temperature the middle of all, whole °C."""
    if influence != "temperature":
        return 0.0
    values = np.concatenate([f.points["influence"].to_numpy(float) for f in features])
    return float(round((float(values.min()) + float(values.max())) / 2.0))


def _stated_range(description: Description) -> dict[str, float]:
    """The temperature range of ``[use]`` in kelvin, where it is given; half of it lies on either side."""
    text = description.use.get("temperature_range", "")
    try:
        return {"temperature": parse_quantity(text, ("temperature difference",)).value / 2.0} if text else {}
    except UnitError:
        return {}


def _influence_row(
    row: dict[Hashable, Any], influence: str, unit: str, zero: float, spread: InfluenceSpread
) -> dict[str, object]:
    shown = {"°C": "K"}.get(unit, unit)
    made: dict[str, object] = {
        **{name: row[name] for name in INFLUENCE_COLUMNS if name in row},
        "influence": influence,
        "unit": f"{row['unit']} per {shown}",
        "influence_unit": shown,
        "zero_at": zero,
        "one_correction": spread.answers.get(str(row["generation"]), "not decided"),
    }
    for name, source in (
        ("strain_equivalent", "error_per_unit"),
        ("per_strain", "per_x"),
        ("strain_error_in_use", "error_in_use"),
    ):
        made |= {f"{name}{end}": row[f"{source}{end}"] for end in ("", "_low", "_high")}
    return made | _headline(row, influence, unit)


def _headline(row: dict[Hashable, Any], influence: str, unit: str) -> dict[str, object]:
    """Cross-axis sensitivity, or the temperature coefficients of zero and of sensitivity, in per cent."""
    ends = ("", "_low", "_high")
    found: dict[str, object] = {
        f"{n}_percent{e}": math.nan for n in ("relative", "sensitivity") for e in ends
    }
    if influence == "transverse" and unit == "mm/mm":
        found |= {f"relative_percent{end}": 100.0 * row[f"error_per_unit{end}"] for end in ends}
    if influence == "temperature":
        names = {"": "coefficient", "_low": "low", "_high": "high"}
        found |= _percent_of(row, names, abs(float(row["zero_signal"])), "relative")
        changes = {end: f"per_x{end}" for end in ends}
        found |= _percent_of(row, changes, float(row["slope"]), "sensitivity")
    return found


def _percent_of(
    row: dict[Hashable, Any], names: Mapping[str, str], whole: float, called: str
) -> dict[str, object]:
    if not (math.isfinite(whole) and whole):
        return {}
    values = {end: 100.0 * float(row[name]) / whole for end, name in names.items()}
    if whole < 0:
        values["_low"], values["_high"] = values["_high"], values["_low"]
    return {f"{called}_percent{end}": value for end, value in values.items()}
