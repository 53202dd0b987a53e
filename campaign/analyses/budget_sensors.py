"""The fixed part of the budget of a sensor read by its own line."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping

import numpy as np
import numpy.typing as npt

from campaign.analyses.budget_model import (
    LACK,
    LINE,
    LOOP,
    MOUNTING,
    NOISE,
    REFERENCE,
    RESOLUTION,
    RUN,
    FixedPart,
)
from campaign.analyses.line_sources import IN_NOISE, MEASURED, LineSources
from campaign.methods.run_spread import APART, TOGETHER
from campaign.methods.uncertainty_budget import BudgetLine
from campaign.recordings.description import Description

FloatArray = npt.NDArray[np.float64]

RUNS = "runs"
"""Group of what rests on the scatter between runs: line, mounting and run are combined first."""

DIRECTIONS = ("unknown", "rising", "falling")
BRANCH_OF: Mapping[str, str] = {"unknown": "both", "rising": "rising", "falling": "falling"}
"""Branch whose line reads a length that was approached so."""


def fixed_parts(
    lines: Iterable[LineSources], x: float, resolution: float, reference_stated: bool
) -> dict[str, FixedPart]:
    """Return the fixed part for every direction of approach, from the lines of one sensor.

    Parameters
    ----------
    lines
        Sources of its branches; where only one branch was run, it stands for all.
    x
        Where; within the calibrated range.
    resolution
        Step of the readout, signal units; NaN where not stated.
    reference_stated
        Whether the uncertainty of the reference is stated.
    """
    of_branch = {line.branch: line for line in lines}
    standing = next(of_branch[b] for b in ("both", "rising", "falling") if b in of_branch)
    return {
        direction: _fixed_part(of_branch.get(branch, standing), direction, x, resolution, reference_stated)
        for direction, branch in BRANCH_OF.items()
    }


def _fixed_part(
    own: LineSources, direction: str, x: float, resolution: float, reference_stated: bool
) -> FixedPart:
    scale = 1.0 / abs(own.slope)
    contained: dict[str, str] = {}
    unknown: dict[str, str] = {}
    lines = _lines_of_runs(own, x, scale, contained, unknown)
    if own.lack_of_fit_degrees > 0:
        lack = math.sqrt(own.lack_of_fit)
        lines.append(BudgetLine(LACK, lack, "t", scale, own.lack_of_fit_degrees))
    else:
        contained[LACK] = "no level was repeated: inside the noise"
    lines.append(BudgetLine(NOISE, math.sqrt(own.noise), "t", scale, own.noise_degrees))
    lines += _loop(own, direction, scale, contained, unknown)
    if reference_stated:
        lines.append(BudgetLine(REFERENCE, _sd(own.reference, x), "normal", scale))
    else:
        unknown[REFERENCE] = "[reference] states no uncertainty of length"
    lines += resolution_lines(resolution, own.noise, scale, contained)
    return FixedPart(tuple(lines), contained, unknown)


def _lines_of_runs(
    own: LineSources, x: float, scale: float, contained: dict[str, str], unknown: dict[str, str]
) -> list[BudgetLine]:
    if not own.run_degrees > 0:
        unknown |= dict.fromkeys((LINE, MOUNTING, RUN), "one run: run-to-run error unknown")
        return []
    parts = [(LINE, own.line), (RUN, own.run)]
    if own.mountings == APART:
        parts.insert(1, (MOUNTING, own.mounting))
    elif own.mountings == TOGETHER:
        contained[MOUNTING] = "every run was a mounting of its own: inside run to run"
    else:
        unknown[MOUNTING] = "mounted once: what remounting does was not measured"
    return [BudgetLine(source, _sd(part, x), "t", scale, own.run_degrees, RUNS) for source, part in parts]


def _loop(
    own: LineSources, direction: str, scale: float, contained: dict[str, str], unknown: dict[str, str]
) -> list[BudgetLine]:
    """Direction unknown: half the loop either way. Known: the line of that branch has its spread."""
    if direction == own.branch:
        contained[LOOP] = "the line is that of this direction: what is left is inside run and lack of fit"
        return []
    if own.loop == IN_NOISE:
        contained[LOOP] = "levels came in random order: inside the noise"
        return []
    if own.loop != MEASURED:
        unknown[LOOP] = "no level was approached from both sides"
        return []
    return [BudgetLine(LOOP, own.half_loop, "two-point", scale)]


def resolution_lines(
    resolution: float, noise: float, scale: float, contained: dict[str, str]
) -> list[BudgetLine]:
    """Return what the readout's step adds: nothing where the scatter of readings holds it."""
    beyond = resolution**2 / 12.0 - noise
    if not beyond > 0:
        contained[RESOLUTION] = "the scatter of readings holds it"
        return []
    return [BudgetLine(RESOLUTION, math.sqrt(3.0 * beyond), "rectangular", scale)]


def readout_step(description: Description) -> float:
    """Return the stated step of the readout, signal units; NaN where none is stated."""
    return description.signal_reference.resolution


def _sd(covariance: FloatArray, x: float) -> float:
    place = np.array([1.0, x])
    return math.sqrt(max(float(place @ covariance @ place), 0.0))
