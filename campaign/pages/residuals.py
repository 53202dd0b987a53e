"""Page 3, Residuals: whether the model is right."""

from __future__ import annotations

import math

import numpy as np
import orjson
import pandas as pd

from campaign.analyses.residuals import Residuals
from campaign.analyses.results import CampaignResults
from campaign.pages import numbers, palette, slugs
from campaign.pages.calibration import x_title
from campaign.pages.figures import (
    LARGEST_NUMBER_OF_MARKERS,
    Figure,
    Trace,
    axis,
    band,
    bars,
    label,
    layout,
    level_line,
    line,
    points,
)
from campaign.pages.page import Page
from campaign.pages.page_data import Fold, script_value
from campaign.pages.rows import records_of
from campaign.pages.sensor_axis import SensorAxis, sensor_axis
from campaign.pages.tables import Column, Table
from campaign.pages.thinning import rounded
from campaign.recordings.recording import ReferenceQuantity

LARGEST_SHOWN = 200
"""Points drawn beside the bands where there are more readings than a figure bears."""

END_SHOWN = 100
"""Points of either end of the normal quantiles that are drawn whole; the middle is thinned to as many."""

VALUE = "conditional_strain"
"""Column that every figure draws: the conditional residual as strain."""


def residuals_page(results: CampaignResults) -> Page | None:
    """Return page 3, or ``None`` where there are no residuals."""
    residuals = results.residuals
    if residuals is None or results.calibration is None or residuals.table.empty:
        return None
    reference = results.calibration.reference
    rows = residuals.table.dropna(subset=[VALUE]).reset_index(drop=True)
    where = sensor_axis(rows)
    banded = is_banded(rows)
    drawn = _largest(rows) if banded else rows
    figures = [
        against_level(rows, drawn, where, reference, banded=banded),
        against_order(rows, drawn, where, reference, banded=banded),
        by_module(rows, drawn, where, reference, banded=banded),
        variance_by_level(residuals, where, reference),
        normal_quantiles(residuals, where),
        histogram(rows, reference),
        sensor_effect_quantiles(residuals, where),
    ]
    return Page(
        slug="residuals",
        number=3,
        title="Residuals",
        template="residuals.html",
        context={
            "residuals": residuals,
            "reference": reference,
            "banded": banded,
            "readings": len(rows),
            "largest_shown": LARGEST_SHOWN,
            "autocorrelation": _autocorrelation(residuals),
        },
        figures=tuple(figure for figure in figures if figure is not None),
        tables=(largest_table(rows, reference),),
        data={
            "residual_files": {str(m): module_file(str(m)) for m in rows["module"].unique()} if banded else {}
        },
        description="What the model leaves over, against strain, order and module; every point leads to "
        "its trial.",
    )


def is_banded(rows: pd.DataFrame) -> bool:
    """Whether there are more residuals than a figure bears, so that bands stand for most of them."""
    return len(rows) > LARGEST_NUMBER_OF_MARKERS - LARGEST_SHOWN


def module_file(module: str) -> str:
    """Return the address of the script that holds all points of one module."""
    return f"data/residuals_{slugs.slug(module)}.js"


def residual_files(results: CampaignResults) -> dict[str, bytes]:
    """Return one script a module with all its points, for pages that draw bands; loaded when it is chosen."""
    residuals = results.residuals
    if residuals is None or results.calibration is None or residuals.table.empty:
        return {}
    rows = residuals.table.dropna(subset=[VALUE]).reset_index(drop=True)
    if not is_banded(rows):
        return {}
    where, reference = sensor_axis(rows), results.calibration.reference
    files = {}
    for module, own in rows.groupby("module", sort=True):
        by_level = [_rounded(trace) for trace in _marks(own, "x", where, reference, reference.shown_factor)]
        by_order = [part["order"].astype(float).tolist() for _, part in own.groupby(_MARKED_BY, sort=True)]
        fold = Fold()
        traces = [fold.trace(trace) for trace in by_level]
        x = {
            "against-level": [fold.numbers(trace["x"]) for trace in by_level],
            "against-order": [fold.numbers(_rounded_values(orders)) for orders in by_order],
        }
        content = script_value(
            {"traces": traces, "shared": fold.shared, "lists": fold.lists, "texts": fold.texts, "x": x}
        )
        name = orjson.dumps(module_file(str(module)))
        start = b"(window.campaignResiduals = window.campaignResiduals || {})["
        files[module_file(str(module))] = start + name + b"] = " + content + b";\n"
    return files


