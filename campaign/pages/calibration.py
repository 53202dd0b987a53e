"""Page 1, Calibration: what line each sensor follows, and how well."""

from __future__ import annotations

import math
from collections.abc import Hashable, Iterable, Sequence
from typing import Any

import numpy as np
import pandas as pd

from campaign.analyses.calibration import Calibration
from campaign.analyses.results import CampaignResults
from campaign.analyses.sensor_figures import principal_lines
from campaign.pages import numbers, palette, slugs
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
    panel,
    points,
    small_multiples,
)
from campaign.pages.page import Page
from campaign.pages.rows import records_of
from campaign.pages.sensor_axis import SensorAxis, interval_traces, sensor_axis
from campaign.pages.tables import Column, Table
from campaign.recordings.recording import ReferenceQuantity

MERITS = ("linearity", "hysteresis", "repeatability")
"""Figures of merit that stand side by side, in order."""

LAWS = ((1, "λ: free to narrow"), (2, "λ²: width kept"), (4, "λ⁴: stretched both ways"))
"""Stretch exponents of ideal parallel plates on an incompressible dielectric."""

FEW_SENSORS = 24
"""Up to so many sensors mean readings are drawn with their lines."""

MOST_MODULES = 48
"""Modules that the small multiples show; the other figures and the table always hold all of them."""


def calibration_page(results: CampaignResults) -> Page | None:
    """Return page 1, or ``None`` where no staircase was read."""
    calibration = results.calibration
    if calibration is None or calibration.sensor_lines.empty:
        return None
    where = sensor_axis(calibration.sensor_lines)
    figures = [
        lines_figure(calibration, where),
        merits_figure(results, where),
        bend_figure(results, where),
        level_hysteresis_figure(calibration, where),
        *stretch_figures(calibration, where),
    ]
    return Page(
        slug="calibration",
        number=1,
        title="Calibration",
        template="calibration.html",
        context={
            "calibration": calibration,
            "reference": calibration.reference,
            "sources": sorted(set(calibration.sensor_lines["variance_source"].astype(str))),
            "shown_modules": min(len(where.modules), MOST_MODULES),
            "all_modules": len(where.modules),
        },
        figures=tuple(figure for figure in figures if figure is not None),
        tables=(sensor_lines_table(calibration),),
        description="The line of every sensor, its linearity, hysteresis and repeatability, each with its "
        "interval.",
    )


def x_title(reference: ReferenceQuantity) -> str:
    """Return the words on an axis of the reference quantity, without the unit."""
    return {"strain": "Strain", "elongation": "Elongation", "length": "Length"}[reference.name]


def signal_unit(calibration: Calibration) -> str:
    """Return the unit of the signals, or ``various`` where sensors differ in it."""
    units = sorted(set(calibration.sensor_lines["unit"].astype(str)))
    return units[0] if len(units) == 1 else "various"


def lines_figure(calibration: Calibration, where: SensorAxis) -> Figure:
    """Return the lines of all sensors, one panel a module; in small campaigns with the mean readings."""
    reference, unit = calibration.reference, signal_unit(calibration)
    modules = where.modules[:MOST_MODULES]
    lines = principal_lines(calibration.sensor_lines)
    means = _level_means(calibration) if len(lines) <= FEW_SENSORS else None
    traces: list[Trace] = []
    labels: list[Layout] = []
    for index, (generation, module) in enumerate(modules):
        own = lines[(lines["generation"] == generation) & (lines["module"] == module)]
        traces += _module_lines(own, means, where, panel(index), reference)
        labels += _end_labels(own, panel(index), reference) if len(modules) <= 12 else []
    marked = "Open marks are the mean readings of a level over runs. " if means is not None else ""
    columns, rows = panel_grid(len(modules))
    return Figure(
        name="lines",
        caption=_lines_caption(lines, reference, len(where.modules)),
        alternative=f"Small multiples, one panel a module: signal against {x_title(reference).lower()}, one "
        "straight line a sensor.",
        traces=tuple(traces),
        layout=small_multiples(
            [_panel_name(g, m, where) for g, m in modules],
            axis(x_title(reference), reference.shown_unit),
            axis("Signal", unit),
            columns=columns,
            gap=(0.04, 0.30 / rows if rows > 1 else 0.1),
            annotations=labels,
        ),
        table="sensor_lines",
        note=f"{marked}A line is the mean of the lines of its sensor’s runs. Its ends lead to the sensor’s "
        f"page.",
        height=90 + 190 * rows if rows > 1 else 420,
    )


