"""What page 0 says of the next campaign, as facts."""

from __future__ import annotations

from dataclasses import dataclass

from campaign.analyses.findings import Finding
from campaign.analyses.planning import WANTED_POWER, Missing, Planning, Resolved
from campaign.methods.campaign_design import Design


@dataclass(frozen=True)
class NextFinding:
    """What this campaign resolved, what would be needed, and what is missing.

    ``modules_needed`` is the least number of modules a generation, all else as now, that finds a true
    ``difference`` with probability ``wanted_power``; 0 where none in the table does. ``unit`` is that of the
    reference.
    """

    resolved: Resolved
    difference: float
    difference_is: str
    wanted_power: float
    modules_needed: int
    cheapest: Design | None
    missing: tuple[Missing, ...]


def planning_findings(planning: Planning | None) -> tuple[Finding, ...]:
    """Return the finding on what to measure next; nothing where no component of modules is known."""
    if planning is None or planning.resolved is None:
        return ()
    fact = NextFinding(
        resolved=planning.resolved,
        difference=planning.difference,
        difference_is=planning.difference_is,
        wanted_power=WANTED_POWER,
        modules_needed=modules_needed(planning),
        cheapest=planning.cheapest,
        missing=planning.missing,
    )
    return (Finding("next", (fact,)),)


def modules_needed(planning: Planning) -> int:
    """Return the least number of modules, the present design else, whose power is at least the wanted one."""
    if planning.resolved is None:
        return 0
    present, table = planning.resolved.design, planning.table
    rows = table[
        (table["components"] == planning.components[0].name)
        & (table["sensors"] == present.sensors)
        & (table["repetitions"] == present.repetitions)
        & (table["sessions"] == present.sessions)
        & (table["power"] >= WANTED_POWER)
    ]
    return int(rows["modules"].min()) if len(rows) else 0
