"""Does one correction serve all? The spread of an influence's effect over modules and sensors.

The sweeps' slopes, as apparent x per unit of the influence, enter the nested engine: a line over x for every
module and sensor, sweeps within. Beside the model stands the evidence of leaving out: what remains when a
sensor is corrected by the others of its generation, by its module, or by its own other sweeps.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

from campaign.analyses.grouped_rows import at, columns_of, groups_by, places_by
from campaign.analyses.influence_sensors import SWEEP_SET_COLUMNS, SensorKey, SignalSlope, sweep_set
from campaign.methods.holm import holm_adjusted
from campaign.methods.identifiability import label_of
from campaign.methods.influence_model import (
    design_of,
    distinct_lengths,
    left_out_slopes,
    spread_about_sweeps,
)
from campaign.methods.nested_means_test import MeansTest, test_groups, test_members
from campaign.methods.nested_model import (
    Interval,
    NestedModel,
    NestedModelFit,
    RandomTerm,
    fit_nested_model,
    profile_intervals,
    profile_total,
    satterthwaite,
)
from campaign.notices import Notice
from campaign.trials.readings import SENSOR_KEYS

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]
BoolArray = npt.NDArray[np.bool_]

BOTH = "module and sensor"
"""The component of a new sensor of a new module; the only one where every module has one sensor."""

SAME = 0.05
"""A component whose adjusted p is below this differs from unit to unit."""

SPREAD_COLUMNS = (
    *("generation", "component", "what", "estimate", "low", "high", "degrees_of_freedom", "label"),
    *("test", "p", "p_adjusted"),
)
"""One row a component (mean, module, sensor, module and sensor, run, sweep) and ``what`` is spread: ``error``
(apparent x per unit of the influence at the middle of the lengths, SD but for the mean) or ``change`` (its
change per unit of x)."""

CORRECTIONS = ("none", "generation", "position", "module", "sensor")
"""Corrections that are tried, from none to a sensor's own."""

SERVING_COLUMNS = ("generation", "correction", "sensors", "modules", "sd", "low", "high", "factor")
"""What remains: one row a generation and correction. ``sd`` is the SD of what is left as x, about the sweeps'
means, over all sensors; limits by modules; ``factor`` is ``sd`` over that without correction."""


@dataclass(frozen=True)
class InfluenceSpread:
    """The spread of an influence's effect over the units of the campaign.

    Attributes
    ----------
    components
        Columns of :data:`SPREAD_COLUMNS`.
    serving
        Columns of :data:`SERVING_COLUMNS`.
    answers
        Generation → ``yes``, ``no`` or ``not decided``: whether one correction serves all its sensors.
    fits
        Generation → the engine's fit, with its evidence.
    notices
        Generations that could not be fitted.
    """

    components: pd.DataFrame
    serving: pd.DataFrame
    answers: dict[str, str]
    fits: dict[str, NestedModelFit]
    notices: tuple[Notice, ...] = ()


def influence_spread(
    points: pd.DataFrame, sweeps: pd.DataFrame, slopes: dict[SensorKey, SignalSlope], influence: str
) -> InfluenceSpread:
    """Fit the nested model of every generation and try every correction.

    Parameters
    ----------
    points, sweeps
        As :mod:`campaign.analyses.influence_sweeps` makes them.
    slopes
        What turns each sensor's signals into x; sensors without it take no part.
    influence
        Its name, for notices.
    """
    table = _with_effects(sweeps, slopes)
    components, serving, notices = [], [], []
    answers: dict[str, str] = {}
    fits: dict[str, NestedModelFit] = {}
    for generation, rows in table.groupby("generation", sort=True):
        name = str(generation)
        serving.append(_serving(name, rows, points))
        try:
            fit, frame = _fit_generation(name, rows)
        except ValueError as fault:
            notices.append(_not_fitted(influence, name, str(fault)))
            continue
        if fit is not None:
            fits[name] = fit
        components.append(frame)
        answers[name] = _answer(frame, serving[-1])
    return InfluenceSpread(
        _joined(components, SPREAD_COLUMNS), _joined(serving, SERVING_COLUMNS), answers, fits, tuple(notices)
    )


def _joined(parts: list[pd.DataFrame], columns: tuple[str, ...]) -> pd.DataFrame:
    kept = [part for part in parts if len(part)]
    if not kept:
        return pd.DataFrame(columns=list(columns))
    whole: pd.DataFrame = pd.concat(kept, ignore_index=True)
    return whole