def panel_grid(panels: int) -> tuple[int, int]:
    """Return columns and rows for so many panels."""
    columns = 1 if panels == 1 else 2 if panels <= 4 else 4 if panels > 12 else 3
    return columns, math.ceil(panels / columns)


def _panel_name(generation: str, module: str, where: SensorAxis) -> str:
    return module if len(where.generations) == 1 else f"{module} · {generation}"


def _level_means(calibration: Calibration) -> pd.DataFrame:
    rows = calibration.readings
    rows = rows[rows["used"] & (rows["direction"] != "turning")]
    keys = ["generation", "module", "sensor"]
    rows = rows.assign(_place=rows["nominal_level"].fillna(rows["x"].round(4)))
    return rows.groupby([*keys, "_place"], sort=True)[["x", "signal"]].mean().reset_index()


def _module_lines(
    lines: pd.DataFrame,
    means: pd.DataFrame | None,
    where: SensorAxis,
    axes: str,
    reference: ReferenceQuantity,
) -> Iterable[Trace]:
    for row in records_of(lines):
        style = where.style(str(row["generation"]))
        module, sensor = str(row["module"]), str(row["sensor"])
        ends = np.array([row["strain_low"], row["strain_high"]])
        sentence = [_line_sentence(row, reference)] * 2
        links = [slugs.sensor_href(module, sensor)] * 2
        yield line(
            ends * reference.shown_factor,
            row["intercept"] + row["slope"] * ends,
            colour=style.colour,
            dash=style.dash,
            width=1.3,
            text=sentence,
            links=links,
            module=module,
            sensor=sensor,
            axes=axes,
        )
        if means is not None:
            own = means[(means["module"] == module) & (means["sensor"] == sensor)]
            yield points(
                own["x"] * reference.shown_factor,
                own["signal"],
                style=style,
                size=4,
                open_marker=True,
                text=sentence[:1] * len(own),
                links=links[:1] * len(own),
                module=module,
                sensor=sensor,
                axes=axes,
            )


def _line_sentence(row: dict[Hashable, Any], reference: ReferenceQuantity) -> str:
    slope = row["slope"] / reference.shown_factor
    spread = math.sqrt(row["var_slope"]) / reference.shown_factor
    per = f"{row['unit']} per {reference.shown_unit}"
    value = numbers.measured(slope, spread, per, missing=numbers.significant(slope, 4, per))
    return f"{row['module']} {row['sensor']}: slope {value} (standard uncertainty)"


def _end_labels(lines: pd.DataFrame, axes: str, reference: ReferenceQuantity) -> list[Layout]:
    """Sensors' ids at the ends of their lines, dropped where two would overlap."""
    ends = sorted(
        (float(r["intercept"] + r["slope"] * r["strain_high"]), float(r["strain_high"]), str(r["sensor"]))
        for r in records_of(lines)
    )
    reach = (ends[-1][0] - ends[0][0]) or 1.0
    made: list[Layout] = []
    last = -math.inf
    for height, right, sensor in ends:
        if height - last < 0.16 * reach and made:
            continue
        made.append(
            label(
                sensor,
                right * reference.shown_factor,
                height,
                axes=axes,
                colour=palette.SOFT,
                size=10,
                shift=(3, 0),
            )
        )
        last = height
    return made


