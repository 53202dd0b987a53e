"""The brief: one file, its own style by its hash, nothing that runs, links or asks."""

from __future__ import annotations

import base64
import hashlib
import re
from pathlib import Path

import pytest

from campaign.analyses.results import CampaignResults
from campaign.cli import main
from campaign.notices import CampaignStops
from campaign.pages.brief import LARGEST, MARK, brief_bytes, check_brief_place, write_brief
from campaign.pages.page import Page
from campaign.pages.site import site_frame

REAL = Path(__file__).parents[1] / "campaigns" / "real"


@pytest.fixture(scope="module")
def brief(small_campaign_pages: tuple[CampaignResults, list[Page]]) -> str:
    results, pages = small_campaign_pages
    content = brief_bytes(site_frame(results), pages)
    assert len(content) < LARGEST
    return content.decode("utf-8")


def test_the_policy_allows_its_one_style_by_its_hash_and_nothing_else(brief: str) -> None:
    (style,) = re.findall(r"<style>(.*?)</style>", brief, re.DOTALL)
    digest = base64.b64encode(hashlib.sha256(style.encode()).digest()).decode()
    (policy,) = re.findall(r'Content-Security-Policy" content="([^"]*)"', brief)
    assert policy == f"default-src 'none'; style-src 'sha256-{digest}'; base-uri 'none'; form-action 'none'"


def test_nothing_of_it_runs_links_or_asks(brief: str) -> None:
    body = brief.split("</style>")[1]
    tags = set(re.findall(r"<([a-zA-Z]\w*)", body))
    assert not tags & {"a", "script", "link", "img", "iframe", "form", "input", "button", "style", "object"}
    attributes = set(re.findall(r"\s([\w:-]+)=\"", " ".join(re.findall(r"<[^>]*>", body))))
    assert not attributes & {"href", "src", "style", "action", "srcset"}
    assert not any(name.startswith("on") for name in attributes)
    assert "url(" not in brief.split("clip-path")[0]


def test_it_holds_findings_limits_caution_and_the_first_figure_of_every_page(brief: str) -> None:
    assert "Before using these figures." in brief
    assert "What was found" in brief
    figures = re.findall(r'<figure class="figure" id="([^"]+)"', brief)
    assert "figure-calibration-lines" in figures
    assert len(figures) >= 3
    assert brief.count('<svg viewBox="0 0 8640') == len(figures)
    ids = re.findall(r'\sid="([^"]+)"', brief)
    assert len(ids) == len(set(ids))


def test_the_command_writes_the_brief_and_nothing_beside_it(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = tmp_path / "in one file.html"
    assert main(["report", str(REAL / "pressure_decay"), "--brief", str(file)]) == 0
    assert [path.name for path in tmp_path.iterdir()] == [file.name]
    assert f"{file.stat().st_size} bytes" in capsys.readouterr().out
    assert MARK in file.read_text(encoding="utf-8")
    file.write_text("no brief", encoding="utf-8")
    assert main(["report", str(REAL / "pressure_decay"), "--brief", str(file)]) == 2
    assert "--brief" in capsys.readouterr().err
    assert file.read_text(encoding="utf-8") == "no brief"


def test_it_overwrites_only_a_brief(tmp_path: Path) -> None:
    ours, theirs = tmp_path / "brief.html", tmp_path / "thesis.html"
    write_brief(f"<!-- {MARK} -->old".encode(), ours)
    write_brief(f"<!-- {MARK} -->new".encode(), ours)
    assert ours.read_text().endswith("new")
    assert [path.name for path in tmp_path.iterdir()] == ["brief.html"]
    theirs.write_text("my thesis")
    (tmp_path / "link.html").symlink_to(ours)
    for place in (theirs, tmp_path / "link.html", tmp_path, tmp_path / "none" / "x.html"):
        with pytest.raises(CampaignStops) as stopped:
            check_brief_place(place)
        assert stopped.value.notices[0].code == "brief-file"
    assert theirs.read_text() == "my thesis"
