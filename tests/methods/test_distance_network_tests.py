"""Tests of networks: a published blunder, what redundancy allows to say, and error rates by simulation."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from scipy import stats

from campaign.methods.distance_network import adjust_network, distances, keep_direction, keep_nothing
from campaign.methods.distance_network_tests import (
    DETECTED,
    GROUP,
    NO_BLUNDER,
    NO_TEST,
    ONE_EDGE,
    NetworkTest,
    network_tests,
    tau_quantile,
)
from tests.methods.test_distance_network import PAIRS, PANEL, PUBLISHED, Published

BRACED = np.array([[0.0, 0.0], [80.0, 0.0], [100.0, 55.0], [42.0, 92.0], [-16.0, 52.0]])
TEN = np.array(list(combinations(range(5), 2)))
SD = 0.65


def judged(points, pairs, errors, covariance=None) -> NetworkTest:
    covariance = SD**2 * np.eye(len(pairs)) if covariance is None else covariance
    kept = keep_direction(len(points), 0, 1)
    return network_tests(
        adjust_network(pairs, distances(points, pairs) + errors, covariance, points, kept), covariance
    )


def hoepke(length_m: float | None = None) -> NetworkTest:
    case = Published("Hoepke_Distance_free")
    place = [row[:2] for row in case.net["distances"]].index(["1059", "75"])
    if length_m is not None:
        case.lengths[place] = length_m
    network = adjust_network(case.edges, case.lengths, case.covariance, case.start, keep_nothing(8))
    found = network_tests(network, case.covariance)
    assert found.gross_error.edges in ((), (place,))
    return found


def test_the_published_blunder_is_named_with_its_size() -> None:
    # 1059–75 as the book's list has it, 5 cm too long; answers computed beside the published network
    answer = PUBLISHED["_outlier_test"]
    found = hoepke(1789.499)
    worst = found.gross_error.edges[0]
    assert found.gross_error.verdict == ONE_EDGE
    assert found.tau[worst] == pytest.approx(answer["tau"], abs=5e-4)
    assert sorted(np.abs(found.tau))[-2] == pytest.approx(answer["next_tau"], abs=5e-4)
    assert found.tau_limit == pytest.approx(answer["tau_critical_5pct_over_27"], abs=1e-6)
    assert found.redundancy[worst] == pytest.approx(answer["redundancy"], abs=5e-4)
    assert 1000.0 * found.gross_error.error == pytest.approx(answer["estimated_blunder_mm"], abs=0.05)
    assert found.sigma0 == pytest.approx(answer["s0_mm"], rel=1e-5)
    assert abs(found.gross_error.error - 0.050) < found.gross_error.expanded_uncertainty < 0.03


def test_without_the_blunder_the_global_test_fails_and_no_edge_is_named() -> None:
    answer = PUBLISHED["_outlier_test"]
    found = hoepke(answer["clean_value"])
    assert found.sigma0 == pytest.approx(answer["clean_s0_mm"], rel=1e-6)
    assert np.abs(found.tau).max() == pytest.approx(answer["clean_largest_abs_tau"], abs=5e-4)
    assert found.p < 0.05
    assert found.gross_error.verdict == DETECTED


def test_redundancy_numbers_add_up_to_the_redundancy() -> None:
    shared = SD**2 * (np.eye(10) + 0.5)
    for covariance in (None, shared):
        found = judged(BRACED, TEN, np.zeros(10), covariance)
        assert found.degrees_of_freedom == 3
        assert found.redundancy.sum() == pytest.approx(3.0)
    assert (judged(BRACED, TEN, np.zeros(10)).redundancy > 0).all()


def test_a_just_determined_figure_has_no_test() -> None:
    found = judged(PANEL, PAIRS[:5], np.array([0.0, 30.0, 0.0, 0.0, 0.0]))
    assert found.gross_error.verdict == NO_TEST
    assert found.degrees_of_freedom == 0
    assert np.isnan([found.chi_square, found.p, found.sigma0, found.tau_limit]).all()
    assert np.isnan(found.tau).all()


@pytest.mark.parametrize("edge", range(6))
def test_with_redundancy_one_a_blunder_is_detected_but_never_located(edge: int) -> None:
    errors = np.zeros(6)
    errors[edge] = 8.0
    found = judged(PANEL, PAIRS, errors)
    assert found.degrees_of_freedom == 1
    assert np.abs(found.tau) == pytest.approx(1.0)
    assert np.ptp(np.abs(found.standardised)) < 1e-6
    assert found.gross_error.verdict == DETECTED
    assert found.gross_error.edges == ()
    assert np.isnan(found.tau_limit)


@pytest.mark.parametrize("edge", range(10))
def test_from_redundancy_two_on_a_large_blunder_is_located(edge: int) -> None:
    errors = np.zeros(10)
    errors[edge] = -14.0
    found = judged(BRACED, TEN, errors)
    assert found.gross_error.verdict == ONE_EDGE
    assert found.gross_error.edges == (edge,)
    assert found.gross_error.error == pytest.approx(-14.0, abs=1.0)


def test_edges_whose_tests_are_alike_are_a_group() -> None:
    # a long thin kite: both edges of its far corner say nearly the same
    points = np.array([[0.0, 0.0], [60.0, 0.0], [30.0, 40.0], [30.0, -40.0], [31.0, 400.0]])
    found = judged(points, TEN, np.where(np.arange(10) == 3, 6.0, 0.0))
    group = found.gross_error
    assert group.verdict == GROUP
    assert 3 in group.edges
    assert len(group.edges) > 1


def test_tau_limit_needs_two_degrees_of_freedom() -> None:
    assert np.isnan(tau_quantile(1, 6))
    # τ never exceeds the root of its degrees of freedom
    assert tau_quantile(2, 8) < np.sqrt(2.0)
    assert tau_quantile(200, 1) == pytest.approx(stats.norm.ppf(0.975), abs=0.01)


def test_false_alarms_keep_to_their_risk_and_named_sets_hold_the_bad_edge() -> None:
    rng = np.random.default_rng(5)
    verdicts = [judged(BRACED, TEN, SD * rng.standard_normal(10)).gross_error.verdict for _ in range(600)]
    low, high = stats.binom.ppf([0.0005, 0.9995], 600, 0.05)
    assert low <= sum(verdict != NO_BLUNDER for verdict in verdicts) <= high
    named = held = reached = 0
    for k in range(300):
        errors = SD * rng.standard_normal(10)
        errors[k % 10] += 6.0
        found = judged(BRACED, TEN, errors).gross_error
        if found.edges:
            named += 1
            held += k % 10 in found.edges
            reached += found.edges[0] != k % 10 or abs(found.error - 6.0) <= found.expanded_uncertainty
    assert named > 270
    assert held >= 0.97 * named
    assert reached >= 0.93 * named
