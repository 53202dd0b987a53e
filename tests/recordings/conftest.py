"""Small campaigns made on the spot: a description, registers and recordings as texts."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path

import pytest

MINIMAL = """\
format = 1
[campaign]
title = "Test campaign"
[recordings]
files = "trials/**/*.csv"
name = "{module}_{sensor}_{kind}_r{repetition}"
"""


def staircase_text(shift: float = 0.0, rest_mm: float = 60.0) -> str:
    """A staircase table in mm and pF; *shift* makes its bytes differ from others."""
    levels = [0, 6, 12, 18, 12, 6, 0]
    rows = [f"{rest_mm + e:.1f},{100 + 1.5 * e + shift:.4f}" for e in levels]
    return "length_mm,capacitance_pF\n" + "\n".join(rows) + "\n"


CampaignMaker = Callable[..., Path]


@pytest.fixture
def make_campaign(tmp_path: Path) -> CampaignMaker:
    """Return a function that writes a campaign folder and returns its path."""

    def make(
        files: Mapping[str, str | bytes] | None = None,
        description: str | None = MINIMAL,
        folder: str = "campaign_folder",
    ) -> Path:
        root = tmp_path / folder
        root.mkdir(parents=True, exist_ok=True)
        if description is not None:
            (root / "campaign.toml").write_text(description, encoding="utf-8")
        for name, content in (files or {}).items():
            path = root / name
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_bytes(content if isinstance(content, bytes) else content.encode())
        return root

    return make


@pytest.fixture
def staircase() -> Callable[..., str]:
    """Return the function that writes a staircase table."""
    return staircase_text


@pytest.fixture
def minimal() -> str:
    """Return the text of a minimal description."""
    return MINIMAL
