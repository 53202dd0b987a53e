"""Where the spread of loop widths comes from: the nested model on the signed settled width at mid range."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

from campaign.analyses.loop_table import SENSOR_KEYS, LoopTable
from campaign.methods.identifiability import label_of
from campaign.methods.loops import MID
from campaign.methods.nested_inference import satterthwaite
from campaign.methods.nested_model import (
    NestedModel,
    NestedModelFit,
    RandomTerm,
    fit_nested_model,
    profile_intervals,
)

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

COMPONENT_COLUMNS = (
    "generation",
    "component",
    "called",
    "sd_percent_fso",
    "low",
    "high",
    "degrees_of_freedom",
    "label",
    "method",
)
"""Columns of the components of the widths."""

MEAN_COLUMNS = (
    "generation",
    "mid_width_percent_fso",
    "low",
    "high",
    "degrees_of_freedom",
    "modules",
    "sensors",
    "loops",
)
"""Columns of the mean widths."""


@dataclass(frozen=True)
class LoopModel:
    """The nested model of one generation's widths, ready to be fitted.

    ``degrees`` and ``called`` say, for each random effect that enters, how many degrees of freedom the design
    has for it and what it is in words: effects that the design cannot tell apart bear both their names.
    """

    generation: str
    model: NestedModel
    degrees: dict[str, int]
    called: dict[str, str]
    modules: int
    sensors: int


FittedLoops = tuple[LoopModel, NestedModelFit]
"""A model and its fit."""


def width_components(
    table: LoopTable, fits: tuple[FittedLoops, ...] | None = None
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Fit the widths of every generation, and of all of them together; *fits* where that is done already.

    Returns
    -------
    components
        Standard deviations in %FSO, columns :data:`COMPONENT_COLUMNS`; ``all`` is the pooled fit.
    means
        Mean width of each generation with its interval, columns :data:`MEAN_COLUMNS`.

    Notes
    -----
    Generation and position are fixed; module, sensor and run (repetition) are random; what loops of one run
    differ by is the residual. Runs that several sensors of a module shared are an effect of the module.
    """
    components: list[dict[str, object]] = []
    means: list[dict[str, object]] = []
    for model, fit in fit_widths(table) if fits is None else fits:
        components += _components(model, fit)
        if model.generation != "all":
            means.append(_mean(model, fit))
    return (
        pd.DataFrame(components, columns=list(COMPONENT_COLUMNS)),
        pd.DataFrame(means, columns=list(MEAN_COLUMNS)),
    )


def fit_widths(table: LoopTable) -> tuple[FittedLoops, ...]:
    """Fit the widths of every generation that has a spread, then of all of them together."""
    counted = table.rows["counted"].to_numpy(bool)
    rows = table.rows[counted].assign(width=table.width[counted][:, MID]).dropna(subset=["width"])
    parts = [(str(g), own) for g, own in rows.groupby("generation", sort=True)]
    if len(parts) > 1:
        parts.append(("all", rows))
    models = (loop_model(own, generation) for generation, own in parts)
    return tuple((model, fit_nested_model(model.model)) for model in models if model is not None)


def loop_model(rows: pd.DataFrame, generation: str) -> LoopModel | None:
    """Return the model of the widths in *rows* (a column ``width``); ``None`` where they do not vary."""
    width = rows["width"].to_numpy(float)
    module = _codes(rows, ["generation", "module"])
    sensor = _codes(rows, SENSOR_KEYS)
    run = _codes(rows, [*SENSOR_KEYS, "trial"])
    fixed, names = _fixed_part(rows)
    modules, sensors, runs = (int(codes.max()) + 1 for codes in (module, sensor, run))
    if len(rows) - fixed.shape[1] < 2 or float(np.ptp(width)) <= 1e-12 * float(np.abs(width).max()):
        return None
    generations = int(rows["generation"].nunique())
    shared = _shared_degrees(rows, module)
    degrees = {
        "module": modules - generations,
        "sensor": sensors - modules - (fixed.shape[1] - generations),
        "run": shared,
        "repetition": runs - sensors - shared,
        "residual": len(rows) - runs,
    }
    for outer in ("repetition", "sensor", "module"):
        if degrees["residual"] < 1:
            degrees["residual"] = degrees.pop(outer)
    entering = [name for name, freedom in degrees.items() if freedom >= 1]
    one = np.ones((len(rows), 1))
    copies = {"run": _codes(rows, ["generation", "module", "trial"])}
    homes = {"module": "module", "sensor": "sensor", "run": "module", "repetition": "repetition"}
    terms = tuple(RandomTerm(n, homes[n], one, copies.get(n)) for n in entering if n != "residual")
    used = {homes[n] for n in entering if n != "residual"}
    codes = {"module": module, "sensor": sensor, "repetition": run}
    levels = tuple((name, own) for name, own in codes.items() if name in used)
    model = NestedModel(width, fixed, names, levels, terms)
    called = _called(entering)
    return LoopModel(generation, model, {n: degrees[n] for n in entering}, called, modules, sensors)


