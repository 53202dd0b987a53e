"""Lines of sensors from their runs: simulated truth comes back, and what cannot be known is said."""

from __future__ import annotations

from dataclasses import asdict, replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from statsmodels.regression.linear_model import OLS
from statsmodels.stats.outliers_influence import OLSInfluence

from campaign.analyses.calibration import Calibration, analyse_calibration
from campaign.analyses.calibration_lines import OWN_RUNS, POOLED, UNKNOWN
from campaign.analyses.sensor_lines import SENSOR_LINE_COLUMNS
from campaign.methods.inverse_reading import inverse_limits
from campaign.recordings.description import Description, LengthReference
from campaign.recordings.recording import ELONGATION, LENGTH, STRAIN, Trial, TrialIdentity
from campaign.simulation import (
    Components,
    GenerationTruth,
    LineSpread,
    LoopWidth,
    SignalLaw,
    Truth,
    regular_plan,
    simulate_readings,
)
from campaign.simulation.readings import sensor_register
from campaign.trials.readings import Readings, collect_readings
from campaign.trials.staircase import readings_of_staircase

REFERENCE = Path(__file__).parents[1] / "reference" / "calibration"
RATED = Description("invented", range_strain=0.40)
NO_REGISTER = pd.DataFrame(columns=["module", "sensor"])
SPREAD = Components(sensor=LineSpread(2.0, 3.0, 0.5), repetition=LineSpread(0.3, 0.6, -0.2), residual=0.15)


def simulated(components=SPREAD, *, seed=1, law=None, loop=0.0, **plan) -> Readings:
    law = law or SignalLaw(parasitic=0.0, per_mm=1.0)
    truth = Truth((GenerationTruth(law=law, components=components, loop=LoopWidth(loop, 0.0)),))
    return Readings(simulate_readings(regular_plan(**plan), truth, seed), STRAIN)


def calibrate(
    readings: Readings, description: Description = RATED, register=NO_REGISTER, hashes=None
) -> Calibration:
    return analyse_calibration(readings, description, register, hashes or {})


def line(calibration: Calibration, branch="both", place=0) -> pd.Series:
    lines = calibration.sensor_lines
    return lines[lines["branch"] == branch].iloc[place]


@pytest.fixture(scope="module")
def campaign() -> Calibration:
    return calibrate(simulated(modules=4, sensors=4, repetitions=3, levels=9, descending=True, loop=0.8))


def test_columns_are_those_promised(campaign):
    assert list(campaign.sensor_lines.columns) == SENSOR_LINE_COLUMNS
    assert set(campaign.run_lines.columns) >= {
        "generation", "module", "sensor", "position", "session", "repetition", "trial", "branch", "intercept",
        "slope", "residual_sd", "readings", "x_low", "x_high", "zero_return", "zero_return_percent_fso",
    }  # fmt: skip
    assert campaign.sensor_lines.groupby(["module", "sensor"])["branch"].apply(list).map(
        tuple
    ).unique().tolist() == [("both", "rising", "falling")]
    assert len(campaign.records) == len(campaign.sensor_lines) == 48
    assert len(campaign.run_lines) == 3 * 48


def test_the_line_is_the_mean_of_the_lines_of_the_runs(campaign):
    own = line(campaign)
    runs = campaign.run_lines[
        (campaign.run_lines["module"] == own["module"])
        & (campaign.run_lines["sensor"] == own["sensor"])
        & (campaign.run_lines["branch"] == "both")
    ]
    assert own["intercept"] == pytest.approx(runs["intercept"].mean(), rel=1e-10)
    assert own["slope"] == pytest.approx(runs["slope"].mean(), rel=1e-10)
    assert own["runs"] == 3


def test_the_ordinary_line_is_that_of_statsmodels_and_too_sure(campaign):
    own = line(campaign)
    rows = campaign.readings[
        (campaign.readings["module"] == own["module"]) & (campaign.readings["sensor"] == own["sensor"])
    ]
    fit = OLS(rows["signal"].to_numpy(), np.column_stack([np.ones(len(rows)), rows["x"]])).fit()
    ordinary = campaign.ordinary_lines.iloc[0]
    assert ordinary["branch"] == "both"
    assert ordinary[["intercept", "slope"]].tolist() == pytest.approx(fit.params, rel=1e-9)
    assert ordinary[["se_intercept", "se_slope"]].tolist() == pytest.approx(fit.bse, rel=1e-9)
    assert np.sqrt(own["var_intercept"]) > 1.3 * ordinary["se_intercept"]


