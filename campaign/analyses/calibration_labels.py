"""What the lines of a campaign must be read with: facts about time, range and reference, in few words."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from campaign.analyses.calibration_lines import POOLED, UNKNOWN, BranchLine
from campaign.recordings.description import Description
from campaign.recordings.recording import ReferenceQuantity

CONFOUNDED_SHARE = 0.5
"""Level and time count as confounded where more than this share of the runs only ever moves one way."""


@dataclass(frozen=True)
class SharedReference:
    """The uncertainty of the reference that the lines carry; standard uncertainties, NaN where not stated.

    Attributes
    ----------
    stated
        Whether any was; if not, the reference was taken as exact and every uncertainty is a lower bound.
    scale_relative, zero_mm, backlash_mm, random_mm
        As stated for the stand. The random part is within the scatter of readings and is not added again.
    rest_lengths_with_uncertainty, sensors
        Sensors whose rest length has an uncertainty, of all sensors with a line.
    largest_rest_length_strain
        Largest strain that one standard uncertainty of a rest length stands for at zero strain, u(L₀)/L₀.
    certificate, calibrated
        As stated, or empty.
    """

    stated: bool
    scale_relative: float
    zero_mm: float
    backlash_mm: float
    random_mm: float
    rest_lengths_with_uncertainty: int
    sensors: int
    largest_rest_length_strain: float
    certificate: str
    calibrated: str


def shared_reference(
    used: pd.DataFrame, description: Description, reference: ReferenceQuantity
) -> SharedReference:
    """Return what uncertainty of the reference was carried."""
    stand = description.length_reference
    sensors = used.drop_duplicates("sensor_code")
    matters = (sensors["rest_length_uncertainty_mm"] > 0) & (reference.name == "strain")
    uncertain = sensors[matters]
    relative = uncertain["rest_length_uncertainty_mm"] / uncertain["rest_length_mm"]
    return SharedReference(
        bool(stand.stated or len(uncertain)),
        stand.scale_relative,
        stand.zero_mm,
        stand.backlash_mm,
        stand.random_mm,
        len(uncertain),
        len(sensors),
        float(relative.max()) if len(uncertain) else float("nan"),
        stand.certificate,
        stand.calibrated,
    )


def campaign_labels(
    used: pd.DataFrame,
    lines: tuple[BranchLine, ...],
    description: Description,
    reference: ReferenceQuantity,
) -> dict[str, str]:
    """Return labels by short name; only those that apply.

    ``time_confounded``, ``full_scale``, ``reference``, ``stretch_exponent``, ``gauge_factor``, ``runs``.
    """
    if not lines:
        return {}
    labels = {"full_scale": _full_scale_label(lines, description, reference)}
    confounded = time_confounded(used)
    if confounded:
        labels["time_confounded"] = confounded
    if not shared_reference(used, description, reference).stated:
        labels["reference"] = "reference taken as exact; uncertainty is a lower bound"
    if reference.name == "strain":
        labels["stretch_exponent"] = "a lower bound if cable capacitance was not removed"
    else:
        labels["gauge_factor"] = "not identifiable: rest lengths are not known"
        labels["stretch_exponent"] = "not identifiable: rest lengths are not known"
    unknown = {line.key for line in lines if line.variance_source == UNKNOWN}
    if unknown:
        count = len({line.key for line in lines})
        labels["runs"] = f"{UNKNOWN} for {len(unknown)} of {count} sensors (one run)"
    if any(line.variance_source == POOLED for line in lines):
        labels["variance_source"] = "run-to-run covariance pooled over the sensors of a generation"
    return labels


def time_confounded(rows: pd.DataFrame) -> str:
    """Return 'includes creep over the run (n min)' where level and time run together in most runs, else ''.

    They separate only with descending, repeated or randomly ordered levels.
    """
    ordered = rows.sort_values(["run", "order"])
    step = ordered.groupby("run")["x"].diff()
    span = ordered.groupby("run")["x"].transform(lambda x: x.max() - x.min())
    back = step * np.sign(step.groupby(ordered["run"]).transform("sum")) < -0.02 * span
    one_way = ~back.groupby(ordered["run"]).any()
    if one_way.mean() <= CONFOUNDED_SHARE:
        return ""
    ends = ordered.groupby("run")["time_s"].agg(lambda t: t.max() - t.min())
    minutes = float(np.nanmedian(ends)) / 60.0 if ends.notna().any() else float("nan")
    if not np.isfinite(minutes) or minutes <= 0:
        return "includes creep over the run (time not recorded)"
    return f"includes creep over the run ({minutes:.2g} min)"


def _full_scale_label(
    lines: tuple[BranchLine, ...], description: Description, reference: ReferenceQuantity
) -> str:
    rated = description.range_strain if reference.name == "strain" else description.range_elongation_mm
    shown = f"{rated * reference.shown_factor:.4g} {reference.shown_unit}"
    short = {line.key for line in lines if line.full_scale == "measured"}
    if not rated > 0:
        return "full scale is the range measured: no rated range is given"
    if not short:
        return f"full scale is the rated range, {shown}"
    count = len({line.key for line in lines})
    return (
        f"full scale is the rated range, {shown}; for {len(short)} of {count} sensors, "
        "which did not reach it, the range measured"
    )


def record_conditions(rows: pd.DataFrame, line: BranchLine, reference: ReferenceQuantity) -> dict[str, str]:
    """Return the conditions that a calibration record holds in: range, approach, runs, climate, pressure."""
    low, high = float(rows["x"].min()), float(rows["x"].max())
    factor, unit = reference.shown_factor, reference.shown_unit
    approach = {"rising": "from below only", "falling": "from above only", "both": "from either side"}
    mountings = rows["session"].astype(str).nunique()
    conditions = {
        "range": f"{low * factor:.4g} to {high * factor:.4g} {unit}",
        "approach": approach[line.branch],
        "runs": f"{line.runs} in {mountings} mounting{'s' if mountings > 1 else ''}",
        "temperature": _span(rows["temperature_c"], "°C"),
        "humidity": _span(rows["humidity_percent"], "%RH"),
        "pressure": _span(rows["pressure_kpa"], "kPa"),
        "dwell": _span(rows["dwell_s"], "s") if "dwell_s" in rows else "not recorded",
        "rate": "quasi-static, held at each level",
        "conditioning": "not recorded",
    }
    creep = time_confounded(rows)
    return conditions | ({"time": creep} if creep else {})


def _span(values: pd.Series, unit: str) -> str:
    """Range of the known values, or 'not recorded'."""
    known = values.astype(float).dropna()
    if known.empty:
        return "not recorded"
    low, high = f"{known.min():.4g}", f"{known.max():.4g}"
    return f"{low} {unit}" if low == high else f"{low} to {high} {unit}"