def _not_fitted(influence: str, generation: str, fault: str) -> Notice:
    what = f"the spread of the effect of {influence} in {generation} cannot be fitted ({fault})"
    return Notice("spread-not-fitted", "noted", None, None, None, what, "no components are given for it")


def _with_effects(sweeps: pd.DataFrame, slopes: dict[SensorKey, SignalSlope]) -> pd.DataFrame:
    """Sweeps of sensors with a slope, with ``b`` and ``effect``, the apparent x per unit of the influence."""
    own = [slopes[key] for key in zip(*(sweeps[k].astype(str) for k in SENSOR_KEYS), strict=True)]
    divisors = np.array([slope.slope for slope in own], dtype=float)
    variances = np.nan_to_num(np.array([slope.variance for slope in own], dtype=float))
    known = np.isfinite(divisors) & (divisors != 0)
    table: pd.DataFrame = sweeps[known].assign(b=divisors[known], b_variance=variances[known])
    table["effect"] = table["slope"] / table["b"]
    return table


# --- the nested model


def _fit_generation(generation: str, rows: pd.DataFrame) -> tuple[NestedModelFit | None, pd.DataFrame]:
    """Fit the model that the design allows and read the components off it; no fit with a single sensor."""
    module = pd.factorize(rows["module"], sort=True)[0].astype(np.int64)
    sensor = np.asarray(rows.groupby(SENSOR_KEYS, sort=True).ngroup(), dtype=np.int64)
    modules, sensors = len(np.unique(module)), len(np.unique(sensor))
    if sensors < 2 or len(rows) < 4:
        return None, _lonely_mean(generation, rows)
    columns = _columns(rows)
    _check_scatter(rows, columns, sensor)
    terms = _terms(rows, module, sensor, columns)
    if not terms:
        return None, _lonely_mean(generation, rows)
    names = ("error", "change")[: columns.shape[1]]
    levels = (("module", module), ("sensor", sensor))
    response = rows["effect"].to_numpy(float)
    scale = float(np.std(response)) or 1.0
    fit = fit_nested_model(NestedModel(response / scale, columns, names, levels, terms))
    frame = _component_frame(generation, fit, scale, {"module": modules, "sensor": sensors}, len(rows))
    return fit, _with_tests(frame, rows)


def _check_scatter(rows: pd.DataFrame, columns: FloatArray, sensor: IntArray) -> None:
    """Refuse sweeps that follow their sensor's line to the last digit: no likelihood is bounded then."""
    effect = rows["effect"].to_numpy(float)
    several = [sensor == code for code in np.flatnonzero(np.bincount(sensor) > columns.shape[1])]
    rests = [
        effect[own] - columns[own] @ np.linalg.lstsq(columns[own], effect[own], rcond=None)[0]
        for own in several
    ]
    if several and np.linalg.norm(np.concatenate(rests)) <= 1e-8 * np.linalg.norm(effect):
        raise ValueError("the sweeps of a sensor do not scatter at all")


def _columns(rows: pd.DataFrame) -> FloatArray:
    """Ones, and x from the middle of the lengths where there are two or more and all are known."""
    x = rows["x"].to_numpy(float)
    if distinct_lengths(x) < 2:
        return np.ones((len(x), 1))
    return design_of(x - (x.min() + x.max()) / 2.0, 2)


def _terms(
    rows: pd.DataFrame, module: IntArray, sensor: IntArray, columns: FloatArray
) -> tuple[RandomTerm, ...]:
    """Module and sensor lines as far as the sweeps carry them, and runs that hold several sweeps."""
    sweeps_each = np.bincount(sensor)
    terms = []
    if len(np.unique(module)) > 1 and len(np.unique(sensor)) > len(np.unique(module)):
        terms.append(
            RandomTerm("module", "module", columns if len(np.unique(module)) > 3 else columns[:, :1])
        )
    if np.median(sweeps_each) >= 2:
        whole = np.median(sweeps_each) > columns.shape[1]
        terms.append(RandomTerm("sensor", "sensor", columns if whole else columns[:, :1]))
    trial = pd.factorize(rows["trial"].astype(str) + "|" + rows["repetition"].astype(str))[0].astype(np.int64)
    shared = _shares_runs(rows)
    runs, held = len(np.unique(trial)), len(np.unique(module)) if shared else len(np.unique(sensor))
    if held < runs < len(rows):
        level = "module" if shared else "sensor"
        terms.append(RandomTerm("run", level, columns[:, :1], trial))
    return tuple(terms)


