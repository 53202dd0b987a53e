"""Nested mixed models: readings in trials in sensors in modules, each level with its own random line.

    y = X β + Σ Z u + e,   u ~ N(0, Σ) for every unit of the effect's level,   e ~ N(0, σ²)

by profiled restricted maximum likelihood, for any number of nested levels, any number of random columns at a
level, and effects with independent copies (runs that all sensors of a module share; a sensor's deviation at
each nominal level). This module is the door; the steps have a module each:

    nested_design         the model as stated, its check, well-scaled columns
    nested_compression    rows become cross-products per innermost unit
    nested_transfer       how the slots of a unit become those of its parent
    nested_routes         the same for units of many slots, all kinds of units together
    nested_factors        the factor of a level and what its elimination leaves
    nested_many_slots     elimination of units of many slots, and backwards
    nested_criterion      the criterion by elimination from inside outwards, and its gradient backwards
    nested_start          analysis-of-variance moments
    nested_optimiser      L-BFGS-B, Newton polish, certificate on the cone
    nested_fit            the fit as a value
    nested_effects        predicted effects and residuals
    nested_intervals      profile intervals of SDs, totals, ratios and shares
    nested_limits         where to look next for a limit of a profile
    nested_bootstrap      refits of drawn responses, tests of a component
    nested_inference      Satterthwaite's degrees of freedom
    nested_certificate    the same model in statsmodels
"""

from campaign.methods.nested_bootstrap import (
    ComponentTest,
    Refits,
    bootstrap_refits,
    refit,
    simulate_responses,
    test_component,
)
from campaign.methods.nested_certificate import as_statsmodels, statsmodels_log_likelihood
from campaign.methods.nested_design import NestedModel, RandomTerm
from campaign.methods.nested_effects import (
    RandomEffects,
    conditional_residuals,
    marginal_residuals,
    random_effects,
)
from campaign.methods.nested_fit import NestedModelFit, fit_nested_model
from campaign.methods.nested_inference import satterthwaite, satterthwaite_each
from campaign.methods.nested_intervals import (
    Interval,
    profile_interval,
    profile_intervals,
    profile_ratio,
    profile_share,
    profile_total,
)

__all__ = [
    "ComponentTest",
    "Interval",
    "NestedModel",
    "NestedModelFit",
    "RandomEffects",
    "RandomTerm",
    "Refits",
    "as_statsmodels",
    "bootstrap_refits",
    "conditional_residuals",
    "fit_nested_model",
    "marginal_residuals",
    "profile_interval",
    "profile_intervals",
    "profile_ratio",
    "profile_share",
    "profile_total",
    "random_effects",
    "refit",
    "satterthwaite",
    "satterthwaite_each",
    "simulate_responses",
    "statsmodels_log_likelihood",
    "test_component",
]
