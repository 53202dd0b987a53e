"""The brief: Findings, key figures and the caution in one file that opens from a mail.

The file holds no script and no link, and asks for nothing: its own content policy allows one style by
its hash.
"""

from __future__ import annotations

import base64
import hashlib
import os
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from markupsafe import Markup

from campaign.notices import CampaignStops, Notice
from campaign.pages.assets import shared_css
from campaign.pages.drawing import ready
from campaign.pages.figures import Figure
from campaign.pages.page import Page, SiteFrame
from campaign.pages.render import (
    environment,
    pages_as_marked,
    placed_table,
    without_indents,
)
from campaign.pages.static_figure import static_svg
from campaign.pages.templates import templates_folder

MARK = "A brief written by campaign report; writing it again replaces this file as a whole."
"""Stands near the top of every brief: a file without it is somebody's and is never overwritten."""
LARGEST = 1_500_000
"""Bytes that a brief stays below."""
_ROWS_OF_LIMITS = 40
_READ_FOR_THE_MARK = 400


@dataclass(frozen=True)
class KeyFigure:
    """A figure of the brief: from which page, its number there, and its picture."""

    figure: Figure
    title: str
    number: str
    anchor: str
    svg: Markup


def brief_bytes(frame: SiteFrame, pages: Sequence[Page]) -> bytes:
    """Return the brief of a site.

    Parameters
    ----------
    frame
        What every page shares.
    pages
        The pages of the site, Findings first; the first figure of each numbered page is a key figure.
    """
    pages = pages_as_marked(frame, pages)
    findings = replace(pages[0], number=None)
    tables = [replace(table, rows_in_page=_ROWS_OF_LIMITS) for table in findings.tables]
    style = without_indents(shared_css(templates_folder())).strip()
    told: Mapping[str, object] = {
        **findings.context,
        "page": findings,
        "site": frame,
        "mark": MARK,
        "style": Markup(style),
        "policy": Markup(policy_of(style)),
        "tables": {t.name: placed_table(findings, i, t) for i, t in enumerate(tables, 1)},
        "key_figures": key_figures(pages),
    }
    page = without_indents(environment().get_template("brief.html").render(told))
    return _without_links(page).encode("utf-8")


def policy_of(style: str) -> str:
    """Return the content policy that allows *style* alone, by its SHA-256."""
    digest = base64.b64encode(hashlib.sha256(style.encode("utf-8")).digest()).decode("ascii")
    return f"default-src 'none'; style-src 'sha256-{digest}'; base-uri 'none'; form-action 'none'"


def key_figures(pages: Sequence[Page]) -> list[KeyFigure]:
    """Return the first figure of every numbered page that has one, in the order of the strip."""
    numbered = sorted((p for p in pages if p.number and p.figures), key=lambda p: p.number or 0)
    made = []
    for page in numbered:
        # names become ids within the pictures: two pages may have figures of one name
        figure = ready(replace(page.figures[0], name=f"{page.slug}-{page.figures[0].name}"))
        svg = Markup(static_svg(figure))
        made.append(KeyFigure(figure, page.title, f"{page.number}.1", f"figure-{figure.name}", svg))
    return made


def _without_links(page: str) -> str:
    """Return a page whose links are plain text, and without what leads to other files."""
    head, style, body = re.split(r"(<style>.*?</style>)", page, maxsplit=1, flags=re.DOTALL)
    body = re.sub(r'<p class="(?:tools|meanings|see)">.*?</p>', "", body, flags=re.DOTALL)
    body = re.sub(r'(<svg class="tile"[^>]*) role="group"', r'\1 role="img"', body)
    parts = re.split(r"(<svg\b.*?</svg>)", body, flags=re.DOTALL)
    return head + style + "".join(_unlinked(part) for part in parts)


def _unlinked(part: str) -> str:
    """Return a piece of a page with links as plain text; in a picture a group stands for a link."""
    if not part.startswith("<svg"):
        return re.sub(r"</?a\b[^>]*>", "", part)
    grouped = re.sub(r"<a\b[^>]*>", _grouped, part)
    return grouped.replace("</a>", "</g>")


def _grouped(found: re.Match[str]) -> str:
    kind = re.search(r'class="[^"]*"', found[0])
    return f"<g {kind[0]}>" if kind else "<g>"


def check_brief_place(path: Path) -> None:
    """Stop unless a brief may be written to *path*: nothing is there, or a brief of ours.

    Raises
    ------
    CampaignStops
        With what stands there and the way out.
    """
    if path.is_symlink() or (path.exists() and not path.is_file()):
        raise CampaignStops([_notice(path, "is not an ordinary file")])
    if not path.absolute().parent.is_dir():
        raise CampaignStops([_notice(path, "would lie in a folder that is not there")])
    if path.exists() and MARK.encode() not in path.read_bytes()[:_READ_FOR_THE_MARK]:
        raise CampaignStops([_notice(path, "is a file that campaign report did not write")])


def write_brief(content: bytes, path: Path) -> None:
    """Write a brief whole or not at all.

    Raises
    ------
    CampaignStops
        Where something else stands at *path*, or it cannot be written.
    """
    check_brief_place(path)
    aside = path.with_name(f".{path.name}.new")
    try:
        aside.write_bytes(content)
        os.replace(aside, path)
    except OSError as fault:
        raise CampaignStops([_notice(path, f"cannot be written ({fault.strerror or fault})")]) from fault


def _notice(path: Path, what: str) -> Notice:
    return Notice(
        code="brief-file",
        weight="stops",
        file=None,
        line=None,
        column=None,
        what=f"the brief {path.name} {what}",
        done="nothing was written",
        remedy="name another file with --brief",
    )
