"""The main model fitted once more from ``readings.csv`` alone, and held against statsmodels."""

from __future__ import annotations

import io
import json
from dataclasses import dataclass

import numpy as np
import pandas as pd

from campaign.analyses.variance_model import VarianceModel
from campaign.analyses.variance_readings import signal_models
from campaign.methods.nested_in_statsmodels import fit_by_statsmodels, why_not_in_statsmodels
from campaign.methods.nested_model import NestedModelFit, fit_nested_model, statsmodels_log_likelihood

LIKELIHOOD_TOLERANCE = 1e-6
"""How far log-likelihoods at the same estimate may lie apart, over the larger of 1 and their size."""

SEARCH_TOLERANCE = 0.01
"""By how much statsmodels' own search may end below the optimum: it is no fault of the sealed figures."""

MOST_ROWS = 20_000
"""Fits of more readings are not held against statsmodels: its time grows with their square."""


@dataclass(frozen=True)
class Refit:
    """One model fitted again.

    Attributes
    ----------
    generation
        Whose model it is.
    agrees
        Whether everything that was compared agrees.
    sentence
        What was compared, and what came of it.
    """

    generation: str
    agrees: bool
    sentence: str


def refit_from_readings(readings: bytes, schema: bytes, certificates: bytes) -> tuple[Refit, ...]:
    """Fit the main model of every generation again from the sealed table of readings.

    Parameters
    ----------
    readings, schema
        ``readings.csv`` and ``schema.json``.
    certificates
        ``fit_certificates.csv``: the sealed criteria.

    Returns
    -------
    tuple of Refit
        One a model that was sealed; one that says why where the tables are not what they should be.
    """
    try:
        return _refit_all(readings, schema, certificates)
    except (ValueError, KeyError, TypeError, IndexError, AttributeError, np.linalg.LinAlgError) as fault:
        why = f"{type(fault).__name__}: {fault}"
        return (Refit("", False, f"readings.csv cannot be fitted again as it stands ({why})"),)


def _refit_all(readings: bytes, schema: bytes, certificates: bytes) -> tuple[Refit, ...]:
    sealed = pd.read_csv(io.BytesIO(certificates), dtype={"generation": str})
    criteria = dict(zip(sealed["generation"], sealed["criterion"].astype(float), strict=True))
    models = signal_models(readings_table(readings, schema))
    by_generation = {model.generation: model for model in models}
    return tuple(
        _refit(by_generation[name], criterion)
        if name in by_generation
        else Refit(name, False, f"{name}: readings.csv does not lead to this model")
        for name, criterion in criteria.items()
    )


def readings_table(readings: bytes, schema: bytes) -> pd.DataFrame:
    """Return ``readings.csv`` as the table that the analyses take, typed by its schema.

    The reference value stands there once: ``x`` is the strain where there is one.
    """
    resources = {resource["name"]: resource for resource in json.loads(schema)["resources"]}
    table = pd.read_csv(io.BytesIO(readings), dtype=str, keep_default_na=False)
    for field in resources["readings"]["schema"]["fields"]:
        name = field["name"]
        if field["type"] in ("number", "integer"):
            numbers = np.array([float(cell) if cell else np.nan for cell in table[name]])
            table[name] = numbers.astype(np.int64) if field["type"] == "integer" else numbers
        elif field["type"] == "boolean":
            table[name] = table[name] == "true"
    return table if "x" in table else table.assign(x=table["strain"])


def _refit(model: VarianceModel, criterion: float) -> Refit:
    fit = fit_nested_model(model.model)
    apart = fit.criterion - criterion
    if not _close(fit.criterion, criterion, LIKELIHOOD_TOLERANCE):
        sentence = (
            f"{model.generation}: −2 log-likelihood {fit.criterion:.9g} from readings.csv,"
            f" {criterion:.9g} sealed ({apart:+.3g})"
        )
        return Refit(model.generation, False, sentence)
    if len(model.response) > MOST_ROWS:
        many = f"{len(model.response)} readings are too many to hold against statsmodels"
        return Refit(model.generation, True, f"{_as_sealed(fit, model)}; {many}")
    reason = why_not_in_statsmodels(model.model)
    if reason:
        return _by_likelihood(model, fit, f"statsmodels cannot express it ({reason})")
    return _by_its_own_search(model, fit)


def _as_sealed(fit: NestedModelFit, model: VarianceModel) -> str:
    return (
        f"{model.generation}: fitted again from readings.csv, −2 log-likelihood {fit.criterion:.9g} as sealed"
    )


def _by_likelihood(model: VarianceModel, fit: NestedModelFit, why: str) -> Refit:
    apart = statsmodels_log_likelihood(fit) - fit.log_likelihood
    agrees = abs(apart) <= LIKELIHOOD_TOLERANCE * max(1.0, abs(fit.log_likelihood))
    same = f"{'is the same' if agrees else 'differs'} ({apart:+.2g})"
    sentence = f"{_as_sealed(fit, model)}; {why}, its log-likelihood at our estimate {same}"
    return Refit(model.generation, agrees, sentence)


def _by_its_own_search(model: VarianceModel, fit: NestedModelFit) -> Refit:
    try:
        found = fit_by_statsmodels(fit)
    except (ValueError, np.linalg.LinAlgError) as fault:
        return _by_likelihood(model, fit, f"statsmodels can express it but failed ({fault})")
    above = found.log_likelihood - fit.log_likelihood
    if above < -SEARCH_TOLERANCE:
        why = f"statsmodels can express it but stopped {-above:.2g} below the optimum"
        return _by_likelihood(model, fit, why)
    agrees = above <= LIKELIHOOD_TOLERANCE * max(1.0, abs(fit.log_likelihood))
    ends = "reaches the same optimum" if agrees else "ends at a better one"
    sentence = f"{_as_sealed(fit, model)}; statsmodels' own fit {ends} ({above:+.2g})"
    return Refit(model.generation, agrees, sentence)


def _close(first: float, second: float, tolerance: float) -> bool:
    return abs(first - second) <= tolerance * max(1.0, abs(first), abs(second))
