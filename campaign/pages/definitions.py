"""Which definition of the Method page says what a column means."""

from __future__ import annotations

import re

from markupsafe import Markup

from campaign.pages.tables import Table

DEFINITIONS: dict[str, tuple[str, str]] = {
    "reading": ("reading", "signal count order time_since_motion_s"),
    "standard error": ("standard-error", "standard_error effective_count"),
    "settled": ("settled", "settled"),
    "strain": ("strain", "strain length_mm rest_length_mm nominal_level"),
    "line": ("line", "intercept slope var_intercept runs df variance_source"),
    "branches": ("branches", "branch direction"),
    "gauge factor": ("gauge-factor", "gauge_factor"),
    "residual SD and R²": ("residual-sd", "residual_sd r_squared strain_residual_sd"),
    "lack of fit": ("lack-of-fit", "lack_of_fit_f lack_of_fit_p quadratic"),
    "linearity": (
        "linearity",
        "linearity_least_squares_percent_fso linearity_terminal_percent_fso "
        "linearity_zero_based_percent_fso linearity_independent_percent_fso",
    ),
    "hysteresis": ("hysteresis", "hysteresis_percent_fso difference"),
    "repeatability": ("repeatability", "repeatability_percent_fso sd_percent_fso"),
    "stretch exponent": ("stretch-exponent", "stretch_exponent"),
    "%FSO": ("full-scale-output", "percent_fso zero_return_percent_fso hysteresis_percent_fso"),
    "zero return": ("zero-return", "zero_return zero_return_percent_fso"),
    "leverage and Cook’s distance": ("influence", "studentised leverage cooks_distance"),
    "strain-equivalent": ("strain-equivalent", "strain_sd strain_residual_sd"),
    "component as a strain": ("component-in-strain", "strain_sd share"),
    "intervals of SDs": ("intervals", "strain_sd"),
    "limits by modified large sample": ("modified-large-sample", "modified_large_sample"),
    "labels": ("identifiability", "label degrees_of_freedom"),
    "REML and its check": ("restricted-likelihood", "criterion smallest_cone_eigenvalue"),
    "kinds of precision": ("precision", "figure"),
    "new sensors": ("new-sensor", "expanded"),
    "settled runs": ("run-number", "first_settled_run"),
    "tests of components": ("component-tests", "statistic p_adjusted"),
    "calibration effort": (
        "calibration-effort",
        "strain_sd_predicted strain_sd_left_out strain_expanded factor",
    ),
    "pressure": ("pressure", "per_kpa strain_error_per_kpa strain_error_in_use"),
    "compensation": (
        "compensation",
        "residual_sd_before residual_sd_after strain_residual_sd_before strain_residual_sd_after",
    ),
    "influences": ("influences", "coefficient strain_equivalent"),
    "what it may be called": ("relaxation", "called place"),
    "times of a hold": ("hold-time", "change_1min_percent_fso change_1h_percent_fso duration_s"),
    "slope a decade": ("slope-per-decade", "percent_fso_per_decade"),
    "20–30 min, zero return of a hold": ("hold-zero-return", "creep_20_30min_percent_fso"),
    "forms": ("creep-forms", "form forms_shown aicc_above_best shape"),
    "settling time": ("settling-time", "_settles"),
    "Allan deviation": ("allan", "deviation_strain white flicker least_deviation"),
    "zero across sessions": ("zero-over-time", "_departure"),
    "blank channels": ("blank", "per_hour parasitic"),
    "generations compared": ("generations", "_compared difference_or_ratio"),
    "equivalence": ("equivalence", "p_equivalence_adjusted _margin"),
    "many tests": ("multiplicity", "p_adjusted"),
    "plans": ("planning", "difference_half_width power"),
    "uncertainty budget": ("uncertainty-budget", "contribution_strain"),
    "sources": ("budget-sources", "source"),
    "expanded uncertainty": ("expanded-uncertainty", "expanded_strain coverage_factor"),
    "effective degrees of freedom": ("effective-degrees", "_df"),
    "node errors": ("node-error", "_error fit_rms rms predicted_rms"),
    "redundancy": ("redundancy", "redundancy network_redundancy"),
    "χ² test": ("chi-square-test", "chi_square"),
    "test of single edges": ("tau-test", "_edge_verdict tau"),
    "all tests counted": ("multiplicity", "_all_counted"),
    "verdicts": ("limits", "verdict probability"),
}
"""Words of a link → (address on the Method page, columns that it explains)."""


def definitions_of(table: Table) -> list[tuple[str, str]]:
    """Return the definitions that explain the columns a table shows, as (words, address)."""
    shown = {column.key.removesuffix("_mm") for column in table.columns}
    shown |= {column.key for column in table.columns}
    return [
        (words, f"method.html#{anchor}")
        for words, (anchor, keys) in DEFINITIONS.items()
        if not shown.isdisjoint(keys.split())
    ]


def defined_in(section: str) -> list[tuple[str, Markup]]:
    """Return what a section of the Method page defines, in order, as (anchor, name)."""
    found = re.findall(r'<h3><a href="#([^"]+)">(.*?)</a></h3>', section, flags=re.DOTALL)
    return [(anchor, Markup(name)) for anchor, name in found]
