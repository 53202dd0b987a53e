"""The first page of a sealed archive, opened from disk: no script, and a way to the site."""

from __future__ import annotations

from pathlib import Path

import pytest
from selenium.webdriver import Chrome
from selenium.webdriver.common.by import By

from campaign.pages.citation import citation
from campaign.provenance.metadata import gather_metadata
from campaign.provenance.ro_crate import PREVIEW, PREVIEW_FILES, Part, preview_page
from campaign.recordings.description_file import load_description
from tests.browser.chromium import messages
from tests.browser.test_site import axe_violations

pytestmark = pytest.mark.browser

ROOT = Path(__file__).parents[2]


@pytest.fixture(scope="module")
def preview(site: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The page beside the demonstration's site, as they lie in an archive."""
    folder = tmp_path_factory.mktemp("sealed") / "archive – Größe"
    folder.mkdir()
    (folder / PREVIEW_FILES.rstrip("/")).symlink_to(site, target_is_directory=True)
    description = load_description(ROOT / "demo_campaign")
    parts = [Part("tables/", "Tables", "Every table.")]
    page = preview_page(gather_metadata(description, ""), citation(description), parts)
    (folder / PREVIEW).write_bytes(page)
    return folder / PREVIEW


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_the_preview_is_sound_and_leads_to_the_site(browser: Chrome, preview: Path, scheme: str) -> None:
    feature = {"name": "prefers-color-scheme", "value": scheme}
    browser.execute_cdp_cmd("Emulation.setEmulatedMedia", {"features": [feature]})
    browser.get(preview.as_uri())
    assert axe_violations(browser) == []
    assert browser.find_elements(By.TAG_NAME, "script") == []
    assert "invented data" in browser.find_element(By.TAG_NAME, "header").text
    browser.find_element(By.PARTIAL_LINK_TEXT, "Open the report").click()
    assert browser.title.startswith("Findings")
    assert messages(browser) == []


def test_the_preview_needs_no_script_and_fits_a_telephone(browser: Chrome, preview: Path) -> None:
    size = {"width": 390, "height": 800, "deviceScaleFactor": 1, "mobile": False}
    browser.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", size)
    browser.get(preview.as_uri())
    assert browser.execute_script("return document.documentElement.scrollWidth") <= 390
    browser.execute_cdp_cmd("Emulation.setScriptExecutionDisabled", {"value": True})
    browser.get(preview.as_uri())
    assert "Open the report" in browser.find_element(By.TAG_NAME, "main").text
