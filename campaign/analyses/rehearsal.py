"""A rehearsal laid beside its plan: what was assumed of the spread, and what the design made of it."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import pandas as pd

from campaign.analyses.findings import Finding
from campaign.recordings.description import Description
from campaign.recordings.planned_design import PlannedGeneration

if TYPE_CHECKING:
    from campaign.analyses.variance import Variance

PLACE = "mid"
"""Place of the range at which plan and estimate are compared."""

PLANNED_LEVELS: Mapping[str, str] = {
    "batch": "batch",
    "module": "module",
    "mounting": "",
    "sensor": "sensor",
    "session": "session",
    "repetition": "repetition",
    "sensor × level": "sensor_by_level",
    "residual": "residual",
}
"""Which assumed SD a component of the model is, by what the model calls it; empty: none is assumed."""


@dataclass(frozen=True)
class PlannedComponent:
    """One component: assumed SD, estimate with its 95 % interval (NaN where there is none), mm/mm."""

    called: str
    planned: float
    estimate: float
    low: float
    high: float

    @property
    def stated(self) -> bool:
        """Whether the design gives an interval at all."""
        return math.isfinite(self.low) and math.isfinite(self.high)

    @property
    def held(self) -> bool:
        """Whether the interval holds what was assumed."""
        return self.stated and self.low <= self.planned <= self.high


@dataclass(frozen=True)
class RehearsedGeneration:
    """The components of one generation, in the model's order."""

    generation: str
    components: tuple[PlannedComponent, ...]


@dataclass(frozen=True)
class Rehearsal:
    """Plan and estimate, generation by generation, at mid range.

    Attributes
    ----------
    generations
        In the plan's order.
    table
        One row a component: generation, level, place, planned_strain_sd, strain_sd, low, high (mm/mm), held,
        called.
    """

    generations: tuple[RehearsedGeneration, ...]
    table: pd.DataFrame

    @property
    def stated(self) -> int:
        """Number of components for which the design gives an interval."""
        return sum(part.stated for own in self.generations for part in own.components)

    @property
    def held(self) -> int:
        """Number of intervals that hold what was assumed."""
        return sum(part.held for own in self.generations for part in own.components)


def compare_with_plan(description: Description, variance: Variance | None) -> Rehearsal | None:
    """Return what was planned beside what is estimated.

    Parameters
    ----------
    description
        Of the campaign; one that is no rehearsal gives ``None``.
    variance
        The nested model of the rehearsed readings; ``None`` gives ``None``.
    """
    if not description.rehearsal or description.planned is None or variance is None:
        return None
    rows = []
    generations = []
    fitted = {fit.generation: fit.places[PLACE] for fit in variance.fits}
    for planned in description.planned.generations:
        if planned.name not in fitted:
            continue
        found = tuple(_components(variance, planned, fitted[planned.name]))
        generations.append(RehearsedGeneration(planned.name, tuple(part for _, part in found)))
        rows += [
            {
                "generation": planned.name,
                "level": level,
                "place": PLACE,
                "planned_strain_sd": part.planned,
                "strain_sd": part.estimate,
                "low": part.low,
                "high": part.high,
                "held": part.held,
                "called": part.called,
            }
            for level, part in found
        ]
    return Rehearsal(tuple(generations), pd.DataFrame(rows)) if rows else None


def _components(
    variance: Variance, planned: PlannedGeneration, strain: float
) -> Iterator[tuple[str, PlannedComponent]]:
    """Yield level and component where a spread is assumed; what the design cannot part is summed up."""
    table = variance.variance_in_strain
    here = table[(table["generation"] == planned.name) & (table["place"] == PLACE)]
    for row in here.to_dict("records"):
        parts = str(row["called"]).split(" + ")
        if set(parts) <= PLANNED_LEVELS.keys():
            levels = [level for part in parts if (level := PLANNED_LEVELS[part])]
            assumed = math.hypot(*(planned.sd_at(level, strain) for level in levels))
            figures = (float(row[key]) for key in ("strain_sd", "low", "high"))
            if assumed > 0.0:
                yield str(row["level"]), PlannedComponent(str(row["called"]), assumed, *figures)


def rehearsal_findings(rehearsal: Rehearsal | None) -> tuple[Finding, ...]:
    """Return what page 0 says first of a rehearsal; nothing for a campaign that was measured."""
    return (Finding("rehearsal", (rehearsal,)),) if rehearsal is not None else ()
