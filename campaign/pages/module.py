"""One page a module: its sensors' lines and figures, its effects, and the trials that sensors share."""

from __future__ import annotations

import math
from collections.abc import Hashable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd

from campaign.analyses.results import CampaignResults
from campaign.analyses.scope import ANALYSED
from campaign.analyses.sensor_figures import principal_lines
from campaign.pages import numbers, palette, slugs
from campaign.pages.calibration import x_title
from campaign.pages.figures import (
    Figure,
    Layout,
    Trace,
    axis,
    intervals,
    label,
    layout,
    level_line,
    line,
    points,
)
from campaign.pages.influence_sections import module_pressure_figure
from campaign.pages.layout_sections import module_shapes
from campaign.pages.loop_sections import module_widths_figure
from campaign.pages.module_share import MERITS_OF_MODULES, AllModules, ModuleShare
from campaign.pages.page import Page
from campaign.pages.rows import of_module, of_sensor, records_of, records_of_sensor
from campaign.pages.sensor_axis import SensorAxis, interval_traces, sensor_axis
from campaign.pages.tables import Column, Table
from campaign.pages.variance import TERM_WORDS, TERMS, in_shown_units
from campaign.recordings.recording import ReferenceQuantity

_MOST_TRIAL_PLOTS = 16


@dataclass(frozen=True)
class SharedTrial:
    """A trial that carried several sensors of the module, as a section of its page."""

    trial: str
    anchor: str
    kind: str
    started: str
    session: str
    repetition: str
    fate: str
    sensors: tuple[str, ...]
    figure: str


def module_page(share: ModuleShare, common: AllModules) -> Page:
    """Return the page of a module, its neighbours linked."""
    own, module = share.results, share.module
    lines = _lines_of(own, module)
    shared, plots = shared_trials(own, module, lines, common.placed_generations)
    figures: list[Figure | None] = []
    if own.calibration is not None and len(lines):
        where = replace(sensor_axis(lines), generations=common.generations)
        figures = [
            module_lines_figure(own, lines, own.calibration.reference),
            module_merits_figure(own, module, common),
            module_effects_figure(own, module, where),
        ]
    figures += [
        module_widths_figure(own, module, common.generations),
        module_pressure_figure(own, module, common.generations),
    ]
    return Page(
        slug=slugs.module_slug(module),
        number=None,
        title=module,
        template="module.html",
        context={
            "generation": share.generation,
            "module": module,
            "map": common.mapped,
            "sensors": [
                (sensor, slugs.sensor_href(module, sensor), _state(own, module, sensor))
                for sensor in share.sensors
            ],
            "register": _register_of(own, module),
            "batch": _batch_of(own, module),
            "mountings": _mountings_of(own, module),
            "shared": shared,
            "trials": _trials_of(own, module),
            "reference": own.readings.reference,
        },
        figures=(*(figure for figure in figures if figure is not None), *plots),
        tables=tuple(_tables(own, module, lines)),
        description=f"Lines, figures of merit, effects and trials of module {module}.",
        previous=share.neighbours[0],
        following=share.neighbours[1],
    )


def _lines_of(results: CampaignResults, module: str) -> pd.DataFrame:
    if results.calibration is None:
        return pd.DataFrame()
    return principal_lines(of_module(results.calibration.sensor_lines, module))


def _state(results: CampaignResults, module: str, sensor: str) -> str:
    """One of: used, set aside, not analysed."""
    table = results.readings.table
    if len(table) and bool(of_sensor(table, module, sensor)["used"].any()):
        return "used"
    trials = records_of_sensor(results.intake.trials, module, sensor)
    kinds = {trial["kind"] for trial in trials if trial["fate"] == "used"}
    if not kinds:
        return "set aside"
    return "used" if kinds & set(ANALYSED) else "not analysed"


def _batch_of(results: CampaignResults, module: str) -> str:
    batches = sorted(
        {str(b) for b in of_module(results.intake.trials, module)["batch"] if str(b) not in ("", "nan")}
    )
    return ", ".join(batches)


def _mountings_of(results: CampaignResults, module: str) -> list[str]:
    return sorted(
        {str(s) for s in of_module(results.intake.trials, module)["session"] if str(s) not in ("", "nan")}
    )


