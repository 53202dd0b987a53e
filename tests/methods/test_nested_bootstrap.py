"""Batched refits against single fits, and tests of components, shared runs among them."""

from dataclasses import replace

import numpy as np
import pytest

from campaign.methods.analysis_of_variance import nested_analysis_of_variance
from campaign.methods.nested_bootstrap import test_component as component_test
from campaign.methods.nested_model import (
    NestedModel,
    RandomTerm,
    bootstrap_refits,
    fit_nested_model,
    refit,
    simulate_responses,
)


@pytest.mark.parametrize("missing", [0.0, 0.15])
def test_refits_are_the_fits_one_by_one(nested, missing):
    model = nested.lines(nested.invented(seed=21, modules=4, sensors=2, missing=missing))
    fit = fit_nested_model(model)
    responses = simulate_responses(fit, 12, seed=5)
    refits = refit(fit, responses)
    assert refits.converged.all()
    for k, response in enumerate(responses.T):
        single = fit_nested_model(replace(model, response=response))
        assert refits.criterion[k] == pytest.approx(single.criterion, abs=1e-5)
        assert refits.coefficients[k] == pytest.approx(single.coefficients, abs=1e-4)
        assert refits.residual_variance[k] == pytest.approx(single.residual_variance, rel=1e-3)


def test_refits_repeat_with_their_seed_and_spread_about_the_estimate(nested):
    fit = fit_nested_model(nested.lines(nested.invented(seed=22, modules=8, sensors=3)))
    first, again = (bootstrap_refits(fit, 200, seed=3) for _ in range(2))
    assert (first.criterion == again.criterion).all()
    assert first.residual_variance.mean() == pytest.approx(fit.residual_variance, rel=0.03)
    assert first.covariances["sensor"].mean(axis=0) == pytest.approx(
        fit.covariances["sensor"], rel=0.35, abs=0.01
    )


def test_balanced_means_have_the_exact_f(nested):
    fit = fit_nested_model(nested.published("pastes"))
    table = nested.table("pastes")
    levels = [(n, nested.codes(table[n])) for n in ("batch", "sample")]
    exact = nested_analysis_of_variance(fit.model.response, levels).test("batch")
    found = component_test(fit, "batch", 99, seed=1)
    assert found.kind == "exact F"
    assert (found.statistic, found.p) == (exact.statistic, exact.p)
    # Davies & Goldsmith: batches on 9, casks within batches on 20 degrees of freedom
    assert found.degrees_of_freedom == (9.0, 20.0)


def test_lines_have_a_bootstrap_that_finds_what_is_there(nested):
    fit = fit_nested_model(nested.lines(nested.invented(seed=23, modules=4, sensors=3, missing=0.1)))
    found = component_test(fit, "sensor", 99, seed=1)
    assert found.kind == "parametric bootstrap"
    assert found.p == pytest.approx(0.01)
    none = {"module": (0.0, 0.0), "sensor": (0.2, 0.3), "run": (0.1, 0.2)}
    nothing = fit_nested_model(nested.lines(nested.invented(seed=24, modules=4, sensors=3, sds=none)))
    assert component_test(nothing, "module", 99, seed=1).p > 0.05


def shared_runs(modules=5, sensors=3, runs=4, readings=2):
    """A campaign whose modules' sensors share runs, with means only; also with runs nested in sensors."""
    module, sensor, run, _ = np.indices((modules, sensors, runs, readings)).reshape(4, -1)
    one = np.ones((len(module), 1))
    sensor = module * sensors + sensor
    levels = (("module", module), ("sensor", sensor), ("sensor run", sensor * runs + run))
    right = (
        RandomTerm("module", "module", one),
        RandomTerm("run", "module", one, run),
        RandomTerm("sensor", "sensor", one),
        RandomTerm("sensor run", "sensor run", one),
    )
    model = NestedModel(np.zeros(len(module)), one, ("mean",), levels, right)
    return model, replace(model, terms=(right[0], right[2], right[3]))


def effect_units(model):
    """Term → number of the effect of each row."""
    module = model.levels[0][1]
    run = model.terms[1].copies
    return {
        "module": module,
        "run": module * (run.max() + 1) + run,
        "sensor": model.levels[1][1],
        "sensor run": model.levels[2][1],
    }


def draw(model, sds, residual_sds, random):
    """Responses (N, R); sds: term → (R,) SDs."""
    response = residual_sds * random.standard_normal((len(model.response), len(residual_sds)))
    for name, unit in effect_units(model).items():
        if name in sds:
            response += (sds[name] * random.standard_normal((unit.max() + 1, len(residual_sds))))[unit]
    return response


def ratio_of_likelihoods(with_modules, responses):
    """Likelihood ratio of the modules for every column of `responses`, and the fits without them."""
    full = fit_nested_model(replace(with_modules, response=responses[:, 0]))
    small = replace(full.model, terms=tuple(t for t in full.model.terms if t.name != "module"))
    without = refit(fit_nested_model(small), responses)
    return without.criterion - refit(full, responses).criterion, without


def test_module_test_keeps_its_level_when_sensors_share_runs():
    right, wrong = shared_runs()
    random = np.random.default_rng(31)
    campaigns, replicates = 200, 19
    # no variance of modules; shared runs of SD 1, sensors 0.5, sensor runs and noise 0.2
    every = np.ones(campaigns)
    truth = {"run": every, "sensor": 0.5 * every, "sensor run": 0.2 * every}
    responses = draw(right, truth, 0.2 * every, random)
    observed, without = ratio_of_likelihoods(right, responses)
    # the parametric bootstrap of every campaign, drawn at once from each one's own fit without modules
    sds = {name: np.repeat(np.sqrt(c[:, 0, 0]), replicates) for name, c in without.covariances.items()}
    again = draw(right, sds, np.repeat(np.sqrt(without.residual_variance), replicates), random)
    drawn = ratio_of_likelihoods(right, again)[0].reshape(campaigns, replicates)
    exceeding = (drawn >= observed[:, None] - 1e-7).sum(axis=1)
    rejected = ((1 + exceeding) / (1 + replicates) <= 0.05).sum()
    # 5 % of 200 is 10; more than 20 has probability 1e-3
    assert 1 <= rejected <= 20
    # the same data with the run nested under each sensor book the shared run to the modules
    nested_runs, _ = ratio_of_likelihoods(wrong, responses)
    assert (nested_runs > 2.71).mean() > 0.3  # 5 % by the 50:50 mixture, were that model right


def test_shared_runs_and_sensors_are_told_apart():
    right, _ = shared_runs(modules=30, sensors=4, runs=5)
    random = np.random.default_rng(32)
    truth = {"module": 0.3, "run": 1.0, "sensor": 0.5, "sensor run": 0.4}
    sds = {name: np.array([sd]) for name, sd in truth.items()}
    fit = fit_nested_model(replace(right, response=draw(right, sds, np.array([0.2]), random)[:, 0]))
    assert fit.converged
    for name, sd in truth.items():
        found = float(np.sqrt(fit.covariances[name][0, 0]))
        assert found == pytest.approx(sd, rel=0.2, abs=0.25 if name == "module" else 0.0)
