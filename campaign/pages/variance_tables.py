"""Tables of page 2 beside the components: new sensors, ratios, run numbers, the signal over its zero."""

from __future__ import annotations

from collections.abc import Iterable

import pandas as pd

from campaign.analyses.results import CampaignResults
from campaign.analyses.variance import Variance
from campaign.pages.component_words import level_words, sd_words
from campaign.pages.tables import Column, Table

PLACE_WORDS = {"zero": "zero", "mid": "mid range", "full": "full scale"}

_GENERATION = Column("generation", "Generation", kind="text")


def tables_beside_components(variance: Variance) -> Iterable[Table]:
    """Yield the tables that the campaign's design supports; of the pooled fit new sensors only."""
    if len(variance.new_sensor):
        yield _new_sensors(variance)
    if len(variance.comparisons):
        yield _component_ratios(variance)
    if any(found.p == found.p for found in variance.settling.values()):
        yield _run_numbers(variance)
    if len(variance.ratio_variance_in_strain):
        yield _signal_over_zero(variance)


def planned_tables(results: CampaignResults) -> Iterable[Table]:
    """Yield the table of plan and estimate, where the campaign is a rehearsal."""
    if results.rehearsal is None or results.variance is None:
        return
    frame = results.rehearsal.table
    factor, unit = results.variance.reference.shown_factor, results.variance.reference.shown_unit
    yield Table(
        "planned_components",
        f"The plan beside what the design made of it: {results.rehearsal.held} of "
        f"{results.rehearsal.stated} intervals hold the SD that was planned.",
        frame.assign(
            _words=[level_words(str(called)) for called in frame["called"]],
            _found=[sd_words(row, factor) for row in frame.to_dict("records")],
            _held=frame["held"].map({True: "yes", False: "no"}),
        ),
        (
            _GENERATION,
            Column("_words", "Component", kind="text"),
            Column("planned_strain_sd", "SD planned", unit, factor=factor, digits=2),
            Column("_found", "SD estimated", unit, kind="text"),
            Column("_held", "The interval holds it", kind="text"),
        ),
        note="At mid range. Components that the design cannot part stand together, in the plan as well.",
    )


def run_number_frame(variance: Variance) -> pd.DataFrame:
    """Return the test of the run number since mounting: one row a generation."""
    rows = [
        {
            "generation": name,
            "statistic": found.statistic,
            "p": found.p,
            "first_settled_run": found.first_settled,
        }
        for name, found in variance.settling.items()
    ]
    return pd.DataFrame(rows, columns=["generation", "statistic", "p", "first_settled_run"])


def _new_sensors(variance: Variance) -> Table:
    factor, unit = variance.reference.shown_factor, variance.reference.shown_unit
    frame = variance.new_sensor
    return Table(
        "new_sensor",
        "What to expect of a sensor, or of a module, that was not measured: how far its mean signal lies "
        "from that of its generation.",
        frame.assign(_place=frame["place"].map(PLACE_WORDS)),
        (
            _GENERATION,
            Column("what", "Of", kind="text"),
            Column("_place", "At", kind="text"),
            Column("strain_sd", "SD", unit, factor=factor, digits=2),
            Column("expanded", "95 % within ±", unit, factor=factor, digits=2),
            Column("df", "Degrees of freedom", digits=2),
            Column("label", "The design says", kind="text"),
        ),
        note="The uncertainty of the mean line is in it, and Student’s t widens it for the few modules that "
        "it rests on.",
    )


def _component_ratios(variance: Variance) -> Table:
    frame = variance.comparisons
    called = dict(
        zip(variance.variance_in_strain["level"], variance.variance_in_strain["called"], strict=True)
    )
    words = {
        side: [level_words(called.get(name, name)) for name in frame[side]] for side in ("first", "second")
    }
    return Table(
        "component_ratios",
        "Ratios of the components’ SDs at mid range. ‘Spreads more’ is said only where the interval "
        "excludes 1.",
        frame.assign(_first=words["first"], _second=words["second"]),
        (
            _GENERATION,
            Column("_first", "Component", kind="text"),
            Column("_second", "Over", kind="text"),
            Column("ratio", "Ratio of SDs", interval=("low", "high")),
            Column("differs", "Spreads more", kind="text"),
        ),
        shown_rows=24,
    )


def _run_numbers(variance: Variance) -> Table:
    return Table(
        "run_numbers",
        "Does the number of the run since mounting matter? Tested before anything is fitted.",
        run_number_frame(variance),
        (
            _GENERATION,
            Column("statistic", "F of the run number", digits=3, missing="not tested"),
            Column("p", "p", kind="probability", missing="not tested"),
            Column("first_settled_run", "First run that enters", kind="integer"),
        ),
        note="From p = 0.01 down the first runs of a mounting are left out until the rest are alike.",
    )


def _signal_over_zero(variance: Variance) -> Table:
    """SDs at mid range of the fit to y/y₀, generation by generation, without shares."""
    factor, unit = variance.reference.shown_factor, variance.reference.shown_unit
    frame = variance.ratio_variance_in_strain
    pooled = frame["generation"] == "all"
    apart = frame[(frame["place"] == "mid") & (~pooled | bool(pooled.all()))]
    return Table(
        "ratio_components",
        "The components of the signal divided by the mounting’s zero signal, as strain-equivalent SD.",
        apart.assign(
            _words=[level_words(str(name)) for name in apart["called"]],
            _sd=[sd_words(row, factor) for row in apart.to_dict("records")],
        ),
        (
            _GENERATION,
            Column("_words", "Component", kind="text"),
            Column("_sd", "SD at mid range", unit, kind="text"),
            Column("label", "The design says", kind="text"),
        ),
        source="ratio_variance_in_strain",
    )
