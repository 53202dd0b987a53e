"""How large a site is, what its pages cost to make, and how soon a reader sees them.

Run as ``python benchmarks/page_load.py`` (some three minutes; ``--pages`` says how large the large site is,
``--repeats`` how often a page is opened). The demonstration is analysed once, which is not counted, and its
pages of modules and sensors are repeated under new names until they are a site of that size. Then one page of
every kind is opened from disk in headless Chromium: first contentful paint, first live figure, further ones,
layout shift, requests outside the folder, messages. Seconds are this machine's; the budgets beside them are
those of the design.
"""

from __future__ import annotations

import argparse
import os
import platform
import statistics
import sys
import tempfile
import time
import zipfile
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise
from pathlib import Path

os.environ.setdefault("OMP_NUM_THREADS", "1")
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
ROOT = Path(__file__).parents[1]
sys.path.insert(0, str(ROOT))

from campaign.analyses.results import CampaignResults  # noqa: E402
from campaign.pages.notes import Notes, make_notes, read_note_files  # noqa: E402
from campaign.pages.output import write_folder  # noqa: E402
from campaign.pages.page import Page  # noqa: E402
from campaign.pages.render import render_site  # noqa: E402
from campaign.pages.site import build_site, site_frame, site_pages  # noqa: E402
from campaign.pages.site_tables import site_tables  # noqa: E402
from campaign.pipeline import analyse, read_campaign  # noqa: E402
from tests.browser.chromium import messages, outside, requests, started  # noqa: E402

KINDS = ("index", "calibration", "variance", "residuals", "hysteresis", "drift", "pressure")
KINDS_OF_PARTS = ("method-lines", "module-M01", "sensor-M01-AB")
MEGABYTE = 1e6
HEAD = "| what | measured | budget |\n|---|---|---|"


@dataclass(frozen=True)
class Opened:
    """What opening one page once measured: seconds, the largest shift, requests outside, messages."""

    first_paint: float
    first_live: float
    further_live: float
    shift: float
    outside: int
    messages: int


def large_site_pages(pages: Sequence[Page], wanted: int) -> list[Page]:
    """Return *pages* with copies of those of modules and sensors in turn, *wanted* in all."""
    copied = [page for page in pages if page.slug.startswith(("module-", "sensor-"))]
    more = range(max(wanted - len(pages), 0))
    copies = [replace(copied[i % len(copied)], slug=f"{copied[i % len(copied)].slug}-copy-{i}") for i in more]
    return [*pages, *copies]


def sizes(files: Mapping[str, bytes]) -> list[tuple[str, str, str]]:
    """Return what a site weighs, whole and zipped, and its largest page and data script."""
    pages = {name: len(content) for name, content in files.items() if name.endswith(".html")}
    scripts = {n: len(c) for n, c in files.items() if n.startswith("data/")}
    page, script = max(pages, key=lambda n: pages[n]), max(scripts, key=lambda n: scripts[n])
    return [
        ("whole", f"{sum(map(len, files.values())) / MEGABYTE:.1f} MB", "< 40 MB"),
        ("zipped", f"{zipped_size(files) / MEGABYTE:.1f} MB", "< 14 MB"),
        (f"largest page, {page}", f"{pages[page] / 1000:.1f} kB", "< 60 kB"),
        (f"largest data script, {script}", f"{scripts[script] / 1000:.1f} kB", "< 120 kB"),
    ]


def zipped_size(files: Mapping[str, bytes]) -> int:
    """Return the bytes of a zip file of *files*."""
    with tempfile.TemporaryFile() as zipped:
        with zipfile.ZipFile(zipped, "w", zipfile.ZIP_DEFLATED, compresslevel=6) as archive:
            for name, content in files.items():
                archive.writestr(name, content)
        return zipped.tell()


def in_proportion(files: Mapping[str, bytes], own: Mapping[str, bytes], ratio: float) -> dict[str, bytes]:
    """Return the files of the large site with rows of tables and records in proportion to its sensors.

    Copies of pages bring no rows, records and loops of their own: those of the demonstration stand in.
    """
    grown = {name: content for name, content in files.items() if not name.startswith("tables/")}
    for name, content in own.items():
        if name == "tables/schema.json":
            grown[name] = content
        elif name.startswith(("tables/", "records/")) or (name.startswith("data/") and name not in files):
            for turn in range(round(ratio)):
                grown[f"{name}-{turn}"] = content[: round(len(content) * ratio / round(ratio))]
    return grown


