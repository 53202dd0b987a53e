"""Page 5, Hysteresis: how wide the loops are, and whether they settle."""

from __future__ import annotations

import math
from collections.abc import Iterable

import numpy as np
import pandas as pd

from campaign.analyses.hysteresis import Hysteresis
from campaign.analyses.loop_findings import lasting
from campaign.analyses.loop_table import BY_LINE, BY_LOOP
from campaign.analyses.results import CampaignResults
from campaign.methods.conditioning import STATED_CHANGE
from campaign.pages import numbers, palette, slugs
from campaign.pages.campaign_map import LOOP_KEY, campaign_map
from campaign.pages.endurance import endurance_figures, endurance_tables
from campaign.pages.figures import (
    Figure,
    Trace,
    axis,
    intervals,
    layout,
    level_line,
    line,
    panel,
    plain,
    small_multiples,
)
from campaign.pages.loop_figures import (
    WORDS,
    departures_figure,
    first_and_last,
    loop_script_address,
    loops_figure,
    outlines_of,
    rate_unit,
    rate_words,
    sensors_drawn,
)
from campaign.pages.page import Page
from campaign.pages.rows import records_of
from campaign.pages.sensor_axis import SensorAxis, interval_traces, sensor_axis
from campaign.pages.skin_map import SkinMap
from campaign.pages.tables import Column, Table
from campaign.recordings.recording import ReferenceQuantity

MOST_CYCLES = 40
"""Cycles of one sensor that the figure of width against cycle draws, evenly spaced on a logarithmic axis."""

MOST_LINE_POINTS = 1000
"""Points that the lines of one figure have together, where many sensors are drawn."""

MOST_PANELS = 48
"""Modules that small multiples show; the tables hold all."""

COMPONENT_WORDS = {
    "module": "modules",
    "module + sensor": "modules and sensors, not told apart",
    "sensor": "sensors of a module",
    "sensor + run": "sensors and runs, not told apart",
    "run": "runs",
    "sensor × run": "a sensor’s own part of a run",
    "loop": "loops of a run",
    "everything else": "everything else",
}
"""What components of the widths are called on pages."""


def hysteresis_page(results: CampaignResults) -> Page | None:
    """Return page 5, or ``None`` where neither cycles nor endurance were measured."""
    found, endurance = results.hysteresis, results.endurance
    if found is None and endurance is None:
        return None
    mapped = campaign_map(results, chosen=LOOP_KEY, alone=True) if found is not None else None
    figures = [*(_figures(found) if found is not None else ()), *endurance_figures(endurance)]
    tables = [*(_tables(found) if found is not None else ()), *endurance_tables(endurance)]
    return Page(
        slug="hysteresis",
        number=5,
        title="Hysteresis",
        template="hysteresis.html",
        context={
            "hysteresis": found,
            "endurance": endurance,
            "reference": results.readings.reference,
            "by_line": BY_LINE,
            "by_loop": BY_LOOP,
            "settling": settling_words(found) if found is not None else None,
            "rate_words": rate_words,
            "compared_rate": "" if found is None else rate_words(found.rate_per_s, found.reference),
            "means": [] if found is None else records_of(found.means),
            "delays": [] if found is None else records_of(found.rates.delays),
            "component_words": COMPONENT_WORDS,
            "survivors": () if endurance is None else lasting(endurance),
            "map": mapped,
            "percent": "" if found is None else width_unit(found),
        },
        figures=tuple(figures),
        tables=tuple(tables),
        data=_data(found, mapped),
        description="How wide loops of stretch and release are, when they settle, what rate does to them.",
    )


def _figures(found: Hysteresis) -> Iterable[Figure]:
    where = sensor_axis(found.sensors)
    made = [
        widest_figure(found),
        widest_departures(found),
        cycles_figure(found, where),
        widths_figure(found, where),
        curves_figure(found, where),
        components_figure(found),
        rates_figure(found, where),
    ]
    return [figure for figure in made if figure is not None]


def width_unit(found: Hysteresis) -> str:
    """Return the unit of widths: %FSO, or of the loop's own range where no sensor has a staircase line."""
    return "%FSO" if BY_LINE in found.scales else "% of range"


