"""Page 4, Calibration effort: how much calibrating is enough."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping

import numpy as np
import pandas as pd

from campaign.analyses.calibration_effort import CalibrationEffort
from campaign.analyses.findings import EnoughFinding
from campaign.analyses.results import CampaignResults
from campaign.pages import numbers, palette
from campaign.pages.figures import (
    Figure,
    Trace,
    axis,
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
    "generation": "a generation’s line",
    "generation_rezero_additive": "a generation’s line, zero anew",
    "generation_rezero_ratio": "a generation’s line, signal ÷ zero",
    "position": "a position’s line",
    "module": "a module’s line",
    "sensor": "a sensor’s own line",
    "rezero_additive": "own line, zero anew",
    "rezero_ratio": "own line, signal ÷ zero",
}
"""What each effort is called; other names have their underscores opened."""


_SENTENCES: Mapping[str, str] = {
    "generation_rezero_additive": "a generation’s line with each zero taken anew",
    "generation_rezero_ratio": "a generation’s line with each signal divided by its zero",
    "sensor": "a sensor’s own line",
    "rezero_additive": "a sensor’s own line with its zero taken anew",
    "rezero_ratio": "a sensor’s own line with its signal divided by its zero",
}


def effort_words(effort: str) -> str:
    """Return what an effort is called."""
    return EFFORTS.get(effort, effort.replace("_", " "))


def effort_sentence(effort: str) -> str:
    """Return what an effort is called within a sentence."""
    return _SENTENCES.get(effort, effort_words(effort))


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
            "effort_words": effort_sentence,
            "disagreeing": _disagreeing(effort),
            "comparable": bool(effort.table["strain_sd_left_out"].notna().any()),
            "x_low": effort.x_low,
            "x_high": effort.x_high,
            "notices": effort.notices,
            "left_out_words": _left_out_words(effort),
        },
        figures=(effort_figure(effort, calibration.reference),),
        tables=tuple(_tables(effort, calibration.reference)),
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
    found = {str(v) for v in effort.table["left_out_by"].dropna() if str(v)}
    return [words for name, words in LEFT_OUT_WORDS.items() if name in found]


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
    ends = _ends(table)
    made = small_multiples(
        list(generations),
        axis(
            "SD of a strain reading" if reference.name == "strain" else "SD of a reading",
            reference.shown_unit,
            low=ends[0] * reference.shown_factor,
            high=ends[1] * reference.shown_factor,
            logarithmic=True,
            ticks=_ticks(*(end * reference.shown_factor for end in ends)),
        ),
        axis("", ticks=ticks, low=-0.6, high=len(efforts) - 0.4, reverse=True),
        columns=min(len(generations), 3),
    )
    return Figure(
        name="effort",
        caption=_effort_caption(table, generations),
        alternative="Dots, one row an effort: the standard deviation of a reading as the model predicts it "
        "(filled) "
        "and as found by leaving out (open), generations apart.",
        traces=tuple(traces),
        layout=made | {"margin": {"l": 232, "t": 46}},
        table="calibration_effort",
        note="Filled: predicted by the model, with its 95 % interval where there is one. Open: found on "
        "data left out "
        "of the calibration. The two must agree, or the model is wrong.",
        height=130 + 46 * len(efforts) * math.ceil(len(generations) / 3),
    )


def _ends(table: pd.DataFrame) -> tuple[float, float]:
    """Ends of the logarithmic axis."""
    values = table[["strain_sd_predicted", "strain_sd_left_out"]].to_numpy(float)
    values = values[np.isfinite(values) & (values > 0)]
    return (float(values.min()) / 1.5, float(values.max()) * 1.7) if values.size else (1e-4, 1.0)


def _ticks(low: float, high: float) -> list[tuple[float, str]]:
    """Ticks at 1, 2 and 5 of every power of ten between the ends."""
    powers = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
    places = [digit * 10.0**power for power in powers for digit in (1, 2, 5)]
    return [(place, f"{place:g}") for place in places if low <= place <= high]


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


def _effort_caption(table: pd.DataFrame, generations: tuple[str, ...]) -> str:
    parts = []
    for generation in generations:
        rows = table[(table["generation"] == generation) & ~table["effort"].isin(_OWN)].dropna(
            subset=["factor"]
        )
        if rows.empty:
            continue
        best = rows.iloc[int(rows["factor"].to_numpy(float).argmin())]
        parts.append(
            f"{generation}: of all that spares calibrating each sensor, "
            f"{effort_sentence(str(best['effort']))} errs "
            f"least, {numbers.significant(float(best['factor']), 2)} times a sensor’s own line"
        )
    return f"{'; '.join(parts)}." if parts else "The error of a reading against calibration effort."


_OWN = ("sensor", "rezero_additive", "rezero_ratio")


def _tables(effort: CalibrationEffort, reference: ReferenceQuantity) -> Iterable[Table]:
    yield effort_table(effort, reference)
    if len(effort.left_out):
        yield left_out_table(effort, reference)


def left_out_table(effort: CalibrationEffort, reference: ReferenceQuantity) -> Table:
    """Return every way of leaving out that the design allows, beside the same predicted by the model."""
    factor, unit = reference.shown_factor, reference.shown_unit
    table = effort.left_out.sort_values("generation", kind="stable").reset_index(drop=True)
    known = effort.table.set_index(["generation", "effort"])["left_out_by"].to_dict()
    pairs = zip(table["generation"], table["effort"], table["left_out_by"], strict=True)
    chosen = ["yes" if known.get((g, e)) == by else "" for g, e, by in pairs]
    words = [LEFT_OUT_WORDS.get(str(by), str(by)) for by in table["left_out_by"]]
    return Table(
        name="calibration_effort_left_out",
        caption="The same efforts with everything left out in turn that the design allows.",
        frame=table.assign(
            _effort=[effort_words(str(e)) for e in table["effort"]], _by=words, _chosen=chosen
        ),
        columns=(
            Column("generation", "Generation", kind="text"),
            Column("_effort", "Calibrated", kind="text"),
            Column("_by", "Left out in turn", kind="text"),
            Column("strain_sd_predicted", "SD predicted", unit, factor=factor, digits=2),
            Column("strain_sd_left_out", "left out", unit, factor=factor, digits=2, missing="–"),
            Column("ratio", "Ratio", digits=2, missing="–"),
            Column("_chosen", "In table 4.1", kind="text"),
        ),
        note="Leaving out runs alone keeps the mounting: that error is the smaller one, and does not hold "
        "for a sensor that is mounted anew.",
    )


LEFT_OUT_WORDS: Mapping[str, str] = {
    "batch": "batches",
    "module": "modules",
    "sensor": "sensors",
    "session": "mountings",
    "repetition": "runs",
}
"""What is left out in turn, as pages call it."""


def effort_table(effort: CalibrationEffort, reference: ReferenceQuantity) -> Table:
    """Return the table that says how many calibration runs can be dropped."""
    factor, unit = reference.shown_factor, reference.shown_unit
    table = effort.table.sort_values("generation", kind="stable").reset_index(drop=True)
    table = table.assign(_effort=[effort_words(str(e)).replace(" ", "\u00a0") for e in table["effort"]])
    predicted = Column("strain_sd_predicted", "SD predicted", unit, factor=factor, digits=2)
    if {"low", "high"} <= set(table.columns):
        predicted = Column(
            "strain_sd_predicted", "SD predicted", unit, factor=factor, interval=("low", "high")
        )
    columns = [
        Column("generation", "Generation", kind="text"),
        Column("_effort", "Calibrated", kind="text"),
        predicted,
        Column(
            "strain_sd_left_out",
            "left out",
            unit,
            factor=factor,
            digits=2,
            missing="–",
        ),
        Column("strain_expanded", "95 % within ±", unit, factor=factor, digits=2),
        Column("factor", "× own line", digits=3),
    ]
    if table["agrees"].eq(False).any():
        table = table.assign(_agrees=["" if pd.isna(v) else "yes" if v else "no" for v in table["agrees"]])
        columns.append(Column("_agrees", "Agree", kind="text"))
    return Table(
        name="calibration_effort",
        caption="What each calibration effort buys: the error of one reading anywhere in the range common "
        "to all sensors.",
        frame=table,
        columns=tuple(columns),
        note="Read downwards: each row costs more calibrating than the one before. Stop where the error "
        "stops falling.",
    )