def test_influence_is_that_of_the_standing_line(campaign):
    own = line(campaign)
    rows = campaign.readings[
        (campaign.readings["module"] == own["module"]) & (campaign.readings["sensor"] == own["sensor"])
    ]
    assert rows["fitted"].to_numpy() == pytest.approx(own["intercept"] + own["slope"] * rows["x"])
    assert rows["residual"].to_numpy() == pytest.approx(rows["signal"] - rows["fitted"])
    influence = OLSInfluence(
        OLS(rows["signal"].to_numpy(), np.column_stack([np.ones(len(rows)), rows["x"]])).fit()
    )
    assert rows["leverage"].to_numpy() == pytest.approx(influence.hat_matrix_diag)
    assert rows["studentised"].to_numpy() == pytest.approx(influence.resid_studentized_external)
    assert rows["cooks_distance"].to_numpy() == pytest.approx(influence.cooks_distance[0])


def test_run_to_run_covariance_is_recovered():
    calibration = calibrate(simulated(modules=20, sensors=10, repetitions=3, levels=6))
    record = calibration.records[0]
    truth = SPREAD.repetition.covariance
    assert record.variance_source == POOLED
    assert line(calibration, "rising")["df"] == 400
    found = [record.run_var_intercept, record.run_var_slope]
    assert np.sqrt(found) == pytest.approx(np.sqrt(np.diag(truth)), rel=0.12)
    assert np.sqrt(record.residual_variance) == pytest.approx(0.15, rel=0.25)


def test_new_runs_are_covered_through_the_records():
    """95 % intervals by the records, one reading and a mean of ten in a new run; 25 campaigns of 12."""
    rng = np.random.default_rng(77)
    design = {"modules": 4, "sensors": 3, "repetitions": 3, "levels": 9}
    quiet = Components(sensor=SPREAD.sensor, residual=0.0)
    hits = []
    for seed in range(25):
        truth = (
            calibrate(simulated(quiet, seed=seed, **design)).sensor_lines[["intercept", "slope"]].to_numpy()
        )
        for record, true in zip(calibrate(simulated(seed=seed, **design)).records, truth, strict=True):
            strain = rng.uniform(0.05, 0.35)
            new = true + SPREAD.repetition.factor @ rng.normal(0.0, 1.0, 2)
            for count in (1, 10):
                signal = new[0] + new[1] * strain + rng.normal(0.0, 0.15 / np.sqrt(count))
                _, low, high = inverse_limits(record.reading_model, signal, count)
                hits.append(low <= strain <= high)
    share = np.mean(np.reshape(hits, (-1, 2)), axis=0)
    assert (share >= 0.92).all()
    assert (share <= 0.975).all()


def test_one_run_leaves_the_run_to_run_error_unknown():
    calibration = calibrate(simulated(modules=3, sensors=2, repetitions=1))
    assert calibration.sensor_lines["variance_source"].eq(UNKNOWN).all()
    assert calibration.sensor_lines[["var_intercept", "var_slope", "df"]].isna().all().all()
    assert np.isnan(calibration.records[0].t_quantile_975)
    assert calibration.labels["runs"].startswith(UNKNOWN)
    assert calibration.sensor_lines["slope"].notna().all()


def test_many_runs_carry_their_own_interval():
    calibration = calibrate(simulated(modules=1, sensors=2, repetitions=12))
    assert calibration.sensor_lines["variance_source"].eq(OWN_RUNS).all()
    assert calibration.sensor_lines["df"].eq(11).all()


def test_a_sensor_that_scatters_more_than_the_others_keeps_its_own_covariance():
    readings = simulated(modules=8, sensors=3, repetitions=3)
    table = readings.table.copy()
    odd = (table["module"] == "M01") & (table["sensor"] == "S1")
    table.loc[odd, "signal"] += table.loc[odd, "repetition"] * 5.0
    calibration = calibrate(replace(readings, table=table))
    own = calibration.sensor_lines.set_index(["module", "sensor"])["variance_source"]
    assert own["M01", "S1"] == OWN_RUNS
    assert own.drop(("M01", "S1")).eq(POOLED).all()