def settling_words(found: Hysteresis) -> dict[str, object]:
    """Return how many sensors settle and from which cycle on, and by how much first loops differ."""
    settled = found.sensors["settled_from_cycle"].dropna()
    softening = found.sensors["softening_percent"].dropna()
    return {
        "sensors": len(found.sensors),
        "settled": len(settled),
        "latest": float(settled.max()) if len(settled) else math.nan,
        "usual": float(settled.median()) if len(settled) else math.nan,
        "softening": float(softening.median()) if len(softening) else math.nan,
        "softening_low": float(softening.min()) if len(softening) else math.nan,
        "softening_high": float(softening.max()) if len(softening) else math.nan,
    }


def widest_sensor(found: Hysteresis) -> tuple[str, str]:
    """Return (module, sensor) of the widest loops among the sensors with loops to draw."""
    drawn = sensors_drawn(found)
    rows = found.sensors.sort_values("width_percent_fso", ascending=False, kind="stable")
    pairs = zip(rows["module"].astype(str), rows["sensor"].astype(str), strict=True)
    return next((pair for pair in pairs if pair in drawn), drawn[0])


def widest_figure(found: Hysteresis) -> Figure | None:
    """Return the loops of one sensor, the widest first; a script lets the reader pick another."""
    module, sensor = widest_sensor(found)
    more = " Dashes tell rates apart, the slowest solid." if found.several_rates else ""
    return loops_figure(
        found,
        module,
        sensor,
        "Loops of one sensor at a time, as recorded; the widest of the campaign is drawn first, "
        f"that of {module} {sensor}.",
        note="The first cycle of each run stands out; the first settled one and the last follow, fainter "
        f"to stronger.{more} Outlines are thinned with the extremes of both axes kept.",
    )


def widest_departures(found: Hysteresis) -> Figure | None:
    """Return the same loops less a straight line, which opens narrow ones; it follows the same choice."""
    module, sensor = widest_sensor(found)
    return departures_figure(
        found,
        module,
        sensor,
        f"The same loops less a straight line, first those of {module} {sensor}: how wide they are, and how "
        "they bend.",
        width_unit(found),
        note="The line has the slope by which widths are turned into "
        f"{found.reference.name} (table of all sensors) and passes through the middle of the loops. The "
        "height between the two branches of a loop is its width.",
    )


def _data(found: Hysteresis | None, mapped: SkinMap | None) -> dict[str, object]:
    """What the page's scripts need: loops to pick, and the skin map's figures."""
    if found is None:
        return {}
    return {"loops": _picker(found)} | ({"skin_map": mapped.data} if mapped is not None else {})


def _picker(found: Hysteresis) -> dict[str, object]:
    """What the page's script needs to draw another sensor."""
    first = widest_sensor(found)
    shown = first_and_last(outlines_of(found, *first))
    return {
        "first": list(first),
        "shown_cycles": sorted({c.cycle for c in shown}),
        "sensors": [
            {
                "module": module,
                "sensor": sensor,
                "script": loop_script_address(module, sensor),
                "csv": f"figures/{slugs.sensor_slug(module, sensor)}_loops.csv",
            }
            for module, sensor in sensors_drawn(found)
        ],
    }


def widths_figure(found: Hysteresis, where: SensorAxis) -> Figure:
    """Return the settled width of every sensor with its interval."""
    rows = found.sensors.assign(estimate=found.sensors["width_percent_fso"])
    unit, reference = width_unit(found), found.reference
    text = [
        f"{r['module']} {r['sensor']}: {numbers.interval(r['estimate'], r['low'], r['high'], unit)}, "
        f"widest at {numbers.significant(r['at_strain'] * reference.shown_factor, 2, reference.shown_unit)}"
        for r in records_of(rows)
    ]
    worst = rows.iloc[int(rows["estimate"].to_numpy(float).argmax())]
    told = int((rows["low"] > 0).sum())
    return Figure(
        name="widths",
        caption=f"The widest settled loop is that of {worst['module']} {worst['sensor']}: "
        f"{numbers.interval(worst['estimate'], worst['low'], worst['high'], unit)}; "
        f"loops are told from none in {numbers.whole(told)} of {numbers.count(len(rows), 'sensor')}.",
        alternative="Dots with 95 % intervals, one a sensor, by module: largest width of the settled loop.",
        traces=tuple(interval_traces(rows, where, text)),
        layout=layout(axis("Settled width", unit), where.axis()),
        table="hysteresis",
        note="An interval that reaches zero: this loop cannot be told from none. It holds wherever along the "
        "range the widest place may be.",
        height=where.height,
    )


