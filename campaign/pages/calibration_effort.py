"""Page 4, Calibration effort: how much calibrating is enough."""

from __future__ import annotations

import math
from collections.abc import Mapping

import pandas as pd

from campaign.analyses.calibration_effort import CalibrationEffort
from campaign.analyses.findings import EnoughFinding
from campaign.analyses.results import CampaignResults
from campaign.pages import numbers, palette
from campaign.pages.figures import (
    Figure,
    Layout,
    Trace,
    axis,
    label,
    line,
    panel,
    points,
    small_multiples,
)
from campaign.pages.page import Page
from campaign.pages.tables import Column, Table
from campaign.pages.variance import generations_of
from campaign.recordings.recording import ReferenceQuantity

EFFORTS: Mapping[str, str] = {
    "all": "one line for all",
    "generation": "one line a generation",
    "generation_rezero_additive": "one line a generation, zero taken anew",
    "generation_rezero_ratio": "one line a generation, signal divided by its zero",
    "position": "one line a position",
    "module": "one line a module",
    "sensor": "one line a sensor",
    "rezero_additive": "a sensor’s line, zero taken anew",
    "rezero_ratio": "a sensor’s line, signal divided by its zero",
}
"""What each effort is called; other names have their underscores opened."""


def effort_words(effort: str) -> str:
    """Return what an effort is called."""
    return EFFORTS.get(effort, effort.replace("_", " "))


def calibration_effort_page(results: CampaignResults) -> Page | None:
    """Return page 4, or ``None`` where no effort could be compared."""
    effort, calibration = results.calibration_effort, results.calibration
    if effort is None or calibration is None or effort.table.empty:
        return None
    facts = [f for finding in results.findings.findings if finding.kind == "enough" for f in finding.facts]
    return Page(
        slug="calibration_effort",
        number=4,
        title="Calibration effort",
        template="calibration_effort.html",
        context={
            "reference": calibration.reference,
            "choices": [fact for fact in facts if isinstance(fact, EnoughFinding)],
            "effort_words": effort_words,
            "disagreeing": _disagreeing(effort),
            "comparable": bool(effort.table["strain_sd_left_out"].notna().any()),
            "x_low": effort.x_low,
            "x_high": effort.x_high,
            "notices": effort.notices,
            "left_out_words": _left_out_words(effort),
        },
        figures=(effort_figure(effort, calibration.reference),),
        tables=(effort_table(effort, calibration.reference),),
        description="The error of a strain reading against the effort spent on calibrating.",
    )


def _disagreeing(effort: CalibrationEffort) -> list[dict[str, str]]:
    if "agrees" not in effort.table:
        return []
    rows = effort.table[effort.table["agrees"].eq(False)]
    return [{"generation": str(r["generation"]), "effort": str(r["effort"])} for _, r in rows.iterrows()]


def _left_out_words(effort: CalibrationEffort) -> list[str]:
    if "left_out_by" not in effort.table:
        return []
    return sorted({str(v) for v in effort.table["left_out_by"].dropna() if str(v)})


def effort_figure(effort: CalibrationEffort, reference: ReferenceQuantity) -> Figure:
    """Return error against effort, predicted and left-out side by side, one panel a generation."""
    table = effort.table
    generations = generations_of(table)
    table = table[table["generation"].isin(generations)]
    efforts = list(dict.fromkeys(table["effort"].astype(str)))
    traces: list[Trace] = []
    for index, generation in enumerate(generations):
        rows = table[table["generation"] == generation]
        traces += _effort_traces(rows, generation, generations, efforts, reference, panel(index))
    ticks = [(float(i), effort_words(name)) for i, name in enumerate(efforts)]
    made = small_multiples(
        list(generations),
        axis(
            "SD of a strain reading" if reference.name == "strain" else "SD of a reading",
            reference.shown_unit,
            low=0,
            high=_far_end(table) * reference.shown_factor,
        ),
        axis("", ticks=ticks, low=-0.6, high=len(efforts) - 0.4, reverse=True),
        columns=min(len(generations), 3),
        annotations=_key(table, generations, efforts, reference),
    )
    return Figure(
        name="effort",
        caption=_effort_caption(table, generations),
        alternative="Dots, one row an effort: the standard deviation of a reading as the model predicts it "
        "(filled) "
        "and as found by leaving out (open), generations apart.",
        traces=tuple(traces),
        layout=made | {"margin": {"l": 220, "t": 46}},
        table="calibration_effort",
        note="Filled: predicted by the model, with its 95 % interval where there is one. Open: found on "
        "data left out "
        "of the calibration. The two must agree, or the model is wrong.",
        height=130 + 46 * len(efforts) * math.ceil(len(generations) / 3),
    )


def _far_end(table: pd.DataFrame) -> float:
    columns = ["strain_sd_predicted", "strain_sd_left_out"]
    top = float(table[columns].max().max())
    high = table["high"].clip(upper=2.5 * top) if "high" in table else pd.Series(dtype=float)
    return 1.08 * max([top, *high.dropna().tolist()]) or 1.0


