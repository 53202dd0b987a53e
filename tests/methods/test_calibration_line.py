"""Least-squares lines and polynomials, lack of fit, and the line of runs."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st
from statsmodels.regression.linear_model import OLS

from campaign.methods.calibration_line import (
    common_quadratic,
    fit_lines,
    fit_polynomial,
    lack_of_fit_of_replicates,
    lack_of_fit_of_runs,
    line_of_runs,
    run_covariance,
    scatter_of_runs,
)

REFERENCE = Path(__file__).parents[1] / "reference" / "calibration"


def table(name: str) -> pd.DataFrame:
    return pd.read_csv(REFERENCE / name, comment="#")


def test_norris_to_certified_digits():
    # NIST StRD, Norris: certified values
    data = table("nist_norris.csv")
    fit = fit_polynomial(data["x"].to_numpy(), data["y"].to_numpy())
    assert fit.coefficients == pytest.approx([-0.262323073774029, 1.00211681802045], rel=1e-12)
    errors = np.sqrt(np.diag(fit.covariance))
    assert errors == pytest.approx([0.232818234301152, 0.000429796848199937], rel=1e-11)
    assert fit.residual_sd == pytest.approx(0.884796396144373, rel=1e-12)
    assert fit.residual_sum_of_squares == pytest.approx(26.6173985294224, rel=1e-12)
    assert fit.r_squared == pytest.approx(0.999993745883712, rel=1e-13)


def test_pontius_quadratic_to_certified_digits():
    # NIST StRD, Pontius: certified values of the quadratic
    data = table("nist_pontius.csv")
    fit = fit_polynomial(data["load"].to_numpy(float), data["deflection"].to_numpy(), degree=2)
    certified = [0.000673565789473684, 7.32059160401003e-07, -3.16081871345029e-15]
    assert fit.coefficients == pytest.approx(certified, rel=1e-10)
    certified_errors = [0.000107938612033077, 1.57817399981659e-10, 4.86652849992036e-17]
    assert np.sqrt(np.diag(fit.covariance)) == pytest.approx(certified_errors, rel=1e-9)
    assert fit.residual_sd == pytest.approx(0.205177424076185e-3, rel=1e-10)


def test_pontius_straight_line_lacks_fit():
    # NIST/SEMATECH e-Handbook 4.6.1 prints F = 214.7464 (single precision); double precision gives 214.74692
    data = table("nist_pontius.csv")
    test = lack_of_fit_of_replicates(data["load"].to_numpy(float), data["deflection"].to_numpy())
    assert (test.first_degrees, test.second_degrees) == (18, 20)
    assert test.statistic == pytest.approx(214.74692, rel=1e-7)
    assert test.statistic == pytest.approx(214.7464, rel=1e-5)
    assert test.p < 1e-15


def test_pontius_quadratic_does_not_lack_fit():
    # e-Handbook 4.6.1: lack of fit of the quadratic F = 0.8107 on 17 and 20
    data = table("nist_pontius.csv")
    test = lack_of_fit_of_replicates(data["load"].to_numpy(float), data["deflection"].to_numpy(), degree=2)
    assert (test.first_degrees, test.second_degrees) == (17, 20)
    assert test.statistic == pytest.approx(0.8107, abs=1e-4)


def test_gum_h3():
    # JCGM 100:2008, H.3: y1, s(y1), y2, s(y2), r, s, b(30), u(b(30)); t0 = 20
    data = table("gum_h3_thermometer.csv")
    fit = fit_polynomial(data["t_k"].to_numpy() - 20.0, data["b_k"].to_numpy())
    errors = np.sqrt(np.diag(fit.covariance))
    assert fit.intercept == pytest.approx(-0.1712, abs=5e-5)
    assert errors[0] == pytest.approx(0.0029, abs=5e-5)
    assert fit.slope == pytest.approx(0.00218, abs=5e-6)
    assert errors[1] == pytest.approx(0.00067, abs=5e-6)
    assert fit.covariance[0, 1] / errors.prod() == pytest.approx(-0.930, abs=5e-4)
    assert fit.residual_sd == pytest.approx(0.0035, abs=5e-5)
    place = np.array([1.0, 10.0])
    assert place @ fit.coefficients == pytest.approx(-0.1494, abs=5e-5)
    assert np.sqrt(place @ fit.covariance @ place) == pytest.approx(0.0041, abs=5e-5)
    assert fit.degrees_of_freedom == 9


def test_nist_calibration_line():
    # NIST/SEMATECH e-Handbook 2.3.6: coefficients and covariance of the linewidth calibration
    data = table("nist_calibration_line.csv")
    fit = fit_polynomial(data["x"].to_numpy(), data["y"].to_numpy())
    assert fit.coefficients == pytest.approx([0.2357623, 0.9870377], rel=1e-6)
    assert fit.covariance[0, 0] == pytest.approx(0.0005905067, rel=1e-6)
    assert fit.covariance[1, 1] == pytest.approx(1.183759e-05, rel=1e-6)
    assert fit.covariance[0, 1] == pytest.approx(-7.649453e-05, rel=1e-6)
    assert fit.residual_sd == pytest.approx(0.06203, abs=5e-6)


def test_too_few_levels_are_refused():
    with pytest.raises(ValueError, match="2 distinct values of x are needed, 1 given"):
        fit_polynomial(np.ones(4), np.arange(4.0))
    with pytest.raises(ValueError, match="repeated x"):
        lack_of_fit_of_replicates(np.arange(5.0), np.arange(5.0) ** 2)


values = st.floats(-100.0, 100.0, allow_subnormal=False)


@given(
    st.lists(
        st.tuples(st.floats(-10.0, 10.0), values), min_size=4, max_size=12, unique_by=lambda p: round(p[0], 2)
    ),
    st.floats(0.1, 50.0),
    st.floats(-1000.0, 1000.0),
    st.floats(-20.0, 20.0),
    st.floats(-500.0, 500.0),
)
def test_a_line_follows_changes_of_scale_and_origin(points, x_scale, x_shift, y_scale, y_shift):
    x, y = np.array(points).T
    fit = fit_polynomial(x, y)
    moved = fit_polynomial(x_scale * x + x_shift, y_scale * y + y_shift)
    size = 1.0 + np.abs(y).max() * abs(y_scale) + abs(y_shift)
    assert moved.value(x_scale * x + x_shift) == pytest.approx(
        y_scale * fit.value(x) + y_shift, abs=1e-7 * size
    )
    assert moved.residual_sd == pytest.approx(abs(y_scale) * fit.residual_sd, abs=1e-8 * size)


def test_lines_of_groups_are_those_of_ordinary_least_squares():
    rng = np.random.default_rng(5)
    group = np.repeat([0, 1, 2], [5, 8, 4])
    x, y = rng.uniform(0.0, 0.4, 17), rng.normal(100.0, 1.0, 17)
    lines = fit_lines(x, y, group, 3)
    for g in range(3):
        fit = OLS(y[group == g], np.column_stack([np.ones(np.sum(group == g)), x[group == g]])).fit()
        assert [lines.intercepts[g], lines.slopes[g]] == pytest.approx(fit.params, rel=1e-10)
        assert lines.residual_sums_of_squares[g] == pytest.approx(fit.ssr, rel=1e-10)


def test_a_group_at_one_level_has_no_slope():
    lines = fit_lines(np.array([0.1, 0.1, 0.0, 0.2]), np.arange(4.0), np.array([0, 0, 1, 1]), 2)
    assert np.isnan(lines.slopes[0])
    assert lines.slopes[1] == pytest.approx(5.0)


def test_common_quadratic_against_statsmodels():
    # the same model written out with one intercept and slope a run
    rng = np.random.default_rng(7)
    run = np.repeat([0, 1, 2], 9)
    x = np.tile(np.linspace(0.0, 0.4, 9), 3)
    y = 80 + 70 * x + 12.0 * x**2 + np.array([0.0, 1.0, -2.0])[run] * (1 + x) + rng.normal(0.0, 0.05, 27)
    indicators = (run[:, None] == np.arange(3)).astype(float)
    fit = OLS(y, np.column_stack([indicators, indicators * x[:, None], x**2])).fit()
    estimate, low, high = common_quadratic(x, y, run)
    assert estimate == pytest.approx(fit.params[-1], rel=1e-9)
    assert [low, high] == pytest.approx(fit.conf_int()[-1], rel=1e-9)


def test_runs_that_bend_alike_lack_fit_and_runs_that_do_not_keep_the_level():
    rng = np.random.default_rng(11)
    levels = np.linspace(0.0, 0.4, 9)
    run, level = np.repeat(np.arange(4), 9), np.tile(np.arange(9), 4)
    p = []
    for _ in range(400):
        y = rng.normal(0.0, 0.1, 36) + (rng.normal(0.0, 1.0, 4)[:, None] * (1.0 + levels)).ravel()
        p.append(_lack_of_runs(np.tile(levels, 4), y, run, level).p)
    assert 0.02 <= np.mean(np.array(p) < 0.05) <= 0.09
    bent = np.tile(2.0 * levels**2, 4) + rng.normal(0.0, 0.005, 36)
    assert _lack_of_runs(np.tile(levels, 4), bent, run, level).p < 1e-6


def _lack_of_runs(x, y, run, level):
    lines = fit_lines(x, y, run, run.max() + 1)
    residuals = y - lines.y_means[run] - lines.slopes[run] * (x - lines.x_means[run])
    return lack_of_fit_of_runs(residuals, run, level)


def test_runs_of_one_design_have_the_plain_mean_and_its_covariance():
    rng = np.random.default_rng(3)
    coefficients = rng.normal(0.0, [1.0, 4.0], (5, 2)) + np.array([100.0, 80.0])
    within = np.diag([0.01, 0.2])
    observed = scatter_of_runs(coefficients) / 4
    line = line_of_runs(coefficients, np.tile(within, (5, 1, 1)), run_covariance(observed, within), 0.2)
    assert line.coefficients == pytest.approx(coefficients.mean(axis=0), rel=1e-12)
    assert line.covariance == pytest.approx(observed / 5, rel=1e-9)
    raw, covariance, _ = line.raw
    place = np.array([1.0, 0.2])
    assert place @ raw == pytest.approx(line.coefficients[0])
    assert place @ covariance @ place == pytest.approx(line.covariance[0, 0])


def test_a_run_covariance_is_never_negative():
    observed, within = np.array([[1.0, 0.2], [0.2, 0.1]]), np.array([[0.5, 0.0], [0.0, 0.5]])
    found = run_covariance(observed, within)
    assert np.linalg.eigvalsh(found).min() >= -1e-15
    assert np.linalg.eigvalsh(observed - within).min() < 0.0
    assert run_covariance(within, within) == pytest.approx(np.zeros((2, 2)), abs=1e-15)


def test_a_long_run_weighs_more_than_a_short_one():
    coefficients = np.array([[10.0, 1.0], [12.0, 1.0]])
    within = np.stack([np.diag([0.01, 0.01]), np.diag([1.0, 1.0])])
    line = line_of_runs(coefficients, within, np.zeros((2, 2)), 0.0)
    assert line.coefficients[0] == pytest.approx((10.0 / 0.01 + 12.0) / (1 / 0.01 + 1))
