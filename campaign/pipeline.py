"""The whole flow, top to bottom: folder, recordings, trials, analyses, pages, site."""

from __future__ import annotations

import sys
import tempfile
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TypeVar

import pandas as pd

from campaign.analyses.calibration import Calibration, analyse_calibration
from campaign.analyses.calibration_effort import analyse_calibration_effort
from campaign.analyses.drift import Drift, analyse_drift
from campaign.analyses.drift_findings import drift_findings
from campaign.analyses.endurance import analyse_endurance
from campaign.analyses.findings import collect_findings
from campaign.analyses.hysteresis import Hysteresis, analyse_hysteresis
from campaign.analyses.influence_findings import influence_findings
from campaign.analyses.influences import analyse_influences
from campaign.analyses.limits import judge_limits
from campaign.analyses.loop_findings import loop_findings
from campaign.analyses.pressure import Pressure, analyse_pressure
from campaign.analyses.residuals import analyse_residuals
from campaign.analyses.results import CampaignResults
from campaign.analyses.variance import analyse_variance
from campaign.archive import campaign_in, hash_in_comment_holds, sha512_of, unpack_what_is_whole
from campaign.keeping.kept_site import MadeSite, SiteKeeper
from campaign.notices import CampaignStops, Notice, sort_notices
from campaign.pages.brief import brief_bytes, check_brief_place, write_brief
from campaign.pages.notes import Notes, make_notes, read_note_files
from campaign.pages.output import check_ours, write_folder
from campaign.pages.publication import chosen_pages, publication_files
from campaign.pages.render import templates_folder
from campaign.pages.site import build_site, site_frame, site_pages
from campaign.provenance.bag import BagFault
from campaign.provenance.comparing import SCHEMA, compare_tables
from campaign.provenance.manifest import with_manifests
from campaign.provenance.refitting import refit_from_readings
from campaign.provenance.sealing import TABLES, check_archive_place, seal_campaign, write_sealed
from campaign.provenance.verifying import (
    ARCHIVE,
    WHAT_HASHES_SHOW,
    Recomputation,
    Verification,
    recomputation_lines,
    sealed_tables,
    verification_lines,
    verify_folder,
)
from campaign.recordings.inspection import ON_SITE, inspection_lines, notice_lines, print_lines
from campaign.recordings.intake import Intake, run_intake
from campaign.recordings.sensor_share import TrialKey
from campaign.recordings.shared_reading import Progress
from campaign.trials.cyclic import CyclicFeatures
from campaign.trials.endurance import EnduranceFeatures
from campaign.trials.features import TrialFeatures
from campaign.trials.hold import HoldFeatures
from campaign.trials.layout import LayoutFeatures
from campaign.trials.readings import Readings, collect_readings
from campaign.trials.reduction import reduce_trial
from campaign.trials.staircase import StaircaseFeatures
from campaign.trials.sweeps import SweepFeatures
from campaign.workers.workshop import Workshop

DONE, SET_ASIDE, DIFFERS = 0, 1, 1

Features = TypeVar("Features", bound=TrialFeatures)


@dataclass(frozen=True)
class CampaignRead:
    """A campaign folder after its files were read once: no recording is held any more.

    Attributes
    ----------
    intake
        Every file with its fate; notices of the trial stage included.
    readings
        Plateaus of the staircases; those that the registers set aside are there and marked as not used.
    readings_with_put_back
        The same with those that the registers set aside marked as used; ``None`` where there are none.
    features
        What the used trials of every other kind were reduced to, by trial in reading order.
    features_put_back
        The same of sound trials that the registers set aside.
    """

    intake: Intake
    readings: Readings
    readings_with_put_back: Readings | None
    features: dict[TrialKey, TrialFeatures] = field(default_factory=dict)
    features_put_back: dict[TrialKey, TrialFeatures] = field(default_factory=dict)

    def of_type(self, kept: type[Features]) -> dict[TrialKey, Features]:
        """Return the features of one type, by trial in reading order."""
        return {key: found for key, found in self.features.items() if isinstance(found, kept)}

    def with_put_back(self, kept: type[Features]) -> dict[TrialKey, Features]:
        """Return the features of one type with those set aside put back; empty where none were."""
        aside = {key: found for key, found in self.features_put_back.items() if isinstance(found, kept)}
        return self.of_type(kept) | aside if aside else {}