def _effort_traces(
    rows: pd.DataFrame,
    generation: str,
    generations: tuple[str, ...],
    efforts: list[str],
    reference: ReferenceQuantity,
    axes: str,
) -> list[Trace]:
    factor, unit = reference.shown_factor, reference.shown_unit
    style = palette.generation_style(generation, generations)
    heights = [float(efforts.index(str(e))) for e in rows["effort"]]
    made: list[Trace] = []
    if {"low", "high"} <= set(rows.columns):
        made += _effort_bars(rows, heights, factor, style.colour, axes)
    for column, words, shift, hollow in (
        ("strain_sd_predicted", "predicted", -0.12, False),
        ("strain_sd_left_out", "found by leaving out", 0.12, True),
    ):
        text = [
            f"{generation}, {effort_words(str(e))}: {words} SD {numbers.significant(v * factor, 2, unit)}"
            for e, v in zip(rows["effort"], rows[column], strict=True)
        ]
        made.append(
            points(
                rows[column] * factor,
                [h + shift for h in heights],
                style=style,
                size=8,
                open_marker=hollow,
                text=text,
                name=f"{generation}, {words}",
                axes=axes,
            )
        )
    return made


def _effort_bars(
    rows: pd.DataFrame, heights: list[float], factor: float, colour: str, axes: str
) -> list[Trace]:
    far = 2.5 * float(rows["strain_sd_predicted"].max())
    return [
        line(
            [low * factor, min(high, far) * factor],
            [height - 0.12, height - 0.12],
            colour=colour,
            axes=axes,
        )
        for low, high, height in zip(rows["low"], rows["high"], heights, strict=True)
        if math.isfinite(low) and math.isfinite(high)
    ]


def _key(
    table: pd.DataFrame, generations: tuple[str, ...], efforts: list[str], reference: ReferenceQuantity
) -> list[Layout]:
    """Direct labels of the two marks, in the first panel at its widest row."""
    rows = table[(table["generation"] == generations[0])].dropna(
        subset=["strain_sd_predicted", "strain_sd_left_out"]
    )
    if rows.empty:
        return []
    row = rows.iloc[-1]
    height = float(efforts.index(str(row["effort"])))
    factor = reference.shown_factor
    return [
        label(
            "predicted",
            float(row["strain_sd_predicted"]) * factor,
            height - 0.12,
            colour=palette.SOFT,
            shift=(9, -3),
            size=11,
        ),
        label(
            "left out",
            float(row["strain_sd_left_out"]) * factor,
            height + 0.12,
            colour=palette.SOFT,
            shift=(9, 4),
            size=11,
        ),
    ]


def _effort_caption(table: pd.DataFrame, generations: tuple[str, ...]) -> str:
    parts = []
    for generation in generations:
        rows = table[table["generation"] == generation].dropna(subset=["factor"])
        if rows.empty:
            continue
        worst = rows.iloc[int(rows["factor"].to_numpy(float).argmax())]
        parts.append(
            f"{generation}: {effort_words(str(worst['effort']))} errs "
            f"{numbers.significant(float(worst['factor']), 2)} times as much as a sensor’s own line"
        )
    return f"{'; '.join(parts)}." if parts else "The error of a reading against calibration effort."


def effort_table(effort: CalibrationEffort, reference: ReferenceQuantity) -> Table:
    """Return the table that says how many calibration runs can be dropped."""
    factor, unit = reference.shown_factor, reference.shown_unit
    table = effort.table.assign(_effort=[effort_words(str(e)) for e in effort.table["effort"]])
    predicted = Column("strain_sd_predicted", "SD, predicted", unit, factor=factor, digits=2)
    if {"low", "high"} <= set(table.columns):
        predicted = Column(
            "strain_sd_predicted", "SD, predicted", unit, factor=factor, interval=("low", "high")
        )
    columns = [
        Column("generation", "Generation", kind="text"),
        Column("_effort", "Calibrated", kind="text"),
        predicted,
        Column(
            "strain_sd_left_out",
            "SD, left out",
            unit,
            factor=factor,
            digits=2,
            missing="not found by leaving out",
        ),
        Column("strain_expanded", "95 % of readings within ±", unit, factor=factor, digits=2),
        Column("factor", "Times a sensor’s own line", digits=3),
    ]
    if "agrees" in table:
        table = table.assign(_agrees=["" if pd.isna(v) else "yes" if v else "no" for v in table["agrees"]])
        columns.append(Column("_agrees", "Agree", kind="text"))
    if "left_out_by" in table:
        columns.append(Column("left_out_by", "Left out", kind="text"))
    return Table(
        name="calibration_effort",
        caption="What each calibration effort buys: the error of one reading anywhere in the range common "
        "to all sensors.",
        frame=table,
        columns=tuple(columns),
        note="Read downwards: each row costs more calibrating than the one before. Stop where the error "
        "stops falling.",
    )
