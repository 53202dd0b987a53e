"""Figures of page 6 and of the holds on sensors' pages: log-time curves, forms, zeros, Allan deviations."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd

from campaign.analyses.drift import Drift
from campaign.analyses.hold_figures import OF_FULL_SCALE, HoldCurve
from campaign.pages import numbers, palette, slugs
from campaign.pages.figures import (
    Figure,
    Layout,
    Trace,
    axis,
    band,
    label,
    layout,
    level_line,
    line,
    panel,
    points,
    small_multiples,
)
from campaign.pages.rows import records_of
from campaign.pages.sensor_axis import interval_traces, sensor_axis
from campaign.pages.thinning import thinned
from campaign.recordings.recording import ReferenceQuantity

MOST_LINE_POINTS = 800
"""Points of the figure of all holds: each carries its sentence and its link, and a page stays light."""
MOST_CURVES = 400
"""Curves of a figure of all holds; beyond it those that change most."""

FORM_DASHES = ("dash", "dot", "dashdot", "longdash", "solid")

PLACE_WORDS: Mapping[str, str] = {"rest": "at rest", "stretched": "stretched", "unknown": "length not known"}
"""Where holds were kept, in words."""

_TICKS: tuple[tuple[float, str], ...] = (
    *((1e-3, "1 ms"), (1e-2, "10 ms"), (0.1, "0.1 s"), (1.0, "1 s"), (10.0, "10 s"), (60.0, "1 min")),
    *((600.0, "10 min"), (3600.0, "1 h"), (36000.0, "10 h"), (86400.0, "1 d"), (864000.0, "10 d")),
)


def time_axis(title: str, low: float, high: float) -> Layout:
    """Return a logarithmic axis of times in s, marked in the units that people say."""
    return axis(
        title, low=low, high=high, logarithmic=True, ticks=[(t, w) for t, w in _TICKS if low <= t <= high]
    )


def time_words(seconds: float, missing: str = numbers.NOT_IDENTIFIABLE) -> str:
    """Return a time in s, min, h or d, to two digits."""
    if not math.isfinite(seconds):
        return missing
    for unit, size in (("d", 86400.0), ("h", 3600.0), ("min", 60.0)):
        if seconds >= 0.995 * size:
            return numbers.significant(seconds / size, 2, unit)
    return numbers.significant(seconds, 2, "s")


def percent_unit(percent_of: str) -> str:
    """Return the unit of per cent figures: %FSO, or of the first settled signal."""
    return "%FSO" if percent_of == OF_FULL_SCALE else "% of first signal"


def hold_words(curve: HoldCurve, reference: ReferenceQuantity) -> str:
    """Return what a hold is called: sensor, place and run."""
    at = ""
    if math.isfinite(curve.strain) and curve.place == "stretched":
        at = " at " + numbers.significant(curve.strain * reference.shown_factor, 3, reference.shown_unit)
    elif curve.place == "rest":
        at = " at rest"
    return f"{curve.module} {curve.sensor}{at}, run {curve.repetition}"


def holds_figure(drift: Drift) -> Figure | None:
    """Return all holds on log time, a panel a generation and place, one line a hold."""
    curves = sorted(drift.curves, key=lambda c: -abs(np.nan_to_num(c.change)))[:MOST_CURVES]
    if not curves:
        return None
    generations = tuple(sorted({c.generation for c in curves}))
    panels = sorted({(c.place != "stretched", c.place, c.generation, c.percent_of) for c in curves})
    most = max(MOST_LINE_POINTS // len(curves), 12)
    ends = _ends(np.concatenate([c.times_s for c in curves]))
    traces = [
        _mean_line(
            c,
            most,
            panel(panels.index((c.place != "stretched", c.place, c.generation, c.percent_of))),
            generations,
            drift.reference,
        )
        for c in sorted(curves, key=lambda c: (c.module, c.sensor, c.trial, c.hold))
    ]
    units = {percent_unit(c.percent_of) for c in curves}
    titles = [_panel_words(place, generation, generations) for _, place, generation, _ in panels]
    rows = math.ceil(len(panels) / 2)
    return Figure(
        name="holds",
        caption=_holds_caption(drift),
        alternative="Change of the signal since the first settled one against time on a logarithmic axis, "
        "one line a hold, a panel for each generation and for holds stretched and at rest.",
        traces=tuple(traces),
        layout=small_multiples(
            titles,
            time_axis("Time after the end of the ramp", *ends),
            axis("Change", units.pop() if len(units) == 1 else "%"),
            columns=min(len(panels), 2),
            gap=(0.06, 0.28 / rows if rows > 1 else 0.1),
        ),
        table="holds",
        note="A straight line here is logarithmic: the same change in every decade of time. Every line leads "
        "to its trial.",
        height=380 if rows == 1 else 80 + 270 * rows,
    )


def _mean_line(
    curve: HoldCurve, most: int, axes: str, generations: tuple[str, ...], reference: ReferenceQuantity
) -> Trace:
    times, values = thinned(curve.times_s, curve.mean, most)
    style = palette.generation_style(curve.generation, generations)
    unit = percent_unit(curve.percent_of)
    words = hold_words(curve, reference)
    return line(
        times,
        values,
        colour=style.colour,
        dash=style.dash,
        width=1.1,
        text=[
            f"{words}, after {time_words(t)}: {numbers.significant(v, 2, unit)} ({curve.called})"
            for t, v in zip(times, values, strict=True)
        ],
        links=[slugs.trial_href(curve.module, curve.sensor, curve.trial)] * len(times),
        module=curve.module,
        sensor=curve.sensor,
        axes=axes,
    )


def _panel_words(place: str, generation: str, generations: Sequence[str]) -> str:
    words = PLACE_WORDS[place]
    return f"{words} · {generation}" if len(generations) > 1 else words


def _ends(times: np.ndarray[Any, np.dtype[np.float64]]) -> tuple[float, float]:
    known = times[np.isfinite(times) & (times > 0)]
    return float(known.min()) / 1.2, float(known.max()) * 1.2


def _holds_caption(drift: Drift) -> str:
    holds = drift.holds.dropna(subset=["change_end_percent_fso"])
    if holds.empty:
        return "Holds against time."
    worst = holds.iloc[int(holds["change_end_percent_fso"].abs().to_numpy(float).argmax())]
    change = numbers.interval(
        worst["change_end_percent_fso"],
        worst["change_end_low"],
        worst["change_end_high"],
        percent_unit(str(worst["percent_of"])),
    )
    who = f"{worst['module']} {worst['sensor']}"
    many = len(drift.holds)
    what = f"Of {numbers.count(many, 'hold')} that of {who} changes most" if many > 1 else f"Hold of {who}"
    return f"{what}: {change} by its end, after {time_words(float(worst['duration_s']))}."


def hold_figure(
    curve: HoldCurve,
    reference: ReferenceQuantity,
    name: str,
    height: int = 340,
    most: int = 500,
    with_samples: bool = True,
    explained: bool = True,
) -> Figure:
    """Return one hold in full: its envelope, its mean and the forms within two units of the best.

    *most* is how many stretches of time are drawn at most; neighbours go together, and no extreme is lost.
    Its file holds the samples, or, without them, the stretches as drawn. Further ones of a page need not be
    *explained* again.
    """
    unit = percent_unit(curve.percent_of)
    drawn = fewer_stretches(curve, most)
    traces: list[Trace] = [
        band(drawn.times_s, drawn.low, drawn.high, colour=palette.RAMP[4], opacity=0.35),
        line(drawn.times_s, drawn.mean, colour=palette.RAMP[7], width=1.3, text=_said(drawn, unit)),
    ]
    for dash, (form, values) in zip(FORM_DASHES, curve.forms, strict=False):
        traces.append(
            line(
                curve.form_times_s,
                values,
                colour=palette.ATTENTION,
                dash=dash,
                width=1.6,
                name=form,
            )
        )
    return Figure(
        name=name,
        caption=_hold_caption(curve, reference),
        alternative="Change of the signal against time on a logarithmic axis: a band from the lowest to the "
        "highest sample, their mean, and the fitted forms.",
        traces=tuple(traces),
        layout=layout(
            time_axis("Time after the end of the ramp", *_ends(curve.times_s)),
            axis("Change", unit),
            annotations=_form_labels(curve),
            margin={"r": 150 if curve.forms else 24},
        ),
        data=curve_table(curve) if with_samples else stretches_table(drawn),
        note=_hold_note(curve, with_samples) if explained else "",
        height=height,
    )


def _hold_note(curve: HoldCurve, with_samples: bool) -> str:
    return (
        "The band reaches from the lowest to the highest sample of every stretch of time: no spike is lost, "
        f"and {_held_words(curve, with_samples)}. Forms are drawn over the data they were fitted to."
    )


def fewer_stretches(curve: HoldCurve, most: int) -> HoldCurve:
    """Return *curve* with neighbouring stretches of time put together until there are at most *most*.

    The lowest and highest of a group stay; its time and mean are the means of its members.
    """
    together = -(-len(curve.times_s) // most)
    if together <= 1:
        return curve
    first = np.arange(0, len(curve.times_s), together)
    members = np.diff(np.append(first, len(curve.times_s)))
    return replace(
        curve,
        times_s=np.exp(np.add.reduceat(np.log(curve.times_s), first) / members),
        low=np.minimum.reduceat(curve.low, first),
        high=np.maximum.reduceat(curve.high, first),
        mean=np.add.reduceat(curve.mean, first) / members,
    )


def _said(curve: HoldCurve, unit: str) -> list[str]:
    return [
        f"After {time_words(t)}: {numbers.significant(v, 3, unit)}"
        for t, v in zip(curve.times_s, curve.mean, strict=True)
    ]


def _form_labels(curve: HoldCurve) -> list[Layout]:
    """Names of the forms at their ends, one below the other where they end alike."""
    if not curve.forms:
        return []
    ordered = sorted(curve.forms, key=lambda named: -float(named[1][-1]))
    return [
        label(
            form,
            1.0,
            1.0 - 0.09 * place,
            colour=palette.ATTENTION,
            shift=(6, -6),
            size=11,
            paper=True,
        )
        for place, (form, _) in enumerate(ordered)
    ]


def _hold_caption(curve: HoldCurve, reference: ReferenceQuantity) -> str:
    words = hold_words(curve, reference)
    if not curve.forms:
        return f"{words}: too short for a form to be told."
    names = [form for form, _ in curve.forms]
    if len(names) == 1:
        return (
            f"{words}: the change ({curve.called}) is best followed by the {names[0]} form, "
            "no other within two units."
        )
    return (
        f"{words}: the change ({curve.called}) is followed about equally well by {len(names)} forms, "
        f"{names[0]} first."
    )


def _held_words(curve: HoldCurve, with_samples: bool) -> str:
    """Say which samples a hold's file holds."""
    if not with_samples:
        recorded = numbers.whole(curve.recorded_samples)
        return f"the CSV holds every stretch; all {recorded} samples stand in the recording"
    return f"the CSV holds {_samples_words(curve)}"


