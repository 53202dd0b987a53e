"""Everything known about each sensor, gathered once for its page: one pass over every table."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from campaign.analyses.calibration import CalibrationRecord
from campaign.analyses.limits import CONDITIONS, ONE_MODULE, TOO_FEW, UNKNOWN
from campaign.analyses.results import CampaignResults
from campaign.analyses.sensor_figures import principal_lines, principal_records
from campaign.pages import numbers, slugs
from campaign.pages.calibration import hysteresis_in_percent
from campaign.pages.rows import Row, of_sensor, records_of_sensor
from campaign.recordings.recording import ReferenceQuantity

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
    readings
        Its readings as figures draw them, in the order of runs.
    runs, run_rows
        Its run lines of the branch that stands for it: the rows of the table, and the same as mappings.
    ordinary
        Its ordinary least-squares line, for comparison.
    merits
        Figures of merit with their intervals.
    limits, levels, trials
        Its verdicts as shown (:func:`limits_as_shown`), its level differences in %FSO, its trials.
    register
        Its row of the register of sensors.
    """

    generation: str
    module: str
    sensor: str
    reference: ReferenceQuantity
    line: Row | None
    records: tuple[CalibrationRecord, ...]
    readings: tuple[PlottedReading, ...]
    runs: pd.DataFrame
    run_rows: tuple[Row, ...]
    ordinary: Row | None
    merits: tuple[Row, ...]
    limits: pd.DataFrame
    levels: pd.DataFrame
    trials: tuple[Row, ...]
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


def gather_sensors(
    results: CampaignResults, keys: Sequence[tuple[str, str, str]] | None = None
) -> list[SensorParts]:
    """Return the parts of every sensor, sorted by generation, module and sensor.

    *keys* are those of :func:`sensor_keys` that are wanted; all where ``None``.
    """
    calibration, reference = results.calibration, results.readings.reference
    readings = calibration.readings if calibration is not None else results.readings.table
    plotted = _readings_by_sensor(readings)
    tables = _tables_of(results)
    records: dict[Pair, list[CalibrationRecord]] = {}
    for record in calibration.records if calibration is not None else ():
        records.setdefault((record.module, record.sensor), []).append(record)
    wanted = keys if keys is not None else sensor_keys(results)
    return [_parts(tables, plotted, records.get(key[1:], []), reference, key) for key in wanted]


def _tables_of(results: CampaignResults) -> dict[str, pd.DataFrame]:
    """Return the tables that sensors have rows in; those of lines are there where there is a calibration."""
    found = {
        "merits": results.limits.figures.dropna(subset=["estimate"]),
        "limits": limits_as_shown(results.limits.of_sensors(), results.readings.reference),
        "trials": results.intake.trials,
        "register": results.intake.sensors,
    }
    if (calibration := results.calibration) is not None:
        lines = principal_lines(calibration.sensor_lines)
        found |= {
            "lines": lines,
            "runs": _principal_runs(calibration.run_lines, lines),
            "ordinary": calibration.ordinary_lines,
            "levels": hysteresis_in_percent(calibration, lines),
        }
    return {name: frame for name, frame in found.items() if {"module", "sensor"} <= set(frame.columns)}


def _principal_runs(runs: pd.DataFrame, lines: pd.DataFrame) -> pd.DataFrame:
    """Return the run lines of the branch that stands for each sensor, and all of sensors without a line."""
    named = (lines[name].tolist() for name in ("module", "sensor", "branch"))
    branches = {(module, sensor): branch for module, sensor, branch in zip(*named, strict=True)}
    own = zip(*(runs[name].tolist() for name in ("module", "sensor", "branch")), strict=True)
    kept = [branches.get((module, sensor), branch) == branch for module, sensor, branch in own]
    return runs[np.array(kept, dtype=bool)]


