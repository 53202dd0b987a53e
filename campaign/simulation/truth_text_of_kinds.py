"""What is true of loops, holds, influences and layouts, as lines of Markdown."""

from __future__ import annotations

import numpy as np

from campaign.simulation.plan import Plan
from campaign.simulation.trial_plans import CyclicPlan, HoldPlan, LayoutPlan, SweepPlan
from campaign.simulation.trial_truths import HoldTruth, InfluenceTruth
from campaign.simulation.truth import GenerationTruth


def other_kinds_lines(plan: Plan, truth: GenerationTruth, unit: str) -> list[str]:
    """Return a paragraph for every kind besides staircases that *plan* has."""
    lines: list[str] = []
    if plan.cyclic is not None:
        lines += [*_loop_lines(plan, plan.cyclic, truth, unit), ""]
    if plan.holds:
        lines += [*_hold_lines(plan.holds, truth.hold, truth.noise.white, unit), ""]
    for name, sweep, influence, of in (
        ("Pressure", plan.pressure, truth.pressure, "kPa"),
        ("Temperature", plan.thermal, truth.thermal, "K"),
    ):
        if sweep is not None:
            lines += [*_influence_lines(name, sweep, influence, unit, of), ""]
    if plan.layout is not None:
        lines += [*layout_lines(plan.layout, truth, unit), ""]
    return lines


def _loop_lines(plan: Plan, cyclic: CyclicPlan, truth: GenerationTruth, unit: str) -> list[str]:
    own = truth.cyclic
    return [
        f"Cyclic trials, {cyclic.cycles} cycles from {100 * cyclic.low:g} % to {100 * cyclic.high:g} %:",
        "",
        f"- the settled loop is that of the staircases; SD of a run's width {own.run_sd:g} {unit}",
        f"- first cycle of a sensor's first run: {100 * own.first_width_share:g} % wider, and its change of "
        f"signal {100 * own.softening_share:g} % larger",
        f"- both extras fall to 1/e in {own.conditioning_cycles:g} cycles; {100 * own.recovered:g} % of them "
        "are back at the start of each later run",
        f"- the logged signal is {own.delay_s:g} s late",
        "- a sensor's own bend is straight from level to level: its slope at mid strain, and with it what "
        f"the delay makes there, has an SD of {_slope_sd(plan, truth):.2g} {unit} per mm/mm about that of "
        "its line",
        "",
        *_width_table(plan, cyclic, truth, unit),
    ]


def _slope_sd(plan: Plan, truth: GenerationTruth) -> float:
    """SD of the slope over the two steps about a level, by the sensor nonlinearity of its neighbours."""
    step = float(np.median(np.diff(plan.staircase.levels)))
    return truth.components.sensor_by_level / (float(np.sqrt(2.0)) * step)


def _width_table(plan: Plan, cyclic: CyclicPlan, truth: GenerationTruth, unit: str) -> list[str]:
    """Widths at mid strain, falling minus rising: of the loop itself and of the delay, 2·slope·rate·delay."""
    lines = [
        f"| place | rate (1/s) | width of the loop itself ({unit}) | made by the delay ({unit}) "
        f"| both, falling minus rising ({unit}) | of full scale (%) |",
        "|---|---|---|---|---|---|",
    ]
    own = truth.cyclic
    lengths = {place.position: place.rest_length_mm for place in plan.places}
    for position in cyclic.positions:
        slope = truth.law.line(lengths[position])[1]
        for rate in cyclic.rates_per_s:
            late = 2.0 * slope * rate * own.delay_s
            growth = own.width_share_per_decade * float(np.log10(rate / own.reference_rate_per_s))
            still = truth.loop.mean * (1.0 + growth)
            share = 100.0 * (still + late) / (slope * (cyclic.high - cyclic.low))
            lines.append(
                f"| {position} | {rate:g} | {still:.3f} | {late:.3f} | {still + late:.3f} | {share:.2f} |"
            )
    return lines


def _hold_lines(holds: tuple[HoldPlan, ...], truth: HoldTruth, white: float, unit: str) -> list[str]:
    minute, ten, hour = 100.0 * truth.relaxation.at(np.array([60.0, 600.0, 3600.0]))
    kept = dict.fromkeys(hold.strain for hold in holds if not hold.at_rest)
    strains = ", ".join(f"{100 * strain:g} %" for strain in kept)
    return [
        f"Holds at {strains} and at rest:",
        "",
        f"- at a kept length the signal falls by {truth.relaxation.words}",
        f"- that is {minute:.2f} % of the step at 1 min, {ten:.2f} % at 10 min, {hour:.2f} % at 1 h; "
        f"relative SD between sensors {100 * truth.relative_sd:g} %",
        f"- right after the return {100 * truth.left_after:g} % of it is still missing, and comes back with "
        f"a time constant of {truth.recovery_s:g} s",
        f"- at rest the zero drifts by {truth.drift_per_hour:g} {unit}/h; SD between sensors "
        f"{truth.drift_sd:g} {unit}/h",
        f"- samples: white noise {white:g} {unit}, and flicker with an Allan deviation of "
        f"{truth.flicker:g} {unit}",
    ]


def _influence_lines(name: str, sweep: SweepPlan, truth: InfluenceTruth, unit: str, of: str) -> list[str]:
    origin = f" away from {truth.origin:g} °C" if truth.origin else ""
    strains = ", ".join(f"{100 * strain:g} %" for strain in sweep.strains)
    return [
        f"{name} p from {sweep.low:g} to {sweep.high:g} at {strains} strain adds c·p + d·ε·p, "
        f"p in {of}{origin}:",
        "",
        f"- c = {truth.coefficient:g} {unit}/{of}; SD between modules {truth.module_sd:g}, between sensors "
        f"{truth.sensor_sd:g}, between runs {truth.run_sd:g}",
        f"- d = {truth.per_strain:g} {unit}/{of} per mm/mm; SD between sensors {truth.per_strain_sd:g}",
        f"- loop at mid range, rising minus falling: {truth.loop:g} {unit}, SD between sensors "
        f"{truth.loop_sd:g} {unit}",
    ]


def layout_lines(layout: LayoutPlan, truth: GenerationTruth, unit: str) -> list[str]:
    """Return what is true of layout trials."""
    parts = truth.components
    return [
        f"Layouts, {len(layout.placements)} placements of {len(layout.nodes)} nodes in the frame:",
        "",
        "- the columns of nodes hold the stated places; the sensors feel the true ones (see the stand)",
        "- SD of a sensor's length about the distance of its nodes, drawn once a sensor and placement: "
        f"{truth.layout.seat_mm:g} mm",
        "- a sensor that came from a shorter length reads half the staircase's loop low, one that came from "
        "a longer length half of it high",
        f"- the frame is a mounting of its own: lines of session (SD {parts.session.intercept:g} {unit}) and "
        f"repetition (SD {parts.repetition.intercept:g} {unit}), and a residual (SD {parts.residual:g} "
        f"{unit}) a sensor and placement, as in staircases",
    ]
