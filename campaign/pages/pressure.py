"""Page 7, Pressure: what inflation and the other influences do, and what is left once they are known."""

from __future__ import annotations

import math
from collections.abc import Hashable, Iterable, Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd

from campaign.analyses.influence_findings import influence_facts, pressure_facts
from campaign.analyses.influences import Influences
from campaign.analyses.pressure import Pressure
from campaign.analyses.results import CampaignResults
from campaign.pages import numbers, palette, slugs
from campaign.pages.campaign_map import PRESSURE_KEY
from campaign.pages.figures import (
    Figure,
    Trace,
    axis,
    intervals,
    layout,
    level_line,
    line,
    panel,
    points,
    small_multiples,
)
from campaign.pages.influence_figures import axis_with_zero, influence_figures, influence_tables
from campaign.pages.page import Page
from campaign.pages.rows import of_sensor, records_of, records_of_sensor
from campaign.pages.sensor_axis import SensorAxis, interval_traces, sensor_axis
from campaign.pages.tables import Column, Table, without_told_trial
from campaign.recordings.recording import FloatArray, ReferenceQuantity

CORRECTION_WORDS = {
    "none": "none",
    "generation": "one for the generation",
    "position": "one a position",
    "module": "one a module",
    "sensor": "the sensor’s own",
}
"""What corrections are called, from none to a sensor's own."""

COMPONENT_WORDS = {
    "mean": "mean of the generation",
    "module": "between modules",
    "sensor": "between sensors of a module",
    "module and sensor": "a new sensor of a new module",
    "run": "between runs",
    "sweep": "between sweeps",
}

MOST_MODULES = 48
POINTS_DRAWN = 8
"""Points of a sweep that the small multiples draw at most."""

FEW_SENSORS = 24
"""Sensors up to which the page draws every sweep of the one that moves most; the sensors’ own pages do."""

MOST_POINTS = 240
"""Points that the curves of one sensor have together."""


def pressure_page(results: CampaignResults) -> Page | None:
    """Return page 7, or ``None`` where no influence was measured."""
    pressure, influences = results.pressure, results.influences
    if pressure is None and influences is None:
        return None
    has_strain = pressure is not None and bool(pressure.table["strain_error_per_kpa"].notna().any())
    figures = [*(_figures(pressure) if pressure is not None else ()), *influence_figures(influences)]
    tables = [*(_tables(pressure) if pressure is not None else ()), *influence_tables(influences)]
    return Page(
        slug="pressure",
        number=7,
        title="Pressure",
        template="pressure.html",
        context={
            "pressure": pressure,
            "influences": influences,
            "reference": _reference(pressure, influences),
            "facts": pressure_facts(pressure, results.limits),
            "influence_facts": influence_facts(influences),
            "map_key": PRESSURE_KEY if has_strain else "",
            "has_strain": has_strain,
            "worst": _worst(pressure) if pressure is not None else None,
            "shown_modules": 0 if pressure is None else min(pressure.table["module"].nunique(), MOST_MODULES),
            "all_modules": 0 if pressure is None else pressure.table["module"].nunique(),
            "left_out": [] if pressure is None else _left_out(pressure),
            "sources": [] if pressure is None else sorted(set(pressure.table["variance_source"])),
            "validity": None if pressure is None else _validity(pressure),
        },
        figures=tuple(figures),
        tables=tuple(tables),
        description="What inflation of the actuators and other influences do to the signals, with intervals.",
    )


def _reference(pressure: Pressure | None, influences: Influences | None) -> ReferenceQuantity:
    found = pressure if pressure is not None else influences
    assert found is not None
    return found.reference


def _left_out(pressure: Pressure) -> list[str]:
    return sorted({str(by) for by in pressure.table["left_out_by"] if str(by)})


def _validity(pressure: Pressure) -> dict[str, float]:
    """Range of pressure that all sensors share, and the range of lengths."""
    table = pressure.table
    return {
        "low_kpa": float(table["low_kpa"].max()),
        "high_kpa": float(table["high_kpa"].min()),
        "x_low": float(table["strain_low"].max()),
        "x_high": float(table["strain_high"].min()),
    }


