"""The tables that the site promises: their columns, and what each column means.

Later versions may append columns, never rename or reorder these.
"""

from __future__ import annotations

CONTRACT_COLUMNS: dict[str, tuple[str, ...]] = {
    name: tuple(columns.split())
    for name, columns in {
        "recordings": "file sha256 bytes kind fate rows notices",
        "trials": "file kind generation batch module sensor repetition session started fate",
        "notices": "code weight file line column what done remedy",
        "readings": "generation module sensor session repetition trial order started direction nominal_level "
        "strain length_mm signal unit standard_error count effective_count time_since_motion_s "
        "temperature_c humidity_percent pressure_kpa channel settled used fitted residual "
        "studentised leverage cooks_distance",
        "sensor_lines": "generation module sensor position branch runs readings strain_low strain_high "
        "rest_length_mm rest_length_uncertainty_mm intercept slope var_intercept var_slope "
        "cov_intercept_slope residual_sd df variance_source unit zero_signal lack_of_fit_f "
        "lack_of_fit_df1 lack_of_fit_df2 lack_of_fit_p quadratic quadratic_low quadratic_high "
        "r_squared gauge_factor linearity_least_squares_percent_fso "
        "linearity_terminal_percent_fso linearity_zero_based_percent_fso "
        "linearity_independent_percent_fso hysteresis_percent_fso repeatability_percent_fso "
        "strain_residual_sd stretch_exponent stretch_exponent_low stretch_exponent_high",
        "fixed_effects": "generation term estimate standard_error df low high",
        "variance_components": "generation level term estimate low high unit method p test label",
        "variance_in_strain": "generation level place strain_sd low high share",
        "calibration_effort": "generation effort strain_sd_predicted strain_sd_left_out "
        "strain_expanded factor",
        "effects": "generation level module sensor term estimate low high unit",
        "limits": "limit value unit subject estimate expanded_uncertainty verdict probability",
    }.items()
}
"""Columns of each promised table, in order."""