def _lines_caption(lines: pd.DataFrame, reference: ReferenceQuantity, modules: int) -> str:
    r_squared = lines["r_squared"].dropna()
    if len(lines) == 1 and r_squared.notna().any():
        row = lines.iloc[0]
        fit = numbers.fixed(float(r_squared.iloc[0]), 4)
        return f"The straight line of {row['module']} {row['sensor']}, with R² = {fit}."
    of = f"{numbers.count(len(lines), 'sensor')} of {numbers.count(modules, 'module')}"
    if r_squared.empty:
        return f"The lines of {of} against {x_title(reference).lower()}."
    return (
        f"Straight lines of {of} against {x_title(reference).lower()}; the least straight has "
        f"R² = {numbers.fixed(float(r_squared.min()), 4)}."
    )


def merits_figure(results: CampaignResults, where: SensorAxis) -> Figure | None:
    """Return linearity, hysteresis and repeatability of every sensor side by side, with intervals, limits."""
    figures = results.limits.figures
    shown = [name for name in MERITS if name in set(figures["figure"])]
    if not shown:
        return None
    traces: list[Trace] = []
    shapes: list[Layout] = []
    for index, name in enumerate(shown):
        rows = figures[figures["figure"] == name].dropna(subset=["estimate"])
        rows = _clipped_for_drawing(rows)
        sentences = [merit_sentence(name, row) for row in records_of(rows)]
        traces += interval_traces(rows, where, sentences, axes=panel(index))
        limit = results.description.limits.get(name)
        if limit is not None:
            shapes.append(
                level_line(limit[0], upright=True, colour=palette.ATTENTION, dash="dash", axes=panel(index))
            )
    made = small_multiples(
        [f"{name.capitalize()}" for name in shown],
        axis("", "%FSO"),
        where.axis(),
        columns=len(shown),
        shapes=shapes,
    )
    for index, name in enumerate(shown):
        key = f"xaxis{panel(index)}"
        made[key] = {k: v for k, v in made[key].items() if k != "matches"} | {
            "title": {"text": f"{name.capitalize()} / %FSO"},
            "rangemode": "tozero",
        }
    return Figure(
        name="merits",
        caption=_merits_caption(results, shown),
        alternative="Dots with 95 % intervals, one a sensor, ordered by module: "
        + ", ".join(shown)
        + " in per cent of full-scale output.",
        traces=tuple(traces),
        layout=made,
        data=figures.drop(columns="kind"),
        note="%FSO is per cent of the full-scale output of the sensor's own line. Bars are 95 % intervals; "
        "a bar cut "
        "at the edge goes on. A dashed upright is the campaign's limit.",
        height=where.height,
    )


def _clipped_for_drawing(rows: pd.DataFrame) -> pd.DataFrame:
    """Cut bars at three times the largest estimate, so that two runs' wide limits leave the dots readable."""
    edge = 3 * rows["estimate"].abs().max()
    return rows.assign(low=rows["low"].clip(-edge, edge), high=rows["high"].clip(-edge, edge))


def merit_sentence(name: str, row: dict[Hashable, Any]) -> str:
    """Return a sentence about one figure of one sensor, with its interval."""
    value = numbers.interval(row["estimate"], row["low"], row["high"], str(row["unit"]))
    return f"{row['module']} {row['sensor']}: {name} {value}"


def _merits_caption(results: CampaignResults, shown: Sequence[str]) -> str:
    figures = results.limits.figures
    parts = []
    for name in shown:
        rows = figures[figures["figure"] == name].dropna(subset=["estimate"])
        if len(rows):
            worst = rows.iloc[int(rows["estimate"].to_numpy(float).argmax())]
            parts.append(
                f"{name} reaches {numbers.significant(float(worst['estimate']), 2, '%FSO')} "
                f"({worst['module']} {worst['sensor']})"
            )
    return _sentence(parts)


def _sentence(parts: Sequence[str]) -> str:
    text = "; ".join(parts) or "no figure could be estimated"
    return f"{text[:1].upper()}{text[1:]}."


