"""Chromium from disk: how it is found, started and listened to."""

from __future__ import annotations

import json
import shutil
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any
from urllib.parse import quote, unquote, urlsplit

from selenium.webdriver import Chrome, ChromeOptions
from selenium.webdriver.chrome.service import Service

MISSING = (
    "The browser tests need Chromium and its driver: "
    "on Debian and Ubuntu, apt-get install chromium chromium-driver"
)

FLAGS = (
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--disable-dev-shm-usage",
    "--hide-scrollbars",
    "--window-size=1440,1000",
)


def chromium() -> str | None:
    """Path of Chromium, ``None`` where there is none."""
    return next(
        (path for name in ("chromium", "chromium-browser", "google-chrome") if (path := shutil.which(name))),
        None,
    )


def driver_path() -> str | None:
    """Path of its driver, ``None`` where there is none."""
    return shutil.which("chromedriver")


def started(downloads: Path) -> Chrome:
    """Start Chromium with a profile of its own that saves to *downloads* and keeps its logs."""
    options = ChromeOptions()
    options.binary_location = chromium() or ""
    for flag in (*FLAGS, f"--user-data-dir={downloads.parent / f'{downloads.name}_profile'}"):
        options.add_argument(flag)
    options.add_experimental_option(
        "prefs",
        {
            "download.default_directory": str(downloads),
            "download.prompt_for_download": False,
            "profile.default_content_setting_values.automatic_downloads": 1,
        },
    )
    options.set_capability("goog:loggingPrefs", {"browser": "ALL", "performance": "ALL"})
    options.page_load_strategy = "normal"
    driver = Chrome(options=options, service=Service(driver_path()))
    driver.set_script_timeout(60)
    return driver


def address(path: Path, hash_part: str = "") -> str:
    """The ``file://`` address of a file."""
    return f"file://{quote(str(path))}{hash_part}"


def messages(driver: Chrome) -> list[str]:
    """What the console said since it was last asked."""
    return [f"{entry['level']}: {entry['message']}" for entry in driver.get_log("browser")]


def requests(driver: Chrome) -> list[str]:
    """Every address asked for since this was last asked, but data: and blob:, which hold their content."""
    asked = []
    for entry in driver.get_log("performance"):
        message = json.loads(entry["message"])["message"]
        if message["method"] == "Network.requestWillBeSent":
            asked.append(message["params"]["request"]["url"])
    return [url for url in asked if not url.startswith(("data:", "blob:", "about:"))]


def outside(urls: list[str], folder: Path) -> list[str]:
    """Those of *urls* that do not lie in *folder*."""
    inside = f"{folder}/"
    return [
        u for u in urls if not (u.startswith("file:///") and unquote(urlsplit(u).path).startswith(inside))
    ]


def wait_for(condition: Callable[[], Any], what: str, seconds: float = 45.0) -> Any:
    """Return what *condition* gives once that is true; fail with *what* otherwise."""
    end = time.monotonic() + seconds
    while time.monotonic() < end:
        if result := condition():
            return result
        time.sleep(0.05)
    raise AssertionError(f"never came: {what}")
