"""Modified large-sample limits of balanced campaigns: right mean squares, right places, nothing elsewhere."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy import stats

from campaign.analyses.balanced_intervals import balanced_intervals
from campaign.analyses.variance_fit import PLACES, choose_places, fit_generation
from campaign.analyses.variance_model import build_model
from campaign.simulation.plan import RunKey, regular_plan
from campaign.simulation.truth import GenerationTruth, LineSpread, Truth

SLOPE = 64.0  # of the simulation's law: 0.80 pF/mm on 80 mm
LIMITS = ["low_modified_large_sample", "high_modified_large_sample"]


def fitted(simulated, plan, components=None, seed=1):
    """The fit of a simulated campaign, without profile limits."""
    one = GenerationTruth(components=components or simulated.components())
    readings = simulated.readings(plan, Truth(generations=(one,) * len(plan.generations)), seed)
    name = str(readings["generation"].iloc[0]) if len(plan.generations) == 1 else "all"
    model = build_model(readings, readings["signal"].to_numpy(float), name)
    places = choose_places(readings["x"].to_numpy(float), float("nan"), has_zero=True)
    return fit_generation(model, places, limits_at=())


def estimates(fit, found):
    """Estimates of every component and of the total: by restricted likelihood, and by mean squares."""
    keys = [(c.name, place) for c in fit.components for place in PLACES]
    totals = [("total", place) for place in PLACES]
    likelihood = [fit.variance_at(*key).estimate for key in keys] + [
        fit.total_at(place).estimate for _, place in totals
    ]
    return likelihood, [found[key].estimate for key in (*keys, *totals)]


# where no component is on its boundary, REML and analysis of variance are one in a balanced design
# (Searle, Casella & McCulloch, Variance Components, 1992, 4.8 and 6.6)
@pytest.mark.parametrize(
    ("plan", "changed", "seed"),
    [
        (regular_plan(modules=6, sensors=5, repetitions=3, levels=8), {}, 1),
        (regular_plan(generations=2, modules=6, sensors=4, repetitions=2, levels=5), {}, 1),
        (
            regular_plan(modules=12, sensors=3, sessions=3, repetitions=2, levels=5),
            {"module": LineSpread(1.5, 4.0), "session": LineSpread(0.4, 0.9)},
            1,
        ),
        (
            regular_plan(modules=12, batches=4, sensors=3, repetitions=1, levels=5),
            {"batch": LineSpread(5.0, 20.0), "module": LineSpread(2.0, 6.0)},
            1,
        ),
        (
            regular_plan(modules=12, sensors=4, sessions=3, repetitions=2, levels=5, shared_runs=True),
            {
                "module": LineSpread(2.0, 6.0),
                "mounting": LineSpread(0.8, 2.5),
                "shared_run": LineSpread(0.4, 1.2),
                "session": LineSpread(0.4, 0.9),
            },
            1,
        ),
    ],
    ids=["nested", "pooled", "mountings", "batches", "shared runs"],
)
def test_mean_squares_say_what_the_likelihood_says(simulated, plan, changed, seed) -> None:
    fit = fitted(simulated, plan, simulated.components(**changed), seed)
    assert not fit.fit.singular
    found = balanced_intervals(fit)
    likelihood, squares = estimates(fit, found)
    assert squares == pytest.approx(likelihood, rel=1e-5)
    assert all(i.low <= i.estimate <= i.high for i in found.values())


def test_both_branches_with_one_turning_reading(simulated) -> None:
    plan = regular_plan(modules=4, sensors=4, repetitions=2, levels=5, descending=True)
    fit = fitted(simulated, plan)
    columns = fit.model.fixed.columns
    campaigns = 100
    found = []
    for seed in range(campaigns):  # the design is the first one's, so only the readings are drawn again
        signal = simulated.readings(plan, seed=seed)["signal"].to_numpy(float)
        rest = signal - columns @ np.linalg.lstsq(columns, signal, rcond=None)[0]
        found.append(balanced_intervals(replace(fit, marginal=rest)))
    truth = {"sensor_by_level": 0.15**2, "residual": 0.1**2, "sensor_by_direction": 0.0}
    lines = ("module", "sensor", "repetition")
    truth |= {name: getattr(simulated.components(), name).sd_at(0.2) ** 2 for name in lines}
    for name, variance in {**truth, "total": sum(truth.values())}.items():
        held = sum(one[name, "mid"].low <= variance <= one[name, "mid"].high for one in found)
        # 95 % claimed: binomial limit of 100, one in a thousand below
        assert held >= stats.binom.ppf(0.001, campaigns, 0.95), name
    for name in ("sensor_by_level", "residual", "sensor", "repetition"):
        drawn = np.array([one[name, "mid"].estimate for one in found])
        assert abs(drawn.mean() - truth[name]) < 3.5 * drawn.std() / np.sqrt(campaigns), name


def test_limits_stand_beside_those_by_profile(simulated) -> None:
    table = simulated.usual().variance_in_strain
    assert table[LIMITS].notna().all(axis=None)
    within = table[table["level"].isin(["sensor", "repetition", "sensor_by_level", "residual"])]
    # resolved components: the two roads differ by far less than the interval is wide
    assert within[LIMITS[0]].to_numpy() == pytest.approx(within["low"].to_numpy(), rel=0.05)
    assert within[LIMITS[1]].to_numpy() == pytest.approx(within["high"].to_numpy(), rel=0.12)


def test_a_lost_run_leaves_the_profile_alone(simulated) -> None:
    lost = frozenset({RunKey("M01", "S1", "", 1)})
    plan = regular_plan(modules=2, sensors=3, repetitions=2, levels=4, omitted=lost)
    table = simulated.analysed(plan).variance_in_strain
    assert table["high"].notna().any()
    assert table[LIMITS].isna().all(axis=None)


def test_very_weak_components_have_no_second_limits_but_where_the_profile_has(simulated) -> None:
    plan = regular_plan(modules=2, sensors=3, repetitions=2, levels=4)
    table = simulated.analysed(plan).variance_in_strain
    modules = table[table["level"] == "module"].set_index("place")  # one degree of freedom
    assert modules["high"].notna().to_dict() == {"zero": False, "mid": True, "full": False}
    assert modules[LIMITS[1]].notna().to_dict() == {"zero": False, "mid": True, "full": False}
    assert modules.loc["mid", LIMITS[0]] == 0.0


def test_what_leaves_the_range_of_the_method_is_left_out(simulated) -> None:
    single = regular_plan(modules=6, sensors=1, repetitions=1, levels=2)
    assert balanced_intervals(fitted(simulated, single)) == {}
