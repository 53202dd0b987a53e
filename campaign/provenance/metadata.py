"""What every catalogue asks of an archive: title, summary, date, licence, authors; gathered once, gaps named.

Nothing is made up. Where the campaign does not say what the metadata formats require, something that is
plainly a stand-in takes the place, and a notice says what to add.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

from campaign.notices import Notice
from campaign.pages.citation import citation_day, origin_of
from campaign.pages.legible import legible
from campaign.pages.page import INVENTED, REHEARSED
from campaign.provenance.licences import Licence, find_licence
from campaign.recordings.description import DESCRIPTION_FILE, Author, Description

STAND_IN_DAY = "1980-01-01"
"""Stands where a date is required and none is known: the first day that a zip file can carry."""

NO_LICENCE = "No licence is stated. Ask the authors before reusing anything of this archive."
NO_AUTHORS = "Authors not given"
_ORCID = re.compile(r"(?:https?://orcid\.org/)?(\d{4})-?(\d{4})-?(\d{4})-?(\d{3}[\dXx])/?")


@dataclass(frozen=True)
class ArchiveMetadata:
    """What the archive is called, whose it is and what may be done with it.

    Attributes
    ----------
    title, summary
        Title of the campaign; what was measured, in a sentence or two.
    day, day_is_known
        ISO day of the campaign or of its last recording; ``False``: a stand-in.
    licence, licence_text
        The licence where it is known here; as the description words it (empty: not stated).
    authors
        Authors with ORCIDs as addresses, empty where none (or no true one) is given.
    origin
        What the recordings are where they were not measured (:data:`campaign.pages.page.REHEARSED` or
        ``INVENTED``); empty where they were.
    notices
        What the description should say and does not.
    """

    title: str
    summary: str
    day: str
    day_is_known: bool
    licence: Licence | None
    licence_text: str
    authors: tuple[Author, ...]
    origin: str
    notices: tuple[Notice, ...]

    @property
    def marked_summary(self) -> str:
        """The summary, and what the recordings are where they were not measured."""
        return " ".join(filter(None, (self.summary, _NOT_MEASURED.get(self.origin, ""))))


_NOT_MEASURED = {
    INVENTED: "The recordings are invented.",
    REHEARSED: "Rehearsal, not measured: the recordings were simulated from a plan.",
}


def gather_metadata(description: Description, summary: str, last_day: str = "") -> ArchiveMetadata:
    """Return the metadata of a campaign's archive.

    Parameters
    ----------
    description
        ``campaign.toml``.
    summary
        What was measured, for a campaign that does not describe itself.
    last_day
        ISO day of the last recording, empty where not recorded.
    """
    day = citation_day(description, last_day)
    licence = find_licence(description.licence)
    authors = tuple(
        Author(legible(author.name), legible(author.affiliation), orcid_address(author.orcid) or "")
        for author in description.authors
        if author.name
    )
    return ArchiveMetadata(
        title=legible(description.title),
        summary=legible(description.description or summary),
        day=day or STAND_IN_DAY,
        day_is_known=bool(day),
        licence=licence,
        licence_text=legible(description.licence),
        authors=authors,
        origin=origin_of(description),
        notices=tuple(_gaps(description, bool(day), licence)),
    )


def orcid_address(text: str) -> str | None:
    """Return the address of an ORCID iD, or ``None`` where its form or check digit is wrong.

    The check digit is that of ISO/IEC 7064, MOD 11-2.
    """
    if (match := _ORCID.fullmatch(text.strip())) is None:
        return None
    digits = "".join(match.groups()).upper()
    total = 0
    for digit in digits[:-1]:
        total = (total + int(digit)) * 2
    check = (12 - total % 11) % 11
    if digits[-1] != ("X" if check == 10 else str(check)):
        return None
    return "https://orcid.org/" + "-".join(digits[k : k + 4] for k in range(0, 16, 4))


def _gaps(description: Description, has_day: bool, licence: Licence | None) -> list[Notice]:
    gaps = []
    if not has_day:
        what = "no date is known: neither the description nor any recording gives one"
        gaps.append(
            _gap("no-date", what, f"{STAND_IN_DAY} stands in", "write date = 2025-03-10 in [campaign]")
        )
    if not description.licence:
        remedy = 'write licence = "CC-BY-4.0", or another SPDX identifier, in [campaign]'
        gaps.append(_gap("no-licence", "no licence is stated", "the archive says so", remedy))
    elif licence is None:
        what = f"'{description.licence}' is no SPDX identifier that is known here"
        remedy = "write an SPDX identifier, such as CC-BY-4.0, if one fits"
        gaps.append(_gap("licence-not-known", what, "it is kept as text", remedy))
    if not any(author.name for author in description.authors):
        remedy = 'write authors = [{ name = "Family, Given", orcid = "…" }] in [campaign]'
        gaps.append(_gap("no-authors", "no author is named", f"'{NO_AUTHORS}' stands in", remedy))
    for author in description.authors:
        if author.orcid and orcid_address(author.orcid) is None:
            what = f"'{author.orcid}' is no ORCID iD (form or check digit)"
            gaps.append(
                _gap("orcid-refused", what, "it is left out", f"look up the ORCID iD of {author.name}")
            )
    return gaps


def _gap(code: str, what: str, done: str, remedy: str) -> Notice:
    return Notice(code, "noted", DESCRIPTION_FILE, None, None, what, done, remedy)
