"""Combination of a budget against the GUM's example and against draws."""

import json
import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from campaign.methods.uncertainty_budget import (
    BudgetLine,
    combine,
    degrees_of_relative_uncertainty,
    draw_budget,
    welch_satterthwaite,
)

PUBLISHED = json.loads(
    (Path(__file__).parents[1] / "reference" / "uncertainty" / "published.json").read_text()
)


def test_effective_degrees_of_freedom_as_in_gum_g_4_1():
    case = PUBLISHED["G4"]
    lines = [
        BudgetLine(f"x{number}", relative, "t", degrees_of_freedom=readings - 1)
        for number, (relative, readings) in enumerate(zip(case["rel_u_percent"], case["n"], strict=True), 1)
    ]
    found = combine(lines)
    assert found.standard_uncertainty == pytest.approx(case["uc_percent"], abs=5e-3)
    assert found.degrees_of_freedom == pytest.approx(case["nu_eff"], abs=0.05)
    assert found.coverage_factor == pytest.approx(case["t95"], abs=5e-3)
    assert found.expanded_uncertainty == pytest.approx(case["U95_percent"], abs=0.05)


def test_lines_that_rest_on_one_estimate_are_combined_before_degrees_are_counted():
    alone = [
        BudgetLine("line", 3.0, "t", degrees_of_freedom=4),
        BudgetLine("run", 4.0, "t", degrees_of_freedom=4),
    ]
    together = [BudgetLine(one.source, one.half_width, "t", 1.0, 4, "runs") for one in alone]
    assert combine(together).degrees_of_freedom == pytest.approx(4.0)
    assert combine(alone).degrees_of_freedom == pytest.approx(25.0**2 / ((81 + 256) / 4))
    assert combine(together).standard_uncertainty == combine(alone).standard_uncertainty == 5.0


def test_degrees_of_freedom_of_what_is_known_to_a_quarter_as_in_gum_g_4_2():
    assert degrees_of_relative_uncertainty(0.25) == 8.0  # GUM G.4.2, example
    assert math.isinf(degrees_of_relative_uncertainty(0.0))


@pytest.mark.parametrize(("shape", "divisor"), [("rectangular", 3**0.5), ("two-point", 1.0), ("normal", 1.0)])
def test_divisors_and_sensitivity_make_the_contribution(shape, divisor):
    line = BudgetLine("x", -2.0, shape, sensitivity=-3.0)
    assert line.contribution == pytest.approx(6.0 / divisor)


def test_a_budget_where_everything_is_taken_as_known_has_the_normal_factor():
    assert combine([BudgetLine("a", 1.0), BudgetLine("b", 1.0)]).coverage_factor == pytest.approx(1.959964)


@given(st.lists(st.tuples(st.floats(0.01, 10.0), st.floats(1.0, 200.0)), min_size=1, max_size=6))
def test_effective_degrees_lie_between_the_fewest_and_the_sum(parts):
    contributions, freedoms = zip(*parts, strict=True)
    found = welch_satterthwaite(contributions, freedoms)
    assert min(freedoms) * (1 - 1e-9) <= found <= sum(freedoms) * (1 + 1e-9)


def test_drawn_budget_keeps_variance_and_knows_a_dominating_two_point_source():
    lines = [
        BudgetLine("loop", 1.0, "two-point"),
        BudgetLine("pressure", 0.3, "rectangular"),
        BudgetLine("line", 0.1, "t", degrees_of_freedom=30, group="runs"),
        BudgetLine("run", 0.1, "t", degrees_of_freedom=30, group="runs"),
    ]
    drawn = draw_budget(lines, seed=1, trials=200_000)
    expected = 1.0 + 0.03 + 0.02 * 30 / 28
    assert drawn.standard_uncertainty**2 == pytest.approx(expected, rel=0.01)
    # almost all of the two-point source is within its half-width: the t factor of first order is too wide
    assert drawn.symmetric[1] < combine(lines).expanded_uncertainty * 0.85
    assert drawn.symmetric[0] == pytest.approx(-drawn.symmetric[1], abs=0.02)
    assert np.isfinite(drawn.shortest).all()
