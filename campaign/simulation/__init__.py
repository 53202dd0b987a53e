"""Synthetic campaigns with known truth, for the demonstration and for rehearsals.

A *plan* says what is run, a *truth* what is true; both are frozen values. From them and a seed come readings
(the short way, for tests of the analyses) or a whole campaign folder with its recordings (the long way, for
everything). The same three arguments give the same bytes.
"""

from campaign.simulation.folder import FolderHoldsOther, write_campaign
from campaign.simulation.plan import (
    Batch,
    Generation,
    Place,
    Plan,
    RunKey,
    StaircasePlan,
    panel_places,
    regular_plan,
)
from campaign.simulation.readings import sensor_register, simulate_readings
from campaign.simulation.recordings import simulate_recordings
from campaign.simulation.schedule import Schedule
from campaign.simulation.trial_plans import CyclicPlan, HoldPlan, LayoutPlan, SweepPlan, placed
from campaign.simulation.trial_truths import (
    CyclicTruth,
    HoldTruth,
    InfluenceTruth,
    LayoutTruth,
    LogarithmicRelaxation,
    StretchedRelaxation,
)
from campaign.simulation.truth import (
    Components,
    GenerationTruth,
    LineSpread,
    LoopWidth,
    SampleNoise,
    Settling,
    SignalLaw,
    StandTruth,
    Truth,
)

__all__ = [
    "Batch",
    "Components",
    "CyclicPlan",
    "CyclicTruth",
    "FolderHoldsOther",
    "Generation",
    "GenerationTruth",
    "HoldPlan",
    "HoldTruth",
    "InfluenceTruth",
    "LayoutPlan",
    "LayoutTruth",
    "LineSpread",
    "LogarithmicRelaxation",
    "LoopWidth",
    "Place",
    "Plan",
    "RunKey",
    "SampleNoise",
    "Schedule",
    "Settling",
    "SignalLaw",
    "StaircasePlan",
    "StandTruth",
    "StretchedRelaxation",
    "SweepPlan",
    "Truth",
    "panel_places",
    "placed",
    "regular_plan",
    "sensor_register",
    "simulate_readings",
    "simulate_recordings",
    "write_campaign",
]