def _rounded(trace: Trace) -> Trace:
    """Round to five digits of the largest value, as :func:`campaign.pages.drawing.ready` does of an axis."""
    return trace | {key: _rounded_values(trace[key]) for key in ("x", "y")}


def _rounded_values(values: list[float]) -> list[float]:
    finite = [abs(value) for value in values if math.isfinite(value)]
    made: list[float] = rounded(np.array(values, dtype=float), max(finite, default=0.0)).tolist()
    return made


def _autocorrelation(residuals: Residuals) -> list[dict[str, object]]:
    """Pooled lag-1 autocorrelation of each generation, and whether it is clear of zero."""
    table = residuals.pooled_autocorrelation.dropna(subset=["autocorrelation", "standard_error"])
    return [
        {
            "generation": str(row["generation"]),
            "value": float(row["autocorrelation"]),
            "error": float(row["standard_error"]),
            "distinct": abs(row["autocorrelation"]) > 2 * row["standard_error"],
        }
        for row in records_of(table)
    ]


def _largest(rows: pd.DataFrame) -> pd.DataFrame:
    order = rows[VALUE].abs().sort_values(ascending=False, kind="stable").index
    return rows.loc[order[:LARGEST_SHOWN]]


def residual_sentences(rows: pd.DataFrame, reference: ReferenceQuantity) -> list[str]:
    """Return one sentence a residual: whose it is, where it lies and how large it is."""
    factor, unit = reference.shown_factor, reference.shown_unit
    places = shown_places(rows)
    at = {place: numbers.significant(place * factor, 3, unit) for place in set(places)}
    columns = (rows[name].tolist() for name in (*_OF_READING, VALUE))
    return [
        f"{module} {sensor}, run {repetition}, reading {order}, {direction} at {at[place]}: "
        f"{numbers.significant(value * factor, 2, unit)}"
        for module, sensor, repetition, order, direction, value, place in zip(*columns, places, strict=True)
    ]


_OF_READING = ("module", "sensor", "repetition", "order", "direction")


def shown_places(rows: pd.DataFrame) -> list[float]:
    """Return where each reading was taken: its nominal level, else what was recorded, noise rounded off."""
    width = float(rows["x"].max() - rows["x"].min())
    places = rows["nominal_level"].fillna(rows["x"]).tolist()
    shown = {place: numbers.rounded_to(float(place), width) for place in set(places)}
    return [shown[place] for place in places]


def residual_links(rows: pd.DataFrame) -> list[str]:
    """Return the address of each residual's trial."""
    columns = ([str(value) for value in rows[name].tolist()] for name in ("module", "sensor", "trial"))
    trials = list(zip(*columns, strict=True))
    links = {trial: slugs.trial_href(*trial) for trial in set(trials)}
    return [links[trial] for trial in trials]


def _marks(
    drawn: pd.DataFrame, x: str, where: SensorAxis, reference: ReferenceQuantity, x_factor: float = 1.0
) -> list[Trace]:
    return [
        points(
            rows[x] * x_factor,
            rows[VALUE] * reference.shown_factor,
            style=where.style(str(generation)),
            size=4,
            open_marker=True,
            text=residual_sentences(rows, reference),
            links=residual_links(rows),
            module=str(module),
        )
        for (generation, module), rows in drawn.groupby(_MARKED_BY, sort=True)
    ]


_MARKED_BY = ["generation", "module"]