def report(
    folder: Path,
    into: Path | None,
    fail_on_set_aside: bool,
    progress: Progress | None = None,
    workshop: Workshop | None = None,
) -> int:
    """Read the campaign in *folder*, analyse it, and write its site whole or not at all.

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

    Returns
    -------
    int
        Exit status: 0 done, 1 done with something set aside.

    Raises
    ------
    CampaignStops
        Where the campaign cannot be read or the output folder is not ours; nothing is written then.
    """
    site = into if into is not None else beside(folder)
    check_ours(site)
    workshop = workshop or Workshop()
    keeper = SiteKeeper(workshop.store, folder, site, templates_folder())
    made = keeper.find()
    if made is None:
        results, files = make_site(folder, site, progress, workshop)
        said = print_lines(_what_was_read(results.intake, results.notices))
        made = MadeSite(files, said, bool(results.intake.set_aside_unasked))
        keeper.keep(made, results.intake.file_hashes)
    write_folder(made.files, site)
    sys.stdout.write(made.said)
    print(f"\n{len(made.files)} files written; open {site / 'index.html'}")
    return SET_ASIDE if fail_on_set_aside and made.set_aside else DONE


def make_site(
    folder: Path,
    output: Path | None = None,
    progress: Progress | None = None,
    workshop: Workshop | None = None,
) -> tuple[CampaignResults, dict[str, bytes]]:
    """Read and analyse a campaign and return its results and every file of its site by address.

    Parameters are those of :func:`read_campaign`; so are the faults that stop it.
    """
    tell = progress or _silent
    results, notes = read_and_analyse(folder, output, tell, workshop)
    tell("pages", 0, 1)
    library = results.description.plot_library
    files = build_site(results, notes, folder / library if library is not None else None)
    tell("pages", 1, 1)
    return results, with_manifests(files, results.intake.file_hashes)


def read_and_analyse(
    folder: Path, output: Path | None, tell: Progress, workshop: Workshop | None
) -> tuple[CampaignResults, Notes]:
    """Return what a campaign's recordings say, and its notes; notices of both are among the results'."""
    results = analyse(read_campaign(folder, output, tell, workshop), tell, workshop)
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
    results, notes = read_and_analyse(folder, None, progress or _silent, workshop)
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
    tell = progress or _silent
    results, notes = read_and_analyse(folder, place, tell, workshop)
    pages = site_pages(results, notes)
    files = publication_files(chosen_pages(pages, wanted), (), results.readings.reference, tell)
    write_folder(files, place)
    print(f"{len(files)} files written to {place}; index.csv says which is which")
    return DONE


def seal(folder: Path, into: Path, progress: Progress | None = None, workshop: Workshop | None = None) -> int:
    """Read and analyse the campaign in *folder* and seal everything into the zip file *into*.

    The same folder gives the same bytes. Nothing is written where anything stops.

    Returns
    -------
    int
        Exit status: 0 done.

    Raises
    ------
    CampaignStops
        Where the campaign cannot be read or sealed, or *into* is not ours to write.
    """
    tell = progress or _silent
    check_archive_place(folder, into)
    results, site = make_site(folder, None, tell, workshop)
    tell("sealing", 0, 1)
    sealed = seal_campaign(folder, results, site)
    write_sealed(sealed, into)
    tell("sealing", 1, 1)
    sys.stdout.write(print_lines(notice_lines(sealed.notices)))
    print(f"{into} holds {len(sealed.files)} files, {into.stat().st_size} bytes; its SHA-512:")
    print(f"  {sha512_of(into)}")
    print(f"{WHAT_HASHES_SHOW}\nVerify it with: campaign verify {into}")
    return DONE


