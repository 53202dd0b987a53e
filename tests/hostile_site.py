"""The site of the hostile campaign, made once a run of the tests: results, files, and their folder."""

from __future__ import annotations

import atexit
import functools
import shutil
import tempfile
from pathlib import Path

from campaign.analyses.results import CampaignResults
from campaign.pages.output import write_folder
from campaign.pipeline import make_site
from tests.hostile_campaign import write_hostile_campaign


@functools.cache
def hostile_space() -> Path:
    """Return a folder of this run; the campaign lies in ``in/campaign``, its site goes to ``out/site``."""
    space = Path(tempfile.mkdtemp(prefix="campaign-hostile-")).resolve()
    atexit.register(shutil.rmtree, space, ignore_errors=True)
    return space


@functools.cache
def hostile_site() -> tuple[CampaignResults, dict[str, bytes]]:
    """Return what was found out of the hostile campaign, and every file of its site by address."""
    campaign = write_hostile_campaign(hostile_space() / "in" / "campaign")
    return make_site(campaign)


@functools.cache
def hostile_folder() -> Path:
    """Return the folder of the written site."""
    folder = hostile_space() / "out" / "site"
    write_folder(hostile_site()[1], folder)
    return folder
