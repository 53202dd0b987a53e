"""MODEL.md: the fitted models in symbols, with all that is needed to fit them again by another program.

Beside the text stand files of full precision for each fit: the design as a table that any package for mixed
models reads, the covariance of the fixed coefficients, and that of the estimated components.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from campaign.analyses.results import CampaignResults
from campaign.analyses.variance import RATIO, SIGNAL
from campaign.analyses.variance_fit import GenerationFit
from campaign.methods.nested_in_statsmodels import effect_of_row, outermost_level, why_not_in_statsmodels
from campaign.methods.nested_inference import component_covariance
from campaign.methods.nested_model import RandomTerm
from campaign.pages.slugs import slug
from campaign.pages.tables import csv_bytes
from campaign.provenance.sealed_text import render_text

MODEL_TEXT = "MODEL.md"
MODEL_FOLDER = "model/"


@dataclass(frozen=True)
class FixedColumn:
    """One column of the fixed part: its name in the design table, what it is, its estimate."""

    column: str
    words: str
    group: str
    estimate: float
    standard_error: float


@dataclass(frozen=True)
class RandomEffect:
    """One random effect: where it lives, its columns, how many there are, the covariance of its columns."""

    name: str
    level: str
    group: str
    columns: tuple[str, ...]
    count: int
    covariance: tuple[tuple[float, ...], ...]


@dataclass(frozen=True)
class FitText:
    """One fit in words, symbols and formulas.

    Attributes
    ----------
    title, slug
        What was fitted; the same as part of file names.
    response, unit
        What y is and its unit.
    readings, centre, scale, reference
        Number of rows; z = (x − centre)/scale, and what x is.
    fixed, effects
        The parts of the model.
    residual_variance, criterion
        σ² and −2 log restricted likelihood.
    evidence
        Name and value of what the search left: method, evaluations, certificate.
    symbols
        The model, in symbols.
    lme4, statsmodels
        Equivalent calls; why there is none where ``statsmodels_says`` is not empty.
    """

    title: str
    slug: str
    response: str
    unit: str
    readings: int
    centre: float
    scale: float
    reference: str
    fixed: tuple[FixedColumn, ...]
    effects: tuple[RandomEffect, ...]
    residual_variance: float
    criterion: float
    evidence: tuple[tuple[str, str], ...]
    symbols: str
    lme4: str
    statsmodels: str
    statsmodels_says: str


def model_files(results: CampaignResults) -> dict[str, bytes]:
    """Return ``MODEL.md`` and the tables of every fit; the text says so where nothing was fitted."""
    variance = results.variance
    fits = [] if variance is None else [*_named(variance.fits, SIGNAL), *_named(variance.ratio_fits, RATIO)]
    told = [describe_fit(fit, what, results) for fit, what in fits]
    text = render_text(
        "MODEL.md",
        fits=told,
        seed=variance.seed if variance is not None else None,
        lines=results.calibration is not None,
        reference=results.readings.reference,
        loops=results.hysteresis is not None,
        holds=results.drift is not None,
        influences=results.pressure is not None or results.influences is not None,
    )
    files = {MODEL_TEXT: text}
    for (fit, _), words in zip(fits, told, strict=True):
        files |= {f"{MODEL_FOLDER}{words.slug}/{name}": content for name, content in fit_tables(fit, results)}
    return files


def _named(fits: tuple[GenerationFit, ...], what: str) -> list[tuple[GenerationFit, str]]:
    return [(fit, what) for fit in fits]


def describe_fit(fit: GenerationFit, what: str, results: CampaignResults) -> FitText:
    """Return one fit in words, symbols and formulas."""
    fixed, effects = tuple(_fixed_columns(fit)), tuple(_random_effects(fit))
    whose = "all generations together" if fit.generation == "all" else f"generation {fit.generation}"
    reference = results.readings.reference
    return FitText(
        title=f"{whose}: {what}",
        slug=f"{slug(fit.generation)}-{'signal' if what == SIGNAL else 'ratio'}",
        response=what,
        unit=str(fit.model.readings["unit"].iloc[0]) if what == SIGNAL else "1",
        readings=len(fit.model.response),
        centre=fit.model.centre,
        scale=fit.model.scale,
        reference=f"{reference.name} in {reference.unit}",
        fixed=fixed,
        effects=effects,
        residual_variance=fit.residual_variance,
        criterion=fit.fit.criterion,
        evidence=tuple(_evidence(fit)),
        symbols=_symbols(effects, len(fixed)),
        lme4=_lme4(fixed, effects),
        statsmodels=_statsmodels(fit, fixed, effects),
        statsmodels_says=why_not_in_statsmodels(fit.model.model),
    )


def _fixed_columns(fit: GenerationFit) -> Iterator[FixedColumn]:
    errors = np.sqrt(np.diag(fit.fit.coefficient_covariance))
    parts = zip(fit.model.fixed.names, fit.model.fixed.groups, fit.fit.coefficients, errors, strict=True)
    for number, (name, group, estimate, error) in enumerate(parts, 1):
        yield FixedColumn(f"f{number}", name, group, float(estimate), float(error))


def _random_effects(fit: GenerationFit) -> Iterator[RandomEffect]:
    for number, term in enumerate(fit.model.model.terms):
        covariance = tuple(tuple(float(v) for v in row) for row in fit.fit.covariances[term.name])
        count = len(np.unique(effect_of_row(fit.fit, number)))
        yield RandomEffect(term.name, term.level, f"unit_{term.name}", _columns_of(term), count, covariance)


def _columns_of(term: RandomTerm) -> tuple[str, ...]:
    """Names of the columns of a random effect in the design table."""
    if term.columns.shape[1] == 2:
        return ("1", "z")
    return ("1",) if (term.columns == 1.0).all() else (f"column_{term.name}",)


def _evidence(fit: GenerationFit) -> Iterator[tuple[str, str]]:
    found = fit.fit
    yield "method", found.method
    yield "log-likelihood", repr(found.log_likelihood)
    yield "evaluations of the criterion", str(found.evaluations)
    yield "restarts", str(found.restarts)
    yield "converged", "yes" if found.converged else "no"
    yield "some component on its boundary", "yes" if found.singular else "no"
    for name, value in found.certificate.items():
        yield f"smallest eigenvalue of the derivative at {name}, over its scale", f"{value:.3g}"


def _symbols(effects: tuple[RandomEffect, ...], fixed: int) -> str:
    parts = [f"Σₖ βₖ fₖ  (k = 1 … {fixed})"]
    parts += [
        " + ".join(
            f"{effect.name}[{k}]" + ("" if column == "1" else f"·{column}")
            for k, column in enumerate(effect.columns)
        )
        for effect in effects
    ]
    return "y = " + "\n  + ".join(parts) + "\n  + e,   e ~ N(0, σ²)"


def _lme4(fixed: tuple[FixedColumn, ...], effects: tuple[RandomEffect, ...]) -> str:
    means = " + ".join(column.column for column in fixed)
    random = " + ".join(f"({_bar(effect.columns)} | {effect.group})" for effect in effects)
    return f"lmer(y ~ 0 + {means}\n     + {random},\n     data = design, REML = TRUE)"


def _bar(columns: tuple[str, ...]) -> str:
    return " + ".join(columns if columns[0] == "1" else ("0", *columns))


def _statsmodels(
    fit: GenerationFit, fixed: tuple[FixedColumn, ...], effects: tuple[RandomEffect, ...]
) -> str:
    """A call of statsmodels' formula interface; empty where it cannot express the model."""
    if why_not_in_statsmodels(fit.model.model):
        return ""
    outermost = outermost_level(fit.model.model)
    terms = zip(effects, fit.model.model.terms, strict=True)
    own = [effect for effect, term in terms if term.level == outermost and term.copies is None]
    groups = max(own, key=lambda effect: len(effect.columns), default=None)
    inner = [effect for effect in effects if effect is not groups]
    components = ", ".join(f'"{effect.name}": "0 + {_component(effect)}"' for effect in inner)
    means = " + ".join(column.column for column in fixed)
    return (
        f'smf.mixedlm("y ~ 0 + {means}", design,\n'
        f'            groups="{groups.group if groups else "outermost"}",'
        f' re_formula="{_bar(groups.columns) if groups else "0"}",\n'
        f"            vc_formula={{{components}}}).fit(reml=True)"
    )


