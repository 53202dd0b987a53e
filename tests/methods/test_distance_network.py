"""Distance networks: published adjustments, properties that no datum changes, and simulated coverage."""

from __future__ import annotations

import json
from itertools import combinations
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from campaign.methods.distance_network import (
    AdjustedNetwork,
    UnsolvedNetworkError,
    adjust_network,
    distance_design,
    distances,
    keep_direction,
    keep_nodes,
    keep_nothing,
)
from campaign.methods.distance_network_amplification import (
    amplification_map,
    node_amplification,
    stretched_and_sheared,
)
from campaign.methods.distance_network_ellipses import ellipse_factor, standard_ellipses
from campaign.methods.distance_network_figure import (
    broken_triangles,
    edges_to_leave_out,
    place_nodes,
    rigid_parts,
    turned_over,
)
from campaign.methods.distance_network_monte_carlo import adjust_draws
from campaign.methods.rigid_fit import fit_rigidly, into_frame, rotation

PUBLISHED = json.loads(
    (Path(__file__).parents[1] / "reference" / "networks" / "distance_networks.json").read_text("utf-8")
)
NAMES = [name for name in PUBLISHED if name.endswith(("_fix", "_free"))]

PANEL = np.array([[0.0, 0.0], [96.0, 0.0], [88.0, 62.0], [10.0, 58.0]])
PAIRS = np.array(list(combinations(range(4), 2)))
SD = 0.5


class Published:
    """One published network: its nodes by name, its arrays, and its adjustment."""

    def __init__(self, name: str) -> None:
        self.net = PUBLISHED[name]
        self.nodes = list(self.net["coords0"])
        self.number = {node: k for k, node in enumerate(self.nodes)}
        rows = self.net["distances"]
        self.edges = np.array([[self.number[a], self.number[b]] for a, b, _, _ in rows])
        self.lengths = np.array([row[2] for row in rows])
        self.covariance = np.diag([row[3] ** 2 for row in rows])
        self.start = np.array([self.net["coords0"][node] for node in self.nodes])

    @property
    def kept(self):
        kind, *coordinates = self.net["datum"].split()
        if kind == "free":
            return keep_nothing(len(self.nodes))
        return keep_nodes(len(self.nodes), sorted({self.number[c[1:]] for c in coordinates}))

    def adjusted(self) -> AdjustedNetwork:
        return adjust_network(self.edges, self.lengths, self.covariance, self.start, self.kept)


def panel(sd: float = SD, kept=None, points=PANEL, edges=PAIRS) -> AdjustedNetwork:
    """The four-node panel with all six edges, adjusted from exact lengths."""
    covariance = sd**2 * np.eye(len(edges))
    datum = keep_direction(len(points), 0, 1) if kept is None else kept
    return adjust_network(edges, distances(points, edges), covariance, points, datum)


# ---------------------------------------------------------------- published


@pytest.mark.parametrize("name", NAMES)
def test_published_networks_come_back(name: str) -> None:
    case = Published(name)
    found, answer = case.adjusted(), case.net["gama"]
    freedom = answer["dof"]
    assert found.degrees_of_freedom == freedom
    # in units of the a-priori sigma: the answer is in mm²
    squares = found.chi_square * (1000.0 * case.net["sigma0_apriori"]) ** 2
    assert squares == pytest.approx(answer["sum_of_squares_vv_mm2"], rel=1e-6)
    sigma0 = np.sqrt(found.chi_square / freedom)
    assert sigma0 == pytest.approx(answer["ratio"], abs=6e-4)
    low, high = np.sqrt(stats.chi2.ppf([0.025, 0.975], freedom) / freedom)
    assert [low, high] == pytest.approx([answer["chi_lower"], answer["chi_upper"]], abs=6e-4)
    assert ("passed" if low < sigma0 < high else "failed") == answer["test"]
    sds = sigma0 * 100.0 * np.sqrt(np.diag(found.covariance)).reshape(-1, 2)
    for node, place in answer["adjusted"].items():
        at = case.number[node]
        assert found.points[at] == pytest.approx(place, abs=1e-8)
        printed = case.net["published_adjusted"][node]
        assert sds[at] == pytest.approx([printed["sx_cm"], printed["sy_cm"]], abs=6e-4)


