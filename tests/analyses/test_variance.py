"""Components of spread: truth recovered, form chosen from the files, what is withheld, what is no matter."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from campaign.analyses.variance import ONE_AT_A_TIME, SHARED, variance_of_readings
from campaign.analyses.variance_frames import AVERAGE, LOWER_BOUND, ZERO
from campaign.pages.contract_columns import CONTRACT_COLUMNS
from campaign.recordings.description import Description
from campaign.recordings.recording import ELONGATION, STRAIN
from campaign.simulation.plan import Place, Plan, RunKey, regular_plan
from campaign.simulation.truth import LineSpread, LoopWidth, SignalLaw

SLOPE = 64.0  # of the simulation's law: 0.80 pF/mm on 80 mm


def at_mid(variance, generation="generation 1"):
    table = variance.variance_in_strain
    rows = table[(table["generation"] == generation) & (table["place"] == "mid")]
    return rows.set_index("level")


def test_truth_is_within_the_intervals(simulated) -> None:
    truth = simulated.components()
    held = []
    for seed in (1, 2, 3):
        rows = at_mid(simulated.analysed(simulated.usual_plan, seed=seed))
        for level in ("module", "sensor", "repetition"):
            sd = getattr(truth, level).sd_at(0.2) / SLOPE
            held.append(rows.loc[level, "low"] <= sd <= rows.loc[level, "high"])
        assert rows.loc["sensor_by_level", "strain_sd"] == pytest.approx(0.15 / SLOPE, rel=0.15)
        assert rows.loc["residual", "strain_sd"] == pytest.approx(0.10 / SLOPE, rel=0.10)
    assert sum(held) >= 7  # nine intervals of 95 %; benchmarks/coverage.py counts them properly


def test_shares_add_up_and_carry_intervals(simulated) -> None:
    rows = at_mid(simulated.usual())
    parts = rows.drop(index="total")
    assert parts["share"].sum() == pytest.approx(1.0)
    assert (parts["share_low"] <= parts["share"]).all()
    assert (parts["share"] <= parts["share_high"]).all()
    total = np.sqrt((parts["strain_sd"] ** 2).sum())
    assert rows.loc["total", "strain_sd"] == pytest.approx(total)
    assert rows.loc["total", "low"] < total < rows.loc["total", "high"]


def test_mean_line_and_its_uncertainty(simulated) -> None:
    table = simulated.usual().fixed_effects.set_index("term")
    assert table.loc["slope", "low"] < SLOPE < table.loc["slope", "high"]
    assert table.loc["intercept", "low"] < 72.0 < table.loc["intercept", "high"]
    assert 3 < table.loc["intercept", "df"] < 30  # modules and sensors are the units, not 720 readings


def test_tables_hold_the_promised_columns(simulated) -> None:
    variance = simulated.usual()
    for name in ("fixed_effects", "variance_components", "variance_in_strain", "effects"):
        promised = (
            CONTRACT_COLUMNS[name].split()
            if isinstance(CONTRACT_COLUMNS[name], str)
            else CONTRACT_COLUMNS[name]
        )
        assert set(promised) <= set(getattr(variance, name).columns), name


def test_certificate_agrees_with_statsmodels(simulated) -> None:
    for variance in (simulated.usual(), simulated.small()):
        row = variance.certificate.iloc[0]
        assert abs(row["difference"]) < 1e-6
        assert row["smallest_cone_eigenvalue"] > -1e-4
        assert row["method"] == "REML"


def test_effects_are_near_what_was_drawn(simulated) -> None:
    effects = simulated.usual().effects
    sensors = effects[(effects["level"] == "sensor") & (effects["term"] == "intercept")]
    assert len(sensors) == 30
    assert sensors["estimate"].std() == pytest.approx(0.8, rel=0.35)
    assert (sensors["low"] < sensors["estimate"]).all()
    assert set(effects["term"]) == {"intercept", "slope", "strain at mid"}


def test_a_module_that_stands_out_is_predicted_to(simulated) -> None:
    readings = simulated.readings(simulated.small_plan)
    raised = readings["signal"] + 8.0 * readings["module"].eq("M02")
    effects = simulated.fit(readings.assign(signal=raised)).effects
    modules = effects[(effects["level"] == "module") & (effects["term"] == "intercept")].set_index("module")
    assert modules["estimate"].idxmax() == "M02"


def test_units_of_the_signal_do_not_matter(simulated) -> None:
    readings = simulated.readings(simulated.small_plan)
    in_nanofarad = simulated.fit(readings.assign(signal=readings["signal"] / 1000, unit="nF"))
    plain, scaled = (v.variance_in_strain for v in (simulated.small(), in_nanofarad))
    assert scaled["strain_sd"].to_numpy() == pytest.approx(
        plain["strain_sd"].to_numpy(), rel=1e-4, nan_ok=True
    )
    assert scaled["high"].to_numpy() == pytest.approx(plain["high"].to_numpy(), rel=5e-3, nan_ok=True)
    assert set(in_nanofarad.fixed_effects["unit"]) == {"nF", "nF/(mm/mm)"}


def test_where_zero_lies_does_not_matter(simulated) -> None:
    readings = simulated.readings(simulated.small_plan)
    moved = readings.assign(x=readings["x"] + 3.0, nominal_level=readings["nominal_level"] + 3.0)
    plain, other = simulated.sds(simulated.small()), simulated.sds(simulated.fit(moved))
    assert other == pytest.approx(plain, rel=1e-4)


def test_order_of_the_readings_does_not_matter(simulated) -> None:
    readings = simulated.readings(simulated.small_plan)
    shuffled = simulated.fit(readings.sample(frac=1.0, random_state=3))
    assert simulated.sds(shuffled) == pytest.approx(simulated.sds(simulated.small()), rel=1e-4)


def test_the_same_readings_give_the_same_tables(simulated) -> None:
    again = simulated.fit(simulated.readings(simulated.small_plan))
    assert again.seed == simulated.small().seed
    for name in ("variance_in_strain", "tests", "effects", "comparisons"):
        pd.testing.assert_frame_equal(getattr(again, name), getattr(simulated.small(), name))


def panel(modules: int) -> Plan:
    """Modules whose four places differ in length, as the edges and diagonals of a panel do."""
    plan = regular_plan(modules=modules, sensors=4, repetitions=2, levels=5)
    places = tuple(
        Place(name, length) for name, length in (("AB", 60.0), ("BC", 80.0), ("CD", 95.0), ("AC", 120.0))
    )
    return Plan(plan.generations, places, repetitions=2, staircase=plan.staircase)


def test_position_takes_geometry_out_of_the_sensors(simulated) -> None:
    readings = simulated.readings(panel(5))
    with_places = simulated.fit(readings)
    nameless = readings.assign(position=readings["module"] + readings["sensor"])
    without = simulated.fit(nameless)
    true_sd = simulated.components().sensor.sd_at(0.2)
    slope = with_places.fits[0].mean_slope
    assert simulated.sds(with_places)["sensor"] == pytest.approx(true_sd / slope, rel=0.5)
    assert simulated.sds(without)["sensor"] > 8 * simulated.sds(with_places)["sensor"]
    position = with_places.tests.set_index("component").loc["position"]
    assert position["p"] < 1e-6
    assert "sensor + position" in set(without.identifiability["called"])


def test_loops_are_not_booked_as_noise(simulated) -> None:
    plan = regular_plan(modules=4, sensors=3, repetitions=2, levels=6, descending=True)
    looped = simulated.analysed(plan, simulated.truth(loop=LoopWidth(1.5, 0.3)))
    assert simulated.sds(looped)["residual"] == pytest.approx(0.1 / SLOPE, rel=0.35)
    assert "sensor_by_direction" in looped.fits[0].model.terms
    tests = looped.tests.set_index("component")
    assert tests.loc["direction", "p"] < 1e-6
    assert tests.loc["sensor_by_direction", "p"] < 0.01


def test_a_curve_that_all_share_is_not_booked_as_spread(simulated) -> None:
    plan = regular_plan(modules=4, sensors=3, repetitions=2, levels=6)
    bent = simulated.analysed(plan, simulated.truth(law=SignalLaw(exponent=2.0)))
    straight = simulated.analysed(plan)
    for name in ("residual", "sensor_by_level"):
        slopes = bent.fits[0].mean_slope / straight.fits[0].mean_slope
        assert simulated.sds(bent)[name] * slopes == pytest.approx(simulated.sds(straight)[name], rel=0.05)


def test_form_is_read_from_the_files(simulated) -> None:
    shared_plan = regular_plan(modules=3, sensors=3, repetitions=2, levels=4, shared_runs=True)
    shared = simulated.fit(simulated.readings(shared_plan))
    assert shared.form == SHARED
    assert {"run", "repetition"} <= set(shared.fits[0].model.terms)
    assert simulated.small().form == ONE_AT_A_TIME
    assert "run" not in simulated.small().fits[0].model.terms


def test_shared_runs_are_a_component_of_their_own(simulated) -> None:
    plan = regular_plan(modules=5, sensors=4, repetitions=3, levels=4, shared_runs=True)
    parts = simulated.components(shared_run=LineSpread(0.6, 0.8), repetition=LineSpread(0.1, 0.1))
    variance = simulated.analysed(plan, simulated.truth(parts))
    found = simulated.sds(variance, "zero")
    assert found["run"] == pytest.approx(0.6 / SLOPE, rel=0.5)
    assert found["repetition"] < 0.3 / SLOPE
    module = variance.tests.set_index("component").loc["module"]
    assert module["test"] == "parametric bootstrap"


def test_module_test_keeps_its_level_where_runs_are_shared(simulated) -> None:
    from campaign.analyses.variance_fit import fit_generation
    from campaign.analyses.variance_model import build_model
    from campaign.analyses.variance_tests import component_tests_of

    plan = regular_plan(modules=4, sensors=3, repetitions=2, levels=3, shared_runs=True)
    nothing = simulated.components(
        module=LineSpread(),
        shared_run=LineSpread(0.6, 0.8),
        repetition=LineSpread(0.1, 0.1),
        sensor_by_level=0.0,
    )
    rejected = []
    for seed in range(12):
        readings = simulated.readings(plan, simulated.truth(nothing), seed)
        model = build_model(readings, readings["signal"].to_numpy(), "generation 1")
        fit = fit_generation(model, {"zero": 0.0, "mid": 0.2, "full": 0.4}, limits_at=())
        tests = {test.component: test.p for test in component_tests_of(fit, seed)}
        rejected.append(tests["module"] < 0.05)
    # 5 % expected; nesting the shared run under each sensor would reject most
    assert sum(rejected) <= 3


def test_what_is_not_there_is_not_distinguishable_from_zero(simulated) -> None:
    parts = simulated.components(module=LineSpread())
    rows = at_mid(simulated.analysed(simulated.usual_plan, simulated.truth(parts), seed=2))
    assert rows.loc["module", "label"] == ZERO
    assert rows.loc["module", "low"] == 0.0
    assert rows.loc["module", "high"] > 0.0


def test_few_degrees_of_freedom_give_limits_and_no_share(simulated) -> None:
    rows = at_mid(simulated.small())
    assert np.isnan(rows.loc["module", "strain_sd"])
    assert np.isnan(rows.loc["module", "share"])
    assert rows.loc["module", "high"] > 0
    components = simulated.small().variance_components
    module = components[components["level"] == "module"].set_index("term")
    assert module["estimate"].isna().all()


def test_uneven_noise_withholds_its_intervals(simulated) -> None:
    plan = regular_plan(modules=4, sensors=4, repetitions=3, levels=6)
    variance = simulated.analysed(plan, simulated.truth(simulated.components(residual_growth=3.0)))
    rows = at_mid(variance)
    assert rows.loc["residual", "label"] == AVERAGE
    assert np.isnan(rows.loc["residual", "low"])
    assert np.isfinite(rows.loc["sensor", "low"])
    assert "uneven-noise" in {notice.code for notice in variance.notices}
    assert not {"residual", "repetition"} & set(variance.comparisons["first"])


def test_more_is_said_only_where_the_ratio_excludes_one(simulated) -> None:
    comparisons = simulated.usual().comparisons
    assert (comparisons["ratio"] >= 1).all()
    assert (comparisons["differs"] == (comparisons["low"] > 1)).all()
    pairs = comparisons.set_index(["first", "second"])["differs"]
    assert pairs["sensor", "residual"]
    assert not pairs[[p for p in pairs.index if set(p) == {"module", "sensor"}]].any()


def test_precision_sums_what_varies_within_a_mounting(simulated) -> None:
    variance = simulated.usual()
    table = variance.precision.set_index("figure")
    parts = simulated.sds(variance)
    expected = np.hypot(parts["repetition"], parts["residual"])
    assert table.loc["repeatability", "strain_sd"] == pytest.approx(expected)
    assert "intermediate precision" not in table.index
    assert table.loc["sensor-to-sensor", "strain_sd"] == pytest.approx(parts["sensor"])


def test_remounting_is_a_level_and_gives_intermediate_precision(simulated) -> None:
    plan = regular_plan(modules=4, sensors=3, sessions=3, repetitions=2, levels=4)
    parts = simulated.components(session=LineSpread(0.5, 0.5))
    variance = simulated.analysed(plan, simulated.truth(parts))
    assert simulated.sds(variance, "zero")["session"] == pytest.approx(0.5 / SLOPE, rel=0.5)
    table = variance.precision.set_index("figure")["strain_sd"]
    assert table["intermediate precision"] > 1.5 * table["repeatability"]


def test_new_sensor_is_wider_than_its_components(simulated) -> None:
    variance = simulated.usual()
    rows = variance.new_sensor[variance.new_sensor["place"] == "mid"].set_index("what")
    parts = simulated.sds(variance)
    assert rows.loc["new sensor", "strain_sd"] > np.hypot(parts["module"], parts["sensor"])
    assert rows.loc["new sensor", "expanded"] > 1.96 * rows.loc["new sensor", "strain_sd"]
    assert rows.loc["new module", "strain_sd"] < rows.loc["new sensor", "strain_sd"]


def test_generations_are_fitted_apart_and_pooled(simulated) -> None:
    plan = regular_plan(generations=2, modules=3, sensors=3, repetitions=2, levels=4)
    variance = simulated.fit(simulated.readings(plan))
    assert [fit.generation for fit in variance.fits] == ["generation 1", "generation 2", "all"]
    freedoms = variance.identifiability.set_index(["generation", "component"])["degrees_of_freedom"]
    assert freedoms["all", "module"] == 4
    assert freedoms["generation 1", "module"] == 2
    assert set(variance.effects["generation"]) == {"generation 1", "generation 2"}


def test_ratio_to_zero_leaves_out_the_zero_reading(simulated) -> None:
    variance = simulated.usual()
    (ratio,) = variance.ratio_fits
    assert len(ratio.model.readings) == len(variance.fits[0].model.readings) - 30
    assert ratio.mean_slope == pytest.approx(SLOPE / 72.0, rel=0.02)
    assert variance.ratio_zero_noise["strain_sd"].iloc[0] == pytest.approx(0.1 / SLOPE, rel=0.2)


def test_no_zero_no_ratio(simulated) -> None:
    readings = simulated.readings(simulated.small_plan)
    variance = simulated.fit(readings[(readings["module"] != "M01") | (readings["x"] > 0)])
    assert variance.ratio_fits == ()
    assert "no-zero-signal" in {notice.code for notice in variance.notices}


def test_runs_before_settling_do_not_enter(simulated) -> None:
    plan = regular_plan(modules=4, sensors=4, repetitions=4, levels=4)
    readings = simulated.readings(plan)
    first = readings["signal"] + 2.0 * (readings["repetition"] == 1)
    variance = simulated.fit(readings.assign(signal=first))
    assert variance.settling["generation 1"].first_settled == 2
    assert variance.fits[0].model.readings["repetition"].min() == 2
    assert "runs-before-settling" in {notice.code for notice in variance.notices}
    assert simulated.usual().settling["generation 1"].first_settled == 1


def test_temperature_enters_where_it_moved(simulated) -> None:
    readings = simulated.readings(simulated.usual_plan)
    warmth = np.random.default_rng(0).normal(22, 3, 6)
    temperature = warmth[readings.groupby("module").ngroup()]
    warm = readings.assign(signal=readings["signal"] + 0.5 * (temperature - 22), temperature_c=temperature)
    variance = simulated.fit(warm)
    row = variance.fixed_effects.set_index("term").loc["temperature"]
    assert row["low"] < 0.5 < row["high"]
    assert variance.covariates["temperature"][0] == pytest.approx(temperature.mean())
    assert simulated.usual().covariates == {}


def test_one_missing_run_makes_the_tests_a_bootstrap(simulated) -> None:
    gone = frozenset([RunKey("M01", "S1", "", 1)])
    variance = simulated.fit(
        simulated.readings(regular_plan(modules=3, sensors=3, repetitions=2, levels=4, omitted=gone))
    )
    kinds = variance.tests.set_index("component")["test"]
    assert kinds["module"] == "parametric bootstrap"
    assert kinds["repetition"] == "exact F"
    assert (variance.tests["p_adjusted"] >= variance.tests["p"]).all()


@pytest.mark.parametrize(
    "plan",
    [
        {"modules": 1, "sensors": 1},
        {"modules": 1, "sensors": 3, "levels": 2},
        {"modules": 3, "sensors": 1, "repetitions": 1},
        {"modules": 2, "sensors": 2, "repetitions": 1, "levels": 1},
        {"modules": 1, "sensors": 1, "repetitions": 1},
        {"modules": 1, "sensors": 1, "repetitions": 1, "levels": 1},
        {"modules": 2, "sensors": 2, "repetitions": 2, "levels": 3, "batches": 2, "descending": True},
    ],
)
def test_poor_designs_are_answered_in_words(simulated, plan) -> None:
    variance = simulated.fit(simulated.readings(regular_plan(**plan)))
    assert len(variance.identifiability)
    assert len(variance.fits) or "spread-not-fitted" in {notice.code for notice in variance.notices}
    assert not variance.variance_in_strain["high"].lt(variance.variance_in_strain["low"]).any()


def test_one_module_makes_the_total_a_lower_bound(simulated) -> None:
    rows = at_mid(simulated.fit(simulated.readings(regular_plan(modules=1, sensors=3, levels=3))))
    assert rows.loc["total", "label"] == LOWER_BOUND
    assert "module" not in rows.index


def test_no_readings_give_empty_tables_and_a_notice(simulated) -> None:
    readings = simulated.readings(simulated.small_plan)
    variance = simulated.fit(readings.assign(used=False))
    assert variance.fits == ()
    assert variance.variance_in_strain.empty
    assert [notice.code for notice in variance.notices] == ["no-readings"]


def test_levels_that_are_not_common_get_a_polynomial(simulated) -> None:
    readings = simulated.readings(simulated.small_plan)
    moved = readings["x"] + 0.01 * readings.groupby(["module", "sensor"]).ngroup()
    variance = simulated.fit(readings.assign(x=moved, nominal_level=np.nan))
    assert not variance.fits[0].model.fixed.means
    assert variance.fits[0].mean_slope == pytest.approx(SLOPE, rel=0.05)


def test_millimetres_where_no_rest_length_is_known() -> None:
    """The real gap cell: one module, one sensor, three repetitions, closing and opening, in mm."""
    file = Path(__file__).parents[1] / "campaigns" / "real" / "soft_capacitive_cell" / "steps.csv"
    raw = pd.read_csv(file, encoding="utf-8-sig")
    parts = []
    for repetition, column in enumerate((5, 20, 22), start=1):
        gap, signal = raw.iloc[:, 2].astype(float), raw.iloc[:, column].astype(float)
        rows = pd.DataFrame({"x": gap, "signal": signal}).dropna()
        turn = rows["x"].to_numpy().argmin()
        rows["direction"] = np.where(np.arange(len(rows)) < turn, "falling", "rising")
        rows.iloc[turn, 2] = "turning"
        parts.append(rows.assign(repetition=repetition, order=np.arange(1, len(rows) + 1)))
    whose = {"generation": "generation 1", "module": "cell", "sensor": "C1", "position": "C1"}
    empty = dict.fromkeys(("batch", "session", "started", "channel"), "")
    unknown = dict.fromkeys(("temperature_c", "humidity_percent", "time_s"), np.nan)
    readings = pd.concat(parts, ignore_index=True).assign(
        **whose, **empty, **unknown, trial="steps.csv", unit="pF", used=True
    )
    readings["nominal_level"] = readings["x"]
    variance = variance_of_readings(readings, ELONGATION, Description("cell"))
    assert set(variance.variance_in_strain["level"]) == {"repetition", "residual", "total"}
    labels = variance.identifiability.set_index("component")
    assert labels.loc["repetition", "degrees_of_freedom"] == 2
    assert labels.loc["sensor", "label"] == "not identified"
    assert variance.reference == ELONGATION
    assert variance.reference != STRAIN
    assert variance.fixed_effects["unit"].isin(["pF", "pF/mm"]).all()
