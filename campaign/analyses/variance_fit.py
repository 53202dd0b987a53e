"""One nested fit and everything that is read off it: covariances, mean line, intervals, residuals."""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.analyses.variance_model import VarianceModel
from campaign.methods.identifiability import VERY_WEAK, WEAK, Component
from campaign.methods.nested_model import (
    NestedModelFit,
    RandomEffects,
    conditional_residuals,
    fit_nested_model,
    marginal_residuals,
    profile_intervals,
    random_effects,
)
from campaign.methods.variance_ratios import VarianceInterval, sum_of

FloatArray = npt.NDArray[np.float64]

LINES = ("batch", "module", "mounting", "run", "sensor", "session", "repetition")
"""Components whose effect may be a line; the others are single values."""

PLACES = ("zero", "mid", "full")
"""Where components are stated, in order."""

EVERYWHERE = "everywhere"
"""Place of a component that is the same along the range."""

NAN = float("nan")


@dataclass(frozen=True)
class GenerationFit:
    """The nested fit of one generation, or of all pooled.

    Attributes
    ----------
    model
        What was fitted, and to which readings.
    fit
        The engine's fit, with the evidence of its own computation.
    mean_intercept, mean_slope
        The mean line β0 + β1 x: the least-squares line through the fitted means, weighted by their counts, in
        units of the response (and per unit of x).
    line_weights
        Shape (2, coefficients): the mean line as a linear function of the fixed coefficients.
    places
        ``zero``, ``mid``, ``full`` → x.
    covariances
        Term → covariance of (intercept, slope) in x, or of the single value, in units of the response
        squared.
    residual_variance
        Variance of a reading about everything else.
    intervals
        (component, ``zero``/``mid``/``full``/``intercept``/``slope``) → estimate and 95 % limits of its
        variance there; the intercept's is at x = 0, which is ``zero`` wherever zero was measured.
    effects
        Term → predicted effects of its units, with the covariances of their errors.
    conditional, marginal
        Shape (readings,): residuals about the fitted effects, and about the fixed part alone.
    """

    model: VarianceModel
    fit: NestedModelFit
    mean_intercept: float
    mean_slope: float
    line_weights: FloatArray
    places: Mapping[str, float]
    covariances: Mapping[str, FloatArray]
    residual_variance: float
    intervals: Mapping[tuple[str, str], VarianceInterval]
    effects: Mapping[str, RandomEffects]
    conditional: FloatArray
    marginal: FloatArray

    @property
    def generation(self) -> str:
        """Name of the generation, or ``"all"``."""
        return self.model.generation

    @property
    def by_profile(self) -> bool:
        """Whether the estimates are REML's and carry profile intervals."""
        return self.fit.method == "REML"

    @property
    def components(self) -> tuple[Component, ...]:
        """The components that are in the model, the residual last."""
        return tuple(c for c in self.model.components if c.enters)

    def variance_at(self, name: str, place: str) -> VarianceInterval:
        """Return the variance of component *name* at *place*, in units of the response squared."""
        return self.intervals[name, place]

    def total_at(self, place: str) -> VarianceInterval:
        """Return the sum of all components at *place*."""
        return sum_of([self.intervals[c.name, place] for c in self.components])

    def strain_of(self, signal: float) -> float:
        """Return the strain equivalent of a difference of the response."""
        return signal / abs(self.mean_slope) if self.mean_slope else float("nan")


def fit_generation(
    model: VarianceModel, places: Mapping[str, float], *, limits_at: Collection[str]
) -> GenerationFit:
    """Fit *model* and read off everything that analyses need.

    Parameters
    ----------
    model
        What to fit.
    places
        ``zero``, ``mid``, ``full`` → x.
    limits_at
        Of these places, and ``slope``, the ones whose limits are wanted: profiles cost more than the fit. The
        others have estimates with NaN for limits.

    Raises
    ------
    ValueError
        The readings cannot be fitted at all (fewer readings than coefficients, say).
    """
    fit = fit_nested_model(model.model)
    weights = _line_weights(model)
    line = weights @ fit.coefficients
    covariances = {name: _in_x(model, fit.covariances[name]) for name in model.terms}
    effects = random_effects(fit)
    return GenerationFit(
        model=model,
        fit=fit,
        mean_intercept=float(line[0]),
        mean_slope=float(line[1]),
        line_weights=weights,
        places=dict(places),
        covariances=covariances,
        residual_variance=float(fit.residual_variance),
        intervals=_intervals(model, fit, places, limits_at),
        effects=effects,
        conditional=conditional_residuals(fit, effects),
        marginal=marginal_residuals(fit),
    )


def _line_weights(model: VarianceModel) -> FloatArray:
    """The least-squares line through the fitted fixed part as weights on its coefficients, shape (2, p)."""
    x = model.readings["x"].to_numpy(float)
    if np.ptp(x) == 0:
        mean = model.fixed.columns.mean(axis=0)
        return np.vstack([mean, np.zeros_like(mean)])
    z = (x - model.centre) / model.scale
    line = np.linalg.lstsq(np.column_stack([np.ones_like(z), z]), model.fixed.columns, rcond=None)[0]
    slope = line[1] / model.scale
    return np.vstack([line[0] - slope * model.centre, slope])


