"""Earlier campaigns that a campaign is compared with: found, opened, read, analysed as far as is needed."""

from __future__ import annotations

import math
import tempfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path

from campaign.analyses.drift import analyse_drift
from campaign.analyses.earlier import (
    EarlierCampaign,
    Joined,
    common_full_scale,
    common_upper,
    full_scale_of,
    join,
    reach_of,
    up_to,
    with_full_scale,
)
from campaign.analyses.generation_design import order_of_generations
from campaign.analyses.generation_figures import Comparable, comparable_figures
from campaign.analyses.hysteresis import analyse_hysteresis
from campaign.analyses.pressure import analyse_pressure
from campaign.analyses.variance import fit_generations
from campaign.analyses.variance_fit import GenerationFit
from campaign.archive import campaign_in, unpack_archive
from campaign.campaign_reading import CampaignRead, calibrate, read_campaign, silent
from campaign.notices import CampaignStops, Notice
from campaign.provenance.bag import check_bag
from campaign.recordings.description import DESCRIPTION_FILE, Description
from campaign.recordings.shared_reading import Progress
from campaign.trials.cyclic import CyclicFeatures
from campaign.trials.hold import HoldFeatures
from campaign.trials.readings import Readings
from campaign.trials.sweeps import SweepFeatures
from campaign.workers.workshop import Workshop


def read_earlier(
    folder: Path,
    read: CampaignRead,
    progress: Progress | None = None,
    workshop: Workshop | None = None,
) -> Joined:
    """Read the earlier campaigns that the description of *folder* names, as far as comparison needs them.

    One that cannot be read becomes a notice, and the report goes on without it. Earlier campaigns of an
    earlier campaign are not followed, so that campaigns may name each other.
    """
    tell = progress or silent
    found: list[EarlierCampaign] = []
    notices: list[Notice] = []
    named = read.intake.description.earlier
    taken = {folder.resolve()}
    for number, one in enumerate(named):
        tell("earlier campaigns", number, len(named))
        where = one.get("archive") or one["folder"]
        stands = (folder / where).resolve()  # where an archive is unpacked is new each time
        try:
            if stands in taken:
                raise CampaignStops([_not_joined(where, "is this campaign, or is named twice")])
            with opened_earlier(folder, one) as place:
                taken.add(stands)
                found.append(
                    _earlier_campaign(where, read_campaign(place, workshop=workshop), read, workshop)
                )
                if found[-1].names_others:
                    notices.append(_not_followed(where))
        except CampaignStops as stop:
            first = stop.notices[0]
            known = first.code == NOT_JOINED
            what = first.what.replace(str(folder / where), where)  # no path of this machine in a site
            notices.append(first if known else _not_joined(where, what, first.remedy))
    return join(found, order_of_generations(read.intake), notices)


NOT_JOINED = "earlier-not-joined"


def _not_joined(where: str, what: str, remedy: str = "") -> Notice:
    said = f"{where} {what}" if what.startswith("is ") else f"{where}: {what}"
    done = "the comparison goes on without it"
    return Notice(
        NOT_JOINED, "set aside", DESCRIPTION_FILE, None, None, said, done, remedy or "mend its path"
    )


def _not_followed(where: str) -> Notice:
    what = f"{where} names earlier campaigns of its own"
    remedy = "name them in this campaign's description as well"
    code = "earlier-not-followed"
    return Notice(code, "noted", DESCRIPTION_FILE, None, None, what, "they are not followed", remedy)


def places_of_earlier(folder: Path, description: Description) -> list[Path]:
    """Return where the earlier campaigns that *description* names lie, those within *folder* left out."""
    places = [(folder / (one.get("archive") or one["folder"])).resolve() for one in description.earlier]
    return [place for place in places if not place.is_relative_to(folder.resolve())]


@contextmanager
def opened_earlier(folder: Path, named: Mapping[str, str]) -> Iterator[Path]:
    """Give the folder of an earlier campaign while it is read; a sealed archive is unpacked for that long.

    Raises
    ------
    CampaignStops
        Where a sealed archive is refused or damaged, is not as it was sealed, or holds no campaign.
    """
    if "folder" in named:
        yield folder / named["folder"]
        return
    with tempfile.TemporaryDirectory(prefix="campaign-earlier-") as space:
        home = unpack_archive(folder / named["archive"], Path(space) / "archive")
        if faults := check_bag(home):
            more = f", and {len(faults) - 1} more" if len(faults) > 1 else ""
            what = f"is not as it was sealed: {faults[0].file} {faults[0].wrong}{more}"
            raise CampaignStops([_not_joined(named["archive"], what, "look at it with campaign verify")])
        yield campaign_in(home)


def _earlier_campaign(
    where: str, read: CampaignRead, own: CampaignRead, workshop: Workshop | None
) -> EarlierCampaign:
    """Analyse an earlier campaign as far as comparison needs it, over the range common to both."""
    intake, described = read.intake, own.intake.description
    upper = common_upper(read.readings, own.readings)
    full_scale = common_full_scale(described, read.readings, upper)
    offers = _offers(read, up_to(read.readings, upper), full_scale, workshop)
    further = reach_of(own.readings) > upper  # never where upper is not a number
    used = intake.trials[intake.trials["fate"] == "used"]
    stated = intake.description.range_strain, intake.description.range_elongation_mm
    return EarlierCampaign(
        where=where,
        title=intake.description.title,
        simulated=intake.description.simulated,
        order=order_of_generations(intake),
        offers=offers,
        recordings=int(used["file"].nunique()),
        modules=len(used.drop_duplicates(["generation", "module"])),
        sensors=len(used.drop_duplicates(["generation", "module", "sensor"])),
        hashes=intake.file_hashes,
        full_scale=full_scale_of(offers),
        rescaled=not math.isnan(full_scale) and full_scale not in stated,
        upper=upper,
        restricted=_offers(replace(own, features={}), up_to(own.readings, upper), upper, workshop)
        if further
        else None,
        names_others=bool(intake.description.earlier),
    )


def _offers(
    read: CampaignRead, readings: Readings, full_scale: float, workshop: Workshop | None
) -> Comparable:
    """Return the headline figures of a campaign by *readings*, full scale as given (NaN: as described)."""
    description = with_full_scale(read.intake.description, readings.reference, full_scale)
    intake = replace(read.intake, description=description)
    calibration = calibrate(readings, intake, workshop) if len(readings.usable) else None
    fits: tuple[GenerationFit, ...] = ()
    uneven: frozenset[str] = frozenset()
    if calibration is not None:
        fits, uneven = fit_generations(calibration.readings, calibration.reference, description, workshop)
    return comparable_figures(
        description,
        intake.used_identities,
        calibration,
        fits,
        uneven,
        analyse_hysteresis(read.of_type(CyclicFeatures), calibration),
        analyse_drift(read.of_type(HoldFeatures), calibration, description, workshop),
        analyse_pressure(read.of_type(SweepFeatures), calibration, description),
    )
