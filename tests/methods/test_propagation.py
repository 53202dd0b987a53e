"""Propagation of uncertainty against the examples of the GUM and its first supplement.

The published values stand in tests/reference/uncertainty/published.json with the place each is taken from.
"""

import json
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from campaign.methods.monte_carlo import (
    ArcSine,
    Multivariate,
    Normal,
    Rectangular,
    StudentT,
    Triangular,
    TwoPoint,
    distribution_of,
    propagate_distributions,
)
from campaign.methods.propagation import (
    covariance_of,
    numerical_sensitivities,
    propagate,
    second_order_variance,
)

REFERENCE = Path(__file__).parents[1] / "reference" / "uncertainty"
PUBLISHED = json.loads((REFERENCE / "published.json").read_text())


def _impedance(inputs):
    volts, milliamperes, phase = inputs
    size = volts / (milliamperes / 1000.0)
    return np.array([size * np.cos(phase), size * np.sin(phase), size])


@pytest.fixture
def impedance():
    """The five observations of GUM table H.2, unrounded: means and the covariance of the means."""
    table = pd.read_csv(REFERENCE / "gum_h2_impedance.csv", comment="#")
    values = table[["V", "I_mA", "phi_rad"]].to_numpy(float)
    return PUBLISHED["H2"], values.mean(axis=0), np.cov(values.T) / len(values)


def test_three_outputs_of_correlated_inputs_as_in_gum_h2(impedance):
    case, means, covariance = impedance
    found = propagate(_impedance, means, covariance)
    assert found.values == pytest.approx([case["R"], case["X"], case["Z"]], abs=5e-4)
    # printed to 3 decimals; 0.29558 is printed as 0.295
    assert found.standard_uncertainties == pytest.approx([case["uR"], case["uX"], case["uZ"]], abs=6e-4)
    printed = [case["rRX"], case["rRZ"], case["rXZ"]]
    assert found.correlations[[0, 0, 1], [1, 2, 2]] == pytest.approx(printed, abs=1.5e-3)


def test_leaving_the_correlation_out_gives_what_gum_h2_warns_of(impedance):
    case, means, covariance = impedance
    wrong = case["uncorrelated"]
    found = propagate(_impedance, means, np.sqrt(np.diag(covariance)))
    assert found.standard_uncertainties == pytest.approx([wrong["uR"], wrong["uX"], wrong["uZ"]], abs=6e-4)
    assert found.correlations[[0, 0, 1], [1, 2, 2]] == pytest.approx(
        [wrong["rRX"], wrong["rRZ"], wrong["rXZ"]], abs=1.5e-3
    )


def test_correction_of_the_thermometer_at_30_degrees_as_in_gum_h3():
    case = PUBLISHED["H3"]
    full = case["unrounded_computed_here"]
    covariance = covariance_of(
        np.array([full["s_y1"], full["s_y2"]]), np.array([[1.0, full["r"]], [full["r"], 1.0]])
    )
    found = propagate(lambda y: y[0] + y[1] * 10.0, np.array([full["y1"], full["y2"]]), covariance)
    assert found.values[0] == pytest.approx(case["b30"], abs=5e-5)
    assert found.standard_uncertainties[0] == pytest.approx(case["u_b30"], abs=5e-5)


def test_given_sensitivities_are_used_as_they_are():
    found = propagate(
        lambda x: x[0] * x[1], np.array([2.0, 3.0]), np.array([0.1, 0.2]), np.array([[3.0, 2.0]])
    )
    assert found.standard_uncertainties[0] == pytest.approx(0.5)


@given(st.floats(0.2, 3.0), st.floats(-3.0, 3.0))
def test_numerical_sensitivities_are_the_derivatives(first, second):
    found = numerical_sensitivities(
        lambda x: np.array([np.exp(x[0]) * x[1], np.sin(x[1])]),
        np.array([first, second]),
        np.array([0.1, 0.0]),
    )
    expected = [[np.exp(first) * second, np.exp(first)], [0.0, np.cos(second)]]
    assert found == pytest.approx(np.array(expected), rel=1e-7, abs=1e-7)


def test_four_gaussian_inputs_as_in_jcgm_101_9_2_2():
    case = PUBLISHED["jcgm101_9_2_2"]
    found = propagate_distributions(lambda *x: sum(x), [Normal(0, 1)] * 4, seed=1)
    # a million draws leave the ends of the interval to about 0.01 (JCGM 101, 7.9.4)
    assert found.standard_uncertainty == pytest.approx(case["u"], abs=0.01)
    assert found.symmetric == pytest.approx(tuple(case["interval95"]), abs=0.03)
    assert found.shortest == pytest.approx(tuple(case["interval95"]), abs=0.06)


