"""Plans from fitted components: strata, limits, what is missing, and what the page exports."""

from __future__ import annotations

import math
from dataclasses import astuple

import numpy as np
import pytest

from campaign.analyses.planning import (
    LIVE_MODULES,
    LIVE_STEP,
    MEAN_OF_ALL,
    PLANNING_COLUMNS,
    components_of,
    mean_of,
    power_grid,
    quantiles,
    usual_design,
    variance_with_limits,
)
from campaign.analyses.planning_findings import planning_findings
from campaign.methods.campaign_design import (
    Design,
    freedom_of_difference,
    half_width_of_difference,
    power_of_difference,
    variance_of_mean,
)
from campaign.pages.planning import planning_page
from tests.pages.small_campaign import Sketch, small_results

COSTS = "\n[costs]\nmodule = 7\nsensor = 0.6\nrepetition = 0.15\n"


@pytest.fixture(scope="module")
def results(tmp_path_factory):
    limits = 'strain_error = "0.02"' + COSTS
    return small_results(tmp_path_factory.mktemp("planning") / "small", Sketch(limits=limits))


def test_components_of_a_simulated_generation_are_those_of_its_line_at_mid_range(simulated):
    fit = simulated.usual().by_generation[0]
    found = components_of(fit)
    assert found is not None
    assert found.strata.module == pytest.approx(fit.variance_at("module", "mid").estimate / fit.mean_slope**2)
    levels = fit.model.counts.run_levels
    sensor = (
        fit.variance_at("sensor", "mid").estimate
        + fit.variance_at("sensor_by_level", "mid").estimate / levels
    )
    assert found.strata.sensor == pytest.approx(sensor / fit.mean_slope**2)
    assert found.intervals["module"].low <= found.strata.module <= found.intervals["module"].high


def test_predicted_half_width_is_that_which_simulated_generations_show(simulated):
    # two generations of the usual design, 60 pairs: the SD of the difference of their mid-range means
    plan, truth = simulated.usual_plan, simulated.truth()
    differences = []
    for seed in range(60):
        means = []
        for side in (0, 1):
            table = simulated.readings(plan, truth, 1000 + 2 * seed + side)
            mid = table[np.isclose(table["x"], table["x"].median(), atol=0.03)]
            means.append(mid["signal"].mean())
        differences.append(means[1] - means[0])
    fits = [simulated.fits_alone(simulated.readings(plan, truth, seed))[0] for seed in range(12)]
    parts = [components_of(fit) for fit in fits]
    design = usual_design(fits)
    variance = np.mean(
        [
            2 * variance_of_mean(part.strata, design) * fit.mean_slope**2
            for part, fit in zip(parts, fits, strict=True)
        ]
    )
    assert np.sqrt(variance) == pytest.approx(np.std(differences, ddof=1), rel=0.35)


def test_the_mean_of_components_and_their_limits(simulated):
    one = components_of(simulated.usual().by_generation[0])
    both = mean_of([one, one])
    assert both.name == MEAN_OF_ALL
    assert astuple(both.strata) == pytest.approx(astuple(one.strata))
    assert both.intervals["sensor"].high < one.intervals["sensor"].high  # two of them are known better
    limits = variance_with_limits(one, Design(6, 5, 3))
    assert limits.estimate == pytest.approx(2 * variance_of_mean(one.strata, Design(6, 5, 3)))
    assert limits.low < limits.estimate < limits.high


def test_the_table_repeats_the_formulas_row_by_row(results):
    planning = results.planning
    assert planning is not None
    assert tuple(planning.table.columns) == PLANNING_COLUMNS
    strata = {one.name: one.strata for one in planning.components}
    assert list(strata) == [MEAN_OF_ALL, "first", "second"]
    for row in planning.table.to_dict("records"):
        design = Design(row["modules"], row["sensors"], row["repetitions"], row["sessions"])
        variance = 2 * variance_of_mean(strata[row["components"]], design)
        freedom = freedom_of_difference(design.modules)
        assert row["difference_half_width"] == pytest.approx(half_width_of_difference(variance, freedom))
        assert row["power"] == pytest.approx(power_of_difference(0.02, variance, freedom))
        runs = design.sessions * design.repetitions
        assert row["cost"] == pytest.approx(2 * design.modules * (7 + design.sensors * (0.6 + runs * 0.15)))
        low = row["difference_half_width_low"]
        assert math.isnan(low) or low <= row["difference_half_width"] <= row["difference_half_width_high"]


def test_what_this_campaign_resolved_and_what_it_lacks(results):
    planning = results.planning
    assert planning.resolved.design == Design(3, 2, 2, 2)
    assert planning.difference_is == "strain_error"
    assert {one.kind for one in planning.missing if one.kind} >= {"cyclic", "hold", "pressure"}
    fact = planning_findings(planning)[0].facts[0]
    assert fact.resolved.half_width == pytest.approx(planning.resolved.half_width)
    assert planning.cheapest is not None
    assert planning.costs.of(planning.best) <= planning.resolved.cost + 1e-9


def test_exported_powers_and_quantiles_are_those_of_the_formulas():
    grid, t = power_grid(), quantiles()
    assert len(grid) == len(t) == LIVE_MODULES - 1
    # 4 × 3 × 5 of expected.json, planning: noncentrality 2.60010834, power 0.58599679
    place = 2.60010834 / LIVE_STEP
    low, high = grid[2][int(place)], grid[2][int(place) + 1]
    assert low + (place - int(place)) * (high - low) == pytest.approx(0.58599679, abs=5e-4)
    assert t[2] == pytest.approx(2.446912, abs=1e-6)  # Student's t, 6 degrees of freedom, 97.5 %


def test_one_module_a_generation_plans_nothing_and_says_what_is_missing(tmp_path):
    alone = small_results(tmp_path / "one", Sketch(generations=("first",), modules=1, sessions=1))
    planning = alone.planning
    assert planning.components == ()
    assert planning_findings(planning) == ()
    assert {"second generation", "modules", "mountings"} <= {one.what for one in planning.missing}
    page = planning_page(alone)
    assert page is not None
    assert page.figures == ()
