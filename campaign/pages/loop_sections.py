"""Loops and endurance on the pages of sensors and modules."""

from __future__ import annotations

from collections.abc import Hashable
from dataclasses import dataclass, replace
from typing import Any

from campaign.analyses.results import CampaignResults
from campaign.pages import numbers
from campaign.pages.figures import Figure
from campaign.pages.hysteresis import width_unit, widths_figure
from campaign.pages.loop_figures import loops_figure, rate_words
from campaign.pages.rows import of_module, records_of_sensor
from campaign.pages.sensor_axis import sensor_axis


@dataclass(frozen=True)
class SensorLoops:
    """What a sensor's page says of its loops and its endurance: rounded values, empty where not measured.

    ``figure`` is the name of the figure of its loops, empty where none is drawn.
    """

    width: str = ""
    mid_width: str = ""
    degree: str = ""
    settled: str = ""
    softening: str = ""
    rate: str = ""
    delay: str = ""
    source: str = ""
    scale: str = ""
    endurance: tuple[str, ...] = ()
    figure: str = ""


def sensor_loops(
    results: CampaignResults, module: str, sensor: str
) -> tuple[SensorLoops | None, list[Figure]]:
    """Return the section of one sensor with its figures; ``None`` where neither loops nor endurance are."""
    lasted = _endurance_words(results, module, sensor)
    found = results.hysteresis
    rows = records_of_sensor(found.sensors, module, sensor) if found is not None else []
    if found is None or not rows:
        return (SensorLoops(endurance=lasted), []) if lasted else (None, [])
    row = rows[0]
    unit = width_unit(found)
    width = numbers.interval(row["width_percent_fso"], row["low"], row["high"], unit)
    drawn = loops_figure(
        found, module, sensor, f"The loops of {module} {sensor}: settled width {width}.", note=_NOTE
    )
    section = SensorLoops(
        width=width,
        mid_width=numbers.interval(row["mid_width_percent_fso"], row["mid_low"], row["mid_high"], unit),
        degree=numbers.percent(row["degree_of_hysteresis"]),
        settled=numbers.whole(row["settled_from_cycle"], missing="not settled within a run"),
        softening=numbers.significant(row["softening_percent"], 2, "%", missing=""),
        rate=rate_words(found.rate_per_s, found.reference),
        delay=_delay_words(results, module, sensor),
        source=str(row["variance_source"]),
        scale=str(row["scale"]),
        endurance=lasted,
        figure=drawn.name if drawn is not None else "",
    )
    return section, [drawn] if drawn is not None else []


_NOTE = (
    "The first cycle of each run stands out; the first settled one and the last follow, fainter to stronger."
)


def module_widths_figure(
    results: CampaignResults, module: str, generations: tuple[str, ...]
) -> Figure | None:
    """Return the settled widths of the sensors of one module; ``None`` where no loop was measured.

    *generations* are all of the campaign, in the order of their colours.
    """
    found = results.hysteresis
    if found is None:
        return None
    rows = of_module(found.sensors, module)
    if rows.empty:
        return None
    own = replace(found, sensors=rows)
    figure = widths_figure(own, sensor_axis(rows).in_colours_of(generations))
    return replace(figure, name="loops", table=None, data=rows)


def _delay_words(results: CampaignResults, module: str, sensor: str) -> str:
    """The delay with its interval; empty where one rate was run."""
    found = results.hysteresis
    rows = records_of_sensor(found.rates.sensors, module, sensor) if found is not None else []
    if not rows:
        return ""
    row = rows[0]
    delay, low, high = (float(row[key]) * 1e3 for key in ("delay_s", "delay_low_s", "delay_high_s"))
    return numbers.interval(delay, low, high, "ms")


def _endurance_words(results: CampaignResults, module: str, sensor: str) -> tuple[str, ...]:
    """One sentence a trial of thousands of cycles."""
    if results.endurance is None:
        return ()
    rows = records_of_sensor(results.endurance.sensors, module, sensor)
    return tuple(_lasting_words(row) for row in rows)


def _lasting_words(row: dict[Hashable, Any]) -> str:
    end = numbers.whole(row["failed_at_cycle"], missing="")
    lasted = (
        f"failed at cycle {end}" if end else f"lasted all {numbers.whole(row['last_working_cycle'])} cycles"
    )
    slope = numbers.interval(
        row["sensitivity_percent_per_decade"],
        row["sensitivity_low"],
        row["sensitivity_high"],
        "%",
        missing="",
    )
    return lasted + (f"; sensitivity {slope} a decade of cycles" if slope else "")
