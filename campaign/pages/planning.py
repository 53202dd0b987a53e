"""Page 10, Next campaign: what to measure next, with controls that work in the page."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import asdict
from typing import TypeAlias

import pandas as pd

from campaign.analyses.planning import (
    LIVE_MODULES,
    LIVE_STEP,
    WANTED_POWER,
    Planning,
    power_grid,
    quantiles,
)
from campaign.analyses.planning_findings import modules_needed
from campaign.analyses.results import CampaignResults
from campaign.methods.campaign_design import spread_factors
from campaign.pages import numbers, palette
from campaign.pages.figures import Figure, Layout, Trace, axis, band, label, layout, level_line, line, points
from campaign.pages.findings import KIND_WORDS
from campaign.pages.page import Page
from campaign.pages.tables import Column, Table
from campaign.recordings.recording import ReferenceQuantity


def planning_page(results: CampaignResults) -> Page | None:
    """Return page 10, or ``None`` where there is neither a component to plan by nor anything missing."""
    planning = results.planning
    if planning is None or not (planning.components or planning.missing):
        return None
    reference = planning.reference
    return Page(
        slug="planning",
        number=10,
        title="Next campaign",
        template="planning.html",
        context={
            "planning": planning,
            "reference": reference,
            "kind_words": KIND_WORDS,
            "wanted_power": WANTED_POWER,
            "modules_needed": modules_needed(planning),
            "generations": results.generations,
            "spared": _spared(planning),
            "present": _present_row(planning),
        },
        figures=tuple(planning_figures(planning)) if planning.components else (),
        tables=(planning_table(planning),) if planning.components else (),
        data={"planning": planning_data(planning)} if planning.components else {},
        description="Precision against numbers of modules, sensors and runs, with live controls and costs.",
    )


def _present_row(planning: Planning) -> dict[str, float]:
    """The row of the table that this campaign's own design has, by the components plans rest on."""
    if planning.resolved is None:
        return {}
    table, design = planning.table, planning.resolved.design
    own = table[table["components"] == planning.components[0].name]
    for name, size in asdict(design).items():
        own = own[own[name] == size]
    names = ("difference_half_width_low", "difference_half_width_high", "power_low", "power_high")
    return {name: float(own.iloc[0][name]) for name in names} if len(own) else {}


def _spared(planning: Planning) -> list[str]:
    """What could be spared, each by itself, for less than a tenth more half-width."""
    if planning.resolved is None or planning.resolved.design.modules < 2:
        return []
    modules = planning.resolved.design.modules
    own = [rows[rows["modules"] == modules].iloc[0] for *_, rows in _variants(planning)]
    present = own[0]
    words = []
    for row in own[1:]:
        if float(row["difference_half_width"]) >= 1.1 * float(present["difference_half_width"]):
            continue
        for key, singular in (("sensors", "sensor"), ("repetitions", "run"), ("sessions", "mounting")):
            if row[key] < present[key]:
                per = {"sensors": " a module", "repetitions": " a mounting", "sessions": ""}[key]
                words.append(f"{numbers.count(int(row[key]), singular)}{per} instead of {int(present[key])}")
    return words


def planning_data(planning: Planning) -> dict[str, object]:
    """Return what the page's script evaluates: components, quantiles, powers, factors of an SD."""
    factors = [spread_factors(modules) for modules in range(2, LIVE_MODULES + 1)]
    present = planning.resolved
    return {
        "unit": planning.reference.shown_unit,
        "factor": planning.reference.shown_factor,
        "components": [
            {
                "name": one.name,
                "variances": asdict(one.strata),
                "limits": {
                    name: _limits(interval.low, interval.high) for name, interval in one.intervals.items()
                },
            }
            for one in planning.components
        ],
        "quantiles": [round(q, 9) for q in quantiles()],
        "powers": [[round(p, 5) for p in row] for row in power_grid()],
        "power_step": LIVE_STEP,
        "sd_factors": [[round(f, 9) for f in pair] for pair in factors],
        "difference": planning.difference,
        "wanted_power": WANTED_POWER,
        "costs": asdict(planning.costs) if planning.costs is not None else None,
        "design": asdict(present.design) if present is not None else None,
        "reach": asdict(planning.reach),
    }


def _limits(low: float, high: float) -> list[float | None]:
    return [value if math.isfinite(value) else None for value in (low, high)]


def planning_figures(planning: Planning) -> Iterator[Figure]:
    """Return half-width against modules, power against modules, and the limits of a module SD."""
    if planning.resolved is None:
        return
    yield half_width_figure(planning)
    yield power_figure(planning)
    yield spread_figure(planning)


_Variants: TypeAlias = list[tuple[str, str, pd.DataFrame]]
"""Designs in words, as a short label, and their rows by modules."""