def _bands(rows: pd.DataFrame, by: str, reference: ReferenceQuantity, x_factor: float = 1.0) -> list[Trace]:
    """Extremes, quartiles and median of the residuals at each value of *by*."""
    grouped = rows.groupby(by, sort=True)[VALUE]
    table = (
        pd.DataFrame(
            {
                "low": grouped.min(),
                "first": grouped.quantile(0.25),
                "median": grouped.median(),
                "third": grouped.quantile(0.75),
                "high": grouped.max(),
            }
        )
        * reference.shown_factor
    )
    x = table.index.to_numpy(float) * x_factor
    return [
        band(x, table["low"], table["high"], colour=palette.RAMP[4], opacity=0.2),
        band(x, table["first"], table["third"], colour=palette.RAMP[6], opacity=0.35),
        line(x, table["median"], colour=palette.INK),
    ]


def _y_axis(reference: ReferenceQuantity) -> dict[str, object]:
    words = "strain" if reference.name == "strain" else reference.name
    return axis(f"Residual as {words}", reference.shown_unit)


def against_level(
    rows: pd.DataFrame,
    drawn: pd.DataFrame,
    where: SensorAxis,
    reference: ReferenceQuantity,
    *,
    banded: bool,
) -> Figure:
    """Return residuals against the reference value, with bands where there are too many to draw."""
    factor = reference.shown_factor
    by_level = "nominal_level" if rows["nominal_level"].notna().all() else "x"
    bands = _bands(rows, by_level, reference, factor) if banded and rows[by_level].nunique() <= 400 else []
    worst = rows.iloc[int(rows[VALUE].abs().to_numpy().argmax())]
    return Figure(
        name="against-level",
        caption=f"Half of the residuals lie within ±{_half(rows, reference)}; the largest belongs to "
        f"{worst['module']} {worst['sensor']}, run {worst['repetition']}.",
        alternative=f"Residuals against {x_title(reference).lower()}, scattered about a line at zero.",
        traces=tuple(bands + _marks(drawn, "x", where, reference, factor)),
        layout=layout(
            axis(x_title(reference), reference.shown_unit),
            _y_axis(reference),
            shapes=[level_line(0, colour=palette.INK)],
        ),
        table="residuals",
        note=_note(banded) + " Every point leads to its trial.",
        height=380,
    )


def _half(rows: pd.DataFrame, reference: ReferenceQuantity) -> str:
    return numbers.significant(
        float(rows[VALUE].abs().median()) * reference.shown_factor, 2, reference.shown_unit
    )


def _note(banded: bool) -> str:
    if not banded:
        return "All readings are drawn. A bend or a funnel would say that the model is wrong."
    return (
        "Bands hold the extremes and the middle half of all readings, the line their median; "
        f"the {LARGEST_SHOWN} largest are drawn as points, and all points of a module that is marked."
    )


def against_order(
    rows: pd.DataFrame, drawn: pd.DataFrame, where: SensorAxis, reference: ReferenceQuantity, *, banded: bool
) -> Figure:
    """Return residuals against the order of readings in the run."""
    bands = _bands(rows, "order", reference) if banded else []
    return Figure(
        name="against-order",
        caption=_order_caption(rows, reference),
        alternative="Residuals against the order of the reading in its run, with a line at zero.",
        traces=tuple(bands + _marks(drawn, "order", where, reference)),
        layout=layout(
            axis("Order in the run"), _y_axis(reference), shapes=[level_line(0, colour=palette.INK)]
        ),
        table="residuals",
        note=_note(banded) + " A slope here is drift or creep within the run.",
        height=340,
    )


def _order_caption(rows: pd.DataFrame, reference: ReferenceQuantity) -> str:
    means = rows.groupby("order")[VALUE].mean()
    place = int(means.abs().to_numpy().argmax())
    largest = float(means.iloc[place])
    if abs(largest) < 0.01 * float(rows[VALUE].std()):
        return "Averaged over runs, nothing is left over at any place in the order of readings."
    value = numbers.significant(largest * reference.shown_factor, 2, reference.shown_unit)
    return f"Averaged over runs, the largest departure is {value}, at reading {means.index[place]}."