def _samples_words(curve: HoldCurve) -> str:
    if len(curve.samples) == curve.recorded_samples:
        return "every sample"
    return (
        f"{numbers.whole(len(curve.samples))} of {numbers.whole(curve.recorded_samples)} samples: the first "
        "ones, and the lowest and highest of every short stretch after them"
    )


def curve_table(curve: HoldCurve) -> pd.DataFrame:
    """Return the kept samples of a hold, and below them the forms, one row a time and form."""
    samples = pd.DataFrame(
        {
            "curve": "samples",
            "time_s": np.round(curve.samples_s, 6),
            "signal": curve.samples,
            "change_percent": np.round((curve.samples - curve.zero) * curve.per_cent, 6),
        }
    )
    forms = [
        pd.DataFrame(
            {
                "curve": form,
                "time_s": curve.form_times_s,
                "signal": curve.zero + values / curve.per_cent,
                "change_percent": values,
            }
        )
        for form, values in curve.forms
    ]
    return pd.concat([samples, *forms], ignore_index=True)


def stretches_table(drawn: HoldCurve) -> pd.DataFrame:
    """Return the stretches of a hold as drawn, and below them the forms, one row a time and form."""
    columns = ("curve", "time_s", "change_percent", "low", "high")
    stretches = ("mean of samples", drawn.times_s, drawn.mean, drawn.low, drawn.high)
    forms = [(form, drawn.form_times_s, values, np.nan, np.nan) for form, values in drawn.forms]
    parts = [pd.DataFrame(dict(zip(columns, part, strict=True))) for part in (stretches, *forms)]
    return pd.concat(parts, ignore_index=True)


