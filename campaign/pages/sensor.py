"""One page a sensor: everything known about it, its trials as sections, its calculator."""

from __future__ import annotations

from collections.abc import Hashable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd

from campaign.analyses.calibration import CalibrationRecord
from campaign.analyses.findings import AVERAGED
from campaign.analyses.results import CampaignResults
from campaign.pages import numbers, slugs
from campaign.pages.budget import sensor_budget
from campaign.pages.calculator import calculator_data, record_href
from campaign.pages.drift import sensor_holds
from campaign.pages.influence_sections import sensor_influences
from campaign.pages.layout_sections import lengths_said
from campaign.pages.loop_sections import sensor_loops
from campaign.pages.module_share import AllModules, ModuleShare
from campaign.pages.page import Page
from campaign.pages.rows import Row
from campaign.pages.sensor_parts import SensorParts, gather_sensors
from campaign.pages.sensor_plots import half_widths, moved_from_line, sensor_figures_of
from campaign.pages.skin_map import SkinMap
from campaign.pages.tables import Column, Table
from campaign.recordings.recording import ReferenceQuantity

FIGURE_ORDER = ("linearity", "bend", "hysteresis", "repeatability", "strain_error")
"""Figures of merit on a sensor's page, in order."""

MERIT_WORDS: Mapping[str, str] = {
    "linearity": "linearity (least squares)",
    "bend": "bend at mid range",
    "hysteresis": "hysteresis of the staircase",
    "repeatability": "repeatability SD",
    "strain_error": "expanded uncertainty of a reading",
}
"""What figures of merit are called in lists."""

MERIT_ANCHORS: Mapping[str, str] = {
    "linearity": "linearity",
    "bend": "lack-of-fit",
    "hysteresis": "hysteresis",
    "repeatability": "repeatability",
    "strain_error": "inverse-reading",
}
"""Where the Method page defines each."""


@dataclass(frozen=True)
class TrialSection:
    """One trial of a sensor as a section of its page.

    Attributes
    ----------
    trial
        The recording's path.
    anchor
        Anchor of the section.
    kind, started, session, repetition, fate
        As in the table of trials; empty where not recorded.
    runs
        One mapping a run of the trial: repetition, readings, line, zero return (NaN where unknown).
    moved
        How far its readings lie from the sensor's line on average, in words; empty where there is no line.
    shared_with
        Other sensors of the module that the same run carried.
    """

    trial: str
    anchor: str
    kind: str
    started: str
    session: str
    repetition: str
    fate: str
    runs: tuple[dict[Hashable, Any], ...]
    moved: str
    shared_with: tuple[str, ...]


def sensor_pages(share: ModuleShare, common: AllModules) -> Iterator[Page]:
    """Yield the page of every sensor of a module, neighbours linked in order."""
    results = share.results
    together = _sensors_by_trial(results.intake.trials)
    laid = lengths_said(results)
    sensors = gather_sensors(results, share.keys)
    for parts, (previous, following) in zip(sensors, share.sensor_neighbours, strict=True):
        page = _sensor_page(results, parts, common.mapped, together, laid)
        yield replace(page, previous=previous, following=following)


def _sensors_by_trial(trials: pd.DataFrame) -> dict[tuple[str, str], set[str]]:
    """Sensors that each (file, module) carried."""
    together: dict[tuple[str, str], set[str]] = {}
    for file, module, sensor in zip(trials["file"], trials["module"], trials["sensor"], strict=True):
        together.setdefault((str(file), str(module)), set()).add(str(sensor))
    return together


