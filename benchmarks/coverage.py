"""Do the intervals hold what they promise? Simulated campaigns with known SDs, analysed by the same code.

Run ``python benchmarks/coverage.py [campaigns]``: 500 campaigns of 6 modules × 5 sensors × 3 repetitions × 8
levels take about ten minutes of one core. The table is printed and written to ``benchmarks/coverage.csv``
and, for the Method page, to ``site_templates/method/coverage.csv``.

Columns: quantity, nominal (coverage that is claimed), covered (share of campaigns whose interval held the
truth), simulations, low and high (95 % limits of the covered share: Clopper & Pearson, Biometrika 26 (1934)
404).
"""

from __future__ import annotations

import sys
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pandas as pd
from scipy import stats

from campaign.analyses.balanced_intervals import balanced_intervals
from campaign.analyses.variance_fit import PLACES, GenerationFit, choose_places, fit_generation
from campaign.analyses.variance_frames import fixed_effects_and_new_sensors
from campaign.analyses.variance_model import build_model
from campaign.methods.variance_ratios import VarianceInterval, ratio_of, share_of
from campaign.simulation.plan import Plan, regular_plan
from campaign.simulation.readings import simulate_readings
from campaign.simulation.truth import Components, GenerationTruth, LineSpread, SignalLaw, Truth

CAMPAIGNS = 500
NOMINAL = 0.95
LAW = SignalLaw()
COMPONENTS = Components(
    module=LineSpread(0.5, 1.0, 0.3),
    sensor=LineSpread(0.8, 1.5, 0.2),
    repetition=LineSpread(0.2, 0.3, 0.0),
    sensor_by_level=0.15,
    residual=0.1,
)
PLAN: Plan = regular_plan(modules=6, sensors=5, repetitions=3, levels=8)
LINES = ("module", "sensor", "repetition")


def true_variance(name: str, x: float) -> float:
    """Variance of a component at *x*, in signal units squared."""
    if name == "sensor_by_level":
        return COMPONENTS.sensor_by_level**2
    if name == "residual":
        return COMPONENTS.residual**2
    spread: LineSpread = getattr(COMPONENTS, name)
    return spread.sd_at(x) ** 2


def analyse(seed: int) -> GenerationFit:
    """Fit one simulated campaign."""
    truth = Truth(generations=(GenerationTruth(law=LAW, components=COMPONENTS),))
    readings = simulate_readings(PLAN, truth, seed)
    places = choose_places(readings["x"].to_numpy(float), float("nan"), has_zero=True)
    model = build_model(readings, readings["signal"].to_numpy(float), "generation 1")
    return fit_generation(model, places, limits_at=PLACES)


def outcomes(seed: int) -> Iterator[tuple[str, bool]]:
    """Quantity and whether its interval held the truth, for one campaign."""
    fit = analyse(seed)
    for name in LINES:
        for place, x in fit.places.items():
            yield f"{name} SD at {place}", _holds(fit.variance_at(name, place), true_variance(name, x))
    for name in ("sensor_by_level", "residual"):
        yield f"{name.replace('_', ' ')} SD", _holds(fit.variance_at(name, "mid"), true_variance(name, 0.0))
    yield from _joined(fit)
    yield from _new_sensors(fit, np.random.default_rng([seed, 1]))
    yield from _second_limits(fit)


def _second_limits(fit: GenerationFit) -> Iterator[tuple[str, bool]]:
    """The limits by modified large sample that stand beside the profile's, the design being balanced."""
    found = balanced_intervals(fit)
    x = fit.places["mid"]
    truth = {c.name: true_variance(c.name, x) for c in fit.components}
    for name, variance in {**truth, "total": sum(truth.values())}.items():
        words = f"{name.replace('_', ' ')} SD at mid, modified large sample"
        yield words, _holds(found[name, "mid"], variance)


def _holds(interval: VarianceInterval, truth: float) -> bool:
    return interval.low <= truth <= interval.high


def _joined(fit: GenerationFit) -> Iterator[tuple[str, bool]]:
    """Totals, shares and ratios, whose limits are joined from those of the components."""
    x = fit.places["mid"]
    names = [c.name for c in fit.components]
    parts = {name: fit.variance_at(name, "mid") for name in names}
    truth = {name: true_variance(name, x) for name in names}
    total = sum(truth.values())
    yield "total SD at mid", _holds(fit.total_at("mid"), total)
    for name in LINES:
        share = share_of(parts[name], [part for other, part in parts.items() if other != name])
        yield f"share of {name} at mid", _holds(share, truth[name] / total)
    ratio = ratio_of(parts["sensor"], parts["module"])
    yield "ratio of sensor to module SD at mid", _holds(ratio, truth["sensor"] / truth["module"])


def _new_sensors(fit: GenerationFit, generator: np.random.Generator) -> Iterator[tuple[str, bool]]:
    """Whether a sensor of a module that was not measured lies within the prediction."""
    new = sum(
        spread.factor @ generator.standard_normal(2) for spread in (COMPONENTS.module, COMPONENTS.sensor)
    )
    intercept, slope = LAW.line(80.0)
    _, rows = fixed_effects_and_new_sensors([fit], "pF", "mm/mm")
    for row in rows[rows["what"] == "new sensor"].itertuples():
        x = fit.places[str(row.place)]
        value = intercept + slope * x + new @ np.array([1.0, x])
        error = value - fit.mean_intercept - fit.mean_slope * x
        yield f"new sensor at {row.place}", bool(abs(error) <= row.expanded * abs(fit.mean_slope))


def table_of(results: pd.DataFrame) -> pd.DataFrame:
    """Return the share of campaigns that held the truth, with its own limits."""
    rows = []
    for quantity, held in results.groupby("quantity", sort=False)["held"]:
        interval = stats.binomtest(int(held.sum()), len(held)).proportion_ci(0.95, method="exact")
        rows.append((quantity, NOMINAL, held.mean(), len(held), interval.low, interval.high))
    return pd.DataFrame(rows, columns=["quantity", "nominal", "covered", "simulations", "low", "high"])


def main() -> None:
    """Simulate, print the table and write it."""
    campaigns = int(sys.argv[1]) if len(sys.argv) > 1 else CAMPAIGNS
    results = [outcome for seed in range(campaigns) for outcome in outcomes(seed)]
    table = table_of(pd.DataFrame(results, columns=["quantity", "held"]))
    print(table.to_string(index=False, float_format=lambda value: f"{value:.3f}"))
    here = Path(__file__).resolve().parent
    for file in (here / "coverage.csv", here.parent / "site_templates" / "method" / "coverage.csv"):
        table.to_csv(file, index=False, float_format="%.4f", lineterminator="\n")


if __name__ == "__main__":
    main()