_MEANINGS: dict[str, str] = {
    "file": "path from the campaign folder",
    "sha256": "SHA-256 of the file's bytes, hexadecimal",
    "bytes": "size of the file",
    "kind": "what the run was",
    "fate": "what became of it",
    "rows": "rows kept",
    "notices": "number of notices about it",
    "generation": "design or process revision; 'all' for the pooled fit",
    "batch": "modules made together",
    "module": "id of the module",
    "sensor": "id of the sensor in its module",
    "position": "place of the sensor in its module",
    "session": "mounting of the module on the stand",
    "repetition": "number of the run among runs of its kind on the sensor, from 1",
    "trial": "path of the recording of the run",
    "order": "order of the reading in its run, from 1",
    "started": "start of the run, ISO 8601",
    "direction": "rising, falling or turning",
    "nominal_level": "nominal reference value of the plateau",
    "strain": "(length − rest length) / rest length",
    "length_mm": "length of the sensor",
    "signal": "mean signal of the reading",
    "unit": "unit of the signal or of the estimate",
    "standard_error": "standard error of the value",
    "count": "samples averaged",
    "effective_count": "samples averaged, less what autocorrelation takes",
    "time_since_motion_s": "time since the stand last moved",
    "settled": "whether the averaged part shows no significant slope",
    "used": "whether the analyses use it",
    "fitted": "value of the sensor's own line (mean of its runs, both branches)",
    "residual": "signal less fitted value",
    "studentised": "externally studentised residual",
    "leverage": "leverage of the reading in its line",
    "cooks_distance": "Cook's distance of the reading in its line",
    "branch": "rising, falling or both",
    "runs": "number of runs",
    "readings": "number of readings",
    "strain_low": "lowest strain of the line's readings",
    "strain_high": "highest strain of the line's readings",
    "rest_length_mm": "unstretched length of the sensor",
    "rest_length_uncertainty_mm": "standard uncertainty of the rest length",
    "intercept": "intercept of the mean line of the runs",
    "slope": "slope of the mean line of the runs",
    "var_intercept": "variance of the intercept",
    "var_slope": "variance of the slope",
    "cov_intercept_slope": "covariance of intercept and slope",
    "residual_sd": "residual standard deviation within runs",
    "df": "degrees of freedom",
    "variance_source": "where the variance between runs was taken from",
    "zero_signal": "signal at zero strain",
    "r_squared": "coefficient of determination",
    "gauge_factor": "relative change of signal per strain",
    "strain_residual_sd": "residual standard deviation divided by the slope",
    "channel": "readout channel",
    "lack_of_fit_f": "F of the lack of fit of the line",
    "lack_of_fit_df1": "degrees of freedom of the lack of fit",
    "lack_of_fit_df2": "degrees of freedom that it is tested against",
    "lack_of_fit_p": "p value of the lack of fit",
    "quadratic": "quadratic coefficient, centred",
    "quadratic_low": "lower limit of its 95 % interval",
    "quadratic_high": "upper limit of its 95 % interval",
    "linearity_least_squares_percent_fso": "largest departure from the least-squares line",
    "linearity_terminal_percent_fso": "largest departure from the line through the ends",
    "linearity_zero_based_percent_fso": "largest departure from the best line through the first reading",
    "linearity_independent_percent_fso": "largest departure from the line that makes it least",
    "hysteresis_percent_fso": "largest difference of rising and falling signal",
    "repeatability_percent_fso": "standard deviation of repeated readings at a level",
    "stretch_exponent": "power of the stretch ratio that the signal grows by",
    "stretch_exponent_low": "lower limit of its 95 % interval",
    "stretch_exponent_high": "upper limit of its 95 % interval",
    "term": "which coefficient or effect",
    "estimate": "the estimate",
    "low": "lower limit of the 95 % interval",
    "high": "upper limit of the 95 % interval",
    "low_modified_large_sample": "lower limit by modified large sample, of balanced designs only",
    "high_modified_large_sample": "upper limit by modified large sample, of balanced designs only",
    "p": "p value",
    "test": "which test the p value is of",
    "label": "what the design supports saying",
    "method": "how the estimate was found",
    "level": "level of nesting",
    "place": "where in the range: zero, mid or full",
    "strain_sd": "standard deviation as equivalent strain",
    "share": "share of the variance",
    "effort": "what is calibrated",
    "strain_sd_predicted": "standard deviation predicted by the model",
    "strain_sd_left_out": "standard deviation found on what was left out",
    "strain_expanded": "expanded uncertainty, 95 %",
    "factor": "SD divided by that of a sensor's own line",
    "limit": "which figure is limited",
    "value": "the limit",
    "subject": "a sensor, or a new sensor of a generation",
    "expanded_uncertainty": "half the 95 % interval of the estimate",
    "verdict": "met, not met or not decided",
    "probability": "probability that the limit is kept",
    "ratio": "ratio of the two",
    "differs": "whether the interval of the ratio excludes 1",
    "first_settled_run": "first run since mounting that enters the components",
    "left_out_by": "what was left out in turn",
    "code": "name of the kind of notice",
    "weight": "stops, set aside or noted",
    "line": "line of the file, from 1",
    "column": "field of the line, from 1",
    "what": "what was found",
    "done": "what was done about it",
    "remedy": "what would mend it",
}

_UNIT_ENDINGS: tuple[tuple[str, str], ...] = (
    ("_percent_fso", "%FSO"),
    ("humidity_percent", "%RH"),
    ("_percent", "%"),
    ("_mm2", "mm²"),
    ("_mm", "mm"),
    ("_kpa", "kPa"),
    ("_c", "°C"),
    ("_s", "s"),
    ("bytes", "B"),
)


def describe_column(name: str) -> str:
    """Return what a column means, empty where its name says it."""
    return _MEANINGS.get(name, "")


def unit_of_column(name: str) -> str:
    """Return the unit that a column's name carries, empty where a ``unit`` column or none applies."""
    for ending, unit in _UNIT_ENDINGS:
        if name.endswith(ending):
            return unit
    return "mm/mm" if name.startswith("strain") else ""