def _sensor_page(
    results: CampaignResults,
    parts: SensorParts,
    mapped: SkinMap,
    together: Mapping[tuple[str, str], set[str]],
    laid: Mapping[tuple[str, str, str], str],
) -> Page:
    sections = trial_sections(parts, together)
    reference, records = parts.reference, parts.records
    unit = "" if parts.line is None else f"{parts.line['unit']} per {reference.shown_unit}"
    influences, swept = sensor_influences(results, parts.module, parts.sensor)
    looped, outlines = sensor_loops(results, parts.module, parts.sensor)
    holds, held, holds_by_trial = sensor_holds(results, parts.module, parts.sensor)
    return Page(
        slug=slugs.sensor_slug(parts.module, parts.sensor),
        number=None,
        title=f"{parts.module} {parts.sensor}",
        template="sensor.html",
        context={
            "generation": parts.generation,
            "module": parts.module,
            "sensor": parts.sensor,
            "map": mapped,
            "line": parts.line,
            "reference": reference,
            "merits": shown_merits(parts.merits, reference),
            "merit_words": MERIT_WORDS,
            "merit_anchors": MERIT_ANCHORS,
            "run_unit": unit,
            "example_signal": _example_signal(parts.record),
            "records": [(record, record_href(record)) for record in records],
            "accuracy": _accuracy_of(parts.record),
            "averaged": AVERAGED,
            "budget": sensor_budget(results, parts.module, parts.sensor),
            "sections": sections,
            "influences": influences,
            "loops": looped,
            "holds_by_trial": holds_by_trial,
            "lengths": {
                trial: said for (m, s, trial), said in laid.items() if (m, s) == (parts.module, parts.sensor)
            },
            "register": register_facts(parts.register),
            "used": parts.used,
            "labels": {} if results.calibration is None else results.calibration.labels,
            "ordinary": parts.ordinary,
        },
        figures=(*sensor_figures_of(parts), *outlines, *swept, *holds),
        tables=(*_limits_table(parts), *_runs_table(parts), *held),
        data={"calculator": calculator_data(records)} if records else {},
        description=f"Readings, line, figures of merit and trials of sensor {parts.sensor} of module "
        f"{parts.module}.",
        above=((parts.module, slugs.module_href(parts.module)),),
    )


def shown_merits(
    merits: Sequence[dict[Hashable, Any]], reference: ReferenceQuantity
) -> list[dict[Hashable, Any]]:
    """Return figures of merit in order, each with the factor and unit that pages show it in."""
    in_reference = {"factor": reference.shown_factor, "shown_unit": reference.shown_unit}
    in_percent = {"factor": 1.0, "shown_unit": "%FSO"}
    shown = [{**row, **(in_reference if row["figure"] == "strain_error" else in_percent)} for row in merits]
    return sorted(shown, key=lambda row: FIGURE_ORDER.index(str(row["figure"])))


def _example_signal(record: CalibrationRecord | None) -> str:
    """A signal from the middle of the calibrated range, for the calculator to start from."""
    if record is None:
        return ""
    middle = (record.signal_low + record.signal_high) / 2
    decimals = max(0, 2 - int(np.floor(np.log10(max(record.signal_high - record.signal_low, 1e-12)))))
    return f"{middle:.{decimals}f}"


def _accuracy_of(record: CalibrationRecord | None) -> tuple[float, float] | None:
    """Largest 95 % half-widths over the range: of one reading and of a mean of :data:`AVERAGED`."""
    if record is None:
        return None
    grid = np.linspace(record.x_low, record.x_high, 11)
    return float(half_widths(record, grid).max()), float(half_widths(record, grid, AVERAGED).max())


_KNOWN = (
    *("module", "sensor", "position", "from", "to", "rest_length", "rest_length_uncertainty"),
    *("rest_length_mm", "rest_length_uncertainty_mm", "rest_length_method"),
)


def register_facts(row: Mapping[str, Any]) -> list[tuple[str, str]]:
    """Return what a register says of a sensor: place and rest length first, then its free columns."""
    if not row:
        return []
    texts = {key: _text(value) for key, value in row.items()}
    facts = [("Position", texts.get("position", ""))]
    if texts.get("from") and texts.get("to"):
        facts.append(("Between nodes", f"{texts['from']} and {texts['to']}"))
    facts.append(("Rest length", _rest_length(row, texts.get("rest_length_method", ""))))
    others = [(k.replace("_", " ").capitalize(), v) for k, v in texts.items() if k not in _KNOWN]
    return [(name, value) for name, value in (*facts, *others) if value]