def verify(
    target: Path, recompute: bool, progress: Progress | None = None, workshop: Workshop | None = None
) -> int:
    """Verify a sealed archive (a zip file, or the folder it was unpacked to) or a site, and say what differs.

    Parameters
    ----------
    target
        What to verify; it is not altered.
    recompute
        Whether to read and analyse the recordings in the archive again and compare every figure.
    progress, workshop
        As in :func:`read_campaign`; nothing kept by earlier runs should be in the workshop.

    Returns
    -------
    int
        Exit status: 0 everything agrees, 1 something differs.

    Raises
    ------
    CampaignStops
        Where *target* cannot be read, is refused, or holds nothing to recompute.
    """
    with tempfile.TemporaryDirectory(prefix="campaign-verify-") as space:
        folder, damaged = _opened(target, Path(space) / "archive")
        found = verify_folder(folder)
        faults = _named_once([*damaged, *found.faults])
        found = replace(found, faults=faults, remarks=(*found.remarks, *_packing_remarks(target)))
        sys.stdout.write(print_lines(verification_lines(found, target.name)))
        again = recompute_archive(found, progress, workshop) if recompute else None
        if again is not None:
            sys.stdout.write(print_lines(recomputation_lines(again)))
    print(WHAT_HASHES_SHOW)
    return DIFFERS if found.faults or (again is not None and not again.agrees) else DONE


def _opened(target: Path, space: Path) -> tuple[Path, list[BagFault]]:
    """Where *target* lies unpacked, and what of its zip file is damaged."""
    if target.is_dir():
        return target, []
    unpacked = unpack_what_is_whole(target, space)
    home = unpacked.folder.relative_to(space).as_posix()
    faults = [
        BagFault((notice.file or "").removeprefix(f"{home}/"), "is damaged in the zip file")
        for notice in unpacked.damaged
    ]
    if hash_in_comment_holds(target) is False:
        faults.append(BagFault(target.name, "is not, byte by byte, the zip file that was sealed"))
    return unpacked.folder, faults


def _named_once(faults: list[BagFault]) -> tuple[BagFault, ...]:
    """Faults with the first of each file alone."""
    first: dict[str, BagFault] = {}
    for fault in faults:
        first.setdefault(fault.file, fault)
    return tuple(first.values())


def _packing_remarks(target: Path) -> list[str]:
    if target.is_dir() or hash_in_comment_holds(target) is not None:
        return []
    return ["another program packed this zip file: its contents are looked at, not its own bytes"]


def recompute_archive(
    found: Verification, progress: Progress | None = None, workshop: Workshop | None = None
) -> Recomputation:
    """Read and analyse the recordings of an unpacked archive again, and compare with what it holds.

    Raises
    ------
    CampaignStops
        Where it holds no recordings, or they cannot be read.
    """
    if found.kind != ARCHIVE:
        what = f"a {found.kind} holds no recordings"
        remedy = "name a sealed archive, or leave out --recompute"
        done = "nothing is computed again"
        raise CampaignStops([Notice("nothing-to-recompute", "stops", None, None, None, what, done, remedy)])
    _, site = make_site(campaign_in(found.folder), None, progress, workshop)
    sealed = sealed_tables(found.folder)
    made = {address.removeprefix(TABLES): site[address] for address in site if address.startswith(TABLES)}
    parts = [sealed.get(name) for name in ("readings.csv", SCHEMA, "fit_certificates.csv")]
    refits = refit_from_readings(*parts) if None not in parts else ()  # type: ignore[arg-type]
    return Recomputation(compare_tables(sealed, made), refits)


def _what_was_read(intake: Intake, notices: tuple[Notice, ...]) -> list[str]:
    return inspection_lines(replace(intake, notices=notices), where=ON_SITE)


def beside(folder: Path, word: str = "report") -> Path:
    """Return where a report of *folder* is written unless said otherwise: FOLDER_report beside it."""
    whole = folder.resolve()
    return whole.with_name(f"{whole.name}_{word}")


def read_campaign(
    folder: Path,
    output: Path | None = None,
    progress: Progress | None = None,
    workshop: Workshop | None = None,
) -> CampaignRead:
    """Read every recording of *folder* once and keep what its trials are reduced to.

    What comes of it is the same, to the last bit, whoever of the *workshop* read it and whenever.

    Raises
    ------
    CampaignStops
        Where the folder cannot be read or no trial can be used.
    """
    intake, features = run_intake(
        folder, reduce_trial, output, progress, keep_put_back=True, workshop=workshop, as_bytes=True
    )
    staircases = {key: found for key, found in features.items() if isinstance(found, StaircaseFeatures)}
    reduced = {key: found for key, found in features.items() if found is not None and key not in staircases}
    others = {key: found for key, found in reduced.items() if key in intake.used}
    aside = {key: found for key, found in reduced.items() if key in intake.put_back}
    notices = [n for k, found in features.items() if found and k in intake.used for n in found.notices]
    sensors_aside = sensors_set_aside(intake)
    readings = _readings(intake, staircases, lambda key: key in intake.used, sensors_aside)
    put_back = _readings(intake, staircases, lambda _: True) if intake.put_back & staircases.keys() else None
    noted = with_notices(intake, [*notices, *readings.notices])
    return CampaignRead(noted, readings, put_back, others, aside)