def bend_figure(results: CampaignResults, where: SensorAxis) -> Figure | None:
    """Return how far every sensor's readings bend away from its straight line, with intervals."""
    figures = results.limits.figures
    rows = figures[figures["figure"] == "bend"].dropna(subset=["estimate"])
    if rows.empty:
        return None
    apart = rows[(rows["low"] > 0) | (rows["high"] < 0)]
    clipped = _clipped_for_drawing(rows)
    return Figure(
        name="lack-of-fit",
        caption=f"The bend of {len(apart)} of {numbers.count(len(rows), 'sensor')} differs from zero; the "
        f"largest is "
        f"{numbers.significant(float(rows['estimate'].abs().max()), 2, '%FSO')}.",
        alternative="Dots with 95 % intervals, one a sensor: departure of the fitted parabola from its "
        "chord at mid "
        "range, in per cent of full-scale output, with an upright at zero.",
        traces=tuple(
            interval_traces(clipped, where, [merit_sentence("bend", r) for r in records_of(clipped)])
        ),
        layout=layout(
            axis("Bend at mid range", "%FSO"),
            where.axis(),
            shapes=[level_line(0, upright=True, colour=palette.INK)],
        ),
        data=rows.drop(columns="kind"),
        note="A bend is the quadratic term over half the range squared. A bend below zero: the signal "
        "rises steeply "
        "first and less at the end. Each interval stands alone; the lack-of-fit test beside it is corrected.",
        height=where.height,
    )


def level_hysteresis_figure(calibration: Calibration, where: SensorAxis) -> Figure | None:
    """Return the signed difference between branches at each level, one panel a module."""
    levels = hysteresis_in_percent(calibration)
    if levels.empty:
        return None
    reference = calibration.reference
    present = set(zip(levels["generation"], levels["module"], strict=True))
    modules = [m for m in where.modules if m in present][:MOST_MODULES]
    traces = [
        t for i, m in enumerate(modules) for t in _hysteresis_traces(levels, m, where, panel(i), reference)
    ]
    columns, rows = panel_grid(len(modules))
    return Figure(
        name="hysteresis",
        caption=_hysteresis_caption(levels),
        alternative="Small multiples, one panel a module: rising minus falling signal at each common "
        "level, in "
        "per cent of full-scale output: median and extremes of the sensors.",
        traces=tuple(traces),
        layout=small_multiples(
            [_panel_name(g, m, where) for g, m in modules],
            axis(x_title(reference), reference.shown_unit),
            axis("Rising − falling", "%FSO"),
            columns=columns,
            gap=(0.04, 0.30 / rows if rows > 1 else 0.1),
            shapes=[level_line(0, colour=palette.INK, axes=panel(i)) for i in range(len(modules))],
        ),
        data=levels,
        note="The line is the median of a module’s sensors, the band their extremes; each sensor’s own "
        "differences "
        "with simultaneous intervals stand on its page. Below zero: at the same length the signal was lower "
        "while stretching than while releasing.",
        height=90 + 170 * rows if rows > 1 else 420,
    )


def hysteresis_in_percent(calibration: Calibration, lines: pd.DataFrame | None = None) -> pd.DataFrame:
    """Return the level differences with their limits in per cent of full-scale output too (low, high).

    *lines* are the lines that stand for the sensors, where they are known already.
    """
    levels = calibration.level_hysteresis.dropna(subset=["difference"])
    keys = ["generation", "module", "sensor"]
    lines = principal_lines(calibration.sensor_lines) if lines is None else lines
    outputs = lines[[*keys, "full_scale_output"]]
    levels = levels.merge(outputs, on=keys)
    scale = 100 / levels["full_scale_output"]
    return levels.assign(low=levels["low"] * scale, high=levels["high"] * scale)