def per_unit(reference: ReferenceQuantity, unit: str = "kPa") -> str:
    """Return the unit of an apparent strain per unit of an influence, such as ``%/kPa``."""
    return f"{reference.shown_unit}/{unit}"


# --- figures


def _figures(pressure: Pressure) -> Iterable[Figure]:
    where = sensor_axis(pressure.table)
    made = (
        sweeps_figure(pressure, where),
        loops_figure(pressure) if len(pressure.table) <= FEW_SENSORS else None,
        hysteresis_figure(pressure, where),
        sensitivity_figure(pressure, where),
        corrections_figure(pressure),
        compensation_figure(pressure, where),
    )
    return [figure for figure in made if figure is not None]


def sweeps_figure(pressure: Pressure, where: SensorAxis) -> Figure:
    """Return the change of every sensor's signal with pressure, one panel a module."""
    modules = where.modules[:MOST_MODULES]
    drawn = _drawn_points(pressure)
    in_strain = bool(drawn["_strain"].notna().any())
    column = "_strain" if in_strain else "_signal"
    traces = [
        trace
        for index, (generation, module) in enumerate(modules)
        for trace in _sweep_traces(
            drawn[(drawn["generation"] == generation) & (drawn["module"] == module)],
            column,
            where,
            panel(index),
            pressure.reference,
        )
    ]
    columns = 1 if len(modules) == 1 else 2 if len(modules) <= 4 else 3
    rows = math.ceil(len(modules) / columns)
    title = "Apparent strain" if pressure.reference.name == "strain" else "Apparent length"
    y = axis(title, pressure.reference.shown_unit) if in_strain else axis("Change", pressure.unit)
    several = len(where.generations) > 1
    return Figure(
        name="sweeps",
        caption=_sweeps_caption(pressure),
        alternative="Small multiples, one panel a module: change of each sensor’s signal from that without "
        "pressure, against pressure, up and down.",
        traces=tuple(traces),
        layout=small_multiples(
            [f"{m} · {g}" if several else m for g, m in modules],
            axis("Pressure", "kPa"),
            y,
            columns=columns,
            gap=(0.04, 0.30 / rows if rows > 1 else 0.1),
            shapes=[level_line(0, colour=palette.SOFT, axes=panel(i)) for i in range(len(modules))],
        ),
        data=drawn[
            ["generation", "module", "sensor", "trial", "sweep", "x", "leg", "influence", "signal"]
        ].rename(columns={"influence": "pressure_kpa"}),
        note="Each sensor’s first sweep at the middle of its lengths, up and down, less its signal without "
        "pressure. A line leads to its sensor.",
        height=90 + 190 * rows if rows > 1 else 400,
    )


def _drawn_points(pressure: Pressure) -> pd.DataFrame:
    """Points of one sweep a sensor, nearest the middle of its lengths, with change as signal and as x."""
    sweeps = pressure.sweeps
    chosen = []
    for _, rows in sweeps.groupby(["generation", "module", "sensor"], sort=True):
        x = rows["x"]
        away = (x - (x.min() + x.max()) / 2).abs() if x.notna().all() else pd.Series(0.0, index=rows.index)
        chosen.append(int(rows.index.to_numpy()[int(away.to_numpy(float).argmin())]))
    drawn = pressure.points[pressure.points["number"].isin(chosen)].copy()
    level = sweeps["level"].reindex(drawn["number"]).to_numpy(float)
    keys = pd.MultiIndex.from_frame(drawn[["generation", "module", "sensor"]])
    slope = pressure.table.set_index(["generation", "module", "sensor"])["slope"].reindex(keys)
    drawn["_signal"] = drawn["signal"] - level
    drawn["_strain"] = drawn["_signal"] / slope.to_numpy(float)
    return drawn