def curves_figure(found: Hysteresis, where: SensorAxis) -> Figure | None:
    """Return the signed width along the range, one panel a module and one line a sensor."""
    modules = where.modules[:MOST_PANELS]
    factor, unit = found.reference.shown_factor, width_unit(found)
    step = 1 if len(found.curves_of_width) <= MOST_LINE_POINTS else 3
    traces: list[Trace] = []
    for index, (generation, module) in enumerate(modules):
        rows = found.curves_of_width
        style = where.style(generation)
        for sensor, whole in rows[rows["module"] == module].groupby("sensor", sort=True):
            own = whole.iloc[::step]
            traces.append(
                line(
                    own["strain"] * factor,
                    own["width_percent_fso"],
                    colour=style.colour,
                    dash=style.dash,
                    width=1.2,
                    hovertext=plain(f"{module} {sensor}"),
                    hoverinfo="text",
                    module=module,
                    sensor=str(sensor),
                    axes=panel(index),
                )
            )
    columns = 1 if len(modules) == 1 else 2 if len(modules) <= 4 else 3 if len(modules) <= 12 else 4
    rows_of_panels = math.ceil(len(modules) / columns)
    titles = [m if len(where.generations) == 1 else f"{m} · {g}" for g, m in modules]
    return Figure(
        name="width-curves",
        caption=_curves_caption(found),
        alternative="Small multiples, one panel a module: signal on the way up less signal on the way down, "
        f"against {WORDS[found.reference.name].lower()}, one line a sensor.",
        traces=tuple(traces),
        layout=small_multiples(
            titles,
            axis(WORDS[found.reference.name], found.reference.shown_unit),
            axis("Width", unit),
            columns=columns,
            gap=(0.04, 0.30 / rows_of_panels if rows_of_panels > 1 else 0.1),
        ),
        data=found.curves_of_width,
        note="Above zero the signal is larger on the way up. A loop that closes before the ends of its range "
        "was not carried that far.",
        height=360 if rows_of_panels == 1 else 90 + 190 * rows_of_panels,
    )


def _curves_caption(found: Hysteresis) -> str:
    signs = np.sign(found.sensors["mid_width_percent_fso"].to_numpy(float))
    clear = (found.sensors["mid_low"] > 0) | (found.sensors["mid_high"] < 0)
    up, down = int(np.sum((signs > 0) & clear)), int(np.sum((signs < 0) & clear))
    open_ = len(signs) - up - down
    parts = [
        f"on the way {way} in {numbers.whole(number)}"
        for way, number in (("up", up), ("down", down))
        if number
    ]
    parts += [f"not decided in {numbers.whole(open_)}"] if open_ else []
    return f"At mid range the signal is larger {', '.join(parts)} of {numbers.count(len(signs), 'sensor')}."


