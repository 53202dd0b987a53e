"""Simulated readings: their form, their determinism, and that plain moments give the truth back."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from campaign.recordings.recording import STRAIN
from campaign.simulation import (
    Components,
    GenerationTruth,
    LineSpread,
    LoopWidth,
    Plan,
    RunKey,
    SampleNoise,
    SignalLaw,
    StandTruth,
    Truth,
    regular_plan,
    sensor_register,
    simulate_readings,
)
from campaign.trials.readings import READING_COLUMNS, Readings


def _truth(**components: object) -> Truth:
    return Truth((GenerationTruth(components=Components(**components)),))


@st.composite
def plans(draw: st.DrawFn) -> Plan:
    return regular_plan(
        generations=draw(st.integers(1, 3)),
        batches=draw(st.integers(0, 2)),
        modules=draw(st.integers(2, 4)),
        sensors=draw(st.integers(1, 4)),
        sessions=draw(st.integers(0, 3)),
        repetitions=draw(st.integers(1, 3)),
        levels=draw(st.integers(1, 6)),
        descending=draw(st.booleans()),
        shared_runs=draw(st.booleans()),
    )


def test_columns_are_those_of_the_table_of_readings() -> None:
    readings = Readings(simulate_readings(regular_plan(), Truth(), 1), STRAIN)
    assert list(readings.table.columns) == list(READING_COLUMNS)
    assert len(readings.usable) == 6 * 5 * 3 * 8


@given(plans(), st.integers(0, 2**32))
@settings(max_examples=25, deadline=None)
def test_every_plan_gives_every_reading_once_and_repeats(plan: Plan, seed: int) -> None:
    table = simulate_readings(plan, _truth(sensor=LineSpread(1, 2, 0.5)), seed)
    visits = plan.staircase.visits
    modules, sensors = len(plan.modules), len(plan.places)
    assert len(table) == modules * sensors * len(plan.sessions) * plan.repetitions * len(visits)
    keys = ["generation", "module", "sensor", "session", "repetition", "order"]
    assert not table.duplicated(keys).any()
    assert table[keys].equals(table[keys].sort_values(keys, ignore_index=True))
    assert np.isfinite(table["signal"]).all()
    assert np.allclose(table["length_mm"] - table["elongation_mm"], 80.0)
    files = modules * len(plan.sessions) * plan.repetitions * (1 if plan.shared_runs else sensors)
    assert table["trial"].nunique() == files
    pd.testing.assert_frame_equal(table, simulate_readings(plan, _truth(sensor=LineSpread(1, 2, 0.5)), seed))


@given(plans(), st.integers(0, 2**32))
@settings(max_examples=15, deadline=None)
def test_without_spread_every_reading_lies_on_the_law(plan: Plan, seed: int) -> None:
    law = SignalLaw(parasitic=5.0, per_mm=0.5, exponent=2.0)
    table = simulate_readings(plan, Truth((GenerationTruth(law, Components(residual=0.0)),)), seed)
    assert np.allclose(table["signal"], 5.0 + 40.0 * (1.0 + table["strain"]) ** 2, rtol=0, atol=1e-12)


def test_a_turning_reading_belongs_to_neither_branch() -> None:
    table = simulate_readings(regular_plan(levels=4, descending=True), Truth(), 2)
    run = table[table["trial"] == table["trial"].iloc[0]]
    assert run["direction"].tolist() == ["rising"] * 3 + ["turning"] + ["falling"] * 3
    assert run["nominal_level"].tolist() == run["nominal_level"].tolist()[::-1]
    assert run["largest_x_before"].is_monotonic_increasing


def test_omitted_runs_are_left_out_and_nothing_else_changes() -> None:
    gone = RunKey("M02", "S3", "1", 2)
    whole = simulate_readings(regular_plan(sessions=1), _truth(residual=0.0), 5)
    less = simulate_readings(regular_plan(sessions=1, omitted=frozenset({gone})), _truth(residual=0.0), 5)
    here = (whole["module"] == "M02") & (whole["sensor"] == "S3") & (whole["repetition"] == 2)
    pd.testing.assert_frame_equal(whole[~here].reset_index(drop=True), less)


LARGE = regular_plan(
    batches=120, modules=360, sensors=4, sessions=3, repetitions=3, levels=5, shared_runs=True
)
SPREAD = Components(
    batch=LineSpread(1.0, 2.0, 0.5),
    module=LineSpread(0.8, 3.0, -0.5),
    sensor=LineSpread(1.5, 4.0, 0.3),
    mounting=LineSpread(0.7, 1.0, 0.0),
    session=LineSpread(0.4, 1.5, 0.6),
    shared_run=LineSpread(0.5, 1.2, 0.0),
    repetition=LineSpread(0.3, 1.0, -0.4),
    residual=0.0,
)


@pytest.fixture(scope="module")
def lines() -> np.ndarray:
    """(intercept, slope) of every run, shape (batches, modules, sensors, sessions, repetitions, 2)."""
    table = simulate_readings(LARGE, Truth((GenerationTruth(components=SPREAD),)), 11)
    signal = table["signal"].to_numpy().reshape(-1, 5)
    return np.polynomial.polynomial.polyfit(np.linspace(0, 0.4, 5), signal.T, 1).T.reshape(120, 3, 4, 3, 3, 2)


def _covariance(deviations: np.ndarray, degrees: int) -> np.ndarray:
    flat = deviations.reshape(-1, 2)
    return np.asarray(flat.T @ flat / degrees)


def _close(found: np.ndarray, expected: np.ndarray) -> None:
    """Within 15 % of the product of the SDs: five standard errors for a thousand units."""
    scale = np.sqrt(np.outer(np.diag(expected), np.diag(expected)))
    assert np.max(np.abs(found - expected) / scale) < 0.15


def test_moments_of_a_large_campaign_give_the_inner_components_back(lines: np.ndarray) -> None:
    """Classical moments: sweeping the means of a balanced layout (sensor × run in a module)."""
    runs = lines - lines.mean(axis=4, keepdims=True)
    own = runs - runs.mean(axis=2, keepdims=True)
    _close(_covariance(own, 360 * 3 * 3 * 2), SPREAD.repetition.covariance)
    shared = _covariance(runs.mean(axis=2), 360 * 3 * 2)
    _close(shared - SPREAD.repetition.covariance / 4, SPREAD.shared_run.covariance)
    mountings = lines.mean(axis=4)
    swept = mountings - mountings.mean(axis=3, keepdims=True)
    session = _covariance(swept - swept.mean(axis=2, keepdims=True), 360 * 3 * 2)
    _close(session - SPREAD.repetition.covariance / 3, SPREAD.session.covariance)


def test_moments_of_a_large_campaign_give_the_built_components_back(lines: np.ndarray) -> None:
    sensors = lines.mean(axis=(3, 4))
    within = _covariance(sensors - sensors.mean(axis=2, keepdims=True), 360 * 3)
    inner = SPREAD.session.covariance / 3 + SPREAD.repetition.covariance / 9
    _close(within - inner, SPREAD.sensor.covariance)
    modules = sensors.mean(axis=2)
    between = _covariance(modules - modules.mean(axis=1, keepdims=True), 240)
    common = SPREAD.mounting.covariance / 3 + SPREAD.shared_run.covariance / 9
    expected = SPREAD.module.covariance + within / 4 + common
    scale = np.sqrt(np.outer(np.diag(expected), np.diag(expected)))
    assert np.max(np.abs(between - expected) / scale) < 0.30


def test_noise_within_a_run_has_the_size_growth_and_memory_that_were_asked() -> None:
    plan = regular_plan(modules=40, sensors=5, repetitions=20, levels=6)
    table = simulate_readings(plan, _truth(residual=0.2, residual_growth=1.0, residual_correlation=0.6), 3)
    law = Truth().of(0).law
    residual = (
        table["signal"] - law.signal(table["strain"].to_numpy(), np.full(len(table), 80.0))
    ).to_numpy()
    by_order = residual.reshape(-1, 6)
    assert by_order.std(axis=0) == pytest.approx(0.2 * (1 + np.linspace(0, 1, 6)), rel=0.05)
    assert np.corrcoef(by_order[:, 2], by_order[:, 3])[0, 1] == pytest.approx(0.6, abs=0.05)


def test_loop_width_is_the_mean_asked_at_mid_strain_and_nothing_at_the_ends() -> None:
    plan = regular_plan(modules=100, sensors=5, repetitions=1, levels=5, descending=True)
    truth = Truth((GenerationTruth(components=Components(residual=0.0), loop=LoopWidth(0.6, 0.2)),))
    table = simulate_readings(plan, truth, 8)
    branches = table.pivot_table(
        index=["module", "sensor", "nominal_level"], columns="direction", values="signal"
    )
    width = (branches["falling"] - branches["rising"]).unstack("nominal_level")
    assert width[0.2].mean() == pytest.approx(0.6, abs=0.05)
    assert width[0.2].std() == pytest.approx(0.2, rel=0.15)
    assert np.allclose(width[0.0], 0.0)


def test_standard_error_is_that_of_a_mean_of_correlated_samples() -> None:
    """The exact SD of a mean of first-order noise, against 4,000 simulated means."""
    noise = SampleNoise(white=0.3, slow=0.5, slow_correlation=0.8)
    generator = np.random.default_rng(4)
    slow = generator.standard_normal((4000, 13))
    for column in range(1, 13):
        slow[:, column] = 0.8 * slow[:, column - 1] + 0.6 * slow[:, column]
    means = (0.5 * slow + 0.3 * generator.standard_normal((4000, 13))).mean(axis=1)
    assert noise.standard_error(13) == pytest.approx(means.std(), rel=0.05)
    assert noise.standard_error(1) == pytest.approx(np.hypot(0.3, 0.5))


def test_errors_of_the_stand_move_the_strain_that_sensors_had() -> None:
    """A rest length measured 1 % long shows strain too small: dε/dL0 = −(1 + ε)/L0."""
    truth = Truth((GenerationTruth(components=Components(residual=0.0)),), StandTruth(rest_length_mm=0.8))
    plan = regular_plan(modules=200, sensors=1, repetitions=1, levels=2)
    table = simulate_readings(plan, truth, 21)
    at_zero = table.loc[table["strain"] == 0.0, "signal"].to_numpy()
    law = truth.of(0).law
    assert at_zero.std() == pytest.approx(law.line(80.0)[1] * 0.8 / 80.0, rel=0.15)
    register = sensor_register(plan, truth, 21)
    assert set(register["rest_length"]) == {80.0}
    assert set(register["rest_length_uncertainty"]) == {0.8}


@pytest.mark.parametrize(
    "wrong",
    [
        lambda: LineSpread(-1.0),
        lambda: LineSpread(1.0, 1.0, 1.5),
        lambda: regular_plan(modules=0),
        lambda: regular_plan(repetitions=0),
        lambda: regular_plan(levels=0),
    ],
)
def test_impossible_plans_and_truths_are_refused(wrong: object) -> None:
    with pytest.raises(ValueError, match=r"."):
        wrong()  # type: ignore[operator]
