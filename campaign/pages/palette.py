"""Paper and ink: every colour of the site, in both schemes, and the marks that tell generations apart.

Figures name colours by their value in the light scheme. Static pictures carry that value as an attribute and
the style sheet swaps it in the dark scheme; live figures look the swap up when they are drawn. A colour that
is not in :data:`DARK` must therefore not be used.

Generations take a subset of the qualitative set of Okabe and Ito (2008, Color Universal Design), the fourth
darkened until it stands out by 3:1 on this paper (WCAG 2.2, 1.4.11), and a marker shape and a dash as well:
nothing is told by colour alone.
"""

from __future__ import annotations

from dataclasses import dataclass

PAPER = "#faf8f3"
SHEET = "#fffdf9"
INK = "#1b2530"
SOFT = "#5c6670"
RULE = "#d9d3c6"
LINK = "#1f6375"
ATTENTION = "#a8441f"

RAMP: tuple[str, ...] = (
    "#e9e4d6",
    "#d0d8ce",
    "#b7cbc4",
    "#93b9b6",
    "#6fa6a8",
    "#4f8f99",
    "#2f778a",
    "#215f74",
    "#12465e",
)
"""Sequential ramp, pale (little) to deep (much): the five given steps and the four half-way between them."""

DARK: dict[str, str] = {
    PAPER: "#12181d",
    SHEET: "#182027",
    INK: "#e8e4da",
    SOFT: "#a3acb3",
    RULE: "#36414a",
    LINK: "#86c5d2",
    ATTENTION: "#ec8f6a",
    "#e9e4d6": "#2b353c",
    "#d0d8ce": "#2f444d",
    "#b7cbc4": "#33545e",
    "#93b9b6": "#3c6a75",
    "#6fa6a8": "#46818d",
    "#4f8f99": "#5d9aa4",
    "#2f778a": "#7fb5bb",
    "#215f74": "#a5cfcf",
    "#12465e": "#d0e9e4",
    "#0072b2": "#5eb0e5",
    "#d55e00": "#f08c46",
    "#009e73": "#35bf94",
    "#b3558c": "#e08fbf",
    "#666666": "#a8a8a8",
}
"""What each colour becomes in the dark scheme."""


@dataclass(frozen=True)
class GenerationStyle:
    """How one generation is drawn: colour, marker symbol and line dash (names of the plot library)."""

    colour: str
    symbol: str
    dash: str


GENERATION_STYLES: tuple[GenerationStyle, ...] = (
    GenerationStyle("#0072b2", "circle", "solid"),
    GenerationStyle("#d55e00", "square", "dash"),
    GenerationStyle("#009e73", "diamond", "dot"),
    GenerationStyle("#b3558c", "triangle-up", "dashdot"),
    GenerationStyle("#666666", "x", "longdash"),
)


def generation_style(generation: str, generations: tuple[str, ...] | list[str]) -> GenerationStyle:
    """Return the style of *generation* by its place among *generations*, the first again after the fifth.

    Generations that are not listed (``"all"``) take ink's neighbour, the last style.
    """
    if generation not in generations:
        return GENERATION_STYLES[-1]
    return GENERATION_STYLES[list(generations).index(generation) % len(GENERATION_STYLES)]


def ramp_colour(fraction: float) -> str:
    """Return the step of the ramp for a *fraction* of the range, clipped to 0–1."""
    step = int(min(max(fraction, 0.0), 1.0) * len(RAMP))
    return RAMP[min(step, len(RAMP) - 1)]


def relative_luminance(colour: str) -> float:
    """Return the relative luminance of a ``#rrggbb`` colour, 0–1 (as WCAG 2.2 defines it)."""
    channels = [int(colour[i : i + 2], 16) / 255.0 for i in (1, 3, 5)]
    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(first: str, second: str) -> float:
    """Return the contrast ratio of two ``#rrggbb`` colours, 1–21 (WCAG 2.2, 1.4.3)."""
    lighter, darker = sorted((relative_luminance(first), relative_luminance(second)), reverse=True)
    return (lighter + 0.05) / (darker + 0.05)
