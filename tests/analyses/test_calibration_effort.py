"""Predicted and left-out errors: alike where the model is right, apart where it is wrong."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from campaign.analyses.calibration_effort import (
    NOTHING_LEFT,
    SAME_MOUNTING,
    CalibrationEffort,
    common_range,
    effort_of_fits,
)
from campaign.pages.contract_columns import CONTRACT_COLUMNS
from campaign.simulation.plan import Place, Plan, regular_plan
from campaign.simulation.truth import LineSpread

SLOPE = 64.0


def efforts(variance) -> CalibrationEffort:
    return effort_of_fits(variance.by_generation, variance.seed)


@pytest.fixture(scope="module")
def usual(simulated) -> CalibrationEffort:
    return efforts(simulated.usual())


def by_name(effort: CalibrationEffort, generation: str = "generation 1"):
    return effort.table[effort.table["generation"] == generation].set_index("effort")


def test_prediction_and_leaving_out_agree_where_the_model_is_right(usual) -> None:
    table = by_name(usual)
    assert table["agrees"].all()
    assert table["ratio"].to_numpy() == pytest.approx(1.0, abs=0.2)
    assert usual.notices == ()


def test_every_agreement_holds_in_several_campaigns(simulated) -> None:
    plan = regular_plan(modules=4, sensors=3, repetitions=2, levels=4)
    agree = [by_name(efforts(simulated.analysed(plan, seed=seed)))["agrees"].all() for seed in range(4)]
    assert all(agree)


def test_own_line_errs_by_what_a_new_run_adds(simulated, usual) -> None:
    truth = simulated.components()
    # a new run's line and reading, and the mean of two runs that the line was made from; the sensor's own
    # shape repeats in both, so that only its departure from a straight line stays: 6 of 8 level values
    places = np.linspace(0, 0.4, 8)
    run = np.mean([truth.repetition.sd_at(x) ** 2 for x in places])
    expected = np.sqrt(1.5 * run + 0.1**2 * (1 + 2 / 16) + 0.15**2 * 6 / 8) / SLOPE
    assert by_name(usual).loc["sensor", "strain_sd_predicted"] == pytest.approx(expected, rel=0.12)


def test_less_calibration_errs_more(usual) -> None:
    table = by_name(usual)
    assert table.loc["sensor", "factor"] == 1.0
    assert table.loc["module", "factor"] > 1.5
    assert table.loc["generation", "factor"] > 1.5
    assert (table["strain_expanded"] > 1.9 * table["strain_sd_predicted"]).all()
    assert (table["low"] < table["strain_sd_predicted"]).all()
    assert (table["high"] > table["strain_sd_predicted"]).all()


def test_least_work_comes_first_and_says_what_was_left_out(usual) -> None:
    table = by_name(usual)
    assert table.index[0] == "generation"
    assert list(table.index).index("sensor") > list(table.index).index("module")
    assert table.loc["sensor", "left_out_by"] == "repetition"
    assert table.loc["sensor", "label"] == SAME_MOUNTING
    assert table.loc["generation", "left_out_by"] == "module"
    assert set(CONTRACT_COLUMNS["calibration_effort"]) <= set(usual.table.columns)


def test_sessions_that_repeat_are_left_out(simulated) -> None:
    plan = regular_plan(modules=3, sensors=3, sessions=2, repetitions=2, levels=4)
    remounted = simulated.analysed(plan, simulated.truth(simulated.components(session=LineSpread(0.6, 0.8))))
    effort = efforts(remounted)
    own = by_name(effort).loc["sensor"]
    assert own["left_out_by"] == "session"
    assert own["label"] == ""
    same = effort.left_out.set_index(["effort", "left_out_by"])["strain_sd_left_out"]
    assert same["sensor", "session"] > 1.3 * same["sensor", "repetition"]


def test_a_model_without_the_positions_geometry_needs_a_line_a_position(simulated) -> None:
    plan = regular_plan(modules=4, sensors=4, repetitions=2, levels=4)
    places = tuple(Place(f"P{k}", length) for k, length in enumerate((60.0, 80.0, 100.0, 120.0)))
    panel = Plan(plan.generations, places, repetitions=2, staircase=plan.staircase)
    table = by_name(efforts(simulated.analysed(panel)))
    assert table.loc["generation", "factor"] > 5 * table.loc["position", "factor"]
    assert table.loc["generation_rezero_ratio", "factor"] < 0.2 * table.loc["generation", "factor"]


def test_wrong_model_is_said_to_be_wrong(simulated) -> None:
    """First readings that have not settled spoil every zero taken anew; no component of the model says so."""
    plan = regular_plan(modules=4, sensors=4, repetitions=3, levels=6)
    readings = simulated.readings(plan)
    first = readings["order"] == 1
    off = np.random.default_rng(0).normal(0, 1.5, len(readings)) * first
    effort = efforts(simulated.fit(readings.assign(signal=readings["signal"] + off)))
    table = by_name(effort)
    assert not table.loc["rezero_additive", "agrees"]
    assert table.loc["rezero_additive", "ratio"] > table.loc["rezero_additive", "ratio_high"]
    assert [notice.code for notice in effort.notices] == ["model-is-wrong"]


def test_two_generations_also_share_one_line(simulated) -> None:
    plan = regular_plan(generations=2, modules=3, sensors=3, repetitions=2, levels=4)
    readings = simulated.readings(plan)
    apart = readings["signal"] + 20.0 * (readings["generation"] == "generation 2")
    effort = efforts(simulated.fit(readings.assign(signal=apart)))
    for generation in ("generation 1", "generation 2"):
        table = by_name(effort, generation)
        assert table.loc["all", "factor"] > 3 * table.loc["generation", "factor"]


def test_units_do_not_matter(simulated) -> None:
    readings = simulated.readings(simulated.small_plan)
    variance = simulated.fit(readings.assign(signal=readings["signal"] / 1000, unit="nF"))
    plain = by_name(effort_of_fits(simulated.small().by_generation, 7))
    scaled = by_name(effort_of_fits(variance.by_generation, 7))
    assert scaled["strain_sd_left_out"].to_numpy() == pytest.approx(plain["strain_sd_left_out"].to_numpy())
    assert scaled["strain_sd_predicted"].to_numpy() == pytest.approx(
        plain["strain_sd_predicted"].to_numpy(), rel=1e-3
    )


def test_one_run_a_sensor_leaves_nothing_to_leave_out(simulated) -> None:
    variance = simulated.fit(simulated.readings(regular_plan(modules=3, sensors=3, repetitions=1, levels=4)))
    own = by_name(efforts(variance)).loc["sensor"]
    assert own["label"] == NOTHING_LEFT
    assert np.isnan(own["strain_sd_left_out"])
    assert own["agrees"] is None


def test_range_is_the_one_that_all_sensors_share(simulated) -> None:
    readings = simulated.readings(simulated.small_plan)
    short = readings[(readings["module"] != "M01") | (readings["x"] < 0.35)]
    low, high = common_range(short)
    assert low == pytest.approx(0.0, abs=1e-3)
    assert high == pytest.approx(0.4 * 2 / 3, abs=1e-3)


def test_nothing_fitted_is_said(simulated) -> None:
    effort = effort_of_fits((), 0)
    assert effort.table.empty
    assert [notice.code for notice in effort.notices] == ["effort-not-compared"]


def test_drawn_campaigns_follow_the_seed(simulated) -> None:
    fits = simulated.small().by_generation
    first, again, other = (by_name(effort_of_fits(fits, seed)) for seed in (1, 1, 2))
    assert first["strain_sd_predicted"].equals(again["strain_sd_predicted"])
    assert not first["strain_sd_predicted"].equals(other["strain_sd_predicted"])
    assert replace(effort_of_fits(fits, 1), notices=()).drawn > 0
