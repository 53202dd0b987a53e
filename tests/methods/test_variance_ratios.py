"""Joined intervals against exact ones, where these exist."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from campaign.methods.variance_ratios import VarianceInterval, ratio_of, share_of, sum_of


def chi_square_interval(estimate: float, freedom: int) -> VarianceInterval:
    low, high = (estimate * freedom / stats.chi2.ppf(q, freedom) for q in (0.975, 0.025))
    return VarianceInterval(estimate, float(low), float(high))


@pytest.mark.parametrize(("first", "second"), [(5, 24), (24, 60), (60, 5), (5, 5)])
def test_ratio_comes_near_the_exact_f_interval(first: int, second: int) -> None:
    # the interval of a ratio of two independent mean squares by the F distribution is exact
    ratio = ratio_of(chi_square_interval(2.0, first), chi_square_interval(1.0, second))
    exact = [2.0 / stats.f.ppf(q, first, second) for q in (0.975, 0.025)]
    assert ratio.low == pytest.approx(exact[0], rel=0.15)
    assert ratio.high == pytest.approx(exact[1], rel=0.15)


def test_share_covers() -> None:
    generator = np.random.default_rng(0)
    held = 0
    for _ in range(2000):
        module = chi_square_interval(2 * generator.chisquare(5) / 5, 5)
        sensor = chi_square_interval(generator.chisquare(24) / 24, 24)
        share = share_of(module, [sensor])
        held += share.low <= 2 / 3 <= share.high
    assert 0.93 <= held / 2000 <= 0.97


def test_sum_of_pythagorean_distances() -> None:
    total = sum_of([VarianceInterval(4.0, 1.0, 9.0), VarianceInterval(9.0, 5.0, 21.0)])
    assert total == VarianceInterval(13.0, 8.0, 26.0)
    assert sum_of([]) == VarianceInterval(0.0, 0.0, 0.0)


def test_a_variance_that_may_be_zero_sets_no_upper_limit_to_a_ratio() -> None:
    ratio = ratio_of(VarianceInterval(1.0, 0.5, 2.0), VarianceInterval(0.1, 0.0, 0.4))
    assert math.isinf(ratio.high)
    assert ratio.low > 0
    assert ratio_of(VarianceInterval(1.0, 0.5, 2.0), VarianceInterval(0.0, 0.0, 0.4)).low == 0.0


def test_unknown_limits_stay_unknown() -> None:
    unknown = VarianceInterval(1.0, math.nan, math.nan)
    share = share_of(VarianceInterval(3.0, 2.0, 5.0), [unknown])
    assert share.estimate == 0.75
    assert not share.known
    assert not ratio_of(unknown, VarianceInterval(3.0, 2.0, 5.0)).known


positive = st.floats(1e-3, 1e3)


@st.composite
def intervals(draw: st.DrawFn) -> VarianceInterval:
    estimate = draw(positive)
    low = estimate * draw(st.floats(0.0, 1.0))
    return VarianceInterval(estimate, low, estimate * (1 + draw(positive)))


@given(intervals(), st.lists(intervals(), min_size=1, max_size=4))
def test_limits_lie_on_both_sides(part: VarianceInterval, others: list[VarianceInterval]) -> None:
    share = share_of(part, others)
    assert 0.0 <= share.low <= share.estimate * (1 + 1e-9)
    assert share.estimate * (1 - 1e-9) <= share.high <= 1.0


@given(intervals(), intervals(), st.floats(1e-6, 1e6))
def test_units_do_not_matter(first: VarianceInterval, second: VarianceInterval, unit: float) -> None:
    scaled = [VarianceInterval(i.estimate * unit, i.low * unit, i.high * unit) for i in (first, second)]
    plain, other = ratio_of(first, second), ratio_of(*scaled)
    assert other.low == pytest.approx(plain.low, rel=1e-6, abs=1e-9)
    assert other.high == pytest.approx(plain.high, rel=1e-6)