def _hysteresis_traces(
    levels: pd.DataFrame,
    module: tuple[str, str],
    where: SensorAxis,
    axes: str,
    reference: ReferenceQuantity,
) -> Iterable[Trace]:
    own = levels[(levels["generation"] == module[0]) & (levels["module"] == module[1])]
    grouped = own.groupby("nominal_level", sort=True)["percent_fso"]
    style = where.style(module[0])
    x = grouped.median().index.to_numpy(float) * reference.shown_factor
    middle, low, high = grouped.median(), grouped.min(), grouped.max()
    if own["sensor"].nunique() == 1:
        only = own.groupby("nominal_level", sort=True)
        low, high = only["low"].min(), only["high"].max()
    yield band(x, low, high, colour=style.colour, axes=axes, meta={"module": module[1], "sensor": ""})
    yield intervals(
        middle,
        low,
        high,
        x,
        across=False,
        style=style,
        size=4,
        text=[
            f"{module[1]} at {numbers.significant(a, 3, reference.shown_unit)}: "
            f"{numbers.limits(b, c, '%FSO')}"
            for a, b, c in zip(x.tolist(), low, high, strict=True)
        ],
        links=[slugs.module_href(module[1])] * len(x),
        module=module[1],
        axes=axes,
    )
    yield line(x, middle, colour=style.colour, dash=style.dash, axes=axes, module=module[1])


def _hysteresis_caption(levels: pd.DataFrame) -> str:
    apart = levels[(levels["low"] > 0) | (levels["high"] < 0)]
    keys = ["generation", "module", "sensor"]
    found, tested = len(apart.drop_duplicates(keys)), len(levels.drop_duplicates(keys))
    return (
        f"The two branches differ at some level in {found} of {numbers.count(tested, 'sensor')}; the widest "
        f"difference is {numbers.significant(float(levels['percent_fso'].abs().max()), 2, '%FSO')}."
    )


def stretch_figures(calibration: Calibration, where: SensorAxis) -> list[Figure]:
    """Return relative signal against stretch with the laws drawn, and every sensor's exponent."""
    lines = principal_lines(calibration.sensor_lines).dropna(subset=["stretch_exponent"])
    if calibration.reference.name != "strain" or lines.empty:
        return []
    return [_stretch_curves(calibration, lines, where), _exponents(lines, where)]


def _stretch_curves(calibration: Calibration, lines: pd.DataFrame, where: SensorAxis) -> Figure:
    keys = ["generation", "module", "sensor"]
    means = _level_means(calibration).merge(lines[[*keys, "zero_signal"]], on=keys)
    means = means.assign(stretch=1 + means["x"], relative=means["signal"] / means["zero_signal"])
    far, high = float(means["stretch"].max()), float(means["relative"].max())
    stretch = np.linspace(1.0, far, 40)
    traces: list[Trace] = []
    for power, _ in LAWS:
        inside = stretch**power <= 1.15 * high
        traces.append(line(stretch[inside], stretch[inside] ** power, colour=palette.SOFT, dash="dot"))
    for (generation, module), rows in means.groupby(["generation", "module"], sort=True):
        traces.append(_module_stretch(str(generation), str(module), rows, where))
    return Figure(
        name="stretch",
        caption="Signal relative to the unstretched one grows with stretch as its power "
        f"{numbers.significant(float(lines['stretch_exponent'].median()), 3)} in the median sensor.",
        alternative="Relative signal against stretch λ, one mark a module and level, bars over its sensors, "
        "with the laws λ, λ² and λ⁴ dotted.",
        traces=tuple(traces),
        layout=layout(
            axis("Stretch λ = 1 + ε"),
            axis("Signal / signal at zero strain"),
            annotations=_law_labels(far, high),
        ),
        data=means,
        note="Marks are the medians of a module’s sensors, bars their extremes. Dotted: parallel plates on "
        "an "
        "incompressible dielectric, free to narrow (λ), width kept (λ²), stretched both ways (λ⁴). Cable "
        "capacitance that was not taken off lowers the exponent.",
        height=400,
    )