def _codes(rows: pd.DataFrame, keys: list[str]) -> IntArray:
    return np.asarray(rows.groupby(keys, sort=True).ngroup(), dtype=np.int64)


def _fixed_part(rows: pd.DataFrame) -> tuple[FloatArray, tuple[str, ...]]:
    """A mean for every generation and position, positions only where they recur from module to module."""
    position = rows["position"].astype(str)
    visits = rows.groupby(["generation", "position"])["module"].nunique()
    recur = position.nunique() > 1 and bool((visits > 1).all())
    cells = rows["generation"].astype(str) + (" · " + position if recur else "")
    names = sorted(cells.unique())
    columns = np.column_stack([(cells == name).to_numpy(float) for name in names])
    return columns, tuple(names)


def _shared_degrees(rows: pd.DataFrame, module: IntArray) -> int:
    """Runs beyond the first of each module, where runs carry several sensors; 0 where they carry one each."""
    visits = rows.drop_duplicates([*SENSOR_KEYS, "trial"])
    carried = visits.groupby(["generation", "module", "trial"]).size()
    if carried.max() < 2 or carried.mean() < 1.5:
        return 0
    return int(len(carried) - len(np.unique(module)))


def _called(entering: list[str]) -> dict[str, str]:
    """Names of the effects in words: what the design cannot tell apart stands in one name."""
    runs_repeat = "repetition" in entering or "run" in entering
    words = {
        "module": "module" if "sensor" in entering else "module + sensor",
        "sensor": "sensor" if runs_repeat else "sensor + run",
        "run": "run",
        "repetition": "sensor × run" if "run" in entering else "run",
        "residual": "loop" if runs_repeat or "sensor" in entering else "everything else",
    }
    return {name: words[name] for name in entering}


def _components(model: LoopModel, fit: NestedModelFit) -> Iterator[dict[str, object]]:
    names = list(model.degrees)
    intervals = profile_intervals(fit, [(name, (1.0,)) for name in names])
    for name, interval in zip(names, intervals, strict=True):
        label = str(label_of(model.degrees[name]))
        if interval.low == 0:
            label = "not distinguishable from zero"
        yield {
            "generation": model.generation,
            "component": name,
            "called": model.called[name],
            "sd_percent_fso": interval.estimate,
            "low": interval.low,
            "high": interval.high,
            "degrees_of_freedom": model.degrees[name],
            "label": label,
            "method": fit.method,
        }


def _mean(model: LoopModel, fit: NestedModelFit) -> dict[str, object]:
    """Mean over positions, each weighted alike, with Satterthwaite's degrees of freedom."""
    weights = np.full(len(fit.coefficients), 1.0 / len(fit.coefficients))
    estimate = float(weights @ fit.coefficients)
    variance, degrees = satterthwaite(fit, weights)
    reach = float(stats.t.ppf(0.975, degrees)) * float(np.sqrt(variance))
    alone = model.modules < 2
    return {
        "generation": model.generation,
        "mid_width_percent_fso": estimate,
        "low": float("nan") if alone else estimate - reach,
        "high": float("nan") if alone else estimate + reach,
        "degrees_of_freedom": degrees,
        "modules": model.modules,
        "sensors": model.sensors,
        "loops": len(fit.model.response),
    }
