"""Synthetic campaigns with known truth, for the demonstration and for rehearsals.

A *plan* says what is run, a *truth* what is true; both are frozen values. From them and a seed come readings
(the short way, for tests of the analyses) or a whole campaign folder with its recordings (the long way, for
everything). The same three arguments give the same bytes.
"""

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
    "Generation",
    "GenerationTruth",
    "LineSpread",
    "LoopWidth",
    "Place",
    "Plan",
    "RunKey",
    "SampleNoise",
    "Settling",
    "SignalLaw",
    "StaircasePlan",
    "StandTruth",
    "Truth",
    "panel_places",
    "regular_plan",
    "sensor_register",
    "simulate_readings",
]
