"""One page a sensor: everything known about it, its trials as sections, its calculator."""

from __future__ import annotations

from collections.abc import Hashable, Iterable, Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd

from campaign.analyses.calibration import CalibrationRecord
from campaign.analyses.findings import AVERAGED
from campaign.analyses.results import CampaignResults
from campaign.analyses.sensor_figures import expanded_uncertainty, principal_lines, principal_records
from campaign.pages import numbers, palette, slugs
from campaign.pages.calculator import calculator_data, record_href
from campaign.pages.calibration import hysteresis_in_percent, x_title
from campaign.pages.drift import sensor_holds
from campaign.pages.figures import (
    Figure,
    Layout,
    Trace,
    axis,
    band,
    intervals,
    label,
    layout,
    level_line,
    line,
    points,
)
from campaign.pages.influence_sections import sensor_influences
from campaign.pages.loop_sections import sensor_loops
from campaign.pages.page import Page
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

_MOST_RUN_PLOTS = 24
_RUN_STYLES = palette.GENERATION_STYLES


@dataclass(frozen=True)
class TrialSection:
    """One trial of a sensor as a section of its page.

    Attributes
    ----------
    trial
        The recording's path.
    anchor
        Anchor of the section.
    kind, started, session, fate
        As in the table of trials; empty where not recorded.
    runs
        One mapping a run of the trial: repetition, readings, line, zero return (NaN where unknown).
    figure
        Name of its little plot; empty where it has none.
    shared_with
        Other sensors of the module that the same run carried.
    """

    trial: str
    anchor: str
    kind: str
    started: str
    session: str
    fate: str
    runs: tuple[dict[Hashable, Any], ...]
    figure: str
    shared_with: tuple[str, ...]


def sensor_pages(results: CampaignResults, mapped: SkinMap) -> list[Page]:
    """Return the page of every sensor that a trial or a register names, neighbours linked in order."""
    keys = sensor_keys(results)
    pages = [_sensor_page(results, mapped, *key) for key in keys]
    links = [(f"{module} {sensor}", slugs.sensor_href(module, sensor)) for _, module, sensor in keys]
    return [
        replace(
            page,
            previous=links[i - 1] if i else None,
            following=links[i + 1] if i + 1 < len(links) else None,
        )
        for i, page in enumerate(pages)
    ]


def sensor_keys(results: CampaignResults) -> list[tuple[str, str, str]]:
    """Return (generation, module, sensor) of every sensor with a trial, sorted."""
    trials = results.intake.trials
    named = trials[(trials["module"].astype(str) != "") & (trials["sensor"].astype(str) != "")]
    keys = named[["generation", "module", "sensor"]].astype(str)
    best: dict[tuple[str, str], str] = {}
    for generation, module, sensor in sorted(keys.itertuples(index=False, name=None)):
        if generation or (module, sensor) not in best:
            best[module, sensor] = generation
    return sorted((generation, module, sensor) for (module, sensor), generation in best.items())


