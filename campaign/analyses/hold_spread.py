"""Where the spread of slopes a decade comes from: modules, sensors, holds."""

from __future__ import annotations

import math

import numpy as np
import pandas as pd
from scipy import stats

from campaign.analyses.hold_figures import OF_FULL_SCALE
from campaign.analyses.loop_model import LoopModel, loop_model
from campaign.methods.identifiability import label_of
from campaign.methods.nested_inference import satterthwaite
from campaign.methods.nested_model import NestedModelFit, fit_nested_model, profile_intervals

COMPONENT_COLUMNS = (
    *("generation", "place", "component", "called", "sd_percent_fso", "low", "high"),
    *("degrees_of_freedom", "label"),
)
"""Columns of the spread of the slopes a decade over modules, sensors and holds."""

MEAN_COLUMNS = (
    *("generation", "place", "percent_fso_per_decade", "low", "high", "degrees_of_freedom"),
    *("modules", "sensors", "holds", "strain"),
)
"""Columns of the mean slope a decade; ``strain`` is the mean of what was kept, units of the reference."""

SAME_LENGTH = 0.9
"""Holds at least this share of the largest strain (elongation) of their generation are taken together."""


def spread_of_slopes(holds: pd.DataFrame) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Fit the slopes a decade of the stretched holds of every generation, in %FSO.

    Returns
    -------
    components, means
        Columns :data:`COMPONENT_COLUMNS` and :data:`MEAN_COLUMNS`; empty where no hold has a slope in %FSO.

    Notes
    -----
    The model is that of loop widths (:func:`campaign.analyses.loop_model.loop_model`) with one slope a hold:
    with one hold a sensor there is no split between sensor and run. Only holds at the largest length of their
    generation are taken, because slopes depend on it.
    """
    components: list[dict[str, object]] = []
    means: list[dict[str, object]] = []
    for built, fit, strain in fit_slopes(holds):
        components += _components(built, fit)
        means.append(_mean(built, fit) | {"strain": strain})
    return (
        pd.DataFrame(components, columns=list(COMPONENT_COLUMNS)),
        pd.DataFrame(means, columns=list(MEAN_COLUMNS)),
    )


def fit_slopes(holds: pd.DataFrame) -> tuple[tuple[LoopModel, NestedModelFit, float], ...]:
    """Fit the slopes of every generation that has a spread; with the mean strain of the holds taken."""
    rows = holds[(holds["percent_of"] == OF_FULL_SCALE) & (holds["place"] == "stretched")]
    rows = rows.dropna(subset=["percent_fso_per_decade"])
    fits = []
    for generation, own in rows.groupby("generation", sort=True):
        own = own[own["strain"] >= SAME_LENGTH * own["strain"].max()]
        built = loop_model(own.assign(width=own["percent_fso_per_decade"]), str(generation))
        if built is not None:
            fits.append((built, fit_nested_model(built.model), float(own["strain"].mean())))
    return tuple(fits)


def _components(built: LoopModel, fit: NestedModelFit) -> list[dict[str, object]]:
    names = list(built.degrees)
    called = called_in_words(names)
    found = profile_intervals(fit, [(name, (1.0,)) for name in names])
    rows: list[dict[str, object]] = []
    for name, interval in zip(names, found, strict=True):
        label = "not distinguishable from zero" if interval.low == 0 else str(label_of(built.degrees[name]))
        limits = (interval.estimate, interval.low, interval.high)
        row = (built.generation, "stretched", name, called[name], *limits, built.degrees[name], label)
        rows.append(dict(zip(COMPONENT_COLUMNS, row, strict=True)))
    return rows


def called_in_words(entering: list[str]) -> dict[str, str]:
    """Return what the random effects that enter are called: those not told apart bear both their names."""
    residual = "hold" if "sensor" in entering else "sensor + hold" if "module" in entering else "hold of any"
    words = {"module": "module", "sensor": "sensor", "run": "run", "repetition": "sensor × run"}
    return {name: words.get(name, residual) for name in entering}


def _mean(built: LoopModel, fit: NestedModelFit) -> dict[str, object]:
    """Mean over positions, each weighted alike; no interval with one module."""
    weights = np.full(len(fit.coefficients), 1.0 / len(fit.coefficients))
    variance, freedom = satterthwaite(fit, weights)
    centre = float(weights @ fit.coefficients)
    reach = float(stats.t.ppf(0.975, freedom)) * math.sqrt(variance)
    limits = (centre - reach, centre + reach) if built.modules > 1 else (math.nan, math.nan)
    counts = (built.modules, built.sensors, len(fit.model.response))
    row = (built.generation, "stretched", centre, *limits, freedom, *counts)
    return dict(zip(MEAN_COLUMNS[:-1], row, strict=True))
