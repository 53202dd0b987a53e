"""Page 13, Method: every definition, model and formula, with its source and an address of its own."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

import pandas as pd

from campaign import __version__
from campaign.analyses.budget import Budget
from campaign.analyses.drift import Drift
from campaign.analyses.hold_figures import OF_FULL_SCALE
from campaign.analyses.hysteresis import Hysteresis
from campaign.analyses.layout_results import OWN_LINE, Layout
from campaign.analyses.loop_table import BY_LINE
from campaign.analyses.pressure import Pressure
from campaign.analyses.results import CampaignResults
from campaign.analyses.scope import Scope, Span
from campaign.pages import numbers
from campaign.pages.budget import conditions_in_words
from campaign.pages.drift_figures import time_words
from campaign.pages.formulas import rendered_formulas
from campaign.pages.page import Page
from campaign.pages.tables import Column, Table
from campaign.pages.templates import templates_folder

PACKAGES = ("numpy", "scipy", "pandas", "statsmodels", "plotly", "jinja2", "latex2mathml")
"""Packages whose versions a reader needs in order to compute the same again."""

COVERAGE_COLUMNS = (
    Column("quantity", "Interval of", kind="text"),
    Column("nominal", "Claimed", kind="percent"),
    Column("covered", "Held the truth", "%", factor=100.0, interval=("low", "high")),
    Column("simulations", "Campaigns", kind="integer"),
)
"""The table of coverage as shown; brackets are the 95 % limits of the share that was counted."""


@dataclass(frozen=True)
class Section:
    """A part of the Method page with a page of its own: its anchor, its title, its templates."""

    anchor: str
    title: str
    templates: tuple[str, ...]

    @property
    def slug(self) -> str:
        """Name of its page."""
        return f"method-{self.anchor}"


SECTIONS = (
    Section("words", "Words", ("words",)),
    Section("readings", "From recordings to readings", ("readings",)),
    Section("lines", "One sensor’s line", ("line", "stretch")),
    Section("spread", "Where the spread comes from", ("spread", "coverage")),
    Section("judging", "Residuals, effort, limits, uncertainty in use, numbers", ("judging", "budget")),
    Section("loops-and-endurance", "Loops and endurance", ("loops",)),
    Section("holds-and-drift", "Holds, drift, noise at rest", ("holds",)),
    Section("pressure-and-influences", "Pressure and other influences", ("influences",)),
    Section("shapes", "Shapes from lengths", ("layout",)),
    Section("generations-and-plans", "Generations and the next campaign", ("comparison",)),
    Section("paper", "Text ready for a paper", ("paper",)),
    Section("sources", "Sources", ("sources",)),
)
"""The sections of the Method page in order; every template of ``site_templates/method`` is in one of them."""


def method_pages(results: CampaignResults) -> list[Page]:
    """Return page 13, which lists every definition, and a page for each of its sections."""
    scope = results.findings.scope
    return pages_of_sections(
        {
            "formulas": rendered_formulas(),
            "versions": versions(),
            "scope": scope,
            "reference": scope.reference,
            "reference_stated": results.description.length_reference.stated,
            "kinds": measured_kinds(results),
            **measured_ranges(scope),
        },
        coverage_table(templates_folder() / "method" / "coverage.csv"),
    )


def pages_of_sections(context: Mapping[str, object], coverage: Table | None) -> list[Page]:
    """Return page 13 and the pages of its sections, told with the values of *context*."""
    tables = (coverage,) if coverage is not None else ()
    whole = Page(
        slug="method",
        number=13,
        title="Method",
        template="method.html",
        context={**context, "sections": SECTIONS},
        tables=tables,
        description="Every definition, model and formula of this site, with its source.",
    )
    links = [(section.title, f"{section.slug}.html") for section in SECTIONS]
    neighbours = [None, *links, None]
    return [
        whole,
        *(
            Page(
                slug=section.slug,
                number=None,
                title=section.title,
                template="method_section.html",
                context={**context, "section": section, "index": index},
                tables=tables if "coverage" in section.templates else (),
                description=f"Definitions and sources: {section.title}.",
                above=((whole.title, whole.file),),
                previous=neighbours[index - 1],
                following=neighbours[index + 1],
                part_of=whole.file,
            )
            for index, section in enumerate(SECTIONS, 1)
        ),
    ]


def versions() -> Mapping[str, str]:
    """Return the version of this program and of the packages that compute and draw, by name."""
    found = {"campaign-report": __version__}
    for package in PACKAGES:
        try:
            found[package] = version(package)
        except PackageNotFoundError:
            found[package] = "version not recorded"
    return found


def measured_ranges(scope: Scope) -> dict[str, str]:
    """Return range, temperature, runs and mountings as rounded words, empty where not recorded."""
    shown = scope.reference
    factor = shown.shown_factor
    x = scope.x
    return {
        "range": numbers.span(x.low * factor, x.high * factor, shown.shown_unit) if x is not None else "",
        "temperature": _temperatures(scope.temperature_c),
        "runs": _counts(scope.runs),
        "mountings": _counts(scope.mountings),
    }


def measured_kinds(results: CampaignResults) -> dict[str, Mapping[str, str]]:
    """Return what the text for a paper says of each kind of trial; only of what was measured."""
    said: dict[str, Mapping[str, str]] = {}
    if results.calibration is not None:
        said["staircases"] = {}
    if results.hysteresis is not None:
        said["loops"] = _loops_in_words(results.hysteresis)
    if results.drift is not None and len(results.drift.holds):
        said["holds"] = _holds_in_words(results.drift)
    if results.pressure is not None:
        said["pressure"] = _pressure_in_words(results.pressure)
    if results.layout is not None and results.layout.placements:
        said["layout"] = _layout_in_words(results.layout, results.description.node_reference_mm)
    if results.generations is not None:
        said["generations"] = _generations_in_words(results)
    if results.budget is not None and results.budget.subjects:
        said["budget"] = _budget_in_words(results.budget)
    if results.planning is not None and len(results.planning.table):
        said["planning"] = {"costs": "yes" if results.planning.costs is not None else ""}
    return said


def _loops_in_words(hysteresis: Hysteresis) -> dict[str, str]:
    loops, shown = hysteresis.loops, hysteresis.reference
    rates = sorted(set(loops["rate_level_per_s"].dropna()))
    unit = f"{shown.shown_unit}/s"
    return {
        "sensors": numbers.count(len(hysteresis.sensors), "sensor"),
        "one": "yes" if len(hysteresis.sensors) == 1 else "",
        "runs": numbers.count(loops.groupby(["module", "sensor", "trial"]).ngroups, "run"),
        "loops": numbers.count(len(loops), "loop"),
        "rates": " and ".join(numbers.significant(rate * shown.shown_factor, 2, unit) for rate in rates),
        "several_rates": "yes" if len(rates) > 1 else "",
        "by_line": "yes" if set(hysteresis.scales) == {BY_LINE} else "",
    }


def _holds_in_words(drift: Drift) -> dict[str, str]:
    lasted = drift.holds["duration_s"]
    ends = [time_words(float(end)) for end in (lasted.min(), lasted.max())]
    return {
        "holds": numbers.count(len(drift.holds), "hold"),
        "sensors": numbers.count(drift.holds.groupby(["module", "sensor"]).ngroups, "sensor"),
        "lasted": ends[0] if ends[0] == ends[1] else f"{ends[0]} to {ends[1]}",
        "at_rest": "yes" if len(drift.allan) else "",
        "by_line": "yes" if drift.holds["percent_of"].eq(OF_FULL_SCALE).all() else "",
        "steady": "yes" if drift.holds["temperature"].eq("steady").any() else "",
    }


def _pressure_in_words(pressure: Pressure) -> dict[str, str]:
    table = pressure.table
    low, high = float(table["low_kpa"].min()), float(table["high_kpa"].max())
    return {
        "sensors": numbers.count(len(table), "sensor"),
        "one": "yes" if len(table) == 1 else "",
        "sweeps": numbers.count(int(table["sweeps"].sum()), "sweep"),
        "range": numbers.span(low, high, "kPa"),
    }


def _layout_in_words(layout: Layout, node_reference_mm: float) -> dict[str, str]:
    own = layout.of_line(OWN_LINE)
    stated = math.isfinite(node_reference_mm)
    return {
        "placements": numbers.count(len(own), "placement"),
        "modules": numbers.count(len({(one.generation, one.module) for one in own}), "module"),
        "known": numbers.significant(node_reference_mm, 2, "mm") if stated else "",
    }


def _generations_in_words(results: CampaignResults) -> dict[str, str]:
    compared = results.generations
    assert compared is not None
    names = [
        name if results.description.title == title else f"{name} ({title})"
        for name, title in compared.sources.items()
    ]
    return {
        "names": f"{', '.join(names[:-1])} and {names[-1]}",
        "figures": numbers.count(int(compared.table["figure"].nunique()), "figure"),
        "family": numbers.whole(compared.family) if compared.family else "",
        "earlier": "yes" if results.earlier else "",
        "margins": "yes" if compared.table["p_equivalence"].notna().any() else "",
    }


def _budget_in_words(budget: Budget) -> dict[str, str]:
    use = conditions_in_words(budget.conditions, budget.reference)
    unknown = sorted({source for sources in budget.missing.values() for source in sources})
    return {
        "use": "; ".join(_condition(what, amount) for what, amount in use if amount != "not stated"),
        "unknown": ", ".join(unknown),
        "monte_carlo": "yes" if budget.totals["monte_carlo_low"].notna().any() else "",
    }


def _condition(what: str, amount: str) -> str:
    return f"{what[0].lower()}{what[1:]} {amount}".replace(", up to", " up to").replace("known:", "known")


def _temperatures(span: Span | None) -> str:
    return "" if span is None else numbers.span(span.low, span.high, "°C")


def _counts(span: Span | None) -> str:
    if span is None:
        return ""
    ends = (numbers.whole(span.low), numbers.whole(span.high))
    return ends[0] if ends[0] == ends[1] else "–".join(ends)


def coverage_table(file: Path) -> Table | None:
    """Return the table of simulated coverage, or ``None`` where the installation does not have it."""
    if not file.is_file():
        return None
    frame = pd.read_csv(file, keep_default_na=False, na_values=[""])
    return Table(
        name="coverage",
        caption="How often 95 % intervals held the truth in simulated campaigns.",
        frame=frame,
        columns=COVERAGE_COLUMNS,
        shown_rows=None,
        note="Brackets: where the true share lies, as far as so many campaigns can tell. With 500 of them "
        "95 % shows as 93 to 97 %.",
    )
