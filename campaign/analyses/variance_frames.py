"""Tables of the nested fits: what the Variance page and the table files show."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from itertools import combinations

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

from campaign.analyses.balanced_intervals import BalancedIntervals, balanced_intervals
from campaign.analyses.variance_fit import (
    LINES,
    PLACES,
    GenerationFit,
    has_upper_limit_only,
    is_withheld,
)
from campaign.analyses.variance_model import VarianceModel
from campaign.methods.identifiability import Component
from campaign.methods.nested_model import satterthwaite_each
from campaign.methods.variance_ratios import VarianceInterval, ratio_of, share_of, sum_of

FloatArray = npt.NDArray[np.float64]
Row = dict[str, object]

NAN = float("nan")
NORMAL_95 = float(stats.norm.ppf(0.975))

FIXED_COLUMNS = ("generation", "term", "estimate", "standard_error", "df", "low", "high", "unit")
COMPONENT_COLUMNS = (
    *("generation", "level", "term", "estimate", "low", "high", "unit", "method", "p", "test", "label"),
    "called",
)
STRAIN_COLUMNS = (
    *("generation", "level", "place", "strain_sd", "low", "high", "share", "share_low", "share_high"),
    *("label", "called", "x", "low_modified_large_sample", "high_modified_large_sample"),
)
EFFECT_COLUMNS = ("generation", "level", "module", "sensor", "term", "estimate", "low", "high", "unit")
IDENTIFIABILITY_COLUMNS = ("generation", "component", "called", "degrees_of_freedom", "label", "reason")
PRECISION_COLUMNS = ("generation", "figure", "place", "strain_sd", "low", "high", "label")
CERTIFICATE_COLUMNS = (
    *("generation", "criterion", "log_likelihood_statsmodels", "difference", "smallest_cone_eigenvalue"),
    *("evaluations", "restarts", "singular", "method"),
)
NEW_SENSOR_COLUMNS = ("generation", "what", "place", "strain_sd", "expanded", "df", "label")
COMPARISON_COLUMNS = ("generation", "first", "second", "place", "ratio", "low", "high", "differs")

ZERO = "not distinguishable from zero"
ON_NOISE = ("repetition", "sensor_by_level", "residual")
"""Components whose intervals are wrong where the noise inside runs is uneven or autocorrelated."""

LOWER_BOUND = "lower bound: the spread of modules is not estimated"
AVERAGE = "an average by level and sensor; interval withheld"


def _frame(rows: Iterable[Row], columns: tuple[str, ...]) -> pd.DataFrame:
    return pd.DataFrame(list(rows), columns=list(columns))


def fixed_effects_and_new_sensors(
    fits: Iterable[GenerationFit], unit: str, reference_unit: str
) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Return the fixed effects, and what to expect of a new sensor and of a new module.

    Both rest on Satterthwaite's degrees of freedom, for which the criterion's curvature is looked at once.

    Returns
    -------
    tuple of pandas.DataFrame
        The mean line and every fixed coefficient, columns of :data:`FIXED_COLUMNS`: positions' and branches'
        are differences. Then the predictions on the mean line, columns of :data:`NEW_SENSOR_COLUMNS`:
        ``strain_sd`` includes the variance of the mean line, ``expanded`` is its 95 % reach by Student's t.
    """
    fixed: list[Row] = []
    new: list[Row] = []
    for fit in fits:
        requests = list(_fixed_requests(fit, unit, reference_unit))
        wanted = _predictions_of(fit)
        asked: list[tuple[FloatArray, dict[str, FloatArray]]] = [(w, {}) for _, w, _ in requests]
        asked += [_prediction(fit, names, place) for _, place, names in wanted]
        found = satterthwaite_each(fit.fit, asked)
        fixed += [
            _fixed_row(fit, term, float(weights @ fit.fit.coefficients), variance, freedom, own_unit)
            for (term, weights, own_unit), (variance, freedom) in zip(requests, found, strict=False)
        ]
        new += [
            _prediction_row(fit, what, place, variance, freedom)
            for (what, place, _), (variance, freedom) in zip(wanted, found[len(requests) :], strict=True)
        ]
    return _frame(fixed, FIXED_COLUMNS), _frame(new, NEW_SENSOR_COLUMNS)


