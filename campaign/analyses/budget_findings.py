"""What page 0 says of the uncertainty in use, as facts."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from campaign.analyses.budget import Budget
from campaign.analyses.budget_model import NOT_KNOWN, BudgetInUse
from campaign.analyses.findings import Finding, limit_value, verdict_of_limit
from campaign.analyses.limits import Limits


@dataclass(frozen=True)
class BudgetFinding:
    """Uncertainty in use of one generation, units of x.

    Attributes
    ----------
    generation
        Whose.
    new
        95 % expanded uncertainty of one reading of a new sensor by the generation's line, at the place where
        it is largest, with its coverage factor ``k`` and effective degrees of freedom; NaN where the design
        does not give it.
    largest, share
        The source that holds most of its variance, and how much.
    own_low, own_high
        Smallest and largest of the sensors with their own lines; ``own_worst`` is the module and sensor of
        the largest, ``own_largest`` its largest source with ``own_share``.
    sensors
        Their number.
    missing
        Sources that are not known for the new sensor, or for any of the sensors.
    limit, exceeding
        ``[limits] strain_error`` in units of x, NaN where none is stated, and how many sensors with their own
        lines exceed it.
    """

    generation: str
    new: float
    k: float
    degrees_of_freedom: float
    largest: str
    share: float
    own_low: float
    own_high: float
    own_worst: tuple[str, str]
    own_largest: str
    own_share: float
    sensors: int
    missing: tuple[str, ...]
    limit: float
    exceeding: int

    @property
    def has_new(self) -> bool:
        """Whether a new sensor has a budget."""
        return self.new == self.new


def budget_findings(budget: Budget | None, limits: Limits) -> tuple[Finding, ...]:
    """Return what page 0 says of what adds up in use; nothing without a budget."""
    if budget is None:
        return ()
    new = {found.subject.generation: found for found in budget.of_new_sensors()}
    generations = sorted({subject.generation for subject in budget.subjects})
    limit = limit_value(limits, "strain_error")
    facts = [_fact(name, new.get(name), budget, limit) for name in generations]
    verdict = verdict_of_limit(limits, "strain_error")
    return (Finding("budget", tuple(f for f in facts if f is not None), verdict, "strain_error"),)


def _fact(generation: str, new: BudgetInUse | None, budget: Budget, limit: float) -> BudgetFinding | None:
    own = [found for found in budget.of_sensors() if found.subject.generation == generation]
    if not own:
        return None
    worst = max(own, key=lambda found: found.combined.expanded_uncertainty)
    expanded = [found.combined.expanded_uncertainty for found in own]
    source, share = largest_source(new) if new is not None else ("", float("nan"))
    own_source, own_share = largest_source(worst)
    every = [new, *own] if new is not None else own
    nan = float("nan")
    return BudgetFinding(
        generation,
        new.combined.expanded_uncertainty if new is not None else nan,
        new.combined.coverage_factor if new is not None else nan,
        new.combined.degrees_of_freedom if new is not None else nan,
        source,
        share,
        min(expanded),
        max(expanded),
        (worst.subject.module, worst.subject.sensor),
        own_source,
        own_share,
        len(own),
        tuple(dict.fromkeys(name for found in every for name in found.unknown)),
        limit,
        sum(reach > limit for reach in expanded),
    )


def largest_source(budget: BudgetInUse) -> tuple[str, float]:
    """Return the source that holds most of the variance, and its share."""
    shares = shares_of(budget)
    name = max(shares, key=lambda source: shares[source])
    return name, shares[name]


def shares_of(budget: BudgetInUse) -> Mapping[str, float]:
    """Return each known source's share of the variance."""
    whole = budget.combined.standard_uncertainty**2
    return {
        found.source: found.contribution**2 / whole if whole > 0 else 0.0
        for found in budget.sources
        if found.status != NOT_KNOWN
    }
