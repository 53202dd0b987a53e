"""A page as a value: what it says, shows and lists, before it is written."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from campaign.pages.figures import Figure
from campaign.pages.tables import Table


@dataclass(frozen=True)
class Page:
    """One page of the site.

    Attributes
    ----------
    slug
        Name of the file without its ending: ``"calibration"``, or one of :mod:`campaign.pages.slugs`.
    number
        Place in the numbered strip (fixed; a missing page leaves a gap), or ``None`` for pages of modules,
        sensors and notes.
    title
        Heading of the page.
    template
        Name of its template in ``site_templates``.
    context
        Values that the template names, beside ``page``, ``site``, ``figures`` and ``tables``.
    figures
        Figures in the order of their numbers; templates place them by name: ``figure(figures.lines)``.
    tables
        Tables that the page shows, placed by name as figures are: ``table(tables.sensor_lines)``.
    data
        Further values for the page's own script, written to ``data/SLUG.js`` (calibration records, say).
    description
        One sentence for search and previews.
    above
        Links of the way up, outermost first, as (text, address); pages of modules and sensors have them.
    previous, following
        Neighbours as (text, address), or ``None``.
    part_of
        File of the page that this one holds a part of: links to anchors there are led here.
    """

    slug: str
    number: int | None
    title: str
    template: str
    context: Mapping[str, object] = field(default_factory=dict)
    figures: tuple[Figure, ...] = ()
    tables: tuple[Table, ...] = ()
    data: Mapping[str, object] = field(default_factory=dict)
    description: str = ""
    above: tuple[tuple[str, str], ...] = ()
    previous: tuple[str, str] | None = None
    following: tuple[str, str] | None = None
    part_of: str = ""

    @property
    def file(self) -> str:
        """Name of the page's file in the site."""
        return f"{self.slug}.html"


REHEARSED = "rehearsal, not measured"
"""What every page, figure, table and record of a rehearsal says."""

INVENTED = "invented data"


@dataclass(frozen=True)
class SiteFrame:
    """What every page of one site shares.

    Attributes
    ----------
    title
        Title of the campaign.
    summary
        The short line above it, in parts: ``("Characterisation campaign", "12 modules", "72 sensors")``.
    invented
        Whether the data are simulated: then every page says so.
    rehearsal
        Whether they were made from a plan: then every page, figure and table says that nothing was measured.
    version
        Version of the program.
    """

    title: str
    summary: tuple[str, ...]
    invented: bool = False
    rehearsal: bool = False
    version: str = ""

    @property
    def origin(self) -> str:
        """What is said of data that were not measured; empty where they were."""
        return REHEARSED if self.rehearsal else INVENTED if self.invented else ""
