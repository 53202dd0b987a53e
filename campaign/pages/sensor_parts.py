"""Everything known about each sensor, gathered once for its page: one pass over every table."""

from __future__ import annotations

import math
from collections.abc import Hashable, Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import pandas as pd

from campaign.analyses.calibration import CalibrationRecord
from campaign.analyses.results import CampaignResults
from campaign.analyses.sensor_figures import principal_lines, principal_records
from campaign.pages import numbers, slugs
from campaign.pages.calibration import hysteresis_in_percent
from campaign.recordings.recording import ReferenceQuantity

Row = dict[Hashable, Any]
Pair = tuple[str, str]

_BRANCH_RANK: Mapping[str, int] = {"both": 0, "rising": 1, "falling": 2}


@dataclass(frozen=True)
class PlottedReading:
    """One reading as figures draw it.

    Attributes
    ----------
    run
        Session, repetition and trial: what tells runs apart.
    direction
        rising, falling or turning.
    x, departure
        Reference and departure from the sensor's line, in shown units; ``signal`` in its own.
    sentence, href
        What is said of it, and the address of its trial's section on the sensor's own page.
    used
        Whether the analyses use it.
    """

    run: tuple[str, int, str]
    order: int
    direction: str
    x: float
    signal: float
    departure: float
    sentence: str
    href: str
    used: bool


@dataclass(frozen=True)
class SensorParts:
    """What the results hold of one sensor.

    Attributes
    ----------
    generation, module, sensor
        Whose it is.
    reference
        What its signal is calibrated against.
    line
        Row of the line that stands for it; ``None`` where it has none.
    records, record
        Calibration records of all branches, and the one that stands for it.
    frame, readings
        Its readings as a table, and as figures draw them, in the order of runs.
    runs
        Rows of its run lines of the branch that stands for it.
    ordinary
        Its ordinary least-squares line, for comparison.
    merits
        Figures of merit with their intervals.
    limits, levels, trials
        Its verdicts, its level differences in %FSO, its trials.
    register
        Its row of the register of sensors.
    """

    generation: str
    module: str
    sensor: str
    reference: ReferenceQuantity
    line: Row | None
    records: tuple[CalibrationRecord, ...]
    frame: pd.DataFrame
    readings: tuple[PlottedReading, ...]
    runs: pd.DataFrame
    ordinary: Row | None
    merits: tuple[Row, ...]
    limits: pd.DataFrame
    levels: pd.DataFrame
    trials: pd.DataFrame
    register: Mapping[str, Any]

    @property
    def record(self) -> CalibrationRecord | None:
        """The calibration record that stands for the sensor."""
        return principal_records(self.records)[0] if self.records else None

    @property
    def used(self) -> bool:
        """Whether any of its readings is used."""
        return any(reading.used for reading in self.readings)

    def readings_by_run(self) -> Iterator[tuple[tuple[str, int, str], list[PlottedReading]]]:
        """Return the readings of each run in order."""
        runs: dict[tuple[str, int, str], list[PlottedReading]] = {}
        for reading in self.readings:
            runs.setdefault(reading.run, []).append(reading)
        yield from runs.items()


class _BySensor:
    """The rows of a table, sensor by sensor."""

    def __init__(self, frame: pd.DataFrame | None) -> None:
        self._empty = pd.DataFrame() if frame is None else frame.iloc[:0]
        self._parts: dict[Pair, pd.DataFrame] = {}
        self._first: dict[Pair, Row] = {}
        if frame is not None and {"module", "sensor"} <= set(frame.columns):
            for (module, sensor), part in frame.groupby(["module", "sensor"], sort=False):
                self._parts[str(module), str(sensor)] = part
            for row in frame.drop_duplicates(["module", "sensor"]).to_dict("records"):
                self._first[str(row["module"]), str(row["sensor"])] = row

    def of(self, pair: Pair) -> pd.DataFrame:
        return self._parts.get(pair, self._empty)

    def first(self, pair: Pair) -> Row | None:
        return self._first.get(pair)


