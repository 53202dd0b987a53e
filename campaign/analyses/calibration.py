"""Calibration: what line each sensor follows and how well, with runs as the unit of evidence.

The line of a sensor is that of its runs' lines together; its covariance and degrees of freedom come from
between runs, its own where they are many and pooled over the sensors of the generation where they are few.
The ordinary least-squares line is given for comparison and never carries an interval.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace

import pandas as pd

from campaign.analyses.calibration_influence import (
    influence_of_readings,
    ordinary_fits,
    ordinary_lines,
    outlying_notices,
)
from campaign.analyses.calibration_labels import (
    SharedReference,
    campaign_labels,
    record_conditions,
    shared_reference,
)
from campaign.analyses.calibration_lines import (
    BranchLine,
    branch_lines,
    run_lines_frame,
)
from campaign.analyses.calibration_spread import hysteresis_frame, repeatability_frame
from campaign.analyses.length_lines import LengthLine, length_line
from campaign.analyses.line_sources import LineSources, line_sources
from campaign.analyses.sensor_lines import sensor_lines_frame
from campaign.analyses.used_readings import REST, UsedReadings, used_readings
from campaign.analyses.weighted_readings import with_weights
from campaign.methods.calibration_line import t_quantile
from campaign.methods.inverse_reading import ReadingModel
from campaign.notices import Notice
from campaign.recordings.description import Description
from campaign.recordings.recording import ReferenceQuantity
from campaign.trials.readings import SENSOR_KEYS, Readings


@dataclass(frozen=True)
class CalibrationRecord:
    """The line of one sensor and branch with all that a reading by it needs, for export.

    Signals are in ``unit``, x in ``reference_unit``. NaN where unknown: with one run there is no run-to-run
    error and so no interval.

    Attributes
    ----------
    intercept, slope, var_intercept, var_slope, cov_intercept_slope
        The line and its covariance, reference uncertainty included.
    run_var_intercept, run_var_slope, run_cov
        Covariance of the line of a run in a new mounting about it: its variance at x is v₀ + 2 x c + x² v₁.
    residual_variance, lack_of_fit_variance, direction_half_width
        Of one reading about its run; of a level about the line in every run; half the loop width (both
        branches).
    degrees_of_freedom, t_quantile_975
        Effective degrees of freedom of what averaging does not reduce, at mid range (Welch–Satterthwaite).
    variance_source
        ``"this sensor's runs"``, ``"pooled over sensors"`` or ``"run-to-run error unknown"``.
    signal_low, signal_high, x_low, x_high, zero_signal
        Calibrated range, and the line's signal at x = 0.
    length_line
        The fields from ``intercept`` to ``run_cov`` of the line against length in mm, by the same names;
        empty where the rest length is not known. Put in place of those of the record they read lengths: the
        rest length cancels where lengths are recorded, so a length is never the strain multiplied.
    """

    generation: str
    module: str
    sensor: str
    branch: str
    unit: str
    reference_name: str
    reference_unit: str
    intercept: float
    slope: float
    var_intercept: float
    var_slope: float
    cov_intercept_slope: float
    run_var_intercept: float
    run_var_slope: float
    run_cov: float
    residual_variance: float
    lack_of_fit_variance: float
    direction_half_width: float
    degrees_of_freedom: float
    t_quantile_975: float
    variance_source: str
    signal_low: float
    signal_high: float
    x_low: float
    x_high: float
    zero_signal: float
    rest_length_mm: float
    rest_length_uncertainty_mm: float
    runs: int
    conditions: dict[str, str]
    date: str
    files: tuple[str, ...]
    sha256: tuple[str, ...]
    length_line: dict[str, float] = field(default_factory=dict)

    @property
    def reading_model(self) -> ReadingModel:
        """The record as the model that reads a reference from a signal."""
        return ReadingModel(
            self.intercept,
            self.slope,
            self.var_intercept,
            self.var_slope,
            self.cov_intercept_slope,
            self.run_var_intercept,
            self.run_var_slope,
            self.run_cov,
            self.lack_of_fit_variance,
            self.direction_half_width,
            self.residual_variance,
            self.t_quantile_975,
        )

    @property
    def length_model(self) -> ReadingModel | None:
        """The model that reads a length in mm from a signal; None where the rest length is not known."""
        return replace(self, **self.length_line).reading_model if self.length_line else None  # type: ignore[arg-type]


@dataclass(frozen=True)
class Calibration:
    """What the staircases of a campaign say about its sensors' lines.

    Attributes
    ----------
    reference
        What x is.
    readings
        The table of readings with fitted, residual (signal units), studentised, leverage and cooks_distance
        by the line that stands for the sensor (both branches, else the only one); NaN where not used.
    sensor_lines
        One row a sensor and branch (rising, falling, both): columns of the table ``sensor_lines`` of the
        site, and full_scale_output (signal units), full_scale (what it covers), gauge_factor_low,
        gauge_factor_high, gauge_factor_label, hysteresis_null_percent_fso (95 % quantile of the largest
        difference were there none), hysteresis_p, repeatability_df, run_to_run_sd (strain-equivalent at mid
        range, units of x), repeatability_df.
    run_lines
        generation, module, sensor, position, session, repetition, trial, branch, intercept, slope,
        residual_sd, readings, x_low, x_high, zero_return (signal), zero_return_percent_fso.
    level_hysteresis
        generation, module, sensor, nominal_level, difference (rising − falling, signal), low, high
        (simultaneous 95 %), percent_fso, runs, label (empty or 'not distinguishable from the stand').
    repeatability
        generation, module, sensor, direction, nominal_level, runs, sd, range (signal), sd_percent_fso.
    ordinary_lines
        Least squares over all readings, for comparison only: module, sensor, branch, intercept, slope,
        se_intercept, se_slope.
    records
        One a sensor and branch.
    shared_reference
        What uncertainty of the reference was carried.
    labels
        What the whole campaign's lines must be read with, by short name.
    notices
        Outlying readings, sensors without a line.
    line_sources
        One a sensor and branch: what the variance of a reading by it consists of, each source once.
    """

    reference: ReferenceQuantity
    readings: pd.DataFrame
    sensor_lines: pd.DataFrame
    run_lines: pd.DataFrame
    level_hysteresis: pd.DataFrame
    repeatability: pd.DataFrame
    ordinary_lines: pd.DataFrame
    records: tuple[CalibrationRecord, ...]
    shared_reference: SharedReference
    labels: dict[str, str] = field(default_factory=dict)
    notices: tuple[Notice, ...] = ()
    line_sources: tuple[LineSources, ...] = ()


def analyse_calibration(
    readings: Readings, description: Description, sensors: pd.DataFrame, file_hashes: Mapping[str, str]
) -> Calibration:
    """Calibrate every sensor whose readings are used.

    Parameters
    ----------
    readings
        Plateaus of all staircases.
    description
        Rated range and uncertainties of the reference.
    sensors
        Register of sensors: module, sensor and, where known, rest_length_mm and rest_length_uncertainty_mm.
    file_hashes
        SHA-256 of each recording by its path, for the records.

    Returns
    -------
    Calibration
        With empty tables where no sensor has a line.
    """
    reference = readings.reference
    used = with_weights(used_readings(readings, sensors))
    lines = branch_lines(used, reference, description)
    fits = ordinary_fits(used, lines)
    table = influence_of_readings(readings.table, used, lines, fits)
    return Calibration(
        reference,
        table,
        sensor_lines_frame(used, lines, reference),
        run_lines_frame(used, lines),
        hysteresis_frame(used, lines, reference, description),
        repeatability_frame(lines),
        ordinary_lines(lines, fits),
        tuple(_record(line, used, reference, description, file_hashes) for line in lines),
        shared_reference(used, description, reference),
        campaign_labels(used, lines, description, reference),
        (*_without_line(used, lines), *outlying_notices(table)),
        tuple(line_sources(line, used) for line in lines),
    )


def _record(
    line: BranchLine,
    used: UsedReadings,
    reference: ReferenceQuantity,
    description: Description,
    file_hashes: Mapping[str, str],
) -> CalibrationRecord:
    """The calibration record of one line."""
    files = tuple(sorted(used.texts("trial", line.rows)))
    x = used.x[line.rows]
    low, high = float(x.min()), float(x.max())
    ends = sorted([line.intercept + line.slope * low, line.intercept + line.slope * high])
    rest, rest_uncertainty = (float(used.column(name, line.rows[:1])[0]) for name in REST)
    dates = sorted({started[:10] for started in used.texts("started", line.rows) if started})
    return CalibrationRecord(
        line.generation,
        line.module,
        line.sensor,
        line.branch,
        line.unit,
        reference.name,
        reference.unit,
        line.intercept,
        line.slope,
        float(line.covariance[0, 0]),
        float(line.covariance[1, 1]),
        float(line.covariance[0, 1]),
        float(line.run_covariance[0, 0]),
        float(line.run_covariance[1, 1]),
        float(line.run_covariance[0, 1]),
        line.residual_variance,
        line.lack_of_fit_variance,
        line.direction_half_width,
        line.effective_degrees,
        _quantile(line.effective_degrees),
        line.variance_source,
        ends[0],
        ends[1],
        low,
        high,
        line.intercept if reference.name != "length" else float("nan"),
        rest,
        rest_uncertainty,
        line.runs,
        record_conditions(used, line, reference),
        dates[-1] if dates else (description.last_day or description.date),
        files,
        tuple(file_hashes.get(file, "") for file in files),
        _length_fields(length_line(used, line, reference, description)),
    )


def _quantile(degrees: float) -> float:
    """The two-sided 95 % quantile of Student's t; NaN without degrees of freedom."""
    return t_quantile(0.975, degrees) if degrees > 0 else float("nan")


