"""How wide the loops are, when they settle, what rate does to them, and where their spread comes from."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

import pandas as pd

from campaign.analyses.loop_model import FittedLoops, fit_widths, width_components
from campaign.analyses.loop_rates import RateDependence, rate_dependence
from campaign.analyses.loop_table import BY_LINE, SENSOR_KEYS, LoopTable, loop_table
from campaign.analyses.loop_widths import runs_table, sensor_widths
from campaign.analyses.sensor_figures import FIGURE_COLUMNS
from campaign.notices import Notice
from campaign.recordings.recording import FloatArray, ReferenceQuantity
from campaign.trials.cyclic import CyclicFeatures
from campaign.trials.features import into_reference

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration
    from campaign.recordings.sensor_share import TrialKey

LOOP_COLUMNS = (
    *SENSOR_KEYS,
    "repetition",
    "cycle",
    "rate_per_s",
    "width_percent_fso",
    "width_strain",
    "at_strain",
    "degree_of_hysteresis",
    "peak_signal",
    "zero_signal",
    "session",
    "trial",
    "run",
    "rate_level_per_s",
    "mid_width_percent_fso",
    "degree_of_whole_signal",
    "loop_area",
    "strain_low",
    "strain_high",
    "unit",
    "whole",
    "settled",
    "counted",
    "temperature_c",
    "pressure_kpa",
)
"""Columns of :attr:`Hysteresis.loops`."""


@dataclass(frozen=True)
class SensorCurve:
    """The outline of one loop as drawn, in order of time, ``x`` in units of the reference."""

    generation: str
    module: str
    sensor: str
    session: str
    repetition: int
    trial: str
    rate_per_s: float
    cycle: int
    settled: bool
    x: FloatArray
    signal: FloatArray


@dataclass(frozen=True)
class Hysteresis:
    """Loops of a campaign.

    Attributes
    ----------
    reference
        What lengths are given in; names with ``strain`` hold its values.
    rate_per_s
        Rate at which sensors are compared, units of the reference a second; NaN without time.
    scales
        What per cent and strain equivalents refer to: the sensors' staircase lines, or their own loops.
    loops
        One row a loop, columns :data:`LOOP_COLUMNS`.
    sensors
        One row a sensor (:func:`campaign.analyses.loop_widths.sensor_widths`).
    curves_of_width
        Settled signed width of every sensor along the range, with simultaneous limits.
    runs
        One row a cyclic trial: when it settled, first and settled zero and peak signal.
    rates
        Dependence on rate.
    components, means
        The nested model (:func:`campaign.analyses.loop_model.width_components`).
    outlines
        Loops to draw.
    figures
        The width of every sensor as a figure of merit that limits are judged by (only where a staircase line
        gives its full-scale output).
    notices
        What was found when the loops of all trials were put together.
    fits
        The fits that ``components`` and ``means`` are read off.
    """

    reference: ReferenceQuantity
    rate_per_s: float
    scales: tuple[str, ...]
    loops: pd.DataFrame
    sensors: pd.DataFrame
    curves_of_width: pd.DataFrame
    runs: pd.DataFrame
    rates: RateDependence
    components: pd.DataFrame
    means: pd.DataFrame
    outlines: tuple[SensorCurve, ...]
    figures: pd.DataFrame
    notices: tuple[Notice, ...]
    fits: tuple[FittedLoops, ...] = ()

    @property
    def several_rates(self) -> bool:
        """Whether any sensor was run at more than one rate."""
        return len(self.rates.sensors) > 0


def analyse_hysteresis(
    features: Mapping[TrialKey, CyclicFeatures], calibration: Calibration | None
) -> Hysteresis | None:
    """Analyse the loops of all cyclic trials that are used.

    Parameters
    ----------
    features
        What each trial was reduced to.
    calibration
        Lines of the sensors: their full-scale output and slope turn widths into %FSO and strain. Without a
        line a sensor's widths are in per cent of its own loops' range of signal.

    Returns
    -------
    Hysteresis or None
        ``None`` where no trial holds a loop.
    """
    known = [own for own in features.values() if len(own.cycles)]
    table = loop_table(known, calibration) if known else None
    if table is None or not table.rows["counted"].any():
        return None
    sensors, curves = sensor_widths(table)
    fits = fit_widths(table)
    components, means = width_components(table, fits)
    return Hysteresis(
        reference=table.reference,
        rate_per_s=table.rate,
        scales=tuple(sorted(set(sensors["scale"].astype(str)))),
        loops=_loops(table),
        sensors=sensors,
        curves_of_width=curves,
        runs=pd.DataFrame(runs_table(table)),
        rates=rate_dependence(table),
        components=components,
        means=means,
        outlines=tuple(_outlines(known, table)),
        figures=_figures(sensors),
        notices=_notices(known, table),
        fits=fits,
    )


def _loops(table: LoopTable) -> pd.DataFrame:
    rows = table.rows
    to_percent = 100.0 / rows["full_scale_output"]
    made = rows.assign(
        rate_per_s=rows["rate"],
        rate_level_per_s=rows["rate_level"],
        width_percent_fso=rows["largest_width"].abs() * to_percent,
        width_strain=rows["largest_width"].abs() / rows["slope"].abs(),
        at_strain=rows["at"],
        degree_of_hysteresis=rows["degree"],
        mid_width_percent_fso=rows["mid_width"] * to_percent,
        loop_area=rows["area"],
        strain_low=rows["low"],
        strain_high=rows["high"],
    )
    return made[list(LOOP_COLUMNS)]


def _outlines(features: Iterable[CyclicFeatures], table: LoopTable) -> list[SensorCurve]:
    """The outlines that trials kept, lengths in the reference, in the order of the table."""
    named = zip(*(table.rows[k] for k in ("trial", "sensor", "repetition", "cycle")), strict=True)
    known = dict(zip(named, zip(table.rows["rate_level"], table.rows["settled"], strict=True), strict=True))
    found = []
    for own in features:
        conversion = into_reference(own.recorded, table.reference, own.identity.rest_length_mm)
        if conversion is None:
            continue
        offset, factor = conversion
        identity = own.identity
        for curve in own.curves:
            rate, settled = known[identity.file, identity.sensor, identity.repetition, curve.cycle]
            found.append(
                SensorCurve(
                    identity.generation,
                    identity.module,
                    identity.sensor,
                    identity.session,
                    identity.repetition,
                    identity.file,
                    float(rate),
                    curve.cycle,
                    bool(settled),
                    offset + factor * curve.x,
                    curve.signal,
                )
            )
    return sorted(
        found, key=lambda c: (c.generation, c.module, c.sensor, _last(c.rate_per_s), c.trial, c.cycle)
    )


def _last(value: float) -> float:
    return value if math.isfinite(value) else math.inf


def _figures(sensors: pd.DataFrame) -> pd.DataFrame:
    """The largest width of every sensor with a staircase line, as limits take it."""
    lined = sensors[sensors["scale"] == BY_LINE]
    made = lined[SENSOR_KEYS].assign(
        figure="hysteresis",
        unit="%FSO",
        estimate=lined["width_percent_fso"],
        low=lined["low"],
        high=lined["high"],
        standard_uncertainty=lined["standard_uncertainty"],
        degrees_of_freedom=lined["degrees_of_freedom"],
        kind="estimate",
    )
    return made[list(FIGURE_COLUMNS)]


def _notices(features: list[CyclicFeatures], table: LoopTable) -> tuple[Notice, ...]:
    """Trials in another quantity, and trials without a temperature, counted."""
    found = [
        Notice(
            "reference-not-common",
            "noted",
            file,
            None,
            None,
            f"{table.reference.name} is not known in this trial, but in others",
            "its loops are in no figure",
            "state the rest length in sensors.csv",
        )
        for file in table.left_out
    ]
    bare = len({own.identity.file for own in features if not own.temperature_is_known})
    if bare:
        what = f"temperature is not recorded in {bare} recordings of cycles"
        done = "what it did to the signals meanwhile is inside the loops"
        found.append(
            Notice("temperature-not-recorded", "noted", None, None, None, what, done, "log it", bare)
        )
    return tuple(found)
