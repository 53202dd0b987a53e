"""Means of nested groups: published contrast, closed forms, and coverage in simulated generations."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from campaign.methods.equivalence import (
    difference_of_spreads,
    equivalence_of_difference,
    equivalence_of_ratio,
    equivalence_of_spreads,
)
from campaign.methods.mean_comparison import (
    Mean,
    common_variance_difference,
    difference_of_means,
    nested_mean,
    ratio_of_means,
)
from campaign.methods.variance_ratios import VarianceInterval

NAN = float("nan")


def simulated(rng, modules, sensors, module_sd, sensor_sd, mean=0.0):
    """Values of one generation and the codes of their modules and places."""
    groups = np.repeat(np.arange(modules), sensors)
    places = np.tile(np.arange(sensors), modules)
    values = mean + rng.normal(0, module_sd, modules)[groups] + rng.normal(0, sensor_sd, modules * sensors)
    return values + 0.7 * places, groups, places


def binomial_limits(count, share):
    return stats.binom.ppf([0.001, 0.999], count, share) / count


def test_oxide_sources_differ_as_published(nested):
    table = nested.table("oxide", "nested")
    values = table["Thickness"].to_numpy(float)
    side = (table["Source"] == 2).to_numpy(int)
    lots = table["Lot"].to_numpy(int)
    wafers = lots * 10 + table["Wafer"].to_numpy(int)
    # expected.json, nested.oxide_generation_contrast: R lmerTest, Satterthwaite = Kenward–Roger (balanced)
    common = common_variance_difference(values, side, [lots, wafers])
    assert common.estimate == pytest.approx(10.0833333, abs=1e-6)
    assert common.degrees_of_freedom == pytest.approx(6.0, rel=1e-5)
    assert common.p == pytest.approx(0.26287, abs=5e-6)
    half = (common.high - common.low) / 2
    assert half / stats.t.ppf(0.975, 6) == pytest.approx(8.162242438, rel=1e-6)
    # separate fits: the same estimate and, sizes being equal, standard error; Welch: 3 to 6 degrees
    means = [nested_mean(values[side == s], [lots[side == s], wafers[side == s]]) for s in (0, 1)]
    welch = difference_of_means(*means)
    assert welch.estimate == pytest.approx(10.0833333, abs=1e-6)
    assert means[0].variance + means[1].variance == pytest.approx(8.162242438**2, rel=1e-5)
    assert 3.0 <= welch.degrees_of_freedom < 6.0
    assert welch.p > common.p


def test_balanced_means_are_those_of_module_means_with_modules_less_one():
    values, groups, places = simulated(np.random.default_rng(3), 5, 4, 2.0, 0.3)
    mean = nested_mean(values, [groups], places)
    of_modules = values.reshape(5, 4).mean(axis=1)
    assert mean.estimate == pytest.approx(of_modules.mean())
    assert mean.variance == pytest.approx(of_modules.var(ddof=1) / 5, rel=1e-5)
    assert mean.degrees_of_freedom == pytest.approx(4.0, rel=1e-3)
    assert (mean.groups, mean.members) == (5, 20)


def test_degrees_of_freedom_never_count_sensors_although_modules_do_not_spread():
    values, groups, places = simulated(np.random.default_rng(5), 4, 6, 0.0, 1.0)
    mean = nested_mean(values - np.repeat(values.reshape(4, 6).mean(axis=1), 6), [groups], places)
    assert mean.degrees_of_freedom == 3.0


def test_one_sensor_a_module_is_the_mean_of_a_sample():
    values = np.array([1.0, 2.0, 4.0, 7.0])
    mean = nested_mean(values, [np.arange(4)])
    assert (mean.estimate, mean.degrees_of_freedom) == (3.5, 3.0)
    assert mean.variance == pytest.approx(values.var(ddof=1) / 4)


def test_one_module_has_no_variance_and_no_interval():
    lone = nested_mean(np.array([1.0, 1.2, 0.9]), [np.zeros(3, int)])
    assert np.isnan(lone.variance)
    assert np.isnan(difference_of_means(lone, Mean(1.0, 0.1, 3.0, 4, 8)).p)


@pytest.mark.parametrize(("module_sds", "sensor_sds"), [((1.0, 1.0), (0.5, 0.5)), ((0.3, 2.0), (1.0, 0.4))])
def test_intervals_of_generation_differences_cover(module_sds, sensor_sds):
    rng, number = np.random.default_rng(11), 250
    held = 0
    for _ in range(number):
        means = []
        for module_sd, sensor_sd, centre in zip(module_sds, sensor_sds, (0.0, 1.5), strict=True):
            values, groups, places = simulated(rng, 5, 3, module_sd, sensor_sd, centre)
            kept = rng.permutation(len(values))[:-2]  # two sensors failed
            means.append(nested_mean(values[kept], [groups[kept]], places[kept]))
        found = difference_of_means(*means)
        held += found.low <= 1.5 <= found.high
    low, high = binomial_limits(number, 0.95)
    # at least the claimed level; the cap of the degrees of freedom errs on the wide side
    assert held / number >= low
    assert held / number <= max(high, 0.995)


def test_fieller_is_the_set_of_ratios_that_are_not_rejected():
    first, second = Mean(2.0, 0.04, 5.0, 6, 12), Mean(3.0, 0.09, 5.0, 6, 12)
    found = ratio_of_means(first, second)
    t = stats.t.ppf(0.975, found.degrees_of_freedom)
    for limit in (found.low, found.high):
        z = (second.estimate - limit * first.estimate) ** 2 / (second.variance + limit**2 * first.variance)
        assert z == pytest.approx(t**2)
    assert found.low < found.estimate == 1.5 < found.high


def test_fieller_has_no_limits_where_the_first_mean_may_be_zero():
    found = ratio_of_means(Mean(0.1, 0.04, 5.0, 6, 12), Mean(3.0, 0.09, 5.0, 6, 12))
    assert (found.low, found.high) == (-np.inf, np.inf)


def test_two_one_sided_tests_agree_with_the_ninety_per_cent_interval():
    first, second = Mean(10.0, 0.02, 6.0, 7, 14), Mean(10.3, 0.03, 6.0, 7, 14)
    found = difference_of_means(first, second)
    reach = stats.t.ppf(0.95, found.degrees_of_freedom) * np.sqrt(0.05)
    margin = abs(found.estimate) + reach  # the 90 % interval just touches it
    assert equivalence_of_difference(first, second, margin) == pytest.approx(0.05)
    assert equivalence_of_difference(first, second, 0.29) > 0.5


def test_equivalence_is_found_wrongly_in_at_most_five_per_cent_at_the_edge_of_the_margin():
    rng, number, margin = np.random.default_rng(2), 4000, 1.0
    wrong = 0
    for _ in range(number):
        sides = [rng.normal(centre, 0.5, 6) for centre in (0.0, margin)]
        means = [Mean(s.mean(), s.var(ddof=1) / 6, 5.0, 6, 6) for s in sides]
        wrong += equivalence_of_difference(*means, margin) < 0.05
    assert wrong / number <= binomial_limits(number, 0.05)[1]
    assert wrong / number > 0.03


def test_ratio_equivalence_at_the_edge_of_its_margin_keeps_its_level():
    rng, number = np.random.default_rng(4), 4000
    wrong = 0
    for _ in range(number):
        sides = [rng.normal(centre, 0.4, 6) for centre in (10.0, 11.0)]
        means = [Mean(s.mean(), s.var(ddof=1) / 6, 5.0, 6, 6) for s in sides]
        wrong += equivalence_of_ratio(*means, 0.1) < 0.05
    assert 0.03 < wrong / number <= binomial_limits(number, 0.05)[1]
    assert equivalence_of_ratio(Mean(1.0, 0.01, 5, 6, 6), Mean(-1.0, 0.01, 5, 6, 6), 0.1) == 1.0


def chi_square_interval(variance, freedom):
    tails = stats.chi2.ppf([0.975, 0.025], freedom)
    return VarianceInterval(variance, *(variance * freedom / tails))


def test_test_of_two_spreads_is_near_the_exact_f_and_errs_upwards_far_out():
    for ratio in (2.0, 5.0, 10.0, 20.0, 60.0):
        exact = 2 * stats.f.sf(ratio, 8, 8)
        found = difference_of_spreads(chi_square_interval(1.0, 8), chi_square_interval(ratio, 8))
        assert found == pytest.approx(exact, rel=0.35) or found > exact


def test_spreads_are_equivalent_only_with_many_degrees_of_freedom():
    few, many = (chi_square_interval(1.0, n) for n in (8, 4000))
    assert equivalence_of_spreads(few, few, 0.2) > 0.05
    assert equivalence_of_spreads(many, many, 0.2) < 0.001
    assert equivalence_of_spreads(many, chi_square_interval(1.2**2, 4000), 0.2) == pytest.approx(
        0.5, abs=0.01
    )
    assert np.isnan(equivalence_of_spreads(many, VarianceInterval(1.0, NAN, NAN), 0.2))