def _variants(planning: Planning) -> _Variants:
    """The designs about the present one by what is varied, in words and in short, present first."""
    table = planning.table[planning.table["components"] == planning.components[0].name]
    several = _in_mountings(planning)
    keys = ["sensors", "repetitions", "sessions"]
    made = []
    for _, rows in table.groupby(keys, sort=False):
        sensors, runs, sessions = (int(rows[key].iloc[0]) for key in keys)
        words = f"{numbers.count(sensors, 'sensor')}, {numbers.count(runs * sessions, 'run')}"
        words += f" in {numbers.count(sessions, 'mounting')}" if several else ""
        short = f"{sensors} × {sessions} × {runs}" if several else f"{sensors} × {runs}"
        made.append((words, short, rows.sort_values("modules")))
    return made


def _in_mountings(planning: Planning) -> bool:
    """Whether the designs differ in mountings too."""
    return planning.table["sessions"].nunique() > 1


def half_width_figure(planning: Planning) -> Figure:
    """Return the half-width of the interval of a generation difference against the number of modules."""
    reference = planning.reference
    factor, unit = reference.shown_factor, reference.shown_unit
    traces: list[Trace] = []
    notes = []
    variants = _variants(planning)
    first = variants[0][2]
    known = first[first["difference_half_width_high"].notna() & first["difference_half_width_low"].notna()]
    if len(known):
        traces.append(
            band(
                known["modules"],
                known["difference_half_width_low"] * factor,
                known["difference_half_width_high"] * factor,
            )
        )
    for (words, _, rows), style in zip(variants, palette.GENERATION_STYLES, strict=False):
        text = [
            f"{numbers.count(int(m), 'module')} a generation, {words}: "
            f"±{numbers.significant(w * factor, 2, unit)}"
            for m, w in zip(rows["modules"], rows["difference_half_width"], strict=True)
        ]
        values = rows["difference_half_width"] * factor
        traces.append(line(rows["modules"], values, colour=style.colour, dash=style.dash, name=words))
        traces.append(points(rows["modules"], values, style=style, size=6, text=text, name=words))
    notes += _end_labels(variants, "difference_half_width", factor)
    return Figure(
        name="half-width",
        caption=_half_width_caption(planning),
        alternative="Lines falling with the number of modules: the half-width of the 95 % interval of a "
        "difference between two generations, for several numbers of sensors and runs; a band where the "
        "components’ own intervals put the first.",
        traces=tuple(traces),
        layout=layout(
            _modules_axis(27.5),
            axis("Half-width of the difference", unit, low=0, high=_top(variants, factor)),
            annotations=notes,
            shapes=[level_line(planning.difference * factor)],
        ),
        table="planning",
        note="Modules buy most: they are what a generation’s mean is averaged over. The band is where the "
        "first line may lie, its components being known only so well. Dotted: the difference planned for. "
        f"Labels: {'sensors × mountings × runs' if _in_mountings(planning) else 'sensors × runs'}.",
    )


def _top(variants: _Variants, factor: float) -> float:
    """End of the axis: what the widest estimate needs, bands cut off."""
    return 1.25 * factor * max(float(rows["difference_half_width"].max()) for *_, rows in variants)


def _end_labels(variants: _Variants, column: str, factor: float) -> list[dict[str, object]]:
    """Direct labels at the right ends, moved apart where they would cover each other."""
    ends = sorted(
        (
            (float(rows[column].iloc[-1]) * factor, words, index)
            for index, (_, words, rows) in enumerate(variants)
        )
    )
    spacing = 0.055 * max(float(rows[column].max()) * factor for *_, rows in variants)
    notes, last = [], -math.inf
    for value, words, index in ends:
        place = max(value, last + spacing)
        last = place
        notes.append(label(words, 20, place, colour=palette.GENERATION_STYLES[index].colour, size=11))
    return notes


def _modules_axis(high: float) -> Layout:
    """The axis of numbers of modules; room is left to its right for labels at the ends of lines."""
    return axis("Modules a generation", "", low=1.5, high=high, ticks=[(m, str(m)) for m in _MODULES_NAMED])


_MODULES_NAMED = (3, 4, 6, 8, 12, 16, 20)
"""Numbers of modules that the axis names."""


def _half_width_caption(planning: Planning) -> str:
    present, reference = planning.resolved, planning.reference
    if present is None or not math.isfinite(present.half_width):
        return "Half-width of the interval of a generation difference against modules."
    width = numbers.significant(present.half_width * reference.shown_factor, 2, reference.shown_unit)
    return (
        f"A design like this one ({numbers.count(present.design.modules, 'module')} a generation) tells two "
        f"generations apart to ±{width} (95 %); more modules narrow it fastest."
    )