def _sweep_traces(
    rows: pd.DataFrame, column: str, where: SensorAxis, axes: str, reference: ReferenceQuantity
) -> Iterable[Trace]:
    factor = reference.shown_factor if column == "_strain" else 1.0
    for (generation, module, sensor), own in rows.groupby(["generation", "module", "sensor"], sort=True):
        style = where.style(str(generation))
        own = own.iloc[:: max(1, len(own) // POINTS_DRAWN)]
        yield line(
            own["influence"],
            own[column] * factor,
            colour=style.colour,
            dash=style.dash,
            width=1.2,
            text=[f"{module} {sensor}"] * len(own),
            links=[slugs.sensor_href(str(module), str(sensor))] * len(own),
            module=str(module),
            sensor=str(sensor),
            axes=axes,
        )


def _sweeps_caption(pressure: Pressure) -> str:
    worst = _worst(pressure)
    of = (
        f"{numbers.count(len(pressure.table), 'sensor')} of "
        f"{numbers.count(pressure.table['module'].nunique(), 'module')}"
    )
    if worst is None:
        return f"What pressure does to the signals of {of}."
    unit, factor = per_unit(pressure.reference), pressure.reference.shown_factor
    value = numbers.significant(float(worst["strain_error_per_kpa"]) * factor, 2, unit)
    return f"What pressure does to the signals of {of}; {worst['module']} {worst['sensor']} most, {value}."


def _worst(pressure: Pressure) -> pd.Series | None:
    known = pressure.table.dropna(subset=["strain_error_per_kpa"])
    if known.empty:
        return None
    return known.iloc[int(known["strain_error_per_kpa"].abs().to_numpy(float).argmax())]


def loops_figure(pressure: Pressure) -> Figure:
    """Return every sweep of the sensor that pressure moves most: signal against pressure at each length."""
    worst = _worst(pressure)
    row = worst if worst is not None else pressure.table.iloc[0]
    return sensor_sweeps_figure(pressure, str(row["module"]), str(row["sensor"]), name="worst")


def sensor_sweeps_figure(
    pressure: Pressure, module: str, sensor: str, name: str = "pressure-sweeps"
) -> Figure:
    """Return the signal of one sensor against pressure, all sweeps, with their lines."""
    rows = records_of_sensor(pressure.sweeps, module, sensor)
    unit = str(rows[0]["unit"])
    traces: list[Trace] = []
    lengths = sorted({round(float(row["x"]), 4) for row in rows if not math.isnan(row["x"])})
    most = max(12, MOST_POINTS // len(rows))
    for row in rows:
        step = lengths.index(round(float(row["x"]), 4)) if math.isfinite(row["x"]) else 0
        style = palette.GENERATION_STYLES[step % len(palette.GENERATION_STYLES)]
        key = (str(row["trial"]), sensor, int(row["repetition"]), int(row["sweep"]))
        influence, signal = _spaced(*pressure.curves.get(key, (np.empty(0), np.empty(0))), most)
        words = _sweep_words(row, pressure.reference, unit)
        link = slugs.trial_href(module, sensor, str(row["trial"]))
        traces.append(
            line(
                influence,
                signal - row["level"],
                colour=style.colour,
                width=0.9,
                text=[words] * len(influence),
                links=[link] * len(influence),
                module=module,
                sensor=sensor,
            )
        )
        ends = np.array([row["influence_low"], row["influence_high"]])
        traces.append(line(ends, row["slope"] * ends, colour=palette.INK, dash="dash", width=0.8))
    own = of_sensor(pressure.points, module, sensor)
    return Figure(
        name=name,
        caption=_sensor_caption(pressure, module, sensor),
        alternative=f"Change of {module} {sensor} with pressure, one loop a sweep, with its line.",
        traces=tuple(traces),
        layout=layout(axis("Pressure", "kPa"), axis("Change of the signal", unit)),
        data=without_told_trial(
            own[["trial", "repetition", "sweep", "leg", "x", "influence", "signal", "time_s"]].rename(
                columns={"influence": "pressure_kpa"}
            )
        ),
        note="Each sweep less its signal without pressure. Each length has its own colour; dashes are the "
        "line of each sweep over both branches. Curves show evenly chosen samples.",
        height=400,
    )


def _spaced(influence: FloatArray, signal: FloatArray, most: int) -> tuple[FloatArray, FloatArray]:
    """Return at most *most* points of a curve, evenly chosen, both ends and the turn kept."""
    if len(influence) <= most:
        return influence, signal
    even = np.linspace(0, len(influence) - 1, most - 1).round().astype(int)
    kept = np.union1d(even, influence.argmax())
    return influence[kept], signal[kept]


def _sweep_words(row: Mapping[Hashable, Any], reference: ReferenceQuantity, unit: str) -> str:
    at = ""
    if math.isfinite(row["x"]):
        at = f" at {numbers.significant(row['x'] * reference.shown_factor, 3, reference.shown_unit)}"
    slope = numbers.significant(float(row["slope"]), 3, f"{unit}/kPa")
    return f"run {row['repetition']}, sweep {int(row['sweep']) + 1}{at}: {slope}"


def _sensor_caption(pressure: Pressure, module: str, sensor: str) -> str:
    row = records_of_sensor(pressure.table, module, sensor)[0]
    slope = numbers.interval(row["per_kpa"], row["low"], row["high"], f"{row['unit']}/kPa")
    change = f"{numbers.count(int(row['sweeps']), 'sweep')} at {numbers.count(int(row['lengths']), 'length')}"
    return f"{module} {sensor}: {slope} in {change}."


def sensitivity_figure(
    pressure: Pressure, where: SensorAxis, table: pd.DataFrame | None = None
) -> Figure | None:
    """Return the apparent strain per kPa of every sensor of *table* (all), with intervals."""
    reference, table = pressure.reference, pressure.table if table is None else table
    known = table.dropna(subset=["strain_error_per_kpa"])
    if known.empty:
        return _coefficients_figure(pressure, where, table)
    shown = known.rename(
        columns={
            "strain_error_per_kpa": "estimate",
            "low": "coefficient_low",
            "high": "coefficient_high",
            "strain_error_per_kpa_low": "low",
            "strain_error_per_kpa_high": "high",
        }
    )
    unit = per_unit(reference)
    words = [_error_sentence(row, unit, reference.shown_factor) for row in records_of(shown)]
    spread = [float(v) * reference.shown_factor for v in (known["strain_error_per_kpa"].agg(["min", "max"]))]
    return Figure(
        name="sensitivity",
        caption=f"What a kilopascal reads as: {numbers.span(spread[0], spread[1], unit, digits=2)} over "
        f"{numbers.count(len(known), 'sensor')}.",
        alternative="Dots with 95 % intervals, one a sensor, ordered by module: apparent strain per "
        "kilopascal at the middle of the lengths, with an upright at zero.",
        traces=tuple(interval_traces(shown, where, words, factor=reference.shown_factor)),
        layout=layout(
            axis_with_zero(
                "Apparent strain" if reference.name == "strain" else "Apparent length",
                unit,
                shown,
                reference.shown_factor,
            ),
            where.axis(),
            shapes=[level_line(0, upright=True, colour=palette.INK)],
        ),
        table="pressure",
        note="At the middle of the lengths that were swept. Bars are 95 % intervals; what they count is said "
        "in the table.",
        height=where.height,
    )


def _coefficients_figure(pressure: Pressure, where: SensorAxis, table: pd.DataFrame) -> Figure | None:
    """The same in signal units, where no slope turns signals into strains."""
    known = table.dropna(subset=["per_kpa"]).rename(columns={"per_kpa": "estimate"})
    if known.empty:
        return None
    unit = f"{pressure.unit}/kPa"
    words = [_error_sentence(row, unit, 1.0) for row in records_of(known)]
    return Figure(
        name="sensitivity",
        caption=f"What a kilopascal adds to the signals of {numbers.count(len(known), 'sensor')}.",
        alternative="Dots with 95 % intervals, one a sensor: signal per kilopascal.",
        traces=tuple(interval_traces(known, where, words)),
        layout=layout(
            axis("Signal", unit), where.axis(), shapes=[level_line(0, upright=True, colour=palette.INK)]
        ),
        table="pressure",
        note="No slope of signal against length is known, so that nothing is said in strain.",
        height=where.height,
    )


def _error_sentence(row: dict[Hashable, Any], unit: str, factor: float) -> str:
    value = numbers.interval(row["estimate"] * factor, row["low"] * factor, row["high"] * factor, unit)
    return f"{row['module']} {row['sensor']}: {value}"


def corrections_figure(pressure: Pressure) -> Figure | None:
    """Return what remains of the error by pressure with every correction, generation by generation."""
    serving = pressure.spread.serving
    if serving.empty:
        return None
    reference = pressure.reference
    generations = sorted(set(serving["generation"].astype(str)))
    names = [name for name in CORRECTION_WORDS if name in set(serving["correction"])]
    traces = []
    for index, generation in enumerate(generations):
        rows = serving[serving["generation"] == generation]
        shift = 0.16 * (index - (len(generations) - 1) / 2)
        heights = [names.index(str(name)) + shift for name in rows["correction"]]
        traces.append(
            intervals(
                rows["sd"] * reference.shown_factor,
                rows["low"] * reference.shown_factor,
                rows["high"] * reference.shown_factor,
                heights,
                style=palette.generation_style(generation, tuple(generations)),
                name=generation,
                text=[_remaining_sentence(row, reference) for row in records_of(rows)],
            )
        )
    ticks = [(float(i), CORRECTION_WORDS[name]) for i, name in enumerate(names)]
    return Figure(
        name="corrections",
        caption=_corrections_caption(serving, reference),
        alternative="Dots with 95 % intervals: SD of the remaining error with no correction, one for the "
        "generation, one a position, one a module and the sensor’s own.",
        traces=tuple(traces),
        layout=layout(
            axis("SD of what pressure leaves", reference.shown_unit),
            axis("", ticks=ticks, low=-0.6, high=len(names) - 0.4, reverse=True),
            margin={"l": 170},
        ),
        data=serving,
        note="Always left out: a sensor is never corrected by itself, but by other modules, other sensors of "
        "its module, or its own other sweeps. Limits count modules.",
        height=110 + 48 * len(names),
    )


def _remaining_sentence(row: dict[Hashable, Any], reference: ReferenceQuantity) -> str:
    factor = reference.shown_factor
    value = numbers.interval(
        row["sd"] * factor, row["low"] * factor, row["high"] * factor, reference.shown_unit
    )
    return f"{row['generation']}, {CORRECTION_WORDS[str(row['correction'])]}: {value}"


def _corrections_caption(serving: pd.DataFrame, reference: ReferenceQuantity) -> str:
    parts = []
    several = serving["generation"].nunique() > 1
    for generation, rows in serving.groupby("generation", sort=True):
        sds = rows.set_index("correction")["sd"] * reference.shown_factor
        shown = [n for n in ("none", "generation", "sensor") if n in sds.index]
        words = ", ".join(
            f"{numbers.significant(float(sds[n]), 2, reference.shown_unit)} "
            f"{'without correction' if n == 'none' else 'with ' + CORRECTION_WORDS[n]}"
            for n in shown
        )
        parts.append(f"{generation}: {words}" if several else words)
    return f"What remains of the swept error: {'; '.join(parts)}."


def compensation_figure(pressure: Pressure, where: SensorAxis) -> Figure | None:
    """Return every sensor's residual SD before and after its own compensation."""
    known = pressure.table.dropna(subset=["strain_residual_sd_before", "strain_residual_sd_after"])
    if known.empty:
        return None
    reference = pressure.reference
    factor = reference.shown_factor
    traces: list[Trace] = []
    for (generation, module), rows in known.groupby(["generation", "module"], sort=True):
        style = where.style(str(generation))
        for column, hollow in (("strain_residual_sd_before", True), ("strain_residual_sd_after", False)):
            traces.append(
                points(
                    rows[column] * factor,
                    where.heights(rows),
                    style=style,
                    open_marker=hollow,
                    size=6,
                    text=[_compensation_sentence(row, reference) for row in records_of(rows)],
                    links=[
                        slugs.sensor_href(str(m), str(s))
                        for m, s in zip(rows["module"], rows["sensor"], strict=True)
                    ],
                    module=str(module),
                )
            )
    share_of = (known["strain_residual_sd_after"] / known["strain_residual_sd_before"]).to_numpy(float)
    median, worst = numbers.percent(float(np.median(share_of))), numbers.percent(float(share_of.max()))
    return Figure(
        name="compensation",
        caption=f"Known pressure, the sensor’s own coefficients: {median} of the error is left "
        f"in the median sensor, {worst} in the worst.",
        alternative="Hollow and filled dots, one pair a sensor: residual SD before and after compensation, "
        "on a logarithmic axis.",
        traces=tuple(traces),
        layout=layout(
            axis("Residual SD", reference.shown_unit, logarithmic=True),
            where.axis(),
        ),
        table="pressure",
        note="Hollow: as recorded. Filled: with what the sensor’s other runs (or lengths) say taken off.",
        height=where.height,
    )


def _compensation_sentence(row: dict[Hashable, Any], reference: ReferenceQuantity) -> str:
    before, after = (
        numbers.significant(
            float(row[f"strain_residual_sd_{when}"]) * reference.shown_factor, 2, reference.shown_unit
        )
        for when in ("before", "after")
    )
    who = f"{row['module']} {row['sensor']}"
    return f"{who}: {before} before, {after} after, leaving out each {row['left_out_by']} in turn"


def hysteresis_figure(pressure: Pressure, where: SensorAxis) -> Figure | None:
    """Return hysteresis in pressure: rising minus falling at mid range, as strain, with intervals."""
    known = pressure.table.dropna(subset=["strain_loop"])
    if known.empty:
        return None
    reference = pressure.reference
    shown = known.drop(columns=["low", "high"]).rename(
        columns={"strain_loop": "estimate", "strain_loop_low": "low", "strain_loop_high": "high"}
    )
    words = [_error_sentence(row, reference.shown_unit, reference.shown_factor) for row in records_of(shown)]
    apart = int(((shown["low"] > 0) | (shown["high"] < 0)).sum())
    most = float(shown["estimate"].abs().max())
    largest = numbers.significant(most * reference.shown_factor, 2, reference.shown_unit)
    edge = 3 * most or 1.0
    drawn = shown.assign(low=shown["low"].clip(-edge, edge), high=shown["high"].clip(-edge, edge))
    return Figure(
        name="pressure-hysteresis",
        caption=f"Rising and falling pressure differ beyond doubt in {numbers.whole(apart)} of "
        f"{numbers.count(len(shown), 'sensor')}; at most by {largest}.",
        alternative="Dots with 95 % intervals, one a sensor: rising minus falling at mid pressure.",
        traces=tuple(interval_traces(drawn, where, words, factor=reference.shown_factor)),
        layout=layout(
            axis_with_zero("Rising − falling", reference.shown_unit, drawn, reference.shown_factor),
            where.axis(),
            shapes=[level_line(0, upright=True, colour=palette.INK)],
        ),
        table="pressure",
        note="At the middle of the pressures, mean over the sensor’s sweeps; each interval stands alone. A "
        "drift over the sweep widens the loop as well.",
        height=where.height,
    )


# --- tables


def _tables(pressure: Pressure) -> Sequence[Table]:
    made = [pressure_table(pressure)]
    if len(pressure.spread.components):
        made.append(components_table(pressure))
    if len(pressure.coupling):
        made.append(coupling_table(pressure))
    if len(pressure.compensated):
        made.append(compensated_table(pressure))
    return made


def pressure_table(pressure: Pressure) -> Table:
    """Return the coefficients of every sensor."""
    reference = pressure.reference
    factor, unit = reference.shown_factor, reference.shown_unit
    size = pressure.table["strain_error_per_kpa"].abs().fillna(pressure.table["per_kpa"].abs())
    frame = pressure.table.iloc[np.argsort(-size.to_numpy(float), kind="stable")]
    names = zip(frame["module"].astype(str), frame["sensor"].astype(str), strict=True)
    return Table(
        name="pressure",
        caption="What a kilopascal does to every sensor, and what its own compensation leaves, most first.",
        frame=frame.assign(_href=[slugs.sensor_href(*pair) for pair in names]),
        shown_rows=8,
        source="pressure",
        columns=(
            Column("generation", "Generation", kind="text"),
            Column("module", "Module", kind="text"),
            Column("sensor", "Sensor", kind="text", href="_href"),
            Column("per_kpa", "Per kPa", f"{pressure.unit}/kPa", interval=("low", "high")),
            Column(
                "strain_error_per_kpa",
                "Apparent, per kPa",
                per_unit(reference),
                factor=factor,
                interval=("strain_error_per_kpa_low", "strain_error_per_kpa_high"),
            ),
            Column(
                "strain_error_in_use",
                f"at {numbers.significant(pressure.in_use_kpa, 3, 'kPa')}",
                unit,
                factor=factor,
                interval=("strain_error_in_use_low", "strain_error_in_use_high"),
            ),
            Column("strain_residual_sd_before", "SD before", unit, factor=factor, digits=2),
            Column("strain_residual_sd_after", "after", unit, factor=factor, digits=2),
            Column("sweeps", "Sweeps", kind="integer"),
            Column("lengths", "Lengths", kind="integer"),
            *_source_column(pressure.table),
        ),
        note="Per kPa at zero strain, or at the one length that was swept. The error in use is that at the "
        "end of the lengths where it is largest.",
    )


def _source_column(table: pd.DataFrame) -> tuple[Column, ...]:
    """Where intervals come from, only where that differs from sensor to sensor (the text says it else)."""
    if table["variance_source"].nunique() < 2:
        return ()
    return (Column("variance_source", "Interval from", kind="text"),)


def components_table(pressure: Pressure) -> Table:
    """Return the spread of the error per kPa over modules and sensors."""
    reference = pressure.reference
    rows = pressure.spread.components
    frame = rows.assign(
        _component=[COMPONENT_WORDS.get(str(c), str(c)) for c in rows["component"]],
        _what=rows["what"].map({"error": "per kPa", "change": "change with strain"}),
    )
    return Table(
        name="pressure_spread",
        caption="Does one correction serve all? Mean and spread of the apparent strain per kPa.",
        frame=frame,
        columns=(
            Column("generation", "Generation", kind="text"),
            Column("_component", "What", kind="text"),
            Column("_what", "Of", kind="text"),
            Column(
                "estimate",
                "Mean or SD",
                per_unit(reference),
                factor=reference.shown_factor,
                interval=("low", "high"),
            ),
            Column("p_adjusted", "p (Holm)", kind="probability", missing="–"),
            Column("label", "Label", kind="text"),
        ),
        note="Means with t intervals, SDs with profile intervals of the nested model. The change is per unit "
        "strain.",
    )


def compensated_table(pressure: Pressure) -> Table:
    """Return trials of other kinds that log pressure, without and with their sensor's correction."""
    reference, frame = pressure.reference, pressure.compensated
    factor, unit = reference.shown_factor, reference.shown_unit
    links = [slugs.trial_href(str(r["module"]), str(r["sensor"]), str(r["trial"])) for r in records_of(frame)]
    return Table(
        name="pressure_compensated",
        caption="Other trials that log pressure, as recorded and corrected.",
        frame=frame.assign(
            _href=links, _inside=frame["inside"].map({True: "yes", False: "no: extrapolated"})
        ),
        columns=(
            Column("module", "Module", kind="text"),
            Column("sensor", "Sensor", kind="text"),
            Column("kind", "Kind", kind="text", href="_href"),
            Column("repetition", "Run", kind="integer"),
            Column("strain_before", "SD before", unit, factor=factor, digits=2),
            Column("strain_after", "after", unit, factor=factor, digits=2),
            Column("_inside", "Within the sweeps’ range", kind="text"),
        ),
        shown_rows=24,
        note="About the trial’s own straight line, so that loop and bend remain in both.",
    )


def coupling_table(pressure: Pressure) -> Table:
    """Return neighbours that moved, or did not, while one sensor alone was strained."""
    return Table(
        name="coupling",
        caption="Neighbours while one sensor alone was strained.",
        frame=pressure.coupling.assign(
            _moves=pressure.coupling["moves"].map({True: "moves", False: "not shown to move"})
        ),
        columns=(
            Column("module", "Module", kind="text"),
            Column("strained", "Strained", kind="text"),
            Column("sensor", "Neighbour", kind="text"),
            Column("coefficient", "Its signal", interval=("low", "high")),
            Column("unit", "Unit", kind="text"),
            Column("relative", "Of its own slope", kind="percent", missing="–"),
            Column("_moves", "", kind="text"),
        ),
        note="Beside the influence of the trial; p by Holm over all rows.",
    )
