"""Figures of the budget page: U of every subject, each bar parted by what its variance is made of."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from campaign.analyses.budget import Budget
from campaign.analyses.budget_findings import shares_of
from campaign.analyses.budget_model import (
    ACROSS,
    LACK,
    LINE,
    LOOP,
    MOUNTING,
    NOISE,
    PRESSURE,
    RATE,
    REFERENCE,
    RESOLUTION,
    RUN,
    SENSORS,
    TEMPERATURE,
    TIME,
    BudgetInUse,
)
from campaign.pages import numbers, palette, slugs
from campaign.pages.figures import Figure, Layout, Trace, axis, bars, label, layout, panel, small_multiples
from campaign.recordings.recording import ReferenceQuantity

PARTS: Mapping[str, tuple[tuple[str, ...], str]] = {
    "calibration": ((LINE, REFERENCE, LACK), palette.RAMP[2]),
    "other sensors": ((SENSORS,), palette.RAMP[8]),
    "mounting, run and noise": ((MOUNTING, RUN, NOISE, RESOLUTION), palette.RAMP[5]),
    "hysteresis": ((LOOP, RATE), palette.ATTENTION),
    "drift or creep": ((TIME,), palette.SOFT),
    "pressure, temperature, cross-axis": ((PRESSURE, TEMPERATURE, ACROSS), palette.INK),
}
"""Parts of a bar from the left, the sources in each, and its colour; in grey they differ in lightness."""

_LINE = 15
"""Height of a line of the key, in pixels."""

_SMALLEST = 0.004
"""A part that holds less of the variance is not drawn."""


def budget_figures(budget: Budget) -> tuple[Figure, ...]:
    """Return the figure of new sensors (where there are any) and that of sensors with their own lines."""
    made = []
    if new := budget.of_new_sensors():
        made.append(new_sensor_figure(new, budget.reference))
    return (*made, sensor_figure(budget.of_sensors(), budget.reference, first=not made))


def new_sensor_figure(found: Sequence[BudgetInUse], reference: ReferenceQuantity) -> Figure:
    """Return one bar a generation for a new sensor read by the generation's line."""
    names = [one.subject.generation for one in found]
    ticks = [(float(i), name) for i, name in enumerate(names)]
    traces = _parted(found, reference, "", width=0.6)
    made = layout(
        _across(found, reference),
        axis("", ticks=ticks, low=-0.5, high=len(names) - 0.4, reverse=True),
        barmode="overlay",
        margin={"l": 150, "t": 28 + _key_height(traces)},
        annotations=_key_of_parts(traces, left=-140),
    )
    return Figure(
        name="budget-new",
        caption=f"{_sentence(found[0], reference)}{_others(found[1:], reference)}.",
        alternative="One bar a generation, as long as U of a new sensor, parted by shares of the variance.",
        traces=tuple(traces),
        layout=made,
        table="budget",
        note=_HOW_TO_READ,
        height=150 + _key_height(traces) + 56 * len(names),
    )


