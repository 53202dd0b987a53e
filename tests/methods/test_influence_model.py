"""An influence's coefficients: exact cases, invariances, degenerate designs, and intervals that cover."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from scipy import stats

from campaign.methods.influence_model import (
    POOLED,
    RUNS,
    SWEEPS,
    WITHIN,
    InfluenceFit,
    SweepSet,
    compensate,
    distinct_lengths,
    fit_influences,
    left_out_slopes,
    loop_width,
    quotient,
    spread_about_sweeps,
    sweep_lines,
)

COEFFICIENT = st.floats(-5.0, 5.0)


def sweeps(x, slope, run, error=0.01, freedom=20.0):
    x = np.asarray(x, dtype=float)
    return SweepSet(
        x,
        np.asarray(slope, dtype=float),
        np.full(len(x), error),
        np.full(len(x), freedom),
        np.asarray(run, dtype=np.int64),
    )


def up_and_down(points=12, top=20.0):
    rising = np.linspace(0.0, top, points)
    return np.concatenate([rising, rising[::-1]]), np.repeat([1, -1], points)


@given(COEFFICIENT, COEFFICIENT, COEFFICIENT, COEFFICIENT)
@example(0.0, 1.0, 2.4e-220, 0.0)  # what is left of the samples is too small to be squared
@settings(deadline=None)
def test_without_noise_the_model_is_found_exactly(a, b, c, d):
    lengths = np.array([0.0, 0.1, 0.3, 0.4])
    p, branch = up_and_down()
    signal = np.concatenate([a + b * x + (c + d * x) * p for x in lengths])
    counts = np.full(4, len(p))
    found = sweep_lines(np.tile(p, 4), signal, counts, np.tile(branch, 4), np.full(4 * len(p), np.nan))
    assert found.level == pytest.approx(a + b * lengths, abs=1e-9)
    fit = fit_influences([sweeps(lengths, found.slope, [0, 0, 0, 0])])[0]
    assert fit.coefficients == pytest.approx([c, d], abs=1e-9)
    assert found.loop == pytest.approx(np.zeros(4), abs=1e-9)


@given(st.floats(0.1, 50.0), st.floats(-100.0, 100.0), st.integers(0, 10_000))
@settings(deadline=None)
def test_units_and_order_do_not_matter(scale, shift, seed):
    rng = np.random.default_rng(seed)
    p, branch = up_and_down()
    counts = np.full(6, len(p))
    x, run = np.tile([0.0, 0.2, 0.4], 2), np.repeat([0, 1], 3)
    signal = 0.3 * np.tile(p, 6) + rng.normal(size=6 * len(p))
    time = np.full(len(signal), np.nan)
    plain = sweep_lines(np.tile(p, 6), signal, counts, np.tile(branch, 6), time)
    other = sweep_lines(np.tile(p, 6) / scale, signal + shift, counts, np.tile(branch, 6), time)
    assert other.slope == pytest.approx(plain.slope * scale, rel=1e-8)
    assert other.loop == pytest.approx(plain.loop, abs=1e-8)
    first = fit_influences([sweeps(x, plain.slope, run)])[0]
    order = rng.permutation(6)
    second = fit_influences([sweeps(x[order], other.slope[order], run[order])])[0]
    assert second.coefficients == pytest.approx(first.coefficients * scale, rel=1e-7, abs=1e-9)
    assert second.covariance == pytest.approx(first.covariance * scale**2, rel=1e-6, abs=1e-12)


def test_one_length_gives_no_change_with_strain():
    fit = fit_influences([sweeps([0.2, 0.2, 0.2], [1.0, 1.2, 1.1], [0, 1, 2])])[0]
    assert fit.coefficients[0] == pytest.approx(1.1)
    assert math.isnan(fit.coefficients[1])
    assert not fit.has_change
    # mean of three runs: SD 0.1, standard error 0.1/√3, two degrees of freedom
    assert math.sqrt(fit.at(0.4)[1]) == pytest.approx(0.1 / math.sqrt(3.0))
    assert (fit.degrees_of_freedom, fit.source) == (2.0, RUNS)


def test_unknown_lengths_count_as_one():
    assert distinct_lengths(np.array([np.nan, 0.1, 0.4])) == 1
    fit = fit_influences([sweeps([np.nan, np.nan], [1.0, 1.4], [0, 1])])[0]
    assert fit.coefficients[0] == pytest.approx(1.2)


def test_one_sweep_has_the_interval_within_it_and_says_so():
    fit = fit_influences([sweeps([0.0], [0.5], [0], error=0.03, freedom=17.0)])[0]
    assert (fit.source, fit.degrees_of_freedom) == (WITHIN, 17.0)
    assert math.sqrt(fit.covariance[0, 0]) == pytest.approx(0.03)


def test_two_sweeps_at_two_lengths_leave_nothing_between_them():
    fit = fit_influences([sweeps([0.0, 0.5], [1.0, 2.0], [0, 0], error=0.1)])[0]
    assert fit.source == WITHIN
    assert fit.coefficients == pytest.approx([1.0, 2.0])
    # Var of (s₂ − s₁)/0.5 with independent standard errors of 0.1
    assert fit.covariance[1, 1] == pytest.approx(2.0 * 0.01 / 0.25)


def test_scatter_is_pooled_where_each_sensor_has_little():
    rng = np.random.default_rng(4)
    sets = [
        sweeps(np.tile([0.0, 0.2, 0.4], 2), rng.normal(0.05, 0.001, 6), np.repeat([0, 1], 3))
        for _ in range(5)
    ]
    fits = fit_influences(sets)
    assert {fit.source for fit in fits} == {POOLED}
    assert {fit.degrees_of_freedom for fit in fits} == {5.0}


def test_a_sensor_that_scatters_far_more_keeps_its_own():
    rng = np.random.default_rng(5)
    quiet = [sweeps(np.full(4, 0.1), rng.normal(0.05, 0.001, 4), np.arange(4)) for _ in range(6)]
    loud = sweeps(np.full(4, 0.1), rng.normal(0.05, 0.5, 4), np.arange(4))
    fits = fit_influences([*quiet, loud])
    assert fits[-1].source == RUNS
    assert fits[0].source == POOLED


def _covered(draw, truth, seeds=400):
    """How often the 95 % interval of the first sensor holds both coefficients."""
    held = np.zeros(2)
    for seed in range(seeds):
        fit = draw(np.random.default_rng(seed))
        reach = stats.t.ppf(0.975, fit.degrees_of_freedom) * np.sqrt(np.diag(fit.covariance))
        held += np.abs(fit.coefficients - truth) <= reach
    return held / seeds


@pytest.mark.parametrize("sensors", [1, 4])
def test_intervals_cover_where_runs_differ_in_both_coefficients(sensors):
    x, run = np.tile([0.0, 0.2, 0.4], 4), np.repeat(np.arange(4), 3)

    def draw(rng):
        sets = []
        for _ in range(sensors):
            own = rng.normal(0.0, [0.004, 0.02], size=(4, 2))
            slope = 0.05 + own[run, 0] + (0.1 + own[run, 1]) * x + rng.normal(0.0, 0.0005, 12)
            sets.append(sweeps(x, slope, run))
        return fit_influences(sets)[0]

    low, high = stats.binom.ppf([0.0005, 0.9995], 400, 0.95) / 400
    covered = _covered(draw, np.array([0.05, 0.1]))
    assert np.all((covered >= low) & (covered <= high)), covered


def test_intervals_cover_where_every_length_is_a_run_of_its_own():
    x = np.array([0.0, 0.0, 0.2, 0.2, 0.4, 0.4])

    def draw(rng):
        slope = 0.05 + 0.1 * x + rng.normal(0.0, 0.003, 6)
        fit = fit_influences([sweeps(x, slope, np.arange(6))])[0]
        assert fit.source == SWEEPS
        return fit

    low, high = stats.binom.ppf([0.0005, 0.9995], 400, 0.95) / 400
    covered = _covered(draw, np.array([0.05, 0.1]))
    assert np.all((covered >= low) & (covered <= high)), covered


def test_one_sweep_with_autocorrelated_noise_is_not_overstated():
    # independent-samples intervals would hold the truth in about half of these
    held = 0
    p, branch = up_and_down(points=60)
    for seed in range(200):
        rng = np.random.default_rng(seed)
        noise = np.zeros(len(p))
        for i, step in enumerate(rng.normal(size=len(p))):
            noise[i] = 0.8 * noise[i - 1] + step if i else step / 0.6
        found = sweep_lines(p, 0.3 * p + noise, np.array([len(p)]), branch, np.full(len(p), np.nan))
        reach = stats.t.ppf(0.975, found.slope_freedom[0]) * found.slope_error[0]
        held += abs(found.slope[0] - 0.3) <= reach
    assert held / 200 > 0.85


def test_loop_width_has_the_sign_of_rising_less_falling():
    p, branch = up_and_down()
    signal = p + np.where(branch == 1, 0.5, -0.5)
    assert loop_width(p, signal, branch) == pytest.approx(1.0)
    assert math.isnan(loop_width(p[:12], signal[:12], branch[:12]))


def test_a_drift_is_told_from_pressure_where_the_sweep_comes_back():
    p, branch = up_and_down(points=40)
    time = np.arange(len(p), dtype=float)
    noise = np.random.default_rng(1).normal(0.0, 0.01, len(p))
    signal = 2.0 * p + 0.05 * time + noise
    back = sweep_lines(p, signal, np.array([80]), branch, time)
    assert abs(back.time_correlation[0]) < 0.1
    assert back.drift[0] == pytest.approx(0.05, rel=0.02)
    assert back.drift_p[0] < 1e-6
    one_way = sweep_lines(p[:40], signal[:40], np.array([40]), branch[:40], time[:40])
    assert one_way.time_correlation[0] == pytest.approx(1.0)
    assert math.isnan(one_way.drift[0])


def test_what_is_left_out_is_never_used():
    x, run = np.tile([0.0, 0.5], 3), np.repeat([0, 1, 2], 2)
    slope = np.array([1.0, 2.0, 1.0, 2.0, 9.0, 9.0])
    predicted, by = left_out_slopes(x, slope, run)
    assert by == "run"
    assert predicted[4:] == pytest.approx([1.0, 2.0])
    by_length, what = left_out_slopes(np.array([0.0, 0.2, 0.4]), np.array([1.0, 1.2, 1.4]), np.zeros(3, int))
    assert what == "length"
    assert by_length == pytest.approx([1.0, 1.2, 1.4])
    alone, nothing = left_out_slopes(np.array([0.1]), np.array([1.0]), np.zeros(1, int))
    assert math.isnan(alone[0])
    assert nothing == ""


@given(COEFFICIENT, COEFFICIENT, st.integers(0, 1000))
@settings(deadline=None)
def test_the_right_slopes_leave_the_noise_alone(c, d, seed):
    rng = np.random.default_rng(seed)
    x, p = rng.uniform(0.0, 0.4, 50), rng.uniform(0.0, 20.0, 50)
    noise = rng.normal(size=50)
    fit = InfluenceFit(np.array([c, d]), np.eye(2), 5.0, RUNS, 2, 4, 2)
    assert compensate(noise + (c + d * x) * p, x, p, fit) == pytest.approx(noise, abs=1e-9)
    sweep = np.repeat([0, 1], 25)
    left = spread_about_sweeps(p, noise + np.array([c, d])[sweep] * p, sweep, np.array([c, d]))
    assert left == pytest.approx(spread_about_sweeps(p, noise, sweep, np.zeros(2)), abs=1e-9)


def test_quotient_adds_relative_variances():
    # u²(r)/r² = u²(v)/v² + u²(b)/b² (GUM 5.1.6); Welch–Satterthwaite by hand
    ratio, uncertainty, freedom = quotient(2.0, 0.04, 10.0, 0.25, {"value": 4.0, "divisor": 8.0})
    assert ratio == pytest.approx(0.2)
    assert uncertainty == pytest.approx(0.2 * math.sqrt(0.1**2 + 0.05**2))
    parts = np.array([0.02**2, 0.01**2])
    assert freedom == pytest.approx(parts.sum() ** 2 / (parts[0] ** 2 / 4 + parts[1] ** 2 / 8))
    assert math.isnan(quotient(1.0, 0.1, 0.0, 0.1, {"value": 1.0, "divisor": 1.0})[0])
