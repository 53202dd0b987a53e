"""A toy site of one page that holds one of everything, with texts of the caller's choosing."""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache
from pathlib import Path

import pandas as pd

from campaign.notices import Notice
from campaign.pages import figures
from campaign.pages.figures import Figure
from campaign.pages.page import Page, SiteFrame
from campaign.pages.render import render_site
from campaign.pages.skin_map import MapFigure, MapSensor, skin_map
from campaign.pages.slugs import trial_href
from campaign.pages.tables import Column, Table

TEMPLATES = Path(__file__).parent / "templates"
LEVELS = [0.0, 10.0, 20.0, 30.0, 40.0]


def toy_figure(text: str = "M01", name: str = "lines") -> Figure:
    """Lines with a band, points that lead to trials, and a label, all named *text*."""
    signal = [100.0 + 0.5 * level for level in LEVELS]
    links = [trial_href(text, text, text)] * len(LEVELS)
    return Figure(
        name=name,
        caption=text,
        alternative=text,
        traces=(
            figures.band(LEVELS, [s - 1 for s in signal], [s + 1 for s in signal]),
            figures.line(LEVELS, signal, name=text, module=text, sensor=text),
            figures.points(LEVELS, signal, name=text, text=[text] * 5, links=links, module=text, sensor=text),
        ),
        layout=figures.layout(
            figures.axis("Strain", "%"),
            figures.axis(figures.plain(text), "pF"),
            annotations=[figures.label(text, 40, 120)],
            shapes=[figures.level_line(110)],
        ),
        data=pd.DataFrame({"x": LEVELS, "signal": signal, "name": text}),
        note=text,
    )


def toy_table(text: str = "M01", name: str = "toy_lines") -> Table:
    frame = pd.DataFrame(
        {
            "module": [text, "M02", "M03"],
            "sensor": [text, "AB", "AB"],
            "slope": [0.5123456789012345, 12.5, float("nan")],
            "u": [0.0123, 0.5, float("nan")],
            "_href": ["index.html", "", ""],
        }
    )
    return Table(
        name=name,
        caption=text,
        frame=frame,
        columns=(
            Column("module", text, kind="text", href="_href"),
            Column("sensor", "Sensor", kind="code"),
            Column("slope", "Slope", "pF/%", uncertainty="u"),
        ),
        note=text,
    )


def toy_page(text: str = "M01", slug: str = "index", number: int | None = 0) -> Page:
    nodes = {"A": (0.0, 0.0), "B": (90.0, 0.0), "C": (90.0, 60.0), "D": (0.0, 60.0)}
    sensors = [
        MapSensor(text, text, a + b if a + b != "AB" else text, (nodes[a], nodes[b]), set_aside=a + b == "CD")
        for a, b in ("AB", "BC", "CD", "DA", "AC", "BD")
    ]
    values = {(s.module, s.sensor): float(i) for i, s in enumerate(sensors)}
    mapped = skin_map(sensors, [MapFigure("hysteresis", text, "%FSO", values)])
    notice = Notice("code", "noted", text, 1, 2, text, text, text)
    return Page(
        slug=slug,
        number=number,
        title=text,
        template="toy.html",
        context={"title": text, "notices": [notice], "map": mapped, "module": text, "sensor": text},
        figures=(toy_figure(text),),
        tables=(toy_table(text),),
        data={"skin_map": mapped.data, "text": text},
        description=text,
        above=((text, "index.html"),),
        previous=(text, "index.html"),
        following=(text, "index.html"),
    )


@cache
def toy_site(text: str = "M01") -> dict[str, bytes]:
    """Return the files of a site of one page that says *text* everywhere, rendered once."""
    return site_of((toy_page(text),), text)


def site_of(pages: Sequence[Page], text: str = "M01", tables: Sequence[Table] = ()) -> dict[str, bytes]:
    """Return the files of a site of *pages*, with further *tables* that no page shows."""
    frame = SiteFrame(title=text, summary=(text, "1 module"), invented=True, version="0")
    return render_site(frame, pages, tables, further_templates=[TEMPLATES])