def _component_frame(
    generation: str, fit: NestedModelFit, scale: float, units: dict[str, int], sweeps: int
) -> pd.DataFrame:
    rows = [_mean_row(generation, fit, scale, number) for number in range(len(fit.coefficients))]
    freedoms = {"module": units["module"] - 1, "sensor": units["sensor"] - units["module"]}
    spent = len(fit.coefficients) + sum(freedoms.values())
    requests = [
        (term.name, np.eye(term.columns.shape[1])[k])
        for term in fit.model.terms
        for k in range(term.columns.shape[1])
    ]
    found = profile_intervals(fit, [*requests, ("residual", (1.0,))])
    for (name, direction), interval in zip([*requests, ("residual", np.ones(1))], found, strict=True):
        what = "change" if len(direction) > 1 and direction[1] else "error"
        freedom = freedoms.get(name, max(sweeps - spent, 1))
        called = "sweep" if name == "residual" else name
        if name == "sensor" and units["sensor"] == units["module"]:
            called, freedom = BOTH, units["sensor"] - 1
        rows.append(_spread_row(generation, called, what, interval, scale, freedom))
    together = [name for name in ("module", "sensor") if name in [t.name for t in fit.model.terms]]
    if len(together) == 2:
        parts = {str(n): np.eye(fit.model.term(n).columns.shape[1])[0] for n in together}
        freedom = freedoms["module"] + freedoms["sensor"]
        both = profile_total(fit, parts)
        rows.append(_spread_row(generation, BOTH, "error", both, scale, freedom))
    return pd.DataFrame(rows, columns=list(SPREAD_COLUMNS))


def _mean_row(generation: str, fit: NestedModelFit, scale: float, number: int) -> dict[str, object]:
    contrast = np.eye(len(fit.coefficients))[number]
    variance, freedom = satterthwaite(fit, contrast)
    reach = float(stats.t.ppf(0.975, freedom)) * math.sqrt(max(variance, 0.0)) * scale
    value = float(fit.coefficients[number]) * scale
    interval = Interval(value, value - reach, value + reach)
    return _spread_row(generation, "mean", fit.model.fixed_names[number], interval, 1.0, freedom, "")


def _spread_row(
    generation: str,
    component: str,
    what: str,
    interval: Interval,
    scale: float,
    freedom: float,
    label: str | None = None,
) -> dict[str, object]:
    said = label_of(int(freedom)) if label is None else label
    if label is None and interval.low <= 0.0 and said not in ("not identified",):
        said = "not distinguishable from zero"
    return {
        "generation": generation,
        "component": component,
        "what": what,
        "estimate": interval.estimate * scale,
        "low": interval.low * scale,
        "high": interval.high * scale,
        "degrees_of_freedom": freedom,
        "label": said,
        "test": "",
        "p": math.nan,
        "p_adjusted": math.nan,
    }


def _with_tests(frame: pd.DataFrame, rows: pd.DataFrame) -> pd.DataFrame:
    """Test module and sensor, Holm's correction over both."""
    found = {name: test for name, test in unit_tests(rows).items() if math.isfinite(test.p)}
    if not found:
        return frame
    adjusted = holm_adjusted([test.p for test in found.values()])
    for (name, test), p in zip(found.items(), adjusted, strict=True):
        own = (frame["component"] == name) & (frame["what"] == "error")
        frame.loc[own, "test"] = f"F of means, {test.freedom[0]:.0f} and {test.freedom[1]:.0f}"
        frame.loc[own, "p"] = test.p
        frame.loc[own, "p_adjusted"] = float(p)
    return frame


