"""What time does: truth recovered, names given only where they may be, limits, zeros, blank channels."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from campaign.analyses.drift import Drift, analyse_drift
from campaign.analyses.drift_findings import drift_findings
from campaign.analyses.hold_figures import OF_FULL_SCALE, OF_SIGNAL
from campaign.analyses.limits import judge_limits
from campaign.analyses.sensor_figures import principal_lines
from campaign.analyses.zero_over_time import zero_over_time
from campaign.pipeline import analyse, read_campaign
from campaign.simulation import Components, LineSpread

from .hold_campaign import RATED, calibration_of, hold, identity

REAL = Path(__file__).parents[1] / "campaigns" / "real"


@pytest.fixture(scope="module")
def lines():
    return calibration_of()


@pytest.fixture(scope="module")
def sensors(lines) -> pd.DataFrame:
    return principal_lines(lines.sensor_lines)


@pytest.fixture(scope="module")
def drift(lines, sensors) -> Drift:
    """A stretched hold and one at rest for every sensor; the first sensor's stretched hold sees 2 K."""
    rng = np.random.default_rng(1)
    features = {}
    for index, row in enumerate(sensors.to_dict("records")):
        who = (str(row["module"]), str(row["sensor"]))
        generation = str(row["generation"])
        for number, truth in enumerate(
            ({"step_k": 2.0 if index == 0 else 0.0}, {"strain": 0.0, "per_decade": 0.0}), 1
        ):
            key, found = hold(replace(identity(*who, number), generation=generation), rng, **truth)
            features[key] = found
    made = analyse_drift(features, lines, RATED)
    assert made is not None
    return made


def stretched(drift: Drift) -> pd.DataFrame:
    return drift.holds[(drift.holds["place"] == "stretched") & (drift.holds["temperature"] == "steady")]


def test_changes_and_slopes_are_those_simulated(drift, sensors):
    rows = stretched(drift).merge(sensors[["module", "sensor", "full_scale_output"]], on=["module", "sensor"])
    scale = 100.0 / rows["full_scale_output"]
    assert (rows["percent_of"] == OF_FULL_SCALE).all()
    truth = -0.2 * scale
    assert ((rows["low"] < truth) & (truth < rows["high"])).sum() >= len(rows) - 1
    between = -0.2 * (np.log10(1801.0) - np.log10(1201.0)) * scale
    inside = (rows["creep_20_30min_low"] < between) & (between < rows["creep_20_30min_high"])
    assert inside.sum() >= len(rows) - 1
    assert rows["change_1h_percent_fso"].to_numpy() == pytest.approx(
        (-0.2 * (np.log10(3601.0) - np.log10(4.0)) * scale).to_numpy(), abs=0.03
    )


def test_both_choices_of_time_zero_are_given_and_early_data_left_out(drift):
    rows = stretched(drift)
    assert (rows["per_decade_from_s"] >= 20.0).all()
    assert rows["per_decade_from_ramp_start"].abs().gt(rows["percent_fso_per_decade"].abs()).all()


def test_a_temperature_step_is_not_called_drift(drift):
    found = drift.holds.groupby(["place", "temperature"])["verdict"].unique()
    assert found["stretched", "not steady"].tolist() == ["undecided"]
    assert found["stretched", "steady"].tolist() == ["relaxation"]
    assert found["rest", "steady"].tolist() == ["drift"]
    assert "drift" not in set(drift.holds.loc[drift.holds["temperature"] == "not steady", "verdict"])


@pytest.mark.parametrize("place", [0.0, 0.2])
def test_without_a_temperature_it_is_relaxation_or_drift(lines, place):
    key, found = hold(identity("M01", "A"), np.random.default_rng(2), strain=place, temperature=None)
    made = analyse_drift({key: found}, None, RATED)
    assert made is not None
    row = made.holds.iloc[0]
    assert (row["verdict"], row["called"]) == ("undecided", "relaxation or drift")


def test_logarithmic_holds_have_a_next_decade_and_no_settling_time(drift, sensors):
    rows = stretched(drift)
    assert rows["forms_shown"].str.contains("logarithmic").sum() >= len(rows) - 1
    assert rows["settling_time_s"].isna().all()
    output = sensors.set_index(["module", "sensor"])["full_scale_output"]
    expected = [-20.0 / output[m, s] for m, s in zip(rows["module"], rows["sensor"], strict=True)]
    assert rows["next_decade_percent_fso"].to_numpy() == pytest.approx(expected, rel=0.25)


