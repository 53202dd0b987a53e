"""What every page shares: style sheets, scripts, and the plot library that the installed plotly carries.

Nothing of a third party stands in our own files: the library is taken from the plotly package as the site is
written (``plotly.offline.get_plotlyjs``), or from the file that ``[site] plot_library`` names.
"""

from __future__ import annotations

import re
from functools import cache
from pathlib import Path

import orjson

from campaign.notices import CampaignStops, Notice
from campaign.pages import palette
from campaign.pages.house_style import HOUSE_TEMPLATE

LIBRARY = "assets/plot_library.js"
SHARED_SHEETS = ("text", "frame", "figures", "tables", "skin_map", "print")
"""Style sheets of every page, in the order in which they count."""


def asset_files(templates: Path, plot_library: Path | None = None) -> dict[str, bytes]:
    """Return the shared files of a site by address.

    Scripts are the files of the folder ``js`` of *templates* as they stand. Style sheets that every page has
    (:data:`SHARED_SHEETS`) are one file, ``assets/site.css``, after the colours of
    :mod:`campaign.pages.palette`; the others of the folder ``css`` stand alone. ``assets/house_style.js`` is
    written from :mod:`campaign.pages.house_style`.
    """
    sheets = (path for path in (templates / "css").glob("*.css") if path.stem not in SHARED_SHEETS)
    paths = sorted([*sheets, *(templates / "js").glob("*.js")])
    made = {f"assets/{path.name}": path.read_bytes() for path in paths}
    library = library_bytes(plot_library)
    template = orjson.dumps(HOUSE_TEMPLATE, option=orjson.OPT_SORT_KEYS)
    styles = orjson.dumps(_own_style_elements(library))
    values = (template, styles)
    house_style = b"window.campaignHouseStyle = %b;\nwindow.campaignLibraryStyles = %b;\n" % values
    return made | {
        "assets/site.css": shared_css(templates).encode("utf-8"),
        "assets/house_style.js": house_style,
        LIBRARY: library,
    }


def library_bytes(plot_library: Path | None = None) -> bytes:
    """Return the plot library as the site carries it.

    Raises
    ------
    CampaignStops
        Where the file that the description names cannot be read or is no plot library of the same major
        version.
    """
    if plot_library is None:
        return _wrapped_carried_library()
    try:
        text = plot_library.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as fault:
        raise CampaignStops(
            [_library_notice(plot_library, f"it cannot be read ({type(fault).__name__})")]
        ) from fault
    wanted, found = _version(_carried_library()), _version(text)
    if found is None or wanted is None or found.split(".")[0] != wanted.split(".")[0]:
        raise CampaignStops([_library_notice(plot_library, f"it is not a build of plotly.js {wanted}")])
    return _wrapped(text).encode("utf-8")


def shared_css(templates: Path) -> str:
    """Return what every page is styled by: colours, then the shared sheets of the folder ``css``."""
    sheets = [(templates / "css" / f"{name}.css").read_text(encoding="utf-8") for name in SHARED_SHEETS]
    return "".join([colours_css(), *sheets])


def colours_css() -> str:
    """Return the style sheet of colours: one custom property a colour, swapped in the dark scheme.

    Pictures name colours by attribute, so each colour also has a rule for ``fill`` and for ``stroke``.
    """
    light = "".join(f"  {_property(colour)}: {colour};\n" for colour in palette.DARK)
    dark = "".join(f"    {_property(colour)}: {swap};\n" for colour, swap in palette.DARK.items())
    rules = "".join(
        f'svg [fill="{colour}"] {{ fill: var({_property(colour)}); }}\n'
        f'svg [stroke="{colour}"] {{ stroke: var({_property(colour)}); }}\n'
        for colour in palette.DARK
    )
    roles = "".join(
        f"  --{role}: var({_property(colour)});\n"
        for role, colour in {
            "paper": palette.PAPER,
            "sheet": palette.SHEET,
            "ink": palette.INK,
            "soft": palette.SOFT,
            "rule": palette.RULE,
            "link": palette.LINK,
            "attention": palette.ATTENTION,
        }.items()
    )
    return (
        "/* Written from campaign/pages/palette.py. */\n"
        f":root {{\n  color-scheme: light dark;\n{light}{roles}}}\n"
        f"@media screen and (prefers-color-scheme: dark) {{\n  :root {{\n{dark}  }}\n}}\n{rules}"
    )


def _property(colour: str) -> str:
    return f"--c-{colour[1:]}"


@cache
def _carried_library() -> str:
    from plotly.offline import get_plotlyjs

    return str(get_plotlyjs())


@cache
def _wrapped_carried_library() -> bytes:
    return _wrapped(_carried_library()).encode("utf-8")


def _version(text: str) -> str | None:
    found = re.search(r"plotly\.js (?:\([^)]*\) )?v(\d+\.\d+\.\d+)", text[:2000])
    return found.group(1) if found else None


def _own_style_elements(library: bytes) -> list[str]:
    """Return the ids of style elements that the library adds for parts we do not use (maps).

    It adds none whose id is already taken; the site's script takes them, for the content policy forbids the
    elements.
    """
    found = re.findall(rb'getElementById\("([0-9a-f]{64})"\)', library)
    return sorted({name.decode("ascii") for name in found})


def _wrapped(text: str) -> str:
    """Return the library with its factory in parentheses, so that browsers compile it once instead of twice.

    A file that is not put together in the known way is returned as it is.
    """
    head = re.search(r"self : this,\s*(?=\(\) => \{|function ?\(\) ?\{)", text[:2000])
    tail = re.search(r"\}\)\);?\s*\Z", text)
    if head is None or tail is None:
        return text
    return f"{text[: head.end()]}({text[head.end() : tail.start()]}}})));\n"


def _library_notice(path: Path, fault: str) -> Notice:
    return Notice(
        code="plot-library",
        weight="stops",
        file="campaign.toml",
        line=None,
        column=None,
        what=f"plot_library names {path.name}, but {fault}",
        done="nothing was written",
        remedy="name a build of the same major version as the installed plotly carries, or leave the key out",
    )