def _module_stretch(generation: str, module: str, rows: pd.DataFrame, where: SensorAxis) -> Trace:
    grouped = rows.groupby("_place", sort=True)
    relative = grouped["relative"]
    return intervals(
        relative.median(),
        relative.min(),
        relative.max(),
        grouped["stretch"].mean(),
        across=False,
        style=where.style(generation),
        size=5,
        open_marker=True,
        text=[f"{module}: {numbers.fixed(v, 3)} of its unstretched signal" for v in relative.median()],
        links=[slugs.module_href(module)] * relative.ngroups,
        module=module,
    )


def _law_labels(far: float, high: float) -> list[Layout]:
    made = []
    for power, words in LAWS:
        end = min(far, (1.15 * high) ** (1 / power))
        made.append(
            label(words, end, end**power, colour=palette.SOFT, anchor="right", shift=(-8, 8), size=12)
        )
    return made


def _exponents(lines: pd.DataFrame, where: SensorAxis) -> Figure:
    rows = lines.rename(
        columns={
            "stretch_exponent": "estimate",
            "stretch_exponent_low": "low",
            "stretch_exponent_high": "high",
        }
    ).assign(unit="")
    sentences = [merit_sentence("stretch exponent", row) for row in records_of(rows)]
    far = float(rows[["estimate", "high"]].max().max())
    laws = [law for law in LAWS if law[0] <= max(far * 1.2, 1.0)]
    return Figure(
        name="exponents",
        caption=f"Exponents lie between {numbers.significant(float(rows['estimate'].min()), 3)} and "
        f"{numbers.significant(float(rows['estimate'].max()), 3)}.",
        alternative="Dots with 95 % intervals, one a sensor: exponent p of signal ∝ λ^p, with uprights at "
        "1, 2 and 4.",
        traces=tuple(interval_traces(rows, where, sentences)),
        layout=layout(
            axis("Stretch exponent p"),
            where.axis(),
            shapes=[level_line(p, upright=True) for p, _ in laws],
        ),
        table="sensor_lines",
        note="Without blank trials the exponent is a lower bound, and no mechanism is inferred from it.",
        height=where.height,
    )


def sensor_lines_table(calibration: Calibration) -> Table:
    """Return the table of all lines, one row a sensor and branch."""
    reference = calibration.reference
    lines = principal_lines(calibration.sensor_lines)
    frame = lines.assign(
        _se_slope=np.sqrt(lines["var_slope"]),
        _se_intercept=np.sqrt(lines["var_intercept"]),
        _href=[
            slugs.sensor_href(str(m), str(s)) for m, s in zip(lines["module"], lines["sensor"], strict=True)
        ],
    )
    unit = signal_unit(calibration)
    per = f"{unit} per {reference.shown_unit}"
    factor = 1 / reference.shown_factor
    columns = [
        Column("module", "Module", kind="text"),
        Column("sensor", "Sensor", kind="text", href="_href"),
        Column("branch", "Branch", kind="text"),
        Column("runs", "Runs", kind="integer"),
        Column("intercept", "Signal at zero", unit, uncertainty="_se_intercept"),
        Column("slope", "Slope", per, factor=factor, uncertainty="_se_slope"),
        Column("gauge_factor", "Gauge factor", digits=3),
        Column("linearity_least_squares_percent_fso", "Linearity", "%FSO", digits=2),
        Column("lack_of_fit_p", "Lack of fit, p", kind="probability"),
        Column("hysteresis_percent_fso", "Hysteresis", "%FSO", digits=2, missing="one branch"),
        Column("repeatability_percent_fso", "Repeatability", "%FSO", digits=2, missing="one run"),
        Column(
            "strain_residual_sd", "Residual SD", reference.shown_unit, digits=2, factor=reference.shown_factor
        ),
    ]
    return Table(
        name="sensor_lines",
        caption="The line that stands for each sensor, with the standard uncertainties of its signal at "
        "zero and its slope.",
        source="sensor_lines",
        shown_rows=80,
        frame=frame,
        columns=tuple(columns),
        note="The file holds rising and falling lines as well, and all columns: covariances, degrees of "
        "freedom, "
        "the four linearities, the stretch exponent.",
    )