@pytest.mark.parametrize("name", NAMES)
def test_published_covariance_comes_back(name: str) -> None:
    # gnu-gama mirrors y inside, so the cross terms of x and y have the other sign there
    case = Published(name)
    found = case.adjusted()
    nodes = [case.number[node] for node in case.net["gama"]["adjusted"]]
    at = np.ravel([[2 * k, 2 * k + 1] for k in nodes])
    sign = np.tile([1.0, -1.0], len(nodes))
    ours = found.chi_square / found.degrees_of_freedom * found.covariance[np.ix_(at, at)] * 1e6
    printed = case.net["gama"]["cov_upper_mm2"]
    assert (ours * np.outer(sign, sign))[np.triu_indices(len(at))] == pytest.approx(
        printed, abs=2e-3, rel=1e-4
    )


def test_factor_of_the_ellipse_of_95_percent() -> None:
    # JCGM 102:2011, 6.5.2.3 and table 1: 2.45 for two quantities
    assert ellipse_factor() == pytest.approx(PUBLISHED["jcgm102"]["k_p_95"]["2"], abs=5e-3)
    assert ellipse_factor(degrees_of_freedom=10) == pytest.approx(np.sqrt(2 * stats.f.ppf(0.95, 2, 10)))
    assert ellipse_factor(degrees_of_freedom=1e7) == pytest.approx(ellipse_factor(), abs=1e-5)


def test_an_ellipse_lies_along_the_larger_spread() -> None:
    turn = rotation(0.6)
    found = standard_ellipses(turn @ np.diag([9.0, 4.0]) @ turn.T)
    assert (found.semi_major[0], found.semi_minor[0]) == pytest.approx((3.0, 2.0))
    assert found.angle[0] == pytest.approx(0.6)


# ---------------------------------------------------------------- properties


shapes = st.builds(
    lambda stretch, shear, moved: stretched_and_sheared(PANEL, stretch, shear) + np.reshape(moved, (4, 2)),
    st.floats(0.9, 1.4),
    st.floats(-0.2, 0.2),
    st.lists(st.floats(-5, 5), min_size=8, max_size=8),
)
errors = st.lists(st.floats(-1.5, 1.5), min_size=6, max_size=6).map(np.array)


@settings(max_examples=30, deadline=None)
@given(shapes, errors)
def test_inner_quantities_do_not_depend_on_the_datum(points, wrong) -> None:
    lengths = distances(points, PAIRS) + wrong
    covariance = SD**2 * (np.eye(6) + 0.3)
    ends = into_frame(points, 0, 1)[0]
    data = [keep_direction(4, 0, 1), keep_nothing(4)]
    one, other = (adjust_network(PAIRS, lengths, covariance, ends, kept) for kept in data)
    assert one.chi_square == pytest.approx(other.chi_square, rel=1e-6, abs=1e-9)
    assert one.residuals == pytest.approx(other.residuals, abs=1e-7)
    assert one.length_covariance == pytest.approx(other.length_covariance, abs=1e-6)
    assert fit_rigidly(one.points, other.points).differences == pytest.approx(0.0, abs=1e-6)


@settings(max_examples=30, deadline=None)
@given(shapes, errors)
def test_inner_constraints_against_the_known_shape_are_the_best_rigid_fit_to_it(points, wrong) -> None:
    # page 8 shows shapes after the best rigid fit: to first order the free network of inner constraints
    lengths = distances(points, PAIRS) + 1e-3 * wrong
    covariance = SD**2 * (np.eye(6) + 0.3)
    ends = into_frame(points, 0, 1)[0]
    free = adjust_network(PAIRS, lengths, covariance, ends, keep_nothing(4))
    fixed = adjust_network(PAIRS, lengths, covariance, ends, keep_direction(4, 0, 1))
    fit = fit_rigidly(fixed.points, ends)
    assert free.points == pytest.approx(fit.moved, abs=1e-5)  # the second order of errors of 1.5 µm in 100 mm
    assert free.covariance == pytest.approx(fit.projector @ fixed.covariance @ fit.projector.T, abs=1e-4)