def _in_x(model: VarianceModel, covariance: FloatArray) -> FloatArray:
    """Covariance of (intercept, slope) in x from that in z = (x − centre)/scale."""
    if len(covariance) == 1:
        return np.asarray(covariance)
    turn = np.array([[1.0, -model.centre / model.scale], [0.0, 1.0 / model.scale]])
    return np.asarray(turn @ covariance @ turn.T)


def _requests(model: VarianceModel, places: Mapping[str, float]) -> Iterator[tuple[str, str, FloatArray]]:
    """(component, place, weights on its effect) of everything that is stated, each only once."""
    for component in model.components:
        if not component.enters:
            continue
        if component.name in LINES and component.line:
            for place, x in {**places, **_intercept_place(places)}.items():
                yield component.name, place, model.direction(component.name, x)
            yield component.name, "slope", np.array([0.0, 1.0 / model.scale])
        else:
            half_a_loop = component.name == "sensor_by_direction"
            yield component.name, EVERYWHERE, np.array([0.5 if half_a_loop else 1.0])


def _intercept_place(places: Mapping[str, float]) -> dict[str, float]:
    """Zero of x as a place of its own where zero was not measured."""
    return {} if places["zero"] == 0.0 else {"intercept": 0.0}


def _intervals(
    model: VarianceModel, fit: NestedModelFit, places: Mapping[str, float], limits_at: Collection[str]
) -> dict[tuple[str, str], VarianceInterval]:
    """Every component's variance at every place, with limits where wanted and where REML converged."""
    requests = list(_requests(model, places))
    stated = (*limits_at, EVERYWHERE) if limits_at and fit.method == "REML" else ()
    single = {c.name for c in model.components if c.enters and has_upper_limit_only(c)}
    wanted = [r for r in requests if r[1] in stated and (r[0] not in single or r[1] in ("mid", EVERYWHERE))]
    found = profile_intervals(fit, [(name, weights) for name, _, weights in wanted])
    limits = {(name, place): i for (name, place, _), i in zip(wanted, found, strict=True)}
    intervals = {}
    for name, place, weights in requests:
        estimate = _variance(fit, name, weights)
        limit = limits.get((name, place))
        low, high = (NAN, NAN) if limit is None else (limit.low**2, limit.high**2)
        for one in PLACES if place == EVERYWHERE else (place,):
            intervals[name, one] = VarianceInterval(estimate, low, high)
        if place == "zero" and places["zero"] == 0.0:
            intervals[name, "intercept"] = intervals[name, "zero"]
    return intervals


def _variance(fit: NestedModelFit, name: str, weights: FloatArray) -> float:
    """Variance of weights'·effect, or of the residual."""
    covariance = np.array([[fit.residual_variance]]) if name == "residual" else fit.covariances[name]
    return max(float(weights @ covariance @ weights), 0.0)


def choose_places(x: FloatArray, rated: float, *, has_zero: bool) -> dict[str, float]:
    """Return where components are stated.

    Parameters
    ----------
    x
        Reference values of all readings.
    rated
        Rated full scale in units of x; NaN where none is given.
    has_zero
        Whether zero of x is a state of the sensor (strain and elongation, not a length).

    Returns
    -------
    dict
        ``zero``: 0 where the readings reach it to 2 % of their range, else the lowest value; ``full``: the
        rated full scale where the readings reach it to 2 %, else the highest value; ``mid``: halfway between.
    """
    low, high = float(np.min(x)), float(np.max(x))
    near = 0.02 * (high - low)
    zero = 0.0 if has_zero and low - near <= 0.0 <= high + near else low
    full = rated if np.isfinite(rated) and rated <= high + near and rated > zero else high
    return {"zero": zero, "mid": (zero + full) / 2, "full": full}


def is_withheld(component: Component) -> bool:
    """Return whether only limits are stated of a component: fewer than four degrees of freedom."""
    return component.degrees_of_freedom < WEAK


def has_upper_limit_only(component: Component) -> bool:
    """Return whether only an upper limit is stated of a component: a single degree of freedom."""
    return component.degrees_of_freedom < VERY_WEAK


def session_zeros(readings: pd.DataFrame, level: float, run_number: npt.NDArray[np.int64]) -> pd.DataFrame:
    """Return the zero signal of every sensor's session and which reading it is.

    Parameters
    ----------
    readings
        Used readings.
    level
        Value of x that counts as zero.
    run_number
        Number of every reading's run since mounting, from 1.

    Returns
    -------
    pandas.DataFrame
        Index of *readings*: ``zero_signal`` (first signal of the session at that level, NaN where it has
        none) and ``is_zero`` (whether the reading itself is that signal).
    """
    keys = ["generation", "module", "sensor", "session"]
    x = readings["x"].to_numpy(float)
    at_zero = np.abs(x - level) <= 0.02 * float(np.ptp(x))
    ordered = readings.assign(run_number=run_number)[at_zero].sort_values(
        [*keys, "run_number", "order"], kind="stable"
    )
    first = ordered.drop_duplicates(keys)
    zeros = readings[keys].merge(
        first[[*keys, "signal"]].rename(columns={"signal": "zero_signal"}), on=keys, how="left"
    )
    return pd.DataFrame(
        {"zero_signal": zeros["zero_signal"].to_numpy(float), "is_zero": readings.index.isin(first.index)},
        index=readings.index,
    )
