"""The figures of one sensor's page: its line, its departures from it run by run, its loop."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence

import numpy as np
import numpy.typing as npt

from campaign.analyses.calibration import CalibrationRecord
from campaign.analyses.sensor_figures import expanded_uncertainty
from campaign.pages import numbers, palette
from campaign.pages.calibration import x_title
from campaign.pages.figures import (
    Figure,
    Layout,
    Trace,
    axis,
    band,
    intervals,
    layout,
    level_line,
    line,
    panel,
    points,
    small_multiples,
)
from campaign.pages.sensor_parts import PlottedReading, SensorParts
from campaign.recordings.recording import ReferenceQuantity

_STYLES = palette.GENERATION_STYLES


def sensor_figures_of(parts: SensorParts) -> list[Figure]:
    """Return the figures of a sensor that has a line."""
    if parts.line is None:
        return []
    made = [line_figure(parts), departure_figure(parts), hysteresis_figure(parts)]
    return [figure for figure in made if figure is not None]


def line_figure(parts: SensorParts) -> Figure:
    """Return the readings of every run, the sensor's line, and the band of one reading in a new run."""
    row, reference = parts.line or {}, parts.reference
    grid, reach = _reach(parts)
    fitted = row["intercept"] + row["slope"] * grid
    x = grid * reference.shown_factor
    traces: list[Trace] = []
    if reach is not None:
        wide = reach * abs(row["slope"])
        traces.append(band(x, fitted - wide, fitted + wide))
    traces.append(line(x, fitted, colour=palette.INK))
    for index, (_, readings) in enumerate(parts.readings_by_run()):
        traces += _marks(readings, index, [r.signal for r in readings])
    return Figure(
        name="line",
        caption=_line_caption(parts),
        alternative=f"Signal against {x_title(reference).lower()}: readings of every run, filled while "
        f"rising and "
        "open while falling, about a straight line with its band.",
        traces=tuple(traces),
        layout=layout(axis(x_title(reference), reference.shown_unit), axis("Signal", str(row["unit"]))),
        table="readings",
        note=(
            "The band holds one reading of a new run with 95 %. "
            if reach is not None
            else "No run-to-run error is known: no band can be drawn. "
        )
        + "Filled: rising; open: falling; each run has its own mark. Every point leads to its trial.",
        height=400,
    )


def _reach(parts: SensorParts) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.float64] | None]:
    """Places along the range, and the 95 % half-width of one reading there in units of x; None if unknown."""
    row, record = parts.line or {}, parts.record
    grid = np.linspace(row["strain_low"], row["strain_high"], 31)
    if record is None:
        return grid, None
    reach = half_widths(record, grid)
    return grid, reach if bool(np.isfinite(reach).all()) else None


def half_widths(
    record: CalibrationRecord, places: npt.NDArray[np.float64], readings: int = 1
) -> npt.NDArray[np.float64]:
    """Return the 95 % half-width of a reading (or a mean of *readings* of one run) at each place."""
    return np.array([expanded_uncertainty(record, float(x), readings) for x in places])


def _line_caption(parts: SensorParts) -> str:
    row, factor = parts.line or {}, parts.reference.shown_factor
    per = f"{row['unit']} per {parts.reference.shown_unit}"
    spread = float(np.sqrt(row["var_slope"])) / factor
    value = row["slope"] / factor
    slope = numbers.measured(value, spread, per, missing=numbers.significant(value, 4, per))
    runs = numbers.count(int(row["runs"]), "run")
    who = f"{parts.module} {parts.sensor}"
    return f"{who} follows a line of slope {slope} (standard uncertainty) over {runs}."


def _marks(
    readings: Sequence[PlottedReading], index: int, heights: Sequence[float], axes: str = ""
) -> Iterable[Trace]:
    """Marks of one run: filled while rising, open else."""
    style = _STYLES[index % len(_STYLES)]
    for rising in (True, False):
        chosen = [
            (r, y) for r, y in zip(readings, heights, strict=True) if (r.direction == "rising") is rising
        ]
        if not chosen:
            continue
        yield points(
            [r.x for r, _ in chosen],
            [y for _, y in chosen],
            style=style,
            size=6,
            open_marker=not rising,
            text=[r.sentence for r, _ in chosen],
            links=[r.href for r, _ in chosen],
            axes=axes,
        )


