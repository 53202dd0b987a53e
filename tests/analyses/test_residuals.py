"""What the model leaves over."""

from __future__ import annotations

import numpy as np
import pytest

from campaign.analyses.residuals import analyse_residuals
from campaign.simulation.plan import regular_plan
from campaign.simulation.truth import LineSpread


@pytest.fixture(scope="module")
def usual(simulated):
    return analyse_residuals(None, simulated.usual())


def test_every_fitted_reading_has_its_residuals(simulated, usual) -> None:
    readings = simulated.readings(simulated.usual_plan)
    assert len(usual.table) == len(readings)
    assert set(usual.table.index) == set(readings.index)
    assert usual.table["conditional"].std() == pytest.approx(0.1, rel=0.25)


def test_marginal_residuals_are_from_the_mean_and_hold_all_spread(simulated, usual) -> None:
    fit = simulated.usual().fits[0]
    fixed = fit.model.fixed.columns @ fit.fit.coefficients
    signal = simulated.readings(simulated.usual_plan)["signal"]
    assert usual.table["marginal"].to_numpy() == pytest.approx(signal.to_numpy() - fixed)
    assert usual.table["marginal"].std() > 5 * usual.table["conditional"].std()


def test_conditional_residuals_sum_to_nothing_at_every_level(usual) -> None:
    table = usual.table
    sums = table.groupby("nominal_level")["conditional"].sum()
    assert np.abs(sums).max() < 1e-6 * np.abs(table["conditional"]).sum()


def test_residuals_as_strain_are_divided_by_the_mean_slope(simulated, usual) -> None:
    ratio = usual.table["conditional"] / usual.table["conditional_strain"]
    assert ratio.to_numpy() == pytest.approx(simulated.usual().fits[0].mean_slope)
    assert np.mean(usual.table["standardised"] ** 2) == pytest.approx(1.0)


def test_normal_quantiles_are_in_order(usual) -> None:
    quantiles = usual.quantiles
    assert quantiles["theoretical"].is_monotonic_increasing
    assert quantiles["observed"].is_monotonic_increasing
    assert quantiles["theoretical"].mean() == pytest.approx(0.0, abs=1e-9)
    assert np.corrcoef(quantiles["theoretical"], quantiles["observed"])[0, 1] > 0.99


def test_bands_hold_the_extremes(usual) -> None:
    bands = usual.by_level.set_index("nominal_level")
    values = usual.table.groupby("nominal_level")["conditional_strain"]
    assert bands["low"].to_numpy() == pytest.approx(values.min().to_numpy())
    assert bands["high"].to_numpy() == pytest.approx(values.max().to_numpy())
    assert (bands["first_quartile"] <= bands["median"]).all()
    assert bands["count"].sum() == len(usual.table)


def test_lag_one_of_each_run(usual) -> None:
    assert len(usual.autocorrelation) == 90
    one = usual.autocorrelation.iloc[0]
    rows = usual.table[usual.table["trial"] == one["trial"]].sort_values("order")["conditional"].to_numpy()
    assert one["lag_one"] == pytest.approx(np.sum(rows[1:] * rows[:-1]) / np.sum(rows**2))


def test_noise_by_level_is_the_noise_that_was_drawn(usual) -> None:
    by_level = usual.variance_by_level
    assert by_level["sd"].to_numpy() == pytest.approx(0.1, rel=0.35)
    assert by_level["nominal_level"].tolist() == pytest.approx(np.linspace(0, 0.4, 8).tolist())


def test_normal_sensor_effects_do_not_bend(usual) -> None:
    assert not usual.bends
    assert len(usual.sensor_effect_quantiles.query("term == 'strain at mid'")) == 30


def test_sensor_effects_with_outliers_bend(simulated) -> None:
    plan = regular_plan(modules=4, sensors=5, repetitions=2, levels=3)
    small = simulated.components(sensor=LineSpread(0.1, 0.0), module=LineSpread(0.1, 0.0))
    readings = simulated.readings(plan, simulated.truth(small))
    odd = (readings["module"] == "M02") & (readings["sensor"] == "S3")
    bent = analyse_residuals(None, simulated.fit(readings.assign(signal=readings["signal"] + 8.0 * odd)))
    assert bent.bends
    assert [notice.code for notice in bent.notices] == ["sensor-effects-not-normal"]


def test_nothing_fitted_leaves_empty_tables(simulated) -> None:
    nothing = simulated.fit(simulated.readings(simulated.small_plan).assign(used=False))
    residuals = analyse_residuals(None, nothing)
    assert residuals.table.empty
    assert residuals.quantiles.empty
    assert not residuals.bends