def _register_of(results: CampaignResults, module: str) -> list[tuple[str, str]]:
    register = results.intake.modules
    if register is None or "module" not in register:
        return []
    rows = of_module(register, module)
    if rows.empty:
        return []
    row = rows.iloc[0]
    kept = [c for c in register.columns if c not in ("module", "generation", "batch")]
    return [(str(c).replace("_", " "), str(row[c])) for c in kept if str(row[c]) not in ("", "nan", "None")]


def _trials_of(results: CampaignResults, module: str) -> list[dict[Hashable, Any]]:
    """Trials of single sensors, each with the address of its section."""
    rows = of_module(results.intake.trials, module)
    rows = rows[rows["sensor"].astype(str) != ""].drop_duplicates(["file", "sensor"])
    return [
        {**row, "href": slugs.trial_href(module, str(row["sensor"]), str(row["file"]))}
        for row in records_of(rows.sort_values(["sensor", "started", "file"], kind="stable"))
    ]


def module_lines_figure(
    results: CampaignResults, lines: pd.DataFrame, reference: ReferenceQuantity
) -> Figure:
    """Return the lines of the module's sensors with all readings used."""
    factor = reference.shown_factor
    unit = str(lines["unit"].iloc[0])
    readings = _used_readings(results, str(lines["module"].iloc[0]))
    traces: list[Trace] = []
    labels: list[Layout] = []
    for index, row in enumerate(records_of(lines)):
        style = palette.GENERATION_STYLES[index % len(palette.GENERATION_STYLES)]
        module, sensor = str(row["module"]), str(row["sensor"])
        ends = np.array([row["strain_low"], row["strain_high"]], dtype=float)
        fitted = row["intercept"] + row["slope"] * ends
        traces.append(
            line(ends * factor, fitted, colour=style.colour, dash=style.dash, module=module, sensor=sensor)
        )
        own = of_sensor(readings, module, sensor).iloc[:300]
        traces.append(
            points(
                own["x"] * factor,
                own["signal"],
                style=style,
                size=4,
                open_marker=True,
                text=[
                    f"{module} {sensor}, run {r}, reading {o}"
                    for r, o in zip(own["repetition"].tolist(), own["order"].tolist(), strict=True)
                ],
                links=[slugs.trial_href(module, sensor, str(t)) for t in own["trial"].tolist()],
                module=module,
                sensor=sensor,
            )
        )
        labels.append(label(sensor, float(ends[1]) * factor, float(fitted[1]), colour=style.colour))
    span = float(readings["signal"].max() - readings["signal"].min())
    return Figure(
        name="lines",
        caption=f"The lines of {numbers.count(len(lines), 'sensor')} of {lines['module'].iloc[0]} with the "
        f"readings of all runs.",
        alternative=f"Signal against {x_title(reference).lower()}, one line a sensor with its readings.",
        traces=tuple(traces),
        layout=layout(
            axis(x_title(reference), reference.shown_unit),
            axis("Signal", unit),
            annotations=_apart(labels, 0.05 * span),
            margin={"r": 56},
        ),
        table="readings",
        note="Every point leads to its trial.",
        height=400,
    )


def _apart(labels: Sequence[Layout], spacing: float) -> list[Layout]:
    """Return the labels in order of height, moved up where they would cover each other."""
    made: list[Layout] = []
    for one in sorted(labels, key=lambda each: float(each["y"])):
        lowest = made[-1]["y"] + spacing if made else -math.inf
        made.append({**one, "y": max(one["y"], lowest)})
    return made


def _used_readings(results: CampaignResults, module: str) -> pd.DataFrame:
    rows = of_module(results.readings.table, module)
    return rows[rows["used"]]