@settings(max_examples=30, deadline=None)
@given(shapes, errors, st.floats(-3, 3), st.floats(0.2, 30.0))
def test_a_figure_moved_turned_and_scaled_adjusts_alike(points, wrong, angle, scale) -> None:
    lengths = distances(points, PAIRS) + wrong
    moved = scale * points @ rotation(angle).T + np.array([300.0, -20.0])
    first = adjust_network(PAIRS, lengths, SD**2 * np.eye(6), points, keep_nothing(4))
    scaled = adjust_network(PAIRS, scale * lengths, (scale * SD) ** 2 * np.eye(6), moved, keep_nothing(4))
    assert scaled.chi_square == pytest.approx(first.chi_square, rel=1e-6, abs=1e-9)
    expected = scale * first.points @ rotation(angle).T + np.array([300.0, -20.0])
    assert scaled.points == pytest.approx(expected, abs=1e-6 * scale)
    assert np.trace(scaled.covariance) == pytest.approx(scale**2 * np.trace(first.covariance), rel=1e-6)


@settings(max_examples=30, deadline=None)
@given(shapes, st.sampled_from(list(combinations(range(4), 2))))
def test_inner_constraints_make_the_trace_least(points, datum) -> None:
    frame = into_frame(points, *datum)[0]
    free = panel(points=frame, kept=keep_nothing(4))
    fixed = panel(points=frame, kept=keep_direction(4, *datum))
    assert np.trace(free.covariance) <= np.trace(fixed.covariance) * (1 + 1e-9)
    away = frame - frame.mean(axis=0)
    turning = np.column_stack([-away[:, 1], away[:, 0]]).ravel()
    for motion in (np.tile([1.0, 0.0], 4), np.tile([0.0, 1.0], 4), turning):
        assert free.covariance @ motion == pytest.approx(0.0, abs=1e-8)


@settings(max_examples=20, deadline=None)
@given(shapes, st.floats(-3, 3))
def test_a_rigid_fit_takes_back_any_motion(points, angle) -> None:
    moved = points @ rotation(angle).T + np.array([5.0, -7.0])
    fit = fit_rigidly(moved, points)
    assert fit.moved == pytest.approx(points, abs=1e-9)
    assert np.cos(fit.angle + angle) == pytest.approx(1.0)


def test_derivatives_of_a_frame_and_a_fit_are_those_of_small_changes() -> None:
    rng = np.random.default_rng(3)
    turned = PANEL @ rotation(0.7).T + 9.0
    step = 1e-5 * rng.standard_normal((4, 2))
    before, slopes = into_frame(turned, 1, 3)
    assert before[1] == pytest.approx(0.0)
    assert before[3, 1] == pytest.approx(0.0)
    after = into_frame(turned + step, 1, 3)[0]
    assert (after - before).ravel() == pytest.approx(slopes @ step.ravel(), abs=1e-9)
    fit = fit_rigidly(turned, PANEL)
    again = fit_rigidly(turned + step, PANEL)
    inside = step @ rotation(fit.angle).T
    assert again.differences.ravel() == pytest.approx(-fit.projector @ inside.ravel(), abs=1e-8)


# ---------------------------------------------------------------- simulated


def test_ellipses_of_95_percent_hold_their_level_over_2000_placements() -> None:
    found = panel()
    rng = np.random.default_rng(20)
    draws = distances(PANEL, PAIRS) + SD * rng.standard_normal((2000, 6))
    drawn = adjust_draws(found, PAIRS, draws, SD**2 * np.eye(6), keep_direction(4, 0, 1))
    assert drawn.solved.all()
    low, high = stats.binom.ppf([0.0005, 0.9995], 2000, 0.95)
    for node in (2, 3):
        block = found.covariance[2 * node : 2 * node + 2, 2 * node : 2 * node + 2]
        away = drawn.points[:, node] - PANEL[node]
        distance = np.einsum("di,ij,dj->d", away, np.linalg.inv(block), away)
        assert low <= np.sum(distance <= ellipse_factor() ** 2) <= high


def test_ellipses_with_an_estimated_sigma0_hold_their_level_too() -> None:
    five = np.array([[0.0, 0.0], [80.0, 0.0], [100.0, 55.0], [42.0, 92.0], [-16.0, 52.0]])
    pairs = np.array(list(combinations(range(5), 2)))
    kept = keep_direction(5, 0, 1)
    base = panel(points=five, edges=pairs, kept=kept)
    draws = distances(five, pairs) + SD * np.random.default_rng(21).standard_normal((2000, 10))
    drawn = adjust_draws(base, pairs, draws, SD**2 * np.eye(10), kept)
    squares = np.sum((distances(drawn.points, pairs) - draws) ** 2, axis=1) / SD**2
    away = drawn.points[:, 3] - five[3]
    distance = np.einsum("di,ij,dj->d", away, np.linalg.inv(base.covariance[6:8, 6:8]), away)
    inside = distance <= squares / 3 * ellipse_factor(degrees_of_freedom=3) ** 2
    low, high = stats.binom.ppf([0.0005, 0.9995], 2000, 0.95)
    assert low <= inside.sum() <= high


