"""Thousands of cycles on page 5: every sensor to its own end, and the share that survives."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import pandas as pd

from campaign.analyses.endurance import Endurance
from campaign.pages import numbers, slugs
from campaign.pages.figures import Figure, Trace, axis, band, layout, line, points
from campaign.pages.sensor_axis import sensor_axis
from campaign.pages.tables import Column, Table
from campaign.recordings.recording import FloatArray

MOST_POINTS = 30
"""Points of one sensor that are drawn; the file holds all."""

_TITLES = {"zero": "Change of zero signal", "sensitivity": "Change of sensitivity"}


def endurance_figures(endurance: Endurance | None) -> Iterable[Figure]:
    """Return zero and sensitivity against cycles, and survival; nothing where it was not measured."""
    if endurance is None:
        return []
    made = [_change_figure(endurance, name) for name in ("zero", "sensitivity")]
    return [*(figure for figure in made if figure is not None), survival_figure(endurance)]


def _change_figure(endurance: Endurance, name: str) -> Figure | None:
    """Every sensor's own change against the logarithm of cycles, to its failure or the end of its test."""
    column = f"{name}_change_percent"
    rows = endurance.log.dropna(subset=[column])
    rows = rows[rows["cycle"] > 0]
    if rows.empty:
        return None
    where = sensor_axis(rows)
    failed = {
        (str(r["module"]), str(r["sensor"])): float(r["failed_at_cycle"])
        for r in endurance.sensors.dropna(subset=["failed_at_cycle"]).to_dict("records")
    }
    traces: list[Trace] = []
    for (generation, module, sensor, _), own in rows.groupby(["generation", "module", "sensor", "trial"]):
        style = where.style(str(generation))
        kept = own.iloc[
            np.unique(np.linspace(0, len(own) - 1, min(len(own), MOST_POINTS)).round().astype(int))
        ]
        links = [slugs.sensor_href(str(module), str(sensor))] * len(kept)
        text = [
            f"{module} {sensor}, cycle {numbers.whole(c)}: {numbers.significant(v, 2, '%')}"
            for c, v in zip(kept["cycle"], kept[column], strict=True)
        ]
        traces.append(
            line(
                kept["cycle"],
                kept[column],
                colour=style.colour,
                dash=style.dash,
                text=text,
                links=links,
                module=str(module),
                sensor=str(sensor),
            )
        )
        if (str(module), str(sensor)) in failed:
            last = kept.iloc[-1:]
            end = numbers.whole(failed[str(module), str(sensor)])
            words = f"{module} {sensor} works no longer from cycle {end}"
            traces.append(
                points(
                    last["cycle"],
                    last[column],
                    style=style,
                    text=[words],
                    open_marker=True,
                    module=str(module),
                    sensor=str(sensor),
                )
            )
    slopes = endurance.sensors.dropna(subset=[f"{name}_percent_per_decade"])
    clear = int(((slopes[f"{name}_low"] > 0) | (slopes[f"{name}_high"] < 0)).sum())
    return Figure(
        name=f"endurance-{name}",
        caption=f"{_TITLES[name]} over {numbers.whole(float(rows['cycle'].max()))} cycles: a trend against "
        f"the logarithm of cycles is told from none in {numbers.whole(clear)} of "
        f"{numbers.count(len(slopes), 'sensor')}.",
        alternative=f"{_TITLES[name]} in per cent against cycles on a logarithmic axis, one line a sensor; "
        "open marks where a sensor failed.",
        traces=tuple(traces),
        layout=layout(axis("Cycles", logarithmic=True), axis(_TITLES[name], "%"), hovermode="closest"),
        table="endurance_log",
        note="Each sensor is drawn to its own end; no mean is formed over those that lasted.",
        height=380,
    )


def survival_figure(endurance: Endurance) -> Figure:
    """Return the share of sensors that survive, by generation, as steps with their band."""
    where = sensor_axis(endurance.sensors)
    traces: list[Trace] = []
    for generation, rows in endurance.survival.groupby("generation", sort=True):
        style = where.style(str(generation))
        x = _steps(np.concatenate([[0.0], rows["cycle"].to_numpy(float)]))[1:]
        share, low, high = (_stepped(rows, key) for key in ("survival", "low", "high"))
        traces.append(band(x, low, high, colour=style.colour))
        traces.append(line(x, share, colour=style.colour, dash=style.dash, name=str(generation)))
    tested, failed = len(endurance.sensors), int(endurance.sensors["failed_at_cycle"].notna().sum())
    return Figure(
        name="survival",
        caption=f"{numbers.whole(failed)} of {numbers.count(tested, 'sensor')} failed within the cycles run.",
        alternative="Share of sensors that work against cycles, falling in steps, with a 95 % band.",
        traces=tuple(traces),
        layout=layout(axis("Cycles"), axis("Share that works", low=0.0, high=1.05)),
        data=endurance.survival,
        note="Product-limit estimate: sensors whose test ended before they failed count as long as they were "
        "tested.",
        height=340,
    )


def _steps(values: FloatArray) -> FloatArray:
    return np.repeat(values, 2)


def _stepped(rows: pd.DataFrame, key: str) -> FloatArray:
    """Value before each step and after it, beginning with one."""
    return _steps(np.concatenate([[1.0], rows[key].to_numpy(float)]))[:-1]


def endurance_tables(endurance: Endurance | None) -> Iterable[Table]:
    """Return the table of endurance trials; nothing where there are none."""
    if endurance is None:
        return []
    return [
        Table(
            name="endurance",
            caption="Every endurance trial: how long it lasted and what changed a decade of cycles.",
            frame=endurance.sensors,
            columns=(
                Column("module", "Module", kind="text"),
                Column("sensor", "Sensor", kind="text"),
                Column("last_working_cycle", "Worked to cycle", kind="integer"),
                Column("failed_at_cycle", "Failed at cycle", kind="integer", missing="lasted"),
                Column("zero_percent_per_decade", "Zero", "% a decade", interval=("zero_low", "zero_high")),
                Column(
                    "sensitivity_percent_per_decade",
                    "Sensitivity",
                    "% a decade",
                    interval=("sensitivity_low", "sensitivity_high"),
                ),
            ),
        )
    ]