def _fixed_requests(
    fit: GenerationFit, unit: str, reference_unit: str
) -> Iterator[tuple[str, FloatArray, str]]:
    """Name, weights on the coefficients and unit of everything in the table of fixed effects."""
    per = _per(unit, reference_unit)
    yield "intercept", fit.line_weights[0], unit
    if fit.line_weights[1].any():
        yield "slope", fit.line_weights[1], per
    own = "" if fit.generation == "all" else f"{fit.generation}: "
    for k, (name, group) in enumerate(zip(fit.model.fixed.names, fit.model.fixed.groups, strict=True)):
        weights = np.zeros(len(fit.model.fixed.names))
        is_slope = group == "position" and name.endswith("slope")
        weights[k] = 1 / fit.model.scale if is_slope else 1.0
        yield name.removeprefix(own), weights, per if is_slope else unit


def _fixed_row(
    fit: GenerationFit, term: str, estimate: float, variance: float, freedom: float, unit: str
) -> Row:
    error = float(np.sqrt(variance))
    reach = float(stats.t.ppf(0.975, freedom)) * error
    return {
        "generation": fit.generation,
        "term": term,
        "estimate": estimate,
        "standard_error": error,
        "df": freedom,
        "low": estimate - reach,
        "high": estimate + reach,
        "unit": unit,
    }


def variance_components(
    fits: Iterable[GenerationFit], unit: str, reference_unit: str, tests: pd.DataFrame, uneven: set[str]
) -> pd.DataFrame:
    """Return the SDs of intercepts and slopes, and their correlation, with limits, test and label.

    Parameters
    ----------
    fits
        The fits.
    unit, reference_unit
        Units of signal and x.
    tests
        The table of tests.
    uneven
        Generations whose noise is uneven or autocorrelated: their intervals of repetition and residual are
        withheld.
    """
    rows = (
        row for fit in fits for row in _component_rows(fit, unit, reference_unit, fit.generation in uneven)
    )
    frame = _frame(rows, COMPONENT_COLUMNS)
    keys = tests.set_index(["generation", "component"]) if len(tests) else None
    for index, row in frame.iterrows():
        if keys is not None and (row["generation"], row["level"]) in keys.index:
            found = keys.loc[(row["generation"], row["level"])]
            frame.loc[index, ["p", "test"]] = [found["p"], found["test"]]
    return frame


def _component_rows(fit: GenerationFit, unit: str, reference_unit: str, uneven: bool) -> Iterator[Row]:
    per = _per(unit, reference_unit)
    for component in fit.components:
        is_line = component.name in LINES and component.line
        kinds = [("intercept", "intercept", unit), ("slope", "slope", per)] if is_line else []
        kinds = kinds or [("intercept" if component.name in LINES else "level", "mid", unit)]
        for term, place, own_unit in kinds:
            limits = fit.intervals[component.name, place]
            yield _component_row(fit, component, term, _limits(component, limits, uneven), own_unit)
        if is_line:
            yield _correlation_row(fit, component)


def _per(unit: str, reference_unit: str) -> str:
    """The unit of a slope: ``pF/mm``, ``pF/(mm/mm)``."""
    return f"{unit}/({reference_unit})" if "/" in reference_unit else f"{unit}/{reference_unit}"


def _component_row(
    fit: GenerationFit,
    component: Component,
    term: str,
    limits: tuple[float, float, float, str],
    unit: str,
) -> Row:
    estimate, low, high, label = limits
    return {
        "generation": fit.generation,
        "level": component.name,
        "term": term,
        "estimate": estimate,
        "low": low,
        "high": high,
        "unit": unit,
        "method": f"{fit.fit.method}, profile" if fit.by_profile else fit.fit.method,
        "p": NAN,
        "test": "",
        "label": label,
        "called": component.called,
    }