@settings(max_examples=15, deadline=None)
@given(st.integers(0, 10**6), st.lists(st.sampled_from([-1.0, 0.0, 1.0]), min_size=6, max_size=6).filter(any))
def test_the_variance_of_any_sum_of_edges_is_that_of_monte_carlo(seed, weights) -> None:
    # lengths that share errors, as those of one module do
    rng = np.random.default_rng(seed)
    covariance = SD**2 * (np.eye(6) + np.outer(*2 * [0.5 + rng.random(6)]))
    found = adjust_network(PAIRS, distances(PANEL, PAIRS), covariance, PANEL, keep_direction(4, 0, 1))
    draws = rng.multivariate_normal(distances(PANEL, PAIRS), covariance, size=4000)
    drawn = adjust_draws(found, PAIRS, draws, covariance, keep_direction(4, 0, 1))
    sums = distances(drawn.points, PAIRS) @ np.array(weights)
    first_order = np.array(weights) @ found.length_covariance @ np.array(weights)
    # the variance of 4,000 draws has a relative SD of √(2/4000) = 0.022
    assert np.var(sums, ddof=1) == pytest.approx(first_order, rel=0.1, abs=1e-9)


def test_monte_carlo_and_first_order_agree_where_errors_are_small() -> None:
    found = panel(sd=0.05)
    draws = distances(PANEL, PAIRS) + 0.05 * np.random.default_rng(1).standard_normal((4000, 6))
    drawn = adjust_draws(found, PAIRS, draws, 0.05**2 * np.eye(6), keep_direction(4, 0, 1))
    assert drawn.mean == pytest.approx(found.points, abs=0.005)
    sds = np.sqrt(np.diag(drawn.covariance))
    assert sds == pytest.approx(np.sqrt(np.diag(found.covariance)), rel=0.06, abs=1e-9)


def test_draws_that_cannot_close_are_counted() -> None:
    triangle, pairs = np.array([[0.0, 0.0], [100.0, 0.0], [50.0, 3.0]]), np.array([[0, 1], [0, 2], [1, 2]])
    kept = keep_direction(3, 0, 1)
    base = adjust_network(pairs, distances(triangle, pairs), np.eye(3), triangle, kept)
    draws = distances(triangle, pairs) + np.random.default_rng(0).standard_normal((500, 3))
    closes = draws[:, 0] < draws[:, 1] + draws[:, 2]
    drawn = adjust_draws(base, pairs, draws, np.eye(3), kept)
    assert 50 < (~closes).sum() < 450
    assert not drawn.solved[~closes].any()
    assert drawn.solved[closes].mean() > 0.95


# ---------------------------------------------------------------- amplification


def test_node_errors_grow_as_the_shape_flattens() -> None:
    # common practice, no source: several times the length errors, and more the flatter the shape
    flatter = (1.0, 0.5, 0.25, 0.1, 0.03)
    whole = [node_amplification(PANEL * np.array([1.0, flat]), PAIRS).max() for flat in flatter]
    # a node held by two edges only: the triangle of the first three nodes
    three = [
        node_amplification(PANEL[:3] * np.array([1.0, flat]), PAIRS[[0, 1, 3]]).max() for flat in flatter
    ]
    for found in (whole, three):
        assert np.all(np.diff(found) > 0)
        assert found[0] < 1.5
        assert found[-1] > 3.0


def test_amplification_is_the_spread_of_a_free_network() -> None:
    free = panel(sd=1.0, kept=keep_nothing(4))
    expected = np.sqrt(np.diag(free.covariance).reshape(-1, 2).sum(axis=1))
    assert node_amplification(PANEL, PAIRS) == pytest.approx(expected)
    assert np.isinf(node_amplification(PANEL * [1.0, 0.0], PAIRS)).all()