def _sensor_page(
    results: CampaignResults, mapped: SkinMap, generation: str, module: str, sensor: str
) -> Page:
    who = {"generation": generation, "module": module, "sensor": sensor}
    rows = _readings_of(results, module, sensor)
    records = _records_of(results, module, sensor)
    line_row = _line_of(results, module, sensor)
    sections, plots = trial_sections(results, module, sensor, rows, line_row)
    figures: list[Figure] = []
    if line_row is not None and results.calibration is not None:
        reference = results.calibration.reference
        record = principal_records(records)[0] if records else None
        figures = [
            line_figure(rows, line_row, record, reference),
            residual_figure(rows, line_row, record, reference),
        ]
        loops = hysteresis_figure(results, module, sensor)
        figures += [loops] if loops is not None else []
    influences, swept = sensor_influences(results, module, sensor)
    figures += swept
    looped, outlines = sensor_loops(results, module, sensor)
    figures += outlines
    holds, held, holds_by_trial = sensor_holds(results, module, sensor)
    figures += holds
    tables = [*_runs_table(results, module, sensor), *_limits_table(results, module, sensor)]
    tables += [held] if held is not None else []
    return Page(
        slug=slugs.sensor_slug(module, sensor),
        number=None,
        title=f"{module} {sensor}",
        template="sensor.html",
        context={
            **who,
            "map": mapped,
            "line": line_row,
            "reference": results.readings.reference,
            "merits": _merits_of(results, module, sensor),
            "merit_words": MERIT_WORDS,
            "merit_anchors": MERIT_ANCHORS,
            "run_unit": ""
            if line_row is None
            else f"{line_row['unit']} per {results.readings.reference.shown_unit}",
            "example_signal": _example_signal(records),
            "records": [(record, record_href(record)) for record in records],
            "accuracy": _accuracy_of(records),
            "averaged": AVERAGED,
            "sections": sections,
            "influences": influences,
            "loops": looped,
            "holds_by_trial": holds_by_trial,
            "register": _register_of(results, module, sensor),
            "used": bool(len(rows) and rows["used"].any()),
            "labels": {} if results.calibration is None else results.calibration.labels,
            "ordinary": _ordinary_of(results, module, sensor),
        },
        figures=(*figures, *plots),
        tables=tuple(tables),
        data={"calculator": calculator_data(records)} if records else {},
        description=f"Readings, line, figures of merit and trials of sensor {sensor} of module {module}.",
        above=((module, slugs.module_href(module)),),
    )


def _of(frame: pd.DataFrame, module: str, sensor: str) -> pd.DataFrame:
    return frame[(frame["module"].astype(str) == module) & (frame["sensor"].astype(str) == sensor)]


def _readings_of(results: CampaignResults, module: str, sensor: str) -> pd.DataFrame:
    source = results.calibration.readings if results.calibration is not None else results.readings.table
    return _of(source, module, sensor)


def _records_of(results: CampaignResults, module: str, sensor: str) -> list[CalibrationRecord]:
    if results.calibration is None:
        return []
    return [r for r in results.calibration.records if (r.module, r.sensor) == (module, sensor)]


def _line_of(results: CampaignResults, module: str, sensor: str) -> dict[Hashable, Any] | None:
    if results.calibration is None:
        return None
    rows = _of(results.calibration.sensor_lines, module, sensor)
    return principal_lines(rows).to_dict("records")[0] if len(rows) else None


def _ordinary_of(results: CampaignResults, module: str, sensor: str) -> dict[Hashable, Any] | None:
    if results.calibration is None:
        return None
    rows = _of(results.calibration.ordinary_lines, module, sensor)
    return rows.to_dict("records")[0] if len(rows) else None


def _merits_of(results: CampaignResults, module: str, sensor: str) -> list[dict[Hashable, Any]]:
    """Figures of merit in order, each with the factor and unit that pages show it in."""
    reference = results.readings.reference
    rows = _of(results.limits.figures, module, sensor).dropna(subset=["estimate"])
    in_reference = rows["figure"] == "strain_error"
    rows = rows.assign(
        factor=in_reference.map({True: reference.shown_factor, False: 1.0}),
        shown_unit=in_reference.map({True: reference.shown_unit, False: "%FSO"}),
    )
    return sorted(rows.to_dict("records"), key=lambda row: FIGURE_ORDER.index(str(row["figure"])))


def _example_signal(records: list[CalibrationRecord]) -> str:
    """A signal from the middle of the calibrated range, for the calculator to start from."""
    if not records:
        return ""
    record = principal_records(records)[0]
    middle = (record.signal_low + record.signal_high) / 2
    decimals = max(0, 2 - int(np.floor(np.log10(max(record.signal_high - record.signal_low, 1e-12)))))
    return f"{middle:.{decimals}f}"


