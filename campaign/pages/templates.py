"""Where the templates of the site are."""

from __future__ import annotations

from pathlib import Path


def templates_folder() -> Path:
    """Return where the templates are: inside the package if installed with it, else in the checkout."""
    package = Path(__file__).resolve().parents[1]
    inside = package / "site_templates"
    return inside if inside.is_dir() else package.parent / "site_templates"
