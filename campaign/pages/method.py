"""Page 13, Method: every definition, model and formula, with its source and an address of its own."""

from __future__ import annotations

from collections.abc import Mapping
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

import pandas as pd

from campaign import __version__
from campaign.analyses.results import CampaignResults
from campaign.analyses.scope import Scope, Span
from campaign.pages import numbers
from campaign.pages.formulas import rendered_formulas
from campaign.pages.page import Page
from campaign.pages.render import templates_folder
from campaign.pages.tables import Column, Table

PACKAGES = ("numpy", "scipy", "pandas", "statsmodels", "plotly", "jinja2", "latex2mathml")
"""Packages whose versions a reader needs in order to compute the same again."""

COVERAGE_COLUMNS = (
    Column("quantity", "Interval of", kind="text"),
    Column("nominal", "Claimed", kind="percent"),
    Column("covered", "Held the truth", "%", factor=100.0, interval=("low", "high")),
    Column("simulations", "Campaigns", kind="integer"),
)
"""The table of coverage as shown; brackets are the 95 % limits of the share that was counted."""


def method_page(results: CampaignResults) -> Page:
    """Return page 13; it is part of every site."""
    scope = results.findings.scope
    coverage = coverage_table(templates_folder() / "method" / "coverage.csv")
    return Page(
        slug="method",
        number=13,
        title="Method",
        template="method.html",
        context={
            "formulas": rendered_formulas(),
            "versions": versions(),
            "scope": scope,
            "reference": scope.reference,
            "reference_stated": results.description.length_reference.stated,
            **measured_ranges(scope),
        },
        tables=(coverage,) if coverage is not None else (),
        description="Every definition, model and formula of this site, with its source.",
    )


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