def test_the_loop_is_found_with_its_sign(campaign):
    """The invented loop is 0.8 pF wide at mid strain, falling above rising, and closed at both ends."""
    levels = campaign.level_hysteresis
    mean = levels.groupby("nominal_level")["difference"].mean()
    assert mean.iloc[mean.index.get_indexer([0.2], method="nearest")[0]] == pytest.approx(-0.8, abs=0.06)
    assert mean.iloc[0] == pytest.approx(0.0, abs=0.06)
    assert ((levels["low"] <= levels["difference"]) & (levels["difference"] <= levels["high"])).all()
    both = campaign.sensor_lines[campaign.sensor_lines["branch"] == "both"]
    assert both["hysteresis_percent_fso"].mean() == pytest.approx(100 * 0.8 / 32.0, rel=0.15)
    assert both["hysteresis_p"].max() < 0.05
    assert (both["hysteresis_null_percent_fso"] < both["hysteresis_percent_fso"]).all()


def test_only_the_line_of_both_branches_carries_half_the_loop(campaign):
    widths = {branch: [r.direction_half_width for r in campaign.records if r.branch == branch] for branch in
              ("both", "rising", "falling")}  # fmt: skip
    # the root mean square of 4u(1 − u) over the eight levels below the turn, u = 0, 1/8 … 7/8
    u = np.arange(8) / 8
    assert np.mean(widths["both"]) == pytest.approx(0.4 * np.sqrt(np.mean((4 * u * (1 - u)) ** 2)), rel=0.08)
    assert set(widths["rising"]) == set(widths["falling"]) == {0.0}


def test_no_loop_is_seldom_called_one():
    calibration = calibrate(
        simulated(modules=20, sensors=5, repetitions=3, levels=8, descending=True, loop=0.0, seed=5)
    )
    p = calibration.sensor_lines.query("branch == 'both'")["hysteresis_p"]
    assert np.mean(p < 0.05) <= 0.12


def test_hysteresis_below_the_backlash_is_not_told_from_the_stand():
    readings = simulated(modules=1, sensors=2, repetitions=3, descending=True, loop=0.8)
    loose = replace(RATED, length_reference=LengthReference(backlash_mm=1.0))
    tight = replace(RATED, length_reference=LengthReference(backlash_mm=0.005))
    assert calibrate(readings, loose).level_hysteresis["label"].eq("not distinguishable from the stand").all()
    assert not calibrate(readings, tight).level_hysteresis["label"].all()


def test_what_a_sensor_repeats_at_a_level_is_lack_of_fit():
    bent = replace(SPREAD, sensor_by_level=0.4)
    calibration = calibrate(simulated(bent, modules=6, sensors=4, repetitions=4, levels=9))
    lines = calibration.sensor_lines
    assert np.mean(lines["lack_of_fit_p"] < 0.05) > 0.9
    assert np.sqrt(np.mean([r.lack_of_fit_variance for r in calibration.records])) == pytest.approx(
        0.4, rel=0.2
    )
    straight = calibrate(simulated(modules=20, sensors=5, repetitions=4, levels=9))
    assert 0.01 <= np.mean(straight.sensor_lines["lack_of_fit_p"] < 0.05) <= 0.11


def test_gauge_factor_and_stretch_exponent_of_an_ideal_strip():
    calibration = calibrate(simulated(Components(repetition=LineSpread(0.05, 0.05), residual=0.02)))
    own = line(calibration, "rising")
    assert own["gauge_factor"] == pytest.approx(1.0, abs=0.01)
    assert own["gauge_factor_low"] < 1.0 < own["gauge_factor_high"]
    assert own["gauge_factor_label"] == ""
    assert own["stretch_exponent"] == pytest.approx(1.0, abs=0.005)
    assert own["stretch_exponent_low"] < own["stretch_exponent"] < own["stretch_exponent_high"]
    assert calibration.labels["stretch_exponent"] == "a lower bound if cable capacitance was not removed"


def test_a_zero_that_was_not_measured_is_extrapolated_to():
    readings = simulated()
    above = readings.table[readings.table["x"] > 0.1].reset_index(drop=True)
    assert line(calibrate(replace(readings, table=above)), "rising")["gauge_factor_label"] == "extrapolated"


def test_intervals_of_gauge_factor_cover():
    lines = calibrate(simulated(modules=30, sensors=6, repetitions=3, seed=9)).sensor_lines
    truth = calibrate(
        simulated(
            Components(sensor=SPREAD.sensor, residual=1e-9), modules=30, sensors=6, repetitions=3, seed=9
        )
    ).sensor_lines["gauge_factor"]
    inside = (lines["gauge_factor_low"] <= truth) & (truth <= lines["gauge_factor_high"])
    assert 0.90 <= inside.mean() <= 0.98