def _rest_length(row: Mapping[str, Any], method: str) -> str:
    length, spread = (float(row.get(f"rest_length{k}_mm", float("nan"))) for k in ("", "_uncertainty"))
    if not np.isfinite(length):
        return "not known"
    words = numbers.measured(length, spread, "mm", missing=numbers.significant(length, 4, "mm"))
    return f"{words} ({method})" if method else words


def _text(value: object) -> str:
    missing = value is None or value is pd.NA or value != value
    return "" if missing or str(value) in ("nan", "None") else str(value)


def trial_sections(parts: SensorParts, together: Mapping[tuple[str, str], set[str]]) -> list[TrialSection]:
    """Return the sections of a sensor's trials in order of time."""
    runs, moved = _runs_by_trial(parts), moved_from_line(parts)
    sections: list[TrialSection] = []
    for trial in _trials_in_order(parts.trials):
        file = str(trial["file"])
        others = together.get((file, parts.module), set()) - {parts.sensor, ""}
        sections.append(
            TrialSection(
                trial=file,
                anchor=slugs.trial_anchor(file),
                kind=_text(trial["kind"]),
                started=_text(trial["started"]).replace("T", " "),
                session=_text(trial["session"]),
                repetition=_text(trial["repetition"]),
                fate=_text(trial["fate"]),
                runs=tuple(runs.get(file, ())),
                moved=moved.get(file, ""),
                shared_with=tuple(sorted(others)),
            )
        )
    return sections


def _trials_in_order(trials: Iterable[Row]) -> list[Row]:
    """Return the first row of every file, by time and file, those without a time last."""
    first: dict[str, Row] = {}
    for row in trials:
        first.setdefault(str(row["file"]), row)
    return sorted(
        first.values(), key=lambda t: (not _text(t["started"]), _text(t["started"]), str(t["file"]))
    )


def _runs_by_trial(parts: SensorParts) -> dict[str, list[dict[Hashable, Any]]]:
    runs: dict[str, list[dict[Hashable, Any]]] = {}
    for run in parts.run_rows:
        runs.setdefault(str(run["trial"]), []).append(run)
    return runs


def _runs_table(parts: SensorParts) -> list[Table]:
    if parts.line is None or parts.runs.empty:
        return []
    reference, unit, runs = parts.reference, str(parts.line["unit"]), parts.runs
    frame = runs.assign(_href=[f"#{slugs.trial_anchor(str(t))}" for t in runs["trial"]])
    columns = [
        Column("session", "Mounting", kind="text"),
        Column("repetition", "Run", kind="text", href="_href"),
        Column("intercept", "Signal at zero", unit, digits=5),
        Column(
            "slope",
            "Slope",
            f"{unit} per {reference.shown_unit}",
            digits=4,
            factor=1 / reference.shown_factor,
        ),
        Column("residual_sd", "Residual SD", unit, digits=2, missing="unknown"),
        Column("zero_return_percent_fso", "Zero return", "%FSO", digits=2, missing="not measured"),
    ]
    mounted = bool(runs["session"].astype(str).str.len().any())
    return [
        Table(
            name="runs",
            caption="Every run has its own zero and slope; the line above is their mean.",
            frame=frame,
            columns=tuple(columns if mounted else columns[1:]),
            source="run_lines",
            note="The scatter of the runs carries the interval; zero and slope of one run have none of "
            "their own.",
        )
    ]


def _limits_table(parts: SensorParts) -> list[Table]:
    if parts.limits.empty:
        return []
    return [
        Table(
            name="sensor_limits",
            caption="The campaign’s limits, judged with the uncertainty of each figure.",
            frame=parts.limits,
            columns=(
                Column("_limit", "Limit", kind="text"),
                Column("_value", "At most", digits=3),
                Column("_unit", "Unit", kind="text"),
                Column("_estimate", "Found", interval=("_low", "_high")),
                Column("probability", "Probability that it is kept", kind="percent", missing="unknown"),
                Column("_verdict", "Verdict", kind="text"),
            ),
            source="limits",
        )
    ]
