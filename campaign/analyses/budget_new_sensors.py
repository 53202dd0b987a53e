"""The fixed part of the budget of a new sensor: not calibrated itself, read by its generation's line."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.analyses.budget_model import (
    LACK,
    LINE,
    LOOP,
    MOUNTING,
    NOISE,
    REFERENCE,
    RUN,
    SENSORS,
    FixedPart,
)
from campaign.analyses.budget_sensors import DIRECTIONS, resolution_lines
from campaign.analyses.variance_fit import GenerationFit
from campaign.methods.nested_model import satterthwaite_each
from campaign.methods.uncertainty_budget import BudgetLine

FloatArray = npt.NDArray[np.float64]

MODEL = "model"
"""Group of what comes from the one fit of the generation: its degrees of freedom are those of the sum."""

SOURCE_OF: Mapping[str, str] = {
    "batch": SENSORS,
    "module": SENSORS,
    "sensor": SENSORS,
    "mounting": MOUNTING,
    "session": MOUNTING,
    "run": RUN,
    "repetition": RUN,
    "sensor_by_level": LACK,
    "sensor_by_direction": LOOP,
    "residual": NOISE,
}
"""Source of the budget that each component of the nested model belongs to."""

_NEEDED = (("module", SENSORS), ("sensor", SENSORS), ("session", MOUNTING), ("repetition", RUN))
_WHY: Mapping[str, str] = {
    "module": "one module: the spread of new modules was not measured",
    "sensor": "one sensor a module: inside module to module",
    "session": "mounted once: what remounting does was not measured",
    "repetition": "one run: run-to-run error unknown",
}

HALF_A_LOOP = 0.5
"""Weight of a sensor's own rising less falling signal in one reading of either direction."""


def new_sensor_parts(
    fit: GenerationFit, places: Sequence[float], resolution: float, scale_sds: Sequence[float]
) -> list[dict[str, FixedPart]]:
    """Return the fixed part at every place for every direction of approach.

    Parameters
    ----------
    fit
        The nested fit of the generation.
    places
        Values of x.
    resolution
        Step of the readout, signal units; NaN where not stated.
    scale_sds
        Standard uncertainty of x at each place by the scale of the reference, which all calibrations share;
        NaN where not stated. Zero, backlash and rest lengths differ between sensors and mountings, whose
        spread has them.
    """
    scale = 1.0 / abs(fit.mean_slope)
    bend, half_loop = shared_departures(fit)
    models = _lines_of_model(fit, places, scale)
    return [
        {d: _fixed_part(fit, d, model, bend, half_loop, scale, resolution, own) for d in DIRECTIONS}
        for model, own in zip(models, scale_sds, strict=True)
    ]


def _fixed_part(
    fit: GenerationFit,
    direction: str,
    model: list[BudgetLine],
    bend: float,
    half_loop: float,
    scale: float,
    resolution: float,
    scale_sd: float,
) -> FixedPart:
    contained, unknown = _not_told_apart(fit)
    lines = [*model, BudgetLine(LACK, bend, "normal", scale)]
    if direction != "unknown":
        contained.setdefault(LOOP, "read by the line of this direction")
    elif math.isfinite(half_loop):
        lines.append(BudgetLine(LOOP, half_loop, "two-point", scale))
    else:
        unknown[LOOP] = "no level was approached from both sides"
    if math.isfinite(scale_sd):
        lines.append(BudgetLine(REFERENCE, scale_sd, "normal"))
    else:
        unknown[REFERENCE] = "[reference] states no uncertainty of length"
    lines += resolution_lines(resolution, fit.residual_variance, scale, contained)
    return FixedPart(tuple(line for line in lines if line.half_width > 0), contained, unknown)


