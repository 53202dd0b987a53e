"""What the lines of a campaign must be read with: facts about time, range and reference, in few words."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from campaign.analyses.calibration_lines import POOLED, UNKNOWN, BranchLine
from campaign.analyses.used_readings import UsedReadings
from campaign.analyses.weighted_readings import STATED_GAIN
from campaign.methods.electrode_resistance import Model, capacitance_seen, omega_rc_of_error
from campaign.recordings.description import Description
from campaign.recordings.recording import ReferenceQuantity
from campaign.units import parse_quantity

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

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
    used: UsedReadings, description: Description, reference: ReferenceQuantity
) -> SharedReference:
    """Return what uncertainty of the reference was carried."""
    stand = description.length_reference
    sensors = used.table.iloc[np.unique(used.sensor, return_index=True)[1]]
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
    used: UsedReadings,
    lines: tuple[BranchLine, ...],
    description: Description,
    reference: ReferenceQuantity,
) -> dict[str, str]:
    """Return labels by short name; only those that apply.

    ``time_confounded``, ``full_scale``, ``reference``, ``stretch_exponent``, ``gauge_factor``, ``runs``,
    ``variance_source``, ``electrode_resistance``, ``weights`` (readings are unweighted where it is missing).
    """
    if not lines:
        return {}
    labels = {"full_scale": _full_scale_label(lines, description, reference)}
    if used.weighting_gain >= STATED_GAIN:
        labels["weights"] = (
            "readings weighted by their scatter, which lowers the standard error of the slope within "
            f"a run by {100 * used.weighting_gain:.0f} %"
        )
    confounded = time_confounded(used, np.arange(len(used.run_minutes)))
    if confounded:
        labels["time_confounded"] = confounded
    if not shared_reference(used, description, reference).stated:
        labels["reference"] = "reference taken as exact; uncertainty is a lower bound"
    if reference.name == "strain":
        labels["stretch_exponent"] = _exponent_label(description)
    else:
        labels["gauge_factor"] = "not identifiable: rest lengths are not known"
        labels["stretch_exponent"] = "not identifiable: rest lengths are not known"
    resistance = electrode_resistance_label(used, description)
    if resistance:
        labels["electrode_resistance"] = resistance
    unknown = {line.key for line in lines if line.variance_source == UNKNOWN}
    if unknown:
        count = len({line.key for line in lines})
        labels["runs"] = f"{UNKNOWN} for {len(unknown)} of {count} sensors (one run)"
    if any(line.variance_source == POOLED for line in lines):
        labels["variance_source"] = "run-to-run covariance pooled over the sensors of a generation"
    return labels


def _exponent_label(description: Description) -> str:
    """What the stretch exponent must be read with: whether the cable's capacitance was taken off."""
    if description.readout.get("open_correction", "").lower() == "true":
        return "cable capacitance removed by the instrument's open correction, as far as that goes"
    return "a lower bound if cable capacitance was not removed"


def electrode_resistance_label(used: UsedReadings, description: Description) -> str:
    """Return by how much the electrodes' resistance lowers the capacitance shown; '' where it cannot be told.

    The distributed line of ``methods.electrode_resistance`` with the stated resistance and frequency, and the
    largest signal of the campaign in pF.
    """
    resistance, frequency = description.electrode_resistance_ohm, description.readout.get("frequency", "")
    capacitances = used.signal[(used.table["unit"] == "pF").to_numpy()]
    if not (resistance > 0 and frequency and len(capacitances) and capacitances.max() > 0):
        return ""
    model: Model = "series" if description.readout.get("model") == "series" else "parallel"
    hertz = parse_quantity(frequency, ("frequency",)).value
    omega_rc = 2.0 * np.pi * hertz * resistance * float(capacitances.max()) * 1e-12
    error = 1.0 - float(capacitance_seen(omega_rc, model))
    return (
        f"electrode resistance lowers the largest capacitance shown by {100.0 * error:.2g} % "
        f"(ωRC {omega_rc:.2g}, {model} model; 1 % at {omega_rc_of_error(0.01, model):.2g})"
    )


def time_confounded(used: UsedReadings, runs: IntArray) -> str:
    """Return 'includes creep over the run (n min)' where level and time run together in most runs, else ''.

    ``runs`` are codes of runs. Level and time separate only with descending, repeated or randomly ordered
    levels.
    """
    if np.mean(used.one_way_runs[runs]) <= CONFOUNDED_SHARE:
        return ""
    known = used.run_minutes[runs][used.run_minutes[runs] > 0]
    if len(known) == 0:
        return "includes creep over the run (time not recorded)"
    return f"includes creep over the run ({np.median(known):.2g} min)"


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


def record_conditions(used: UsedReadings, line: BranchLine, reference: ReferenceQuantity) -> dict[str, str]:
    """Return the conditions that a calibration record holds in: range, approach, runs, climate, pressure."""
    x = used.x[line.rows] * reference.shown_factor
    approach = {"rising": "from below only", "falling": "from above only", "both": "from either side"}
    mountings = len(set(used.mounting[line.rows].tolist()))
    conditions = {
        "range": _span(x, reference.shown_unit),
        "approach": approach[line.branch],
        "runs": f"{line.runs} in {mountings} mounting{'s' if mountings > 1 else ''}",
        "rate": "quasi-static, held at each level",
        "conditioning": "not recorded",
    }
    columns = {"temperature_c": "°C", "humidity_percent": "%RH", "pressure_kpa": "kPa", "dwell_s": "s"}
    for column, unit in columns.items():
        known = column in used.table
        span = _span(used.column(column, line.rows), unit) if known else "not recorded"
        conditions[column.partition("_")[0]] = span
    creep = time_confounded(used, line.run_codes)
    return conditions | ({"time": creep} if creep else {})


def _span(values: FloatArray, unit: str) -> str:
    """Range of the known values, each end to a hundredth of its width, or 'not recorded'."""
    known = values[np.isfinite(values)]
    if len(known) == 0:
        return "not recorded"
    width = float(np.ptp(known))
    places = 2 - math.floor(math.log10(width)) if width > 0 else 6
    low, high = (f"{round(float(end), places) + 0.0:.6g}" for end in (known.min(), known.max()))
    shown = low if low == high else f"{low} to {high}"
    return f"{shown} {unit}".replace("-", "\N{MINUS SIGN}")
