"""The truth of a synthetic campaign as a page of Markdown, to lay beside what a report says of it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from campaign.simulation.plan import Plan
from campaign.simulation.truth import GenerationTruth, SignalLaw, Truth
from campaign.simulation.truth_text_of_kinds import other_kinds_lines

LEVELS = ("batch", "module", "sensor", "mounting", "session", "shared_run", "repetition")


def truth_text(
    plan: Plan, truth: Truth, seed: int, faults: Mapping[str, str], further: Sequence[str] = ()
) -> str:
    """Return the page: law, components in signal units and in strain, loop, noise, stand, faults put in.

    *further* are lines of Markdown that come before the stand.
    """
    lines = [
        "# The truth of this invented campaign",
        "",
        "Everything here is invented: no module, sensor or stand exists, and nothing was measured. The",
        f"recordings were drawn from the values below with seed {seed}; a report on this folder can be laid",
        "beside them. What was *drawn* differs from what is *true* by chance: few modules say little of a",
        "module SD.",
        "",
        "A reading is C_p + c·L₀·(1 + ε)^p + (sum of the random lines a + b·ε) + sensor nonlinearity ± half",
        f"the loop + residual, in {truth.unit}, with ε the true strain in mm/mm and L₀ the place's nominal",
        "rest length.",
        "",
    ]
    for index, generation in enumerate(plan.generations):
        lines += [f"## {generation.name}", "", *_generation_lines(plan, truth.of(index), truth.unit)]
        lines += other_kinds_lines(plan, truth.of(index), truth.unit)
    lines += further
    lines += ["## The stand", "", *_stand_lines(truth), ""]
    if faults:
        lines += ["## Faults put in on purpose", "", "| fault | where |", "|---|---|"]
        lines += [f"| {name} | {where} |" for name, where in faults.items()]
    return "\n".join(lines) + "\n"


def _generation_lines(plan: Plan, truth: GenerationTruth, unit: str) -> list[str]:
    law = truth.law
    rest = np.array([place.rest_length_mm for place in plan.places])
    slope = float(np.mean([law.line(length)[1] for length in rest]))
    full = max(plan.staircase.levels)
    lines = [
        f"Cable C_p = {law.parasitic:g} {unit}, c = {law.per_mm:g} {unit}/mm, stretch exponent p = "
        f"{law.exponent:g}; mean slope over the places {slope:.2f} {unit} per unit strain.",
        "",
        *place_heads(unit),
    ]
    return [*lines, *place_rows(plan, law), "", *_component_lines(truth, unit, slope, full), ""]


def place_heads(unit: str) -> list[str]:
    """Return the head of the table of places."""
    return [
        f"| place | rest length (mm) | intercept ({unit}) | slope ({unit}/(mm/mm)) | gauge factor |",
        "|---|---|---|---|---|",
    ]


def place_rows(plan: Plan, law: SignalLaw) -> list[str]:
    """Return a table's row for every place: rest length, intercept, slope, gauge factor."""
    rows = []
    for place in plan.places:
        intercept, own = law.line(place.rest_length_mm)
        rows.append(
            f"| {place.position} | {place.rest_length_mm:.2f} | {intercept:.2f} | {own:.2f} "
            f"| {law.gauge_factor(place.rest_length_mm):.4f} |"
        )
    return rows


def _component_lines(truth: GenerationTruth, unit: str, slope: float, full: float) -> list[str]:
    """SDs in signal units, and as strain (SD divided by the mean slope) at zero, mid and full scale."""
    parts = truth.components
    lines = [
        f"| component | SD of intercept ({unit}) | SD of slope ({unit}/(mm/mm)) | correlation "
        "| strain at zero (%) | at mid (%) | at full scale (%) |",
        "|---|---|---|---|---|---|---|",
    ]
    for level in LEVELS:
        spread = getattr(parts, level)
        strain = " | ".join(f"{100 * spread.sd_at(e) / slope:.2f}" for e in (0.0, full / 2, full))
        lines.append(
            f"| {level.replace('_', ' ')} | {spread.intercept:g} | {spread.slope:g} "
            f"| {spread.correlation:g} | {strain} |"
        )
    for name, sd in (("sensor nonlinearity", parts.sensor_by_level), ("residual", parts.residual)):
        shown = f"{100 * sd / slope:.2f}"
        lines.append(f"| {name} | {sd:g} | – | – | {shown} | {shown} | {shown} |")
    loop, noise, settling = truth.loop, truth.noise, truth.settling
    return [
        *lines,
        "",
        f"Loop width at mid strain (falling minus rising): mean {loop.mean:g} {unit}, SD between sensors "
        f"{loop.sd:g} {unit}.",
        f"Samples: white noise {noise.white:g} {unit}, slow noise {noise.slow:g} {unit} "
        f"(correlation {noise.slow_correlation:g} from sample to sample).",
        f"Settling, in staircases only: {100 * settling.share:g} % of a step comes late, time constant "
        f"{settling.time_s:g} s.",
    ]


def _stand_lines(truth: Truth) -> list[str]:
    stand = truth.stand
    return [
        "| error | SD | drawn once a |",
        "|---|---|---|",
        f"| length scale | {stand.scale:g} (relative) | campaign |",
        f"| length zero | {stand.zero_mm:g} mm | mounting of a module |",
        f"| measured rest length | {stand.rest_length_mm:g} mm | sensor |",
        f"| built rest length about the nominal (known) | {stand.build_mm:g} mm | sensor |",
        f"| logged length about the one set | {stand.length_noise_mm:g} mm | sample |",
        f"| place of a node, along x and y, about that stated | {stand.node_mm:g} mm | placement |",
        f"| temperature about {stand.temperature_c:g} °C | {stand.temperature_sd_c:g} K | mounting |",
        "",
        f"Temperature moves the signal by {stand.signal_per_kelvin:g} {truth.unit}/K.",
    ]