def sensors_set_aside(intake: Intake) -> frozenset[tuple[str, str]]:
    """Return (module, sensor) of the sensors of which no trial is used although sound ones were read."""
    used = {_sensor(intake, key) for key in intake.used}
    return frozenset(_sensor(intake, key) for key in intake.put_back) - used


def _sensor(intake: Intake, key: TrialKey) -> tuple[str, str]:
    identity = intake.identities[key]
    return identity.module, identity.sensor


def _readings(
    intake: Intake,
    staircases: Mapping[TrialKey, StaircaseFeatures],
    wanted: Callable[[TrialKey], bool],
    sensors_aside: frozenset[tuple[str, str]] = frozenset(),
) -> Readings:
    """Put the readings of wanted trials together; those of sensors aside are in it, marked as not used."""
    parts = [
        found.readings
        for key, found in staircases.items()
        if wanted(key) or _sensor(intake, key) in sensors_aside
    ]
    return collect_readings(parts, sensors_aside)


def analyse(
    read: CampaignRead, progress: Progress | None = None, workshop: Workshop | None = None
) -> CampaignResults:
    """Run every analysis that the readings allow, each fit once."""
    tell = progress or _silent
    intake, description = read.intake, read.intake.description
    calibration = put_back = variance = residuals = effort = None
    if len(read.readings.usable):
        tell("analyses", 0, 4)
        calibration = _calibrate(read.readings, intake)
        put_back = _calibrate(read.readings_with_put_back, intake) if read.readings_with_put_back else None
        tell("analyses", 1, 4)
        variance = analyse_variance(calibration, description, workshop)
        tell("analyses", 2, 4)
        residuals = analyse_residuals(calibration, variance)
        effort = analyse_calibration_effort(calibration, variance, description)
        tell("analyses", 3, 4)
    hysteresis = analyse_hysteresis(read.of_type(CyclicFeatures), calibration)
    endurance = analyse_endurance(read.of_type(EnduranceFeatures).values())
    drift = analyse_drift(read.of_type(HoldFeatures), calibration, description, workshop)
    sweeps = read.of_type(SweepFeatures)
    cycled, laid_out = read.of_type(CyclicFeatures).values(), read.of_type(LayoutFeatures).values()
    logged = [(f.identity, f.logged) for f in cycled if f.logged is not None]
    logged += [(f.identity, f.logged) for f in laid_out if f.logged is not None]
    pressure = analyse_pressure(sweeps, calibration, description, logged)
    influences = analyse_influences(sweeps, calibration, description)
    back = analyse_put_back(read, put_back or calibration, workshop)
    others = [found for found in (hysteresis, drift, pressure) if found is not None]
    readings = read.readings
    if not len(readings.table) and others:
        readings = replace(readings, reference=others[0].reference)
    limits = judge_limits(description, calibration, further=[found.figures for found in others])
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
            *loop_findings(hysteresis, endurance, limits, back.hysteresis),
            *drift_findings(drift, limits, back.drift),
            *influence_findings(pressure, influences, limits, back.pressure),
        ],
        reference=readings.reference,
    )
    analyses = (calibration, variance, residuals, effort, *others, influences)
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
    )


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


def _calibrate(readings: Readings, intake: Intake) -> Calibration:
    return analyse_calibration(readings, intake.description, intake.sensors, intake.file_hashes)


def with_notices(intake: Intake, notices: list[Notice]) -> Intake:
    """Return *intake* with the notices of a later stage added, counted on the recordings they are about."""
    recordings: pd.DataFrame = intake.recordings.copy()
    more = pd.Series([notice.file for notice in notices], dtype="object").value_counts()
    recordings["notices"] += recordings["file"].map(more).fillna(0).astype("int64")
    return replace(intake, recordings=recordings, notices=sort_notices([*intake.notices, *notices]))


def _silent(_what: str, _done: int, _total: int) -> None:
    """Tell nobody."""