def unit_tests(rows: pd.DataFrame) -> dict[str, MeansTest]:
    """Test that the modules, and the sensors of a module, are alike in the effect of the influence.

    Parameters
    ----------
    rows
        Sweeps of one generation with ``effect``, and the slope ``b`` with ``b_variance``. A sensor's mean is
        that over its runs; its error the scatter of the runs' means (or of the sweeps about the change with
        x, where it has one run), with that of the slope that all its sweeps are divided by.

    Returns
    -------
    dict
        ``module`` and ``sensor``; :data:`BOTH` alone where every module has one sensor. Where sensors share
        runs, modules must also differ by more than runs do.
    """
    table = rows.assign(level=_without_change(rows))
    runs = table.groupby([*SENSOR_KEYS, "run", "trial"], sort=True)["level"].mean()
    by_run = bool((runs.groupby(level=[0, 1, 2]).size() > 1).any())
    cells = (runs if by_run else table.set_index(list(SENSOR_KEYS))["level"]).groupby(level=[0, 1, 2])
    means, counts = cells.mean(), cells.size().to_numpy(float)
    columns = 1 if by_run or distinct_lengths(rows["x"].to_numpy(float)) < 2 else 2
    freedom = float((counts - 1).sum()) - (columns - 1)
    spare = float(((counts - 1) * cells.var(ddof=1).fillna(0.0).to_numpy(float)).sum())
    error = spare / freedom / counts if freedom > 0 else np.full(len(counts), math.nan)
    shared = (table["level"] / table["b"]) ** 2 * table["b_variance"]
    error = error + shared.groupby([table[key] for key in SENSOR_KEYS]).mean().to_numpy(float)
    modules = pd.factorize(means.index.get_level_values("module"), sort=True)[0].astype(np.int64)
    values = means.to_numpy(float)
    if len(np.unique(modules)) == len(values):  # one sensor a module: the two are not told apart
        together = test_members(values, np.zeros(len(values), dtype=np.int64), error, freedom)
        return {BOTH: together}
    found = {"module": test_groups(values, modules), "sensor": test_members(values, modules, error, freedom)}
    if _shares_runs(rows):
        by_module = runs.groupby(level=["module", "trial"]).mean()
        codes = pd.factorize(by_module.index.get_level_values("module"), sort=True)[0].astype(np.int64)
        harder = test_groups(by_module.to_numpy(float), codes)
        found["module"] = max(found["module"], harder, key=lambda test: (math.isfinite(test.p), test.p))
    return found


def _shares_runs(rows: pd.DataFrame) -> bool:
    return bool(rows.groupby("trial")["sensor"].nunique().max() > 1)


def _without_change(rows: pd.DataFrame) -> FloatArray:
    """Effects less the mean change with x, so that sweeps at several lengths are alike."""
    x, effect = rows["x"].to_numpy(float), rows["effect"].to_numpy(float)
    if distinct_lengths(x) < 2:
        return effect
    design = design_of(x - (x.min() + x.max()) / 2.0, 2)
    return np.asarray(effect - design[:, 1] * np.linalg.lstsq(design, effect, rcond=None)[0][1])


def _lonely_mean(generation: str, rows: pd.DataFrame) -> pd.DataFrame:
    """The mean effect over sensors where there is nothing to tell units apart by."""
    means = rows.groupby(SENSOR_KEYS)["effect"].mean().to_numpy(float)
    value, freedom = float(means.mean()) if len(means) else math.nan, len(means) - 1.0
    reach = math.nan
    if freedom > 0:
        reach = float(stats.t.ppf(0.975, freedom) * means.std(ddof=1) / math.sqrt(len(means)))
    interval = Interval(value, value - reach, value + reach)
    row = _spread_row(generation, "mean", "error", interval, 1.0, max(freedom, 0.0), "")
    return pd.DataFrame([row], columns=list(SPREAD_COLUMNS))


# --- corrections tried


def _serving(generation: str, rows: pd.DataFrame, points: pd.DataFrame) -> pd.DataFrame:
    """What remains of the influence with every correction, each sensor left out of what corrects it."""
    predicted = {
        "none": np.zeros(len(rows)),
        "generation": _from_others(rows, lambda other, own: other["module"] != own["module"]),
        "position": _from_others(
            rows,
            lambda other, own: (other["module"] != own["module"]) & (other["position"] == own["position"]),
        ),
        "module": _from_others(
            rows, lambda other, own: (other["module"] == own["module"]) & (other["sensor"] != own["sensor"])
        ),
        "sensor": _from_own(rows),
    }
    parts = _points_of(rows, points)
    made = [_remaining(generation, name, parts, slopes) for name, slopes in predicted.items()]
    table = pd.DataFrame([row for row in made if row is not None], columns=list(SERVING_COLUMNS))
    without = table.loc[table["correction"] == "none", "sd"]
    return table.assign(factor=table["sd"] / float(without.iloc[0])) if len(without) else table


def _from_own(rows: pd.DataFrame) -> FloatArray:
    """Slopes of every sensor's sweeps as its own other sweeps predict them."""
    predicted = np.full(len(rows), np.nan)
    columns = columns_of(rows, SWEEP_SET_COLUMNS)
    for _, places in groups_by(rows, SENSOR_KEYS):
        sets = sweep_set(at(columns, places), 0.0)
        predicted[places] = left_out_slopes(sets.x, sets.slope, sets.run)[0]
    return predicted


Codes = dict[str, IntArray]
"""Whose each sweep is, as numbers: module, position, sensor."""