def test_full_scale_is_the_rated_range_only_where_it_was_reached():
    readings = simulated()
    rated = line(calibrate(readings), "rising")
    assert rated["full_scale"] == "rated"
    assert rated["full_scale_output"] == pytest.approx(0.4 * abs(rated["slope"]))
    short = calibrate(readings, replace(RATED, range_strain=0.6))
    assert line(short, "rising")["full_scale"] == "measured"
    assert "did not reach it" in short.labels["full_scale"]
    assert "no rated range" in calibrate(readings, Description("invented")).labels["full_scale"]


def test_rising_levels_alone_include_creep_and_say_how_long():
    readings = simulated(modules=1, sensors=1)
    table = readings.table.assign(time_s=readings.table["order"] * 60.0)
    assert (
        calibrate(replace(readings, table=table)).labels["time_confounded"]
        == "includes creep over the run (7 min)"
    )
    assert calibrate(readings).labels["time_confounded"].endswith("(time not recorded)")
    up_and_down = simulated(modules=1, sensors=1, descending=True)
    assert "time_confounded" not in calibrate(up_and_down).labels


def test_uncertainty_of_the_reference_is_carried_or_said_to_be_missing():
    readings = simulated(modules=2, sensors=2, repetitions=12)
    bare = calibrate(readings)
    assert bare.labels["reference"] == "reference taken as exact; uncertainty is a lower bound"
    assert not bare.shared_reference.stated
    register = sensor_register(
        regular_plan(modules=2, sensors=2, repetitions=12), Truth((GenerationTruth(),)), 1
    )
    register = register.assign(rest_length_uncertainty_mm=0.4)
    carried = calibrate(
        readings, replace(RATED, length_reference=LengthReference(scale_relative=0.01, zero_mm=0.4)), register
    )
    assert "reference" not in carried.labels
    assert carried.shared_reference.rest_lengths_with_uncertainty == 4
    added = line(carried, "rising")["var_slope"] - line(bare, "rising")["var_slope"]
    slope, rest = line(bare, "rising")["slope"], line(bare, "rising")["rest_length_mm"]
    # stages record elongation here: scale and rest length move the slope by their relative amounts
    assert np.sqrt(added) == pytest.approx(abs(slope) * np.hypot(0.01, 0.4 / rest), rel=0.02)


def test_millimetres_where_rest_lengths_are_unknown():
    table = simulated(descending=True).table
    table = table.assign(x=table["elongation_mm"], strain=np.nan, length_mm=np.nan, nominal_level=np.nan)
    table["sensor_level"] = table["x"].round(3)
    description = Description("invented", range_elongation_mm=32.0)
    calibration = calibrate(Readings(table, ELONGATION), description)
    own = line(calibration)
    assert np.isnan(own[["gauge_factor", "stretch_exponent"]].astype(float)).all()
    assert own["gauge_factor_label"] == "not identifiable"
    assert own["full_scale"] == "rated"
    assert own["strain_high"] == pytest.approx(32.0, rel=0.01)
    assert calibration.records[0].reference_unit == "mm"
    assert calibration.labels["gauge_factor"].startswith("not identifiable")
    length = calibrate(Readings(table.assign(x=table["x"] + 80.0), LENGTH))
    assert np.isnan(length.records[0].zero_signal)


def test_an_outlying_reading_is_marked_and_kept():
    readings = simulated(modules=1, sensors=1, repetitions=3)
    table = readings.table.copy()
    table.loc[5, "signal"] += 8.0
    calibration = calibrate(replace(readings, table=table))
    (notice,) = [n for n in calibration.notices if n.code == "outlying-reading"]
    assert notice.file == table.loc[5, "trial"]
    assert f"order {table.loc[5, 'order']}" in notice.what
    assert calibration.readings["used"].all()
    assert calibration.sensor_lines["readings"].eq(24).all()


def test_sensors_set_aside_have_no_line():
    readings = simulated(modules=2, sensors=2)
    table = readings.table.copy()
    table.loc[table["module"] == "M02", "used"] = False
    calibration = calibrate(replace(readings, table=table))
    assert calibration.sensor_lines["module"].unique().tolist() == ["M01"]
    assert calibration.readings.loc[table["module"] == "M02", "fitted"].isna().all()