def by_module(
    rows: pd.DataFrame, drawn: pd.DataFrame, where: SensorAxis, reference: ReferenceQuantity, *, banded: bool
) -> Figure:
    """Return residuals module by module: the middle half as a bar, readings beside it."""
    factor = reference.shown_factor
    heights = {module: i for i, module in enumerate(where.modules)}
    traces: list[Trace] = []
    for key, height in heights.items():
        own = rows.loc[(rows["generation"] == key[0]) & (rows["module"] == key[1]), VALUE].to_numpy(float)
        first, middle, third = (np.quantile(own, [0.25, 0.5, 0.75]) * factor).tolist()
        text = f"{key[1]}: middle half {numbers.limits(first, third, reference.shown_unit)}"
        traces.append(
            bars(
                [height],
                [third - first],
                base=[first],
                across=True,
                width=0.5,
                colour=palette.RAMP[2],
                text=[text],
                module=key[1],
            )
        )
        traces.append(line([middle, middle], [height - 0.25, height + 0.25], colour=palette.INK))
    shown = drawn.assign(_height=where.heights(drawn))
    for (generation, module), part in shown.groupby(["generation", "module"], sort=True):
        traces.append(
            points(
                part[VALUE] * factor,
                part["_height"],
                style=where.style(str(generation)),
                size=3,
                open_marker=True,
                text=residual_sentences(part, reference),
                links=residual_links(part),
                module=str(module),
            )
        )
    return Figure(
        name="by-module",
        caption=_module_caption(rows, reference),
        alternative="Residuals of each module along one row, the middle half as a bar with the median "
        "marked.",
        traces=tuple(traces),
        layout=layout(
            _y_axis(reference), where.axis(), shapes=[level_line(0, upright=True, colour=palette.INK)]
        ),
        table="residuals",
        note=_note(banded)
        if banded
        else "The bar is the middle half, the stroke the median; sensors are fanned out.",
        height=120 + 46 * len(where.modules),
    )


def _module_caption(rows: pd.DataFrame, reference: ReferenceQuantity) -> str:
    grouped = rows.groupby(["generation", "module"])[VALUE]
    sds = grouped.std().reset_index().dropna().sort_values(VALUE, kind="stable")
    if len(sds) < 2:
        return "Residuals of the one module, sensor by sensor."
    low, high = (
        f"{row['module']} with "
        f"{numbers.significant(row[VALUE] * reference.shown_factor, 2, reference.shown_unit)}"
        for row in (sds.iloc[0], sds.iloc[-1])
    )
    return f"Residual SD is smallest in {low} and largest in {high}."


def normal_quantiles(residuals: Residuals, where: SensorAxis) -> Figure | None:
    """Return standardised residuals against normal quantiles."""
    table = residuals.quantiles.dropna(subset=["theoretical", "observed"])
    if len(table) < 5:
        return None
    drawn = _thinned_quantiles(table)
    reach = float(table["theoretical"].abs().max())
    beyond = float(table["observed"].abs().max())
    traces: list[Trace] = [line([-reach, reach], [-reach, reach], colour=palette.SOFT, dash="dot")]
    for (generation, module), rows in _with_generation(drawn, residuals.table).groupby(
        ["generation", "module"], sort=True
    ):
        traces.append(
            points(
                rows["theoretical"],
                rows["observed"],
                style=where.style(str(generation)),
                size=4,
                open_marker=True,
                text=[
                    f"{m} {s}: {numbers.significant(v, 3)} standard deviations"
                    for m, s, v in zip(rows["module"], rows["sensor"], rows["observed"], strict=True)
                ],
                links=residual_links(rows),
                module=str(module),
            )
        )
    return Figure(
        name="quantiles",
        caption=f"The largest standardised residual is {numbers.significant(beyond, 2)} where a normal "
        f"sample of "
        f"{numbers.whole(len(table))} would be expected to reach {numbers.significant(reach, 2)}.",
        alternative="Standardised residuals against normal quantiles with the line of equality dotted.",
        traces=tuple(traces),
        layout=layout(axis("Normal quantile"), axis("Standardised residual")),
        data=table.drop(columns=["trial", "order"], errors="ignore"),
        note="On the dotted line the residuals are normal. Ends that turn away from it are heavy tails: "
        "intervals of "
        "runs and readings then say too little.",
        height=380,
    )


