"""Page 11, Budget: what adds up to the uncertainty of a reading in use."""

from __future__ import annotations

import math
from collections.abc import Mapping

import pandas as pd

from campaign.analyses.budget import Budget
from campaign.analyses.budget_findings import BudgetFinding, shares_of
from campaign.analyses.budget_model import (
    ACROSS,
    COUNTED,
    LACK,
    LINE,
    LOOP,
    MOUNTING,
    NOISE,
    NOT_KNOWN,
    PRESSURE,
    RATE,
    REFERENCE,
    RESOLUTION,
    RUN,
    SENSORS,
    SOURCES,
    TEMPERATURE,
    TIME,
    BudgetInUse,
    UseConditions,
)
from campaign.analyses.results import CampaignResults
from campaign.pages import numbers, slugs
from campaign.pages.budget_data import budget_data
from campaign.pages.budget_figures import budget_figures
from campaign.pages.drift_figures import time_words
from campaign.pages.page import Page
from campaign.pages.tables import Column, Table
from campaign.recordings.recording import ReferenceQuantity

EXPLAINED_ON: Mapping[str, str] = {
    LINE: "calibration",
    SENSORS: "variance",
    MOUNTING: "variance",
    RUN: "variance",
    LACK: "calibration",
    NOISE: "residuals",
    LOOP: "calibration",
    TIME: "drift",
    PRESSURE: "pressure",
    TEMPERATURE: "pressure",
    ACROSS: "pressure",
    REFERENCE: "calibration",
    RESOLUTION: "residuals",
    RATE: "hysteresis",
}
"""Page where each source's number comes from; the Method page where that page is not there."""

PLACE_WORDS: Mapping[str, str] = {"zero": "zero", "mid": "mid scale", "full": "full scale"}
_TOTALS_SHOWN = 12
_SMALLEST_SHARE = 0.01


def budget_page(results: CampaignResults) -> Page | None:
    """Return page 11, or ``None`` where no sensor has a line."""
    budget = results.budget
    if budget is None:
        return None
    facts = [f for finding in results.findings.findings if finding.kind == "budget" for f in finding.facts]
    there = _pages_there(results)
    return Page(
        slug="budget",
        number=11,
        title="Budget",
        template="budget.html",
        context={
            "reference": budget.reference,
            "facts": [fact for fact in facts if isinstance(fact, BudgetFinding)],
            "conditions": conditions_in_words(budget.conditions, budget.reference),
            "use": _use_as_typed(budget.conditions),
            "subjects": [subject.name for subject in budget.subjects],
            "places": PLACE_WORDS,
            "sources": {source: source_href(source, there) for source in SOURCES},
            "new_sensors": [
                (found, f"budget_{number}") for number, found in enumerate(budget.of_new_sensors(), 1)
            ],
            "monte_carlo": _monte_carlo(budget),
            "without_new": budget.without_new,
        },
        figures=budget_figures(budget),
        tables=(
            *(
                source_table(found, f"budget_{number}", budget.reference, there)
                for number, found in enumerate(budget.of_new_sensors(), 1)
            ),
            totals_table(budget),
        ),
        data={"budget": budget_data(budget)},
        description="What adds up to the uncertainty of a reading in use, under conditions to choose.",
    )


def _pages_there(results: CampaignResults) -> frozenset[str]:
    found = {
        "calibration": results.calibration is not None and not results.calibration.sensor_lines.empty,
        "variance": results.variance is not None and not results.variance.variance_in_strain.empty,
        "residuals": results.residuals is not None and not results.residuals.table.empty,
        "hysteresis": results.hysteresis is not None,
        "drift": results.drift is not None,
        "pressure": results.pressure is not None or results.influences is not None,
    }
    return frozenset(name for name, is_there in found.items() if is_there)


def source_href(source: str, there: frozenset[str]) -> str:
    """Return where a source's number is explained."""
    page = EXPLAINED_ON[source]
    return f"{page}.html" if page in there else "method.html#budget-sources"


def conditions_in_words(use: UseConditions, reference: ReferenceQuantity) -> list[tuple[str, str]]:
    """Return every condition of use and what is stated of it."""
    approach = {
        "unknown": "not known",
        "rising": "known: from below",
        "falling": "known: from above",
    }[use.direction]

    def stated(value: float, unit: str) -> str:
        return numbers.significant(value, 3, unit) if math.isfinite(value) else "not stated"

    since = time_words(use.time_since_zero_s) if math.isfinite(use.time_since_zero_s) else "not stated"
    found = [
        ("Direction of approach", approach),
        ("Time since zeroing, up to", since),
        ("Pressure, up to", stated(use.pressure_kpa, "kPa")),
        ("Range of temperature", stated(use.temperature_range_k, "K")),
        ("Strain across, up to", stated(use.transverse_strain * 100.0, "%")),
    ]
    if math.isfinite(use.rate_per_s):
        rate = stated(use.rate_per_s * reference.shown_factor, f"{reference.shown_unit}/s")
        found.append(("Rate of stretch", rate))
    return found


