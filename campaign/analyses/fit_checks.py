"""What is asked of a nested fit once it is there: its noise, components and likelihood, what it predicts.

Every answer rests on the fit and its readings alone, random numbers included: they are seeded by the readings
of the fit. So an answer is kept with its fit, and stays while other generations change.
"""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import dataclass

import numpy as np
import pandas as pd

from campaign.analyses import variance_frames as frames
from campaign.analyses.seeds import seed_from
from campaign.analyses.variance_fit import GenerationFit
from campaign.analyses.variance_tests import component_tests_of, runs_of
from campaign.methods.component_tests import ComponentTest
from campaign.methods.nested_model import statsmodels_log_likelihood
from campaign.methods.within_run_noise import NoiseCheck, check_noise

NOISE, TESTS, LIKELIHOOD, PREDICTIONS = "noise", "tests", "likelihood", "predictions"
"""What can be asked."""

MOST_ROWS_CHECKED = 4000
"""Fits of at most this many readings are always compared with statsmodels' likelihood."""


@dataclass(frozen=True)
class FitChecks:
    """Answers; of what was not asked, nothing.

    Attributes
    ----------
    noise
        What the noise inside runs looks like.
    tests
        The test of every component.
    likelihood
        Log likelihood by statsmodels; NaN where the fit is too large for it, or has no random term.
    fixed, new
        The fixed effects, and what to expect of a new sensor: the tables of
        :func:`campaign.analyses.variance_frames.fixed_effects_and_new_sensors`.
    """

    noise: NoiseCheck | None
    tests: tuple[ComponentTest, ...]
    likelihood: float
    fixed: pd.DataFrame | None
    new: pd.DataFrame | None


def check_fit(fit: GenerationFit, asked: Collection[str], unit: str, reference_unit: str) -> FitChecks:
    """Answer what is asked of a fit.

    Parameters
    ----------
    fit
        The fit; of its model's readings the columns ``x`` and ``order`` are looked at.
    asked
        Of :data:`NOISE`, :data:`TESTS`, :data:`LIKELIHOOD`, :data:`PREDICTIONS`.
    unit, reference_unit
        Units of the response and of x.
    """
    seed = seed_of_fit(fit)
    fixed, new = (
        frames.fixed_effects_and_new_sensors((fit,), unit, reference_unit)
        if PREDICTIONS in asked
        else (None, None)
    )
    return FitChecks(
        noise=_noise_of(fit, seed) if NOISE in asked else None,
        tests=component_tests_of(fit, seed) if TESTS in asked else (),
        likelihood=_their_likelihood(fit) if LIKELIHOOD in asked else float("nan"),
        fixed=fixed,
        new=new,
    )


def seed_of_fit(fit: GenerationFit) -> int:
    """Return a seed that depends on the readings of the fit alone."""
    return seed_from([fit.generation], [fit.model.readings["x"], pd.Series(fit.model.response)])


def _noise_of(fit: GenerationFit, seed: int) -> NoiseCheck:
    order = fit.model.readings["order"].to_numpy(np.int64)
    return check_noise(runs_of(fit), order, fit.marginal, np.random.default_rng([seed, 2]))


def _their_likelihood(fit: GenerationFit) -> float:
    if len(fit.model.response) > MOST_ROWS_CHECKED or not fit.model.terms:
        return float("nan")
    return statsmodels_log_likelihood(fit.fit)