def test_noise_at_rest_is_that_simulated(drift):
    assert len(drift.floors) == (drift.holds["place"] == "rest").sum()
    assert ((drift.floors["white_low"] > 0) & (drift.floors["white"] < drift.floors["white_high"])).all()
    first = drift.allan[drift.allan["averaging_time_s"] == 1.0]
    assert first["deviation_signal"].to_numpy() == pytest.approx(0.005, rel=0.08)
    assert (first["low"] < first["deviation_strain"]).all()
    assert list(drift.allan.columns[:8]) == [
        *("generation", "module", "sensor", "trial", "averaging_time_s", "deviation_strain", "low", "high")
    ]


def test_the_limit_is_judged_by_holds_that_have_a_name(drift, lines):
    figures = drift.figures.set_index(["module", "sensor"])
    moved = drift.holds[drift.holds["temperature"] == "not steady"].iloc[0]
    assert figures.loc[(moved["module"], moved["sensor"]), "estimate"] < abs(moved["change_1h_percent_fso"])
    strict = replace(RATED, limits={"drift_1h": (0.1, "%FSO")})
    lax = replace(RATED, limits={"drift_1h": (50.0, "%FSO")})
    for description, verdict in ((strict, "not met"), (lax, "met")):
        table = judge_limits(description, lines, further=[drift.figures]).of_sensors()
        assert (table["limit"] == "drift_1h").all()
        named = [pair != (moved["module"], moved["sensor"]) for pair in zip(table["module"], table["sensor"])]
        assert set(table.loc[named, "verdict"]) == {verdict}


def test_an_undecided_hold_decides_no_limit(lines, sensors):
    row = sensors.iloc[0]
    who = replace(identity(str(row["module"]), str(row["sensor"])), generation=str(row["generation"]))
    key, found = hold(who, np.random.default_rng(3), step_k=2.0)
    made = analyse_drift({key: found}, lines, RATED)
    assert made is not None
    table = judge_limits(RATED, lines, further=[made.figures]).of_sensors()
    assert table["verdict"].tolist() == ["not decided"]


def test_the_spread_says_what_one_hold_a_sensor_leaves_together(drift):
    assert drift.components["called"].tolist()[-1] == "sensor + hold"
    (mean,) = drift.means.to_dict("records")
    assert mean["low"] < mean["percent_fso_per_decade"] < mean["high"]
    assert mean["strain"] == pytest.approx(0.2, abs=1e-3)


def test_one_hold_a_module_still_says_how_modules_scatter(lines, sensors):
    rng = np.random.default_rng(4)
    features = {}
    for row in sensors.drop_duplicates("module").to_dict("records"):
        who = identity(str(row["module"]), str(row["sensor"]))
        key, found = hold(replace(who, generation=str(row["generation"])), rng)
        features[key] = found
    made = analyse_drift(features, lines, RATED)
    assert made is not None
    (mean,) = made.means.to_dict("records")
    assert mean["modules"] == len(features) == 3
    assert mean["low"] < mean["percent_fso_per_decade"] < mean["high"]


def test_findings_count_and_name(drift, lines):
    limits = judge_limits(RATED, lines, further=[drift.figures])
    (found,) = (f for f in drift_findings(drift, limits) if f.kind == "holds")
    (fact,) = found.facts
    assert (fact.relaxation, fact.drift, fact.undecided, fact.moved) == (5, 6, 1, 1)
    assert fact.hourly
    assert fact.by_line


def test_holds_set_aside_are_put_back_to_compare(drift, lines):
    limits = judge_limits(RATED, lines, further=[drift.figures])
    worst = drift.holds["change_1h_percent_fso"].abs().idxmax()
    worst_of = drift.holds.loc[worst, ["module", "sensor"]]
    own = drift.holds[["module", "sensor"]].eq(worst_of).all(axis=1)
    without = replace(drift, holds=drift.holds[~own])
    (alone,), (compared,) = (
        next(f.facts for f in found if f.kind == "holds")
        for found in (drift_findings(without, limits), drift_findings(without, limits, drift))
    )
    assert np.isnan(alone.figure.put_back)
    assert compared.figure.put_back > compared.figure.mean == alone.figure.mean


# ---------------------------------------------------------------- without a line


