"""The whole flow, top to bottom: folder, recordings, trials, analyses, pages, site."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cache, partial
from pathlib import Path

from campaign.analyses.budget import analyse_budget
from campaign.analyses.budget_findings import budget_findings
from campaign.analyses.calibration import Calibration
from campaign.analyses.calibration_effort import analyse_calibration_effort
from campaign.analyses.drift import Drift, analyse_drift
from campaign.analyses.drift_findings import drift_findings
from campaign.analyses.earlier import Joined, sources_of
from campaign.analyses.endurance import Endurance, analyse_endurance
from campaign.analyses.findings import collect_findings
from campaign.analyses.generation_design import confounded_between, confounded_within, order_of_generations
from campaign.analyses.generation_figures import Comparable, comparable_figures
from campaign.analyses.generation_findings import generation_findings
from campaign.analyses.generations import Generations, compare_generations
from campaign.analyses.hysteresis import Hysteresis, analyse_hysteresis
from campaign.analyses.influence_findings import influence_findings
from campaign.analyses.influences import Influences, analyse_influences
from campaign.analyses.layout import analyse_layout
from campaign.analyses.layout_findings import layout_findings
from campaign.analyses.limits import judge_limits
from campaign.analyses.loop_findings import loop_findings
from campaign.analyses.planning import analyse_planning
from campaign.analyses.planning_findings import planning_findings
from campaign.analyses.pressure import Pressure, analyse_pressure
from campaign.analyses.rehearsal import compare_with_plan, rehearsal_findings
from campaign.analyses.residuals import analyse_residuals
from campaign.analyses.results import CampaignResults
from campaign.analyses.scope import describe_scope
from campaign.analyses.variance import analyse_variance
from campaign.campaign_reading import CampaignRead, calibrate, read_campaign, silent
from campaign.earlier_campaigns import NOT_JOINED, places_of_earlier, read_earlier
from campaign.keeping.kept_site import MadeSite, SiteKeeper
from campaign.kept_report import DONE, beside, keeper_of, write_kept, write_made
from campaign.notices import Notice, sort_notices
from campaign.pages.brief import brief_bytes, check_brief_place, write_brief
from campaign.pages.notes import Notes, make_notes, read_note_files
from campaign.pages.output import check_ours, write_folder
from campaign.pages.publication import chosen_pages, publication_files
from campaign.pages.render import pages_as_marked
from campaign.pages.site import build_site, site_frame, site_pages
from campaign.provenance.manifest import with_manifests
from campaign.recordings.inspection import ON_SITE, inspection_lines, print_lines
from campaign.recordings.intake import Intake
from campaign.recordings.shared_reading import Progress
from campaign.trials.cyclic import CyclicFeatures
from campaign.trials.endurance import EnduranceFeatures
from campaign.trials.hold import HoldFeatures
from campaign.trials.layout import LayoutFeatures
from campaign.trials.sweeps import SweepFeatures
from campaign.workers.crew import ThisProcess
from campaign.workers.workshop import Workshop


def report(
    folder: Path,
    into: Path | None,
    fail_on_set_aside: bool,
    progress: Progress | None = None,
    workshop: Workshop | None = None,
    keeper: SiteKeeper | None = None,
) -> int:
    """Read the campaign in *folder*, analyse it, and write its site whole or not at all.

    A site of the very same content is written as an earlier run made it.

    Parameters
    ----------
    folder
        The campaign folder; nothing in it is altered.
    into
        Folder of the site; ``FOLDER_report`` beside the campaign where ``None``.
    fail_on_set_aside
        Whether the status is 1 where anything was set aside unasked.
    progress
        Told what is being done and how far it is.
    workshop
        Who works, and what earlier runs left; this process alone, and nothing, where ``None``.
    keeper
        Who keeps the site, where it was seen already that none is kept of this content
        (:func:`campaign.kept_report.write_kept`).

    Returns
    -------
    int
        Exit status: 0 done, 1 done with something set aside.

    Raises
    ------
    CampaignStops
        Where the campaign cannot be read or the output folder is not ours; nothing is written then.
    """
    workshop = workshop or Workshop()
    if keeper is None:
        keeper = keeper_of(folder, into, workshop)
        status = write_kept(keeper, fail_on_set_aside)
        if status is not None:
            return status
    results, files = make_site(folder, keeper.site, progress, workshop)
    said = print_lines(_what_was_read(results.intake, results.notices))
    made = MadeSite(files, said, _anything_set_aside(results))
    keeper.keep(made, results.intake.file_hashes, places_of_earlier(folder, results.description))
    return write_made(made, keeper.site, fail_on_set_aside)


def _anything_set_aside(results: CampaignResults) -> bool:
    """Whether anything was set aside unasked, an earlier campaign included."""
    earlier = any(notice.code == NOT_JOINED for notice in results.notices)
    return earlier or bool(results.intake.set_aside_unasked)


def make_site(
    folder: Path,
    output: Path | None = None,
    progress: Progress | None = None,
    workshop: Workshop | None = None,
) -> tuple[CampaignResults, dict[str, bytes]]:
    """Read and analyse a campaign and return its results and every file of its site by address.

    Parameters are those of :func:`read_campaign`; so are the faults that stop it.
    """
    tell = progress or silent
    results, notes = read_and_analyse(folder, output, tell, workshop)
    tell("pages", 0, 1)
    library = results.description.plot_library
    given = folder / library if library is not None else None
    files = build_site(results, notes, given, workshop)
    tell("pages", 1, 1)
    return results, with_manifests(files, results.intake.file_hashes)


def read_and_analyse(
    folder: Path, output: Path | None, tell: Progress, workshop: Workshop | None
) -> tuple[CampaignResults, Notes]:
    """Return what a campaign's recordings say, and its notes; notices of both are among the results'."""
    read = read_campaign(folder, output, tell, workshop)
    results = analyse(read, tell, read_earlier(folder, read, tell, workshop), workshop)
    notes = make_notes(read_note_files(folder))
    return replace(results, notices=sort_notices([*results.notices, *notes.notices])), notes


def brief(
    folder: Path, file: Path, progress: Progress | None = None, workshop: Workshop | None = None
) -> int:
    """Read and analyse the campaign in *folder* and write its brief, whole or not at all.

    Returns
    -------
    int
        Exit status: 0 done.

    Raises
    ------
    CampaignStops
        Where the campaign cannot be read, or *file* is not ours to write.
    """
    check_brief_place(file)
    results, notes = read_and_analyse(folder, None, progress or silent, workshop)
    content = brief_bytes(site_frame(results), site_pages(results, notes))
    write_brief(content, file)
    print(f"{file}: {len(content)} bytes, findings and key figures in one file")
    return DONE


def publish(
    folder: Path,
    into: Path | None,
    wanted: Sequence[str] = (),
    progress: Progress | None = None,
    workshop: Workshop | None = None,
) -> int:
    """Read and analyse the campaign in *folder* and write its figures and tables for a paper.

    Parameters
    ----------
    folder
        The campaign folder; nothing in it is altered.
    into
        Folder of the files; ``FOLDER_figures`` beside the campaign where ``None``.
    wanted
        Names of the pages whose figures and tables are wanted; all where none is named.

    Returns
    -------
    int
        Exit status: 0 done.

    Raises
    ------
    CampaignStops
        Where the campaign cannot be read, a page is not there, or the folder is not ours to write.
    """
    place = into if into is not None else beside(folder, "figures")
    check_ours(place)
    tell = progress or silent
    results, notes = read_and_analyse(folder, place, tell, workshop)
    pages = site_pages(results, notes)
    marked = pages_as_marked(site_frame(results), chosen_pages(pages, wanted))
    files = publication_files(marked, (), results.readings.reference, tell)
    write_folder(files, place)
    print(f"{len(files)} files written to {place}; index.csv says which is which")
    return DONE


def _what_was_read(intake: Intake, notices: tuple[Notice, ...]) -> list[str]:
    return inspection_lines(replace(intake, notices=notices), where=ON_SITE)


def analyse(
    read: CampaignRead,
    progress: Progress | None = None,
    earlier: Joined | None = None,
    workshop: Workshop | None = None,
) -> CampaignResults:
    """Run every analysis that the readings allow, each fit once.

    Parameters
    ----------
    read
        The campaign.
    progress
        Told what is being done.
    earlier
        Earlier campaigns to compare with (:func:`read_earlier`).
    workshop
        Who fits, and what earlier runs fitted; this process alone, and nothing, where ``None``.
    """
    tell = progress or silent
    intake, description = read.intake, read.intake.description
    calibration = put_back = variance = residuals = effort = None
    if len(read.readings.usable):
        tell("analyses", 0, 4)
        calibration = calibrate(read.readings, intake, workshop)
        if read.readings_with_put_back is not None:
            put_back = calibrate(read.readings_with_put_back, intake, workshop)
        tell("analyses", 1, 4)
    without_spread = cache(partial(_without_spread, read, calibration, put_back, workshop or Workshop()))
    if calibration is not None:
        variance = analyse_variance(calibration, description, workshop, meanwhile=without_spread)
        tell("analyses", 2, 4)
        residuals = analyse_residuals(calibration, variance)
        effort = analyse_calibration_effort(calibration, variance, description, workshop)
        tell("analyses", 3, 4)
    rehearsal = compare_with_plan(description, variance)
    hysteresis, drift, pressure, influences, endurance, back = without_spread()
    others = [found for found in (hysteresis, drift, pressure) if found is not None]
    readings = read.readings
    if not len(readings.table) and others:
        readings = replace(readings, reference=others[0].reference)
    budget = analyse_budget(
        description, calibration, variance, hysteresis, drift, pressure, influences, workshop
    )
    registers = intake.modules, intake.sensors
    layout = analyse_layout(
        read.of_type(LayoutFeatures), calibration, variance, influences, description, registers, workshop
    )
    joined = earlier or Joined()
    own = comparable_figures(
        description,
        intake.used_identities,
        calibration,
        variance.by_generation if variance is not None else (),
        variance.uneven if variance is not None else (),
        hysteresis,
        drift,
        pressure,
        budget,
        layout,
        _geometries(intake),
    )
    generations = _compare(intake, own, joined)
    scope = describe_scope(description, intake, calibration, read.readings.reference)
    planning = analyse_planning(
        description, scope.reference, variance.by_generation if variance is not None else (), scope
    )
    judged = [found.figures for found in (*others, budget, layout) if found is not None]
    limits = judge_limits(description, calibration, judged, budget.missing if budget is not None else None)
    findings = collect_findings(
        description,
        intake,
        calibration,
        variance,
        residuals,
        effort,
        limits,
        put_back,
        further=[
            *rehearsal_findings(rehearsal),
            *loop_findings(hysteresis, endurance, limits, back.hysteresis),
            *drift_findings(drift, limits, back.drift),
            *influence_findings(pressure, influences, limits, back.pressure),
            *generation_findings(generations),
            *planning_findings(planning),
            *budget_findings(budget, limits),
            *layout_findings(layout, limits),
        ],
        reference=readings.reference,
        scope=scope if calibration is not None else None,
    )
    analyses = (calibration, variance, residuals, effort, *others, influences, layout, joined, generations)
    notices = [notice for analysis in analyses if analysis is not None for notice in analysis.notices]
    tell("analyses", 4, 4)
    return CampaignResults(
        description=description,
        intake=intake,
        readings=readings,
        calibration=calibration,
        variance=variance,
        residuals=residuals,
        calibration_effort=effort,
        limits=limits,
        findings=findings,
        notices=sort_notices([*intake.notices, *notices]),
        hysteresis=hysteresis,
        endurance=endurance,
        drift=drift,
        pressure=pressure,
        influences=influences,
        layout=layout if layout is not None and layout.placements else None,
        budget=budget,
        generations=generations,
        planning=planning,
        earlier=joined.campaigns,
        rehearsal=rehearsal,
    )


def _without_spread(
    read: CampaignRead, calibration: Calibration | None, put_back: Calibration | None, workshop: Workshop
) -> tuple[Hysteresis | None, Drift | None, Pressure | None, Influences | None, Endurance | None, PutBack]:
    """Run the analyses that need no fit of the nested model: this process does them while others fit it."""
    description, alone = read.intake.description, replace(workshop, crew=ThisProcess())
    sweeps = read.of_type(SweepFeatures)
    cycled, laid_out = read.of_type(CyclicFeatures).values(), read.of_type(LayoutFeatures).values()
    logged = [(f.identity, f.logged) for f in cycled if f.logged is not None]
    logged += [(f.identity, f.logged) for f in laid_out if f.logged is not None]
    return (
        analyse_hysteresis(read.of_type(CyclicFeatures), calibration),
        analyse_drift(read.of_type(HoldFeatures), calibration, description, alone),
        analyse_pressure(sweeps, calibration, description, logged),
        analyse_influences(sweeps, calibration, description),
        analyse_endurance(read.of_type(EnduranceFeatures).values()),
        analyse_put_back(read, put_back or calibration, alone),
    )


def _geometries(intake: Intake) -> dict[str, str]:
    """Module → the geometry that modules.csv names for it."""
    modules = intake.modules
    if "geometry" not in modules:
        return {}
    return dict(zip(modules["module"].astype(str), modules["geometry"].fillna("").astype(str), strict=True))


def _compare(intake: Intake, own: Comparable, earlier: Joined) -> Generations | None:
    """Compare the generations of this campaign and of the earlier ones, oldest first."""
    description = intake.description
    order = (
        *(name for campaign in earlier.campaigns for name in campaign.order),
        *order_of_generations(intake),
    )
    sources = sources_of(earlier.campaigns, description.title, own)
    titles = {name: source.title for source in sources for name in source.offers.generations}
    confounded = (*confounded_between(titles, order), *confounded_within(intake, order))
    return compare_generations(description, sources, order, confounded)


@dataclass(frozen=True)
class PutBack:
    """Loops, holds and pressure with all that the registers set aside put back; ``None`` where none was."""

    hysteresis: Hysteresis | None
    drift: Drift | None
    pressure: Pressure | None


def analyse_put_back(
    read: CampaignRead, calibration: Calibration | None, workshop: Workshop | None = None
) -> PutBack:
    """Analyse once more, by the lines of *calibration*, the kinds of trial of which some were set aside."""
    description = read.intake.description
    holds = read.with_put_back(HoldFeatures)
    return PutBack(
        analyse_hysteresis(read.with_put_back(CyclicFeatures), calibration),
        analyse_drift(holds, calibration, description, workshop) if holds else None,
        analyse_pressure(read.with_put_back(SweepFeatures), calibration, description),
    )
