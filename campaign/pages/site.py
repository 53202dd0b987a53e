"""The whole site, page by page: results in, the bytes of every file out."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from functools import partial
from pathlib import Path

from campaign import __version__
from campaign.analyses.results import CampaignResults
from campaign.pages import numbers
from campaign.pages.budget import budget_page
from campaign.pages.budget_data import budget_scripts
from campaign.pages.calculator import record_files
from campaign.pages.calibration import calibration_page
from campaign.pages.calibration_effort import calibration_effort_page
from campaign.pages.campaign_map import campaign_map
from campaign.pages.drift import drift_page
from campaign.pages.findings import findings_page
from campaign.pages.generations import generations_page
from campaign.pages.hysteresis import hysteresis_page
from campaign.pages.layout import layout_page
from campaign.pages.layout_scripts import layout_scripts
from campaign.pages.loop_figures import loop_scripts
from campaign.pages.method import method_pages
from campaign.pages.module_share import all_modules, module_shares
from campaign.pages.notes import Notes
from campaign.pages.own_pages import files_of_modules, pages_of_module
from campaign.pages.page import Page, SiteFrame
from campaign.pages.planning import planning_page
from campaign.pages.pressure import pressure_page
from campaign.pages.provenance import provenance_page
from campaign.pages.recordings import recordings_page
from campaign.pages.render import render_site
from campaign.pages.residuals import residual_files, residuals_page
from campaign.pages.sensor_parts import sensor_keys
from campaign.pages.site_tables import site_tables
from campaign.pages.skin_map import SkinMap
from campaign.pages.tables import Table
from campaign.pages.variance import variance_page
from campaign.workers.crew import LocalProcesses
from campaign.workers.workshop import Workshop

PAGES_WORTH_SHARING = 100
"""From so many pages of modules and sensors on, other processes make and render them.

A worker takes some 1.9 s of a core before its first page, and a page some 0.06 s: two workers are even with
one process at about 60 pages.
"""


def build_site(
    results: CampaignResults,
    notes: Notes | None = None,
    plot_library: Path | None = None,
    workshop: Workshop | None = None,
) -> dict[str, bytes]:
    """Return every file of the campaign's site by its address.

    Parameters
    ----------
    results
        What one run of the report found out.
    notes
        The campaign's notes (:func:`campaign.pages.notes.make_notes`).
    plot_library
        The build of the plot library that the description names, else the one that plotly carries.
    workshop
        Who renders pages where there are many; this process alone where ``None``. The site is the same.

    Raises
    ------
    CampaignStops
        Where *plot_library* is not what it should be.
    """
    notes = notes or Notes()
    mapped = campaign_map(results)
    pages = [*pages_of_campaign(results, mapped), *notes.pages]
    pages.append(provenance_page(results, _all_tables(results, pages)))
    making = None
    if workshop is not None and _worth_sharing(results, workshop):
        making = partial(files_of_modules, results, mapped, workshop)
    return render_site(
        site_frame(results),
        pages,
        site_tables(results, pages),
        files=partial(_further_files, results, notes),
        plot_library=plot_library,
        reference=results.readings.reference,
        own_pages=own_pages(results, mapped),
        store=workshop.store if workshop is not None else None,
        own_making=making,
    )


def _further_files(results: CampaignResults, notes: Notes) -> dict[str, bytes]:
    """Return the files that are neither pages nor tables, by address."""
    records = results.calibration.records if results.calibration is not None else ()
    return {
        **(notes.files or {}),
        **record_files(records, site_frame(results).origin),
        **residual_files(results),
        **loop_scripts(results.hysteresis),
        **budget_scripts(results.budget),
        **layout_scripts(results.layout),
    }


def site_pages(results: CampaignResults, notes: Notes) -> list[Page]:
    """Return all pages in the order of the strip, then those of modules, sensors and notes.

    A page appears only for what was measured.
    """
    mapped = campaign_map(results)
    own = sorted(own_pages(results, mapped), key=lambda page: bool(page.above))  # modules first
    pages = [*pages_of_campaign(results, mapped), *own, *notes.pages]
    return [*pages, provenance_page(results, _all_tables(results, pages))]


def pages_of_campaign(results: CampaignResults, mapped: SkinMap) -> list[Page]:
    """Return the pages of the strip in order, and those of Method, but for Provenance."""
    measured = (
        calibration_page(results),
        variance_page(results),
        residuals_page(results),
        calibration_effort_page(results),
        hysteresis_page(results),
        drift_page(results),
        pressure_page(results),
        layout_page(results),
        generations_page(results),
        planning_page(results),
        budget_page(results),
    )
    pages = [findings_page(results, mapped), *(page for page in measured if page is not None)]
    return [*pages, recordings_page(results), *method_pages(results)]


def own_pages(results: CampaignResults, mapped: SkinMap) -> Iterator[Page]:
    """Yield the page of every module and those of its sensors; none has a table that is a file of its own."""
    common = all_modules(results, mapped)
    for share in module_shares(results):
        yield from pages_of_module(share, common)


def _all_tables(results: CampaignResults, pages: Sequence[Page]) -> list[Table]:
    return [*(table for page in pages for table in page.tables), *site_tables(results, pages)]


def _worth_sharing(results: CampaignResults, workshop: Workshop) -> bool:
    keys = sensor_keys(results)
    pages = len(keys) + len({module for _, module, _ in keys})
    return isinstance(workshop.crew, LocalProcesses) and pages >= PAGES_WORTH_SHARING


def site_frame(results: CampaignResults) -> SiteFrame:
    """Return what every page shares: title, the line above it, whether the data are invented."""
    scope, counts = results.findings.scope, results.intake.counts
    parts = (
        numbers.count(scope.modules, "module"),
        numbers.count(scope.sensors, "sensor"),
        numbers.count(counts.trials_used, "trial"),
    )
    return SiteFrame(
        title=results.description.title,
        summary=("Characterisation campaign", *parts),
        invented=results.description.simulated,
        rehearsal=results.description.rehearsal,
        version=__version__,
    )