def _component(effect: RandomEffect) -> str:
    return f"C({effect.group})" + ("" if effect.columns == ("1",) else f":{effect.columns[0]}")


def fit_tables(fit: GenerationFit, results: CampaignResults) -> Iterator[tuple[str, bytes]]:
    """Yield name and bytes of the design and of both covariances of a fit, at full precision."""
    yield "design.csv", csv_bytes(design_table(fit, results))
    names = [f"f{k}" for k in range(1, len(fit.model.fixed.names) + 1)]
    yield "fixed_covariance.csv", csv_bytes(_matrix(names, fit.fit.coefficient_covariance))
    if fit.fit.method == "REML":
        labels, estimates, covariance = component_covariance(fit.fit)
        matrix = _matrix([f"c{k}" for k in range(1, len(labels) + 1)], covariance)
        matrix.insert(1, "component", list(labels))
        matrix.insert(2, "estimate", estimates)
        yield "component_covariance.csv", csv_bytes(matrix)


def _matrix(names: list[str], values: np.ndarray[Any, np.dtype[np.float64]]) -> pd.DataFrame:
    frame = pd.DataFrame(values, columns=names)
    frame.insert(0, "of", names)
    return frame


def design_table(fit: GenerationFit, results: CampaignResults) -> pd.DataFrame:
    """Return the design of a fit, one row a reading.

    Columns: ``row`` (line of ``tables/readings.csv`` after its head, from 1), generation, module, sensor,
    trial, ``y``, ``x``, ``z``, the fixed columns ``f1`` …, the unit of every random effect ``unit_…``
    (counted from 0), and ``column_…`` where an effect's column is neither 1 nor z.
    """
    model = fit.model
    assert results.calibration is not None
    place = results.calibration.readings.index.get_indexer(model.readings.index)
    design = model.readings[["generation", "module", "sensor", "trial"]].reset_index(drop=True)
    design.insert(0, "row", place + 1)
    design["y"], design["x"] = model.response, model.readings["x"].to_numpy(float)
    design["z"] = (design["x"] - model.centre) / model.scale
    further: dict[str, object] = {f"f{k}": c for k, c in enumerate(model.fixed.columns.T, 1)}
    for number, term in enumerate(model.model.terms):
        further[f"unit_{term.name}"] = effect_of_row(fit.fit, number)
        name = _columns_of(term)[0]
        if name.startswith("column_"):
            further[name] = term.columns[:, 0]
    return pd.concat([design, pd.DataFrame(further)], axis=1)
