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
    "residuals": "Conditional and marginal residuals of the nested model; trial, sensor and order say of "
    "which reading.",
    "calibration_effort": "Error against calibration effort, predicted and left out.",
    "budget": "Every source of every budget, at zero, mid and full scale.",
    "layout": "Every node of every placement: adjusted and known, with errors beside predicted ones.",
    "layout_edges": "Every edge of every placement: read, known and adjusted length, with its tests.",
    "layout_errors": "Errors of nodes and edges by generation and module, beside predicted ones.",
    "layout_extra_sd": "What must be added to every length for prediction and observation to agree.",
    "layout_sums": "The sum of the edges of every placement, with its uncertainty by two ways.",
    "limits": "Every limit judged, sensor by sensor and for a new sensor.",
    "holds": "Every hold: changes, slope a decade, form, and what it may be called.",
    "hold_forms": "Every form fitted to every hold.",
    "allan": "Overlapping Allan deviation of every hold at rest and blank channel.",
    "zero_over_time": "The zero of every sensor, session by session.",
    "hold_means": "Mean slope a decade of the stretched holds of every generation.",
    "loops": "Every loop: width, area, peak and zero signal, rate.",
    "hysteresis": "The settled loops of every sensor.",
    "loop_runs": "Every cyclic trial: when it settles, first and settled zero and peak signal.",
    "loop_rates": "Width against rate, by sensor.",
    "loop_components": "Where the spread of the widths comes from.",
    "loop_means": "Mean signed width at mid range of every generation.",
    "pressure": "What a kilopascal does to every sensor, and what its own compensation leaves.",
    "influences": "What the other influences do to every sensor.",
    "pressure_sweeps": "Every sweep of pressure: its line over both branches, loop width and drift.",
    "pressure_corrections": "What is left of the error by pressure with every correction, left out.",
    "influence_sweeps": "Every sweep of the other influences.",
    "generations": "Every headline figure of every two generations.",
    "module_means": "Mean of every headline figure of every module.",
    "planning": "What planned campaigns would resolve.",
    "endurance_log": "Zero and sensitivity of every logged cycle, up to the sensor’s failure.",
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
    if results.budget is not None:
        frames["budget"] = results.budget.table
    if len(results.limits.table):
        frames["limits"] = results.limits.table
    if (compared := results.generations) is not None:
        frames |= {"generations": compared.table, "module_means": compared.modules}
    if results.planning is not None and len(results.planning.table):
        frames["planning"] = results.planning.table
    frames |= _layout_frames(results) | _loop_frames(results)
    return frames | _drift_frames(results) | _influence_frames(results)


def _layout_frames(results: CampaignResults) -> dict[str, pd.DataFrame]:
    """Return the frames of rebuilt shapes, where there are any."""
    if (found := results.layout) is None:
        return {}
    frames = {
        "layout": found.nodes,
        "layout_edges": found.edges,
        "layout_errors": pd.concat([found.errors, found.by_module], ignore_index=True),
        "layout_extra_sd": found.extra,
        "layout_sums": found.sums,
    }
    return {name: frame for name, frame in frames.items() if len(frame)}


def _loop_frames(results: CampaignResults) -> dict[str, pd.DataFrame]:
    """Return the frames of loops and endurance, where they were measured."""
    frames: dict[str, pd.DataFrame] = {}
    if (found := results.hysteresis) is not None:
        frames |= {"loops": found.loops, "hysteresis": found.sensors, "loop_runs": found.runs}
        frames |= {"loop_components": found.components, "loop_means": found.means}
        if found.several_rates:
            frames["loop_rates"] = found.rates.sensors
    if results.endurance is not None:
        frames["endurance_log"] = results.endurance.log
    return frames


def _influence_frames(results: CampaignResults) -> dict[str, pd.DataFrame]:
    """Return the frames of pressure and the other influences, where they were measured."""
    frames: dict[str, pd.DataFrame] = {}
    if (pressure := results.pressure) is not None:
        frames |= {"pressure_sweeps": pressure.sweeps, "pressure_corrections": pressure.spread.serving}
        frames["pressure"] = pressure.table
    if (influences := results.influences) is not None:
        parts = [result.sweeps.assign(influence=result.influence) for result in influences.results]
        frames["influences"] = influences.table
        frames["influence_sweeps"] = pd.concat(parts, ignore_index=True)
    return frames


def _drift_frames(results: CampaignResults) -> dict[str, pd.DataFrame]:
    """Return the frames of holds, noise at rest and zeros, where they were measured."""
    if (drift := results.drift) is None:
        return {}
    frames = {
        "holds": drift.holds,
        "hold_forms": drift.forms,
        "allan": drift.allan,
        "hold_means": drift.means,
    }
    if drift.zero is not None:
        frames["zero_over_time"] = drift.zero.table
    return {name: frame for name, frame in frames.items() if len(frame)}