def module_merits_figure(results: CampaignResults, module: str, common: AllModules) -> Figure | None:
    """Return the figures of merit in %FSO of the module's sensors among all the campaign's sensors."""
    figures = of_module(results.limits.figures, module)
    own = figures[figures["figure"].isin(MERITS_OF_MODULES)].dropna(subset=["estimate"])
    if own.empty:
        return None
    order = [name for name in MERITS_OF_MODULES if name in set(own["figure"])]
    sensors = sorted(own["sensor"].unique())
    edge = 3 * common.largest_merit
    traces: list[Trace] = []
    for index, sensor in enumerate(sensors):
        rows = records_of_sensor(own, module, str(sensor))
        style = palette.GENERATION_STYLES[index % len(palette.GENERATION_STYLES)]
        shift = (index - (len(sensors) - 1) / 2) * min(0.13, 0.75 / len(sensors))
        traces.append(
            intervals(
                [row["estimate"] for row in rows],
                [row["low"] for row in rows],
                [min(row["high"], edge) for row in rows],
                [order.index(str(row["figure"])) + shift for row in rows],
                style=style,
                text=[
                    f"{module} {sensor}: {r['figure']} "
                    f"{numbers.interval(r['estimate'], r['low'], r['high'], '%FSO')}"
                    for r in rows
                ],
                links=[slugs.sensor_href(module, str(sensor))] * len(rows),
                module=module,
                sensor=str(sensor),
            )
        )
    for index, name in enumerate(order):
        middle = common.typical_merits[name]
        traces.append(line([middle, middle], [index - 0.45, index + 0.45], colour=palette.SOFT, dash="dot"))
    worst = own.iloc[int(own["estimate"].to_numpy(float).argmax())]
    return Figure(
        name="merits",
        caption=f"The largest figure of the module is the {worst['figure']} of {worst['sensor']}: "
        f"{numbers.interval(worst['estimate'], worst['low'], worst['high'], '%FSO')}.",
        alternative="Dots with 95 % intervals for each sensor: " + ", ".join(order) + " in per cent of "
        "full-scale output.",
        traces=tuple(traces),
        layout=layout(
            axis("Per cent of full-scale output", "%FSO"),
            axis(
                "",
                ticks=[(float(i), n) for i, n in enumerate(order)],
                low=-0.6,
                high=len(order) - 0.4,
                reverse=True,
            ),
            margin={"l": 110},
        ),
        data=own,
        note="Dotted uprights are the medians of all sensors of the campaign. Colours are those of the "
        "lines above.",
        height=120 + 40 * len(order) + 14 * len(sensors) * len(order),
    )


def module_effects_figure(results: CampaignResults, module: str, where: SensorAxis) -> Figure | None:
    """Return the effects of the module's sensors on the slope, with intervals."""
    if results.variance is None:
        return None
    rows = results.variance.effects
    rows = of_module(rows[(rows["level"] == "sensor")], module).dropna(subset=["estimate"])
    rows = rows[rows["generation"] != "all"] if (rows["generation"] != "all").any() else rows
    term = next((name for name in TERMS if (rows["term"] == name).any()), "")
    rows = in_shown_units(rows[rows["term"] == term])
    known = set(where.places)
    rows = rows[
        [key in known for key in rows[["generation", "module", "sensor"]].itertuples(index=False, name=None)]
    ]
    if rows.empty:
        return None
    unit = str(rows["unit"].iloc[0])
    text = [
        f"{module} {r['sensor']}: {numbers.interval(r['estimate'], r['low'], r['high'], unit)}"
        for r in records_of(rows)
    ]
    ticks = [(where.places[key], key[2]) for key in where.places]
    return Figure(
        name="effects",
        caption=f"Effects of the sensors on the {TERM_WORDS.get(term, term)}, about the module’s own mean.",
        alternative=f"Dots with 95 % intervals, one a sensor: effect on the {TERM_WORDS.get(term, term)}, "
        f"with an upright at zero.",
        traces=tuple(interval_traces(rows, where, text)),
        layout=layout(
            axis(f"Effect on the {TERM_WORDS.get(term, term)}", unit),
            axis("", ticks=ticks, low=-0.6, high=0.6, reverse=True),
            shapes=[level_line(0, upright=True, colour=palette.INK)],
        ),
        data=rows,
        note="Predicted by the nested model: drawn towards zero the less the data say.",
        height=110 + 30 * len(ticks),
    )