def _thinned_quantiles(table: pd.DataFrame) -> pd.DataFrame:
    """Both ends whole, the crowded middle thinned evenly, below the number of markers a figure bears."""
    ordered = table.sort_values("theoretical", kind="stable").reset_index(drop=True)
    if len(ordered) <= 4 * END_SHOWN:
        return ordered
    middle = ordered.iloc[END_SHOWN:-END_SHOWN]
    step = math.ceil(len(middle) / END_SHOWN)
    return pd.concat([ordered.iloc[:END_SHOWN], middle.iloc[::step], ordered.iloc[-END_SHOWN:]])


def _with_generation(rows: pd.DataFrame, table: pd.DataFrame) -> pd.DataFrame:
    if "generation" in rows:
        return rows
    return rows.merge(
        table[["generation", "module", "sensor", "trial"]].drop_duplicates(), on=["module", "sensor", "trial"]
    )


def histogram(rows: pd.DataFrame, reference: ReferenceQuantity) -> Figure:
    """Return the histogram of residuals in strain, with the normal curve of the same SD."""
    values = rows[VALUE].to_numpy(float) * reference.shown_factor
    bins = max(8, min(60, round(2 * len(values) ** (1 / 3))))
    counts, edges = np.histogram(values, bins=bins)
    centres, width = (edges[:-1] + edges[1:]) / 2, float(edges[1] - edges[0])
    sd = float(values.std(ddof=1)) if len(values) > 1 else 0.0
    traces: list[Trace] = [
        bars(
            centres,
            counts,
            width=width * 0.96,
            colour=palette.RAMP[4],
            text=[
                f"{numbers.whole(c)} readings near {numbers.significant(x, 2, reference.shown_unit)}"
                for c, x in zip(counts.tolist(), centres.tolist(), strict=True)
            ],
        )
    ]
    if sd > 0:
        grid = np.linspace(edges[0], edges[-1], 120)
        curve = len(values) * width * np.exp(-0.5 * (grid / sd) ** 2) / (sd * math.sqrt(2 * math.pi))
        traces.append(line(grid, curve, colour=palette.INK, dash="dot"))
    return Figure(
        name="histogram",
        caption=f"{numbers.whole(len(values))} residuals with a standard deviation of "
        f"{numbers.significant(sd, 2, reference.shown_unit)}.",
        alternative="Histogram of residuals as strain with the normal curve of the same standard deviation "
        "dotted.",
        traces=tuple(traces),
        layout=layout(
            axis(_y_axis(reference)["title"]["text"]),  # type: ignore[index]
            axis("Readings", low=0, high=float(counts.max()) * 1.12),
        ),
        data=pd.DataFrame({"from": edges[:-1], "to": edges[1:], "readings": counts}),
        note="The SD is that of all readings about their own runs' lines, degrees of freedom not corrected.",
        height=320,
    )


def sensor_effect_quantiles(residuals: Residuals, where: SensorAxis) -> Figure | None:
    """Return sensor effects against normal quantiles: the assumption behind all intervals of new sensors."""
    table = residuals.sensor_effect_quantiles
    if table is None or len(table) < 5:
        return None
    has_term = "term" in table
    term = str(table["term"].iloc[0]) if has_term else "slope"
    rows = table[table["term"] == term] if has_term else table
    spread = float(rows["observed"].std()) or 1.0
    ends = [float(rows["theoretical"].min()), float(rows["theoretical"].max())]
    named = "module" in rows and "sensor" in rows
    traces: list[Trace] = [line(ends, [e * spread for e in ends], colour=palette.SOFT, dash="dot")]
    traces.append(
        points(
            rows["theoretical"],
            rows["observed"],
            size=6,
            text=[f"{m} {s}" for m, s in zip(rows["module"], rows["sensor"], strict=True)] if named else None,
            links=[
                slugs.sensor_href(str(m), str(s)) for m, s in zip(rows["module"], rows["sensor"], strict=True)
            ]
            if named
            else None,
            style=where.style(where.generations[0]),
        )
    )
    verdict = "bend away from" if residuals.bends else "show no departure from"
    place = term.replace("at mid", "at mid range")
    return Figure(
        name="sensor-effects",
        caption=f"The effects of sensors on the {place} {verdict} a normal sample.",
        alternative="Effects of sensors against normal quantiles with the line of a normal sample dotted.",
        traces=tuple(traces),
        layout=layout(axis("Normal quantile"), axis(f"Effect on the {term}, standardised")),
        data=table,
        note="Predictions for new sensors assume normal effects; with skewed ones they cover less than "
        "they say.",
        height=340,
    )


