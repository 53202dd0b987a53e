"""Is the model right? What it leaves over of every reading, and whether sensors differ as it assumes."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

from campaign.analyses.variance import Variance
from campaign.analyses.variance_fit import GenerationFit
from campaign.methods.holm import holm_adjusted
from campaign.notices import Notice

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration

FloatArray = npt.NDArray[np.float64]

TABLE_COLUMNS = (
    *("generation", "module", "sensor", "position", "session", "repetition", "trial", "order", "direction"),
    *("x", "nominal_level", "time_s", "conditional", "marginal", "standardised"),
    *("conditional_strain", "marginal_strain"),
)
QUANTILE_COLUMNS = ("generation", "module", "sensor", "trial", "order", "theoretical", "observed")
LEVEL_COLUMNS = (
    *("generation", "nominal_level", "count", "low", "first_quartile", "median", "third_quartile", "high"),
)
VARIANCE_COLUMNS = ("generation", "nominal_level", "count", "sd", "strain_sd", "p", "ratio")
AUTOCORRELATION_COLUMNS = ("generation", "module", "sensor", "session", "repetition", "trial", "lag_one")
EFFECT_COLUMNS = ("generation", "module", "sensor", "term", "theoretical", "observed")

FEWEST_SENSORS = 8
"""Fewer sensor effects than this are not judged for bending."""

BEND_SIGNIFICANCE = 0.05
"""Sensor effects bend where Shapiro and Wilk's p, Holm-corrected over generations, lies below this."""


@dataclass(frozen=True)
class Residuals:
    """What the model leaves over.

    Attributes
    ----------
    table
        One row a fitted reading, columns of :data:`TABLE_COLUMNS`: ``conditional`` (about the fitted effects)
        and ``marginal`` (about the fixed part) in units of the signal, the same as strain, and
        ``standardised``, the conditional one divided by the root mean square of its generation. The index is
        that of the readings.
    quantiles
        Normal quantiles of the standardised residuals, columns of :data:`QUANTILE_COLUMNS`.
    by_level
        Extremes, quartiles and median of the conditional residuals as strain, columns of
        :data:`LEVEL_COLUMNS`.
    autocorrelation
        Lag-1 autocorrelation of the conditional residuals of every run, columns of
        :data:`AUTOCORRELATION_COLUMNS`.
    pooled_autocorrelation
        generation, autocorrelation, standard_error: of the noise inside runs, corrected for the lines taken
        off.
    variance_by_level
        SD of the noise inside runs by level, columns of :data:`VARIANCE_COLUMNS`; ``p`` and ``ratio``
        (largest over smallest SD) are Brown and Forsythe's test of the generation.
    sensor_effect_quantiles
        Normal quantiles of the sensors' predicted effects, columns of :data:`EFFECT_COLUMNS`.
    sensor_effect_tests
        generation, term, sensors, statistic, p, p_adjusted (Shapiro–Wilk, Holm).
    bends
        Whether some generation's sensor effects are not normal: intervals of new sensors then cover less than
        they say.
    notices
        What a reader must know.
    """

    table: pd.DataFrame
    quantiles: pd.DataFrame
    by_level: pd.DataFrame
    autocorrelation: pd.DataFrame
    pooled_autocorrelation: pd.DataFrame
    variance_by_level: pd.DataFrame
    sensor_effect_quantiles: pd.DataFrame
    sensor_effect_tests: pd.DataFrame
    bends: bool
    notices: tuple[Notice, ...] = ()


def analyse_residuals(calibration: Calibration, variance: Variance) -> Residuals:
    """Look at what the fits of *variance* leave over.

    Parameters
    ----------
    calibration
        Not read: residuals are about the nested fits; kept so that all analyses are called alike.
    variance
        The fits of single generations are looked at, not the pooled one.

    Returns
    -------
    Residuals
        Empty tables where nothing was fitted.
    """
    del calibration
    fits = variance.by_generation
    table = _joined([_rows_of(fit) for fit in fits], TABLE_COLUMNS)
    tests = _effect_tests(variance.effects)
    bends = bool((tests["p_adjusted"] < BEND_SIGNIFICANCE).any())
    return Residuals(
        table=table,
        quantiles=_quantiles(table),
        by_level=_by_level(table),
        autocorrelation=_autocorrelation(table),
        pooled_autocorrelation=_pooled(variance),
        variance_by_level=_joined([_variance_by_level(fit, variance) for fit in fits], VARIANCE_COLUMNS),
        sensor_effect_quantiles=_effect_quantiles(variance.effects),
        sensor_effect_tests=tests,
        bends=bends,
        notices=_notices(tests),
    )


def _joined(parts: list[pd.DataFrame], columns: tuple[str, ...]) -> pd.DataFrame:
    kept = [part for part in parts if len(part)]
    return pd.concat(kept)[list(columns)] if kept else pd.DataFrame(columns=list(columns))


def _rows_of(fit: GenerationFit) -> pd.DataFrame:
    size = float(np.sqrt(np.mean(fit.conditional**2)))
    slope = abs(fit.mean_slope) if fit.mean_slope else np.nan
    return fit.model.readings.assign(
        conditional=fit.conditional,
        marginal=fit.marginal,
        standardised=fit.conditional / size if size > 0 else 0.0,
        conditional_strain=fit.conditional / slope,
        marginal_strain=fit.marginal / slope,
    )


def _normal_quantiles(count: int) -> FloatArray:
    """Expected normal order statistics, (i − 3/8)/(n + 1/4) (Blom 1958)."""
    return np.asarray(stats.norm.ppf((np.arange(1, count + 1) - 0.375) / (count + 0.25)))


