"""What time, pressure, temperature and strain across do to a reading, as coefficients of a budget.

A sensor that was tried itself has its own coefficient; any other, and a new one, has that of its generation's
sensors with their spread.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pandas as pd
from scipy import stats

from campaign.analyses.budget_model import ACROSS, PRESSURE, TEMPERATURE, Course, Effect
from campaign.analyses.drift import Drift
from campaign.analyses.hold_figures import OF_FULL_SCALE
from campaign.analyses.influence_sensors import SensorKey, sensor_fits
from campaign.analyses.influence_spread import InfluenceSpread
from campaign.analyses.influences import Influences
from campaign.analyses.pressure import Pressure
from campaign.methods.conformity import predict_new_member
from campaign.methods.creep import EXTRAPOLATION_LIMIT
from campaign.methods.influence_model import InfluenceFit
from campaign.methods.nested_model import satterthwaite

FloatArray = npt.NDArray[np.float64]

OWN = "the sensor’s own"
SHARED = "of its generation’s sensors"
"""Whose coefficient enters."""

REACH = 1.1
"""An influence is answered for to a tenth beyond what was measured."""

AT_REST = 0.1
"""Holds below this share of the full scale are at rest."""

SAME_PLACE = 0.05
"""Holds within this share of the full scale are at one length."""


@dataclass(frozen=True)
class InfluenceSource:
    """One influence as measured: its sweeps' fits by sensor, and the nested model of each generation.

    Attributes
    ----------
    fits
        Sensor → coefficients in signal units, x counted from ``origin``.
    spread
        The nested model of apparent x per unit of the influence.
    middles
        Generation → middle of the lengths, from which that model counts x.
    farthest
        Largest amount that was swept, to a tenth beyond.
    """

    fits: Mapping[SensorKey, InfluenceFit]
    origin: float
    spread: InfluenceSpread
    middles: Mapping[str, float]
    farthest: float

    def own(self, key: SensorKey, x: float, slope: float) -> Effect | None:
        """Return the effect on a sensor that was swept itself; None for any other."""
        fit = self.fits.get(key)
        if fit is None or not math.isfinite(slope):
            return None
        value, variance = fit.at(x - self.origin)
        if not (math.isfinite(value) and fit.degrees_of_freedom > 0):
            return None
        anew = self._occasions(key[0])
        spread = math.sqrt(max(variance, 0.0) / slope**2 + anew)
        return Effect(value / slope, spread, fit.degrees_of_freedom, self.farthest, owner=OWN)

    def shared(self, generation: str, x: float) -> Effect | None:
        """Return the effect on any sensor of a generation; None where its spread is not known."""
        fit, table = self.spread.fits.get(generation), self.spread.components
        rows = table[(table["generation"] == generation) & (table["component"] == "mean")]
        if fit is None or rows.empty or not fit.coefficients[0]:
            return None
        scale = float(rows["estimate"].iloc[0]) / float(fit.coefficients[0])
        weights = np.array([1.0, x - self.middles[generation]])
        contrast = weights[: len(fit.coefficients)]
        extra = {term.name: weights[: term.columns.shape[1]] for term in fit.model.terms}
        variance, freedom = satterthwaite(fit, contrast, extra | {"residual": np.ones(1)})
        value = scale * float(contrast @ fit.coefficients)
        return Effect(value, abs(scale) * math.sqrt(variance), freedom, self.farthest, owner=SHARED)

    def _occasions(self, generation: str) -> float:
        """Variance of the effect from one occasion to the next, by the scatter of sweeps and runs."""
        table = self.spread.components
        rows = table[
            (table["generation"] == generation)
            & table["component"].isin(["run", "sweep"])
            & (table["what"] == "error")
        ]
        return float(np.nansum(rows["estimate"].to_numpy(float) ** 2))


def influence_sources(pressure: Pressure | None, influences: Influences | None) -> dict[str, InfluenceSource]:
    """Return the influences that were measured, by the names of the budget's sources."""
    found: dict[str, InfluenceSource] = {}
    if pressure is not None and len(pressure.sweeps):
        found[PRESSURE] = _source(pressure.sweeps, pressure.spread, pressure.reference.name)
    for result in influences.results if influences is not None else ():
        if result.influence == "temperature":
            found[TEMPERATURE] = _source(result.sweeps, result.spread, _name(influences))
        if result.influence == "transverse" and result.unit == "mm/mm":
            found[ACROSS] = _source(result.sweeps, result.spread, _name(influences))
    return found


def _name(influences: Influences | None) -> str:
    return influences.reference.name if influences is not None else ""


def _source(sweeps: pd.DataFrame, spread: InfluenceSpread, quantity: str) -> InfluenceSource:
    x = sweeps["x"]
    origin = float(x.min()) if quantity == "length" and x.notna().any() else 0.0
    ends = sweeps.groupby("generation")["x"].agg(["min", "max"])
    middles = {str(g): float(row["min"] + row["max"]) / 2.0 for g, row in ends.iterrows()}
    reach = float(sweeps[["influence_low", "influence_high"]].abs().to_numpy().max())
    return InfluenceSource(sensor_fits(sweeps, origin), origin, spread, middles, REACH * reach)