def _accuracy_of(records: list[CalibrationRecord]) -> tuple[float, float] | None:
    """Largest 95 % half-widths over the range: of one reading and of a mean of :data:`AVERAGED`."""
    if not records:
        return None
    record = principal_records(records)[0]
    grid = np.linspace(record.x_low, record.x_high, 11)
    one, several = (max(expanded_uncertainty(record, x, m) for x in grid) for m in (1, AVERAGED))
    return one, several


def _register_of(results: CampaignResults, module: str, sensor: str) -> list[tuple[str, str]]:
    """What the register says of the sensor: place and rest length, then its free columns."""
    register = results.intake.sensors
    rows = (
        _of(register, module, sensor) if {"module", "sensor"} <= set(register.columns) else register.iloc[:0]
    )
    if rows.empty:
        return []
    row = {str(k): _text(v) for k, v in rows.iloc[0].items()}
    facts = [("Position", row.get("position", ""))]
    if row.get("from") and row.get("to"):
        facts.append(("Between nodes", f"{row['from']} and {row['to']}"))
    facts.append(("Rest length", _rest_length(rows.iloc[0], row.get("rest_length_method", ""))))
    others = [(k.replace("_", " ").capitalize(), v) for k, v in row.items() if k not in _KNOWN]
    return [(name, value) for name, value in (*facts, *others) if value not in ("", "nan", "None")]


_KNOWN = (
    *("module", "sensor", "position", "from", "to", "rest_length", "rest_length_uncertainty"),
    *("rest_length_mm", "rest_length_uncertainty_mm", "rest_length_method"),
)


def _rest_length(row: pd.Series, method: str) -> str:
    length, spread = (float(row.get(f"rest_length{k}_mm", float("nan"))) for k in ("", "_uncertainty"))
    if not np.isfinite(length):
        return "not known"
    words = numbers.measured(length, spread, "mm", missing=numbers.significant(length, 4, "mm"))
    return f"{words} ({method})" if method else words


def line_figure(
    rows: pd.DataFrame,
    row: dict[Hashable, Any],
    record: CalibrationRecord | None,
    reference: ReferenceQuantity,
) -> Figure:
    """Return the readings of every run, the sensor's line, and the band of one reading in a new run."""
    factor = reference.shown_factor
    grid = np.linspace(row["strain_low"], row["strain_high"], 41)
    fitted = row["intercept"] + row["slope"] * grid
    traces: list[Trace] = []
    banded = False
    if record is not None:
        reach = np.array([expanded_uncertainty(record, x) for x in grid]) * abs(record.slope)
        banded = bool(np.isfinite(reach).all())
        if banded:
            traces.append(band(grid * factor, fitted - reach, fitted + reach))
    traces.append(line(grid * factor, fitted, colour=palette.INK))
    for index, (_, run) in enumerate(rows.groupby(["session", "repetition", "trial"], sort=True)):
        traces += _reading_marks(run, index, "signal", factor, reference, str(row["unit"]))
    return Figure(
        name="line",
        caption=_line_caption(row, reference),
        alternative=f"Signal against {x_title(reference).lower()}: readings of every run, filled while "
        f"rising and "
        "open while falling, about a straight line with its band.",
        traces=tuple(traces),
        layout=layout(axis(x_title(reference), reference.shown_unit), axis("Signal", str(row["unit"]))),
        data=rows[[c for c in _EXPORTED if c in rows]],
        note=(
            "The band holds one reading of a new run with 95 %. "
            if banded
            else "One run: no band can be drawn. "
        )
        + "Filled: rising; open: falling; each run has its own mark. Every point leads to its trial.",
        height=400,
    )


_EXPORTED = (
    "session",
    "repetition",
    "trial",
    "order",
    "direction",
    "nominal_level",
    "x",
    "signal",
    "unit",
    "standard_error",
    "settled",
    "used",
    "fitted",
    "residual",
    "studentised",
)