def _use_as_typed(use: UseConditions) -> dict[str, str]:
    """What the fields of the page hold at first: empty where nothing is stated."""
    values = {
        "time": use.time_since_zero_s / 3600.0,
        "pressure": use.pressure_kpa,
        "range": use.temperature_range_k,
        "across": use.transverse_strain * 100.0,
    }
    typed = {name: f"{value:.6g}" if math.isfinite(value) else "" for name, value in values.items()}
    return typed | {"direction": use.direction}


def _monte_carlo(budget: Budget) -> list[dict[str, object]]:
    """Worst budgets that sources which are not normal dominate, with their intervals by Monte Carlo."""
    rows = budget.totals[budget.totals["worst"].astype(bool)].dropna(subset=["monte_carlo_low"])
    rows = rows.sort_values("non_normal_share", ascending=False, kind="stable")
    return [{str(k): v for k, v in row.items()} for row in rows.to_dict("records")]


def source_table(found: BudgetInUse, name: str, reference: ReferenceQuantity, there: frozenset[str]) -> Table:
    """Return one budget, a row a source, at the place where U is largest."""
    factor, unit = reference.shown_factor, reference.shown_unit
    shares = shares_of(found)
    rows = [
        {
            "source": own.source,
            "_href": source_href(own.source, there),
            "contribution_strain": own.contribution,
            "_share": shares.get(own.source, math.nan),
            "_distribution": ", ".join(dict.fromkeys(line.shape for line in own.lines)) or "–",
            "_df": min((line.degrees_of_freedom for line in own.lines), default=math.nan),
            "_why": _status_words(own.status, own.why),
        }
        for own in found.sources
    ]
    least = "at least " if found.is_at_least else ""
    size = numbers.significant(found.combined.expanded_uncertainty * factor, 2, unit)
    place = numbers.significant(found.place.x * factor, 3, unit)
    subject = found.subject.name
    return Table(
        name=name,
        caption=f"Budget of {subject} at {place}: U = {least}{size}.",
        frame=pd.DataFrame(rows),
        columns=(
            Column("source", "Source", kind="text", href="_href"),
            Column("contribution_strain", "Contribution", unit, factor=factor, digits=2, missing="unknown"),
            Column("_share", "Share", kind="percent", missing="–"),
            Column("_distribution", "Distribution", kind="text"),
            Column("_df", "Degrees of freedom", digits=2, missing="–"),
            Column("_why", "Remark", kind="text"),
        ),
        source="budget",
        note="Contributions are standard uncertainties and add as squares. The file has every place, divisor "
        "and sensitivity.",
    )


def _status_words(status: str, why: str) -> str:
    return why if status in (COUNTED, NOT_KNOWN) or why else status


def sensor_budget(results: CampaignResults, module: str, sensor: str) -> dict[str, object] | None:
    """Return what a sensor's page says of its uncertainty in use: U where it is largest, and what adds up."""
    if results.budget is None:
        return None
    own = [b for b in results.budget.of_sensors() if (b.subject.module, b.subject.sensor) == (module, sensor)]
    if not own:
        return None
    shares = sorted(shares_of(own[0]).items(), key=lambda pair: -pair[1])
    return {
        "combined": own[0].combined,
        "x": own[0].place.x,
        "unknown": own[0].unknown,
        "shares": [(name, share) for name, share in shares if share >= _SMALLEST_SHARE],
    }


def totals_table(budget: Budget) -> Table:
    """Return U of every subject where it is largest, largest first."""
    factor, unit = budget.reference.shown_factor, budget.reference.shown_unit
    worst = {(b.subject.generation, b.subject.module, b.subject.sensor): b for b in budget.worst}
    frame = budget.totals
    keys = list(zip(frame["generation"], frame["module"], frame["sensor"], strict=True))
    largest = [max(shares_of(worst[key]).items(), key=lambda pair: pair[1]) for key in keys]
    frame = frame.assign(
        _subject=[worst[key].subject.name for key in keys],
        _href=["" if not key[2] else slugs.sensor_href(key[1], key[2]) for key in keys],
        _largest=[f"{name}, {numbers.percent(share)}" for name, share in largest],
        _complete=["at least" if open_ else "whole" for open_ in frame["at_least"]],
        _df=frame["df"],
        _new=[not key[2] for key in keys],
    )
    frame = frame.sort_values(["worst", "_new", "expanded_strain"], ascending=False, kind="stable")
    return Table(
        name="budget_totals",
        caption="Uncertainty in use of new sensors, and of every sensor with its own line, where it is "
        "largest.",
        frame=frame,
        columns=(
            Column("_subject", "Read", kind="text", href="_href"),
            Column("strain", "at", unit, factor=factor, digits=3),
            Column("_complete", "U is", kind="text"),
            Column("expanded_strain", "U (95 %)", unit, factor=factor, digits=2),
            Column("coverage_factor", "k", digits=3),
            Column("_df", "Degrees of freedom", digits=2),
            Column("_largest", "Largest source", kind="text"),
        ),
        shown_rows=min(_TOTALS_SHOWN, len(budget.worst)),
        note="Each sensor’s own budget stands on its page.",
    )
