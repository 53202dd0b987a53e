"""What a plan resolves: published allocation, power by formula and by simulation, whole-numbered searches."""

from __future__ import annotations

import math
from itertools import product

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from campaign.methods.campaign_design import (
    Costs,
    Design,
    Reach,
    Strata,
    allocation_ratio,
    best_design,
    cheapest_design,
    freedom_of_difference,
    half_width_of_difference,
    optimal_allocation,
    power_of_difference,
    spread_factors,
    variance_of_mean,
)

PLAN = Design(4, 3, 5)
STRATA = Strata(module=1.0, sensor=0.5, sensor_run=0.25)


def test_power_of_the_four_by_three_by_five_design():
    variance = variance_of_mean(STRATA, PLAN)
    # expected.json, planning.two_generations_4x3x5: variance of a mean, of the difference, df, power
    assert variance == pytest.approx(0.2958333, abs=1e-7)
    assert freedom_of_difference(4) == 6
    assert power_of_difference(2.0, 2 * variance, 6) == pytest.approx(0.58599679, abs=1e-7)


def test_power_and_coverage_by_simulation():
    rng, number = np.random.default_rng(6), 40_000
    modules = rng.normal(0, 1, (number, 2, 4))
    sensors = rng.normal(0, math.sqrt(0.5), (number, 2, 4, 3)).mean(axis=-1)
    runs = rng.normal(0, math.sqrt(0.25 / 15), (number, 2, 4))  # the mean of 3 × 5 runs
    means = modules + sensors + runs
    means[:, 1] += 2.0
    difference = means[:, 1].mean(-1) - means[:, 0].mean(-1)
    error = np.sqrt(means.var(axis=-1, ddof=1).sum(-1) / 4)
    t = stats.t.ppf(0.975, 6)
    power = np.mean(np.abs(difference) > t * error)
    covered = np.mean(np.abs(difference - 2.0) <= t * error)
    # expected.json, planning: 0.584 and 0.951 in 100,000 simulations
    assert power == pytest.approx(0.58599679, abs=3.3 * math.sqrt(0.586 * 0.414 / number))
    assert covered == pytest.approx(0.95, abs=3.3 * math.sqrt(0.95 * 0.05 / number))


def test_variance_of_a_nested_mean_as_in_the_turnip_leaves():
    # Snedecor & Cochran's calcium in turnip leaves, plants, leaves, determinations: mean squares 2.5201,
    # 0.3288, 0.0067 (expected.json, planning.turnip_var_mean)
    plant, leaf, error = (2.5201 - 0.3288) / 6, (0.3288 - 0.00665) / 2, 0.00665
    strata = Strata(module=plant, sensor=leaf, sensor_run=error)
    published = {(4, 3, 2): 0.10500467, (8, 3, 1): 0.05264096, (4, 6, 1): 0.09829383, (12, 1, 1): 0.04441142}
    for sizes, variance in published.items():
        assert variance_of_mean(strata, Design(*sizes)) == pytest.approx(variance, rel=2e-3)


def test_shared_runs_and_mountings_are_averaged_over_themselves_only():
    design = Design(2, 5, 3, sessions=4)
    assert variance_of_mean(Strata(0.0, module_run=12.0), design) == pytest.approx(0.5)
    assert variance_of_mean(Strata(0.0, module_mounting=8.0), design) == pytest.approx(1.0)
    assert variance_of_mean(Strata(0.0, sensor_mounting=40.0), design) == pytest.approx(1.0)
    assert variance_of_mean(Strata(0.0, sensor_run=120.0), design) == pytest.approx(1.0)


def test_optimal_allocations_as_published():
    # expected.json, planning.optimal_allocation: course notes on Cochran's formula, and three_stage
    assert allocation_ratio(20.0, 0.12, 32.0, 12.0) == pytest.approx(7.9056942, abs=1e-6)
    best = optimal_allocation(STRATA, Costs(100.0, 10.0, 1.0))
    assert (best.sensors, best.repetitions) == pytest.approx((2.236068, 2.236068), abs=1e-6)
    assert allocation_ratio(1.0, 1.0, 0.0, 1.0) == math.inf


@pytest.mark.parametrize("budget", [900.0, 2000.0, 5000.0])
def test_rounding_by_search_ends_near_the_formula(budget):
    costs = Costs(100.0, 10.0, 1.0)
    found = best_design(STRATA, costs, budget, Reach(40, 6, 6))
    assert found is not None
    assert costs.of(found) <= budget
    assert abs(found.sensors - 2.236) < 2.3
    assert abs(found.repetitions - 2.236) < 2.3


def test_searches_agree_with_trying_everything():
    costs, reach = Costs(7.0, 0.6, 0.15), Reach(9, 5, 4)
    widths = {}
    for sizes in product(range(2, 10), range(1, 6), range(1, 5)):
        design = Design(*sizes)
        variance = 2 * variance_of_mean(STRATA, design)
        widths[design] = half_width_of_difference(variance, freedom_of_difference(design.modules))
    enough = [d for d, w in widths.items() if w <= 1.6]
    assert cheapest_design(STRATA, costs, 1.6, reach) == min(enough, key=lambda d: (costs.of(d), widths[d]))
    paid = [d for d in widths if costs.of(d) <= 100.0]
    assert best_design(STRATA, costs, 100.0, reach) == min(paid, key=lambda d: (widths[d], costs.of(d)))
    assert cheapest_design(STRATA, costs, 1e-6, reach) is None
    assert best_design(STRATA, costs, 1.0, reach) is None


def test_four_modules_know_an_sd_within_half_and_nearly_four_times():
    # statistics of the project, §11: ×0.57 to ×3.73 (χ², 3 degrees of freedom)
    assert spread_factors(4) == pytest.approx((0.5665, 3.7285), abs=1e-3)


@given(st.integers(2, 30), st.integers(1, 8), st.integers(1, 8), st.floats(0.0, 5.0))
@settings(max_examples=60, deadline=None)
def test_more_of_anything_never_loses_power(modules, sensors, repetitions, difference):
    def power(design: Design) -> float:
        freedom = freedom_of_difference(design.modules)
        return power_of_difference(difference, 2 * variance_of_mean(STRATA, design), freedom)

    here = power(Design(modules, sensors, repetitions))
    assert 0.05 - 1e-9 <= here <= 1.0
    for more in (
        Design(modules + 1, sensors, repetitions),
        Design(modules, sensors + 1, repetitions),
        Design(modules, sensors, repetitions + 1),
    ):
        assert power(more) >= here - 1e-9