def opened(browser: object, page: Path, site: Path) -> Opened:
    """Open a page from disk and wait until every figure is live."""
    get, run = browser.get, browser.execute_script  # type: ignore[attr-defined]
    get("about:blank")
    messages(browser)
    requests(browser)
    get(page.as_uri())
    run(
        """window.shifts = 0;
           new PerformanceObserver(list => { for (const e of list.getEntries()) window.shifts += e.value; })
             .observe({ type: 'layout-shift', buffered: true });"""
    )
    figures = run("return document.querySelectorAll('figure[data-figure]').length")
    lives = []
    for index in range(figures):
        run("document.querySelectorAll('figure[data-figure]')[arguments[0]].scrollIntoView()", index)
        lives.append(_live_at(run, index))
    paint = run("return performance.getEntriesByName('first-contentful-paint').map(e => e.startTime)[0]")
    steps = [after - before for before, after in pairwise(lives)]
    return Opened(
        paint / 1000 if paint else float("nan"),
        lives[0] if lives else float("nan"),
        statistics.median(steps) if steps else float("nan"),
        float(run("return window.shifts")),
        len(outside(requests(browser), site)),
        len(messages(browser)),
    )


def _live_at(run: object, index: int) -> float:
    """Return when a figure was first seen live, in seconds since the page began to load."""
    script = """const figure = document.querySelectorAll('figure[data-figure]')[arguments[0]];
                return figure.dataset.state === 'live' ? performance.now() / 1000 : 0"""
    end = time.monotonic() + 60
    while time.monotonic() < end:
        if seen := run(script, index):  # type: ignore[operator]
            return float(seen)
        time.sleep(0.01)
    raise TimeoutError(f"figure {index} never came to life")


def analysed() -> tuple[CampaignResults, Notes]:
    """Return the results of the demonstration, and its notes."""
    folder = ROOT / "demo_campaign"
    return analyse(read_campaign(folder)), make_notes(read_note_files(folder))


def making(results: CampaignResults, notes: Notes, pages: int) -> dict[str, bytes]:
    """Print what the demonstration's pages and a large site cost and weigh; return the demonstration."""
    clock = time.process_time
    began = clock()
    own = site_pages(results, notes)
    made = clock() - began
    demonstration = build_site(results, notes)
    drawn = sum(len(page.figures) for page in own)
    print(f"\n## The demonstration: {len(own)} pages, {drawn} figures\n\n{HEAD}")
    print(f"| pages made of the results, one core | {made:.1f} s | |")
    for row in sizes(demonstration):
        print("| {} | {} | {} |".format(*row))
    large = large_site_pages(own, pages)
    of_one = sum(page.slug.startswith(("module-", "sensor-")) for page in own)
    ratio = sum(page.slug.startswith(("module-", "sensor-")) for page in large) / of_one
    tables, drawn = site_tables(results, own), sum(len(page.figures) for page in large)
    began = clock()
    files = render_site(site_frame(results), large, tables, reference=results.readings.reference)
    rendered = clock() - began
    print(f"\n## A site of {len(large)} pages and {drawn} figures\n\n{HEAD}")
    print(f"| pages rendered, one core | {rendered:.1f} s | < 6 s |")
    print(f"| pages made, in proportion | {made * ratio:.1f} s | |")
    for row in sizes(in_proportion(files, demonstration, ratio)):
        print("| {} | {} | {} |".format(*row))
    return demonstration


def opening(files: dict[str, bytes], repeats: int) -> None:
    """Print what opening one page of every kind costs, medians over *repeats*."""
    with tempfile.TemporaryDirectory() as scratch:
        site, downloads = Path(scratch) / "site", Path(scratch) / "downloads"
        downloads.mkdir()
        write_folder(files, site)
        browser = started(downloads)
        try:
            print("\n## Opened from disk, medians\n")
            print("| page | first paint | first live figure | each further | shift | outside | messages |")
            print("|---|---|---|---|---|---|---|")
            for slug in (*KINDS, *KINDS_OF_PARTS):
                page = site / f"{slug}.html"
                if not page.is_file():
                    continue
                found = [opened(browser, page, site) for _ in range(repeats)]
                medians = [statistics.median(getattr(one, key) for one in found) for key in _TIMES]
                shift = max(one.shift for one in found)
                asked, said = max(one.outside for one in found), max(one.messages for one in found)
                shown = " | ".join("–" if v != v else f"{v:.2f} s" for v in medians)
                print(f"| {slug} | {shown} | {shift:.4f} | {asked} | {said} |")
            print("| budget | < 0.5 s | < 3.5 s | < 0.2 s | < 0.01 | 0 | 0 |")
        finally:
            browser.quit()


_TIMES = ("first_paint", "first_live", "further_live")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--pages", type=int, default=300)
    parser.add_argument("--repeats", type=int, default=3)
    options = parser.parse_args()
    machine = f"{platform.machine()}, {os.cpu_count()} cores, {platform.system()}"
    print(f"{machine}, Python {platform.python_version()}")
    results, notes = analysed()
    files = making(results, notes, options.pages)
    opening(files, options.repeats)


if __name__ == "__main__":
    main()