def decades_figure(drift: Drift) -> Figure | None:
    """Return the slope a decade of every sensor's stretched hold with its interval."""
    rows = drift.holds.dropna(subset=["percent_fso_per_decade"])
    rows = rows[rows["place"] != "rest"]
    if rows.empty:
        return None
    rows = rows.assign(_size=rows["percent_fso_per_decade"].abs())
    keys = ["generation", "module", "sensor"]
    rows = rows.sort_values([*keys, "_size"], ascending=[True, True, True, False], kind="stable")
    rows = rows.drop_duplicates(keys).assign(estimate=lambda r: r["percent_fso_per_decade"])
    where = sensor_axis(rows)
    unit = percent_unit(str(rows["percent_of"].iloc[0]))
    text = [
        f"{r['module']} {r['sensor']}: {numbers.interval(r['estimate'], r['low'], r['high'], unit)} a decade"
        for r in records_of(rows)
    ]
    told = int(((rows["low"] > 0) | (rows["high"] < 0)).sum())
    return Figure(
        name="decades",
        caption=f"The change a decade of time is told from none in {numbers.whole(told)} of "
        f"{numbers.count(len(rows), 'sensor')}; it {'lies between' if len(rows) > 1 else 'is'} "
        + (f"{numbers.significant(float(rows['estimate'].min()), 2)} and " if len(rows) > 1 else "")
        + f"{numbers.significant(float(rows['estimate'].max()), 2, unit)}.",
        alternative="Dots with 95 % intervals, one a sensor, by module: change in a decade of time.",
        traces=tuple(interval_traces(rows, where, text)),
        layout=layout(
            axis("Change a decade of time", unit),
            where.axis(),
            shapes=[level_line(0, upright=True, colour=palette.INK)],
        ),
        table="holds",
        note="The hold with the largest slope of each sensor. Intervals take the autocorrelation of the "
        "residuals into account.",
        height=where.height,
    )