def test_one_rectangular_input_that_dominates_as_in_jcgm_101_9_2_4():
    case = PUBLISHED["jcgm101_9_2_4"]
    narrow = Rectangular(-(3**0.5), 3**0.5)
    inputs = [narrow, narrow, narrow, Rectangular(-10 * 3**0.5, 10 * 3**0.5)]
    found = propagate_distributions(lambda *x: sum(x), inputs, seed=2)
    assert found.standard_uncertainty == pytest.approx(case["u"], abs=0.05)
    assert found.symmetric == pytest.approx(tuple(case["mc95"]), abs=0.06)
    assert found.shortest == pytest.approx(tuple(case["mc95"]), abs=0.25)  # the density is flat there
    first = propagate(lambda x: x.sum(), np.zeros(4), np.array([1.0, 1.0, 1.0, 10.0]))
    reach = 1.959964 * first.standard_uncertainties[0]
    assert (-reach, reach) == pytest.approx(tuple(case["guf95"]), abs=0.05)


def _mass(reference, small, air, weight, standard):
    """δm in mg (JCGM 101, 9.3.1): air 1.2 kg/m³ as the convention, 100 g nominal."""
    return (reference + small) * (1.0 + (air - 1.2) * (1.0 / weight - 1.0 / standard)) - 100_000.0


MASSES = [Normal(100_000.0, 0.050), Normal(1.234, 0.020), Rectangular(1.1, 1.3), Rectangular(7000, 9000)]
MASSES += [Rectangular(7950, 8050)]


def test_mass_calibration_by_first_order_as_in_jcgm_101_9_3():
    means = np.array([100_000.0, 1.234, 1.2, 8000.0, 8000.0])
    errors = np.array([0.050, 0.020, 0.1 / 3**0.5, 1000 / 3**0.5, 50 / 3**0.5])
    first = propagate(lambda x: _mass(*x), means, errors)
    printed = PUBLISHED["jcgm101_9_3"]
    assert first.values[0] == pytest.approx(printed["guf1"]["est"], abs=1e-6)
    assert first.standard_uncertainties[0] == pytest.approx(printed["guf1"]["u"], abs=5e-5)
    second = second_order_variance(lambda x: float(_mass(*x)), means, errors) ** 0.5
    assert second == pytest.approx(printed["guf2"]["u"], abs=5e-4)


def test_mass_calibration_by_monte_carlo_as_in_jcgm_101_9_3():
    printed = PUBLISHED["jcgm101_9_3"]["mcm"]
    found = propagate_distributions(_mass, MASSES, seed=3)
    # numerical tolerance of the example: 0.0005 of the uncertainty, 0.005 of the ends
    assert found.mean == pytest.approx(printed["est"], abs=5e-4)
    assert found.standard_uncertainty == pytest.approx(printed["u"], abs=5e-4)
    assert found.shortest == pytest.approx(tuple(printed["ci_shortest"]), abs=5e-3)


@pytest.mark.parametrize(
    ("one", "mean", "deviation"),
    [
        (StudentT(1.0, 2.0, 12.0), 1.0, 2.0 * (12 / 10) ** 0.5),
        (StudentT(1.0, 2.0, np.inf), 1.0, 2.0),
        (Triangular(-1.0, 3.0), 1.0, 2.0 / 6**0.5),
        (ArcSine(1.0, 2.0), 1.0, 2.0 / 2**0.5),
        (TwoPoint(1.0, 2.0), 1.0, 2.0),
    ],
)
def test_draws_have_the_moments_of_their_distribution(one, mean, deviation):
    found = propagate_distributions(lambda x: x, [one], seed=4, trials=200_000)
    assert (found.mean, found.standard_uncertainty) == pytest.approx((mean, deviation), abs=0.02)


def test_inputs_that_go_together_are_drawn_together():
    both = Multivariate((1.0, 2.0), np.array([[1.0, -1.0], [-1.0, 1.0]]))
    found = propagate_distributions(lambda x: x[:, 0] + x[:, 1], [both], seed=5, trials=1000)
    assert found.mean == pytest.approx(3.0)
    assert found.standard_uncertainty == pytest.approx(0.0, abs=1e-6)


def test_shortest_interval_of_a_skewed_output_is_shorter_and_lies_lower():
    values = np.random.default_rng(6).exponential(size=100_000)
    found = distribution_of(values)
    # exponential density falls everywhere, so that the shortest interval begins at zero
    assert found.shortest == pytest.approx((0.0, -np.log(0.05)), abs=0.06)
    assert found.symmetric == pytest.approx((-np.log(0.975), -np.log(0.025)), abs=0.06)