def _correlation_row(fit: GenerationFit, component: Component) -> Row:
    """Correlation of intercept and slope; withheld below four degrees of freedom and on the boundary."""
    covariance = fit.covariances[component.name]
    spread = float(np.sqrt(covariance[0, 0] * covariance[1, 1]))
    withheld = is_withheld(component) or spread <= 0
    value = NAN if withheld else float(covariance[0, 1]) / spread
    return _component_row(fit, component, "correlation", (value, NAN, NAN, component.label), "1")


def _limits(
    component: Component, variance: VarianceInterval, uneven: bool
) -> tuple[float, float, float, str]:
    """Estimate, limits and label of an SD as they may be stated."""
    estimate, low, high = variance.root
    label: str = component.label
    if uneven and component.name in ON_NOISE:
        return estimate, NAN, NAN, AVERAGE if component.name == "residual" else f"{label}; interval withheld"
    if has_upper_limit_only(component):
        return NAN, 0.0 if variance.known else NAN, high, label
    if low <= 1e-9 * high:
        label = ZERO
        low = 0.0
    return NAN if is_withheld(component) else estimate, low, high, label


def variance_in_strain(fits: Iterable[GenerationFit], uneven: set[str]) -> pd.DataFrame:
    """Return every component as strain-equivalent SD at zero, mid and full, with its share of the total.

    √(Σ00 + 2 Σ01 x + Σ11 x²)/|β1|; limits by profile REML, those of shares and totals joined from these. A
    share is withheld where only limits of the component are stated. Where the design is balanced, the limits
    by modified large sample stand beside those by profile; NaN elsewhere.
    """
    rows = (row for fit in fits if fit.mean_slope for row in _strain_rows(fit, fit.generation in uneven))
    return _frame(rows, STRAIN_COLUMNS)


def _strain_rows(fit: GenerationFit, uneven: bool) -> Iterator[Row]:
    profiled = fit.variance_at(fit.components[-1].name, "mid").known
    second = balanced_intervals(fit) if profiled else {}
    for place in PLACES:
        yield from _component_strain_rows(fit, place, uneven, second)
        yield _total_strain_row(fit, place, second)


def _component_strain_rows(
    fit: GenerationFit, place: str, uneven: bool, second: BalancedIntervals
) -> Iterator[Row]:
    parts = {c.name: fit.variance_at(c.name, place) for c in fit.components}
    for component in fit.components:
        limits = _limits(component, parts[component.name], uneven)
        others = [part for name, part in parts.items() if name != component.name]
        share = share_of(parts[component.name], others)
        hidden = is_withheld(component)
        yield {
            **_strain_row(fit, component.name, place, limits),
            **_second_limits(
                fit,
                limits[2],
                second.get((component.name, place)),
                only_upper=has_upper_limit_only(component),
            ),
            "share": NAN if hidden else share.estimate,
            "share_low": NAN if hidden else share.low,
            "share_high": NAN if hidden else share.high,
            "called": component.called,
        }


def _total_strain_row(fit: GenerationFit, place: str, second: BalancedIntervals) -> Row:
    complete = "module" in fit.model.terms or _is_module_and_sensor(fit)
    limits = (*fit.total_at(place).root, "" if complete else LOWER_BOUND)
    return {
        **_strain_row(fit, "total", place, limits),
        **_second_limits(fit, limits[2], second.get(("total", place))),
        "share": 1.0,
        "share_low": 1.0,
        "share_high": 1.0,
        "called": "total",
    }


def _second_limits(
    fit: GenerationFit, high: float, second: VarianceInterval | None, *, only_upper: bool = False
) -> Row:
    """The limits by modified large sample wherever a profile limit, *high*, stands."""
    low, up = (NAN, NAN) if second is None or np.isnan(high) else second.root[1:]
    return {
        "low_modified_large_sample": fit.strain_of(0.0 if only_upper and low > 0 else low),
        "high_modified_large_sample": fit.strain_of(up),
    }


def _is_module_and_sensor(fit: GenerationFit) -> bool:
    """Whether modules are in the model by way of their only sensor."""
    counts = fit.model.counts
    return counts.sensors == counts.modules and counts.modules > counts.generations


