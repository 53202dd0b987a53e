"""Loops as curves: the figure of one sensor at a time, and the scripts that hand it every other sensor."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import orjson
import pandas as pd

from campaign.analyses.hysteresis import Hysteresis, SensorCurve
from campaign.pages import numbers, palette, slugs
from campaign.pages.drawing import ready
from campaign.pages.figures import Figure, Trace, axis, layout, line, plain
from campaign.pages.page_data import Fold, script_value
from campaign.pages.rows import records_of_sensor
from campaign.pages.tables import without_told_trial
from campaign.recordings.recording import ReferenceQuantity

MOST_RUNS = 3
"""Runs of one sensor at one rate whose loops are drawn."""

DASHES = ("solid", "dash", "dot", "dashdot", "longdash")
"""How rates are told apart, the slowest first."""

SETTLED_COLOURS = palette.RAMP[4:]
"""Colours of cycles in order; the first cycle stands out by a colour of its own."""

WORDS = {"strain": "Strain", "elongation": "Elongation", "length": "Length"}
"""What an axis of the reference is called."""


def rate_unit(reference: ReferenceQuantity) -> str:
    """Return the unit that rates are shown in."""
    return "%/s" if reference.name == "strain" else "mm/s"


def rate_words(rate: float, reference: ReferenceQuantity) -> str:
    """Return a rate as a reader sees it; 'rate not recorded' where there was no time."""
    return numbers.significant(
        rate * reference.shown_factor, 2, rate_unit(reference), missing="rate not recorded"
    )


def outlines_of(hysteresis: Hysteresis, module: str, sensor: str) -> list[SensorCurve]:
    """Return the loops of a sensor that are drawn: of each rate the first runs."""
    own = [c for c in hysteresis.outlines if c.module == module and c.sensor == sensor]
    runs: dict[float, list[str]] = {}
    for curve in own:
        known = runs.setdefault(_key(curve.rate_per_s), [])
        if curve.trial not in known:
            known.append(curve.trial)
    return [c for c in own if c.trial in runs[_key(c.rate_per_s)][:MOST_RUNS]]


def _key(rate: float) -> float:
    return rate if math.isfinite(rate) else -1.0


def loop_traces(curves: Sequence[SensorCurve], reference: ReferenceQuantity) -> list[Trace]:
    """Return one line a loop; its meta says whose it is, its rate and its cycle."""
    rates = sorted({_key(c.rate_per_s) for c in curves})
    cycles = sorted({c.cycle for c in curves})
    return [
        _trace(c, reference, DASHES[rates.index(_key(c.rate_per_s)) % len(DASHES)], cycles) for c in curves
    ]


def _trace(curve: SensorCurve, reference: ReferenceQuantity, dash: str, cycles: Sequence[int]) -> Trace:
    first = curve.cycle == cycles[0] and len(cycles) > 1
    place = cycles.index(curve.cycle) / max(len(cycles) - 1, 1)
    colour = palette.ATTENTION if first else SETTLED_COLOURS[round(place * (len(SETTLED_COLOURS) - 1))]
    rate = rate_words(curve.rate_per_s, reference)
    words = f"{curve.module} {curve.sensor}, cycle {curve.cycle} of run {curve.repetition}, {rate}"
    trace = line(
        curve.x * reference.shown_factor,
        curve.signal,
        name=f"cycle {curve.cycle}, {rate}",
        colour=colour,
        dash=dash,
        width=1.6 if first else 1.2,
        hovertext=plain(words + (", settled" if curve.settled else "")),
        hoverinfo="text",
    )
    meta = {"module": curve.module, "sensor": curve.sensor, "rate": rate, "cycle": curve.cycle}
    return trace | {"meta": meta}


def first_and_last(curves: Sequence[SensorCurve]) -> list[SensorCurve]:
    """Return, of every run, the first cycle, the first settled one and the last."""
    kept: list[SensorCurve] = []
    for trial in dict.fromkeys(c.trial for c in curves):
        own = [c for c in curves if c.trial == trial]
        settled = [c for c in own if c.settled]
        kept += [c for c in own if c in (own[0], own[-1], *settled[:1])]
    return kept


def loops_figure(
    hysteresis: Hysteresis, module: str, sensor: str, caption: str, *, note: str = ""
) -> Figure | None:
    """Return the loops of one sensor, ``None`` where none is drawn."""
    curves = first_and_last(outlines_of(hysteresis, module, sensor))
    if not curves:
        return None
    reference = hysteresis.reference
    own = records_of_sensor(hysteresis.sensors, module, sensor)
    unit = str(own[0]["unit"]) if own else ""
    return Figure(
        name="loops",
        caption=caption,
        alternative=f"Closed curves of signal against {WORDS[reference.name].lower()}, one a cycle: the "
        "first cycle of each run, the first settled one and the last.",
        traces=tuple(loop_traces(curves, reference)),
        layout=layout(
            axis(WORDS[reference.name], reference.shown_unit), axis("Signal", unit), hovermode="closest"
        ),
        data=_with_departures(hysteresis, curves),
        note=note,
        height=460,
    )


def departures(hysteresis: Hysteresis, curves: Sequence[SensorCurve]) -> list[SensorCurve]:
    """Return loops of one sensor less a straight line, in per cent of what its widths are in per cent of.

    The line has the slope that the sensor's widths are turned into strain by, and passes through the middle
    of all points of *curves*: narrow loops open, and nothing but a straight line is taken off.
    """
    own = records_of_sensor(hysteresis.sensors, curves[0].module, curves[0].sensor)
    if own:
        slope, whole = float(own[0]["slope"]), float(own[0]["full_scale_output"])
    else:  # loops that are drawn and count nowhere: their own line, their own range
        x, signal = (np.concatenate([getattr(c, name) for c in curves]) for name in ("x", "signal"))
        slope, whole = float(np.polyfit(x, signal, 1)[0]), float(np.ptp(signal))
    left = [curve.signal - slope * curve.x for curve in curves]
    middle = float(np.mean(np.concatenate(left)))
    return [
        replace(curve, signal=100.0 * (values - middle) / whole)
        for curve, values in zip(curves, left, strict=True)
    ]


def departures_figure(
    hysteresis: Hysteresis, module: str, sensor: str, caption: str, unit: str, *, note: str = ""
) -> Figure | None:
    """Return the loops of one sensor as departures from a straight line, ``None`` where none is drawn."""
    curves = first_and_last(outlines_of(hysteresis, module, sensor))
    if not curves:
        return None
    reference = hysteresis.reference
    left = departures(hysteresis, curves)
    return Figure(
        name="loop-departures",
        caption=caption,
        alternative=f"Closed curves of the departure from a straight line against "
        f"{WORDS[reference.name].lower()}, one a cycle, the same cycles as in the figure before.",
        traces=tuple(loop_traces(left, reference)),
        layout=layout(
            axis(WORDS[reference.name], reference.shown_unit),
            axis("Departure from the line", unit),
            hovermode="closest",
        ),
        data=_with_departures(hysteresis, curves),
        note=note,
        height=340,
    )


def _with_departures(hysteresis: Hysteresis, curves: Sequence[SensorCurve]) -> pd.DataFrame:
    """Return what is drawn as rows, beside it the departures; the sensor stands in the name of the file."""
    left = [curve.signal for curve in departures(hysteresis, curves)]
    rows = outline_table(curves).assign(departure_percent=np.concatenate(left))
    rates = rows["rate_per_s"].to_numpy(float)
    shown = {rate: float(f"{rate:.4g}") for rate in set(rates[np.isfinite(rates)].tolist())}
    rows = rows.assign(rate_per_s=rows["rate_per_s"].map(shown)).drop(columns=["module", "sensor"])
    return without_told_trial(rows)


def outline_table(curves: Sequence[SensorCurve]) -> pd.DataFrame:
    """Return the points of outlines as rows: what is drawn, thinned with the extremes of both axes kept."""
    points = [len(c.x) for c in curves]
    told = pd.DataFrame({name: [getattr(c, name) for c in curves] for name in _TOLD_OF_CURVE})
    rows = told.loc[np.repeat(np.arange(len(curves)), points)].reset_index(drop=True)
    strain, signal = (np.concatenate([getattr(c, name) for c in curves]) for name in ("x", "signal"))
    return rows.assign(strain=strain, signal=signal)


_TOLD_OF_CURVE = ("module", "sensor", "repetition", "trial", "rate_per_s", "cycle", "settled")


def loop_script_address(module: str, sensor: str) -> str:
    """Return the address of the script with all drawn loops of a sensor."""
    return f"data/loops-{slugs.sensor_slug(module, sensor)}.js"


def loop_scripts(hysteresis: Hysteresis | None) -> dict[str, bytes]:
    """Return a classic script a sensor that hands page 5 its loops, by address."""
    if hysteresis is None:
        return {}
    made: dict[str, bytes] = {}
    for module, sensor in sensors_drawn(hysteresis):
        curves = outlines_of(hysteresis, module, sensor)
        figure = Figure(
            name="loops",
            caption="",
            alternative="",
            traces=tuple(loop_traces(curves, hysteresis.reference)),
            layout=layout(axis(""), axis("")),
        )
        drawn = ready(figure)
        left = ready(replace(figure, traces=_departure_traces(hysteresis, curves)))
        fold = Fold()
        content = {
            "traces": [fold.trace(trace) for trace in drawn.traces],
            "departures": [fold.numbers(trace["y"]) for trace in left.traces],
            "shared": fold.shared,
            "lists": fold.lists,
            "texts": fold.texts,
            "departure_ranges": {name: left.layout[name]["range"] for name in ("xaxis", "yaxis")},
            "ranges": {name: drawn.layout[name]["range"] for name in ("xaxis", "yaxis")},
            "rates": list(dict.fromkeys(t["meta"]["rate"] for t in drawn.traces)),
            "cycles": sorted({t["meta"]["cycle"] for t in drawn.traces}),
        }
        key = orjson.dumps(loop_script_address(module, sensor))
        packed = script_value(content)
        made[loop_script_address(module, sensor)] = (
            b"(window.campaignLoops = window.campaignLoops || {})[" + key + b"] = " + packed + b";\n"
        )
    return made


def _departure_traces(hysteresis: Hysteresis, curves: Sequence[SensorCurve]) -> tuple[Trace, ...]:
    return tuple(loop_traces(departures(hysteresis, curves), hysteresis.reference))


def sensors_drawn(hysteresis: Hysteresis) -> list[tuple[str, str]]:
    """Return (module, sensor) of all sensors with loops to draw, in order."""
    return list(dict.fromkeys((c.module, c.sensor) for c in hysteresis.outlines))