def _line_caption(row: dict[Hashable, Any], reference: ReferenceQuantity) -> str:
    factor = reference.shown_factor
    per = f"{row['unit']} per {reference.shown_unit}"
    spread = float(np.sqrt(row["var_slope"])) / factor
    slope = numbers.measured(
        row["slope"] / factor, spread, per, missing=numbers.significant(row["slope"] / factor, 4, per)
    )
    runs = numbers.count(int(row["runs"]), "run")
    who = f"{row['module']} {row['sensor']}"
    return f"{who} follows a line of slope {slope} (standard uncertainty) over {runs}."


def _reading_marks(
    run: pd.DataFrame, index: int, column: str, factor: float, reference: ReferenceQuantity, unit: str
) -> Iterable[Trace]:
    style = _RUN_STYLES[index % len(_RUN_STYLES)]
    for direction, part in run.groupby("direction", sort=True):
        shown = part.dropna(subset=["x", column])
        if shown.empty:
            continue
        yield points(
            shown["x"] * factor,
            shown[column],
            style=style,
            size=6,
            open_marker=direction != "rising",
            text=[_reading_sentence(r, factor, reference, unit) for r in shown.to_dict("records")],
            links=[f"#{slugs.trial_anchor(str(t))}" for t in shown["trial"]],
        )


def _reading_sentence(
    row: dict[Hashable, Any], factor: float, reference: ReferenceQuantity, unit: str
) -> str:
    place = numbers.significant(row["x"] * factor, 3, reference.shown_unit)
    signal = numbers.measured(
        row["signal"], row["standard_error"], unit, missing=numbers.significant(row["signal"], 5, unit)
    )
    return f"Run {row['repetition']}, reading {row['order']}, {row['direction']} at {place}: {signal}"


def residual_figure(
    rows: pd.DataFrame,
    row: dict[Hashable, Any],
    record: CalibrationRecord | None,
    reference: ReferenceQuantity,
) -> Figure:
    """Return departures from the sensor's line as strain, run by run."""
    factor = reference.shown_factor
    shown = rows.assign(
        departure=(rows["signal"] - row["intercept"] - row["slope"] * rows["x"]) / row["slope"] * factor
    )
    traces: list[Trace] = []
    if record is not None:
        grid = np.linspace(row["strain_low"], row["strain_high"], 41)
        reach = np.array([expanded_uncertainty(record, x) for x in grid]) * factor
        if np.isfinite(reach).all():
            traces.append(band(grid * factor, -reach, reach))
    for index, (_, run) in enumerate(shown.groupby(["session", "repetition", "trial"], sort=True)):
        style = _RUN_STYLES[index % len(_RUN_STYLES)]
        path = run.sort_values("order").dropna(subset=["x", "departure"])
        traces.append(
            line(path["x"] * factor, path["departure"], colour=style.colour, dash=style.dash, width=1)
        )
        traces += _reading_marks(run, index, "departure", factor, reference, str(row["unit"]))
    largest = float(shown.loc[shown["used"], "departure"].abs().max())
    words = "strain" if reference.name == "strain" else reference.name
    return Figure(
        name="departures",
        caption=f"No reading departs from the line by more than "
        f"{numbers.significant(largest, 2, reference.shown_unit)}.",
        alternative=f"Departure from the line as {words}, one path a run in the order of its readings, "
        f"with the band "
        "of one reading in a new run.",
        traces=tuple(traces),
        layout=layout(
            axis(x_title(reference), reference.shown_unit),
            axis(f"Departure as {words}", reference.shown_unit),
            shapes=[level_line(0, colour=palette.INK)],
        ),
        data=shown[[c for c in (*_EXPORTED, "departure") if c in shown]],
        note="Each path is one run in the order of its readings: a gap between its way up and down is its "
        "loop, a "
        "shifted path is the run's own zero.",
        height=340,
    )


