"""A report of which nothing changed since it was made: written as it was, with nothing loaded that makes one.

Loading all that reads, analyses and draws takes longer than writing a site that is there already.
"""

from __future__ import annotations

import sys
from pathlib import Path

from campaign.keeping.kept_site import MadeSite, SiteKeeper
from campaign.pages.output import check_ours, write_folder
from campaign.pages.templates import templates_folder
from campaign.workers.workshop import Workshop

DONE, SET_ASIDE = 0, 1


def beside(folder: Path, word: str = "report") -> Path:
    """Return where a report of *folder* is written unless said otherwise: FOLDER_report beside it."""
    whole = folder.resolve()
    return whole.with_name(f"{whole.name}_{word}")


def keeper_of(folder: Path, into: Path | None, workshop: Workshop) -> SiteKeeper:
    """Return who keeps the site of *folder* that is written to *into* (beside it where ``None``).

    Raises
    ------
    CampaignStops
        Where the output folder is not ours.
    """
    site = into if into is not None else beside(folder)
    check_ours(site)
    return SiteKeeper(workshop.store, folder, site, templates_folder())


def write_kept(keeper: SiteKeeper, fail_on_set_aside: bool) -> int | None:
    """Write the site that an earlier run made of the very same content.

    Returns
    -------
    int or None
        Exit status: 0 done, 1 done with something set aside; ``None`` where there is no such site.
    """
    made = keeper.find()
    return None if made is None else write_made(made, keeper.site, fail_on_set_aside)


def write_made(made: MadeSite, site: Path, fail_on_set_aside: bool) -> int:
    """Write a site whole or not at all, say what was read, and return the exit status."""
    write_folder(made.files, site)
    sys.stdout.write(made.said)
    print(f"\n{len(made.files)} files written; open {site / 'index.html'}")
    return SET_ASIDE if fail_on_set_aside and made.set_aside else DONE
