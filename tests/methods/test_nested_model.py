"""The nested mixed model against published answers, exact ones, statsmodels, and its own definition."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from campaign.methods.nested_compression import compress
from campaign.methods.nested_model import (
    NestedModel,
    RandomTerm,
    as_statsmodels,
    conditional_residuals,
    fit_nested_model,
    marginal_residuals,
    profile_interval,
    random_effects,
    refit,
    satterthwaite,
    simulate_responses,
    statsmodels_log_likelihood,
)
from campaign.methods.nested_parameters import evaluate, layout_of

# tests/reference/mixed/*.json: lme4 1.1-31, R 4.2.2, best of three tight optimisers
PUBLISHED = [
    "dyestuff",
    "dyestuff2",
    "pastes",
    "pastes_sample_only",
    "rail",
    "oats",
    "oats_variety",
    "sleepstudy",
    "sleepstudy_uncorrelated",
]


def sds_of(fit):
    """Group → SDs of its effects, and 'Residual'."""
    found = {name: list(np.sqrt(np.diag(c))) for name, c in fit.covariances.items()}
    return found | {"Residual": [np.sqrt(fit.residual_variance)]}


@pytest.mark.parametrize("method", ["REML", "ML"])
@pytest.mark.parametrize("name", PUBLISHED)
def test_published_sets_agree_with_the_best_of_lme4(nested, name, method):
    expected = nested.answers(name)[method]
    fit = fit_nested_model(nested.published(name), restricted=method == "REML")
    # lme4's own tolerance is the limit: 1e-6 on the criterion, 1e-4 on SDs
    assert fit.criterion == pytest.approx(expected["criterion_minus2loglik"], abs=1e-6)
    assert fit.criterion <= expected["criterion_minus2loglik"] + 1e-8
    found = sds_of(fit)
    for row in expected["varcorr"]:
        if "var2" not in row:
            sd = found[row["grp"]].pop(0)
            assert sd == pytest.approx(row["sdcor"], rel=1e-4, abs=1e-12)
    assert fit.coefficients == pytest.approx(list(expected["fixef"].values()), rel=1e-7)
    errors = np.sqrt(np.diag(fit.coefficient_covariance))
    assert errors == pytest.approx(list(expected["se_fixef"].values()), rel=1e-4)
    assert fit.singular == expected["singular"]
    assert fit.converged
    assert fit.method == method


def test_correlation_of_sleepstudy(nested):
    row = next(r for r in nested.answers("sleepstudy")["REML"]["varcorr"] if "var2" in r)
    covariance = fit_nested_model(nested.published("sleepstudy")).covariances["Subject"]
    assert covariance[0, 1] / np.sqrt(covariance[0, 0] * covariance[1, 1]) == pytest.approx(
        row["sdcor"], rel=1e-4
    )


@pytest.mark.parametrize(
    ("name", "terms"),
    [
        ("dyestuff", {"Batch": "var_group"}),
        ("rail", {"Rail": "var_group"}),
        ("pastes", {"batch": "var_batch", "sample": "var_cask_in_batch"}),
        ("oats", {"Block": "var_block", "BV": "var_variety_in_block"}),
        ("dyestuff2", {"Batch": "var_group"}),
    ],
)
def test_balanced_sets_agree_with_exact_fractions(nested, name, terms):
    # exact_balanced_reml.json: worked out with fractions from the data
    exact = nested.answers("exact_balanced_reml")[name]
    fit = fit_nested_model(nested.published(name))
    for term, key in terms.items():
        assert fit.covariances[term][0, 0] == pytest.approx(exact[key]["value"], rel=1e-9, abs=0.0)
    assert fit.residual_variance == pytest.approx(exact["var_residual"]["value"], rel=1e-9)
    keys = [key for key in ("mean", "intercept", "nitro") if key in exact]
    assert fit.coefficients == pytest.approx([exact[key]["value"] for key in keys], rel=1e-9)


def test_dyestuff2_is_exactly_zero_and_says_so(nested):
    fit = fit_nested_model(nested.published("dyestuff2"))
    assert fit.covariances["Batch"][0, 0] == 0.0
    assert fit.singular
    assert fit.converged
    assert fit.certificate["Batch"] > 0.0


@pytest.mark.parametrize("basis", ["x", "u"])
@pytest.mark.parametrize("form", ["int", "dbl", "full"])
@pytest.mark.parametrize("name", ["sim_medium", "sim_medium_unb"])
def test_simulated_campaigns_agree_with_lme4(nested, name, form, basis):
    if form == "dbl" and basis == "x":
        basis = "u"  # an uncorrelated line is another model where zero lies elsewhere
    expected = nested.answers(name)["models"][form]["lme4"]
    fit = fit_nested_model(nested.campaign(name, form, basis))
    assert fit.criterion == pytest.approx(expected[f"REML_{basis}_basis"], abs=1e-6)
    assert fit.converged
    if basis == "u":
        parts = expected["varcomp_u_basis"]
        assert fit.residual_variance == pytest.approx(parts["residual_var"], rel=2e-4)
        for level in ("module", "sensor", "rep"):
            intercept = fit.covariances[level][0, 0]
            assert intercept == pytest.approx(parts[f"{level}_int_var"], rel=2e-4)
            if form == "full":
                assert fit.covariances[level][1, 1] == pytest.approx(parts[f"{level}_slope_var"], rel=2e-4)
                assert fit.covariances[level][0, 1] == pytest.approx(parts[f"{level}_cov"], rel=2e-4)
        assert fit.coefficients == pytest.approx(list(expected["fixef_u_basis"].values()), rel=1e-6)


@pytest.mark.parametrize("name", PUBLISHED)
def test_statsmodels_has_the_same_likelihood_at_the_estimate(nested, name):
    for restricted in (True, False):
        fit = fit_nested_model(nested.published(name), restricted=restricted)
        assert statsmodels_log_likelihood(fit) == pytest.approx(fit.log_likelihood, abs=1e-8)


@pytest.mark.parametrize("name", ["sim_medium", "sim_medium_unb"])
def test_statsmodels_has_the_same_likelihood_of_correlated_lines(nested, name):
    fit = fit_nested_model(nested.campaign(name, "full", "x"))
    assert statsmodels_log_likelihood(fit) == pytest.approx(fit.log_likelihood, abs=1e-8)


def test_statsmodels_results_at_the_estimate(nested):
    fit = fit_nested_model(nested.published("pastes"))
    results = as_statsmodels(fit)
    sigma = np.sqrt(fit.residual_variance)
    assert results.fe_params * sigma == pytest.approx(fit.coefficients, rel=1e-9)
    assert results.bse_fe * sigma == pytest.approx(np.sqrt(np.diag(fit.coefficient_covariance)), rel=1e-6)
    assert results.scale == pytest.approx(1.0)
    with pytest.raises(ValueError, match="OLS"):
        as_statsmodels(fit_nested_model(nested.published("dyestuff2")))


# expected.json, nested.sas_nested: rows (from 1) removed from the EP05 set
REMOVED = [11, 12, 17, 37, 45, 56, 57, 68]


def test_ep05_with_rows_removed(nested):
    table = nested.table("dataep05a2_1", "nested").drop(index=[row - 1 for row in REMOVED])
    fit = fit_nested_model(nested.intercepts(table, "y", ["day", "run"]))
    # REML by statsmodels and lme4, recorded beside the issue: 0.2836, 0.9059, 2.0677 (day, run, error)
    found = [fit.covariances["day"][0, 0], fit.covariances["run"][0, 0], fit.residual_variance]
    assert found == pytest.approx([0.2836, 0.9059, 2.0677], abs=5e-5)
    assert statsmodels_log_likelihood(fit) == pytest.approx(fit.log_likelihood, abs=1e-8)


def test_ep05_balanced_equals_sas(nested):
    fit = fit_nested_model(nested.intercepts(nested.table("dataep05a2_1", "nested"), "y", ["day", "run"]))
    # SAS 9.2 PROC NESTED, as kept in the tests of R package VCA: day, run, error
    found = [fit.covariances["day"][0, 0], fit.covariances["run"][0, 0], fit.residual_variance]
    assert found == pytest.approx([0.001096, 1.344492, 1.953397], abs=1e-6)


def test_oxide_generation_contrast_has_six_degrees_of_freedom(nested):
    table = nested.table("oxide", "nested")
    fixed = {"mean": 1.0, "second source": table["Source"] == 2}
    fit = fit_nested_model(nested.intercepts(table, "Thickness", ["Lot", "Wafer"], fixed))
    # expected.json, nested.oxide_generation_contrast: lmerTest, Satterthwaite = Kenward–Roger (balanced)
    assert fit.criterion == pytest.approx(446.477865847313, abs=1e-6)
    variance, freedom = satterthwaite(fit, np.array([0.0, 1.0]))
    assert fit.coefficients[1] == pytest.approx(10.0833333, abs=1e-6)
    assert np.sqrt(variance) == pytest.approx(8.162242438, rel=1e-6)  # lme4's tolerance
    assert variance == pytest.approx(1199.199074 * 2 / 36, rel=1e-8)  # mean square of lots, two means of 36
    assert freedom == pytest.approx(6.0, rel=1e-5)


def test_satterthwaite_of_a_new_unit_is_exact_where_it_is_one_mean_square(nested):
    # A new batch's value about the mean of six: σ²_batch (1 + 1/6) + σ²/30 is, balanced, MS_batch·(1 + 1/6)/5
    # less MS_error/5: two mean squares, with Satterthwaite's formula worked out by hand
    table = nested.table("dyestuff")
    fit = fit_nested_model(nested.published("dyestuff"))
    variance, freedom = satterthwaite(fit, np.array([1.0]), {"Batch": np.array([1.0])})
    means = table.groupby("Batch")["Yield"].mean()
    between = 5.0 * means.var()
    within = table.groupby("Batch")["Yield"].var().mean()
    parts = np.array([between * (1 + 1 / 6) / 5, -within / 5])
    assert variance == pytest.approx(parts.sum(), rel=1e-8)
    assert freedom == pytest.approx(parts.sum() ** 2 / (parts**2 / [5, 24]).sum(), rel=1e-4)


def test_nist_gauge_study(nested):
    table = nested.table("gauge_study_mpc61", "nested").query("probe == 2362")
    # NIST/SEMATECH e-Handbook 2.6.1: s1 0.0729 (300 df), s2 0.0362 (50 df), s3 0.0196 (5 df)
    assert np.sqrt((table["stddev"] ** 2).mean()) == pytest.approx(0.0729, abs=5e-5)
    fixed = {f"wafer {w}": table["wafer"] == w for w in sorted(table["wafer"].unique())}
    table = table.assign(run=table["wafer"] * 10 + table["run"])
    fit = fit_nested_model(nested.intercepts(table, "average", ["run"], fixed))
    days = np.sqrt(fit.residual_variance)
    runs = np.sqrt(fit.covariances["run"][0, 0])
    assert days == pytest.approx(0.0362, abs=5e-5)
    assert np.sqrt(fit.residual_variance / 6 + runs**2) == pytest.approx(0.0196, abs=5e-5)
    assert runs == pytest.approx(0.01295841, rel=1e-4)  # sruns of the handbook's R scripts


def test_turnip(nested):
    fit = fit_nested_model(nested.intercepts(nested.table("turnip", "nested"), "calcium", ["plant", "leaf"]))
    # SAS sample NESTEX1: 0.365223, 0.161060, 0.006654
    assert fit.covariances["plant"][0, 0] == pytest.approx(0.365223, abs=1e-6)
    assert fit.covariances["leaf"][0, 0] == pytest.approx(0.161060, abs=1e-6)
    assert fit.residual_variance == pytest.approx(0.006654, abs=1e-6)


@pytest.mark.parametrize("shift", [(0.0, 1.0), (1000.0, 1.0), (-3.0, 25.0), (60.0, 1e-3)])
def test_fit_does_not_depend_on_where_x_begins_or_its_unit(nested, shift):
    table = nested.invented(seed=3, missing=0.1)
    plain = fit_nested_model(nested.lines(table))
    moved = fit_nested_model(nested.lines(table.assign(x=shift[0] + shift[1] * table["x"])))
    # x' = a + b x: the restricted likelihood changes by the determinant of the fixed columns' basis alone
    assert moved.criterion == pytest.approx(plain.criterion + 2 * np.log(shift[1]), abs=1e-7)
    assert moved.residual_variance == pytest.approx(plain.residual_variance, rel=1e-7)
    at = np.array([1.0, shift[0] + shift[1] * 0.4])
    for name, covariance in plain.covariances.items():
        here = np.array([1.0, 0.4])
        assert at @ moved.covariances[name] @ at == pytest.approx(here @ covariance @ here, rel=1e-5)


@pytest.mark.parametrize("factor", [1e-12, 1e6])
def test_fit_scales_with_y(nested, factor):
    table = nested.invented(seed=4, missing=0.1)
    plain = fit_nested_model(nested.lines(table))
    scaled = fit_nested_model(nested.lines(table.assign(y=factor * (5.0 + table["y"]))))
    assert scaled.converged
    assert scaled.residual_variance == pytest.approx(factor**2 * plain.residual_variance, rel=1e-7)
    for name, covariance in plain.covariances.items():
        assert scaled.covariances[name] == pytest.approx(factor**2 * covariance, rel=1e-5)


def test_all_starts_lead_to_the_same_minimum(nested):
    model = nested.lines(nested.invented(seed=5, missing=0.2))
    best = fit_nested_model(model)
    for size in (1e-4, 1.0, 1e3):
        start = {name: size * np.eye(2) * best.residual_variance for name in best.covariances}
        again = fit_nested_model(model, start=start)
        assert again.converged
        assert again.criterion == pytest.approx(best.criterion, abs=1e-7)


def test_a_fit_that_is_stopped_at_zero_is_sent_on(nested):
    model = nested.published("pastes")
    fit = fit_nested_model(model, start={"batch": np.zeros((1, 1)), "sample": np.zeros((1, 1))})
    assert fit.restarts >= 1  # θ = 0 is stationary: only the certificate sees that it is no minimum
    assert fit.criterion == pytest.approx(
        nested.answers("pastes")["REML"]["criterion_minus2loglik"], abs=1e-6
    )


def test_rows_may_come_in_any_order_and_codes_repeat_in_outer_units(nested):
    table = nested.invented(seed=6, missing=0.15)
    plain = fit_nested_model(nested.lines(table))
    model = nested.lines(table)
    short = replace(
        model,
        levels=(
            ("module", model.levels[0][1] + 100),
            ("sensor", (table["sensor"] % 4).to_numpy()),
            ("run", (table["run"] % 3).to_numpy()),
        ),
    )
    order = np.random.default_rng(1).permutation(len(table))
    shuffled = NestedModel(
        short.response[order],
        short.fixed[order],
        short.fixed_names,
        tuple((name, codes[order]) for name, codes in short.levels),
        tuple(replace(term, columns=term.columns[order]) for term in short.terms),
    )
    fit = fit_nested_model(shuffled)
    assert fit.criterion == pytest.approx(plain.criterion, abs=1e-8)
    assert conditional_residuals(fit) == pytest.approx(conditional_residuals(plain)[order], abs=1e-7)


def test_without_random_effects_it_is_least_squares(nested):
    table = nested.invented(seed=7)
    model = replace(nested.lines(table), terms=())
    fit = fit_nested_model(model)
    coefficients, rest, *_ = np.linalg.lstsq(model.fixed, model.response, rcond=None)
    assert fit.coefficients == pytest.approx(coefficients, rel=1e-9)
    assert fit.residual_variance == pytest.approx(rest[0] / (len(table) - 2), rel=1e-9)
    assert satterthwaite(fit, np.array([1.0, 0.0]))[1] == len(table) - 2
    assert statsmodels_log_likelihood(fit) == pytest.approx(fit.log_likelihood, abs=1e-8)


@st.composite
def designs(draw):
    """Random small designs: missing rows, lines or means, copies, several kinds of fixed part."""
    random = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    modules, sensors, runs, readings = (draw(st.integers(2, top)) for top in (4, 3, 3, 5))
    index = np.indices((modules, sensors, runs, readings)).reshape(4, -1)
    index = index[:, random.random(index.shape[1]) >= draw(st.sampled_from([0.0, 0.15]))]
    module, sensor = index[0], index[0] * sensors + index[1]
    run, level = sensor * runs + index[2], index[3]
    x = level + draw(st.sampled_from([0.0, 0.05])) * random.standard_normal(len(level))
    one = np.ones(len(x))
    line = np.column_stack([one, x])
    kind = draw(st.sampled_from(["line", "groups", "levels", "positions", "covariate"]))
    if kind == "levels":
        fixed = np.column_stack([level == k for k in np.unique(level)]).astype(float)
    else:
        fixed = line
    if kind == "groups":
        fixed = np.column_stack([line, (module % 2 == 1)[:, None] * line])
    if kind == "positions":
        place = np.where(index[1] == sensors - 1, -1.0, (index[1] == 0) * 1.0)
        fixed = np.column_stack([line, place[:, None] * line])
    if kind == "covariate":
        fixed = np.column_stack([line, random.standard_normal(run.max() + 1)[run]])
    size = draw(st.integers(1, 2))
    terms = [RandomTerm(n, n, line[:, :size]) for n in ("module", "sensor", "run")]
    if draw(st.booleans()):
        terms.append(RandomTerm("shared run", "module", line[:, :size], index[2]))
    if draw(st.booleans()):
        terms.append(RandomTerm("by level", "sensor", one[:, None], level))
    y = random.standard_normal(len(x)) + random.standard_normal(sensor.max() + 1)[sensor]
    kept = np.linalg.matrix_rank(fixed) == fixed.shape[1] < len(y) - 2
    if not kept:
        fixed = one[:, None]
    names = tuple(str(k) for k in range(fixed.shape[1]))
    levels = (("module", module), ("sensor", sensor), ("run", run))
    return NestedModel(y, fixed, names, levels, tuple(terms)), random


def check_against_definition(model, vector, dense):
    """Criterion against N × N matrices, gradient against differences, REML and ML."""
    compression = compress(model)
    layout = layout_of(compression)
    for restricted in (True, False):
        value, gradient, _ = evaluate(compression, layout, vector[:, None], restricted=restricted)
        variance = value.residual_square[0] / (len(model.response) - restricted * model.fixed.shape[1])
        factors = layout.factors(vector[:, None])
        covariances = {}
        for term, basis, theta in zip(model.terms, compression.columns.term_bases, factors, strict=True):
            user = np.linalg.solve(basis, theta[:, :, 0])
            covariances[term.name] = variance * user @ user.T
        constant = restricted * 2 * np.linalg.slogdet(compression.columns.fixed_basis)[1]
        expected = dense(model).criterion(covariances, variance, restricted)
        assert value.criterion[0] + constant == pytest.approx(expected, rel=1e-8, abs=1e-7)
        width = 1e-5
        moves = width * np.eye(len(vector))
        ends = np.column_stack([vector[:, None] + moves, vector[:, None] - moves])
        values = evaluate(compression, layout, ends, restricted=restricted)[0].criterion
        slope = (values[: len(vector)] - values[len(vector) :]) / (2 * width)
        assert gradient[:, 0] == pytest.approx(slope, rel=1e-5, abs=1e-5 * (1 + np.abs(slope).max()))


@settings(max_examples=40, deadline=None, derandomize=True)
@given(designs())
def test_criterion_and_gradient_of_any_design(dense, case):
    model, random = case
    vector = random.uniform(-0.6, 1.2, len(layout_of(compress(model)).places))
    check_against_definition(model, vector, dense)


@pytest.mark.parametrize("shared", [False, True])
@pytest.mark.parametrize("missing", [0.0, 0.15])
def test_criterion_and_gradient_with_level_means(nested, dense, missing, shared):
    table = nested.invented(seed=15, modules=3, sensors=2, runs=3, readings=9, missing=missing)
    level = (table["x"] * 8).round().astype(int)
    fixed = {f"level {k}": level == k for k in range(9)}
    lines = [(n, n, [1.0, table["x"]]) for n in ("module", "sensor", "run")]
    model = nested.model(table, "y", fixed, ["module", "sensor", "run"], lines)
    by_level = RandomTerm("by level", "sensor", np.ones((len(table), 1)), level.to_numpy())
    runs = RandomTerm("shared run", "module", model.terms[0].columns, (table["run"] % 3).to_numpy())
    model = replace(model, terms=(*model.terms, by_level, *((runs,) if shared else ())))
    compression = compress(model)
    assert compression.many_slots is not None  # eliminated units first, without kinds of units
    vector = np.random.default_rng(1).uniform(-0.6, 1.2, len(layout_of(compression).places))
    check_against_definition(model, vector, dense)


@pytest.mark.parametrize("shared", [False, True])
@pytest.mark.parametrize("missing", [0.0, 0.2])
def test_criterion_and_gradient_where_sensors_are_at_positions(nested, dense, missing, shared):
    # a line a position, coded to sum to zero: at its module a sensor's line is that of one position or, at
    # the last one, of all others turned round; and the noise of the stand differs from run to run
    table = nested.invented(seed=16, modules=3, sensors=4, runs=2, readings=8, missing=missing)
    place, level = table["sensor"] % 4, (table["x"] * 7).round().astype(int)
    fixed = {f"level {k}": level == k for k in range(8)}
    for k in range(3):
        fixed[f"place {k}"] = 1.0 * (place == k) - (place == 3)
        fixed[f"place {k}, x"] = fixed[f"place {k}"] * table["x"]
    fixed["warmth"] = np.random.default_rng(2).standard_normal(table["run"].max() + 1)[table["run"]]
    lines = [(n, n, [1.0, table["x"]]) for n in ("module", "sensor", "run")]
    model = nested.model(table, "y", fixed, ["module", "sensor", "run"], lines)
    by_level = RandomTerm("by level", "sensor", np.ones((len(table), 1)), level.to_numpy())
    runs = RandomTerm("shared run", "module", model.terms[0].columns, (table["run"] % 2).to_numpy())
    model = replace(model, terms=(*model.terms, by_level, *((runs,) if shared else ())))
    compression = compress(model)
    assert compression.many_slots is not None
    vector = np.random.default_rng(1).uniform(-0.6, 1.2, len(layout_of(compression).places))
    check_against_definition(model, vector, dense)
    here = np.column_stack([vector, 0.5 * vector, 0.0 * vector])
    together = evaluate(compression, layout_of(compression), here, restricted=True)[1]
    for k in range(3):
        alone = evaluate(compression, layout_of(compression), here[:, [k]], restricted=True)[1]
        assert together[:, [k]] == pytest.approx(alone, rel=1e-9, abs=1e-9)


def test_refits_of_a_model_with_many_slots_are_fits(nested):
    table = nested.invented(seed=17, modules=4, sensors=3, runs=2, readings=8)
    level = (table["x"] * 7).round().astype(int)
    fixed = {f"level {k}": level == k for k in range(8)}
    lines = [(n, n, [1.0, table["x"]]) for n in ("module", "sensor", "run")]
    model = nested.model(table, "y", fixed, ["module", "sensor", "run"], lines)
    fit = fit_nested_model(model)
    assert fit.compression.many_slots is not None
    responses = simulate_responses(fit, 3, seed=4)
    found = refit(fit, responses)
    for k in range(3):
        alone = fit_nested_model(replace(model, response=responses[:, k]))
        assert found.criterion[k] == pytest.approx(alone.criterion, abs=1e-5)
        assert found.coefficients[k] == pytest.approx(alone.coefficients, rel=1e-3, abs=1e-4)


@settings(max_examples=25, deadline=None, derandomize=True)
@given(designs())
def test_any_fit_is_a_certified_minimum_and_statsmodels_agrees(case):
    model, random = case
    model = replace(model, response=model.response + 0.5 * random.standard_normal(len(model.response)))
    fit = fit_nested_model(model)
    if fit.converged:
        assert min(fit.certificate.values()) > -1e-5
        # statsmodels solves with the covariances' inverses: its digits go with the size of the factors
        lost = 1e-8 * (1.0 + np.abs(fit.vector).max() ** 2)
        assert statsmodels_log_likelihood(fit) == pytest.approx(fit.log_likelihood, abs=1e-7 + lost)
    else:
        assert fit.method == "type 1 analysis of variance"


def test_predicted_effects_and_their_errors_are_henderson_s(nested, dense):
    table = nested.invented(seed=8, modules=3, missing=0.2)
    model = nested.lines(table)
    shared = RandomTerm("shared", "module", model.terms[0].columns, (table["run"] % 3).to_numpy())
    model = replace(model, terms=(*model.terms, shared))
    fit = fit_nested_model(model)
    plain = dense(model)
    inverse = np.linalg.inv(plain.covariance(fit.covariances, fit.residual_variance))
    x = model.fixed
    projected = inverse - inverse @ x @ np.linalg.inv(x.T @ inverse @ x) @ x.T @ inverse
    for term in model.terms:
        effects, spread = random_effects(fit)[term.name], fit.covariances[term.name]
        for k, z in enumerate(plain.designs(term)):
            row = effects.first_row[k]
            assert z[row].any()
            assert effects.estimates[k] == pytest.approx(spread @ z.T @ projected @ model.response, abs=1e-9)
            error = spread - spread @ z.T @ projected @ z @ spread
            assert effects.covariances[k] == pytest.approx(error, abs=1e-9)
    assert marginal_residuals(fit) == pytest.approx(model.response - x @ fit.coefficients)
    expected = fit.residual_variance * projected @ model.response
    assert conditional_residuals(fit) == pytest.approx(expected, abs=1e-8)


@pytest.mark.parametrize(
    "response",
    [
        lambda table: np.zeros(len(table)),
        lambda table: 3.0 + 2.0 * table["x"].to_numpy(),
        lambda table: table["sensor"].to_numpy() * (1.0 + table["x"].to_numpy()),
    ],
    ids=["all zero", "one exact line", "exact lines of sensors"],
)
def test_readings_without_noise_stop_nothing(nested, response):
    table = nested.invented(modules=4, sensors=2)
    fit = fit_nested_model(replace(nested.lines(table), response=response(table)))
    assert np.isfinite(fit.coefficients).all()
    assert all(np.isfinite(covariance).all() for covariance in fit.covariances.values())
    # without noise the likelihood of random lines has no bound: then the moments stand in, and say so
    assert fit.converged == (fit.method == "REML")


def test_two_readings_a_run_leave_the_residual_open_downwards(nested):
    fit = fit_nested_model(nested.lines(nested.invented(seed=2, readings=2)))
    assert profile_interval(fit, "residual").low == 0.0


def test_what_is_wrong_with_a_model_is_said_all_at_once(nested):
    model = nested.lines(nested.invented())
    wrong = replace(
        model,
        response=np.append(model.response[:-1], np.nan),
        fixed_names=("mean",),
        terms=(model.terms[0], RandomTerm("module", "stand", model.terms[0].columns)),
    )
    with pytest.raises(ValueError, match="finite number") as caught:
        fit_nested_model(wrong)
    for sentence in (
        "2 fixed columns have 1 names",
        "level 'stand'",
        "two random effects are called 'module'",
    ):
        assert sentence in str(caught.value)


def test_dependent_columns_are_named(nested):
    table = nested.invented()
    x = table["x"]
    twice = nested.model(
        table, "y", {"mean": 1.0, "x": x, "copy of x": 2 * x}, ["run"], [("run", "run", [1.0])]
    )
    with pytest.raises(ValueError, match="copy of x"):
        fit_nested_model(twice)
    flat = nested.model(table, "y", {"mean": 1.0}, ["run"], [("run", "run", [1.0, 3.0])])
    with pytest.raises(ValueError, match="'run' are linearly dependent"):
        fit_nested_model(flat)
