"""Where does the spread come from? The nested model of batches, modules, sensors, mountings and runs.

  y = (β0 + m0 + s0 + r0) + (β1 + m1 + s1 + r1)·x + e

by restricted maximum likelihood, always with the covariance of intercept and slope, once per generation and
once pooled, on the signal and on its ratio to the session's zero signal.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import pandas as pd

from campaign.analyses import variance_frames as frames
from campaign.analyses.run_settling import Settling, find_settling, number_runs
from campaign.analyses.seeds import seed_from
from campaign.analyses.shared_fits import FitTask, Outcome, fit_all
from campaign.analyses.variance_fit import (
    PLACES,
    GenerationFit,
    choose_places,
    session_zeros,
)
from campaign.analyses.variance_model import VarianceModel, build_model
from campaign.analyses.variance_tests import TEST_COLUMNS, runs_of, test_table
from campaign.methods.nested_model import statsmodels_log_likelihood
from campaign.methods.within_run_noise import NoiseCheck, check_noise
from campaign.notices import Notice
from campaign.recordings.description import Description
from campaign.recordings.recording import STRAIN, ReferenceQuantity
from campaign.workers.workshop import Workshop

if TYPE_CHECKING:
    from campaign.analyses.calibration import Calibration

FloatArray = npt.NDArray[np.float64]

ONE_AT_A_TIME = "sensors run one at a time"
SHARED = "runs shared by the sensors of a module"
SIGNAL = "signal"
RATIO = "ratio to the session's zero signal"

MOST_ROWS_CHECKED = 4000
"""Fits of at most this many readings are always compared with statsmodels' likelihood."""


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
        Seed of the random numbers, taken from the readings.
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
    calibration: Calibration, description: Description, workshop: Workshop | None = None
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

    Returns
    -------
    Variance
        Empty tables with a notice where nothing can be fitted.
    """
    return variance_of_readings(calibration.readings, calibration.reference, description, workshop)


def variance_of_readings(
    readings: pd.DataFrame,
    reference: ReferenceQuantity,
    description: Description,
    workshop: Workshop | None = None,
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
    """
    notices: list[Notice] = []
    kept, settling = _fitted_readings(readings, notices)
    if kept.empty:
        return _nothing(reference, notices)
    places = choose_places(
        kept["x"].to_numpy(float), _rated(description, reference), has_zero=_has_zero(reference)
    )
    models = tuple(_build_all(kept, kept["signal"].to_numpy(float)))
    of_ratios: list[Notice] = []
    ratio_models = _ratio_models(kept, places, of_ratios)
    outcomes = _outcomes(models, ratio_models, places, workshop or Workshop())
    fits = tuple(_fits_of(models, outcomes[: len(models)], SIGNAL, notices))
    if not fits:
        return replace(_nothing(reference, notices), identifiability=frames.identifiability(models, ()))
    ratio_fits = tuple(_fits_of(ratio_models, outcomes[len(models) :], "ratio", of_ratios))
    zero_noise = _zero_noise(ratio_fits)
    notices += of_ratios
    seed = seed_of(kept)
    noise = {fit.generation: _noise_of(fit, seed) for fit in _single(fits)}
    notices += _noise_notices(noise)
    return _gather(reference, models, fits, ratio_fits, zero_noise, settling, noise, seed, notices)


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
    used = readings[readings["used"].astype(bool)]
    used = used[np.isfinite(used["x"].to_numpy(float)) & np.isfinite(used["signal"].to_numpy(float))]
    if used.empty:
        return (), frozenset()
    used = _with_common_levels(used, [])
    kept = _settled_runs(used, _find_all_settling(used), [])
    places = choose_places(
        kept["x"].to_numpy(float), _rated(description, reference), has_zero=_has_zero(reference)
    )
    models = [m for m in _build_all(kept, kept["signal"].to_numpy(float)) if m.generation != "all"]
    tasks = [FitTask(model, places, ("mid",)) for model in models if model.terms]
    outcomes = fit_all(tasks, workshop or Workshop())
    fits = tuple(outcome for outcome in outcomes if not isinstance(outcome, str))
    seed = seed_of(kept)
    return fits, frozenset(fit.generation for fit in fits if _noise_of(fit, seed).faults)


_WITHHELD = "components of spread are not estimated"


def _fitted_readings(
    readings: pd.DataFrame, notices: list[Notice]
) -> tuple[pd.DataFrame, dict[str, Settling]]:
    """Return the rows that are fitted, and from which run on each generation's runs are alike."""
    used = readings[readings["used"].astype(bool)]
    used = used[np.isfinite(used["x"].to_numpy(float)) & np.isfinite(used["signal"].to_numpy(float))]
    if used.empty:
        notices.append(_notice("no-readings", "no staircase reading is used", _WITHHELD))
        return used, {}
    used = _with_common_levels(used, notices)
    settling = _find_all_settling(used)
    return _settled_runs(used, settling, notices), settling


