"""Earlier campaigns joined for comparison: what is kept of each, and the names their generations go by."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

from campaign.analyses.generation_figures import FULL_SCALE, Comparable
from campaign.analyses.generations import Source
from campaign.notices import Notice
from campaign.recordings.description import Description

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration


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
        Whether its own stated full scale was another, and this campaign's was taken.
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
    names_others: bool = False


@dataclass(frozen=True)
class Joined:
    """All earlier campaigns that could be read, under unique names, and what is to be said of the others."""

    campaigns: tuple[EarlierCampaign, ...] = ()
    notices: tuple[Notice, ...] = ()


def with_common_full_scale(
    earlier: Description, own: Description, calibration: Calibration | None
) -> tuple[Description, bool]:
    """Return the description of an earlier campaign with this campaign's rated range, and whether it changed.

    Only where its readings reach that range: full scale is never extrapolated. Then its figures in %FSO refer
    to the common full scale.
    """
    if calibration is None or calibration.sensor_lines.empty:
        return earlier, False
    name = "range_strain" if calibration.reference.name == "strain" else "range_elongation_mm"
    wanted, stated = getattr(own, name), getattr(earlier, name)
    lines = calibration.sensor_lines
    reached = float(lines["strain_high"].groupby([lines["module"], lines["sensor"]]).max().median())
    near = 0.02 * (reached - float(lines["strain_low"].min()))
    if not math.isfinite(wanted) or wanted == stated or wanted > reached + near:
        return earlier, False
    return replace(earlier, **{name: wanted}), True


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
            "its figures in %FSO refer to that of this campaign",
        )
        for campaign in campaigns
        if campaign.rescaled
    ]
    return Joined(made, (*notices, *renamed, *rescaled))


def sources_of(earlier: Iterable[EarlierCampaign], title: str, own: Comparable) -> list[Source]:
    """Return all campaigns as parts of one comparison, this one last."""
    return [*(Source(campaign.title, campaign.offers) for campaign in earlier), Source(title, own)]
