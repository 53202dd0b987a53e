"""The pages of one small campaign, made once for the tests that print them."""

from __future__ import annotations

import pytest

from campaign.analyses.results import CampaignResults
from campaign.pages.notes import Notes
from campaign.pages.page import Page
from campaign.pages.site import site_pages
from tests.pages.small_campaign import Sketch, small_results


@pytest.fixture(scope="session")
def small_campaign_pages(
    tmp_path_factory: pytest.TempPathFactory,
) -> tuple[CampaignResults, list[Page]]:
    results = small_results(tmp_path_factory.mktemp("campaign") / "c", Sketch(modules=2, runs=2))
    return results, site_pages(results, Notes())