def _from_others(rows: pd.DataFrame, chosen: Callable[[Codes, dict[str, int]], BoolArray]) -> FloatArray:
    """Slopes of every sensor's sweeps as the effects of the *chosen* others predict them, sensors alike."""
    codes = {name: pd.factorize(rows[name])[0].astype(np.int64) for name in ("module", "position", "sensor")}
    x, effect, b = (rows[name].to_numpy(float) for name in ("x", "effect", "b"))
    predicted = np.full(len(rows), np.nan)
    for _, own in groups_by(rows, SENSOR_KEYS):
        others = chosen(codes, {name: int(code[own[0]]) for name, code in codes.items()})
        if not others.any():
            continue
        two = distinct_lengths(x[others]) > 1 and not np.isnan(x[own]).any()
        design = design_of(x[others], 2 if two else 1)
        theta = np.linalg.lstsq(design, effect[others], rcond=None)[0]
        predicted[own] = design_of(x[own], 2 if two else 1) @ theta * b[own]
    return predicted


@dataclass(frozen=True)
class _SensorPoints:
    """The points of one sensor's sweeps.

    Attributes
    ----------
    module, b
        Its module, and the slope that turns its signals into x.
    places
        Shape (sweeps,): places of its sweeps among those of its generation.
    sweep
        Shape (points,): place among its sweeps of the one that each point is of.
    influence, signal
        Shape (points,).
    """

    module: str
    b: float
    places: IntArray
    sweep: IntArray
    influence: FloatArray
    signal: FloatArray

    def left_by(self, slopes: FloatArray) -> float:
        """Return the SD as x that is left by *slopes*, (sweeps,); sweeps of which it is NaN are left out."""
        known = np.isfinite(slopes)
        chosen = known[self.sweep]
        number = (np.cumsum(known) - 1)[self.sweep[chosen]]
        left = spread_about_sweeps(self.influence[chosen], self.signal[chosen], number, slopes[known])
        return left / self.b


def _points_of(rows: pd.DataFrame, points: pd.DataFrame) -> list[_SensorPoints]:
    """The points of every sensor's sweeps, found once for all corrections."""
    of_sweeps = columns_of(rows, ("module", "b"))
    number, values = points["number"].to_numpy(), columns_of(points, ("influence", "signal"))
    place = rows.index.get_indexer(pd.Index(number))
    sensor = np.append(np.asarray(rows.groupby(SENSOR_KEYS, sort=True).ngroup(), dtype=np.int64), -1)
    of_points = places_by(sensor[place])
    found = []
    for (_, places), own in zip(groups_by(rows, SENSOR_KEYS), of_points, strict=True):
        signals = at(values, own)
        found.append(
            _SensorPoints(
                str(of_sweeps["module"][places[0]]),
                float(of_sweeps["b"][places[0]]),
                places,
                np.searchsorted(places, place[own]),
                signals["influence"].astype(np.float64),
                signals["signal"].astype(np.float64),
            )
        )
    return found


def _remaining(
    generation: str, correction: str, parts: list[_SensorPoints], slopes: FloatArray
) -> dict[str, object] | None:
    """SD of what is left over all sensors that the correction reaches, with limits by modules."""
    reached = [(part, slopes[part.places]) for part in parts]
    squares = [(part.module, part.left_by(own) ** 2) for part, own in reached if np.isfinite(own).any()]
    if not squares:
        return None
    frame = pd.DataFrame(squares, columns=["module", "square"])
    means = frame.groupby("module")["square"].mean().to_numpy(float)
    low, high = math.nan, math.nan
    if len(means) > 1:
        reach = float(stats.t.ppf(0.975, len(means) - 1) * means.std(ddof=1) / math.sqrt(len(means)))
        low, high = math.sqrt(max(means.mean() - reach, 0.0)), math.sqrt(means.mean() + reach)
    sd = math.sqrt(float(means.mean()))
    return {
        "generation": generation,
        "correction": correction,
        "sensors": len(frame),
        "modules": len(means),
        "sd": sd,
        "low": low,
        "high": high,
        "factor": math.nan,
    }


def _answer(components: pd.DataFrame, serving: pd.DataFrame) -> str:
    """``no`` where sensors or modules differ beyond their sweeps; ``yes`` where not and one serves."""
    tested = components.dropna(subset=["p_adjusted"])
    if tested.empty:
        return "not decided"
    if bool((tested["p_adjusted"] < SAME).any()):
        return "no"
    kept = serving.set_index("correction")["sd"]
    as_good = {"generation", "sensor"} <= set(kept.index) and kept["generation"] <= 1.1 * kept["sensor"]
    return "yes" if as_good else "not decided"
