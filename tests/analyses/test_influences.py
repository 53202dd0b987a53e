"""Pressure and other influences: known truth found again, one correction for all, degenerate designs."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from campaign.analyses.influence_findings import coupling_fact, influence_facts, pressure_facts
from campaign.analyses.influence_sensors import (
    ONE_LENGTH,
    SignalSlope,
    coefficient_table,
    sensor_fits,
    signal_slopes,
)
from campaign.analyses.influence_spread import influence_spread, unit_tests
from campaign.analyses.influence_sweeps import gather_points, sweep_table
from campaign.analyses.influences import analyse_influences
from campaign.analyses.limits import judge_limits
from campaign.analyses.pressure import analyse_pressure, before_and_after
from campaign.pages.contract_columns import CONTRACT_COLUMNS
from campaign.recordings.description import Description
from campaign.recordings.recording import STRAIN, Trial, TrialIdentity
from campaign.recordings.sensor_share import key_of_trial
from campaign.trials.influences import features_of_offaxis, features_of_thermal
from campaign.trials.logged_pressure import logged_pressure
from campaign.trials.pressure import features_of_pressure

REST, ZERO, SLOPE = 60.0, 100.0, 80.0
C, D = 0.05, 0.1
"""pF, pF per strain, pF/kPa and pF/kPa per strain: at 20 % strain 0.0875 % apparent strain a kilopascal."""


def identity(kind="pressure", module="M01", sensor="AB", repetition=1, file=None, generation="first"):
    name = file or f"trials/{module}_{sensor}_{kind}_r{repetition}.csv"
    return TrialIdentity(
        name, kind, generation, "", module, sensor, sensor, repetition, "", "", "", REST, 0.1
    )


def swept(who, rng, *, c=C, d=D, lengths=(0.0, 0.2, 0.4), loop=0.0, noise=0.02, known=True, run_sd=0.0):
    """A run of triangles of pressure, 0 to 20 kPa, at each kept length."""
    t = np.arange(0.0, 60.0 * len(lengths), 0.75)
    x = np.asarray(lengths)[(t // 60).astype(int)]
    p = 20.0 * (1.0 - np.abs((t % 60) / 30.0 - 1.0))
    up = np.where(t % 60 < 30, 1.0, -1.0)
    own = c + rng.normal(0.0, run_sd) if run_sd else c
    y = ZERO + SLOPE * x + (own + d * x) * p + 0.5 * loop * up * (1.0 - np.abs(p / 10.0 - 1.0))
    series = {"strain": x, "elongation_mm": REST * x, "length_mm": REST * (1.0 + x)} if known else {}
    return Trial(who, y + rng.normal(0.0, noise, len(t)), "pF", time_s=t, pressure_kpa=p, **series)


def features(trials, reduce=features_of_pressure):
    return {key_of_trial(trial.identity): reduce(trial) for trial in trials}


def campaign(rng, *, modules=4, sensors=3, runs=2, module_sd=0.0, sensor_sd=0.0, run_sd=0.002, **more):
    trials = []
    for m in range(modules):
        own_module = rng.normal(0.0, module_sd)
        for s in range(sensors):
            c = C + own_module + rng.normal(0.0, sensor_sd)
            for r in range(runs):
                lengths = (0.0, 0.2, 0.4) if r % 2 == 0 else (0.4, 0.2, 0.0)
                who = identity(module=f"M{m + 1:02d}", sensor="ABCDEF"[s : s + 2], repetition=r + 1)
                trials.append(swept(who, rng, c=c, run_sd=run_sd, lengths=lengths, **more))
    return features(trials)


IN_USE = Description(title="t", use={"pressure": "15 kPa"}, limits={"pressure_error": (0.02, "mm/mm")})


def test_truth_is_found_with_its_contract_columns():
    found = analyse_pressure(campaign(np.random.default_rng(1), sensor_sd=0.01, loop=0.4), None, IN_USE)
    assert list(found.table.columns)[:3] == ["generation", "module", "sensor"]
    assert set(CONTRACT_COLUMNS["pressure"]) <= set(found.table.columns)
    table = found.table
    assert table["per_kpa_strain"].to_numpy() == pytest.approx(np.full(12, D), abs=0.02)
    assert table["slope"].to_numpy() == pytest.approx(np.full(12, SLOPE), rel=0.01)
    # the loop peaks at mid pressure; steps of a twelfth of the range round the peak off by 8 %
    assert table["strain_loop"].mean() == pytest.approx(0.92 * 0.4 / SLOPE, rel=0.04)
    # the error is largest at 40 %: (0.05 + 0.04) · 15 / 80
    assert table["strain_error_in_use"].mean() == pytest.approx(0.09 * 15 / SLOPE, rel=0.15)
    assert (table["strain_residual_sd_after"] < 0.5 * table["strain_residual_sd_before"]).all()
    assert set(table["left_out_by"]) == {"run"}
    assert found.labels == {}


def test_intervals_of_c_and_d_cover_over_100_campaigns():
    trials = [
        swept(identity(repetition=r, generation=f"g{seed}", module=f"M{seed}"), rng, run_sd=0.004)
        for seed in range(100)
        for rng in [np.random.default_rng(seed)]
        for r in range(1, 5)
    ]
    points = gather_points(features(trials).values(), STRAIN)
    sweeps = sweep_table(points)
    fits = sensor_fits(sweeps, 0.0)
    table = coefficient_table(points, sweeps, fits, signal_slopes(sweeps, None), 0.0, 15.0)
    assert set(table["df"]) == {3.0}  # nothing is pooled: every campaign has a generation of its own
    held = np.array(
        [table["low"].le(C) & table["high"].ge(C), table["per_x_low"].le(D) & table["per_x_high"].ge(D)]
    ).sum(axis=1)
    low, high = stats.binom.ppf([0.0005, 0.9995], 100, 0.95)
    assert np.all((held >= low) & (held <= high)), held


def test_sensors_that_differ_are_not_served_by_one_correction():
    found = analyse_pressure(campaign(np.random.default_rng(2), sensor_sd=0.02), None, IN_USE)
    assert found.spread.answers == {"first": "no"}
    left = found.spread.serving.set_index("correction")["sd"]
    assert left["sensor"] < 0.4 * left["generation"] < 0.4 * left["none"]
    components = found.spread.components.set_index(["component", "what"])
    spread = components.loc[("sensor", "error")]
    assert spread["low"] < 0.02 / SLOPE < spread["high"]
    assert np.isfinite(found.spread.fits["first"].criterion)
    fact = pressure_facts(found, judge_limits(IN_USE, None, [found.figures]))[0]
    assert (fact.answer, fact.sensors, fact.modules) == ("no", 12, 4)
    assert fact.sensor_p < 0.05


def test_sensors_alike_are_served_by_one_correction():
    found = analyse_pressure(campaign(np.random.default_rng(4)), None, IN_USE)
    assert found.spread.answers == {"first": "yes"}
    left = found.spread.serving.set_index("correction")["sd"]
    assert left["generation"] <= 1.1 * left["sensor"]


def _rows(rng, modules=4, sensors=3, runs=3, module_sd=0.0, sensor_sd=0.0, shared_sd=0.0):
    made = []
    for m in range(modules):
        own = rng.normal(0, module_sd) if module_sd else 0.0
        common = rng.normal(0, shared_sd, runs) if shared_sd else np.zeros(runs)
        for s in range(sensors):
            level = 1.0 + own + (rng.normal(0, sensor_sd) if sensor_sd else 0.0)
            for r in range(runs):
                trial = f"M{m}_r{r}" if shared_sd else f"M{m}_{s}_r{r}"
                effect = level + common[r] + rng.normal(0, 0.1)
                made.append(("g", f"M{m}", f"S{s}", trial, r, np.nan, effect))
    frame = pd.DataFrame(made, columns=["generation", "module", "sensor", "trial", "run", "x", "effect"])
    return frame.assign(b=1.0, b_variance=0.0)


@pytest.mark.parametrize("shared_sd", [0.0, 0.3])
def test_equal_units_are_rejected_as_often_as_claimed(shared_sd):
    rejected = {"module": 0, "sensor": 0}
    for seed in range(150):
        found = unit_tests(_rows(np.random.default_rng(seed), shared_sd=shared_sd))
        for name in rejected:
            rejected[name] += found[name].p < 0.05
    most = stats.binom.ppf(0.9995, 150, 0.05)
    assert max(rejected.values()) <= most, rejected
    if not shared_sd:
        assert min(rejected.values()) >= stats.binom.ppf(0.0005, 150, 0.05), rejected


def test_the_error_of_the_slope_widens_the_test_of_sensors():
    rows = _rows(np.random.default_rng(3), sensor_sd=0.2)
    sure = unit_tests(rows)["sensor"]
    unsure = unit_tests(rows.assign(b_variance=0.04))["sensor"]
    assert sure.p < 1e-6 < unsure.p


# --- degenerate designs


def test_one_sensor_one_sweep_says_what_it_lacks():
    found = analyse_pressure(
        features([swept(identity(), np.random.default_rng(5), lengths=(0.2,))]), None, IN_USE
    )
    row = found.table.iloc[0]
    assert row["per_kpa"] == pytest.approx(C + 0.2 * D, rel=0.05)
    assert row["low"] < C + 0.2 * D < row["high"]
    assert "run-to-run error unknown" in row["variance_source"]
    assert ONE_LENGTH in row["label"]
    for missing in ("per_kpa_strain", "strain_error_per_kpa", "residual_sd_after", "strain_loop_low"):
        assert math.isnan(row[missing]), missing
    assert [notice.code for notice in found.notices] == ["one-length"]
    assert found.spread.answers == {}
    assert found.figures["estimate"].isna().all()


def test_one_run_at_three_lengths_leaves_lengths_out():
    found = analyse_pressure(features([swept(identity(), np.random.default_rng(6))]), None, IN_USE)
    row = found.table.iloc[0]
    assert (row["left_out_by"], row["lengths"], row["df"]) == ("length", 3, 1.0)
    assert row["per_kpa_strain_low"] < D < row["per_kpa_strain_high"]
    assert "order" in found.labels


def test_lengths_that_are_not_known_leave_signal_units():
    trials = [
        swept(identity(repetition=r), np.random.default_rng(r), lengths=(0.0,), known=False) for r in (1, 2)
    ]
    found = analyse_pressure(features(trials), None, IN_USE)
    row = found.table.iloc[0]
    assert row["per_kpa"] == pytest.approx(C, rel=0.05)
    assert math.isnan(row["strain_error_per_kpa"])
    assert row["residual_sd_after"] < 0.1 * row["residual_sd_before"]


def test_pressure_in_use_beyond_the_sweeps_is_refused():
    far = Description(title="t", use={"pressure": "80 kPa"})
    row = analyse_pressure(campaign(np.random.default_rng(7), modules=1, sensors=1), None, far).table.iloc[0]
    assert math.isnan(row["strain_error_in_use"])
    assert "beyond the range" in row["label"]


def test_nothing_swept_is_nothing_analysed():
    assert analyse_pressure({}, None, IN_USE) is None
    assert analyse_influences({}, None, IN_USE) is None


def test_a_drift_in_step_with_pressure_is_named():
    t = np.arange(0.0, 60.0, 0.5)
    series = {"time_s": t, "pressure_kpa": 0.3 * t, "strain": np.zeros(len(t))}
    found = analyse_pressure(features([Trial(identity(), 100.0 + 0.02 * t, "pF", **series)]), None, IN_USE)
    assert "drift is part of the slope" in found.labels["one_way"]


# --- what follows from it


def test_the_limit_is_judged_with_the_uncertainty():
    found = analyse_pressure(campaign(np.random.default_rng(8), modules=2, sensors=2), None, IN_USE)
    limits = judge_limits(IN_USE, None, [found.figures])
    assert set(limits.of_sensors()["verdict"]) == {"met"}
    strict = Description(title="t", use=IN_USE.use, limits={"pressure_error": (0.01, "mm/mm")})
    again = analyse_pressure(campaign(np.random.default_rng(8), modules=2, sensors=2), None, strict)
    assert set(judge_limits(strict, None, [again.figures]).of_sensors()["verdict"]) == {"not met"}


def test_a_limit_in_another_unit_is_not_judged_without_a_line():
    percent = Description(title="t", use=IN_USE.use, limits={"pressure_error": (2.0, "%FSO")})
    found = analyse_pressure(campaign(np.random.default_rng(9), modules=1, sensors=1), None, percent)
    assert found.figures.empty
    assert judge_limits(percent, None, [found.figures]).not_judged == ("pressure_error",)


def test_sensors_set_aside_are_put_back_to_compare():
    found = analyse_pressure(campaign(np.random.default_rng(8), modules=3, sensors=2), None, IN_USE)
    limits = judge_limits(IN_USE, None, [found.figures])
    errors = found.table["strain_error_in_use"].abs()
    without = replace(found, table=found.table.drop(errors.idxmax()))
    (alone,) = pressure_facts(without, limits)
    (compared,) = pressure_facts(without, limits, found)
    assert np.isnan(alone.figure.put_back)
    assert compared.figure.put_back > compared.figure.mean == alone.figure.mean


def test_a_correction_takes_pressure_out_of_another_trial():
    rng = np.random.default_rng(10)
    found = analyse_pressure(campaign(rng, modules=1, sensors=1), None, IN_USE)
    correction = found.corrections["first", "M01", "AB"]
    x = np.tile(np.linspace(0.0, 0.4, 50), 4)
    p = np.repeat([0.0, 5.0, 10.0, 30.0], 50)
    y = ZERO + SLOPE * x + (C + D * x) * p + rng.normal(0, 0.02, 200)
    shown = before_and_after(correction, y, x, p)
    assert shown.after < 0.1 * shown.before
    assert shown.before_as_x == pytest.approx(shown.before / SLOPE, rel=0.01)
    assert (shown.samples, shown.samples_outside) == (200, 50)
    assert before_and_after(correction, y, x, np.zeros(200)) is None


def test_neighbours_that_move_are_coupled_and_others_are_not():
    rng = np.random.default_rng(11)
    strained = swept(identity(file="trials/wide.csv"), rng)
    moved = strained.strain
    made = {"strained": strained}
    for sensor, share in (("BC", 0.2), ("CD", 0.0)):
        who = identity(sensor=sensor, file="trials/wide.csv")
        y = ZERO + share * SLOPE * moved + C * strained.pressure_kpa + rng.normal(0, 0.02, len(moved))
        made[sensor] = Trial(who, y, "pF", time_s=strained.time_s, pressure_kpa=strained.pressure_kpa)
    found = analyse_pressure(features(made.values()), None, IN_USE)
    rows = found.coupling.set_index("sensor")
    assert rows["moves"].to_dict() == {"BC": True, "CD": False}
    assert rows.loc["BC", "strained"] == "AB"
    # what AB recorded is its length: 0.2 · 80 pF over 60 mm
    assert rows.loc["BC", "low"] < 0.2 * SLOPE / REST < rows.loc["BC", "high"]
    assert (coupling_fact(found).moving, coupling_fact(found).sensor) == (1, "BC")


# --- other influences


def _thermal(who, rng, zero=0.03, sensitivity=0.08, lengths=(0.0, 0.3)):
    t = np.arange(0.0, 120.0 * len(lengths), 1.0)
    x = np.asarray(lengths)[(t // 120).astype(int)]
    warm = 8.0 * np.sin(2.0 * np.pi * t / 120.0)
    y = ZERO + SLOPE * x + (zero + sensitivity * x) * warm + rng.normal(0, 0.01, len(t))
    return Trial(who, y, "pF", time_s=t, temperature_c=23.0 + warm, strain=x, reference="strain")


def test_temperature_coefficients_of_zero_and_of_sensitivity():
    rng = np.random.default_rng(14)
    trials = [_thermal(identity("thermal", repetition=r), rng) for r in (1, 2, 3)]
    found = analyse_influences(features(trials, features_of_thermal), None, IN_USE)
    row = found.table.iloc[0]
    assert set(CONTRACT_COLUMNS["influences"]) <= set(found.table.columns)
    assert (row["influence"], row["unit"], row["zero_at"]) == ("temperature", "pF per K", 23.0)
    # 0.03 pF/K of 100 pF, and 0.08 pF/K per strain of 80 pF per strain
    assert row["relative_percent_low"] < 0.03 < row["relative_percent_high"]
    assert row["sensitivity_percent_low"] < 0.1 < row["sensitivity_percent_high"]
    assert influence_facts(found)[0].kind == "strain"


@pytest.mark.parametrize(("across", "along", "percent"), [(1, 1, 100.0), (1, 2, 50.0), (4, 2, 200.0)])
def test_cross_axis_sensitivity_of_ideal_plates(across, along, percent):
    # C/C₀ = λᵖ has the slope p·C₀ at λ = 1, whichever way: p = 1 free, 2 width kept, 4 both ways
    rng = np.random.default_rng(13)
    pressed = [
        swept(identity(repetition=r), rng, c=0.0, d=0.0, lengths=(0.0, 1e-2, 2e-2), noise=1e-6)
        for r in (1, 2)
    ]
    exact = [
        Trial(
            t.identity,
            ZERO * (1.0 + t.strain) ** along,
            "pF",
            time_s=t.time_s,
            pressure_kpa=t.pressure_kpa,
            strain=t.strain,
            reference="strain",
        )
        for t in pressed
    ]
    slope = sweep_table(gather_points(features(exact).values(), STRAIN))
    b = np.polyfit(slope["x"], slope["level"], 1)[0]
    time = np.arange(0.0, 100.0)
    stretch = 0.02 * (1.0 - np.abs(time / 50.0 - 1.0))
    off = Trial(
        identity("offaxis"),
        ZERO * (1 + stretch) ** across,
        "pF",
        time_s=time,
        strain=stretch,
        reference="strain",
    )
    c = sweep_table(gather_points([features_of_offaxis(off)], STRAIN))["slope"].iloc[0]
    assert 100.0 * c / b == pytest.approx(percent, rel=0.04)


def test_cross_axis_sensitivity_needs_a_slope_along():
    t = np.arange(0.0, 100.0)
    across = 0.2 * (1.0 - np.abs(t / 50.0 - 1.0))
    trials = [
        Trial(
            identity("offaxis", repetition=r),
            ZERO + 12.0 * across,
            "pF",
            time_s=t,
            strain=across,
            reference="strain",
        )
        for r in (1, 2)
    ]
    found = analyse_influences(features(trials, features_of_offaxis), None, IN_USE)
    row = found.table.iloc[0]
    assert row["coefficient"] == pytest.approx(12.0, rel=1e-6)
    assert math.isnan(row["relative_percent"])
    assert influence_facts(found)[0].kind == "signal"


def test_other_trials_that_log_pressure_are_shown_before_and_after():
    rng = np.random.default_rng(15)
    x = np.abs(np.sin(np.linspace(0.0, 12.0, 400))) * 0.4
    p = 20.0 * np.abs(np.sin(np.linspace(0.0, 5.0, 400)))
    y = ZERO + SLOPE * x + (C + D * x) * p + rng.normal(0, 0.02, 400)
    cycled = Trial(identity("cyclic"), y, "pF", strain=x, pressure_kpa=p, reference="strain")
    kept = logged_pressure(cycled)
    trials = campaign(rng, modules=1, sensors=1)
    found = analyse_pressure(trials, None, IN_USE, [(cycled.identity, kept)])
    row = found.compensated.iloc[0]
    # the cross-products say what the series say
    shown = before_and_after(found.corrections["first", "M01", "AB"], y, x, p)
    assert (row["before"], row["after"]) == pytest.approx((shown.before, shown.after), rel=1e-6)
    assert row["strain_after"] < 0.2 * row["strain_before"]
    assert (row["kind"], bool(row["inside"])) == ("cyclic", True)
    still = Trial(identity("cyclic"), y, "pF", strain=x, pressure_kpa=np.full(400, 3.0))
    assert logged_pressure(still) is None


def test_one_sensor_a_module_does_not_tell_modules_from_sensors():
    found = analyse_pressure(
        campaign(np.random.default_rng(16), modules=5, sensors=1, sensor_sd=0.02), None, IN_USE
    )
    components = set(found.spread.components["component"])
    assert {"mean", "module and sensor", "sweep"} <= components
    assert not {"module", "sensor"} & components
    assert found.spread.answers == {"first": "no"}


@pytest.mark.parametrize("sensor_sd", [0.0, 0.02])
@pytest.mark.parametrize(("modules", "sensors"), [(1, 2), (2, 1), (2, 2), (3, 2)])
def test_signals_without_any_noise_break_nothing(sensor_sd, modules, sensors):
    rng = np.random.default_rng(17)
    exact = campaign(rng, modules=modules, sensors=sensors, sensor_sd=sensor_sd, run_sd=0.0, noise=0.0)
    found = analyse_pressure(exact, None, IN_USE)
    table = found.table
    assert table["per_kpa_strain"].to_numpy() == pytest.approx(np.full(modules * sensors, D), rel=1e-6)
    assert table["strain_residual_sd_after"].max() < 1e-6
    assert found.spread.answers == {}
    assert [notice.code for notice in found.notices] == ["spread-not-fitted"]
    assert (table["one_correction"] == "not decided").all()


def test_one_sweep_a_sensor_leaves_modules_to_compare():
    rng = np.random.default_rng(18)
    rows = _rows(rng, runs=1, module_sd=0.5).assign(
        repetition=1, position="", influence_unit="kPa", unit="pF", x=0.2, slope=lambda t: t["effect"]
    )
    rows["slope_error"], rows["slope_freedom"] = 0.1, 20.0
    sure = {("g", m, s): SignalSlope(1.0, 0.0, 10.0, "") for m, s in zip(rows["module"], rows["sensor"])}
    points = pd.DataFrame({"number": np.repeat(rows.index, 3), "influence": 1.0, "signal": 1.0})
    found = influence_spread(points, rows, sure, "pressure")
    components = found.components.set_index("component")
    assert components.loc["module", "low"] < 0.5 < components.loc["module", "high"]
    assert "sensor" not in components.index
    assert found.answers == {"g": "no"}
