"""Figures for a journal: lone vector files and pictures at print size, made without a browser.

A figure is drawn for the width of one column or of two (:data:`COLUMN_WIDTHS_MM`) at one scale, so that the
smallest letters of every figure are of seven points or more. Vectors name their typeface; pictures are drawn
by ``resvg`` with the letters of the package ``font-source-sans-pro``: they need nothing of the machine.
"""

from __future__ import annotations

import re
import struct
import zlib
from pathlib import Path

from campaign.pages import palette
from campaign.pages.figures import Figure
from campaign.pages.legible import legible
from campaign.pages.numbers import MINUS
from campaign.pages.print_layout import laid_for_print
from campaign.pages.static_figure import drawn_content
from campaign.pages.static_strokes import TENTHS

COLUMN_WIDTHS_MM = {"one-column": 85, "two-column": 175}
"""Widths of figures in print, in mm, by name."""

DOTS_PER_INCH = 300
MILLIMETRES_PER_PIXEL = 0.2268
"""Print size of a picture's pixel: the smallest letters, 11 pixels, become 7.07 points of 0.3528 mm."""

TYPEFACES = "'Source Sans Pro', 'Source Sans 3', Arial, Helvetica, sans-serif"
_PAPER = "#ffffff"
_SMALL_POWER = re.compile("(\\s?×\\s?)?10⁻([⁰¹²³⁴⁵⁶⁷⁸⁹]+)")
"""The carried typeface has no raised minus sign: 10⁻⁸ is written as 1e−8."""
_BEYOND_THE_FONT = re.compile("[\u0530-\u1dff\u2e80-\U0010ffff]")
"""Scripts that the carried typeface lacks: letters of the machine stand in, where it has any."""


def print_svg(figure: Figure, width_mm: float) -> str:
    """Return a figure as a lone vector file, *width_mm* wide, on white.

    Parameters
    ----------
    figure
        Ready to be drawn (:func:`campaign.pages.drawing.ready`).
    width_mm
        Width in print in mm; the height follows from what the figure holds.
    """
    width = round(width_mm / MILLIMETRES_PER_PIXEL)
    shown = laid_for_print(figure, width)
    height_mm = width_mm * shown.height / width
    ground = f'<path d="M0 0h{TENTHS * width}v{TENTHS * shown.height}h-{TENTHS * width}z" fill="{_PAPER}"/>'
    box = f'viewBox="0 0 {TENTHS * width} {TENTHS * shown.height}"'
    size = f'{box} width="{width_mm:g}mm" height="{height_mm:.2f}mm"'
    looks = f'font-family="{TYPEFACES}" font-size="120" fill="none" stroke-width="10" stroke-linejoin="round"'
    return (
        f'<svg xmlns="http://www.w3.org/2000/svg" {size} color="{palette.INK}" {looks}>'
        f"<title>{_plain(figure.alternative)}</title>{ground}"
        f"{_on_white(drawn_content(shown, width))}</svg>\n"
    )


def print_png(svg: str) -> bytes:
    """Return the picture of a lone vector file at 300 dots an inch, which the file itself states.

    The same vectors give the same bytes wherever the letters are the carried typeface's.
    """
    import font_source_sans_pro
    import resvg_py

    letters = Path(font_source_sans_pro.__file__).parent / "files" / "SourceSansPro-Regular.ttf"
    picture = resvg_py.svg_to_bytes(
        svg_string=svg,
        dpi=float(DOTS_PER_INCH),
        background=_PAPER,
        font_files=[str(letters)],
        font_family="Source Sans Pro",
        sans_serif_family="Source Sans Pro",
        skip_system_fonts=_BEYOND_THE_FONT.search(svg) is None,
    )
    return _with_density(bytes(picture))


def _on_white(content: str) -> str:
    """Return what a picture draws on white paper, in signs that every typeface has."""
    powers = _SMALL_POWER.sub(_as_exponent, content)
    return powers.replace(f'"{palette.PAPER}"', f'"{_PAPER}"').replace("●", "•")


def _as_exponent(found: re.Match[str]) -> str:
    digits = found[2].translate(str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹", "0123456789"))
    return f"{'' if found[1] else '1'}e{MINUS}{digits}"


def _plain(text: str) -> str:
    return legible(text).replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")


def _with_density(png: bytes) -> bytes:
    """Return a PNG that states its dots a metre (chunk ``pHYs``, after the header chunk)."""
    per_metre = round(DOTS_PER_INCH / 0.0254)
    body = b"pHYs" + struct.pack(">IIB", per_metre, per_metre, 1)
    chunk = struct.pack(">I", 9) + body + struct.pack(">I", zlib.crc32(body))
    after_header = 8 + 25
    return png[:after_header] + chunk + png[after_header:]