def shared_trials(
    results: CampaignResults, module: str, lines: pd.DataFrame, placed: Sequence[str]
) -> tuple[list[SharedTrial], list[Figure]]:
    """Return the trials that carried several of the module's sensors, and their little plots.

    *placed* are the generations with rebuilt shapes, in the order of their colours.
    """
    trials = of_module(results.intake.trials, module)
    trials = trials[trials["sensor"].astype(str) != ""]
    counts = trials.groupby("file")["sensor"].nunique()
    wide = trials[trials["file"].isin(counts[counts > 1].index)]
    sections: list[SharedTrial] = []
    plots: list[Figure] = []
    first = wide.sort_values(["started", "file"], kind="stable").drop_duplicates("file")
    for index, row in enumerate(records_of(first), 1):
        own = wide[wide["file"] == row["file"]]
        plot = None
        if str(row["kind"]) == "layout":
            plot = module_shapes(results, module, str(row["file"]), f"trial-{index}", placed)
        elif index <= _MOST_TRIAL_PLOTS and len(lines):
            plot = shared_trial_plot(results, module, str(row["file"]), lines, index)
        if plot is not None:
            plots.append(plot)
        sections.append(
            SharedTrial(
                trial=str(row["file"]),
                anchor=slugs.trial_anchor(str(row["file"])),
                kind=str(row["kind"]),
                started=str(row["started"]).replace("T", " ") if str(row["started"]) != "nan" else "",
                session=str(row["session"]) if str(row["session"]) != "nan" else "",
                repetition=str(row["repetition"]),
                fate=str(row["fate"]),
                sensors=tuple(sorted(own["sensor"].astype(str).unique())),
                figure="" if plot is None else plot.name,
            )
        )
    return sections, plots


def shared_trial_plot(
    results: CampaignResults, module: str, file: str, lines: pd.DataFrame, index: int
) -> Figure | None:
    """Return departures of all sensors of one shared run from their own lines."""
    rows = of_module(results.readings.table, module)
    rows = rows[rows["trial"] == file].merge(
        lines[["sensor", "intercept", "slope"]], on="sensor", suffixes=("", "_line")
    )
    if rows.empty:
        return None
    reference = results.readings.reference
    factor = reference.shown_factor
    rows["departure"] = (
        (rows["signal"] - rows["intercept"] - rows["slope"] * rows["x"]) / rows["slope"] * factor
    )
    traces = []
    for place, (sensor, own) in enumerate(rows.groupby("sensor", sort=True)):
        style = palette.GENERATION_STYLES[place % len(palette.GENERATION_STYLES)]
        path = own.sort_values(["repetition", "order"])
        traces.append(
            line(
                path["x"] * factor,
                path["departure"],
                colour=style.colour,
                dash=style.dash,
                width=1.2,
                module=module,
                sensor=str(sensor),
            )
        )
    return Figure(
        name=f"trial-{index}",
        caption=f"All sensors of the run move together by "
        f"{numbers.significant(abs(float(rows['departure'].mean())), 2, reference.shown_unit)} on average.",
        alternative=f"Departure of each sensor from its own line against {x_title(reference).lower()}.",
        traces=tuple(traces),
        layout=layout(
            axis(x_title(reference), reference.shown_unit),
            axis("Departure", reference.shown_unit),
            shapes=[level_line(0, colour=palette.INK)],
        ),
        data=rows[["sensor", "session", "repetition", "order", "direction", "x", "signal", "departure"]],
        height=210,
    )


def _tables(results: CampaignResults, module: str, lines: pd.DataFrame) -> list[Table]:
    if lines.empty:
        return []
    reference = results.readings.reference
    unit = str(lines["unit"].iloc[0])
    frame = lines.assign(
        _se_slope=lines["var_slope"] ** 0.5,
        _href=[slugs.sensor_href(module, str(s)) for s in lines["sensor"]],
    )
    factor = 1 / reference.shown_factor
    return [
        Table(
            name="module_lines",
            caption="The lines of the module’s sensors.",
            frame=frame,
            columns=(
                Column("sensor", "Sensor", kind="text", href="_href"),
                Column("position", "Position", kind="text"),
                Column("runs", "Runs", kind="integer"),
                Column(
                    "slope",
                    "Slope",
                    f"{unit} per {reference.shown_unit}",
                    factor=factor,
                    uncertainty="_se_slope",
                ),
                Column("gauge_factor", "Gauge factor", digits=3),
                Column("linearity_least_squares_percent_fso", "Linearity", "%FSO", digits=2),
                Column("hysteresis_percent_fso", "Hysteresis", "%FSO", digits=2, missing="one branch"),
                Column("repeatability_percent_fso", "Repeatability", "%FSO", digits=2, missing="one run"),
            ),
            source="sensor_lines",
        )
    ]
