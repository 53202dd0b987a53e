"""One small invented campaign, sealed once for all tests of the archive."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from campaign.archive import unpack_archive
from campaign.cli import main
from tests.pages.small_campaign import Sketch, write_campaign

SKETCH = Sketch(generations=("first",), modules=2, sensors=("AB", "BC"), sessions=1, runs=2)
CAMPAIGN = """title = "Small invented panels"
description = "Invented panels on an invented stand."
date = 2025-03-10
licence = "CC-BY-4.0"
simulated = true
authors = [
  { name = "Author, Invented", affiliation = "Invented Laboratory", orcid = "0000-0002-1825-0097" },
  { name = "Another Invented Author" },
]"""
EARLIER = """[[earlier]]
folder = "../shelf/before the first"
[[earlier]]
folder = "../../older"
"""


def write_whole_campaign(home: Path) -> Path:
    """Write a campaign with all that may lie in its folder, and two earlier ones outside it."""
    folder = write_campaign(home / "lab" / "panels", SKETCH)
    description = folder / "campaign.toml"
    text = description.read_text("utf-8").replace('title = "Small invented panels"', CAMPAIGN)
    description.write_text(text + EARLIER, encoding="utf-8")
    trials = (folder / "trials.csv").read_text("utf-8").splitlines()
    trials[0] += ",use,reason"
    trials = [trials[0], *(f"{row},," for row in trials[1:-1]), f"{trials[-1]},no,the stand was knocked"]
    (folder / "trials.csv").write_text("\n".join(trials) + "\n", encoding="utf-8")
    for name, content in {
        "certificates/stage 2025.pdf": b"%PDF-1.4 invented",
        "protocol.md": b"# Protocol\n",
        "notes/stand.md": "# The stand\n\nPictures of 名前.\n".encode(),
        "photos/名前 ü.bin": bytes(range(256)),
        "protocol 12:30 | really?.txt": b"A name that one system in three does not take.\n",
    }.items():
        (folder / name).parent.mkdir(exist_ok=True)
        (folder / name).write_bytes(content)
    for name in ("lab/shelf/before the first", "older"):
        (home / name / "trials").mkdir(parents=True)
        (home / name / "campaign.toml").write_text(
            'format = 1\n[campaign]\ntitle = "Older"\n', encoding="utf-8"
        )
        (home / name / "trials" / "M9_AB_staircase_r1.csv").write_bytes(b"length [mm],C [pF]\n60,50\n66,55\n")
    return folder


@pytest.fixture(scope="session")
def campaign_folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_whole_campaign(tmp_path_factory.mktemp("home"))


@pytest.fixture(scope="session")
def sealed(campaign_folder: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The sealed zip file, written by the command."""
    file = tmp_path_factory.mktemp("sealed") / "panels.zip"
    assert main(["seal", str(campaign_folder), "--into", str(file)]) == 0
    return file


@pytest.fixture(scope="session")
def unpacked(sealed: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The archive unpacked; tests only look at it."""
    return unpack_archive(sealed, tmp_path_factory.mktemp("unpacked") / "out")


@pytest.fixture
def copy_of_archive(sealed: Path, tmp_path: Path) -> Callable[[], Path]:
    """A fresh unpacked copy that a test may spoil."""
    return lambda: unpack_archive(sealed, tmp_path / "copy")
