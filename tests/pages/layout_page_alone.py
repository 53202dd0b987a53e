"""Page 8 of a small campaign of shapes by itself: the rest of a site would take minutes to fit."""

from __future__ import annotations

from types import SimpleNamespace

import pandas as pd

from campaign.analyses.layout_results import Layout
from campaign.pages.layout import layout_page
from campaign.pages.layout_scripts import layout_scripts
from campaign.pages.page import Page, SiteFrame
from campaign.pages.render import render_site

FRAME = SiteFrame("Invented panels", ("Characterisation campaign",), invented=True)


def results_of(layout: Layout | None, limit_mm: float = 2.0) -> SimpleNamespace:
    """What page 8 reads of the results of a campaign."""
    table = pd.DataFrame({"limit": ["node_error"], "value": [limit_mm], "verdict": ["met"], "sensor": [""]})
    return SimpleNamespace(layout=layout, limits=SimpleNamespace(table=table, of_new_sensors=lambda: table))


def page_of(layout: Layout) -> Page:
    """Page 8."""
    page = layout_page(results_of(layout))  # type: ignore[arg-type]
    assert page is not None
    return page


def site_of(layout: Layout) -> dict[str, bytes]:
    """Page 8 as files, with its scripts."""
    return render_site(FRAME, [page_of(layout)], files=layout_scripts(layout))
