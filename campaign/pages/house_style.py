"""The plot library's template in the house style; no colour of the library's own."""

from __future__ import annotations

from typing import Any

from campaign.pages import palette

FONT = "'Gill Sans Nova', 'Optima', Candara, 'Noto Sans', 'Source Sans 3', 'Segoe UI', system-ui, sans-serif"

# Labels may stand over an edge, as in the static picture: to look whether one does is a tenth of the drawing.
# Exponents as 'e': the library sets raised figures in a style attribute, which the content policy forbids.
_AXIS: dict[str, Any] = {
    "showline": True,
    "linecolor": palette.SOFT,
    "linewidth": 1,
    "gridcolor": palette.RULE,
    "gridwidth": 1,
    "zeroline": False,
    "ticks": "",
    "tickfont": {"size": 12, "color": palette.SOFT},
    "title": {"font": {"size": 13, "color": palette.INK}, "standoff": 12},
    "automargin": False,
    "ticklabeloverflow": "allow",
    "exponentformat": "e",
}

NOTE_DEFAULTS: dict[str, Any] = {
    "showarrow": False,
    "yanchor": "middle",
    "font": {"size": 12, "color": palette.INK},
}
"""What every label has unless it says otherwise; data scripts leave it out."""

HOUSE_TEMPLATE: dict[str, Any] = {
    "layout": {
        "font": {"family": FONT, "size": 12, "color": palette.INK},
        "paper_bgcolor": palette.PAPER,
        "plot_bgcolor": palette.PAPER,
        "colorway": [style.colour for style in palette.GENERATION_STYLES],
        "showlegend": False,
        "annotationdefaults": NOTE_DEFAULTS,
        "hovermode": "closest",
        "dragmode": "zoom",
        "bargap": 0,
        "barmode": "overlay",
        "xaxis": _AXIS,
        "yaxis": {**_AXIS, "showline": False},
        "hoverlabel": {
            "bgcolor": palette.SHEET,
            "bordercolor": palette.SOFT,
            "font": {"color": palette.INK, "size": 13},
            "align": "left",
        },
        "separators": ".\u202f",
    }
}
"""Template of every live figure; the dark scheme swaps its colours as it is applied."""