def zero_figure(drift: Drift) -> Figure | None:
    """Return the zero of every sensor across its sessions, a panel a generation."""
    if drift.zero is None:
        return None
    table = drift.zero.table
    sessions = table.groupby(["generation", "module", "sensor"])["zero_signal"].transform("size")
    rows = table[sessions > 1]
    if rows.empty:
        return None
    timed = bool(rows["day"].notna().all()) and float(np.ptp(rows["day"])) > 0.01
    place = rows["day"] if timed else rows.groupby(["generation", "module", "sensor"]).cumcount() + 1
    rows = rows.assign(_place=place.astype(float))
    generations = tuple(sorted(rows["generation"].unique()))
    traces = list(_zero_traces(rows, generations, "day" if timed else "session"))
    return Figure(
        name="zero",
        caption=_zero_caption(drift),
        alternative="Departure of the zero from the first session in per cent of full-scale output, one line "
        "a sensor, against days or sessions.",
        traces=tuple(traces),
        layout=small_multiples(
            list(generations),
            axis("Day" if timed else "Session"),
            axis("Zero less first zero", "%FSO"),
            columns=min(len(generations), 2),
        ),
        table="zero_over_time",
        note="The first reading at zero of every run, mean over the runs of a session.",
        height=380,
    )


def _zero_traces(rows: pd.DataFrame, generations: tuple[str, ...], words: str) -> Iterable[Trace]:
    for (generation, module, sensor), own in rows.groupby(["generation", "module", "sensor"], sort=True):
        style = palette.generation_style(str(generation), generations)
        axes = panel(generations.index(str(generation)))
        yield line(
            own["_place"],
            own["departure_percent_fso"],
            colour=style.colour,
            width=1,
            module=str(module),
            sensor=str(sensor),
            axes=axes,
        )
        text = [
            f"{module} {sensor}, {words} {numbers.significant(r['_place'], 2)}"
            f"{', mounting ' + str(r['session']) if r['session'] else ''}: "
            f"{numbers.interval(r['departure_percent_fso'], r['departure_low'], r['departure_high'], '%FSO')}"
            for r in records_of(own)
        ]
        yield points(
            own["_place"],
            own["departure_percent_fso"],
            style=style,
            size=5,
            text=text,
            links=[slugs.sensor_href(str(module), str(sensor))] * len(own),
            module=str(module),
            sensor=str(sensor),
            axes=axes,
        )