def _strain_row(fit: GenerationFit, level: str, place: str, limits: tuple[float, float, float, str]) -> Row:
    estimate, low, high, label = limits
    return {
        "generation": fit.generation,
        "level": level,
        "place": place,
        "strain_sd": fit.strain_of(estimate),
        "low": fit.strain_of(low),
        "high": fit.strain_of(high),
        "label": label,
        "x": fit.places[place],
    }


def effects(fits: Iterable[GenerationFit], unit: str, reference_unit: str) -> pd.DataFrame:
    """Return the predicted effects of modules and sensors with 95 % limits.

    Terms are ``intercept`` (x = 0), ``slope``, and ``strain at mid``: the effect at mid range over the
    slope of the mean line.
    """
    return _frame((row for fit in fits for row in _effect_rows(fit, unit, reference_unit)), EFFECT_COLUMNS)


def _effect_rows(fit: GenerationFit, unit: str, reference_unit: str) -> Iterator[Row]:
    for level in ("module", "sensor"):
        if level not in fit.effects or not fit.mean_slope:
            continue
        found = fit.effects[level]
        names = fit.model.readings.iloc[found.first_row]
        for term, weights, own_unit in _effect_terms(fit, level, unit, reference_unit):
            values = found.estimates @ weights
            reach = NORMAL_95 * np.sqrt(np.einsum("d,nde,e->n", weights, found.covariances, weights))
            for module, sensor, value, half in zip(
                names["module"], names["sensor"], values, reach, strict=True
            ):
                yield {
                    "generation": fit.generation,
                    "level": level,
                    "module": module,
                    "sensor": sensor if level == "sensor" else "",
                    "term": term,
                    "estimate": float(value),
                    "low": float(value - half),
                    "high": float(value + half),
                    "unit": own_unit,
                }


def _effect_terms(
    fit: GenerationFit, level: str, unit: str, reference_unit: str
) -> Iterator[tuple[str, FloatArray, str]]:
    """Terms of an effect, as weights on it, with their units."""
    model = fit.model
    yield "intercept", model.direction(level, 0.0), unit
    if model.component(level).line:
        yield "slope", np.array([0.0, 1.0 / model.scale]), _per(unit, reference_unit)
    yield "strain at mid", model.direction(level, fit.places["mid"]) / abs(fit.mean_slope), reference_unit


def identifiability(models: Iterable[VarianceModel], fits: Iterable[GenerationFit]) -> pd.DataFrame:
    """Return the ladder: what each design can tell apart, and what it cannot, with the reason.

    Designs that could not be fitted are there too, with what was counted before fitting.
    """
    fitted = {fit.generation: fit for fit in fits}
    rows: list[Row] = []
    for model in models:
        fit = fitted.get(model.generation)
        rows += [_ladder_row(model, component, fit) for component in model.components]
    return _frame(rows, IDENTIFIABILITY_COLUMNS)


def _ladder_row(model: VarianceModel, component: Component, fit: GenerationFit | None) -> Row:
    return {
        "generation": model.generation,
        "component": component.name,
        "called": component.called,
        "degrees_of_freedom": component.degrees_of_freedom,
        "label": component.label if fit is None else _final_label(fit, component),
        "reason": component.reason,
    }


def _final_label(fit: GenerationFit, component: Component) -> str:
    """The design's label, but for an estimate that is stated and whose lower limit is zero."""
    if not component.enters or not fit.by_profile or is_withheld(component):
        return component.label
    _, low, high = fit.variance_at(component.name, "mid").root
    return ZERO if low <= 1e-9 * high else component.label


_PRECISION = (
    ("repeatability", ("run", "repetition", "residual"), "repetition"),
    ("intermediate precision", ("mounting", "run", "session", "repetition", "residual"), "session"),
    ("sensor-to-sensor", ("sensor",), "sensor"),
    ("module-to-module", ("module",), "module"),
    ("batch-to-batch", ("batch",), "batch"),
)
"""Figure, the components it sums, and the one that the design must show for it (ISO 5725-3:1994, 3)."""


