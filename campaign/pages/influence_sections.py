"""Pressure and the other influences on the pages of sensors and modules."""

from __future__ import annotations

from collections.abc import Hashable
from dataclasses import dataclass, replace
from typing import Any

import pandas as pd

from campaign.analyses.results import CampaignResults
from campaign.pages import numbers
from campaign.pages.figures import Figure
from campaign.pages.influence_figures import INFLUENCE_WORDS
from campaign.pages.pressure import per_unit, sensitivity_figure, sensor_sweeps_figure
from campaign.pages.rows import of_module, records_of_sensor
from campaign.pages.sensor_axis import sensor_axis


@dataclass(frozen=True)
class InfluenceLine:
    """One influence of one sensor in words: what it is, where it is defined, and its value with interval."""

    name: str
    anchor: str
    value: str


@dataclass(frozen=True)
class SensorInfluences:
    """What a sensor's page says of influences; ``figure`` is empty where it has no sweep of pressure."""

    lines: tuple[InfluenceLine, ...]
    figure: str
    answer: str
    labels: str


def sensor_influences(
    results: CampaignResults, module: str, sensor: str
) -> tuple[SensorInfluences | None, list[Figure]]:
    """Return the section of one sensor with its figures; ``None`` where no influence of it was measured."""
    lines: list[InfluenceLine] = []
    figures: list[Figure] = []
    answer = labels = ""
    pressure = results.pressure
    if pressure is not None and (rows := records_of_sensor(pressure.table, module, sensor)):
        row = rows[0]
        lines += _pressure_lines(row, results)
        figures.append(sensor_sweeps_figure(pressure, module, sensor))
        answer, labels = str(row["one_correction"]), str(row["label"])
    if results.influences is not None:
        own = records_of_sensor(results.influences.table, module, sensor)
        lines += [_line(row, results) for row in own]
    if not lines:
        return None, []
    return SensorInfluences(tuple(lines), figures[0].name if figures else "", answer, labels), figures


def module_pressure_figure(
    results: CampaignResults, module: str, generations: tuple[str, ...]
) -> Figure | None:
    """Return what a kilopascal does to the sensors of one module; ``None`` where it was not measured.

    *generations* are all of the campaign, in the order of their colours.
    """
    pressure = results.pressure
    if pressure is None:
        return None
    table = of_module(pressure.table, module)
    if table.empty:
        return None
    made = sensitivity_figure(pressure, sensor_axis(table).in_colours_of(generations), table)
    return replace(made, name="pressure") if made is not None else None


def _interval(row: dict[Hashable, Any], key: str, factor: float, unit: str) -> str:
    estimate, low, high = (float(row[f"{key}{end}"]) * factor for end in ("", "_low", "_high"))
    return numbers.interval(estimate, low, high, unit)


def _pressure_lines(row: dict[Hashable, Any], results: CampaignResults) -> list[InfluenceLine]:
    assert results.pressure is not None
    reference = results.pressure.reference
    factor = reference.shown_factor
    slope = numbers.interval(row["per_kpa"], row["low"], row["high"], f"{row['unit']}/kPa")
    made = [InfluenceLine("Pressure", "pressure", slope)]
    if pd.notna(row["strain_error_per_kpa"]):
        words = _interval(row, "strain_error_per_kpa", factor, per_unit(reference))
        made.append(InfluenceLine("Reads as", "pressure", words))
    if pd.notna(row["strain_error_in_use"]):
        words = _interval(row, "strain_error_in_use", factor, reference.shown_unit)
        at = numbers.significant(results.pressure.in_use_kpa, 3, "kPa")
        made.append(InfluenceLine(f"At {at}", "pressure", words))
    if pd.notna(row["strain_residual_sd_after"]):
        before, after = (
            numbers.significant(row[f"strain_residual_sd_{when}"] * factor, 2, reference.shown_unit)
            for when in ("before", "after")
        )
        words = f"{before}, compensated {after} (leaving out each {row['left_out_by']} in turn)"
        made.append(InfluenceLine("Residual SD over the sweeps", "compensation", words))
    return made


def _line(row: dict[Hashable, Any], results: CampaignResults) -> InfluenceLine:
    """The headline of one influence, else its apparent strain, else signal units."""
    assert results.influences is not None
    reference = results.influences.reference
    name = str(row["influence"])
    anchor = {"temperature": "temperature-coefficient", "transverse": "cross-axis-sensitivity"}.get(
        name, "influences"
    )
    unit = str(row["influence_unit"])
    words = INFLUENCE_WORDS[name]
    called = f"{words[:1].upper()}{words[1:]}"
    for key, shown, factor in (
        ("relative_percent", "%" if name == "transverse" else f"% of zero signal/{unit}", 1.0),
        ("strain_equivalent", per_unit(reference, unit), reference.shown_factor),
    ):
        if pd.notna(row[key]):
            return InfluenceLine(called, anchor, _interval(row, key, factor, shown))
    unit = str(row["unit"]).replace(" per ", "/")
    return InfluenceLine(called, anchor, numbers.interval(row["coefficient"], row["low"], row["high"], unit))