def hysteresis_figure(results: CampaignResults, module: str, sensor: str) -> Figure | None:
    """Return the difference of the branches level by level with simultaneous intervals."""
    if results.calibration is None:
        return None
    levels = _of(hysteresis_in_percent(results.calibration), module, sensor)
    if levels.empty:
        return None
    reference = results.calibration.reference
    x = levels["nominal_level"] * reference.shown_factor
    text = [
        f"At {numbers.significant(place, 3, reference.shown_unit)}: "
        f"{numbers.interval(r['percent_fso'], r['low'], r['high'], '%FSO')}"
        for place, r in zip(x.tolist(), levels.to_dict("records"), strict=True)
    ]
    apart = int(((levels["low"] > 0) | (levels["high"] < 0)).sum())
    return Figure(
        name="hysteresis",
        caption=f"The branches differ by up to "
        f"{numbers.significant(float(levels['percent_fso'].abs().max()), 2, '%FSO')}, told from zero at "
        f"{apart} of "
        f"{numbers.count(len(levels), 'level')}.",
        alternative="Rising minus falling signal at each level in per cent of full-scale output, with "
        "simultaneous "
        "95 % intervals.",
        traces=(intervals(levels["percent_fso"], levels["low"], levels["high"], x, across=False, text=text),),
        layout=layout(
            axis(x_title(reference), reference.shown_unit),
            axis("Rising − falling", "%FSO"),
            shapes=[level_line(0, colour=palette.INK)],
        ),
        data=levels,
        note="The intervals hold together over all levels.",
        height=260,
    )


def trial_sections(
    results: CampaignResults,
    module: str,
    sensor: str,
    rows: pd.DataFrame,
    line_row: dict[Hashable, Any] | None,
) -> tuple[list[TrialSection], list[Figure]]:
    """Return the sections of a sensor's trials in order of time, and their little plots."""
    trials = _of(results.intake.trials, module, sensor).drop_duplicates("file")
    trials = trials.sort_values(["started", "file"], kind="stable")
    sections: list[TrialSection] = []
    plots: list[Figure] = []
    for index, trial in enumerate(trials.to_dict("records"), 1):
        own = rows[rows["trial"] == trial["file"]]
        plot = None
        if line_row is not None and len(own) and index <= _MOST_RUN_PLOTS:
            plot = run_plot(own, line_row, results.readings.reference, index)
            plots.append(plot)
        sections.append(_section(results, module, sensor, trial, plot.name if plot is not None else ""))
    return sections, plots


def _section(
    results: CampaignResults, module: str, sensor: str, trial: dict[Hashable, Any], figure: str
) -> TrialSection:
    file = str(trial["file"])
    everyone = results.intake.trials
    others = everyone[
        (everyone["file"] == file) & (everyone["module"] == module) & (everyone["sensor"] != sensor)
    ]
    return TrialSection(
        trial=file,
        anchor=slugs.trial_anchor(file),
        kind=_text(trial["kind"]),
        started=_text(trial["started"]).replace("T", " "),
        session=_text(trial["session"]),
        fate=_text(trial["fate"]),
        runs=_runs_of(results, module, sensor, file),
        figure=figure,
        shared_with=tuple(sorted({str(s) for s in others["sensor"] if str(s)})),
    )


def _text(value: object) -> str:
    return "" if value is None or value != value else str(value)


def _runs_of(
    results: CampaignResults, module: str, sensor: str, file: str
) -> tuple[dict[Hashable, Any], ...]:
    if results.calibration is None:
        return ()
    runs = _of(results.calibration.run_lines, module, sensor)
    runs = runs[runs["trial"] == file]
    best = runs.assign(_rank=runs["branch"].map({"both": 0, "rising": 1, "falling": 2})).sort_values("_rank")
    return tuple(best.drop_duplicates(["session", "repetition"]).drop(columns="_rank").to_dict("records"))


