"""Loops: cycles found whatever the log looks like, and exact widths and areas of loops that are known."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from campaign.methods.loops import FRACTIONS, MID, find_cycles, find_reversals, measure_loops, thin_cycles

AMPLITUDE = 0.4


def triangle(cycles: int, samples: int = 80) -> np.ndarray:
    """A wave from 0 to AMPLITUDE and back, so many times, with samples at every turn."""
    phase = np.arange(cycles * samples + 1) / samples
    return AMPLITUDE * (1.0 - np.abs(2.0 * (phase % 1.0) - 1.0))


def is_rising(cycles: int, samples: int = 80) -> np.ndarray:
    return (np.arange(cycles * samples + 1) / samples) % 1.0 < 0.5


def parallelogram(cycles: int, width: float, slope: float = 50.0) -> tuple[np.ndarray, np.ndarray]:
    x = triangle(cycles)
    return x, 100.0 + slope * x + np.where(is_rising(cycles), 0.5, -0.5) * width


def ellipse(cycles: int, half_width: float, samples: int = 400) -> tuple[np.ndarray, np.ndarray]:
    angle = 2.0 * np.pi * np.arange(cycles * samples + 1) / samples
    return AMPLITUDE / 2 * (1.0 - np.cos(angle)), 20.0 + half_width * np.sin(angle)


# ---------------------------------------------------------------- widths and areas


def test_a_parallelogram_has_its_width_everywhere_and_its_area() -> None:
    x, y = parallelogram(3, 2.0)
    loops = measure_loops(y, find_cycles(x))
    assert loops.width[:, 1:-1] == pytest.approx(2.0, abs=1e-9)
    # width × range, less the half step that the closing corners cut off
    assert loops.area == pytest.approx(2.0 * AMPLITUDE, rel=0.03)
    assert loops.low == pytest.approx(0.0, abs=1e-9)
    assert loops.high == pytest.approx(AMPLITUDE, abs=1e-9)


def test_an_ellipse_has_its_area_and_its_width_at_the_middle() -> None:
    x, y = ellipse(4, 3.0)
    loops = measure_loops(y, find_cycles(x))
    assert loops.area == pytest.approx(math.pi * AMPLITUDE / 2 * 3.0, rel=1e-4)
    assert loops.width[:, MID] == pytest.approx(6.0, rel=1e-3)
    inside = slice(3, -3)
    exact = 6.0 * np.sqrt(1.0 - (2.0 * FRACTIONS - 1.0) ** 2)
    assert loops.width[0, inside] == pytest.approx(exact[inside], rel=0.01)
    assert np.abs(loops.largest_width) == pytest.approx(6.0, rel=1e-3)
    assert loops.at == pytest.approx(AMPLITUDE / 2, abs=0.03)


def test_the_degree_by_area_is_the_area_over_that_under_the_loading_branch() -> None:
    x, y = parallelogram(2, 2.0)
    loops = measure_loops(y, find_cycles(x))
    # loading branch: from 101 to 121 over 0.4; above its own beginning it is a triangle of 4
    assert loops.degree == pytest.approx(np.abs(loops.area) / 4.0, rel=0.01)
    assert loops.degree_of_whole_signal == pytest.approx(np.abs(loops.area) / (111.0 * AMPLITUDE), rel=0.01)


def test_a_loop_run_the_other_way_round_has_the_other_sign() -> None:
    x, y = parallelogram(3, -2.0)
    loops = measure_loops(y, find_cycles(x))
    assert loops.width[:, MID] == pytest.approx(-2.0, abs=1e-9)
    assert np.all(loops.area < 0)


def test_the_textbook_table_of_readings_up_and_down() -> None:
    # tests/reference: a classic pressure-gauge table, eleven readings up and eleven down; largest difference
    # 0.61 at 6, which is 5.573 % of the end-point output 10.945 (reference/expected.json, hysteresis/up_down)
    up = [-1.12, 0.21, 1.18, 2.09, 3.33, 4.50, 5.26, 6.59, 7.73, 8.68, 9.88]
    down = [-0.69, 0.42, 1.65, 2.48, 3.62, 4.71, 5.87, 6.86, 7.92, 9.10, 10.20]
    x = np.array([*range(11), *range(10, -1, -1)], float)
    y = np.array(up + down[::-1])
    loops = measure_loops(y, find_cycles(x))
    assert loops.largest_width[0] == pytest.approx(-0.61, abs=1e-9)
    assert loops.at[0] == pytest.approx(6.0, abs=1e-9)
    assert 100 * abs(loops.largest_width[0]) / 10.945 == pytest.approx(5.573321151210602, rel=1e-9)


@settings(max_examples=40, deadline=None)
@given(
    offset=st.floats(-1e3, 1e3),
    trend=st.floats(-200.0, 200.0),
    factor=st.floats(0.01, 100.0),
    shift=st.floats(-50.0, 50.0),
)
def test_widths_know_no_line_under_the_loop_and_scale_with_the_signal(
    offset: float, trend: float, factor: float, shift: float
) -> None:
    x, y = ellipse(2, 3.0, samples=120)
    plain = measure_loops(y, find_cycles(x))
    moved = measure_loops(factor * y + offset + trend * x, find_cycles(x + shift))
    assert moved.width == pytest.approx(factor * plain.width, abs=1e-6 * (1 + abs(trend) + factor))
    assert moved.area == pytest.approx(factor * plain.area, abs=1e-6 * (1 + abs(trend) + factor))


def test_the_rate_is_that_of_the_motion_and_rests_at_the_ends_do_not_count() -> None:
    x = triangle(3)
    time = 0.1 * np.arange(len(x))
    rate = measure_loops(x, find_cycles(x), time).loading_rate
    assert rate == pytest.approx(AMPLITUDE / 4.0, rel=1e-6)
    rested = np.concatenate([np.repeat(part, [1] * 40 + [60]) for part in (x[:41], x[40:81])])
    times = 0.1 * np.arange(len(rested))
    found = measure_loops(rested, find_cycles(rested), times)
    assert found.loading_rate == pytest.approx(AMPLITUDE / 4.0, rel=0.02)


def test_relaxation_while_at_rest_is_in_neither_branch() -> None:
    up, down = np.linspace(0, AMPLITUDE, 100), np.linspace(AMPLITUDE, 0, 100)
    dwell = np.full(200, AMPLITUDE)
    x = np.concatenate([up, dwell, down])
    y = np.concatenate([50 * up, 20.0 - np.linspace(0, 5, 200), 50 * down - 5.0])
    loops = measure_loops(y, find_cycles(x))
    assert loops.width[0] == pytest.approx(5.0, abs=1e-6)


def test_no_width_is_taken_across_a_hole_or_without_a_signal() -> None:
    x, y = parallelogram(2, 2.0)
    y = y.copy()
    y[(x > 0.15) & (x < 0.25)] = np.nan
    loops = measure_loops(y, find_cycles(x))
    assert np.all(np.isnan(loops.width[:, MID]))
    assert loops.width[:, 2] == pytest.approx(2.0, abs=1e-9)
    assert np.all(loops.hole > 0.2)
    nothing = measure_loops(np.full(len(x), np.nan), find_cycles(x))
    assert np.all(np.isnan(nothing.width))


# ---------------------------------------------------------------- cycles


@pytest.mark.parametrize("noise", [0.0, 0.001, 0.004])
@pytest.mark.parametrize("dwell", [0, 25])
def test_cycles_are_counted_whatever_noise_and_rests(noise: float, dwell: int) -> None:
    wave = triangle(6)
    repeats = np.where(np.arange(len(wave)) % 40 == 0, 1 + dwell, 1)
    x = np.repeat(wave, repeats)
    x = x + np.random.default_rng(1).normal(0.0, noise, len(x))
    cycles = find_cycles(x)
    assert cycles.count == 6
    assert np.all(x[cycles.tops] > 0.9 * AMPLITUDE)
    assert np.all(x[cycles.starts] < 0.1 * AMPLITUDE)
    assert np.all(cycles.starts[1:] == cycles.stops[:-1])


def test_partial_cycles_at_both_ends_belong_to_none_and_unequal_ones_are_found() -> None:
    wave = np.concatenate([triangle(1), 0.5 * triangle(1)[1:], 0.2 * triangle(1)[1:], triangle(1)[1:]])
    assert find_cycles(wave).count == 4
    begun_late = measure_loops(wave[30:], find_cycles(wave[30:]))
    assert begun_late.high - begun_late.low == pytest.approx([0.1, 0.2, 0.08, 0.4], abs=0.011)
    assert find_cycles(wave[:-45]).count == 3
    assert find_cycles(np.concatenate([np.linspace(0.3, 0, 20), wave])).count == 4


def test_a_spike_of_one_sample_makes_no_cycle() -> None:
    x, y = parallelogram(4, 2.0)
    x = x.copy()
    x[[33, 150]] += 0.3
    assert find_cycles(x).count == 4
    assert measure_loops(y, find_cycles(x)).high == pytest.approx(AMPLITUDE, abs=1e-9)


@pytest.mark.parametrize("x", [[], [1.0], [1.0, 1.0, 1.0, 1.0, 1.0, 1.0], [0, 1, 2, 3, 4, 5, 6]])
def test_where_nothing_comes_back_there_is_no_cycle(x: list[float]) -> None:
    assert find_cycles(np.array(x, float)).count == 0


@settings(max_examples=150, deadline=None)
@given(st.lists(st.integers(-20, 20), min_size=2, max_size=80), st.integers(1, 25))
def test_reversals_alternate_and_keep_every_move_of_the_threshold(steps: list[int], threshold: int) -> None:
    values = np.cumsum(np.array(steps, float))
    places = find_reversals(values, float(threshold))
    moves = np.diff(values[places])
    assert np.all(np.abs(moves) >= threshold)
    assert np.all(moves[1:] * moves[:-1] < 0)
    # nothing between two turns moves against them by the threshold or more
    for start, stop in itertools.pairwise(places):
        stretch = values[start : stop + 1] * np.sign(values[stop] - values[start])
        assert np.max(np.maximum.accumulate(stretch) - stretch) < threshold
    if len(places) == 0:
        rise = np.max(values - np.minimum.accumulate(values))
        fall = np.max(np.maximum.accumulate(values) - values)
        assert max(rise, fall) < threshold


# ---------------------------------------------------------------- drawing


@settings(max_examples=30, deadline=None)
@given(st.integers(0, 2**32 - 1), st.integers(200, 4000))
def test_outlines_keep_both_ends_and_the_extremes_of_both_axes(seed: int, samples: int) -> None:
    rng = np.random.default_rng(seed)
    x, y = rng.normal(size=samples).cumsum(), rng.normal(size=samples).cumsum()
    [kept] = thin_cycles(x, y, np.array([10]), np.array([samples - 10]), buckets=16)
    own = slice(10, samples - 9)
    assert len(kept) <= 4 * 16 + 2
    assert (kept[0], kept[-1]) == (10, samples - 10)
    assert np.all(np.diff(kept) > 0)
    for values in (x, y):
        assert values[kept].min() == values[own].min()
        assert values[kept].max() == values[own].max()


def test_many_cycles_are_measured_quickly_and_alike() -> None:
    x, y = parallelogram(3000, 2.0)
    loops = measure_loops(y, find_cycles(x), np.arange(len(x)) * 0.01)
    assert len(loops.low) == 3000
    assert np.ptp(loops.width[:, MID]) < 1e-9