def test_the_map_ends_where_lengths_cannot_be_read() -> None:
    stretches, shears = np.linspace(1.0, 1.4, 5), np.linspace(-0.4, 0.4, 5)
    found = amplification_map(PANEL, PAIRS, stretches, shears, (0.0, 0.4))
    assert found.shape == (5, 5, 4)
    for i, stretch in enumerate(stretches):
        for j, shear in enumerate(shears):
            points = stretched_and_sheared(PANEL, stretch, shear)
            strain = distances(points, PAIRS) / distances(PANEL, PAIRS) - 1.0
            inside = strain.min() > -1e-9 and strain.max() < 0.4 + 1e-9
            assert np.isfinite(found[i, j]).all() == inside
    assert np.isfinite(found[0, 2]).all()
    assert np.isnan(found[0, 0]).all()


# ---------------------------------------------------------------- figures


def test_rigid_parts_of_a_panel_with_edges_missing() -> None:
    assert rigid_parts(PANEL, PAIRS) == ((0, 1, 2, 3),)
    assert rigid_parts(PANEL, PAIRS[1:]) == ((0, 1, 2, 3),)
    # without AC and AD node A hangs on AB alone
    left = np.array([[0, 1], [1, 2], [1, 3], [2, 3]])
    assert rigid_parts(PANEL, left) == ((1, 2, 3), (0, 1))
    quadrilateral = np.array([[0, 1], [1, 2], [2, 3], [0, 3]])
    assert [len(part) for part in rigid_parts(PANEL, quadrilateral)] == [2, 2, 2, 2]


@settings(max_examples=30, deadline=None)
@given(shapes)
def test_nodes_placed_one_by_one_are_where_they_are(points) -> None:
    frame = into_frame(points, 0, 1)[0]
    layout = into_frame(PANEL, 0, 1)[0]
    placed = place_nodes(PAIRS, distances(frame, PAIRS), layout, (0, 1))
    assert placed == pytest.approx(frame, abs=1e-6)
    assert not turned_over(placed, PAIRS, layout)


def test_the_layout_says_on_which_side_a_node_lies() -> None:
    mirrored = PANEL * [1.0, -1.0]
    lengths = distances(PANEL, PAIRS)
    for layout in (PANEL, mirrored):
        placed = place_nodes(PAIRS, lengths, layout, (0, 1))
        found = adjust_network(PAIRS, lengths, np.eye(6), placed, keep_direction(4, 0, 1))
        assert found.points == pytest.approx(layout, abs=1e-7)
    assert turned_over(mirrored, PAIRS, PANEL)


def test_the_edge_that_breaks_two_triangles_is_the_one_in_doubt() -> None:
    lengths, covariance = distances(PANEL, PAIRS), np.eye(6) * 0.25
    assert broken_triangles(PAIRS, lengths, covariance) == []
    long = lengths.copy()
    long[5] = 260.0  # between the third and fourth node
    broken = broken_triangles(PAIRS, long, covariance)
    assert len(broken) == 2
    assert edges_to_leave_out(broken) == (5,)
    triangle = np.array([[0, 1], [0, 2], [1, 2]])
    broken = broken_triangles(triangle, np.array([10.0, 4.0, 5.0]), 0.01 * np.eye(3))
    assert (broken[0].edges[0], broken[0].excess) == (0, pytest.approx(1.0))
    assert edges_to_leave_out(broken) == (0, 1, 2)
    assert broken_triangles(triangle, np.array([9.1, 4.0, 5.0]), 0.01 * np.eye(3)) == []


def test_what_cannot_be_adjusted_is_named() -> None:
    lengths = distances(PANEL, PAIRS)
    with pytest.raises(UnsolvedNetworkError, match="4 lengths for 5 coordinates"):
        adjust_network(PAIRS[:4], lengths[:4], np.eye(4), PANEL, keep_direction(4, 0, 1))
    flat = PANEL * [1.0, 1e-4]
    with pytest.raises(UnsolvedNetworkError, match="singular figure"):
        adjust_network(PAIRS, distances(flat, PAIRS), np.eye(6), flat, keep_direction(4, 0, 1))
    hinged = np.array([[0, 1], [1, 2], [2, 3], [0, 3], [0, 1]])
    with pytest.raises(UnsolvedNetworkError, match="singular"):
        adjust_network(hinged, distances(PANEL, hinged), np.eye(5), PANEL, keep_direction(4, 0, 1))


def test_the_design_is_the_derivative_of_the_lengths() -> None:
    step = 1e-6 * np.random.default_rng(0).standard_normal((4, 2))
    change = distances(PANEL + step, PAIRS) - distances(PANEL, PAIRS)
    assert change == pytest.approx(distance_design(PANEL, PAIRS) @ step.ravel(), abs=1e-11)