def cycles_figure(found: Hysteresis, where: SensorAxis) -> Figure | None:
    """Return the width at mid range against the number of the cycle, one line a sensor's first run."""
    rows = found.loops[found.loops["whole"]].dropna(subset=["mid_width_percent_fso"])
    rows = rows[rows["run"] == rows.groupby(["module", "sensor"])["run"].transform("min")]
    if rows.empty or rows["cycle"].nunique() < 2:
        return None
    unit = width_unit(found)
    traces: list[Trace] = []
    drawn = []
    most = min(MOST_CYCLES, max(2, MOST_LINE_POINTS // rows.groupby(["module", "sensor"]).ngroups))
    for (generation, module, sensor), own in rows.groupby(["generation", "module", "sensor"], sort=True):
        kept = own.iloc[_spaced(len(own), most)]
        drawn.append(kept)
        style = where.style(str(generation))
        traces.append(
            line(
                kept["cycle"],
                kept["mid_width_percent_fso"],
                colour=style.colour,
                dash=style.dash,
                width=1.1,
                hovertext=plain(f"{module} {sensor}"),
                hoverinfo="text",
                module=str(module),
                sensor=str(sensor),
            )
        )
    long = int(rows["cycle"].max()) > 20
    settling = settling_words(found)
    return Figure(
        name="width-by-cycle",
        caption=_settling_caption(settling),
        alternative="Width at mid range against the number of the cycle, one line a sensor.",
        traces=tuple(traces),
        layout=layout(axis("Cycle", logarithmic=long), axis("Width at mid range", unit), hovermode="closest"),
        data=pd.concat(drawn)[
            [
                "generation",
                "module",
                "sensor",
                "repetition",
                "trial",
                "cycle",
                "mid_width_percent_fso",
                "settled",
            ]
        ],
        note="The first run of each sensor. All loops of all runs stand in the table of loops.",
        height=400,
    )


def _spaced(count: int, most: int) -> list[int]:
    """Places of at most *most* cycles, evenly spaced on a logarithmic axis, both ends kept."""
    if count <= most:
        return list(range(count))
    places = np.unique(np.round(np.geomspace(1, count, most)).astype(int)) - 1
    return [int(place) for place in places]


def _settling_caption(settling: dict[str, object]) -> str:
    settled, sensors = int(str(settling["settled"])), int(str(settling["sensors"]))
    if settled == 0:
        return "No sensor’s loops settle within the cycles that were run."
    latest = numbers.whole(float(str(settling["latest"])))
    if settled == sensors:
        whose = f"none of {numbers.count(sensors, 'sensor')} is" if sensors > 1 else "the sensor is not"
        change = numbers.significant(100 * STATED_CHANGE, 1, "%")
        return f"From cycle {latest} on, {whose} shown to change by more than {change} of its range a cycle."
    return (
        f"{numbers.whole(settled)} of {numbers.count(sensors, 'sensor')} settle, by cycle {latest} at the "
        "latest; the others still change at the end of a run."
    )


def rates_figure(found: Hysteresis, where: SensorAxis) -> Figure | None:
    """Return the width at mid range against rate; ``None`` where only one rate was run."""
    if not found.several_rates:
        return None
    factor, unit = found.reference.shown_factor, width_unit(found)
    traces: list[Trace] = []
    for (generation, module, sensor), own in found.rates.levels.groupby(["generation", "module", "sensor"]):
        if len(own) < 2:
            continue
        style = where.style(str(generation))
        width = own["mid_width_percent_fso"]
        traces.append(
            line(
                own["rate_per_s"] * factor,
                width,
                colour=style.colour,
                dash=style.dash,
                width=1,
                hovertext=plain(f"{module} {sensor}"),
                hoverinfo="text",
                module=str(module),
                sensor=str(sensor),
            )
        )
    slopes = found.rates.sensors
    changed = int(((slopes["low"] > 0) | (slopes["high"] < 0)).sum())
    return Figure(
        name="rates",
        caption=f"The width changes with rate, beyond noise, in {numbers.whole(changed)} of "
        f"{numbers.count(len(slopes), 'sensor')}; by {_decade(slopes, unit)} a decade of rate in the mean.",
        alternative="Width at mid range against rate on a logarithmic axis, one line a sensor.",
        traces=tuple(traces),
        layout=layout(
            axis("Rate", rate_unit(found.reference), logarithmic=True),
            axis("Width at mid range", unit),
            shapes=[level_line(0, colour=palette.INK)],
        ),
        data=found.rates.levels,
        note="Whiskers are left out for the number of lines; the table has them.",
        height=380,
    )


def _decade(slopes: pd.DataFrame, unit: str) -> str:
    return numbers.significant(float(slopes["percent_fso_per_decade"].mean()), 2, unit)


def components_figure(found: Hysteresis) -> Figure | None:
    """Return the components of the widths as SDs with intervals, by generation."""
    rows = found.components
    own = rows[rows["generation"] != "all"]
    if own.empty:
        return None
    names = [n for n in ("module", "sensor", "run", "repetition", "residual") if n in set(own["component"])]
    generations, unit = tuple(sorted(own["generation"].unique())), width_unit(found)
    traces: list[Trace] = []
    for index, generation in enumerate(generations):
        part = own[own["generation"] == generation]
        shift = (index - (len(generations) - 1) / 2) * 0.2
        traces.append(
            intervals(
                part["sd_percent_fso"],
                part["low"],
                part["high"],
                [names.index(str(c)) + shift for c in part["component"]],
                style=palette.generation_style(generation, generations),
                name=str(generation),
                text=[
                    f"{generation}, {COMPONENT_WORDS[r['called']]}: "
                    f"{numbers.interval(r['sd_percent_fso'], r['low'], r['high'], unit)} ({r['label']})"
                    for r in records_of(part)
                ],
            )
        )
    words = {str(r["component"]): COMPONENT_WORDS[str(r["called"])] for r in records_of(own)}
    largest = own.iloc[int(own["sd_percent_fso"].to_numpy(float).argmax())]
    return Figure(
        name="components",
        caption=f"Widths differ most between {COMPONENT_WORDS[str(largest['called'])]} "
        f"({largest['generation']}): SD "
        f"{numbers.interval(largest['sd_percent_fso'], largest['low'], largest['high'], unit)}.",
        alternative="SDs of the width at mid range with 95 % intervals, by source and generation.",
        traces=tuple(traces),
        layout=layout(
            axis("SD of the width", unit),
            axis(
                "",
                ticks=[(float(i), words[n]) for i, n in enumerate(names)],
                low=-0.6,
                high=len(names) - 0.4,
                reverse=True,
            ),
            margin={"l": 210},
        ),
        data=rows,
        note="Profile intervals. A lower limit of zero: not distinguishable from zero.",
        height=110 + 55 * len(names),
    )


def _tables(found: Hysteresis) -> Iterable[Table]:
    yield _components_table(found)
    if found.several_rates:
        yield _rates_table(found)
    yield _sensors_table(found)


def _sensors_table(found: Hysteresis) -> Table:
    reference, per_cent = found.reference, width_unit(found)
    factor, unit = reference.shown_factor, reference.shown_unit
    rows = found.sensors.sort_values("width_percent_fso", ascending=False, kind="stable")
    links = [slugs.sensor_href(str(m), str(s)) for m, s in zip(rows["module"], rows["sensor"], strict=True)]
    return Table(
        name="hysteresis",
        caption="The settled loops of every sensor, widest first.",
        frame=rows.assign(_href=links),
        shown_rows=40,
        columns=(
            Column("module", "Module", kind="text"),
            Column("sensor", "Sensor", kind="text", href="_href"),
            Column("width_percent_fso", "Width", per_cent, interval=("low", "high")),
            Column("width_strain", "as " + reference.name, unit, factor=factor, digits=2),
            Column("at_strain", "widest at", unit, factor=factor, digits=2),
            Column("degree_of_hysteresis", "By area", "%", factor=100.0, digits=2),
            Column("settled_from_cycle", "Settled from", kind="integer", missing="not settled"),
            Column("softening_percent", "Softens by", "%", digits=2, missing="not settled"),
            Column("runs", "Runs", kind="integer"),
        ),
        note="Width and degree of hysteresis by area are two figures, not two units of one. Settled from: "
        "number of the cycle. Softens by: range of signal of the first loop over that of settled ones. "
        "Intervals: " + "; ".join(sorted(set(found.sensors["variance_source"].astype(str)))) + ".",
    )


def _components_table(found: Hysteresis) -> Table:
    return Table(
        name="loop_components",
        caption="Where the spread of the widths at mid range comes from.",
        frame=found.components.assign(_words=found.components["called"].map(COMPONENT_WORDS)),
        columns=(
            Column("generation", "Generation", kind="text"),
            Column("_words", "Between", kind="text"),
            Column("sd_percent_fso", "SD", width_unit(found), interval=("low", "high")),
            Column("degrees_of_freedom", "Degrees of freedom", kind="integer"),
            Column("label", "What the design supports", kind="text"),
        ),
        shown_rows=None,
    )


def _rates_table(found: Hysteresis) -> Table:
    reference: ReferenceQuantity = found.reference
    factor, unit = reference.shown_factor, reference.shown_unit
    frame = found.rates.sensors.sort_values("delay_s", key=abs, ascending=False, kind="stable")
    millis = frame.assign(
        _delay=frame["delay_s"] * 1e3, _low=frame["delay_low_s"] * 1e3, _high=frame["delay_high_s"] * 1e3
    )
    return Table(
        name="loop_rates",
        caption="Width against rate: constant + delay × rate, and per decade of rate; longest delay first.",
        frame=millis,
        columns=(
            Column("module", "Module", kind="text"),
            Column("sensor", "Sensor", kind="text"),
            Column(
                "strain_at_rest",
                "Width at rate zero, as " + reference.name,
                unit,
                factor=factor,
                interval=("strain_at_rest_low", "strain_at_rest_high"),
            ),
            Column("_delay", "Delay, if all were one", "ms", interval=("_low", "_high")),
            Column(
                "percent_fso_per_decade",
                "A decade of rate",
                width_unit(found),
                interval=("low", "high"),
            ),
        ),
        shown_rows=20,
        note="A signal that is late by τ narrows or turns the loop by 2 τ × rate: what grows linearly with "
        "rate cannot be told from a time shift between channels.",
    )
