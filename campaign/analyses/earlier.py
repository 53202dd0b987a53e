"""Earlier campaigns joined for comparison: what is kept of each, and the names their generations go by."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace

import pandas as pd

from campaign.analyses.generation_figures import FULL_SCALE, REACH, Comparable
from campaign.analyses.generations import CONDITION_TOLERANCE, Source
from campaign.notices import Notice
from campaign.recordings.description import Description
from campaign.recordings.recording import ReferenceQuantity
from campaign.trials.readings import Readings


@dataclass(frozen=True)
class EarlierCampaign:
    """One earlier campaign as far as comparison needs it.

    Attributes
    ----------
    where
        Folder or archive as ``[[earlier]]`` names it.
    title
        Its title.
    simulated
        Whether its data are invented.
    order
        Its generations, oldest first, by the names they go by in the comparison.
    offers
        Its headline figures, generations under the same names.
    recordings, modules, sensors
        Numbers used.
    hashes
        File → SHA-256 of the bytes of every file that was opened.
    full_scale
        Full scale that its per cent figures refer to here, units of the reference; NaN where it has none.
    rescaled
        Whether its own stated full scale was another.
    upper
        Up to where both campaigns read, where one reads further; NaN where they read alike.
    restricted
        Staircase figures of this campaign up to there; ``None`` where it reads no further.
    names_others
        Whether it names earlier campaigns of its own.
    """

    where: str
    title: str
    simulated: bool
    order: tuple[str, ...]
    offers: Comparable
    recordings: int
    modules: int
    sensors: int
    hashes: Mapping[str, str]
    full_scale: float
    rescaled: bool
    upper: float = math.nan
    restricted: Comparable | None = None
    names_others: bool = False


@dataclass(frozen=True)
class Joined:
    """All earlier campaigns that could be read, under unique names, and what is to be said of the others."""

    campaigns: tuple[EarlierCampaign, ...] = ()
    notices: tuple[Notice, ...] = ()


def common_upper(earlier: Readings, own: Readings) -> float:
    """Return up to which value of the reference both campaigns read, where one reads further; else NaN.

    NaN too where they have different references, or one has no readings.
    """
    if earlier.reference != own.reference or not (len(earlier.usable) and len(own.usable)):
        return math.nan
    reached = reach_of(earlier), reach_of(own)
    apart = abs(reached[0] - reached[1]) > CONDITION_TOLERANCE * max(map(abs, reached))
    return min(reached) if apart else math.nan


def reach_of(readings: Readings) -> float:
    """Return how far the usual (median) sensor was read, in units of the reference."""
    usable = readings.usable
    return float(usable.groupby(["generation", "module", "sensor"])["x"].max().median())


def up_to(readings: Readings, upper: float) -> Readings:
    """Return the readings up to *upper*, and a fiftieth of it beyond; all of them where it is NaN."""
    if math.isnan(upper):
        return readings
    kept = readings.table["x"] <= upper + 0.02 * abs(upper)
    return replace(readings, table=readings.table[kept].reset_index(drop=True))


def with_full_scale(description: Description, reference: ReferenceQuantity, full_scale: float) -> Description:
    """Return the description with another rated range (NaN: as it is); lengths have none."""
    if math.isnan(full_scale) or reference.name == "length":
        return description
    if reference.name == "strain":
        return replace(description, range_strain=full_scale)
    return replace(description, range_elongation_mm=full_scale)


def common_full_scale(own: Description, readings: Readings, upper: float) -> float:
    """Return the full scale that both campaigns' per cent refer to; NaN where each keeps its own.

    This campaign's rated range where both reach it, else as far as both reach: never extrapolated.

    Parameters
    ----------
    own
        Rated range of this campaign.
    readings
        Of the earlier campaign.
    upper
        What :func:`common_upper` gave.
    """
    rated = own.range_strain if readings.reference.name == "strain" else own.range_elongation_mm
    if not len(readings.usable):
        return math.nan
    reached = upper if math.isfinite(upper) else reach_of(readings)
    if math.isfinite(rated) and rated <= 1.02 * reached:
        return rated
    return upper


def at_common_range(restricted: Comparable, whole: Comparable) -> Comparable:
    """Return what a campaign offers over the range common with another one.

    Parameters
    ----------
    restricted
        Figures of its staircases over that range.
    whole
        All its figures: those that staircases do not give are taken from here, per cent of full-scale output
        referred to the other full scale.
    """
    scales = [offers.conditions.get(FULL_SCALE, math.nan) for offers in (whole, restricted)]
    others = whole.values[~whole.values["figure"].isin(set(restricted.values["figure"]))]
    percent = others["unit"].astype(str).str.startswith("%FSO")
    factor = percent.map({True: scales[0] / scales[1], False: 1.0})
    rescaled = others.assign(value=others["value"] * factor, noise=others["noise"] * factor)
    values = pd.concat([restricted.values, rescaled], ignore_index=True)
    reach = {REACH: whole.conditions[REACH]} if REACH in whole.conditions else {}
    return replace(
        restricted, values=values, conditions={**whole.conditions, **restricted.conditions, **reach}
    )


def full_scale_of(offers: Comparable) -> float:
    """Return the full scale that figures in %FSO refer to; NaN where there is none."""
    return offers.conditions.get(FULL_SCALE, math.nan)


def unique_labels(own: Iterable[str], campaigns: Sequence[tuple[str, Iterable[str]]]) -> list[dict[str, str]]:
    """Return the names that generations of earlier campaigns go by.

    Parameters
    ----------
    own
        Generations of this campaign; they keep their names.
    campaigns
        Title and generations of each earlier campaign, in order.

    Returns
    -------
    list of dict
        Name → name in the comparison: the name itself where nobody else has it, else with the campaign's
        title, and a number where that is not enough.
    """
    named = [(title, list(names)) for title, names in campaigns]
    everyone = [*own, *(name for _, names in named for name in names)]
    taken = set(own)
    labels = []
    for title, names in named:
        mapped = {}
        for name in names:
            label = name if everyone.count(name) == 1 else f"{name} ({title})"
            number = 2
            while label in taken:
                label, number = f"{name} ({title}, {number})", number + 1
            taken.add(label)
            mapped[name] = label
        labels.append(mapped)
    return labels


def join(campaigns: Sequence[EarlierCampaign], own: Iterable[str], notices: Iterable[Notice] = ()) -> Joined:
    """Return the campaigns with unique names of generations, and a notice for each name that was changed.

    Parameters
    ----------
    campaigns
        As read, in the order in which they are named.
    own
        Generations of this campaign.
    notices
        What was said of those that were not read.
    """
    labels = unique_labels(own, [(c.title, c.order) for c in campaigns])
    renamed = [
        Notice(
            "earlier-renamed",
            "noted",
            None,
            None,
            None,
            f"'{name}' of {campaign.where} is the name of another generation too",
            f"it is called '{label}' in the comparison",
        )
        for campaign, mapped in zip(campaigns, labels, strict=True)
        for name, label in mapped.items()
        if name != label
    ]
    made = tuple(
        replace(c, order=tuple(mapped[n] for n in c.order), offers=c.offers.renamed(mapped))
        for c, mapped in zip(campaigns, labels, strict=True)
    )
    rescaled = [
        Notice(
            "earlier-rescaled",
            "noted",
            None,
            None,
            None,
            f"{campaign.where} states another full scale",
            "its figures in %FSO refer to the full scale common to both",
        )
        for campaign in campaigns
        if campaign.rescaled
    ]
    return Joined(made, (*notices, *renamed, *rescaled))


def sources_of(earlier: Iterable[EarlierCampaign], title: str, own: Comparable) -> list[Source]:
    """Return all campaigns as parts of one comparison, this one last."""
    made = [
        Source(
            one.title, one.offers, None if one.restricted is None else at_common_range(one.restricted, own)
        )
        for one in earlier
    ]
    return [*made, Source(title, own)]
