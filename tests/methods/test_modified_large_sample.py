"""Modified large-sample intervals: coverage, the limiting cases that are exact, and scale.

No worked example is quoted: the promises are those of the papers, that limiting cases are exact, and coverage
is counted by simulation. Mean squares of a balanced design are drawn as what they are, multiples of χ².
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as some
from scipy import stats

from campaign.methods.modified_large_sample import (
    MeanSquares,
    limits_of_combination,
    nested_degrees_of_freedom,
    nested_expectations,
)

CAMPAIGNS = 20_000
NAMES = ("batch", "module", "sensor", "run", "error")


def drawn(sizes, variances, seed=1):
    """Mean squares of many campaigns of a nested design with known variances."""
    expectations, freedom = nested_expectations(sizes), nested_degrees_of_freedom(sizes)
    random = np.random.default_rng(seed)
    chi2 = random.chisquare(freedom[:, None], (len(sizes), CAMPAIGNS))
    values = (expectations @ np.array(variances))[:, None] * chi2 / freedom[:, None]
    return MeanSquares(NAMES[-len(sizes) :], values, freedom, expectations)


def covered(squares, names, variances):
    truth = sum(variances[squares.names.index(name)] for name in names)
    found = squares.limits(names)
    return float(np.mean((found.low <= truth) & (truth <= found.high)))


# a small campaign, one with a component near zero, and one of five levels
DESIGNS = [
    ((6, 5, 3), (1.0, 0.5, 0.2)),
    ((4, 3, 2, 5), (0.5, 0.3, 0.2, 0.1)),
    ((3, 3, 2, 4, 3), (0.01, 1.0, 0.2, 0.1, 0.3)),
]


@pytest.mark.parametrize(("sizes", "variances"), DESIGNS)
def test_single_components_are_covered(sizes, variances):
    squares = drawn(sizes, variances)
    # binomial limits of a coverage of 94.3 to 95.7 %: exact in the limiting cases, within 0.7 % between them
    low, high = (stats.binom.ppf(q, CAMPAIGNS, p) / CAMPAIGNS for q, p in ((0.001, 0.943), (0.999, 0.957)))
    for name in squares.names:
        assert low <= covered(squares, [name], variances) <= high, name


@pytest.mark.parametrize(("sizes", "variances"), DESIGNS)
def test_sums_of_components_are_covered(sizes, variances):
    squares = drawn(sizes, variances, seed=2)
    # Graybill & Wang (1980): at least nominal, but for simulation error; more with few outermost units
    least = stats.binom.ppf(0.001, CAMPAIGNS, 0.945) / CAMPAIGNS
    for names in (squares.names, squares.names[1:], squares.names[:2]):
        assert least <= covered(squares, names, variances) <= 0.985, names


def test_residual_has_the_exact_interval():
    found = limits_of_combination(np.array([1.0]), np.array([2.5]), np.array([12.0]))
    # ISO 2854:1976: n s²/χ²(1 − α/2) and n s²/χ²(α/2)
    assert [found.low, found.high] == pytest.approx(12 * 2.5 / stats.chi2.ppf([0.975, 0.025], 12))
    assert found.estimate == 2.5
    # EP05 set, SAS 9.2 PROC NESTED (R package VCA, UnitTests): error of 1.953397 on 40 degrees of freedom
    error = limits_of_combination(np.array([1.0]), np.array([1.953397]), np.array([40.0]))
    assert [error.low, error.high] == pytest.approx([1.3167, 3.198], abs=1e-4)


@given(some.integers(2, 60), some.integers(2, 60))
def test_a_difference_reaches_zero_exactly_where_f_is_its_quantile(first, second):
    # Ting and others (1990): the limit is zero exactly where the F test is at its critical value
    ratio = stats.f.isf(0.025, first, second)
    freedom = np.array([float(first), float(second)])
    at = limits_of_combination(np.array([1.0, -1.0]), np.array([ratio, 1.0]), freedom)
    above = limits_of_combination(np.array([1.0, -1.0]), np.array([1.01 * ratio, 1.0]), freedom)
    assert at.low == pytest.approx(0.0, abs=1e-6 * ratio)
    assert above.low > 0


@given(
    some.lists(some.integers(2, 6), min_size=2, max_size=5),
    some.lists(some.floats(0.1, 10.0), min_size=5, max_size=5),
    some.floats(1e-9, 1e9),
)
def test_units_do_not_matter(sizes, squares, factor):
    expectations, freedom = nested_expectations(sizes), nested_degrees_of_freedom(sizes)
    values = np.array(squares[: len(sizes)])
    names = NAMES[-len(sizes) :]
    plain = MeanSquares(names, values, freedom, expectations)
    scaled = MeanSquares(names, values * factor, freedom, expectations)
    for wanted in (names, *([name] for name in names)):
        one, other = plain.limits(wanted), scaled.limits(wanted)
        scale = factor * max(float(one.high), values.max())
        assert [other.estimate, other.low, other.high] == pytest.approx(
            [factor * v for v in (one.estimate, one.low, one.high)], rel=1e-9, abs=1e-9 * scale
        )
        assert 0 <= other.low <= max(float(other.estimate), 0.0) <= other.high * (1 + 1e-12)


def test_estimates_are_those_of_the_mean_squares():
    squares = MeanSquares(
        ("module", "sensor", "error"),
        np.array([50.0, 8.0, 2.0]),
        nested_degrees_of_freedom((6, 5, 3)),
        nested_expectations((6, 5, 3)),
    )
    found = [float(squares.limits([name]).estimate) for name in squares.names]
    assert found == pytest.approx([(50 - 8) / 15, (8 - 2) / 3, 2.0])
    assert squares.limits(squares.names).estimate == pytest.approx(sum(found))


def test_what_has_no_freedom_or_no_name_is_refused():
    with pytest.raises(ValueError, match="degree of freedom"):
        limits_of_combination(np.array([1.0, -1.0]), np.array([2.0, 1.0]), np.array([0.0, 5.0]))
    with pytest.raises(ValueError, match="day"):
        drawn((3, 2, 2), (1.0, 1.0, 1.0)).limits(["day"])