@dataclass(frozen=True)
class HoldSource:
    """Holds as changes of x.

    One row a hold: ``generation``, ``module``, ``sensor``, ``x``, ``per_decade`` and ``per_hour`` (one of
    the two is zero) with their standard errors, ``start_s`` and ``duration_s``; ``full`` is the full scale
    of x.
    """

    holds: pd.DataFrame
    full: float

    def own(self, key: SensorKey, x: float, start_s: float) -> Course | None:
        """Return what time does to a sensor that was held itself; None for any other.

        Between lengths by straight lines; at lengths it was not held at, others of its generation stand in.
        """
        rows = self.holds
        rows = rows[(rows["generation"] == key[0]) & (rows["module"] == key[1]) & (rows["sensor"] == key[2])]
        points = [_mean_of_holds(own) for own in self._by_length(rows)]
        if not points:
            return None
        apart = AT_REST * self.full
        others = [p for p in self._points(key[0]) if all(abs(p["x"] - q["x"]) > apart for q in points)]
        return self._course(rows, sorted([*points, *others], key=lambda p: p["x"]), x, start_s, OWN)

    def shared(self, generation: str, x: float, start_s: float) -> Course | None:
        """Return what time does to any sensor of a generation."""
        rows = self.holds[self.holds["generation"] == generation]
        return self._course(rows, self._points(generation), x, start_s, SHARED)

    def _points(self, generation: str) -> list[dict[str, float]]:
        """What a further sensor of a generation does at each length that was held."""
        rows = self.holds[self.holds["generation"] == generation]
        found = (_prediction_of_holds(own) for own in self._by_length(rows))
        return [point for point in found if point is not None]

    def _by_length(self, rows: pd.DataFrame) -> list[pd.DataFrame]:
        places = np.round(rows["x"].to_numpy(float) / (SAME_PLACE * self.full))
        return [own for _, own in rows.groupby(places, sort=True)] if len(rows) else []

    def _course(
        self, rows: pd.DataFrame, points: Sequence[dict[str, float]], x: float, start_s: float, owner: str
    ) -> Course | None:
        stretched = [p for p in points if p["x"] > AT_REST * self.full]
        if not points or (x > AT_REST * self.full and not stretched):
            return None
        places = [p["x"] for p in points]

        def at(name: str) -> float:
            return float(np.interp(x, places, [p[name] for p in points]))

        start = start_s if math.isfinite(start_s) and start_s > 0 else float(rows["start_s"].median())
        return Course(
            at("per_decade"),
            at("per_decade_spread"),
            at("per_hour"),
            at("per_hour_spread"),
            min(p["degrees"] for p in points),
            start,
            EXTRAPOLATION_LIMIT * float(rows["duration_s"].min()),
            owner,
        )


def hold_source(drift: Drift | None, scales: Mapping[SensorKey, float], full: float) -> HoldSource | None:
    """Return the holds as changes of x; None where no sensor with a line was held.

    Parameters
    ----------
    drift
        The holds. Those whose change cannot be told from that of temperature take no part.
    scales
        Sensor → full-scale output as a difference of x, with the sign of its slope.
    full
        Full scale of x.
    """
    if drift is None or drift.holds.empty:
        return None
    rows = drift.holds[(drift.holds["percent_of"] == OF_FULL_SCALE) & (drift.holds["verdict"] != "undecided")]
    keys = list(zip(rows["generation"], rows["module"], rows["sensor"], strict=True))
    rows = rows[[key in scales for key in keys]]
    scale = np.array([scales[key] for key in keys if key in scales]) / 100.0
    if rows.empty:
        return None
    rest = (rows["place"] == "rest") & rows["percent_fso_per_hour"].notna()
    decade, hour = rows["percent_fso_per_decade"], rows["percent_fso_per_hour"]
    made = rows[["generation", "module", "sensor", "duration_s"]].assign(
        x=rows["strain"].astype(float),
        per_decade=(decade * scale).where(~rest, 0.0),
        per_decade_error=(_error(rows["low"], rows["high"]) * np.abs(scale)).where(~rest, 0.0),
        per_hour=(hour * scale).where(rest, 0.0),
        per_hour_error=(_error(rows["per_hour_low"], rows["per_hour_high"]) * np.abs(scale)).where(rest, 0.0),
        start_s=rows["per_decade_from_s"].astype(float),
        degrees=rows["change_1h_df"].astype(float),
    )
    made = made.dropna(subset=["x", "per_decade", "per_hour"])
    return HoldSource(made.reset_index(drop=True), full) if len(made) else None


def _error(low: pd.Series, high: pd.Series) -> pd.Series:
    return (high - low).astype(float) / 2.0 / float(stats.norm.ppf(0.975))


def _mean_of_holds(rows: pd.DataFrame) -> dict[str, float]:
    """Mean over the holds of one sensor at one length, and what a further hold departs from it."""
    found = {"x": float(rows["x"].mean()), "degrees": max(float(rows["degrees"].fillna(1.0).min()), 1.0)}
    for name in ("per_decade", "per_hour"):
        values = rows[name].to_numpy(float)
        error = float(np.sqrt(np.nanmean(rows[f"{name}_error"].to_numpy(float) ** 2)))
        between = float(values.std(ddof=1)) * math.sqrt(1.0 + 1.0 / len(values)) if len(values) > 1 else 0.0
        found |= {name: float(values.mean()), f"{name}_spread": max(error, between)}
    if len(rows) > 1:
        found["degrees"] = float(len(rows) - 1)
    return found


def _prediction_of_holds(rows: pd.DataFrame) -> dict[str, float] | None:
    """What a hold of a new sensor shows at one length: mean over the holds and its prediction SD."""
    found = {"x": float(rows["x"].mean())}
    modules = pd.factorize(rows["module"])[0].astype(np.int64)
    degrees = []
    for name in ("per_decade", "per_hour"):
        prediction = predict_new_member(rows[name].to_numpy(float), modules)
        if prediction is None:
            return None
        spread = prediction.standard_deviation
        found |= {name: prediction.estimate, f"{name}_spread": spread}
        degrees += [prediction.degrees_of_freedom] if spread > 0 else []
    return found | {"degrees": min(degrees, default=math.inf)}
