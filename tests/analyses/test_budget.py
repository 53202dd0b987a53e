"""Budgets: every source once, coverage of U in simulated use, what is unknown, what conditions do."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from campaign.analyses.budget import BUDGET_COLUMNS, analyse_budget, monte_carlo, non_normal_share
from campaign.analyses.budget_findings import budget_findings
from campaign.analyses.budget_influences import OWN, SHARED
from campaign.analyses.budget_model import (
    ABSENT,
    ACROSS,
    CONTAINED,
    COUNTED,
    LACK,
    LINE,
    LOOP,
    MOUNTING,
    NOISE,
    NOT_KNOWN,
    PRESSURE,
    RATE,
    REFERENCE,
    RESOLUTION,
    RUN,
    SENSORS,
    TEMPERATURE,
    TIME,
    BudgetPlace,
    BudgetSubject,
    Course,
    Effect,
    UseConditions,
    budget_in_use,
    conditions_of_use,
    worst_in_use,
)
from campaign.analyses.budget_new_sensors import new_sensor_parts
from campaign.analyses.calibration import Calibration, analyse_calibration
from campaign.analyses.drift import analyse_drift
from campaign.analyses.influences import analyse_influences
from campaign.analyses.limits import CONDITIONS, judge_limits
from campaign.analyses.pressure import analyse_pressure
from campaign.analyses.sensor_figures import principal_records
from campaign.analyses.variance import analyse_variance
from campaign.analyses.variance_fit import GenerationFit, choose_places, fit_generation
from campaign.analyses.variance_model import build_model
from campaign.pages.contract_columns import CONTRACT_COLUMNS
from campaign.recordings.description import Description, LengthReference, SignalReference
from campaign.recordings.recording import ELONGATION, STRAIN, Trial
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
from campaign.trials.readings import Readings
from tests.analyses import test_influences as sweeps
from tests.analyses.hold_campaign import hold, identity

NO_REGISTER = pd.DataFrame(columns=["module", "sensor"])
RATED = Description("invented", range_strain=0.40)
NOTHING_JUDGED = judge_limits(Description("t"), None)
COMPONENTS = Components(
    module=LineSpread(0.5, 1.0, 0.2),
    sensor=LineSpread(0.8, 1.5, 0.2),
    session=LineSpread(0.3, 0.5),
    repetition=LineSpread(0.2, 0.4),
    sensor_by_level=0.12,
    residual=0.15,
)
LOOP_WIDTH = 0.6
SLOPE = 80.0
"""pF per unit strain of every simulated sensor: 1 pF/mm over 80 mm."""


def truth(components: Components = COMPONENTS, loop: float = LOOP_WIDTH) -> Truth:
    law = SignalLaw(parasitic=0.0, per_mm=1.0)
    return Truth((GenerationTruth(law=law, components=components, loop=LoopWidth(loop, 0.0)),))


def simulated(seed: int, of: Truth | None = None, **plan: object) -> pd.DataFrame:
    usual = {"modules": 4, "sensors": 4, "sessions": 2, "repetitions": 2, "levels": 7, "descending": True}
    return simulate_readings(regular_plan(**(usual | plan)), of or truth(), seed)


def calibrated(table: pd.DataFrame, description: Description = RATED, quantity=STRAIN) -> Calibration:
    return analyse_calibration(Readings(table, quantity), description, NO_REGISTER, {})


def fit_alone(table: pd.DataFrame) -> GenerationFit:
    """The nested fit of one generation, without tests and limits."""
    places = choose_places(table["x"].to_numpy(float), 0.4, has_zero=True)
    name = str(table["generation"].iloc[0])
    return fit_generation(build_model(table, table["signal"].to_numpy(float), name), places, limits_at=())


def new_sensor(x: float, parts) -> tuple[BudgetSubject, BudgetPlace]:
    """A new sensor at one place, nothing else measured."""
    missing = dict.fromkeys((TIME, PRESSURE, TEMPERATURE, ACROSS), "not measured")
    place = BudgetPlace("mid", x, parts, {}, None, missing)
    return BudgetSubject("g", "", "", "pF", (place,)), place


def source(budget, name):
    return next(found for found in budget.sources if found.source == name)


@pytest.fixture(scope="module")
def campaign():
    """A campaign of staircases with its budget, no conditions of use stated."""
    calibration = calibrated(simulated(1))
    variance = analyse_variance(calibration, RATED)
    return calibration, variance, analyse_budget(RATED, calibration, variance)


def test_columns_are_those_promised_and_every_source_stands_once_a_place(campaign):
    _, _, budget = campaign
    assert tuple(budget.table.columns) == BUDGET_COLUMNS
    assert set(CONTRACT_COLUMNS["budget"]) <= set(BUDGET_COLUMNS)
    assert not budget.table.duplicated(["generation", "module", "sensor", "place", "source"]).any()
    assert len(budget.subjects) == 1 + 16
    known = budget.table[budget.table["label"] != NOT_KNOWN]
    shares = known.groupby(["generation", "module", "sensor", "place"])["share"].sum()
    assert shares.to_numpy() == pytest.approx(np.ones(len(shares)))
    rows = budget.table.dropna(subset=["standard_uncertainty"])
    products = (rows["standard_uncertainty"] * rows["sensitivity"].abs()).to_numpy(float)
    assert products == pytest.approx(rows["contribution_strain"].to_numpy(float))


def test_without_conditions_a_sensor_has_the_variance_of_its_calibration_record(campaign):
    calibration, _, _ = campaign
    stated = replace(RATED, length_reference=LengthReference(scale_relative=5e-4, zero_mm=0.05))
    calibration = calibrated(simulated(1), stated)
    budget = analyse_budget(stated, calibration, None)
    subjects = {(s.module, s.sensor): s for s in budget.subjects}
    for record in principal_records(calibration.records):
        model = record.reading_model
        for place in subjects[record.module, record.sensor].places:
            x = place.x
            variance = (
                model.var_intercept + 2 * x * model.cov_intercept_slope + x * x * model.var_slope
                + model.run_var_intercept + 2 * x * model.run_cov + x * x * model.run_var_slope
                + model.lack_of_fit_variance + model.direction_half_width**2 + model.residual_variance
            )  # fmt: skip
            found = budget_in_use(subjects[record.module, record.sensor], place, UseConditions())
            expected = math.sqrt(variance) / abs(record.slope)
            assert found.combined.standard_uncertainty == pytest.approx(expected, rel=1e-9)


def test_contributions_are_the_simulated_components_each_once():
    table = simulated(3, modules=30, sensors=6)
    own = analyse_budget(RATED, calibrated(table), None).subjects
    new_parts = new_sensor_parts(fit_alone(table), [0.0, 0.2, 0.4], math.nan, [0.0] * 3)
    for number, x in enumerate((0.0, 0.2, 0.4)):
        found = [budget_in_use(s, s.places[number], UseConditions()) for s in own]

        def mean_square(name, found=found):
            return float(np.mean([source(one, name).contribution ** 2 for one in found])) * SLOPE**2

        expected = {
            MOUNTING: COMPONENTS.session.sd_at(x) ** 2,
            RUN: COMPONENTS.repetition.sd_at(x) ** 2,
            NOISE: COMPONENTS.residual**2,
            LOOP: (LOOP_WIDTH / 2) ** 2 * np.mean([(4 * u * (1 - u)) ** 2 for u in np.arange(6) / 6]),
        }
        for name, variance in expected.items():
            assert mean_square(name) == pytest.approx(variance, rel=0.2), (name, x)
        new = budget_in_use(*new_sensor(x, new_parts[number]), UseConditions())
        spread = COMPONENTS.module.sd_at(x) ** 2 + COMPONENTS.sensor.sd_at(x) ** 2
        assert (source(new, SENSORS).contribution * SLOPE) ** 2 == pytest.approx(spread, rel=0.3)
        parts = sum(expected.values()) + spread + COMPONENTS.sensor_by_level**2
        assert (new.combined.standard_uncertainty * SLOPE) ** 2 == pytest.approx(parts, rel=0.25)


def test_variance_of_readings_of_new_sensors_is_that_of_the_budget():
    table = simulated(4, modules=40, sensors=5)
    fit = fit_alone(table)
    parts = new_sensor_parts(fit, [0.2], math.nan, [0.0])[0]["unknown"]
    predicted = sum(line.contribution**2 for line in parts.lines)
    others = simulated(5, modules=60, sensors=5, sessions=1, repetitions=1)
    read = (others["signal"] - fit.mean_intercept) / fit.mean_slope
    errors = (read - others["x"])[np.isclose(others["x"], 0.2)]
    # the loop is widest at mid scale, where the budget holds its root mean square over the range
    wider = (LOOP_WIDTH / 2 / SLOPE) ** 2 * (1 - np.mean([(4 * u * (1 - u)) ** 2 for u in np.arange(6) / 6]))
    assert float(np.mean(errors**2)) == pytest.approx(predicted + wider, rel=0.15)


# --- coverage in simulated use


IN_USE = UseConditions(time_since_zero_s=3600.0, pressure_kpa=20.0, temperature_range_k=10.0)
COURSE = Course(-0.001, 0.0001, 0.0, 0.0, 10.0, 10.0, 1e5, OWN)
PRESSED = Effect(0.00015, 0.00002, 20.0, 50.0, owner=OWN)
WARMED = Effect(0.0003, 0.00005, 20.0, 50.0, owner=OWN)


def with_influences(place: BudgetPlace) -> BudgetPlace:
    return replace(place, effects={PRESSURE: PRESSED, TEMPERATURE: WARMED}, course=COURSE)


def moved(rng: np.random.Generator) -> float:
    """Change of a reading by time, pressure and temperature in the conditions of use, as strain."""
    change, spread = COURSE.over(IN_USE.time_since_zero_s)
    error = (change + spread * rng.normal()) * rng.uniform()
    error += (PRESSED.value + PRESSED.spread * rng.normal()) * rng.uniform() * IN_USE.pressure_kpa
    warm = rng.uniform(-1, 1) * IN_USE.temperature_range_k / 2
    return float(error + (WARMED.value + WARMED.spread * rng.normal()) * warm)


def test_u_covers_new_readings_of_calibrated_sensors_in_simulated_use():
    rng = np.random.default_rng(7)
    held, drawn = 0, 0
    for seed in range(14):
        table = simulated(100 + seed, modules=5, sensors=5, sessions=8)
        session = table["session"].astype(str).str.extract(r"(\d+)$")[0].astype(int)
        number = session.groupby(table["module"]).rank("dense")
        calibration = calibrated(table[number <= 2].reset_index(drop=True))
        budget = analyse_budget(RATED, calibration, None)
        subjects = {(s.module, s.sensor): s for s in budget.subjects}
        records = {(r.module, r.sensor): r for r in principal_records(calibration.records)}
        later = table[(number > 2) & np.isin(np.round(table["x"], 6), [0.0, 0.2, 0.4])]
        for key, rows in later.groupby(["module", "sensor", "session"]):
            row = rows.iloc[int(rng.integers(len(rows)))]
            subject, record = subjects[key[:2]], records[key[:2]]
            place = min(subject.places, key=lambda p, x=row["x"]: abs(p.x - x))
            found = budget_in_use(subject, with_influences(place), IN_USE)
            error = (row["signal"] - record.intercept) / record.slope - row["x"] + moved(rng)
            held += abs(error) <= found.combined.expanded_uncertainty
            drawn += 1
    assert drawn >= 2000
    assert held >= stats.binom.ppf(0.0005, drawn, 0.95), held / drawn
    assert held <= 0.985 * drawn, held / drawn


def test_u_covers_new_sensors_read_by_the_line_of_their_generation():
    shares = []
    rng = np.random.default_rng(8)
    use = UseConditions("unknown", 0.0, 0.0, False, 0.0, 0.0)
    for seed in range(36):
        fit = fit_alone(simulated(200 + seed, modules=6, sensors=3, repetitions=2))
        parts = new_sensor_parts(fit, [0.0, 0.2, 0.4], math.nan, [0.0] * 3)
        reach = {
            x: budget_in_use(*new_sensor(x, part), use).combined.expanded_uncertainty
            for x, part in zip((0.0, 0.2, 0.4), parts, strict=True)
        }
        others = simulated(9000 + seed, modules=20, sensors=3, sessions=1, repetitions=1)
        others = others[np.isin(np.round(others["x"], 6), [0.0, 0.2, 0.4])]
        chosen = others.groupby(["module", "sensor"]).sample(1, random_state=int(rng.integers(2**31)))
        errors = (chosen["signal"] - fit.mean_intercept) / fit.mean_slope - chosen["x"]
        limits = np.array([reach[round(float(x), 6)] for x in chosen["x"]])
        shares.append(float(np.mean(np.abs(errors) <= limits)))
    assert len(shares) * 60 > 2000
    error = float(np.std(shares, ddof=1)) / math.sqrt(len(shares))
    assert abs(np.mean(shares) - 0.95) <= 3.3 * error + 0.01, (np.mean(shares), error)


# --- conditions


def test_every_condition_adds_its_share_and_zero_of_it_adds_nothing(campaign):
    _, _, budget = campaign
    subject = budget.subjects[3]
    place = with_influences(subject.places[1])
    still = UseConditions("unknown", 0.0, 0.0, False, 0.0, 0.0)
    base = budget_in_use(subject, place, still).combined.standard_uncertainty ** 2
    time = budget_in_use(subject, place, replace(still, time_since_zero_s=3600.0))
    decades = math.log10(3600.0 / COURSE.start_s)
    grown = (COURSE.per_decade**2 + COURSE.per_decade_spread**2) * decades**2 / 3
    assert time.combined.standard_uncertainty**2 - base == pytest.approx(grown)
    pressed = budget_in_use(subject, place, replace(still, pressure_kpa=20.0))
    grown = (PRESSED.value**2 + PRESSED.spread**2) * 20.0**2 / 3
    assert pressed.combined.standard_uncertainty**2 - base == pytest.approx(grown)
    corrected = budget_in_use(subject, place, replace(still, pressure_kpa=20.0, pressure_corrected=True))
    assert corrected.combined.standard_uncertainty**2 - base == pytest.approx(PRESSED.spread**2 * 400 / 3)
    known = budget_in_use(subject, place, replace(still, direction="rising"))
    assert source(known, LOOP).status == CONTAINED
    assert source(budget_in_use(subject, place, still), TIME).status == ABSENT
    assert budget_in_use(subject, place, still).unknown == (REFERENCE,)


def test_temperature_that_moved_between_calibration_runs_is_not_added_again(campaign):
    _, _, budget = campaign
    subject = budget.subjects[3]
    inside = replace(WARMED, inside=4.0)  # K²: runs differed by 2 K
    place = replace(subject.places[0], effects={TEMPERATURE: inside})
    wide = budget_in_use(subject, place, UseConditions(temperature_range_k=10.0))
    variance = source(wide, TEMPERATURE).contribution ** 2
    expected = (WARMED.value**2 + WARMED.spread**2) * (25.0 / 3 - 4.0)
    assert variance == pytest.approx(expected)
    narrow = budget_in_use(subject, place, UseConditions(temperature_range_k=6.0))
    assert source(narrow, TEMPERATURE).status == CONTAINED


def test_beyond_what_was_measured_a_source_is_unknown_and_u_at_least(campaign):
    _, _, budget = campaign
    subject = budget.subjects[3]
    place = with_influences(subject.places[0])
    for use in (
        UseConditions(time_since_zero_s=2 * COURSE.farthest_s),
        UseConditions(pressure_kpa=2 * PRESSED.farthest),
        UseConditions(rate_per_s=0.1),
    ):
        found = budget_in_use(subject, place, use)
        assert found.is_at_least
        assert len(set(found.unknown) & {TIME, PRESSURE, RATE}) == 1


def test_loops_of_cyclic_trials_stand_in_at_about_the_stated_rate(campaign):
    _, _, budget = campaign
    subject = replace(budget.subjects[3], dynamic_half_loop=0.01, dynamic_rate_per_s=0.1)
    place = subject.places[1]
    found = budget_in_use(subject, place, UseConditions(rate_per_s=0.2))
    assert source(found, LOOP).contribution == pytest.approx(0.01)
    assert source(found, RATE).status == CONTAINED
    away = budget_in_use(subject, place, UseConditions(rate_per_s=1.0))
    assert source(away, RATE).status == NOT_KNOWN
    assert source(away, LOOP).contribution < 0.01


def test_conditions_are_those_of_the_description():
    use = {"direction": "rising", "time_since_zero": "8 h", "pressure": "20 kPa", "temperature_range": "4 K"}
    found = conditions_of_use(Description("t", use=use | {"transverse_strain": "2 %", "rate": "0.1 1/s"}))
    assert found == UseConditions("rising", 28800.0, 20.0, False, 4.0, 0.02, 0.1)
    assert math.isnan(conditions_of_use(Description("t")).pressure_kpa)


def test_what_was_not_measured_is_unknown_unless_there_is_none_of_it(campaign):
    _, _, budget = campaign
    worst = budget.of_sensors()[0]
    assert set(worst.unknown) == {TIME, PRESSURE, TEMPERATURE, ACROSS, REFERENCE}
    none = UseConditions("unknown", 0.0, 0.0, False, 0.0, 0.0)
    assert worst_in_use(worst.subject, none).unknown == (REFERENCE,)
    assert source(worst, RESOLUTION).status == CONTAINED


def test_a_coarse_readout_adds_what_the_scatter_of_readings_does_not_hold():
    coarse = replace(RATED, signal_reference=SignalReference(resolution=2.0, unit="pF"))
    budget = analyse_budget(coarse, calibrated(simulated(1)), None)
    found = budget.of_sensors()[0]
    held = source(found, NOISE).contribution ** 2 + source(found, RESOLUTION).contribution ** 2
    slope = next(s.slope for s in calibrated(simulated(1)).line_sources)
    assert held == pytest.approx((2.0 / slope) ** 2 / 12)


# --- what else was measured


@pytest.fixture(scope="module")
def whole():
    """Staircases, holds, pressure, heat and strain across, with all conditions of use stated."""
    use = {"time_since_zero": "4 h", "pressure": "15 kPa", "temperature_range": "6 K"}
    stated = replace(
        RATED,
        use=use | {"transverse_strain": "0.05"},
        length_reference=LengthReference(scale_relative=5e-4),
        limits={"strain_error": (0.5, "mm/mm")},
    )
    table = simulated(11, modules=3, sensors=3)
    table = table.assign(generation="first", sensor=table["sensor"].map({"S1": "AB", "S2": "BC", "S3": "CD"}))
    calibration = calibrated(table, stated)
    variance = analyse_variance(calibration, stated)
    rng = np.random.default_rng(1)
    held = dict(
        hold(replace(identity(module, "AB"), generation="first"), rng, per_decade=-0.3, strain=0.4)
        for module in ("M01", "M02", "M03")
    )
    drift = analyse_drift(held, calibration, stated)
    pressure = analyse_pressure(sweeps.campaign(rng, modules=3, sensors=2), calibration, stated)
    return stated, calibration, variance, drift, pressure


def test_own_coefficients_where_there_are_any_else_those_of_the_generation(whole):
    stated, calibration, variance, drift, pressure = whole
    budget = analyse_budget(stated, calibration, variance, None, drift, pressure)
    by_name = {(b.subject.module, b.subject.sensor): b for b in budget.worst}
    assert source(by_name["M01", "AB"], TIME).why == OWN
    assert source(by_name["M01", "BC"], TIME).why == SHARED
    assert source(by_name["M01", "AB"], PRESSURE).why == OWN
    assert source(by_name["M01", "CD"], PRESSURE).why == SHARED
    assert source(by_name["", ""], PRESSURE).why == SHARED
    # (0.05 + 0.1 · 0.4) pF/kPa · 15 kPa / √3 of 80 pF
    full = next(p for p in by_name["M01", "AB"].subject.places if p.name == "full")
    at_full = budget_in_use(by_name["M01", "AB"].subject, full, budget.conditions)
    expected = 0.09 * 15 / math.sqrt(3) / SLOPE
    assert source(at_full, PRESSURE).contribution == pytest.approx(expected, rel=0.15)
    decades = math.log10(4 * 3600 / full.course.start_s)
    slope = next(s.slope for s in calibration.line_sources if s.key == ("first", "M01", "AB"))
    assert source(at_full, TIME).contribution == pytest.approx(0.3 * decades / 3**0.5 / slope, rel=0.05)
    assert source(at_full, ACROSS).status == NOT_KNOWN


def test_strain_across_enters_by_its_coefficient(whole):
    stated, calibration, variance, drift, pressure = whole
    rng = np.random.default_rng(2)
    t = np.arange(0.0, 100.0)
    across = 0.1 * (1.0 - np.abs(t / 50.0 - 1.0))
    trials = [
        Trial(
            sweeps.identity("offaxis", module=module, repetition=run),
            100.0 + (-12.0 + 0.5 * rng.normal()) * across + 0.01 * rng.normal(size=100),
            "pF",
            time_s=t,
            strain=across,
            reference="strain",
        )
        for module in ("M01", "M02", "M03")
        for run in (1, 2)
    ]
    features = sweeps.features(trials, sweeps.features_of_offaxis)
    influences = analyse_influences(features, calibration, stated)
    budget = analyse_budget(stated, calibration, variance, None, drift, pressure, influences)
    found = source(budget.of_sensors()[0], ACROSS)
    assert found.status == COUNTED
    # −12 pF per unit strain across, up to 5 % of it, over √3 and the slope
    assert found.contribution == pytest.approx(12.0 * 0.05 / 3**0.5 / SLOPE, rel=0.15)
    assert source(budget.of_sensors()[1], ACROSS).why == SHARED


def test_the_limit_is_judged_by_the_budget_and_not_met_while_a_source_is_missing(whole):
    stated, calibration, variance, drift, pressure = whole
    budget = analyse_budget(stated, calibration, variance, None, drift, pressure)
    limits = judge_limits(stated, calibration, [budget.figures], budget.missing)
    assert set(limits.table["verdict"]) == {"not decided"}
    assert set(limits.table["reason"]) == {CONDITIONS}
    assert set(limits.conditions_not_measured) == {TEMPERATURE, ACROSS}
    own = limits.of_sensors().set_index(["module", "sensor"])["estimate"]
    for found in budget.of_sensors():
        assert own[found.subject.module, found.subject.sensor] == found.combined.expanded_uncertainty
    none = replace(stated, use=stated.use | {"temperature_range": "0 K", "transverse_strain": "0"})
    closed = analyse_budget(none, calibration, variance, None, drift, pressure)
    assert set(closed.missing.values()) == {()}
    decided = judge_limits(none, calibration, [closed.figures], closed.missing)
    assert set(decided.table["verdict"]) == {"met"}
    fact = budget_findings(closed, decided)[0].facts[0]
    assert (fact.limit, fact.exceeding) == (0.5, 0)


def test_monte_carlo_stands_beside_where_a_two_point_source_dominates():
    quiet = Components(repetition=LineSpread(0.02, 0.02), residual=0.02)
    table = simulated(12, truth(quiet, loop=2.0), modules=2, sensors=2)
    budget = analyse_budget(RATED, calibrated(table), None)
    totals = budget.totals[budget.totals["worst"]]
    assert (totals["non_normal_share"] > 0.75).all()
    assert totals["monte_carlo_high"].notna().all()
    # a two-point source has all of itself within its half-width: U by a t factor is too wide
    assert (totals["monte_carlo_high"] < 0.9 * totals["expanded_strain"]).all()
    found = budget.of_sensors()[0]
    assert non_normal_share(found) == pytest.approx(float(totals["non_normal_share"].iloc[0]))
    # t variables spread more than their scale says
    ratio = monte_carlo(found, 3).standard_uncertainty / found.combined.standard_uncertainty
    assert 1.0 <= ratio < 1.08


# --- designs that lack something


def test_a_campaign_in_millimetres_has_its_budget_in_millimetres():
    table = simulated(1)
    table = table.assign(x=table["elongation_mm"])
    budget = analyse_budget(RATED, calibrated(table, quantity=ELONGATION), None)
    strain = analyse_budget(RATED, calibrated(simulated(1)), None)
    ratio = budget.figures["estimate"].to_numpy(float) / strain.figures["estimate"].to_numpy(float)
    assert ratio == pytest.approx(np.full(16, 80.0), rel=1e-6)
    assert set(budget.figures["unit"]) == {"mm"}


def test_one_sensor_has_a_budget_of_its_own_and_no_new_one_is_promised():
    table = simulated(1, modules=1, sensors=1)
    calibration = calibrated(table)
    variance = analyse_variance(calibration, RATED)
    budget = analyse_budget(RATED, calibration, variance)
    own = budget.of_sensors()
    assert len(own) == 1
    assert math.isfinite(own[0].combined.expanded_uncertainty)
    new = budget.of_new_sensors()
    assert all(SENSORS in found.unknown for found in new)
    fact = budget_findings(budget, NOTHING_JUDGED)[0].facts[0]
    assert fact.sensors == 1
    assert fact.own_low == fact.own_high


def test_one_module_leaves_the_spread_of_modules_unknown():
    table = simulated(1, modules=1, sensors=6)
    calibration = calibrated(table)
    budget = analyse_budget(RATED, calibration, analyse_variance(calibration, RATED))
    new = budget.of_new_sensors()[0]
    assert SENSORS in new.unknown
    assert source(new, SENSORS).contribution > 0  # that of sensors counts all the same
    assert "one module" in source(new, SENSORS).why


def test_one_run_leaves_line_and_run_unknown_and_decides_no_limit():
    table = simulated(1, sessions=0, repetitions=1)
    calibration = calibrated(table)
    budget = analyse_budget(RATED, calibration, None)
    found = budget.of_sensors()[0]
    assert {LINE, MOUNTING, RUN} <= set(found.unknown)
    assert budget.figures["estimate"].isna().all()


def test_one_mounting_leaves_remounting_unknown():
    budget = analyse_budget(RATED, calibrated(simulated(1, sessions=0)), None)
    found = budget.of_sensors()[0]
    assert source(found, MOUNTING).status == NOT_KNOWN
    assert source(found, RUN).status == COUNTED


def test_one_branch_leaves_hysteresis_unknown_where_the_direction_is():
    budget = analyse_budget(RATED, calibrated(simulated(1, descending=False)), None)
    subject = budget.of_sensors()[0].subject
    assert source(worst_in_use(subject, UseConditions()), LOOP).status == NOT_KNOWN
    assert source(worst_in_use(subject, UseConditions("rising")), LOOP).status == CONTAINED
    assert source(worst_in_use(subject, UseConditions("falling")), LOOP).status == NOT_KNOWN


def test_a_sensor_that_does_not_answer_to_strain_has_no_budget():
    table = simulated(1)
    dead = (table["module"] == "M01") & (table["sensor"] == "S1")
    budget = analyse_budget(RATED, calibrated(table.assign(signal=table["signal"].where(~dead, 50.0))), None)
    assert ("M01", "S1") not in {(s.module, s.sensor) for s in budget.subjects}
    assert len(budget.subjects) == 15


def test_without_staircases_there_is_no_budget():
    assert analyse_budget(RATED, None, None) is None
    assert budget_findings(None, NOTHING_JUDGED) == ()


def test_the_finding_names_the_largest_source_and_what_is_missing(campaign):
    _, _, budget = campaign
    fact = budget_findings(budget, NOTHING_JUDGED)[0].facts[0]
    assert fact.largest == SENSORS
    assert fact.has_new
    assert fact.new > fact.own_high
    assert set(fact.missing) == {TIME, PRESSURE, TEMPERATURE, ACROSS, REFERENCE}
    assert 0.0 < fact.own_share < 1.0
    assert source(budget.of_new_sensors()[0], LACK).contribution > 0
