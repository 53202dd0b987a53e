"""Limits judged with their uncertainty, on a small invented campaign."""

from __future__ import annotations

from dataclasses import replace

import pandas as pd
import pytest

from campaign.analyses.limits import CONDITIONS, UNKNOWN, judge_limits
from campaign.analyses.sensor_figures import sensor_figures
from campaign.methods.conformity import verdict_of
from tests.pages.small_campaign import Sketch, read_and_calibrate, write_campaign


@pytest.fixture(scope="module")
def campaign(tmp_path_factory):
    intake, calibration = read_and_calibrate(
        write_campaign(tmp_path_factory.mktemp("limits") / "c", Sketch())
    )
    return intake.description, calibration


def limited(description, **limits):
    return replace(description, limits={name: (value, "%FSO") for name, value in limits.items()}, use={})


def test_every_sensor_and_a_new_sensor_of_each_generation_is_judged(campaign):
    description, calibration = campaign
    table = judge_limits(description, calibration).table
    for _, rows in table.groupby("limit"):
        assert len(rows) == 12 + 2
        assert set(rows.loc[rows["sensor"] == "", "generation"]) == {"first", "second"}


def test_a_limit_far_away_is_met_one_below_every_figure_is_not_met(campaign):
    description, calibration = campaign
    far = judge_limits(limited(description, linearity=50.0), calibration).table
    assert set(far["verdict"]) == {"met"}
    near = judge_limits(limited(description, hysteresis=1e-6), calibration).table
    assert set(near["verdict"]) == {"not met"}


def test_a_limit_at_the_estimate_is_not_decided_whatever_simple_acceptance_says(campaign):
    description, calibration = campaign
    figures = sensor_figures(calibration, description)
    row = figures[figures["figure"] == "linearity"].iloc[0]
    for nudge in (0.999, 1.001):
        table = judge_limits(limited(description, linearity=row["estimate"] * nudge), calibration).table
        own = table[(table["module"] == row["module"]) & (table["sensor"] == row["sensor"])].iloc[0]
        assert own["verdict"] == "not decided"
        assert own["accepted"] == (nudge > 1)


def test_verdict_follows_the_probability_in_every_row(campaign):
    description, calibration = campaign
    table = judge_limits(description, calibration).table
    assert (table["verdict"] == [verdict_of(p) for p in table["probability"]]).all()
    assert (table["low"] <= table["estimate"]).all()
    assert (table["estimate"] <= table["high"]).all()


def test_use_with_conditions_not_measured_can_fail_but_not_be_met(campaign):
    description, calibration = campaign
    generous = replace(description, limits={"strain_error": (0.5, "mm/mm")}, use={"pressure": "20 kPa"})
    limits = judge_limits(generous, calibration)
    assert limits.conditions_not_measured == ("pressure",)
    assert set(limits.table["verdict"]) == {"not decided"}
    assert set(limits.table["reason"]) == {CONDITIONS}
    strict = replace(generous, limits={"strain_error": (1e-6, "mm/mm")})
    assert set(judge_limits(strict, calibration).table["verdict"]) == {"not met"}


def test_limits_that_nothing_measured_answers_are_named(campaign):
    description, calibration = campaign
    limits = judge_limits(limited(description, drift_1h=1.0, linearity=1.0), calibration)
    assert limits.not_judged == ("drift_1h",)
    assert judge_limits(limited(description, linearity=1.0), None).not_judged == ("linearity",)


def test_one_run_decides_nothing(tmp_path):
    sketch = Sketch(generations=("g",), modules=2, sessions=1, runs=1)
    intake, calibration = read_and_calibrate(write_campaign(tmp_path / "c", sketch))
    table = judge_limits(limited(intake.description, linearity=1.0), calibration).of_sensors()
    assert set(table["verdict"]) == {"not decided"}
    assert set(table["reason"]) == {UNKNOWN}


def test_bend_is_the_sagitta_of_the_true_parabola(campaign):
    # the invented signal bends by −0.05 · 50 pF per unit strain squared: sagitta −2.5 · 0.2² = −0.1 pF over
    # 0–0.4, of a full-scale output of about (0.9 · 0.4 − 0.05 · 0.4²) · 50 = 17.6 pF: −0.57 %FSO
    description, calibration = campaign
    figures = sensor_figures(calibration, description)
    bends: pd.Series = figures.loc[figures["figure"] == "bend", "estimate"]
    assert bends.mean() == pytest.approx(-0.57, abs=0.1)
