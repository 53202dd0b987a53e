"""The demo campaign's site, written once through the command line, and a Chromium that opens it."""

from __future__ import annotations

import shutil
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
from selenium.webdriver import Chrome

from tests.browser.chromium import MISSING, chromium, driver_path, started

ROOT = Path(__file__).parents[2]


@pytest.fixture(scope="session")
def site(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Folder of the demo campaign's site, its name with a space and letters beyond ASCII."""
    into = tmp_path_factory.mktemp("browser") / "site of the demo – Größe"
    command = [sys.executable, "-m", "campaign", "report", str(ROOT / "demo_campaign"), "--into", str(into)]
    run = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=False)
    assert run.returncode == 0, run.stderr
    return into


@pytest.fixture(scope="session")
def downloads(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Where the browser saves files."""
    return tmp_path_factory.mktemp("downloads")


@pytest.fixture(scope="session")
def running(downloads: Path) -> Iterator[Chrome]:
    """One Chromium for all tests; without it the tests fail and say what to install."""
    if chromium() is None or driver_path() is None:
        pytest.fail(MISSING, pytrace=False)
    driver = started(downloads)
    yield driver
    driver.quit()


@pytest.fixture
def browser(running: Chrome, downloads: Path) -> Chrome:
    """The running Chromium in its first state: light, 1440 px wide, scripts on, nothing saved."""
    running.execute_cdp_cmd("Emulation.setScriptExecutionDisabled", {"value": False})
    running.execute_cdp_cmd("Emulation.setEmulatedMedia", {"features": []})
    size = {"width": 1440, "height": 1000, "deviceScaleFactor": 1, "mobile": False}
    running.execute_cdp_cmd("Emulation.setDeviceMetricsOverride", size)
    running.get("about:blank")
    running.get_log("browser")
    running.get_log("performance")
    for path in downloads.iterdir():
        shutil.rmtree(path) if path.is_dir() else path.unlink()
    return running
