"""Page 0, Findings: what was found, most important first, and where to look."""

from __future__ import annotations

from collections.abc import Mapping

from campaign.analyses.findings import AVERAGED
from campaign.analyses.limits import Limits
from campaign.analyses.results import CampaignResults
from campaign.pages.calibration_effort import effort_sentence
from campaign.pages.component_words import level_words
from campaign.pages.generation_words import comparison_sentence, figure_words
from campaign.pages.page import Page
from campaign.pages.sensor_parts import limits_as_shown
from campaign.pages.skin_map import SkinMap
from campaign.pages.tables import Column, Table
from campaign.recordings.recording import ReferenceQuantity

VERDICT_WORDS: Mapping[str, str] = {
    "met": "met in this campaign",
    "not met": "not met",
    "not decided": "not decided",
    "": "",
}
"""What stands in the margin of a finding."""

KIND_WORDS: Mapping[str, str] = {
    "staircase": "staircases",
    "cyclic": "cycles of stretch and release",
    "hold": "holds at one length",
    "pressure": "sweeps of actuator pressure",
    "layout": "known shapes of the module",
    "offaxis": "stretch across the sensor",
    "thermal": "sweeps of temperature",
    "endurance": "endurance",
    "contact": "loads on the skin",
    "proximity": "bodies nearby",
    "bend": "bending at constant length",
    "blank": "channels without a sensor",
}
"""What kinds of trial are called in sentences."""


def findings_page(results: CampaignResults, mapped: SkinMap) -> Page:
    """Return page 0 with the skin map; it is part of every site, also where nothing could be analysed."""
    tables = (limits_table(results.limits, results.readings.reference),) if len(results.limits.table) else ()
    return Page(
        slug="index",
        number=0,
        title="Findings",
        template="index.html",
        context={
            "scope": results.findings.scope,
            "findings": results.findings.findings,
            "limits": results.limits,
            "new_sensor_limits": results.limits.of_new_sensors().to_dict("records"),
            "counts": results.intake.counts,
            "verdict_words": VERDICT_WORDS,
            "kind_words": KIND_WORDS,
            "effort_words": effort_sentence,
            "level_words": level_words,
            "figure_words": figure_words,
            "comparison_sentence": comparison_sentence,
            "averaged": AVERAGED,
            "reference": results.findings.scope.reference,
            "direction": results.description.use.get("direction", ""),
            "labels": {} if results.calibration is None else results.calibration.labels,
            "variance": results.variance,
            "map": mapped,
            "has": _pages_there(results),
        },
        tables=tables,
        data={"skin_map": mapped.data},
        description="What was found, in sentences with numbers and intervals, most important first.",
    )


def _pages_there(results: CampaignResults) -> dict[str, bool]:
    return {
        "calibration": results.calibration is not None and not results.calibration.sensor_lines.empty,
        "variance": results.variance is not None and not results.variance.variance_in_strain.empty,
        "residuals": results.residuals is not None and not results.residuals.table.empty,
        "calibration_effort": results.calibration_effort is not None
        and not results.calibration_effort.table.empty,
    }


def limits_table(limits: Limits, reference: ReferenceQuantity) -> Table:
    """Return the verdicts on every limit: new sensors of each generation first, then sensors, worst first."""
    rank = limits.table["verdict"].map({"not met": 0, "not decided": 1, "met": 2})
    frame = limits.table.assign(_new=limits.table["sensor"] != "", _rank=rank)
    frame = frame.sort_values(["_new", "_rank", "probability"], kind="stable")
    return Table(
        name="limits",
        caption="Every limit, judged for a new sensor of each generation and for every sensor, worst first.",
        frame=limits_as_shown(frame, reference),
        columns=(
            Column("_limit", "Limit", kind="text"),
            Column("subject", "Judged for", kind="text"),
            Column("_value", "At most", digits=3),
            Column("_unit", "Unit", kind="text"),
            Column("_estimate", "Found", interval=("_low", "_high")),
            Column("probability", "Probability that it is kept", kind="percent", missing="unknown"),
            Column("_verdict", "Verdict", kind="text"),
        ),
        shown_rows=30,
        source="limits",
        note="Met from a probability of 95 % on, not met from 5 % down, between them not decided.",
    )
