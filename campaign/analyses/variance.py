"""Where does the spread come from? The nested model of batches, modules, sensors, mountings and runs.

  y = (β0 + m0 + s0 + r0) + (β1 + m1 + s1 + r1)·x + e

by restricted maximum likelihood, always with the covariance of intercept and slope, once per generation and
once pooled, on the signal and on its ratio to the session's zero signal.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np
import pandas as pd

from campaign.analyses import variance_frames as frames
from campaign.analyses.fit_checks import LIKELIHOOD, NOISE, PREDICTIONS, TESTS, FitChecks, check_fit
from campaign.analyses.run_settling import Settling
from campaign.analyses.shared_fits import CheckedFit, FitTask, Outcome, fit_all
from campaign.analyses.variance_fit import PLACES, GenerationFit
from campaign.analyses.variance_model import VarianceModel
from campaign.analyses.variance_readings import (
    WITHHELD,
    build_all,
    fitted_readings,
    places_of,
    ratio_models,
    seed_of,
    spread_notice,
)
from campaign.analyses.variance_tests import TEST_COLUMNS, test_table
from campaign.methods.within_run_noise import NoiseCheck
from campaign.notices import Notice
from campaign.recordings.description import Description
from campaign.recordings.recording import ReferenceQuantity
from campaign.workers.workshop import Workshop

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration

ONE_AT_A_TIME = "sensors run one at a time"
SHARED = "runs shared by the sensors of a module"
SIGNAL = "signal"
RATIO = "ratio to the session's zero signal"


@dataclass(frozen=True)
class Variance:
    """Components of spread of a campaign.

    Attributes
    ----------
    reference
        What x is.
    response
        What the tables are about: ``"signal"``; the ratio stands in the tables whose names begin with
        ``ratio``.
    form
        Whether runs are shared by the sensors of a module, as read from the trials.
    fits
        One a generation, then one pooled (``"all"``) where there are several generations.
    ratio_fits
        The same on the ratio to the session's zero signal; empty where zero was not measured.
    fixed_effects
        generation, term, estimate, standard_error, df, low, high, unit.
    variance_components
        generation, level, term (intercept, slope, correlation, level), estimate, low, high, unit, method, p,
        test, label, called.
    variance_in_strain
        generation, level (with ``total``), place, strain_sd, low, high, share, share_low, share_high, label,
        called, x.
    effects
        generation, level, module, sensor, term (intercept, slope, strain at mid), estimate, low, high, unit.
    identifiability
        generation, component, called, degrees_of_freedom, label, reason.
    precision
        generation, figure, place, strain_sd, low, high, label.
    tests
        generation, component, test, statistic, df1, df2, p, p_adjusted (Holm within a generation).
    certificate
        generation, criterion, log_likelihood_statsmodels, difference, smallest_cone_eigenvalue, evaluations,
        restarts, singular, method.
    new_sensor
        generation, what (new sensor, new module), place, strain_sd, expanded, df, label.
    comparisons
        generation, first, second, place, ratio, low, high, differs: ratios of component SDs.
    ratio_variance_in_strain
        As ``variance_in_strain``; no share is to be compared between the two.
    ratio_zero_noise
        generation, strain_sd: what the noise of the zero reading adds to every ratio of its session.
    noise
        Generation → what the noise inside its runs looks like.
    settling
        Generation → from which run since mounting its runs are alike.
    covariates
        Name → (mean, lowest, highest) of surroundings in the model; empty: they are inside session and
        repetition.
    seed
        Seed of random numbers of the whole campaign, taken from the readings; those of a fit are seeded by
        its own.
    notices
        What a reader must know about the fits.
    """

    reference: ReferenceQuantity
    response: str
    form: str
    fits: tuple[GenerationFit, ...]
    ratio_fits: tuple[GenerationFit, ...]
    fixed_effects: pd.DataFrame
    variance_components: pd.DataFrame
    variance_in_strain: pd.DataFrame
    effects: pd.DataFrame
    identifiability: pd.DataFrame
    precision: pd.DataFrame
    tests: pd.DataFrame
    certificate: pd.DataFrame
    new_sensor: pd.DataFrame
    comparisons: pd.DataFrame
    ratio_variance_in_strain: pd.DataFrame
    ratio_zero_noise: pd.DataFrame
    noise: dict[str, NoiseCheck]
    settling: dict[str, Settling]
    covariates: dict[str, tuple[float, float, float]]
    seed: int
    notices: tuple[Notice, ...] = field(default=())

    @property
    def by_generation(self) -> tuple[GenerationFit, ...]:
        """The fits of single generations, the pooled one left out."""
        return _single(self.fits)

    @property
    def uneven(self) -> frozenset[str]:
        """Generations whose noise inside runs is uneven or autocorrelated."""
        return frozenset(name for name, check in self.noise.items() if check.faults)


def _single(fits: tuple[GenerationFit, ...]) -> tuple[GenerationFit, ...]:
    """The fits of single generations."""
    return tuple(fit for fit in fits if fit.generation != "all" or len(fits) == 1)


def analyse_variance(
    calibration: Calibration,
    description: Description,
    workshop: Workshop | None = None,
    meanwhile: Callable[[], object] | None = None,
) -> Variance:
    """Fit the nested model to the used readings of a campaign.

    Parameters
    ----------
    calibration
        Its ``readings`` and ``reference``.
    description
        The rated range.
    workshop
        Who fits, and what earlier runs fitted; this process alone where ``None``.
    meanwhile
        What this process does while others fit; not done where there is nothing to fit.

    Returns
    -------
    Variance
        Empty tables with a notice where nothing can be fitted.
    """
    return variance_of_readings(calibration.readings, calibration.reference, description, workshop, meanwhile)


def variance_of_readings(
    readings: pd.DataFrame,
    reference: ReferenceQuantity,
    description: Description,
    workshop: Workshop | None = None,
    meanwhile: Callable[[], object] | None = None,
) -> Variance:
    """Fit the nested model to the used rows of a table of readings.

    Parameters
    ----------
    readings
        The table of readings.
    reference
        What its ``x`` is.
    description
        The rated range.
    workshop
        Who fits, and what earlier runs fitted; this process alone where ``None``.
    meanwhile
        What this process does while others fit; not done where there is nothing to fit.
    """
    notices: list[Notice] = []
    kept, settling = fitted_readings(readings, notices)
    if kept.empty:
        return _nothing(reference, notices)
    places = places_of(kept, reference, description)
    models = tuple(build_all(kept, kept["signal"].to_numpy(float)))
    of_ratios: list[Notice] = []
    others = ratio_models(kept, places, of_ratios)
    units = str(kept["unit"].iloc[0]), reference.unit
    outcomes = _outcomes(models, others, places, units, workshop or Workshop(), meanwhile)
    found = tuple(_fits_of(models, outcomes[: len(models)], SIGNAL, notices))
    if not found:
        return replace(_nothing(reference, notices), identifiability=frames.identifiability(models, ()))
    ratio_fits = tuple(one.fit for one in _fits_of(others, outcomes[len(models) :], "ratio", of_ratios))
    notices += of_ratios
    checks = {one.fit.generation: one.checks for one in found}
    fits = tuple(one.fit for one in found)
    if len(fits) == 1 and fits[0].generation == "all":  # no generation by itself could be fitted
        checks["all"] = check_fit(fits[0], _asked("", SIGNAL), *units)
    noise = {fit.generation: check for fit in _single(fits) if (check := checks[fit.generation].noise)}
    notices += _noise_notices(noise)
    return _gather(reference, models, fits, ratio_fits, checks, settling, noise, seed_of(kept), notices)


def fit_generations(
    readings: pd.DataFrame,
    reference: ReferenceQuantity,
    description: Description,
    workshop: Workshop | None = None,
) -> tuple[tuple[GenerationFit, ...], frozenset[str]]:
    """Fit each generation by itself with limits at mid range, no more: what comparing generations needs.

    Parameters
    ----------
    readings, reference, description, workshop
        As in :func:`variance_of_readings`.

    Returns
    -------
    tuple
        The fits, and the names of the generations whose noise within runs is uneven or autocorrelated.
    """
    kept, _ = fitted_readings(readings, [])
    if kept.empty:
        return (), frozenset()
    places = places_of(kept, reference, description)
    models = [m for m in build_all(kept, kept["signal"].to_numpy(float)) if m.generation != "all"]
    tasks = [FitTask(model, places, ("mid",), (NOISE,)) for model in models if model.terms]
    found = [one for one in fit_all(tasks, workshop or Workshop()) if not isinstance(one, str)]
    uneven = frozenset(
        one.fit.generation for one in found if one.checks.noise is not None and one.checks.noise.faults
    )
    return tuple(one.fit for one in found), uneven


def _gather(
    reference: ReferenceQuantity,
    models: tuple[VarianceModel, ...],
    fits: tuple[GenerationFit, ...],
    ratio_fits: tuple[GenerationFit, ...],
    checks: dict[str, FitChecks],
    settling: dict[str, Settling],
    noise: dict[str, NoiseCheck],
    seed: int,
    notices: list[Notice],
) -> Variance:
    unit, x_unit = str(fits[0].model.readings["unit"].iloc[0]), reference.unit
    single = _single(fits)
    uneven = {generation for generation, check in noise.items() if check.faults}
    uneven |= {"all"} if uneven else set()
    tests = test_table(single, {name: own.tests for name, own in checks.items()}, settling)
    return Variance(
        reference=reference,
        response=SIGNAL,
        form=SHARED if fits[-1].model.counts.shared else ONE_AT_A_TIME,
        fits=fits,
        ratio_fits=ratio_fits,
        fixed_effects=_joined([checks[fit.generation].fixed for fit in fits], frames.FIXED_COLUMNS),
        variance_components=frames.variance_components(fits, unit, x_unit, tests, uneven),
        variance_in_strain=frames.variance_in_strain(fits, uneven),
        effects=frames.effects(single, unit, x_unit),
        identifiability=frames.identifiability(models, fits),
        precision=frames.precision(fits, uneven),
        tests=tests,
        certificate=_certificate(fits, checks),
        new_sensor=_joined([checks[fit.generation].new for fit in fits], frames.NEW_SENSOR_COLUMNS),
        comparisons=frames.comparisons(single, uneven),
        ratio_variance_in_strain=frames.variance_in_strain(ratio_fits, uneven),
        ratio_zero_noise=_zero_noise(ratio_fits),
        noise=noise,
        settling=settling,
        covariates=fits[-1].model.covariates,
        seed=seed,
        notices=tuple(notices),
    )


def _nothing(reference: ReferenceQuantity, notices: list[Notice]) -> Variance:
    """A result without any fit."""
    return Variance(
        reference=reference,
        response=SIGNAL,
        form=ONE_AT_A_TIME,
        fits=(),
        ratio_fits=(),
        fixed_effects=pd.DataFrame(columns=list(frames.FIXED_COLUMNS)),
        variance_components=pd.DataFrame(columns=list(frames.COMPONENT_COLUMNS)),
        variance_in_strain=pd.DataFrame(columns=list(frames.STRAIN_COLUMNS)),
        effects=pd.DataFrame(columns=list(frames.EFFECT_COLUMNS)),
        identifiability=pd.DataFrame(columns=list(frames.IDENTIFIABILITY_COLUMNS)),
        precision=pd.DataFrame(columns=list(frames.PRECISION_COLUMNS)),
        tests=pd.DataFrame(columns=list(TEST_COLUMNS)),
        certificate=pd.DataFrame(columns=list(frames.CERTIFICATE_COLUMNS)),
        new_sensor=pd.DataFrame(columns=list(frames.NEW_SENSOR_COLUMNS)),
        comparisons=pd.DataFrame(columns=list(frames.COMPARISON_COLUMNS)),
        ratio_variance_in_strain=pd.DataFrame(columns=list(frames.STRAIN_COLUMNS)),
        ratio_zero_noise=pd.DataFrame(columns=["generation", "strain_sd"]),
        noise={},
        settling={},
        covariates={},
        seed=0,
        notices=tuple(notices),
    )


def _outcomes(
    models: Sequence[VarianceModel],
    ratio_models: Sequence[VarianceModel],
    places: dict[str, float],
    units: tuple[str, str],
    workshop: Workshop,
    meanwhile: Callable[[], object] | None,
) -> list[Outcome | None]:
    """Fit all models together; ``None`` for those that tell no component from another."""
    both = [*((model, SIGNAL) for model in models), *((model, "ratio") for model in ratio_models)]
    tasks = [
        FitTask(model, places, _limits_at(model, what), _asked(model.generation, what), *units)
        for model, what in both
        if model.terms
    ]
    fitted = iter(fit_all(tasks, workshop, meanwhile))
    return [next(fitted) if model.terms else None for model, _ in both]


def _fits_of(
    models: Sequence[VarianceModel], outcomes: Sequence[Outcome | None], what: str, notices: list[Notice]
) -> Iterator[CheckedFit]:
    """The fit of each model, or a notice that says why there is none."""
    for model, outcome in zip(models, outcomes, strict=True):
        if outcome is None:
            notices.append(
                spread_notice(
                    "spread-not-fitted",
                    f"{model.generation}, {what}: this design tells no component of spread from another",
                    WITHHELD,
                    "repeat runs, or measure several sensors",
                )
            )
        elif isinstance(outcome, str):
            notices.append(
                spread_notice("spread-not-fitted", f"{model.generation}, {what}: {outcome}", WITHHELD)
            )
        else:
            if not outcome.fit.by_profile:
                notices.append(_fallback_notice(outcome.fit, what))
            yield outcome


def _limits_at(model: VarianceModel, what: str) -> tuple[str, ...]:
    """Where limits are found: everywhere for a generation's signal, at mid range for all pooled.

    Ratios stand beside the signal at mid range, generation by generation: limits cost more than the fits.
    """
    if what != SIGNAL:
        return () if model.generation == "all" else ("mid",)
    return ("mid",) if model.generation == "all" else (*PLACES, "intercept", "slope")


def _asked(generation: str, what: str) -> tuple[str, ...]:
    """What is asked of a fit: nothing of ratios, no noise and no tests of the pooled fit."""
    if what != SIGNAL:
        return ()
    return (LIKELIHOOD, PREDICTIONS) if generation == "all" else (NOISE, TESTS, LIKELIHOOD, PREDICTIONS)


def _fallback_notice(fit: GenerationFit, what: str) -> Notice:
    return spread_notice(
        "fit-by-analysis-of-variance",
        f"{fit.generation}, {what}: restricted maximum likelihood did not reach a certified optimum",
        f"components are those of the {fit.fit.method}, without intervals",
    )


def _zero_noise(fits: Sequence[GenerationFit]) -> pd.DataFrame:
    """What the noise of y0 adds to every ratio."""
    noise = [
        {"generation": f.generation, "strain_sd": f.strain_of(float(np.sqrt(f.residual_variance)))}
        for f in fits
    ]
    return pd.DataFrame(noise, columns=["generation", "strain_sd"])


def _joined(parts: Sequence[pd.DataFrame | None], columns: Sequence[str]) -> pd.DataFrame:
    kept = [part for part in parts if part is not None and len(part)]
    return pd.concat(kept, ignore_index=True) if kept else pd.DataFrame(columns=list(columns))


def _noise_notices(noise: dict[str, NoiseCheck]) -> list[Notice]:
    return [
        spread_notice(
            "uneven-noise",
            f"{generation}: the noise inside runs is {', '.join(check.faults)}",
            "the residual SD is an average; its interval and that of repetition are withheld",
        )
        for generation, check in noise.items()
        if check.faults
    ]


def _certificate(fits: tuple[GenerationFit, ...], checks: dict[str, FitChecks]) -> pd.DataFrame:
    """The evidence of every fit; statsmodels' log-likelihood where the fit is small enough."""
    rows = []
    for fit in fits:
        theirs = checks[fit.generation].likelihood
        rows.append(
            {
                "generation": fit.generation,
                "criterion": fit.fit.criterion,
                "log_likelihood_statsmodels": theirs,
                "difference": fit.fit.log_likelihood - theirs,
                "smallest_cone_eigenvalue": min(fit.fit.certificate.values(), default=float("nan")),
                "evaluations": fit.fit.evaluations,
                "restarts": fit.fit.restarts,
                "singular": fit.fit.singular,
                "method": fit.fit.method,
            }
        )
    return pd.DataFrame(rows, columns=list(frames.CERTIFICATE_COLUMNS))


__all__ = ["PLACES", "Variance", "VarianceModel", "analyse_variance", "variance_of_readings"]
