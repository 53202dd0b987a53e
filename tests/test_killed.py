"""A report killed at any moment leaves the old site whole or the new one whole, and the next run succeeds."""

from __future__ import annotations

import os
import random
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from campaign.pages.exchange import exchange_folders
from campaign.pages.output import write_folder
from tests.killed_reports import files_of
from tests.pages.small_campaign import Sketch, write_campaign

ROOT = Path(__file__).parents[1]
HARNESS = Path(__file__).with_name("killed_reports.py")
SMALL = Sketch(generations=("g",), modules=2, sensors=("AB",), sessions=1, both_branches=False, limits="")
KILLED_WRITERS, KILLED_PROGRAMS = 45, 5
NAMES = ("first", "second")

Sites = dict[str, dict[str, bytes]]


def report(work: Path, name: str, into: Path) -> subprocess.Popen[bytes]:
    """Start the command line on one of the campaigns; what was read once is kept for the next run."""
    return subprocess.Popen(
        [sys.executable, "-m", "campaign", "report", str(work / name), "--into", str(into)],
        env={**os.environ, "PYTHONPATH": str(ROOT), "CAMPAIGN_CACHE": str(work / "cache")},
        cwd=ROOT,
        stdout=subprocess.DEVNULL,
        stderr=subprocess.DEVNULL,
    )


@pytest.fixture(scope="module")
def work(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Two small campaigns, ``first`` and ``second``, and their whole sites in ``whole``."""
    work = tmp_path_factory.mktemp("killed")
    for seed, name in enumerate(NAMES):
        write_campaign(work / name, SMALL, seed)
        assert report(work, name, work / "whole" / name).wait() == 0
    return work


@pytest.fixture(scope="module")
def sites(work: Path) -> Sites:
    """What the site of each campaign holds when nobody kills its report."""
    made = {name: files_of(work / "whole" / name) for name in NAMES}
    assert made["first"] != made["second"]
    return made


def whose(site: Path, sites: Sites) -> str:
    """Which campaign's whole site lies there; fails where it is neither's, or parts of both."""
    found = files_of(site)
    names = [name for name, content in sites.items() if content == found]
    assert names, sorted(found)[:5]
    return names[0]


def kills(work: Path, site: Path) -> Iterator[tuple[str, int]]:
    """Run the harness; gives the campaign of each killed writer and the signal that ended it."""
    whole = [str(work / "whole" / name) for name in NAMES]
    with subprocess.Popen(
        [sys.executable, str(HARNESS), str(site), "20250811", str(KILLED_WRITERS), *whole],
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        cwd=ROOT,
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        text=True,
    ) as harness:
        assert harness.stdin is not None
        assert harness.stdout is not None
        for line in harness.stdout:
            name, ended_by = line.split()
            yield name, int(ended_by)
            harness.stdin.write("on\n")
            harness.stdin.flush()
    assert harness.returncode == 0


def test_sites_killed_while_they_are_written(work: Path, sites: Sites) -> None:
    site = work / "writers" / "site"
    before, outcomes, killed, seen = "second", set(), 0, 0
    for name, ended_by in kills(work, site):
        now = whose(site, sites)
        assert now in (before, name)
        if name != before:
            outcomes.add("new" if now == name else "old")
        before, killed, seen = now, killed + (ended_by == 9), seen + 1
    assert seen == KILLED_WRITERS
    assert killed == KILLED_WRITERS
    assert outcomes == {"old", "new"}
    write_folder(sites["first"], site)
    assert whose(site, sites) == "first"
    assert [path.name for path in site.parent.iterdir()] == ["site"]


def test_programs_killed_at_any_moment_of_their_run(work: Path, sites: Sites) -> None:
    """The command line itself, from its first import on; the last run is killed as soon as it writes."""
    site = work / "programs" / "site"
    draw = random.Random(20250812)
    begun = time.perf_counter()
    assert report(work, "first", site).wait() == 0
    whole, before = time.perf_counter() - begun, "first"
    for number in range(KILLED_PROGRAMS):
        name = NAMES[(number + 1) % 2]
        run = report(work, name, site)
        if number < KILLED_PROGRAMS - 1:
            time.sleep((number + draw.random()) * whole / (KILLED_PROGRAMS - 1))
        else:
            until_it_writes(run, site)
        run.kill()
        run.wait()
        now = whose(site, sites)
        assert now in (before, name)
        before = now
    assert report(work, "second", site).wait() == 0
    assert whose(site, sites) == "second"
    assert [path.name for path in site.parent.iterdir()] == ["site"]


def until_it_writes(run: subprocess.Popen[bytes], site: Path) -> None:
    """Wait until a run has begun to write beside the site, or has ended."""
    aside = site.with_name(f".{site.name}.new")
    while run.poll() is None and not aside.exists():
        time.sleep(0.001)


def test_folders_are_exchanged_in_one_step_where_the_system_can(tmp_path: Path) -> None:
    for name in NAMES:
        (tmp_path / name).mkdir()
        (tmp_path / name / name).touch()
    expected = "second" if exchange_folders(tmp_path / "first", tmp_path / "second") else "first"
    assert [path.name for path in (tmp_path / "first").iterdir()] == [expected]
    assert not exchange_folders(tmp_path / "first", tmp_path / "missing")
