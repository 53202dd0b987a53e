"""The other influences as figures and tables of page 7."""

from __future__ import annotations

from collections.abc import Hashable, Sequence
from typing import Any

import numpy as np
import pandas as pd

from campaign.analyses.influences import InfluenceResult, Influences
from campaign.pages import numbers, palette, slugs
from campaign.pages.figures import Figure, Layout, axis, layout, level_line
from campaign.pages.rows import records_of
from campaign.pages.sensor_axis import interval_traces, sensor_axis
from campaign.pages.tables import Column, Table

INFLUENCE_WORDS = {
    "temperature": "temperature",
    "transverse": "strain across the sensor",
    "contact": "a load on the skin",
    "proximity": "a grounded body nearby",
    "bend": "bending at constant length",
}
"""What influences are called in sentences."""


def influence_figures(influences: Influences | None) -> list[Figure]:
    """Return one figure an influence and unit: every sensor with its interval."""
    if influences is None:
        return []
    made = [_figure(influences, result) for result in influences.results]
    return [figure for figure in made if figure is not None]


def figure_name(result: InfluenceResult) -> str:
    """Return the name of the figure of one influence."""
    return result.influence if result.unit != "step" else f"{result.influence}-by-step"


def axis_with_zero(title: str, unit: str, rows: pd.DataFrame, factor: float) -> Layout:
    """Return an axis that shows zero, and the estimates of *rows* with their limits."""
    values = rows[["estimate", "low", "high"]].to_numpy(float) * factor
    known = [0.0, *values[np.isfinite(values)].tolist()]
    spare = 0.05 * ((max(known) - min(known)) or 1.0)
    return axis(title, unit, low=min(known) - spare, high=max(known) + spare)


def _figure(influences: Influences, result: InfluenceResult) -> Figure | None:
    rows = influences.of(result.influence)
    rows = rows[rows["influence_unit"] == {"°C": "K"}.get(result.unit, result.unit)]
    shown, title, unit, factor = _shown(rows, result, influences)
    if shown.empty:
        return None
    where = sensor_axis(shown)
    words = [_sentence(row, unit, factor) for row in records_of(shown)]
    ends = shown["estimate"].agg(["min", "max"]) * factor
    between = numbers.span(float(ends["min"]), float(ends["max"]), unit, digits=2)
    return Figure(
        name=figure_name(result),
        caption=f"What {INFLUENCE_WORDS[result.influence]} does: {between} over "
        f"{numbers.count(len(shown), 'sensor')}.",
        alternative=f"Dots with 95 % intervals, one a sensor: {title.lower()}.",
        traces=tuple(interval_traces(shown, where, words, factor=factor)),
        layout=layout(
            axis_with_zero(title, unit, shown, factor),
            where.axis(),
            shapes=[level_line(0, upright=True, colour=palette.INK)],
        ),
        table="influences",
        note=_note(result),
        height=where.height,
    )


def _shown(
    rows: pd.DataFrame, result: InfluenceResult, influences: Influences
) -> tuple[pd.DataFrame, str, str, float]:
    """Rows with estimate and limits, the axis title, its unit and the factor of shown values."""
    reference = influences.reference
    unit = str(rows["influence_unit"].iloc[0])
    apparent = f"{reference.shown_unit}/{unit}"
    choices: Sequence[tuple[str, str, str, float]] = (
        ("relative_percent", "Cross-axis sensitivity", "%", 1.0)
        if result.influence == "transverse"
        else (
            "strain_equivalent",
            "Apparent strain",
            f"{reference.shown_unit}/{unit}",
            reference.shown_factor,
        ),
        ("relative_percent", "Zero signal", f"%/{unit}", 1.0),
        ("strain_equivalent", "Apparent strain", apparent, reference.shown_factor),
        ("coefficient", "Signal", str(rows["unit"].iloc[0]).replace(" per ", "/"), 1.0),
    )
    for name, title, shown_unit, factor in choices:
        low, high = ("low", "high") if name == "coefficient" else (f"{name}_low", f"{name}_high")
        known = rows.dropna(subset=[name])
        if len(known):
            shown = known[["generation", "module", "sensor"]].assign(
                estimate=known[name], low=known[low], high=known[high]
            )
            return shown, title, shown_unit, factor
    return rows.head(0), "", "", 1.0


def _sentence(row: dict[Hashable, Any], unit: str, factor: float) -> str:
    value = numbers.interval(row["estimate"] * factor, row["low"] * factor, row["high"] * factor, unit)
    return f"{row['module']} {row['sensor']}: {value}"


def _note(result: InfluenceResult) -> str:
    if result.influence == "temperature":
        return (
            f"Counted from {numbers.significant(result.zero, 3, '°C')}. Whether the sensor or the readout "
            "moves is not told apart without a blank channel."
        )
    if result.influence == "transverse":
        return "Signal per strain across, over the signal per strain along the sensor."
    if result.influence == "proximity":
        return "Against one over the distance: what a plate sees of a grounded body nearby."
    return "Bars are 95 % intervals."


def influence_tables(influences: Influences | None) -> list[Table]:
    """Return the table of all influences; empty where none was measured."""
    if influences is None:
        return []
    reference = influences.reference
    frame = influences.table
    links = [slugs.sensor_href(str(m), str(s)) for m, s in zip(frame["module"], frame["sensor"], strict=True)]
    return [
        Table(
            name="influences",
            caption="What the other influences do to every sensor.",
            frame=frame.assign(
                _href=links, _influence=[INFLUENCE_WORDS.get(str(i), str(i)) for i in frame["influence"]]
            ),
            shown_rows=24,
            source="influences",
            columns=(
                Column("_influence", "Influence", kind="text"),
                Column("generation", "Generation", kind="text"),
                Column("module", "Module", kind="text"),
                Column("sensor", "Sensor", kind="text", href="_href"),
                Column("coefficient", "Signal", interval=("low", "high")),
                Column("unit", "Unit", kind="text"),
                Column(
                    "strain_equivalent",
                    "Apparent, per unit",
                    reference.shown_unit,
                    factor=reference.shown_factor,
                    interval=("strain_equivalent_low", "strain_equivalent_high"),
                ),
                Column(
                    "relative_percent",
                    "In per cent",
                    "%",
                    interval=("relative_percent_low", "relative_percent_high"),
                    missing="–",
                ),
            ),
            note="In per cent: of the zero signal per kelvin for temperature; for strain across, cross-axis "
            "sensitivity. Variance of sweeps: "
            f"{', '.join(sorted(set(frame['variance_source'].astype(str))))}.",
        )
    ]