def _parts(
    tables: Mapping[str, pd.DataFrame],
    plotted: Mapping[Pair, Sequence[_Reading]],
    records: list[CalibrationRecord],
    reference: ReferenceQuantity,
    key: tuple[str, str, str],
) -> SensorParts:
    pair = key[1:]

    def rows(name: str) -> list[Row]:
        return records_of_sensor(tables[name], *pair) if name in tables else []

    def table(name: str) -> pd.DataFrame:
        return of_sensor(tables[name], *pair) if name in tables else pd.DataFrame()

    line, ordinary, register = (next(iter(rows(name)), None) for name in ("lines", "ordinary", "register"))
    return SensorParts(
        *key,
        reference=reference,
        line=line,
        records=tuple(records),
        readings=tuple(plotted_readings(plotted.get(pair, ()), line, reference)),
        runs=table("runs"),
        run_rows=tuple(rows("runs")),
        ordinary=ordinary,
        merits=tuple(rows("merits")),
        limits=table("limits"),
        levels=table("levels"),
        trials=tuple(rows("trials")),
        register={str(k): v for k, v in (register or {}).items()},
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


_Reading = tuple[str, int, str, int, str, float, float, float, float, bool, str]
"""A reading as :data:`_PLOTTED` names its values."""

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
    "unit",
)


def _readings_by_sensor(frame: pd.DataFrame) -> dict[Pair, list[_Reading]]:
    """Return the readings of each sensor, sorted by run and order."""
    if frame.empty:
        return {}
    frame = frame[["module", "sensor", *_PLOTTED]]
    frame = frame.sort_values(["session", "repetition", "trial", "order"], kind="stable")
    found: dict[Pair, list[_Reading]] = {}
    pairs = zip(*(frame[name].tolist() for name in ("module", "sensor")), strict=True)
    readings = zip(*(frame[name].tolist() for name in _PLOTTED), strict=True)
    for (module, sensor), reading in zip(pairs, readings, strict=True):
        found.setdefault((str(module), str(sensor)), []).append(reading)
    return found


def plotted_readings(
    readings: Sequence[_Reading], line: Row | None, reference: ReferenceQuantity
) -> Iterator[PlottedReading]:
    """Return the readings of one sensor as figures draw them, in the order given.

    Without a line the departure is NaN. Readings without a reference value are left out.
    """
    if not readings:
        return
    unit = str(readings[0][-1])
    levels = [x for _, _, _, _, _, x, *_ in readings if not math.isnan(x)]
    width = max(levels) - min(levels) if levels else math.nan
    factor, shown_unit = reference.shown_factor, reference.shown_unit
    said: dict[float, str] = {}
    for session, repetition, trial, order, direction, x, nominal, signal, error, used, _ in readings:
        if not math.isfinite(x):
            continue
        level = nominal if math.isfinite(nominal) else x
        if level not in said:
            said[level] = numbers.significant(numbers.rounded_to(level, width) * factor, 3, shown_unit)
        value = numbers.measured(signal, error, unit, missing="") or numbers.significant(signal, 5, unit)
        yield PlottedReading(
            run=(str(session), int(repetition), str(trial)),
            order=int(order),
            direction=str(direction),
            x=x * factor,
            signal=signal,
            departure=_departure(line, x, signal) * factor,
            sentence=f"Run {repetition}, reading {order}, {direction} at {said[level]}: {value}",
            href=f"#{slugs.trial_anchor(str(trial))}",
            used=bool(used),
        )


def _departure(line: Row | None, x: float, signal: float) -> float:
    if line is None or not line["slope"]:
        return math.nan
    return float((signal - line["intercept"] - line["slope"] * x) / line["slope"])


_REASONS: Mapping[str, str] = {
    CONDITIONS: ": it would hold, but a source of its budget is not known",
    UNKNOWN: ": its uncertainty is not known",
    TOO_FEW: ": too few sensors",
    ONE_MODULE: ": one module says nothing of the next",
}


def limits_as_shown(rows: pd.DataFrame, reference: ReferenceQuantity) -> pd.DataFrame:
    """Return verdicts with hidden columns in shown units: strain errors in per cent, others as they are."""
    limits = [str(limit) for limit in rows["limit"].tolist()]
    in_reference = np.array([limit == "strain_error" for limit in limits], dtype=bool)
    factor = np.where(in_reference, reference.shown_factor, 1.0)
    scaled = {f"_{key}": rows[key].to_numpy(float) * factor for key in ("value", "estimate", "low", "high")}
    verdicts = zip(rows["verdict"].tolist(), rows["reason"].tolist(), strict=True)
    units = zip(rows["unit"].tolist(), in_reference.tolist(), strict=True)
    return rows.assign(
        **scaled,
        _verdict=[f"{verdict}{_REASONS.get(reason, '')}" for verdict, reason in verdicts],
        _limit=[limit.replace("_1h", "_in_1\u00a0h").replace("_", " ") for limit in limits],
        _unit=[reference.shown_unit if shown else unit for unit, shown in units],
    )
