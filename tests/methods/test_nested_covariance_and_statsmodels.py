"""Uncertainty of estimated components, and the same models fitted by statsmodels' own search."""

from __future__ import annotations

import numpy as np
import pytest

from campaign.methods.nested_in_statsmodels import fit_by_statsmodels, why_not_in_statsmodels
from campaign.methods.nested_inference import component_covariance
from campaign.methods.nested_model import NestedModel, RandomTerm, fit_nested_model


def test_covariance_of_components_of_a_balanced_one_way_layout(nested):
    """Exact in the balanced case: mean squares are independent with variances 2 MS²/df.

    Searle, Casella & McCulloch, Variance Components (1992), section 3.5: the large-sample covariance of the
    REML estimators of the Dyestuff design, 6 batches of 5.
    """
    fit = fit_nested_model(nested.published("dyestuff"))
    names, estimates, covariance = component_covariance(fit)
    assert names == ("Batch: variance of column 1", "residual: variance")
    batches, each = 6, 5
    within, between = estimates[1], estimates[1] + each * estimates[0]
    of_within = 2 * within**2 / (batches * (each - 1))
    of_between = 2 * between**2 / (batches - 1)
    expected = np.array(
        [[(of_between + of_within) / each**2, -of_within / each], [-of_within / each, of_within]]
    )
    # the observed information equals the expected one here; the curvature is a central difference
    np.testing.assert_allclose(covariance, expected, rtol=1e-5)


def test_covariance_agrees_with_refits_of_simulated_responses():
    """Spread of estimates over 400 simulated campaigns of 60 units, where large samples are meant."""
    generator = np.random.default_rng(20)
    unit = np.repeat(np.arange(60), 6)
    x = np.tile(np.linspace(-1, 1, 6), 60)
    line = np.column_stack([np.ones_like(x), x])
    found, stated = [], None
    for _ in range(400):
        effects = generator.multivariate_normal([0, 0], [[1.0, 0.3], [0.3, 0.5]], 60)
        y = (line * effects[unit]).sum(axis=1) + generator.normal(0, 0.5, len(x))
        model = NestedModel(y, line, ("a", "b"), (("unit", unit),), (RandomTerm("unit", "unit", line),))
        fit = fit_nested_model(model)
        names, estimates, covariance = component_covariance(fit)
        found.append(estimates)
        stated = covariance if stated is None else stated + covariance
    assert len(names) == 4
    spread = np.sqrt(np.diag(np.cov(np.array(found).T)))
    # 400 campaigns tell a standard deviation to 3.5 %; four are looked at
    np.testing.assert_allclose(np.sqrt(np.diag(stated / 400)), spread, rtol=0.12)


@pytest.mark.parametrize("name", ["dyestuff", "pastes", "sleepstudy", "rail", "oats"])
def test_statsmodels_finds_the_same_optimum_where_it_can_express_the_model(nested, name):
    fit = fit_nested_model(nested.published(name))
    theirs = fit_by_statsmodels(fit)
    # never above: our optimum is certified; below by what its optimiser leaves
    assert -1e-6 < fit.log_likelihood - theirs.log_likelihood < 1e-4
    assert theirs.residual_variance == pytest.approx(fit.residual_variance, rel=0.01)
    for term, covariance in fit.covariances.items():
        np.testing.assert_allclose(
            theirs.covariances[term], covariance, rtol=0.03, atol=0.03 * covariance.max()
        )
    np.testing.assert_allclose(theirs.coefficients, fit.coefficients, rtol=1e-4)


def test_models_that_statsmodels_cannot_express_are_named():
    unit, inner = np.repeat(np.arange(6), 8), np.repeat(np.arange(12), 4)
    x = np.tile([0.0, 1.0, 2.0, 3.0], 12)
    line = np.column_stack([np.ones(48), x])
    levels = (("module", unit), ("sensor", inner))
    y = np.random.default_rng(1).normal(size=48)
    both = (RandomTerm("module", "module", line), RandomTerm("sensor", "sensor", line))
    model = NestedModel(y, line, ("a", "b"), levels, both)
    assert "sensor carry a covariance" in why_not_in_statsmodels(model)
    with pytest.raises(ValueError, match="sensor carry"):
        fit_by_statsmodels(fit_nested_model(model))
    single = NestedModel(y, line, ("a", "b"), levels, (both[0], RandomTerm("sensor", "sensor", line[:, :1])))
    assert why_not_in_statsmodels(single) == ""
    twice = NestedModel(y, line, ("a", "b"), levels, (both[0], RandomTerm("again", "module", line)))
    assert "several effects of module" in why_not_in_statsmodels(twice)
    assert why_not_in_statsmodels(NestedModel(y, line, ("a", "b"), levels, ())) != ""