def _quantiles(table: pd.DataFrame) -> pd.DataFrame:
    ordered = table.sort_values("standardised", kind="stable")
    ordered = ordered.assign(theoretical=_normal_quantiles(len(ordered)), observed=ordered["standardised"])
    return ordered[list(QUANTILE_COLUMNS)]


def _by_level(table: pd.DataFrame) -> pd.DataFrame:
    known = table.dropna(subset=["nominal_level"])
    if known.empty:
        return pd.DataFrame(columns=list(LEVEL_COLUMNS))
    grouped = known.groupby(["generation", "nominal_level"], sort=True)["conditional_strain"]
    frame = pd.DataFrame(
        {
            "count": grouped.size(),
            "low": grouped.min(),
            "first_quartile": grouped.quantile(0.25),
            "median": grouped.median(),
            "third_quartile": grouped.quantile(0.75),
            "high": grouped.max(),
        }
    )
    return frame.reset_index()[list(LEVEL_COLUMNS)]


def _autocorrelation(table: pd.DataFrame) -> pd.DataFrame:
    """Lag-1 autocorrelation of each run, Σ eᵢ eᵢ₊₁ / Σ eᵢ²; runs of fewer than four readings are left out."""
    keys = list(AUTOCORRELATION_COLUMNS[:-1])
    if table.empty:
        return pd.DataFrame(columns=list(AUTOCORRELATION_COLUMNS))
    ordered = table.sort_values([*keys, "order"], kind="stable")
    run = ordered.groupby(keys, sort=False).ngroup().to_numpy()
    value = ordered["conditional"].to_numpy(float)
    product = np.append(np.where(run[1:] == run[:-1], value[1:] * value[:-1], 0.0), 0.0)
    sums = ordered[keys].assign(product=product, square=value**2).groupby(keys, sort=True)
    found = sums[["product", "square"]].sum().assign(count=sums.size()).reset_index()
    found = found[(found["count"] >= 4) & (found["square"] > 0)]
    return found.assign(lag_one=found["product"] / found["square"])[list(AUTOCORRELATION_COLUMNS)]


def _pooled(variance: Variance) -> pd.DataFrame:
    rows = [
        (fit.generation, check.autocorrelation, check.autocorrelation_error)
        for fit in variance.by_generation
        if (check := variance.noise.get(fit.generation)) is not None
    ]
    return pd.DataFrame(rows, columns=["generation", "autocorrelation", "standard_error"])


def _variance_by_level(fit: GenerationFit, variance: Variance) -> pd.DataFrame:
    """SD of the noise inside runs at each nominal level; none where levels are not common."""
    check = variance.noise.get(fit.generation)
    levels = fit.model.readings["nominal_level"]
    if check is None or levels.isna().any():
        return pd.DataFrame(columns=list(VARIANCE_COLUMNS))
    names = levels.groupby(fit.model.units.level).first()
    frame = check.by_level
    return pd.DataFrame(
        {
            "generation": fit.generation,
            "nominal_level": names.loc[frame["level"]].to_numpy(float),
            "count": frame["count"].to_numpy(),
            "sd": frame["sd"].to_numpy(float),
            "strain_sd": frame["sd"].to_numpy(float) / abs(fit.mean_slope) if fit.mean_slope else np.nan,
            "p": check.level_p,
            "ratio": check.level_ratio,
        }
    )


def _sensor_effects(effects: pd.DataFrame) -> pd.DataFrame:
    """Predicted effects of sensors with their spread taken off, strain at mid first."""
    rows = effects[effects["level"] == "sensor"]
    order = {"strain at mid": 0, "intercept": 1, "slope": 2}
    rows = rows.assign(place=rows["term"].map(order)).sort_values(
        ["place", "generation", "module", "sensor"], kind="stable"
    )
    spread = rows.groupby(["generation", "term"])["estimate"].transform(lambda e: np.sqrt(np.mean(e**2)))
    rows = rows.assign(observed=rows["estimate"] / spread)
    return rows[spread > 0]


def _effect_quantiles(effects: pd.DataFrame) -> pd.DataFrame:
    rows = _sensor_effects(effects)
    parts = []
    for _, part in rows.groupby("place", sort=True):
        ordered = part.sort_values("observed", kind="stable")
        parts.append(ordered.assign(theoretical=_normal_quantiles(len(ordered))))
    return _joined(parts, EFFECT_COLUMNS).reset_index(drop=True)


def _effect_tests(effects: pd.DataFrame) -> pd.DataFrame:
    """Shapiro and Wilk's test of the sensor effects at mid range, a generation (Biometrika 52 (1965) 591)."""
    columns = ["generation", "term", "sensors", "statistic", "p", "p_adjusted"]
    rows = _sensor_effects(effects)
    rows = rows[rows["term"] == "strain at mid"]
    found = []
    for name, part in rows.groupby("generation", sort=True):
        if len(part) >= FEWEST_SENSORS:
            test = stats.shapiro(part["observed"].to_numpy(float))
            found.append((name, "strain at mid", len(part), float(test.statistic), float(test.pvalue)))
    frame = pd.DataFrame(found, columns=columns[:-1])
    return frame.assign(p_adjusted=holm_adjusted(frame["p"].to_numpy(float)))


def _notices(tests: pd.DataFrame) -> tuple[Notice, ...]:
    bent = tests[tests["p_adjusted"] < BEND_SIGNIFICANCE]
    return tuple(
        Notice(
            "sensor-effects-not-normal",
            "noted",
            None,
            None,
            None,
            f"{row.generation}: sensor effects bend away from a normal sample (p = {row.p_adjusted:.2g})",
            "intervals of new sensors are shown and cover less than they say",
        )
        for row in bent.itertuples()
    )