def _lines_of_model(fit: GenerationFit, places: Sequence[float], scale: float) -> list[list[BudgetLine]]:
    """The mean line and every component at each place; all on the degrees of freedom of their sum there."""
    wanted: list[tuple[FloatArray, Mapping[str, FloatArray]]] = []
    for x in places:
        line = fit.line_weights[0] + x * fit.line_weights[1]
        wanted += [(line, {}), (line, _weights(fit, x))]
    found = satterthwaite_each(fit.fit, wanted)
    models = []
    for number in range(len(places)):
        variance, freedom = found[2 * number][0], found[2 * number + 1][1]
        parts = [(LINE, variance), *_variances(fit, wanted[2 * number + 1][1])]
        models.append([BudgetLine(s, math.sqrt(max(v, 0.0)), "t", scale, freedom, MODEL) for s, v in parts])
    return models


def _variances(fit: GenerationFit, weights: Mapping[str, FloatArray]) -> Iterator[tuple[str, float]]:
    for name, weight in weights.items():
        known = np.array([[fit.residual_variance]]) if name == "residual" else fit.fit.covariances[name]
        yield SOURCE_OF[name], float(weight @ known @ weight)


def _weights(fit: GenerationFit, x: float) -> dict[str, FloatArray]:
    """Weight of every component's effect in one reading of a new sensor."""
    weights = {name: fit.model.direction(name, x) for name in fit.model.terms}
    if "sensor_by_direction" in weights:
        weights["sensor_by_direction"] = np.array([HALF_A_LOOP])
    return weights | {"residual": np.array([1.0])}


def _not_told_apart(fit: GenerationFit) -> tuple[dict[str, str], dict[str, str]]:
    """Components that are inside another one, and those that the design does not give, by source."""
    contained: dict[str, str] = {}
    unknown: dict[str, str] = {}
    merged = {part for c in fit.components for part in c.called.split(" + ")}
    for name, source in _NEEDED:
        if name in fit.model.terms:
            continue
        if name in merged or (name == "session" and "mounting" in merged):
            contained.setdefault(source, "not told apart: inside another line of this budget")
        else:
            unknown[source] = _WHY[name]
    return contained, unknown


def shared_departures(fit: GenerationFit) -> tuple[float, float]:
    """Return what all sensors of a generation depart from its line, signal units.

    Returns
    -------
    tuple of float
        Root mean square over levels of the mean of both directions about the line of its position, and half
        the root-mean-square difference of the directions; NaN without both.
    """
    readings, part = fit.model.readings, fit.model.fixed
    kept = [k for k, group in enumerate(part.groups) if group not in ("covariate", "departure")]
    fitted = part.columns[:, kept] @ fit.fit.coefficients[kept]
    x = readings["x"].to_numpy(float)
    table = readings[["position", "direction"]].assign(rest=_about_lines(readings, x, fitted))
    table["level"] = np.round(x / (np.ptp(x) or 1.0), 2)
    table = table[table["direction"].isin(["rising", "falling"])] if _has_both(readings) else table
    means = table.groupby(["position", "level", "direction"])["rest"].mean().unstack("direction")
    bend = means.mean(axis=1, skipna=False).dropna()
    if not _has_both(readings):
        return float(np.sqrt(np.mean(means.stack() ** 2))), math.nan
    half = (means["rising"] - means["falling"]).dropna() / 2.0
    return float(np.sqrt(np.mean(bend**2))), float(np.sqrt(np.mean(half**2)))


def _has_both(readings: pd.DataFrame) -> bool:
    directions = set(readings["direction"])
    return {"rising", "falling"} <= directions


def _about_lines(readings: pd.DataFrame, x: FloatArray, fitted: FloatArray) -> FloatArray:
    """Fitted means less the least-squares line through those of the same position."""
    rest = np.empty_like(fitted)
    places = readings["position"].to_numpy(object)
    for place in set(places):
        own = places == place
        design = np.column_stack([np.ones(own.sum()), x[own]])
        rest[own] = fitted[own] - design @ np.linalg.lstsq(design, fitted[own], rcond=None)[0]
    return rest
