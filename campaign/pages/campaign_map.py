"""The skin map of a campaign: which sensors there are, where they sit, and what edges can be coloured by."""

from __future__ import annotations

from collections.abc import Hashable, Mapping
from typing import Any

import pandas as pd

from campaign.analyses.layout_signals import geometry_of
from campaign.analyses.loop_table import BY_LINE
from campaign.analyses.results import CampaignResults
from campaign.pages.rows import records_of
from campaign.pages.sensor_parts import sensor_keys
from campaign.pages.skin_map import MapFigure, MapSensor, Point, SkinMap, skin_map
from campaign.recordings.description import Geometry

OFFERED: tuple[tuple[str, str, str], ...] = (
    ("gauge_factor", "gauge factor", ""),
    ("hysteresis_percent_fso", "hysteresis of the staircase", "%FSO"),
    ("strain_residual_sd", "residual SD as strain", "%"),
    ("linearity_independent_percent_fso", "linearity", "%FSO"),
    ("repeatability_percent_fso", "repeatability", "%FSO"),
    ("r_squared", "R²", ""),
)
"""Columns of the table of lines that a reader may pick, with their words and units."""

LOOP_KEY = "loop_width_percent_fso"
"""Key of the settled width of loops among what edges can be coloured by."""

FIRST_SHOWN = "hysteresis_percent_fso"

PRESSURE_KEY = "strain_error_per_kpa"
"""Key of the error by pressure on the map."""


def campaign_map(results: CampaignResults, chosen: str = FIRST_SHOWN, *, alone: bool = False) -> SkinMap:
    """Return the skin map of all sensors that a register or a trial names, coloured by *chosen* at first.

    Where *chosen* stands *alone* no other figure can be picked.
    """
    figures = [
        *_line_figures(results),
        *_loop_figure(results),
        *_pressure_figure(results),
        *_verdict_figures(results),
    ]
    offered = [figure for figure in figures if figure.key == chosen or not alone]
    return skin_map(map_sensors(results), offered, chosen=chosen)


def map_sensors(results: CampaignResults) -> list[MapSensor]:
    """Return every sensor with the places of its ends where register and geometry give them.

    A sensor is set aside on the map where no trial of it is used; it has a page where a trial names it.
    """
    intake = results.intake
    modules = {str(row["module"]): row for row in records_of(intake.modules)}
    used = {(i.module, i.sensor) for i in intake.used_identities}
    paged = {(named, sensor) for _, named, sensor in sensor_keys(results)}
    made = []
    for row in records_of(intake.sensors):
        module, sensor = str(row["module"]), str(row["sensor"])
        details = modules.get(module, {})
        named = str(details.get("geometry", "") or "")
        ends = _ends(row, geometry_of(named, results.description.geometries))
        generation = str(details.get("generation", ""))
        key = (module, sensor)
        made.append(MapSensor(generation, *key, ends, set_aside=key not in used, has_page=key in paged))
    return made


def _ends(sensor: Mapping[Hashable, Any], geometry: Geometry | None) -> tuple[Point, Point] | None:
    if geometry is None:
        return None
    start, end = (geometry.nodes.get(str(sensor.get(key, ""))) for key in ("from", "to"))
    return None if start is None or end is None or start == end else (start, end)


def _line_figures(results: CampaignResults) -> list[MapFigure]:
    if results.calibration is None:
        return []
    reference = results.calibration.reference
    lines = results.calibration.sensor_lines
    both = lines[lines["branch"] == "both"]
    made = []
    for key, title, unit in OFFERED:
        if key not in both or not pd.to_numeric(both[key], errors="coerce").notna().any():
            continue
        in_reference = key == "strain_residual_sd"
        factor = reference.shown_factor if in_reference else 1.0
        words = title if reference.name == "strain" else title.replace("strain", reference.name)
        shown_unit = reference.shown_unit if in_reference else unit
        made.append(MapFigure(key, words, shown_unit, _by_sensor(both, key, factor)))
    return made


def _loop_figure(results: CampaignResults) -> list[MapFigure]:
    """Return the settled width of every sensor's loops, where they were measured."""
    found = results.hysteresis
    if found is None:
        return []
    unit = "%FSO" if BY_LINE in found.scales else "% of range"
    return [
        MapFigure(
            LOOP_KEY, "hysteresis of the loops", unit, _by_sensor(found.sensors, "width_percent_fso", 1.0)
        )
    ]


def _pressure_figure(results: CampaignResults) -> list[MapFigure]:
    """Return the magnitude of the apparent strain per kPa of every sensor, where it is known."""
    pressure = results.pressure
    if pressure is None or pressure.table["strain_error_per_kpa"].isna().all():
        return []
    reference = pressure.reference
    values = _by_sensor(pressure.table, "strain_error_per_kpa", reference.shown_factor)
    sizes = {key: abs(value) for key, value in values.items()}
    title = f"apparent {'strain' if reference.name == 'strain' else 'length'} by pressure"
    return [MapFigure(PRESSURE_KEY, title, f"{reference.shown_unit}/kPa", sizes)]


def _by_sensor(rows: pd.DataFrame, key: str, factor: float) -> dict[tuple[str, str], float]:
    values = pd.to_numeric(rows[key], errors="coerce") * factor
    names = zip(rows["module"].astype(str), rows["sensor"].astype(str), strict=True)
    return dict(zip(names, values.tolist(), strict=True))


def _verdict_figures(results: CampaignResults) -> list[MapFigure]:
    """Return one figure a limit that was judged for sensors."""
    rows = results.limits.of_sensors()
    made = []
    for limit in dict.fromkeys(rows["limit"].astype(str)):
        own = rows[rows["limit"] == limit]
        names = zip(own["module"].astype(str), own["sensor"].astype(str), strict=True)
        verdicts = dict(zip(names, own["verdict"].astype(str), strict=True))
        words = f"verdict on {limit.replace('_1h', '_in_1_h').replace('_', ' ')}"
        made.append(MapFigure(f"verdict_{limit}", words, "", {}, verdicts))
    return made
