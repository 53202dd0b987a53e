"""Whole reports: the same site, byte for byte, whoever reads the recordings and whatever is known already."""

from __future__ import annotations

import os
import shutil
import signal
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import pytest

from campaign.pages import site as site_pages
from campaign.pipeline import report
from campaign.recordings import reading_step, shared_reading
from campaign.recordings.description import DESCRIPTION_FILE, Description
from campaign.recordings.reading import ReadOutcome, RecordingBytes, read_recordings
from campaign.workers.workshop import open_workshop
from tests.workers.cluster import cluster

DEMO = Path(__file__).parents[1] / "demo_campaign"
TAKEN = (
    "M01/M01_AB_cal_*_s2.csv",
    "M01/M01_AB_loop_r1_s2.csv",
    "M01/M01_AB_hold_r1_s2.csv",
    "M01/M01_inflate_r1_sF.csv",
    "M07/M07_AB_cal_*_s2.csv",
)
"""Recordings of the demonstration that make a small campaign of several kinds."""

CHANGED = "trials/M07/M07_AB_cal_r2_s2.csv"


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    root = tmp_path_factory.mktemp("whole") / "panels"
    for pattern in (DESCRIPTION_FILE, "*.csv", *(f"trials/{name}" for name in TAKEN)):
        for file in DEMO.glob(pattern):
            target = root / file.relative_to(DEMO)
            target.parent.mkdir(parents=True, exist_ok=True)
            shutil.copyfile(file, target)
    return root


def contents(site: Path) -> dict[str, bytes]:
    return {p.relative_to(site).as_posix(): p.read_bytes() for p in site.rglob("*") if p.is_file()}


class Killing:
    """Kills one process when a third of the recordings is read."""

    def __init__(self, process: int) -> None:
        self.process: int | None = process

    def __call__(self, what: str, done: int, total: int) -> None:
        if what == "reading" and done > total / 3 and self.process is not None:
            assert done < total
            os.kill(self.process, signal.SIGKILL)
            self.process = None


@pytest.fixture(scope="module")
def site(folder: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, bytes]:
    """Return the site that this process makes by itself, knowing nothing."""
    into = tmp_path_factory.mktemp("serial") / "site"
    assert report(folder, into, fail_on_set_aside=False) == 0
    return contents(into)


@pytest.fixture
def parsed(monkeypatch: pytest.MonkeyPatch) -> list[str]:
    """Return a list of the recordings that this process parses from now on."""
    files: list[str] = []

    def spy(items: Sequence[RecordingBytes], description: Description) -> list[ReadOutcome]:
        files.extend(item.file for item in items)
        return read_recordings(items, description)

    monkeypatch.setattr(reading_step, "read_recordings", spy)
    return files


def report_with(folder: Path, into: Path, **means: Any) -> dict[str, bytes]:
    with open_workshop(folder, DESCRIPTION_FILE, **means) as workshop:
        assert report(folder, into, fail_on_set_aside=False, workshop=workshop) == 0
    return contents(into)


def test_processes_the_cache_they_fill_and_one_changed_trial_give_the_sites_of_one_process(
    folder: Path,
    site: dict[str, bytes],
    parsed: list[str],
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.setenv("CAMPAIGN_CACHE", str(tmp_path / "cache"))
    monkeypatch.setattr(shared_reading, "SMALLEST_BATCH_BYTES", 1000)
    monkeypatch.setattr(site_pages, "PAGES_WORTH_SHARING", 1)
    assert report_with(folder, tmp_path / "two", workers=2) == site
    assert report_with(folder, tmp_path / "warm") == site
    assert parsed == []

    changed = shutil.copytree(folder, tmp_path / "panels")
    lines = (changed / CHANGED).read_text(encoding="utf-8").splitlines()
    (changed / CHANGED).write_text("\n".join(lines[:-40]) + "\n", encoding="utf-8")
    rebuilt = report_with(changed, tmp_path / "rebuilt")
    assert parsed == [CHANGED]
    assert rebuilt == report_with(changed, tmp_path / "scratch", ignore_cache=True)
    assert rebuilt != site
    assert capsys.readouterr().err == ""


@pytest.mark.filterwarnings("ignore::ResourceWarning:distributed", "ignore::DeprecationWarning:distributed")
def test_a_cluster_that_loses_a_worker_half_way_gives_the_site_of_one_process(
    folder: Path, site: dict[str, bytes], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(shared_reading, "SMALLEST_BATCH_BYTES", 1000)
    with cluster(workers=2) as two:
        killing = Killing(two.workers[0])
        with open_workshop(folder, DESCRIPTION_FILE, dask=two.address, ignore_cache=True) as workshop:
            assert workshop.crew.hands == 2
            report(folder, tmp_path / "cluster", False, killing, workshop)
        assert killing.process is None, "the worker was killed while recordings were read"
    assert contents(tmp_path / "cluster") == site