def signal_models(readings: pd.DataFrame) -> tuple[VarianceModel, ...]:
    """Return the models of the signal that readings lead to: one a generation, then the pooled one.

    They hold design and response and are not fitted yet. A table read back from ``readings.csv`` will do.
    """
    kept, _ = _fitted_readings(readings, [])
    return tuple(_build_all(kept, kept["signal"].to_numpy(float)))


def _gather(
    reference: ReferenceQuantity,
    models: tuple[VarianceModel, ...],
    fits: tuple[GenerationFit, ...],
    ratio_fits: tuple[GenerationFit, ...],
    zero_noise: pd.DataFrame,
    settling: dict[str, Settling],
    noise: dict[str, NoiseCheck],
    seed: int,
    notices: list[Notice],
) -> Variance:
    unit, x_unit = str(fits[0].model.readings["unit"].iloc[0]), reference.unit
    single = _single(fits)
    uneven = {generation for generation, check in noise.items() if check.faults}
    uneven |= {"all"} if uneven else set()
    tests = test_table(single, settling, seed)
    fixed, new = frames.fixed_effects_and_new_sensors(fits, unit, x_unit)
    return Variance(
        reference=reference,
        response=SIGNAL,
        form=SHARED if fits[-1].model.counts.shared else ONE_AT_A_TIME,
        fits=fits,
        ratio_fits=ratio_fits,
        fixed_effects=fixed,
        variance_components=frames.variance_components(fits, unit, x_unit, tests, uneven),
        variance_in_strain=frames.variance_in_strain(fits, uneven),
        effects=frames.effects(single, unit, x_unit),
        identifiability=frames.identifiability(models, fits),
        precision=frames.precision(fits, uneven),
        tests=tests,
        certificate=_certificate(fits),
        new_sensor=new,
        comparisons=frames.comparisons(single, uneven),
        ratio_variance_in_strain=frames.variance_in_strain(ratio_fits, uneven),
        ratio_zero_noise=zero_noise,
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


def _notice(code: str, what: str, done: str, remedy: str = "", count: int = 1) -> Notice:
    return Notice(code, "noted", None, None, None, what, done, remedy, count)


def seed_of(readings: pd.DataFrame) -> int:
    """Return a seed that depends on the readings alone, so that a report repeats to the byte."""
    words = [readings[column] for column in ("generation", "module", "sensor", "session", "trial")]
    return seed_from(words, [readings["x"], readings["signal"]])


def _rated(description: Description, reference: ReferenceQuantity) -> float:
    if reference == STRAIN:
        return description.range_strain
    return description.range_elongation_mm if reference.name == "elongation" else float("nan")


def _has_zero(reference: ReferenceQuantity) -> bool:
    return reference.name != "length"


def _with_common_levels(readings: pd.DataFrame, notices: list[Notice]) -> pd.DataFrame:
    """Leave out single readings at levels that hardly any run visits, where all others have common levels."""
    known = readings["nominal_level"].notna()
    if known.all() or known.mean() < 0.9:
        return readings
    left_out = int((~known).sum())
    notices.append(
        _notice(
            "level-not-common",
            f"{left_out} readings lie at levels that fewer than half of the runs visit",
            "they are left out of the components of spread, nowhere else",
            count=left_out,
        )
    )
    return readings[known]


def _find_all_settling(readings: pd.DataFrame) -> dict[str, Settling]:
    parts = readings.groupby("generation", sort=True)
    return {str(name): find_settling(part, str(name)) for name, part in parts}


def _settled_runs(
    readings: pd.DataFrame, settling: dict[str, Settling], notices: list[Notice]
) -> pd.DataFrame:
    """Leave out the runs before a generation's sensors have settled, with a notice."""
    first = readings["generation"].map({name: s.first_settled for name, s in settling.items()})
    early = number_runs(readings) < first.to_numpy()
    for name, found in settling.items():
        if found.first_settled > 1:
            notices.append(
                _notice(
                    "runs-before-settling",
                    f"{name}: the run number matters (F = {found.statistic:.3g}, p = {found.p:.2g})",
                    f"runs before number {found.first_settled} do not enter the components of spread",
                    "condition sensors by some cycles after mounting",
                )
            )
    return readings[~early]


def _build_all(readings: pd.DataFrame, response: FloatArray) -> Iterator[VarianceModel]:
    """The models of the generations, then the pooled one."""
    names = sorted(set(readings["generation"]))
    generation = readings["generation"].to_numpy()
    for name in names:
        rows = generation == name
        yield build_model(readings[rows], response[rows], str(name))
    if len(names) > 1:
        yield build_model(readings, response, "all")


def _outcomes(
    models: Sequence[VarianceModel],
    ratio_models: Sequence[VarianceModel],
    places: dict[str, float],
    workshop: Workshop,
) -> list[Outcome | None]:
    """Fit all models together; ``None`` for those that tell no component from another."""
    both = [*((model, SIGNAL) for model in models), *((model, "ratio") for model in ratio_models)]
    tasks = [FitTask(model, places, _limits_at(model, what)) for model, what in both if model.terms]
    fitted = iter(fit_all(tasks, workshop))
    return [next(fitted) if model.terms else None for model, _ in both]


def _fits_of(
    models: Sequence[VarianceModel], outcomes: Sequence[Outcome | None], what: str, notices: list[Notice]
) -> Iterator[GenerationFit]:
    """The fit of each model, or a notice that says why there is none."""
    for model, outcome in zip(models, outcomes, strict=True):
        if outcome is None:
            notices.append(
                _notice(
                    "spread-not-fitted",
                    f"{model.generation}, {what}: this design tells no component of spread from another",
                    _WITHHELD,
                    "repeat runs, or measure several sensors",
                )
            )
        elif isinstance(outcome, str):
            notices.append(_notice("spread-not-fitted", f"{model.generation}, {what}: {outcome}", _WITHHELD))
        else:
            if not outcome.by_profile:
                notices.append(_fallback_notice(outcome, what))
            yield outcome


def _limits_at(model: VarianceModel, what: str) -> tuple[str, ...]:
    """Where limits are found: everywhere for a generation's signal, at mid range for all pooled.

    Ratios stand beside the signal at mid range, generation by generation: limits cost more than the fits.
    """
    if what != SIGNAL:
        return () if model.generation == "all" else ("mid",)
    return ("mid",) if model.generation == "all" else (*PLACES, "intercept", "slope")


def _fallback_notice(fit: GenerationFit, what: str) -> Notice:
    return _notice(
        "fit-by-analysis-of-variance",
        f"{fit.generation}, {what}: restricted maximum likelihood did not reach a certified optimum",
        f"components are those of the {fit.fit.method}, without intervals",
    )


def _ratio_models(
    readings: pd.DataFrame, places: dict[str, float], notices: list[Notice]
) -> tuple[VarianceModel, ...]:
    """The models of y/y0; none where some session has no zero signal."""
    zeros = session_zeros(readings, places["zero"], number_runs(readings))
    zero = zeros["zero_signal"].to_numpy(float)
    if not np.isfinite(zero).all() or (np.abs(zero) <= 1e-6 * np.abs(readings["signal"]).max()).any():
        notices.append(
            _notice(
                "no-zero-signal",
                "not every session has a usable signal at zero",
                "ratios to the session's zero signal are not analysed",
                "start every session at the rest length",
            )
        )
        return ()
    kept = readings[~zeros["is_zero"].to_numpy()]
    ratio = kept["signal"].to_numpy(float) / zero[~zeros["is_zero"].to_numpy()]
    return tuple(_build_all(kept, ratio))


def _zero_noise(fits: Sequence[GenerationFit]) -> pd.DataFrame:
    """What the noise of y0 adds to every ratio."""
    noise = [
        {"generation": f.generation, "strain_sd": f.strain_of(float(np.sqrt(f.residual_variance)))}
        for f in fits
    ]
    return pd.DataFrame(noise, columns=["generation", "strain_sd"])


def _noise_of(fit: GenerationFit, seed: int) -> NoiseCheck:
    order = fit.model.readings["order"].to_numpy(np.int64)
    return check_noise(runs_of(fit), order, fit.marginal, np.random.default_rng([seed, 2]))


def _noise_notices(noise: dict[str, NoiseCheck]) -> list[Notice]:
    return [
        _notice(
            "uneven-noise",
            f"{generation}: the noise inside runs is {', '.join(check.faults)}",
            "the residual SD is an average; its interval and that of repetition are withheld",
        )
        for generation, check in noise.items()
        if check.faults
    ]


def _certificate(fits: tuple[GenerationFit, ...]) -> pd.DataFrame:
    """The evidence of every fit; statsmodels' log-likelihood where the fit is small enough."""
    rows = []
    for fit in fits:
        theirs = _their_likelihood(fit)
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


def _their_likelihood(fit: GenerationFit) -> float:
    if len(fit.model.response) > MOST_ROWS_CHECKED or not fit.model.terms:
        return float("nan")
    return statsmodels_log_likelihood(fit.fit)


__all__ = ["PLACES", "Variance", "VarianceModel", "analyse_variance", "variance_of_readings"]
