"""Contrast by computation, in both schemes (WCAG 2.2: 1.4.3 for text, 1.4.11 for marks)."""

from __future__ import annotations

import itertools

import pytest

from campaign.pages import palette
from campaign.pages.assets import colours_css

TEXT, MARK = 4.5, 3.0
GROUNDS = (palette.PAPER, palette.SHEET)


def test_contrast_of_black_on_white_is_21() -> None:
    assert palette.contrast("#000000", "#ffffff") == pytest.approx(21.0)
    # WCAG 2.2 understanding document, 1.4.3: #777777 on white is 4.48:1
    assert palette.contrast("#777777", "#ffffff") == pytest.approx(4.48, abs=0.005)


@pytest.mark.parametrize("ground", GROUNDS)
@pytest.mark.parametrize("colour", [palette.INK, palette.SOFT, palette.LINK, palette.ATTENTION])
def test_text_stands_out_in_both_schemes(colour: str, ground: str) -> None:
    assert palette.contrast(colour, ground) >= TEXT
    assert palette.contrast(palette.DARK[colour], palette.DARK[ground]) >= TEXT


@pytest.mark.parametrize("ground", GROUNDS)
@pytest.mark.parametrize("style", palette.GENERATION_STYLES)
def test_marks_of_generations_stand_out_in_both_schemes(style: palette.GenerationStyle, ground: str) -> None:
    assert palette.contrast(style.colour, ground) >= MARK
    assert palette.contrast(palette.DARK[style.colour], palette.DARK[ground]) >= MARK


def test_text_and_marks_stand_out_on_paper() -> None:
    """Print has the light colours on white (css/print.css); the dark scheme is for screens alone."""
    white = "#ffffff"
    for colour in (palette.INK, palette.SOFT, palette.LINK, palette.ATTENTION):
        assert palette.contrast(colour, white) >= TEXT
    for style in palette.GENERATION_STYLES:
        assert palette.contrast(style.colour, white) >= MARK
    assert palette.contrast(palette.RAMP[-1], white) >= MARK
    assert colours_css().count("prefers-color-scheme") == colours_css().count(
        "@media screen and (prefers-color-scheme: dark)"
    )


def test_generations_differ_by_shape_and_dash_too() -> None:
    assert len({style.symbol for style in palette.GENERATION_STYLES}) == len(palette.GENERATION_STYLES)
    assert len({style.dash for style in palette.GENERATION_STYLES}) == len(palette.GENERATION_STYLES)


def test_the_ramp_deepens_step_by_step_and_ends_apart_from_the_ground() -> None:
    light = [palette.contrast(colour, palette.PAPER) for colour in palette.RAMP]
    dark = [palette.contrast(palette.DARK[colour], palette.DARK[palette.PAPER]) for colour in palette.RAMP]
    for contrasts in (light, dark):
        assert all(a < b for a, b in itertools.pairwise(contrasts))
        assert contrasts[-1] >= MARK


def test_the_casing_of_pale_edges_stands_out() -> None:
    """Pale steps of the ramp fall under 3:1, which is why every edge has a casing of ink."""
    assert palette.contrast(palette.RAMP[0], palette.PAPER) < MARK
    for colour in palette.RAMP[:4]:
        assert palette.contrast(palette.INK, colour) >= MARK
        assert palette.contrast(palette.DARK[palette.INK], palette.DARK[colour]) >= MARK


def test_ramp_colours_by_fraction_are_clipped() -> None:
    assert palette.ramp_colour(-1) == palette.RAMP[0]
    assert palette.ramp_colour(0.5) == palette.RAMP[4]
    assert palette.ramp_colour(2) == palette.RAMP[-1]


def test_every_colour_is_swapped_by_the_style_sheet() -> None:
    css = colours_css()
    for colour, swap in palette.DARK.items():
        assert f"--c-{colour[1:]}: {colour};" in css
        assert f"--c-{colour[1:]}: {swap};" in css
        assert f'svg [fill="{colour}"]' in css
        assert f'svg [stroke="{colour}"]' in css
