"""Simulated campaigns and their analyses, each fitted once for all tests that look at it."""

from __future__ import annotations

from dataclasses import replace
from functools import lru_cache

import pandas as pd
import pytest

from campaign.analyses.variance import Variance, variance_of_readings
from campaign.recordings.description import Description
from campaign.recordings.recording import STRAIN
from campaign.simulation.plan import Plan, regular_plan
from campaign.simulation.readings import simulate_readings
from campaign.simulation.truth import Components, GenerationTruth, LineSpread, Truth

COMPONENTS = Components(
    module=LineSpread(0.9, 1.5, 0.3),
    sensor=LineSpread(0.8, 1.5, 0.2),
    repetition=LineSpread(0.2, 0.3),
    sensor_by_level=0.15,
    residual=0.1,
)


class Simulated:
    """Plans, truths and cached fits."""

    description = Description("simulated")
    usual_plan = regular_plan(modules=6, sensors=5, repetitions=3, levels=8)
    small_plan = regular_plan(modules=3, sensors=3, repetitions=2, levels=4)

    @staticmethod
    def truth(components: Components = COMPONENTS, **parts: object) -> Truth:
        return Truth(generations=(GenerationTruth(components=components, **parts),))

    @staticmethod
    def components(**changed: object) -> Components:
        return replace(COMPONENTS, **changed)

    @staticmethod
    def readings(plan: Plan, of: Truth | None = None, seed: int = 1) -> pd.DataFrame:
        return simulate_readings(plan, of or Simulated.truth(), seed)

    @staticmethod
    def fit(readings: pd.DataFrame) -> Variance:
        return variance_of_readings(readings, STRAIN, Simulated.description)

    @staticmethod
    @lru_cache(maxsize=32)
    def analysed(plan: Plan, of: Truth | None = None, seed: int = 1) -> Variance:
        return Simulated.fit(Simulated.readings(plan, of, seed))

    @staticmethod
    def usual() -> Variance:
        """The usual design: module, sensor, repetition and sensor × level spread, all there."""
        return Simulated.analysed(Simulated.usual_plan)

    @staticmethod
    def small() -> Variance:
        return Simulated.analysed(Simulated.small_plan)

    @staticmethod
    def sds(variance: Variance, place: str = "mid") -> dict[str, float]:
        """Component → strain-equivalent SD at *place*, withheld or not."""
        fit = variance.by_generation[0]
        return {c.name: fit.strain_of(fit.variance_at(c.name, place).root[0]) for c in fit.components}


@pytest.fixture(scope="session")
def simulated() -> type[Simulated]:
    return Simulated