def _length_fields(line: LengthLine | None) -> dict[str, float]:
    """The line against length by the names of the record's fields."""
    if line is None:
        return {}
    return {
        "intercept": float(line.coefficients[0]),
        "slope": float(line.coefficients[1]),
        "var_intercept": float(line.covariance[0, 0]),
        "var_slope": float(line.covariance[1, 1]),
        "cov_intercept_slope": float(line.covariance[0, 1]),
        "run_var_intercept": float(line.run_covariance[0, 0]),
        "run_var_slope": float(line.run_covariance[1, 1]),
        "run_cov": float(line.run_covariance[0, 1]),
        "degrees_of_freedom": line.effective_degrees,
        "t_quantile_975": _quantile(line.effective_degrees),
    }


def _without_line(used: UsedReadings, lines: tuple[BranchLine, ...]) -> tuple[Notice, ...]:
    """A notice for every sensor that has readings but no line."""
    have = {line.key for line in lines}
    readings = used.table
    if len(have) < readings.groupby(SENSOR_KEYS).ngroups:
        return _notices_without_line(readings, have)
    return ()


def _notices_without_line(readings: pd.DataFrame, have: set[tuple[str, str, str]]) -> tuple[Notice, ...]:
    return tuple(
        Notice(
            "no-line",
            "noted",
            str(rows["trial"].iloc[0]),
            None,
            None,
            f"sensor {key[2]} of module {key[1]}: {len(rows)} readings, too few levels in any run",
            "no line is fitted to them",
            "measure it at more levels",
        )
        for key, rows in readings.groupby(SENSOR_KEYS, sort=True)
        if tuple(map(str, key)) not in have
    )