def variance_by_level(residuals: Residuals, where: SensorAxis, reference: ReferenceQuantity) -> Figure | None:
    """Return the residual SD at each level, generation by generation."""
    table = residuals.variance_by_level
    if table is None or table.empty or "strain_sd" not in table or table["nominal_level"].nunique() < 3:
        return None
    factor = reference.shown_factor
    traces: list[Trace] = []
    labels = []
    for generation, rows in table.groupby("generation", sort=True):
        ordered = rows.sort_values("nominal_level")
        style = where.style(str(generation))
        x, sd = ordered["nominal_level"] * factor, ordered["strain_sd"] * factor
        sentences = _level_sentences(str(generation), x, sd, reference.shown_unit)
        traces.append(line(x, sd, colour=style.colour, dash=style.dash))
        traces.append(points(x, sd, style=style, text=sentences))
        end = (float(x.iloc[-1]), float(sd.iloc[-1]))
        labels.append(label(str(generation), *end, colour=style.colour, anchor="right", shift=(-4, -12)))
    ratio = (
        float(table["strain_sd"].max() / table["strain_sd"].min())
        if float(table["strain_sd"].min()) > 0
        else math.inf
    )
    return Figure(
        name="sd-by-level",
        caption=f"Residual SD differs between levels by a factor of up to {numbers.significant(ratio, 2)}."
        if math.isfinite(ratio)
        else "Residual SD level by level.",
        alternative="Residual standard deviation against level, one line a generation.",
        traces=tuple(traces),
        layout=layout(
            axis(x_title(reference), reference.shown_unit),
            axis(
                "Residual SD",
                reference.shown_unit,
                low=0,
                high=float(table["strain_sd"].max()) * factor * 1.15,
            ),
            annotations=labels,
        ),
        data=table,
        note="Where the SD changes with strain the pooled one is an average only.",
        height=320,
    )


def _level_sentences(generation: str, x: pd.Series, sd: pd.Series, unit: str) -> list[str]:
    return [
        f"{generation} at {numbers.significant(a, 3, unit)}: SD {numbers.significant(b, 2, unit)}"
        for a, b in zip(x, sd, strict=True)
    ]


def largest_table(rows: pd.DataFrame, reference: ReferenceQuantity) -> Table:
    """Return the twenty largest residuals, each leading to its trial."""
    order = rows[VALUE].abs().sort_values(ascending=False, kind="stable").index[:20]
    frame = rows.loc[order]
    frame = frame.assign(_href=residual_links(frame), _place=shown_places(frame))
    factor, unit = reference.shown_factor, reference.shown_unit
    return Table(
        name="largest_residuals",
        caption="The twenty largest residuals.",
        frame=frame,
        columns=(
            Column("module", "Module", kind="text"),
            Column("sensor", "Sensor", kind="text"),
            Column("repetition", "Run", kind="integer"),
            Column("order", "Reading", kind="integer"),
            Column("direction", "Direction", kind="text"),
            Column("_place", x_title(reference), unit, digits=3, factor=factor),
            Column(VALUE, "Residual", unit, digits=2, factor=factor),
            Column("trial", "Trial", kind="code", href="_href"),
        ),
        note="Outlying readings are marked, never dropped.",
    )