def gather_sensors(results: CampaignResults) -> list[SensorParts]:
    """Return the parts of every sensor that a trial names, sorted by generation, module and sensor."""
    calibration = results.calibration
    has = calibration is not None
    tables = {
        "readings": _BySensor(calibration.readings if has else results.readings.table),  # type: ignore[union-attr]
        "lines": _BySensor(principal_lines(calibration.sensor_lines) if has else None),  # type: ignore[union-attr]
        "runs": _BySensor(calibration.run_lines if has else None),  # type: ignore[union-attr]
        "ordinary": _BySensor(calibration.ordinary_lines if has else None),  # type: ignore[union-attr]
        "levels": _BySensor(hysteresis_in_percent(calibration) if calibration is not None else None),
        "merits": _BySensor(results.limits.figures.dropna(subset=["estimate"])),
        "limits": _BySensor(results.limits.of_sensors()),
        "trials": _BySensor(results.intake.trials),
        "register": _BySensor(results.intake.sensors),
    }
    records: dict[Pair, list[CalibrationRecord]] = {}
    for record in calibration.records if calibration is not None else ():
        records.setdefault((record.module, record.sensor), []).append(record)
    reference = results.readings.reference
    return [_parts(tables, records.get(key[1:], []), reference, key) for key in sensor_keys(results)]


def _parts(
    tables: Mapping[str, _BySensor],
    records: list[CalibrationRecord],
    reference: ReferenceQuantity,
    key: tuple[str, str, str],
) -> SensorParts:
    pair = key[1:]
    line = tables["lines"].first(pair)
    frame = tables["readings"].of(pair)
    runs = tables["runs"].of(pair)
    if line is not None:
        runs = runs[runs["branch"] == line["branch"]]
    return SensorParts(
        *key,
        reference=reference,
        line=line,
        records=tuple(records),
        frame=frame,
        readings=tuple(plotted_readings(frame, line, reference)),
        runs=runs,
        ordinary=tables["ordinary"].first(pair),
        merits=tuple(tables["merits"].of(pair).to_dict("records")),
        limits=tables["limits"].of(pair),
        levels=tables["levels"].of(pair),
        trials=tables["trials"].of(pair),
        register={str(k): v for k, v in (tables["register"].first(pair) or {}).items()},
    )


def sensor_keys(results: CampaignResults) -> list[tuple[str, str, str]]:
    """Return (generation, module, sensor) of every sensor with a trial, sorted."""
    trials = results.intake.trials
    named = trials[(trials["module"].astype(str) != "") & (trials["sensor"].astype(str) != "")]
    best: dict[Pair, str] = {}
    for generation, module, sensor in zip(
        *(named[k].astype(str) for k in ("generation", "module", "sensor")), strict=True
    ):
        best[module, sensor] = max(generation, best.get((module, sensor), ""))
    return sorted((generation, *pair) for pair, generation in best.items())


_PLOTTED = (
    "session",
    "repetition",
    "trial",
    "order",
    "direction",
    "x",
    "nominal_level",
    "signal",
    "standard_error",
    "used",
)


def plotted_readings(
    frame: pd.DataFrame, line: Row | None, reference: ReferenceQuantity
) -> Iterator[PlottedReading]:
    """Return the readings of one sensor as figures draw them, sorted by run and order.

    Without a line the departure is NaN. Readings without a reference value are left out.
    """
    if frame.empty:
        return
    frame = frame.sort_values(["session", "repetition", "trial", "order"], kind="stable")
    unit = str(frame["unit"].iloc[0])
    width = float(frame["x"].max() - frame["x"].min())
    for session, repetition, trial, order, direction, x, nominal, signal, error, used in zip(
        *(frame[k].tolist() for k in _PLOTTED), strict=True
    ):
        if not math.isfinite(x):
            continue
        place = numbers.rounded_to(nominal if math.isfinite(nominal) else x, width) * reference.shown_factor
        value = numbers.measured(signal, error, unit, missing=numbers.significant(signal, 5, unit))
        yield PlottedReading(
            run=(str(session), int(repetition), str(trial)),
            order=int(order),
            direction=str(direction),
            x=x * reference.shown_factor,
            signal=signal,
            departure=_departure(line, x, signal) * reference.shown_factor,
            sentence=f"Run {repetition}, reading {order}, {direction} at "
            f"{numbers.significant(place, 3, reference.shown_unit)}: {value}",
            href=f"#{slugs.trial_anchor(str(trial))}",
            used=bool(used),
        )


def _departure(line: Row | None, x: float, signal: float) -> float:
    if line is None or not line["slope"]:
        return math.nan
    return float((signal - line["intercept"] - line["slope"] * x) / line["slope"])
