"""What page 0 says of one sensor of one module that a straight line describes badly."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from campaign.pipeline import report

CELL = Path(__file__).parents[1] / "campaigns" / "real" / "soft_capacitive_cell"


@pytest.fixture(scope="module")
def site(tmp_path_factory: pytest.TempPathFactory) -> Path:
    into = tmp_path_factory.mktemp("cell") / "site"
    assert report(CELL, into, False) == 0
    return into


def words(site: Path, page: str) -> str:
    return " ".join(re.sub(r"<[^>]+>", " ", (site / page).read_text(encoding="utf-8")).split())


def test_a_bad_straight_line_is_the_first_finding(site: Path) -> None:
    titles = re.findall(r"<h3[^>]*>(.*?)</h3>", (site / "index.html").read_text(encoding="utf-8"), re.S)
    assert titles[0].startswith(
        "A straight line describes this sensor badly: readings depart from it by up to 31"
    )


def test_a_figure_of_the_only_sensor_carries_its_interval(site: Path) -> None:
    found = words(site, "index.html")
    for figure in ("30.8 [27.1, 34.4]", "39.2 [32.0, 46.4]"):
        assert f"{figure} %FSO in the one sensor" in found


def test_one_sensor_does_not_say_whether_every_sensor_needs_a_line(site: Path) -> None:
    found = words(site, "index.html")
    assert "Every sensor needs a line of its own" not in found
    assert "Whether every sensor needs its own line is not identifiable from this design" in found
    effort = words(site, "calibration_effort.html")
    assert "every lesser effort" not in effort
    assert "does not say whether less would do" in effort
    assert "−1.5 to 6 mm" in effort
