"""The demonstration's braced panels: all nodes joined to each other, so that a wrong length shows itself."""

from __future__ import annotations

from dataclasses import replace
from datetime import date
from itertools import combinations

from campaign.simulation.plan import Batch, Generation, Plan, StaircasePlan, panel_places
from campaign.simulation.schedule import Schedule
from campaign.simulation.trial_plans import LayoutPlan, placed
from campaign.simulation.truth import Truth
from campaign.simulation.truth_text import place_heads, place_rows
from campaign.simulation.truth_text_of_kinds import layout_lines

BRACED_SEED = 20250244
BRACED_NODES = {"P": (0.0, 0.0), "Q": (78.0, 0.0), "R": (97.0, 53.0), "S": (41.0, 89.0), "T": (-16.0, 50.0)}
"""In mm; their distances have the mean of the panel's, so that the process alone changes mean signals."""
BRACED_SLIP = ("M13", "RT", 1, 8, -18.0)
BRACED_SCHEDULE = Schedule(date(2025, 2, 27))
"""The two days after the last panel's."""


def braced_plan() -> Plan:
    """Return the design: two panels of five nodes and ten sensors, short staircases, one layout run."""
    return Plan(
        generations=(Generation("blade-cast", (Batch("B3", ("M13", "M14")),)),),
        places=panel_places(BRACED_NODES, tuple(combinations(BRACED_NODES, 2))),
        sessions=("1",),
        repetitions=2,
        staircase=StaircasePlan(levels=(0.0, 0.1, 0.2, 0.3, 0.4), descending=True, sample_period_s=1.0),
        layout=LayoutPlan(
            tuple(BRACED_NODES),
            (
                placed(BRACED_NODES, 1.05, 1.05),
                placed(BRACED_NODES, 1.30, 1.08),
                placed(BRACED_NODES, 1.08, 1.32),
                placed(BRACED_NODES, 1.20, 1.20, shear=0.10),
                placed(BRACED_NODES, 1.15, 1.15, moved={"S": (8.0, 12.0)}),
                placed(BRACED_NODES, 1.18, 1.18, moved={"R": (10.0, -6.0), "T": (-6.0, 4.0)}),
                placed(BRACED_NODES, 1.34, 1.03),
                placed(BRACED_NODES, 1.25, 1.25),
            ),
        ),
    )


def braced_truth(truth: Truth) -> Truth:
    """Return what is true of the braced panels: what is true of the last generation of *truth*."""
    process = truth.generations[-1]
    seated = replace(process.layout, slips=(BRACED_SLIP,))
    return replace(truth, generations=(replace(process, layout=seated),))


def braced_truth_text(plan: Plan, truth: Truth) -> list[str]:
    """Return the lines of the page of truth about the braced panels."""
    own = truth.of(0)
    assert plan.layout is not None
    return [
        "## Braced panels M13 and M14 (blade-cast, batch B3)",
        "",
        f"The same process and the same spread as blade-cast, drawn with seed {BRACED_SEED}; five nodes,",
        "each joined to every other by a sensor. Staircases of 10 % steps, one mounting, two runs.",
        "",
        *place_heads(truth.unit),
        *place_rows(plan, own.law),
        "",
        *layout_lines(plan.layout, own, truth.unit),
        "",
    ]
