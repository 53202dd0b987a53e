"""Everything that one run of the report found out, as one value: what pages are made from."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from campaign.analyses.budget import Budget
    from campaign.analyses.calibration import Calibration
    from campaign.analyses.calibration_effort import CalibrationEffort
    from campaign.analyses.drift import Drift
    from campaign.analyses.earlier import EarlierCampaign
    from campaign.analyses.endurance import Endurance
    from campaign.analyses.findings import Findings
    from campaign.analyses.generations import Generations
    from campaign.analyses.hysteresis import Hysteresis
    from campaign.analyses.influences import Influences
    from campaign.analyses.layout_results import Layout
    from campaign.analyses.limits import Limits
    from campaign.analyses.planning import Planning
    from campaign.analyses.pressure import Pressure
    from campaign.analyses.rehearsal import Rehearsal
    from campaign.analyses.residuals import Residuals
    from campaign.analyses.variance import Variance
    from campaign.notices import Notice
    from campaign.recordings.description import Description
    from campaign.recordings.intake import Intake
    from campaign.trials.readings import Readings


@dataclass(frozen=True)
class CampaignResults:
    """The results of a campaign, from the files read to the findings.

    Attributes
    ----------
    description
        ``campaign.toml``, checked.
    intake
        Every file of the folder with its fate, the trials, the registers and the counts.
    readings
        Plateaus of all staircases; empty where there are none.
    calibration, variance, residuals, calibration_effort
        The analyses; ``None`` where the campaign holds no reading that they could start from.
    limits, findings
        Limits judged, and the facts of page 0; always there.
    notices
        All notices of reading and of analyses, sorted.
    hysteresis, endurance, drift, pressure, influences
        Loops, thousands of cycles, holds, pressure, other influences; ``None`` where not measured.
    layout
        Shapes rebuilt from lengths; ``None`` where there is no placement that could be read.
    budget
        What adds up to the uncertainty in use; ``None`` where no sensor has a line.
    generations
        Generations compared; ``None`` with fewer than two, earlier campaigns included.
    planning
        What the next campaign could resolve, and what this one lacks.
    rehearsal
        Plan and estimate, where the campaign is a rehearsal.
    earlier
        Earlier campaigns that were joined.
    """

    description: Description
    intake: Intake
    readings: Readings
    calibration: Calibration | None
    variance: Variance | None
    residuals: Residuals | None
    calibration_effort: CalibrationEffort | None
    limits: Limits
    findings: Findings
    notices: tuple[Notice, ...]
    hysteresis: Hysteresis | None = None
    endurance: Endurance | None = None
    drift: Drift | None = None
    pressure: Pressure | None = None
    influences: Influences | None = None
    layout: Layout | None = None
    budget: Budget | None = None
    generations: Generations | None = None
    planning: Planning | None = None
    rehearsal: Rehearsal | None = None
    earlier: tuple[EarlierCampaign, ...] = ()