def departure_figure(parts: SensorParts) -> Figure:
    """Return departures from the sensor's line in units of x, one panel a run."""
    reference = parts.reference
    grid, reach = _reach(parts)
    every_run = list(parts.readings_by_run())
    runs = every_run[:_MOST_PANELS]
    drawn = layout_of_runs([run for run, _ in runs], reference)
    traces: list[Trace] = []
    for index, (_, readings) in enumerate(runs):
        if reach is not None:
            wide = reach * reference.shown_factor
            traces.append(band(grid * reference.shown_factor, -wide, wide, axes=panel(index)))
        traces += _path(readings, index)
    largest = max((abs(r.departure) for r in parts.readings if r.used), default=float("nan"))
    return Figure(
        name="departures",
        caption="No reading departs from the line by more than "
        f"{numbers.significant(largest, 2, reference.shown_unit)}.",
        alternative=f"{_departure_words(reference)}, one panel a run, as a path in the order of its "
        "readings, with the band of one reading in a new run.",
        traces=tuple(traces),
        layout=drawn,
        table="readings",
        note="Each panel is one run, its path in the order of the readings: a gap between its way up and "
        "down is its loop, a path that lies high or low is the run’s own zero. Filled: rising; open: falling."
        + (
            f" The first {len(runs)} runs are drawn; the CSV holds all." if len(every_run) > len(runs) else ""
        ),
        height=90 + 150 * math.ceil(len(runs) / _COLUMNS),
    )


_MOST_PANELS = 24
_COLUMNS = 3


def layout_of_runs(runs: Sequence[tuple[str, int, str]], reference: ReferenceQuantity) -> Layout:
    """Return a panel for each run, named by its repetition and, where there are several, its mounting."""
    mountings = {session for session, _, _ in runs}
    titles = [
        f"run {repetition}, mounting {session}" if len(mountings) > 1 else f"run {repetition}"
        for session, repetition, _ in runs
    ]
    return small_multiples(
        titles,
        axis(x_title(reference), reference.shown_unit),
        axis("Departure", reference.shown_unit),
        columns=_COLUMNS,
        gap=(0.04, min(0.2, 0.36 / max(math.ceil(len(runs) / _COLUMNS), 1))),
        shapes=[level_line(0, colour=palette.INK, axes=panel(i)) for i in range(len(runs))],
    )


def moved_from_line(parts: SensorParts) -> dict[str, str]:
    """Return in words how far the readings of each trial lie from the sensor's line on average."""
    if parts.line is None:
        return {}
    departures: dict[str, list[float]] = {}
    for (_, _, trial), own in parts.readings_by_run():
        departures.setdefault(trial, []).extend(reading.departure for reading in own)
    return {trial: _moved_words(float(np.mean(own)), parts.reference) for trial, own in departures.items()}


def _moved_words(moved: float, reference: ReferenceQuantity) -> str:
    size = numbers.significant(abs(moved), 2, reference.shown_unit)
    return f"On average {size} {'above' if moved >= 0 else 'below'} the sensor’s line"


def _departure_words(reference: ReferenceQuantity) -> str:
    return f"Departure as {'strain' if reference.name == 'strain' else reference.name}"


def _path(readings: Sequence[PlottedReading], index: int) -> list[Trace]:
    """One run in a panel of its own: a path in the order of its readings, with its marks."""
    heights, style = [r.departure for r in readings], _STYLES[0]
    path = line([r.x for r in readings], heights, colour=style.colour, width=1, axes=panel(index))
    return [path, *_marks(readings, 0, heights, panel(index))]


def hysteresis_figure(parts: SensorParts) -> Figure | None:
    """Return the difference of the branches level by level with simultaneous intervals."""
    levels, reference = parts.levels, parts.reference
    if levels.empty:
        return None
    columns = (levels[k].tolist() for k in ("nominal_level", "percent_fso", "low", "high"))
    rows = [(x * reference.shown_factor, e, a, b) for x, e, a, b in zip(*columns, strict=True)]
    places, estimates, low, high = zip(*rows, strict=True)
    text = [
        f"At {numbers.significant(x, 3, reference.shown_unit)}: {numbers.interval(e, a, b, '%FSO')}"
        for x, e, a, b in rows
    ]
    apart = sum(a > 0 or b < 0 for _, _, a, b in rows)
    widest = numbers.significant(max(abs(e) for e in estimates), 2, "%FSO")
    return Figure(
        name="hysteresis",
        caption=f"The branches differ by up to {widest}, told from zero at {apart} of "
        f"{numbers.count(len(rows), 'level')}.",
        alternative="Rising minus falling signal at each level in per cent of full-scale output, with "
        "simultaneous "
        "95 % intervals.",
        traces=(intervals(estimates, low, high, places, across=False, text=text),),
        layout=layout(
            axis(x_title(reference), reference.shown_unit),
            axis("Rising − falling", "%FSO"),
            shapes=[level_line(0, colour=palette.INK)],
        ),
        data=levels,
        note="The intervals hold together over all levels.",
        height=260,
    )