def test_one_level_gives_a_notice_and_no_line():
    readings = simulated(modules=1, sensors=2)
    table = readings.table
    table = table[(table["sensor"] == "S1") | (table["order"] == 1)].reset_index(drop=True)
    calibration = calibrate(replace(readings, table=table))
    assert calibration.sensor_lines["sensor"].tolist() == ["S1"]
    assert [n.code for n in calibration.notices] == ["no-line"]


def test_nothing_to_calibrate():
    readings = simulated(modules=1, sensors=1)
    calibration = calibrate(replace(readings, table=readings.table.assign(used=False)))
    assert calibration.sensor_lines.empty
    assert calibration.records == ()
    assert calibration.labels == {}


def test_records_carry_conditions_files_and_hashes():
    readings = simulated(modules=1, sensors=1, sessions=2, repetitions=2)
    files = readings.table["trial"].unique().tolist()
    table = readings.table.assign(started="2026-03-04T10:00:00")
    calibration = calibrate(replace(readings, table=table), hashes={file: file[-6:] for file in files})
    (record,) = calibration.records
    assert record.files == tuple(sorted(files))
    assert record.sha256 == tuple(file[-6:] for file in sorted(files))
    assert record.date == "2026-03-04"
    assert record.conditions["runs"] == "4 in 2 mountings"
    assert record.conditions["approach"] == "from below only"
    assert record.conditions["range"].endswith("40 %")
    assert record.signal_low < record.signal_high


def test_records_hold_plain_values_that_any_file_can_carry():
    readings = simulated(modules=2, sensors=2, sessions=2, repetitions=2, descending=True, loop=0.5)
    for record in calibrate(readings).records:
        values = [*asdict(record).values(), *record.length_line.values()]
        assert {type(value) for value in values} <= {str, float, int, dict, tuple}


def test_the_textbook_table_read_as_a_staircase():
    # the published up/down table, one run; the full-scale output is that of the fitted line over the range,
    # 10 × 1.083864, so that the figures of the mean curve are the published ones × 10.945/10.83864
    data = pd.read_csv(REFERENCE / "up_down_example.csv", comment="#")
    levels = np.concatenate([data["x_ref"], data["x_ref"][::-1]]).astype(float)
    signal = np.concatenate([data["y_up"], data["y_down"][::-1]])
    identity = TrialIdentity(
        "gauge.csv", "staircase", "one", "", "M", "S", "S", 1, "", "", "", np.nan, np.nan
    )
    trial = Trial(
        identity,
        signal,
        "mm",
        elongation_mm=levels,
        reference="elongation",
        direction=np.repeat([1.0, -1.0], 11),
    )
    calibration = calibrate(collect_readings([readings_of_staircase(trial).readings]), Description("gauge"))
    own = line(calibration)
    assert own[["intercept", "slope"]].tolist() == pytest.approx([-0.8525, 1.083863636], rel=1e-8)
    scale = 10.945 / own["full_scale_output"]
    assert own["full_scale_output"] == pytest.approx(10.83863636, rel=1e-8)
    names = ("least_squares", "terminal", "zero_based", "independent")
    found = [own[f"linearity_{name}_percent_fso"] for name in names]
    assert found == pytest.approx(np.array([1.0424020931, 1.1968935587, 1.1192325262, 0.9507766103]) * scale)
    assert own["hysteresis_percent_fso"] == pytest.approx(5.573321151 * scale)


def test_lengths_are_calibrated_directly_so_that_the_rest_length_cancels():
    readings = simulated(modules=2, sensors=2, repetitions=4)
    table = readings.table.assign(reference="length", rest_length_uncertainty_mm=0.8)
    sure = calibrate(replace(readings, table=table.assign(rest_length_uncertainty_mm=0.0)))
    record, exact = calibrate(replace(readings, table=table)).records[0], sure.records[0]
    signal = 100.0
    strain = [float(v) for v in inverse_limits(record.reading_model, signal)]
    length = [float(v) for v in inverse_limits(record.length_model, signal)]
    known = [float(v) for v in inverse_limits(exact.length_model, signal)]
    rest = record.rest_length_mm
    assert length[0] == pytest.approx(rest * (1.0 + strain[0]))
    assert length == pytest.approx(known, rel=1e-9)
    # 0.8 mm of rest length widens the strain, not the length
    assert length[2] - length[1] < 0.8 * rest * (strain[2] - strain[1])