def run_plot(
    rows: pd.DataFrame, row: dict[Hashable, Any], reference: ReferenceQuantity, index: int
) -> Figure:
    """Return the little plot of one trial: departure from the sensor's line in the order of the readings."""
    factor = reference.shown_factor
    shown = rows.assign(
        departure=(rows["signal"] - row["intercept"] - row["slope"] * rows["x"]) / row["slope"] * factor
    )
    traces: list[Trace] = []
    ends: list[Layout] = []
    for number, (key, run) in enumerate(shown.groupby(["session", "repetition"], sort=True)):
        style = _RUN_STYLES[number % len(_RUN_STYLES)]
        path = run.sort_values("order").dropna(subset=["x", "departure"])
        if path.empty:
            continue
        traces.append(line(path["x"] * factor, path["departure"], colour=style.colour, width=1))
        traces += _reading_marks(path, number, "departure", factor, reference, str(row["unit"]))
        if shown["repetition"].nunique() > 1:
            last = path.iloc[-1]
            ends.append(
                label(f"run {key[1]}", last["x"] * factor, last["departure"], colour=style.colour, size=11)
            )
    moved = float((shown["departure"] * 1.0).mean())
    words = "strain" if reference.name == "strain" else reference.name
    return Figure(
        name=f"trial-{index}",
        caption=f"On average {numbers.significant(abs(moved), 2, reference.shown_unit)} "
        f"{'above' if moved >= 0 else 'below'} the sensor's line.",
        alternative=f"Departure from the sensor's line as {words} against {x_title(reference).lower()}, in "
        f"the order "
        "of the readings.",
        traces=tuple(traces),
        layout=layout(
            axis(x_title(reference), reference.shown_unit),
            axis("Departure", reference.shown_unit),
            shapes=[level_line(0, colour=palette.INK)],
            annotations=ends,
        ),
        data=shown[[c for c in (*_EXPORTED, "departure") if c in shown]],
        height=210,
    )


def _runs_table(results: CampaignResults, module: str, sensor: str) -> list[Table]:
    calibration, line_row = results.calibration, _line_of(results, module, sensor)
    if calibration is None or line_row is None:
        return []
    runs = _of(calibration.run_lines, module, sensor)
    runs = runs[runs["branch"] == line_row["branch"]]
    reference, unit = calibration.reference, str(line_row["unit"])
    frame = runs.assign(_href=[f"#{slugs.trial_anchor(str(t))}" for t in runs["trial"]])
    factor = 1 / reference.shown_factor
    columns = [
        Column("session", "Mounting", kind="text"),
        Column("repetition", "Run", kind="text", href="_href"),
        Column("intercept", "Signal at zero", unit, digits=5),
        Column("slope", "Slope", f"{unit} per {reference.shown_unit}", digits=4, factor=factor),
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
            note="The runs’ scatter carries the interval: Signal at zero and slope of one run have none of "
            "their own.",
        )
    ]


def _limits_table(results: CampaignResults, module: str, sensor: str) -> list[Table]:
    rows = results.limits.of_sensors()
    rows = _of(rows, module, sensor)
    if rows.empty:
        return []
    frame = limits_as_shown(rows, results.readings.reference)
    return [
        Table(
            name="sensor_limits",
            caption="The campaign's limits, judged with the uncertainty of each figure.",
            frame=frame,
            columns=(
                Column("_limit", "Limit", kind="text"),
                Column("_value", "At most", digits=3),
                Column("_unit", "Unit", kind="text"),
                Column("_estimate", "Found", interval=("_low", "_high")),
                Column("probability", "Probability that it is kept", kind="percent", missing="unknown"),
                Column("verdict", "Verdict", kind="text"),
            ),
            source="limits",
        )
    ]


def limits_as_shown(rows: pd.DataFrame, reference: ReferenceQuantity) -> pd.DataFrame:
    """Return verdicts with hidden columns in shown units: strain errors in per cent, others as they are."""
    in_reference = rows["limit"] == "strain_error"
    factor = in_reference.map({True: reference.shown_factor, False: 1.0})
    scaled = {f"_{key}": rows[key] * factor for key in ("value", "estimate", "low", "high")}
    return rows.assign(
        **scaled,
        _limit=rows["limit"].str.replace("_", " "),
        _unit=rows["unit"].where(~in_reference, reference.shown_unit),
    )