def precision(fits: Iterable[GenerationFit], uneven: set[str]) -> pd.DataFrame:
    """Return precision of measurement and variation of the product at mid range, apart.

    Repeatability is one mounting's, intermediate precision that across mountings; reproducibility is not
    estimated by one laboratory. Intervals that rest on uneven noise are withheld.
    """
    rows = (row for fit in fits if fit.mean_slope for row in _precision_rows(fit, fit.generation in uneven))
    return _frame(rows, PRECISION_COLUMNS)


def _precision_rows(fit: GenerationFit, uneven: bool) -> Iterator[Row]:
    entering = {c.name: c for c in fit.components}
    for figure, names, needed in _PRECISION:
        if needed not in entering or _hides_session(entering, figure):
            continue
        parts = [fit.variance_at(name, "mid") for name in names if name in entering]
        hidden = is_withheld(entering[needed]) and len(parts) == 1
        limits = [fit.strain_of(value) for value in sum_of(parts).root]
        withheld = uneven and "residual" in names
        yield {
            "generation": fit.generation,
            "figure": figure,
            "place": "mid",
            "strain_sd": NAN if hidden else limits[0],
            "low": NAN if withheld else limits[1],
            "high": NAN if withheld else limits[2],
            "label": _final_label(fit, entering[needed]),
        }


def _hides_session(entering: dict[str, Component], figure: str) -> bool:
    """Whether the run's component holds the mounting too, so that it is no repeatability."""
    return figure == "repeatability" and "session" in entering["repetition"].called.split(" + ")


_NEW = (("new sensor", ("batch", "module", "sensor")), ("new module", ("batch", "module")))
"""What is predicted, and the components that it draws anew."""


def _predictions_of(fit: GenerationFit) -> list[tuple[str, str, tuple[str, ...]]]:
    """What is predicted, where, and the components that it draws anew."""
    if not fit.mean_slope:
        return []
    return [(what, place, names) for what, names in _NEW if names[-1] in fit.model.terms for place in PLACES]


def _prediction_row(fit: GenerationFit, what: str, place: str, variance: float, freedom: float) -> Row:
    sd = fit.strain_of(float(np.sqrt(variance)))
    complete = "module" in fit.model.terms or _is_module_and_sensor(fit)
    return {
        "generation": fit.generation,
        "what": what,
        "place": place,
        "strain_sd": sd,
        "expanded": float(stats.t.ppf(0.975, freedom)) * sd,
        "df": freedom,
        "label": "" if complete else LOWER_BOUND,
    }


def _prediction(
    fit: GenerationFit, names: tuple[str, ...], place: str
) -> tuple[FloatArray, dict[str, FloatArray]]:
    """The mean line at a place, and the new effects there, as weights."""
    x = fit.places[place]
    parts = {name: fit.model.direction(name, x) for name in names if name in fit.model.terms}
    return fit.line_weights[0] + x * fit.line_weights[1], parts


def comparisons(fits: Iterable[GenerationFit], uneven: set[str]) -> pd.DataFrame:
    """Return the ratio of every two component SDs at mid range with limits, larger estimate first.

    ``differs`` is whether the interval excludes 1: only then may it be said that one spreads more. Components
    of which only limits are stated, or whose intervals rest on uneven noise, are not compared.
    """
    rows: list[Row] = []
    for fit in fits:
        unsound = ON_NOISE if fit.generation in uneven else ()
        stated = [c for c in fit.components if not is_withheld(c) and c.name not in unsound]
        ranked = sorted(stated, key=lambda c: -fit.variance_at(c.name, "mid").estimate)
        for first, second in combinations(ranked, 2):
            ratio = ratio_of(fit.variance_at(first.name, "mid"), fit.variance_at(second.name, "mid"))
            estimate, low, high = (float(np.sqrt(v)) for v in (ratio.estimate, ratio.low, ratio.high))
            rows.append(
                {
                    "generation": fit.generation,
                    "first": first.name,
                    "second": second.name,
                    "place": "mid",
                    "ratio": estimate,
                    "low": low,
                    "high": high,
                    "differs": low > 1.0,
                }
            )
    return _frame(rows, COMPARISON_COLUMNS)
