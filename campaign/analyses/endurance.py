"""What thousands of cycles do: zero and sensitivity against the logarithm of cycles, and who survives."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

from campaign.methods.survival import product_limit
from campaign.trials.endurance import EnduranceFeatures

SENSOR_KEYS = ["generation", "module", "sensor"]

FEWEST_POINTS = 5
"""Logged cycles that a slope per decade needs."""

LOG_COLUMNS = (
    *SENSOR_KEYS,
    "trial",
    "cycle",
    "zero_signal",
    "zero_change_percent",
    "sensitivity",
    "sensitivity_change_percent",
    "unit",
)
SENSOR_COLUMNS = (
    *SENSOR_KEYS,
    "trial",
    "last_working_cycle",
    "failed_at_cycle",
    "logged_cycles",
    "zero_percent_per_decade",
    "zero_low",
    "zero_high",
    "sensitivity_percent_per_decade",
    "sensitivity_low",
    "sensitivity_high",
)
SURVIVAL_COLUMNS = ("generation", "cycle", "at_risk", "failed", "survival", "low", "high")


@dataclass(frozen=True)
class Endurance:
    """Endurance of a campaign.

    Attributes
    ----------
    log
        One row a sensor and logged cycle up to its failure, columns :data:`LOG_COLUMNS`; changes are per cent
        of the first logged value.
    sensors
        One row an endurance trial, columns :data:`SENSOR_COLUMNS`: when it failed (NaN: it lasted), and
        change per decade of cycles with limits that hold where neighbouring points are correlated.
    survival
        Share of the sensors of each generation that survive, columns :data:`SURVIVAL_COLUMNS`. No mean over
        sensors is formed: where some failed it would be one of survivors.
    """

    log: pd.DataFrame
    sensors: pd.DataFrame
    survival: pd.DataFrame


def analyse_endurance(features: Iterable[EnduranceFeatures]) -> Endurance | None:
    """Return what endurance trials tell; ``None`` where none could be used."""
    known = [own for own in features if len(own.cycles)]
    if not known:
        return None
    log = pd.concat([_log_of(own) for own in known], ignore_index=True)[list(LOG_COLUMNS)]
    sensors = pd.DataFrame([_sensor(own) for own in known], columns=list(SENSOR_COLUMNS))
    sensors = sensors.sort_values([*SENSOR_KEYS, "trial"], kind="stable", ignore_index=True)
    return Endurance(
        log.sort_values([*SENSOR_KEYS, "trial", "cycle"], ignore_index=True), sensors, _survival(sensors)
    )


def _who(own: EnduranceFeatures) -> dict[str, str]:
    identity = own.identity
    return {
        "generation": identity.generation,
        "module": identity.module,
        "sensor": identity.sensor,
        "trial": identity.file,
    }


def _log_of(own: EnduranceFeatures) -> pd.DataFrame:
    return own.cycles.assign(
        **_who(own),
        unit=own.unit,
        zero_change_percent=_change(own.cycles["zero_signal"]),
        sensitivity_change_percent=_change(own.cycles["sensitivity"]),
    )


def _change(values: pd.Series) -> pd.Series:
    """Change from the first known value, in per cent of it."""
    known = values.dropna()
    first = float(known.iloc[0]) if len(known) else math.nan
    return 100.0 * (values - first) / abs(first) if first else values * math.nan


def _sensor(own: EnduranceFeatures) -> dict[str, object]:
    cycles = own.cycles["cycle"].to_numpy(float)
    found: dict[str, object] = {
        **_who(own),
        "last_working_cycle": own.last_working,
        "failed_at_cycle": own.failed_at,
        "logged_cycles": len(cycles),
    }
    for name in ("zero", "sensitivity"):
        column = "zero_signal" if name == "zero" else name
        estimate, low, high = per_decade(cycles, _change(own.cycles[column]).to_numpy(float))
        found |= {f"{name}_percent_per_decade": estimate, f"{name}_low": low, f"{name}_high": high}
    return found


def per_decade(cycles: npt.ArrayLike, change: npt.ArrayLike) -> tuple[float, float, float]:
    """Return the slope of *change* against log10 of *cycles* with its 95 % limits; NaN with too few points.

    Least squares by statsmodels with the covariance of W. K. Newey and K. D. West, Econometrica 55 (1987)
    703–708, which allows for correlated neighbours, and its correction for small samples.
    """
    from statsmodels.regression.linear_model import OLS  # seconds to load, wanted by few campaigns
    from statsmodels.tools import add_constant

    x, y = np.asarray(cycles, float), np.asarray(change, float)
    used = np.isfinite(y) & (x > 0)
    x, y = np.log10(x[used]), y[used]
    if len(x) < FEWEST_POINTS or np.ptp(x) == 0:
        return math.nan, math.nan, math.nan
    lags = max(1, int(4 * (len(x) / 100) ** (2 / 9)))
    options = {"maxlags": lags, "use_correction": True}
    fit = OLS(y, add_constant(x)).fit(cov_type="HAC", cov_kwds=options)
    slope, reach = float(fit.params[1]), float(stats.t.ppf(0.975, len(x) - 2) * fit.bse[1])
    return slope, slope - reach, slope + reach


def _survival(sensors: pd.DataFrame) -> pd.DataFrame:
    """Product-limit estimate a generation; a sensor tested twice counts once, with its longest test."""
    ends = sensors.assign(_end=sensors["failed_at_cycle"].fillna(sensors["last_working_cycle"]))
    ends = ends.sort_values("_end", kind="stable").drop_duplicates(SENSOR_KEYS, keep="last")
    parts = []
    for generation, own in ends.groupby("generation", sort=True):
        found = product_limit(own["_end"].to_numpy(float), own["failed_at_cycle"].notna().to_numpy(bool))
        columns = (found.time, found.at_risk, found.failed, found.share, found.low, found.high)
        part = pd.DataFrame(dict(zip(SURVIVAL_COLUMNS[1:], columns, strict=True)))
        parts.append(part.assign(generation=str(generation)))
    return pd.concat(parts, ignore_index=True)[list(SURVIVAL_COLUMNS)]
