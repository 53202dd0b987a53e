"""What time, pressure, temperature and strain across do to a reading, as coefficients of a budget.

A sensor that was tried itself has its own coefficient; any other, and a new one, has that of its generation's
sensors with their spread.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace

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
    occasions
        Generation → variance of the effect from one occasion to the next, by the scatter of sweeps and runs.
    farthest
        Largest amount that was swept, to a tenth beyond.
    known
        Effects on any sensor that were asked for before.
    """

    fits: Mapping[SensorKey, InfluenceFit]
    origin: float
    spread: InfluenceSpread
    middles: Mapping[str, float]
    occasions: Mapping[str, float]
    farthest: float
    known: dict[tuple[str, float], Effect | None] = field(default_factory=dict, compare=False)

    def own(self, key: SensorKey, x: float, slope: float) -> Effect | None:
        """Return the effect on a sensor that was swept itself; None for any other."""
        fit = self.fits.get(key)
        if fit is None or not math.isfinite(slope):
            return None
        value, variance = fit.at(x - self.origin)
        if not (math.isfinite(value) and fit.degrees_of_freedom > 0):
            return None
        anew = self.occasions.get(key[0], 0.0)
        spread = math.sqrt(max(variance, 0.0) / slope**2 + anew)
        return Effect(value / slope, spread, fit.degrees_of_freedom, self.farthest, owner=OWN)

    def shared(self, generation: str, x: float) -> Effect | None:
        """Return the effect on any sensor of a generation; None where its spread is not known."""
        where = generation, round(x, 12)
        if where not in self.known:
            self.known[where] = self._shared(generation, x)
        return self.known[where]

    def _shared(self, generation: str, x: float) -> Effect | None:
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
    parts = spread.components
    anew = parts[parts["component"].isin(["run", "sweep"]) & (parts["what"] == "error")]
    squares = (anew["estimate"].astype(float) ** 2).groupby(anew["generation"]).sum()
    occasions = {str(generation): float(square) for generation, square in squares.items()}
    reach = float(sweeps[["influence_low", "influence_high"]].abs().to_numpy().max())
    return InfluenceSource(sensor_fits(sweeps, origin), origin, spread, middles, occasions, REACH * reach)


@dataclass(frozen=True)
class HeldPoints:
    """What holds say at the lengths they kept, ordered by length.

    Each point holds ``x``, ``per_decade`` and ``per_hour`` (one of the two is zero), their spreads and
    ``degrees`` of freedom; ``start_s`` is when their slopes begin, ``longest_s`` how long the shortest one
    lasted.
    """

    points: tuple[dict[str, float], ...]
    start_s: float
    longest_s: float


@dataclass(frozen=True)
class HoldSource:
    """Holds as changes of x: of every sensor that was held, and of any sensor of a generation.

    ``full`` is the full scale of x.
    """

    by_sensor: Mapping[SensorKey, HeldPoints]
    by_generation: Mapping[str, HeldPoints]
    full: float

    def own(self, key: SensorKey, x: float, start_s: float) -> Course | None:
        """Return what time does to a sensor that was held itself; None for any other.

        Between lengths by straight lines; at lengths it was not held at, others of its generation stand in.
        """
        held = self.by_sensor.get(key)
        if held is None:
            return None
        apart = AT_REST * self.full
        others = [
            point
            for point in self.by_generation[key[0]].points
            if all(abs(point["x"] - own["x"]) > apart for own in held.points)
        ]
        points = sorted([*held.points, *others], key=lambda point: point["x"])
        return self._course(replace(held, points=tuple(points)), x, start_s, OWN)

    def shared(self, generation: str, x: float, start_s: float) -> Course | None:
        """Return what time does to any sensor of a generation."""
        held = self.by_generation.get(generation)
        return self._course(held, x, start_s, SHARED) if held is not None else None

    def _course(self, held: HeldPoints, x: float, start_s: float, owner: str) -> Course | None:
        points = held.points
        stretched = any(point["x"] > AT_REST * self.full for point in points)
        if not points or (x > AT_REST * self.full and not stretched):
            return None
        places = [point["x"] for point in points]

        def at(name: str) -> float:
            return float(np.interp(x, places, [point[name] for point in points]))

        return Course(
            at("per_decade"),
            at("per_decade_spread"),
            at("per_hour"),
            at("per_hour_spread"),
            min(point["degrees"] for point in points),
            start_s if math.isfinite(start_s) and start_s > 0 else held.start_s,
            EXTRAPOLATION_LIMIT * held.longest_s,
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
    if made.empty:
        return None
    by_sensor = {
        (str(key[0]), str(key[1]), str(key[2])): _held(own, full, _mean_of_holds)
        for key, own in made.groupby(["generation", "module", "sensor"], sort=True)
    }
    by_generation = {
        str(name): _held(own, full, _prediction_of_holds)
        for name, own in made.groupby("generation", sort=True)
    }
    return HoldSource(by_sensor, by_generation, full)


def _held(
    rows: pd.DataFrame, full: float, summed: Callable[[pd.DataFrame], dict[str, float] | None]
) -> HeldPoints:
    """The holds of *rows*, those at one length taken together."""
    places = np.round(rows["x"].to_numpy(float) / (SAME_PLACE * full))
    points = [point for _, own in rows.groupby(places, sort=True) if (point := summed(own)) is not None]
    return HeldPoints(tuple(points), float(rows["start_s"].median()), float(rows["duration_s"].min()))


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