def test_without_a_line_figures_are_per_cent_of_the_first_settled_signal():
    key, found = hold(identity("M01", "A"), np.random.default_rng(4), strain=0.0, per_decade=-1.0)
    made = analyse_drift({key: found}, None, RATED)
    assert made is not None
    row = made.holds.iloc[0]
    assert row["percent_of"] == OF_SIGNAL
    assert row["percent_fso_per_decade"] == pytest.approx(-1.0, abs=0.03)
    assert made.figures.empty
    assert [n.code for n in made.notices] == ["hold-without-line"]


def test_real_pressure_decay_gives_a_hold_without_length():
    """The chamber's pressure falls by 0.4 % in 151 s; nothing but time and pressure was logged."""
    results = analyse(read_campaign(REAL / "pressure_decay"))
    assert results.drift is not None
    (row,) = results.drift.holds.to_dict("records")
    assert row["place"] == "unknown"
    assert row["duration_s"] == pytest.approx(151.3, abs=0.1)
    assert row["first_signal"] == pytest.approx(731.5, abs=0.5)
    assert -0.6 < row["change_end_percent_fso"] < -0.3
    assert row["verdict"] == "undecided"
    assert np.isnan(row["change_10min_percent_fso"])


def test_nothing_measured_is_nothing_said():
    assert analyse_drift({}, None, RATED) is None


# ---------------------------------------------------------------- zero across sessions


def test_mounting_and_run_of_the_zero_are_recovered():
    """SDs of 1 and 0.2 pF in intervals of 95 %, over five campaigns."""
    spread = Components(
        session=LineSpread(1.0, 0.0, 0.0), repetition=LineSpread(0.2, 0.0, 0.0), residual=0.01
    )
    covered = {"session": 0, "run": 0}
    for seed in range(5):
        calibration = calibration_of(modules=6, sensors=3, sessions=3, seed=seed, components=spread)
        zero = zero_over_time(calibration)
        assert zero is not None
        assert len(zero.table) == 6 * 3 * 3
        output = float(principal_lines(calibration.sensor_lines)["full_scale_output"].mean())
        terms = zero.model.set_index("term")
        for name, truth in (("session", 100.0 / output), ("run", 20.0 / output)):
            covered[name] += terms.loc[name, "low"] < truth < terms.loc[name, "high"]
        assert terms.loc["mounting", "low"] == 0.0
    assert min(covered.values()) >= 4


def test_a_slope_of_the_zero_in_time_is_found():
    calibration = calibration_of(modules=3, sensors=2, sessions=3)
    readings = calibration.readings.copy()
    sessions = sorted(readings["session"].unique())
    day = readings["session"].map({name: 10.0 * place for place, name in enumerate(sessions)})
    readings["started"] = (pd.Timestamp("2026-01-01") + pd.to_timedelta(day, unit="D")).dt.strftime(
        "%Y-%m-%d"
    )
    readings["signal"] += 0.05 * day
    zero = zero_over_time(replace(calibration, readings=readings))
    assert zero is not None
    (slope,) = zero.model[zero.model["term"] == "slope"].to_dict("records")
    output = float(principal_lines(calibration.sensor_lines)["full_scale_output"].mean())
    assert slope["low"] < 5.0 / output < slope["high"]
    assert slope["low"] > 0


def test_one_session_tells_nothing_of_the_zero(lines):
    zero = zero_over_time(lines)
    assert zero is not None
    assert "session" not in set(zero.model["term"])


# ---------------------------------------------------------------- blank channels


def test_a_blank_channel_corrects_exponent_and_gauge_factor(lines, sensors):
    who = identity(str(sensors.iloc[0]["module"]), "open", kind="blank")
    key, found = hold(who, np.random.default_rng(5), strain=0.0, per_decade=0.0, level=5.0, slope_per_s=1e-5)
    made = analyse_drift({key: found}, lines, RATED)
    assert made is not None
    (blank,) = made.blanks.to_dict("records")
    assert blank["mean"] == pytest.approx(5.0 + 1e-5 * 1915, abs=0.002)
    assert blank["per_hour_low"] < 0.036 < blank["per_hour_high"]
    row = made.parasitic.iloc[0]
    factor = row["zero_signal"] / (row["zero_signal"] - blank["mean"])
    assert row["corrected_gauge_factor"] == pytest.approx(row["gauge_factor"] * factor)
    assert row["corrected_stretch_exponent"] == pytest.approx(row["stretch_exponent"] * factor)
    assert made.holds.empty
