"""How to cite the campaign, and sentences that can be pasted into a paper."""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass

from campaign.pages.page import INVENTED, REHEARSED
from campaign.recordings.description import Description


@dataclass(frozen=True)
class Citation:
    """What is needed to cite the campaign.

    Attributes
    ----------
    sentence, bibtex
        The same as a sentence and as an entry of BibTeX.
    availability
        A data-availability sentence, with a place for the address of the deposit.
    missing
        What the description does not give.
    """

    sentence: str
    bibtex: str
    availability: str
    missing: tuple[str, ...]


def citation_day(description: Description, last_day: str = "") -> str:
    """Return the ISO day that the campaign is dated by, empty where none is known; never that of a clock.

    *last_day* is that of the last recording, which serves where the description gives no day.
    """
    given = (description.date, description.last_day, last_day, description.first_day)
    return next((day[:10] for day in given if re.match(r"\d{4}-\d\d-\d\d", day)), "")


def citation(description: Description, last_day: str = "") -> Citation:
    """Return how to cite the campaign from what its description says; no date is ever taken from a clock."""
    year = citation_day(description, last_day)[:4]
    names = [author.name for author in description.authors if author.name]
    who = "; ".join(names) or "Authors not given"
    invented = f" {origin.capitalize()}." if (origin := origin_of(description)) else ""
    licence = f" Licence: {description.licence}." if description.licence else ""
    sentence = (
        f"{who} ({year or 'no date given'}). {description.title} [recordings and report].{invented}{licence}"
    )
    lacking = {"authors": names, "date": year, "licence": description.licence}
    return Citation(
        sentence,
        _bibtex(description, names, year),
        _availability(description),
        tuple(word for word, given in lacking.items() if not given),
    )


DEPOSIT = "[repository, DOI]"
"""Stands where the address of the deposit goes, which nobody knows before it is made."""


def _availability(description: Description) -> str:
    invented = f" ({origin})" if (origin := origin_of(description)) else ""
    licence = f" under {description.licence}" if description.licence else ""
    return (
        f"The recordings of ‘{description.title}’{invented} with their description, all tables, the fitted"
        f" models and the program that made them are deposited as one sealed archive at {DEPOSIT}{licence};"
        " campaign verify --recompute computes every table again from the recordings."
    )


def origin_of(description: Description) -> str:
    """Return what the recordings are where they were not measured; empty where they were."""
    return REHEARSED if description.rehearsal else INVENTED if description.simulated else ""


def _bibtex(description: Description, names: Iterable[str], year: str) -> str:
    given = {
        "author": " and ".join(names),
        "title": description.title,
        "year": year,
        "note": "Recordings and report" + (f", {origin}" if (origin := origin_of(description)) else ""),
    }
    lines = [f"  {key} = {{{_braced(value)}}}," for key, value in given.items() if value]
    return "\n".join([f"@misc{{campaign{year},", *lines, "}"])


def _braced(text: str) -> str:
    """Return *text* for BibTeX: characters with a meaning of their own are set apart."""
    return re.sub(r"([#$%&_{}])", r"\\\1", text.replace("\\", "/"))
