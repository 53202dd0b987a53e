"""Pages of modules and sensors: made and rendered module by module, by any process."""

from __future__ import annotations

from campaign.pages.module import module_page
from campaign.pages.module_share import AllModules, ModuleShare
from campaign.pages.page import Page
from campaign.pages.sensor import sensor_pages


def pages_of_module(share: ModuleShare, common: AllModules) -> tuple[Page, ...]:
    """Return the page of a module and those of its sensors."""
    return module_page(share, common), *sensor_pages(share, common)
