"""The tables that are files of the site although no page shows them, or shows them only in part."""

from __future__ import annotations

from collections.abc import Iterable

import pandas as pd

from campaign.analyses.results import CampaignResults
from campaign.pages.page import Page
from campaign.pages.recordings import notices_table
from campaign.pages.tables import Table

CAPTIONS: dict[str, str] = {
    "readings": "Every reading: a plateau of a staircase, with its residual from the sensor’s own line.",
    "sensor_lines": "The line of every sensor and branch, with its covariance and figures of merit.",
    "run_lines": "The line of every run.",
    "level_hysteresis": "Rising less falling signal at every level of every sensor.",
    "repeatability": "Spread of repeated readings at every level of every sensor.",
    "ordinary_lines": "Ordinary least squares of all readings of a sensor, for comparison only.",
    "fixed_effects": "Mean intercept and slope of every generation.",
    "variance_components": "Components of variance with their intervals.",
    "variance_in_strain": "Components as equivalent strain at zero, mid and full scale.",
    "ratio_variance_in_strain": "The same for the signal divided by the mounting’s zero signal; "
    "its shares are not to be compared with those of the signal.",
    "ratio_zero_noise": "What the noise of the zero signal adds to every ratio of its mounting.",
    "effects": "Predicted effects of modules and sensors.",
    "identifiability": "What the design can tell apart.",
    "precision": "Repeatability, intermediate precision and spread between sensors and modules.",
    "component_tests": "Tests of components, with Holm’s correction.",
    "fit_certificates": "Evidence of the optimisation of every fit.",
    "residuals": "Conditional and marginal residuals of the nested model.",
    "calibration_effort": "Error against calibration effort, predicted and left out.",
    "limits": "Every limit judged, sensor by sensor and for a new sensor.",
}
"""Tables of the analyses that are written whole, with their captions."""


def site_tables(results: CampaignResults, pages: Iterable[Page]) -> list[Table]:
    """Return the tables of :data:`CAPTIONS` that exist and that no page of *pages* holds whole."""
    held = {table.name for page in pages for table in page.tables if table.source is None}
    frames = _frames(results)
    whole = [
        Table(name=name, caption=caption, frame=frames[name], columns=())
        for name, caption in CAPTIONS.items()
        if name in frames and name not in held
    ]
    return [notices_table(results.notices), *whole]


def _frames(results: CampaignResults) -> dict[str, pd.DataFrame]:
    """Return the frames of all analyses that were made, by the name of their table."""
    frames: dict[str, pd.DataFrame] = {}
    if (calibration := results.calibration) is not None:
        frames["readings"] = calibration.readings
        for name in ("sensor_lines", "run_lines", "level_hysteresis", "repeatability", "ordinary_lines"):
            frames[name] = getattr(calibration, name)
    if (variance := results.variance) is not None:
        for name in (
            "fixed_effects",
            "variance_components",
            "variance_in_strain",
            "effects",
            "identifiability",
            "precision",
            "ratio_variance_in_strain",
            "ratio_zero_noise",
        ):
            frames[name] = getattr(variance, name)
        frames |= {"component_tests": variance.tests, "fit_certificates": variance.certificate}
    if results.residuals is not None:
        frames["residuals"] = results.residuals.table
    if results.calibration_effort is not None:
        frames["calibration_effort"] = results.calibration_effort.table
    if len(results.limits.table):
        frames["limits"] = results.limits.table
    return frames