def test_a_length_from_a_recorded_elongation_needs_the_rest_length():
    readings = simulated(modules=2, sensors=2, repetitions=4)
    table = readings.table.assign(reference="elongation", rest_length_uncertainty_mm=0.8)
    model = calibrate(replace(readings, table=table)).records[0].length_model
    _, low, high = inverse_limits(model, 100.0)
    assert float(high - low) > 2 * 1.9 * 0.8
    unknown = table.assign(x=table["elongation_mm"], length_mm=np.nan, strain=np.nan)
    assert calibrate(Readings(unknown, ELONGATION)).records[0].length_model is None


def test_readings_are_weighted_only_where_it_matters():
    even = calibrate(simulated(modules=4, sensors=4, repetitions=4, levels=9))
    assert "weights" not in even.labels
    uneven = replace(SPREAD, residual=0.05, residual_growth=12.0)
    weighted = calibrate(simulated(uneven, modules=4, sensors=4, repetitions=4, levels=9))
    assert weighted.labels["weights"].startswith("readings weighted by their scatter")
    # the weighted slopes of the runs scatter less than the ordinary ones about the known spread of runs
    runs = weighted.run_lines.merge(
        weighted.readings, on=["module", "sensor", "session", "repetition", "trial"]
    )
    ordinary = runs.groupby(["module", "sensor", "repetition"]).apply(
        lambda rows: np.polyfit(rows["x"], rows["signal"], 1)[0], include_groups=False
    )
    own = weighted.run_lines.set_index(["module", "sensor", "repetition"])["slope"]
    assert (
        own.groupby(["module", "sensor"]).std().mean()
        < 0.9 * ordinary.groupby(["module", "sensor"]).std().mean()
    )


def test_electrode_resistance_is_judged_where_it_is_stated():
    readings = simulated(modules=1, sensors=1)
    largest = readings.table["signal"].max() * 1e-12
    resistance = 0.2755614150 / (2 * np.pi * 100e3 * largest)
    stated = replace(RATED, electrode_resistance_ohm=resistance, readout={"frequency": "100 kHz"})
    label = calibrate(readings, stated).labels["electrode_resistance"]
    assert label.startswith("electrode resistance lowers the largest capacitance shown by 1 %")
    assert "parallel model" in label
    assert "electrode_resistance" not in calibrate(readings).labels
    corrected = replace(RATED, readout={"open_correction": "true"})
    assert "open correction" in calibrate(readings, corrected).labels["stretch_exponent"]


def test_a_new_mounting_is_covered_where_mountings_repeat():
    """A session moves a line more than a run does: readings after remounting must still be covered."""
    rng = np.random.default_rng(78)
    components = replace(SPREAD, session=LineSpread(0.5, 0.8), repetition=LineSpread(0.2, 0.3))
    quiet = Components(sensor=SPREAD.sensor, residual=0.0)
    design = {"modules": 5, "sensors": 3, "sessions": 2, "repetitions": 3, "levels": 8}
    hits = []
    for seed in range(16):
        truth = (
            calibrate(simulated(quiet, seed=seed, **design)).sensor_lines[["intercept", "slope"]].to_numpy()
        )
        records = calibrate(simulated(components, seed=seed, **design)).records
        for record, true in zip(records, truth, strict=True):
            strain = rng.uniform(0.05, 0.35)
            new = true + components.session.factor @ rng.normal(0.0, 1.0, 2)
            new = new + components.repetition.factor @ rng.normal(0.0, 1.0, 2)
            signal = new[0] + new[1] * strain + rng.normal(0.0, 0.15 / np.sqrt(10))
            _, low, high = inverse_limits(record.reading_model, signal, 10)
            hits.append(low <= strain <= high)
    assert 0.92 <= np.mean(hits) <= 0.98


def test_levels_in_random_order_have_no_branches():
    order = np.array([0.0, 0.4, 0.1, 0.3, 0.15, 0.35, 0.05, 0.25])
    parts = []
    rng = np.random.default_rng(12)
    for repetition in (1, 2, 3):
        identity = TrialIdentity(
            f"{repetition}.csv", "staircase", "one", "", "M", "S", "S", repetition, "", "", "", 50.0, 0.0
        )
        trial = Trial(
            identity, 80 + 70 * order + rng.normal(0.0, 0.1, 8), "pF", elongation_mm=50 * order,
            length_mm=50 * (1 + order), strain=order,
        )  # fmt: skip
        parts.append(readings_of_staircase(trial).readings)
    calibration = calibrate(collect_readings(parts))
    assert calibration.sensor_lines["branch"].tolist() == ["both"]
    assert "time_confounded" not in calibration.labels
    assert calibration.records[0].direction_half_width == 0.0