def sensor_figure(found: Sequence[BudgetInUse], reference: ReferenceQuantity, *, first: bool) -> Figure:
    """Return one bar a sensor with its own line, a panel a generation, largest U first.

    *first* says that no figure above explains the parts.
    """
    generations = sorted({one.subject.generation for one in found})
    traces: list[Trace] = []
    most = 1
    for index, generation in enumerate(generations):
        own = [one for one in found if one.subject.generation == generation]
        own.sort(key=lambda one: -one.combined.expanded_uncertainty)
        most = max(most, len(own))
        traces += _parted(own, reference, panel(index), width=0.8)
    upright = axis("Sensors, largest first", low=-0.7, high=most - 0.3, reverse=True, showticklabels=False)
    key = _key_height(traces)
    made = small_multiples(
        generations,
        _across(found, reference),
        upright,
        columns=min(len(generations), 3),
        barmode="overlay",
        margin={"t": 28 + key},
        annotations=_key_of_parts(traces, above=22),
    )
    largest = max(found, key=lambda one: one.combined.expanded_uncertainty)
    return Figure(
        name="budget-sensors",
        caption=f"By its own line {_sentence(largest, reference)}, the largest of "
        f"{numbers.count(len(found), 'sensor')}.",
        alternative="One bar a sensor, as long as its U, parted by shares of the variance, by generation.",
        traces=tuple(traces),
        layout=made,
        table="budget",
        note=_HOW_TO_READ if first else "Parts as in the figure above.",
        height=key + min(620, 120 + max(8, 60 // most) * most),
    )


_HOW_TO_READ = (
    "The bar is as long as U. Its parts are shares of the variance, from the left: "
    f"{', '.join(PARTS)}. A source that is not known has no part."
)


def _across(found: Sequence[BudgetInUse], reference: ReferenceQuantity) -> Layout:
    largest = max(one.combined.expanded_uncertainty for one in found) * reference.shown_factor
    return axis("U (95 %)", reference.shown_unit, low=0.0, high=1.05 * largest or 1.0)


def _parted(
    found: Sequence[BudgetInUse], reference: ReferenceQuantity, axes: str, width: float
) -> list[Trace]:
    """One trace a part: the bars' pieces with their bases."""
    factor = reference.shown_factor
    starts = [0.0] * len(found)
    traces = []
    for words, (sources, colour) in PARTS.items():
        kept: list[tuple[int, float, float, str]] = []
        for place, one in enumerate(found):
            shares = shares_of(one)
            share = sum(shares.get(source, 0.0) for source in sources)
            if share < _SMALLEST:
                continue
            length = share * one.combined.expanded_uncertainty * factor
            text = f"{one.subject.name}: {words}, {numbers.percent(share)} of the variance"
            kept.append((place, starts[place], length, text))
            starts[place] += length
        if kept:
            traces.append(
                bars(
                    [float(place) for place, _, _, _ in kept],
                    [length for _, _, length, _ in kept],
                    name=words,
                    colour=colour,
                    width=width,
                    text=[text for _, _, _, text in kept],
                    links=[_href(found[place]) for place, _, _, _ in kept],
                    across=True,
                    axes=axes,
                    base=[start for _, start, _, _ in kept],
                )
            )
    return traces


def _key_height(traces: Sequence[Trace]) -> int:
    """Pixels that the key takes above the panels."""
    return 8 + _LINE * len(_parts_drawn(traces))


def _parts_drawn(traces: Sequence[Trace]) -> list[str]:
    """Names of the parts that any bar has, in the order in which they stand in it."""
    drawn = {str(trace["name"]) for trace in traces}
    return [words for words in PARTS if words in drawn]


def _key_of_parts(traces: Sequence[Trace], left: int = 0, above: int = 4) -> list[Layout]:
    """Return a line a part above the first panel: a square in its colour, and its name.

    The first line stands highest; *left* and *above* are pixels from the panel's upper left corner.
    """
    names = _parts_drawn(traces)
    made = []
    for place, words in enumerate(names):
        height = above + _LINE * (len(names) - place) - _LINE // 2
        colour = PARTS[words][1]
        made.append(label("■", 0, 1, colour=colour, shift=(left, height), paper=True))
        made.append(label(words, 0, 1, shift=(left + 16, height), size=11, paper=True))
    return made


def _href(one: BudgetInUse) -> str:
    subject = one.subject
    return "" if subject.is_new else slugs.sensor_href(subject.module, subject.sensor)


def _sentence(one: BudgetInUse, reference: ReferenceQuantity) -> str:
    least = "at least " if one.is_at_least else ""
    size = numbers.significant(
        one.combined.expanded_uncertainty * reference.shown_factor, 2, reference.shown_unit
    )
    shares = shares_of(one)
    source = max(shares, key=lambda name: shares[name])
    name = one.subject.name
    return f"{name[:1].upper() + name[1:]} is read to {least}±{size}; {source} holds " + (
        f"{numbers.percent(shares[source])} of the variance"
    )


def _others(found: Sequence[BudgetInUse], reference: ReferenceQuantity) -> str:
    return "".join(f". {_sentence(one, reference)}" for one in found)