def _zero_caption(drift: Drift) -> str:
    rows = drift.zero.model if drift.zero is not None else pd.DataFrame(columns=["term"])
    slopes = rows[rows["term"] == "slope"]
    if slopes.empty:
        return "The zero of every sensor, session by session."
    told = [r for r in records_of(slopes) if r["low"] > 0 or r["high"] < 0]
    if not told:
        return "No slope of the zero in time can be told from none; what moves it is mounting and run."
    return (
        "; ".join(
            f"{r['generation']}: the zero moves by "
            f"{numbers.interval(r['estimate'], r['low'], r['high'], '%FSO a day')}"
            for r in told
        )
        + "."
    )


def allan_figure(drift: Drift) -> Figure | None:
    """Return the overlapping Allan deviation of every hold at rest against averaging time."""
    rows = drift.allan[(drift.allan["kind"] != "blank") & (drift.allan["deviation_signal"] > 0)]
    if rows.empty:
        return None
    by_line = bool(rows["deviation_strain"].notna().all())
    reference = drift.reference
    factor = reference.shown_factor if by_line else 1.0
    column = "deviation_strain" if by_line else "deviation_percent_fso"
    unit = reference.shown_unit if by_line else percent_unit(str(rows["percent_of"].iloc[0]))
    generations = tuple(sorted(rows["generation"].unique()))
    traces = []
    keys = ["generation", "module", "sensor", "trial", "repetition", "hold"]
    for (generation, module, sensor, trial, _, _), own in rows.groupby(keys, sort=True):
        style = palette.generation_style(str(generation), generations)
        ratio = own[column] / (own["deviation_strain"] if by_line else own["deviation_signal"])
        text = [
            f"{module} {sensor}, mean over {time_words(t)}: "
            f"{numbers.interval(v * factor, low * q * factor, high * q * factor, unit)}"
            for t, v, low, high, q in zip(
                own["averaging_time_s"], own[column], own["low"], own["high"], ratio, strict=True
            )
        ]
        traces.append(
            line(
                own["averaging_time_s"],
                own[column] * factor,
                colour=style.colour,
                dash=style.dash,
                width=1.2,
                text=text,
                links=[slugs.trial_href(str(module), str(sensor), str(trial))] * len(own),
                module=str(module),
                sensor=str(sensor),
            )
        )
    return Figure(
        name="allan",
        caption=_allan_caption(drift),
        alternative="Allan deviation against averaging time, both on logarithmic axes, one line a hold at "
        "rest.",
        traces=tuple(traces),
        layout=layout(
            time_axis("Averaging time", *_ends(rows["averaging_time_s"].to_numpy(float))),
            axis("Allan deviation", unit, logarithmic=True),
        ),
        table="allan",
        note="A line that falls by half for four times the averaging is white noise; where it turns level, "
        "averaging longer buys nothing.",
        height=380,
    )


def _allan_caption(drift: Drift) -> str:
    floors = drift.floors[drift.floors["kind"] != "blank"]
    reached = floors[floors["reached"].astype(bool)]
    if reached.empty:
        return (
            "Averaging still helps at the longest time tried in all "
            f"{numbers.count(len(floors), 'hold')} at rest."
        )
    best = float(reached["best_averaging_time_s"].median())
    return (
        f"Averaging stops helping in {numbers.whole(len(reached))} of "
        f"{numbers.count(len(floors), 'hold')} at rest, after {time_words(best)} in the median."
    )