def power_figure(planning: Planning) -> Figure:
    """Return the probability of finding the difference planned for against the number of modules."""
    reference = planning.reference
    wanted = numbers.significant(planning.difference * reference.shown_factor, 2, reference.shown_unit)
    traces: list[Trace] = []
    variants = _variants(planning)
    first = variants[0][2].dropna(subset=["power_low", "power_high"])
    if len(first):
        traces.append(band(first["modules"], first["power_low"] * 100, first["power_high"] * 100))
    for (words, _, rows), style in zip(variants, palette.GENERATION_STYLES, strict=False):
        text = [
            f"{numbers.count(int(m), 'module')} a generation, {words}: {numbers.percent(p)}"
            for m, p in zip(rows["modules"], rows["power"], strict=True)
        ]
        traces.append(
            line(rows["modules"], rows["power"] * 100, colour=style.colour, dash=style.dash, name=words)
        )
        traces.append(
            points(rows["modules"], rows["power"] * 100, style=style, size=6, text=text, name=words)
        )
    needed = modules_needed(planning)
    found = (
        f"from {numbers.count(needed, 'module')} a generation on, a design else like this one finds a true "
        f"difference of {wanted} with a probability of at least {numbers.percent(WANTED_POWER)}"
        if needed
        else f"no number of modules shown finds a true difference of {wanted} with a probability of "
        f"{numbers.percent(WANTED_POWER)}, the design being else like this one"
    )
    return Figure(
        name="power",
        caption=f"By the estimates {found}.",
        alternative="Lines rising with the number of modules: the probability that a two-sided test at 5 % "
        "finds the difference.",
        traces=tuple(traces),
        layout=layout(
            _modules_axis(20.5),
            axis("Probability of finding it", "%", low=0, high=103),
            shapes=[level_line(WANTED_POWER * 100)],
        ),
        table="planning",
        note="Lines as in the figure before. The band again: with components at the ends of their intervals.",
    )


def spread_figure(planning: Planning) -> Figure:
    """Return what an SD between modules is multiplied by for its limits, against the number of modules."""
    modules = list(range(3, 21))
    factors = [spread_factors(m) for m in modules]
    style = palette.GENERATION_STYLES[0]
    text = [
        f"{numbers.count(m, 'module')}: × {numbers.significant(a, 2)} to × {numbers.significant(b, 2)}"
        for m, (a, b) in zip(modules, factors, strict=True)
    ]
    present = planning.resolved.design.modules if planning.resolved is not None else 0
    low, high = spread_factors(present) if present > 1 else (math.nan, math.nan)
    said = (
        f"with the {present} modules of a generation here it lies between {numbers.significant(low, 2)} and "
        f"{numbers.significant(high, 2)} times its estimate"
        if present > 1
        else "with one module it is not known at all"
    )
    frame = pd.DataFrame(
        {"modules": modules, "low_factor": [a for a, _ in factors], "high_factor": [b for _, b in factors]}
    )
    return Figure(
        name="module-sd",
        caption=f"An SD between modules is known poorly: {said} (95 %).",
        alternative="Two curves closing in on one: the factors from an SD to its lower and upper limit.",
        traces=(
            band(modules, frame["low_factor"], frame["high_factor"]),
            line(modules, frame["low_factor"], colour=style.colour),
            line(modules, frame["high_factor"], colour=style.colour),
            points(modules, frame["high_factor"], style=style, size=5, text=text),
        ),
        layout=layout(
            axis("Modules a generation", ""),
            axis("Limit over estimate", "", low=0, high=7),
            shapes=[level_line(1.0)],
        ),
        data=frame,
        note="χ² with modules less one degrees of freedom; it holds for the SD of module means.",
    )


def planning_table(planning: Planning) -> Table:
    """Return the designs about the present one."""
    reference: ReferenceQuantity = planning.reference
    factor, unit = reference.shown_factor, reference.shown_unit
    table = planning.table
    columns = [
        Column("components", "Components of", kind="text"),
        Column("modules", "Modules", kind="integer"),
        Column("sensors", "Sensors", kind="integer"),
        Column("sessions", "Mountings", kind="integer"),
        Column("repetitions", "Runs each", kind="integer"),
        Column(
            "difference_half_width",
            "Half-width",
            unit,
            factor=factor,
            interval=("difference_half_width_low", "difference_half_width_high"),
        ),
        Column("power", "Power", kind="percent"),
        Column("_sd", "Module SD", kind="text"),
    ]
    if planning.costs is not None:
        columns.append(Column("cost", "Cost", digits=3))
    frame = table.assign(
        _sd=[
            f"×{numbers.significant(a, 2)} to ×{numbers.significant(b, 2)}"
            for a, b in zip(table["module_sd_low_factor"], table["module_sd_high_factor"], strict=True)
        ]
    )
    return Table(
        name="planning",
        caption="Two generations of so many modules, sensors a module, mountings, and runs a mounting.",
        frame=frame,
        columns=tuple(columns),
        shown_rows=36,
        note="Brackets: the half-width with the components at the ends of their intervals.",
        mark=("", ""),
    )
