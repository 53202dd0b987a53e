"""MODEL.md: the fitted models in symbols, with all that is needed to fit them again by another program.

Beside the text stand files of full precision for each fit: the design as a table that any package for mixed
models reads, the covariance of the fixed coefficients, and that of the estimated components.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd

from campaign.analyses.budget import DRAWS as DRAWS_OF_A_BUDGET
from campaign.analyses.hold_spread import fit_slopes
from campaign.analyses.layout import DRAWS as DRAWS_OF_LENGTHS
from campaign.analyses.results import CampaignResults
from campaign.analyses.variance import RATIO, SIGNAL
from campaign.analyses.variance_fit import GenerationFit
from campaign.methods.nested_in_statsmodels import effect_of_row, outermost_level, why_not_in_statsmodels
from campaign.methods.nested_inference import component_covariance
from campaign.methods.nested_model import NestedModelFit, RandomTerm
from campaign.pages.slugs import slug
from campaign.pages.tables import csv_bytes
from campaign.provenance.model_shapes import shape_files
from campaign.provenance.sealed_text import render_text
from campaign.recordings.recording import ReferenceQuantity

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
    rows, about
        Number of rows; what y, x and z are.
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
    rows: int
    about: str
    fixed: tuple[FixedColumn, ...]
    effects: tuple[RandomEffect, ...]
    residual_variance: float
    criterion: float
    evidence: tuple[tuple[str, str], ...]
    symbols: str
    lme4: str
    statsmodels: str
    statsmodels_says: str


@dataclass(frozen=True)
class ToldFit:
    """A fit to be told.

    Attributes
    ----------
    fit
        The engine's fit.
    title, slug
        What was fitted; the same as part of file names.
    about
        What y, x and z are.
    groups
        What each fixed column belongs to; empty where its name says it.
    rows
        Columns that say which row of the campaign each row of the design is; may be empty.
    """

    fit: NestedModelFit
    title: str
    slug: str
    about: str
    groups: tuple[str, ...] = ()
    rows: pd.DataFrame = field(default_factory=pd.DataFrame)


def model_files(results: CampaignResults) -> dict[str, bytes]:
    """Return ``MODEL.md`` and the tables of every fit; the text says so where nothing was fitted."""
    told = [*_main_fits(results), *_loop_fits(results), *_hold_fits(results), *_influence_fits(results)]
    words = [describe_fit(one) for one in told]
    shapes = {MODEL_FOLDER + name: content for name, content in shape_files(results.layout).items()}
    text = render_text(
        "MODEL.md",
        fits=words,
        seed=results.variance.seed if results.variance is not None else None,
        lines=results.calibration is not None,
        reference=results.readings.reference,
        results=results,
        shapes=shapes,
        model_folder=MODEL_FOLDER,
        earlier=[one.title for one in results.earlier],
        layout_draws=DRAWS_OF_LENGTHS,
        budget_draws=DRAWS_OF_A_BUDGET,
    )
    files = {MODEL_TEXT: text, **shapes}
    for one in told:
        files |= {f"{MODEL_FOLDER}{one.slug}/{name}": content for name, content in fit_tables(one)}
    return files


def _main_fits(results: CampaignResults) -> Iterator[ToldFit]:
    """The nested model of the readings: signal, and ratio to the session's zero signal."""
    if results.variance is None or results.calibration is None:
        return
    index = results.calibration.readings.index
    for what, fits in ((SIGNAL, results.variance.fits), (RATIO, results.variance.ratio_fits)):
        for fit in fits:
            yield told_fit(fit, what, index, results.readings.reference)


def told_fit(fit: GenerationFit, what: str, index: pd.Index, reference: ReferenceQuantity) -> ToldFit:
    """Return a fit of the readings to be told; *index* is that of the campaign's table of readings."""
    model = fit.model
    rows = model.readings[["generation", "module", "sensor", "trial"]].reset_index(drop=True)
    rows.insert(0, "row", index.get_indexer(model.readings.index) + 1)
    rows["x"] = model.readings["x"].to_numpy(float)
    unit = str(model.readings["unit"].iloc[0]) if what == SIGNAL else "1"
    return ToldFit(
        fit.fit,
        f"{_whose(fit.generation)}: {what}",
        f"{slug(fit.generation)}-{'signal' if what == SIGNAL else 'ratio'}",
        f"y is the {what} in {unit}; x is {reference.name} in {reference.unit};"
        f" z = (x − {model.centre}) / {model.scale}."
        " `row` counts the lines of `tables/readings.csv` after its head",
        model.fixed.groups,
        rows,
    )


def _whose(generation: str) -> str:
    return "all generations together" if generation == "all" else f"generation {generation}"


def _loop_fits(results: CampaignResults) -> Iterator[ToldFit]:
    for model, fit in results.hysteresis.fits if results.hysteresis is not None else ():
        yield ToldFit(
            fit,
            f"{_whose(model.generation)}: width of loops",
            f"{slug(model.generation)}-loops",
            "y is the signed width of a settled loop at mid range, in %FSO (`tables/loops.csv`)",
        )


def _hold_fits(results: CampaignResults) -> Iterator[ToldFit]:
    for model, fit, _ in fit_slopes(results.drift.holds) if results.drift is not None else ():
        yield ToldFit(
            fit,
            f"{_whose(model.generation)}: slope of holds",
            f"{slug(model.generation)}-holds",
            "y is the slope of a stretched hold, in %FSO a decade of time (`tables/holds.csv`)",
        )


def _influence_fits(results: CampaignResults) -> Iterator[ToldFit]:
    spreads = [("pressure in kPa", results.pressure.spread)] if results.pressure is not None else []
    if results.influences is not None:
        spreads += [(f"{one.influence} in {one.unit}", one.spread) for one in results.influences.results]
    for influence, spread in spreads:
        for generation, fit in spread.fits.items():
            yield ToldFit(
                fit,
                f"{_whose(generation)}: effect of {influence}",
                f"{slug(generation)}-{slug(influence)}",
                f"y is what a unit of {influence} reads as, sweep by sweep, over the SD of all of them; z,"
                " where there is one, is the length from the middle of those that were swept",
            )


def describe_fit(told: ToldFit) -> FitText:
    """Return one fit in words, symbols and formulas."""
    fit = told.fit
    fixed, effects = tuple(_fixed_columns(told)), tuple(_random_effects(fit))
    reason = why_not_in_statsmodels(fit.model)
    return FitText(
        title=told.title,
        slug=told.slug,
        rows=len(fit.model.response),
        about=told.about,
        fixed=fixed,
        effects=effects,
        residual_variance=float(fit.residual_variance),
        criterion=fit.criterion,
        evidence=tuple(_evidence(fit)),
        symbols=_symbols(effects, len(fixed)),
        lme4=_lme4(fixed, effects),
        statsmodels="" if reason else _statsmodels(fit, fixed, effects),
        statsmodels_says=reason,
    )


def _fixed_columns(told: ToldFit) -> Iterator[FixedColumn]:
    fit = told.fit
    names = fit.model.fixed_names
    errors = np.sqrt(np.diag(fit.coefficient_covariance))
    groups = told.groups or ("mean",) * len(names)
    parts = zip(names, groups, fit.coefficients, errors, strict=True)
    for number, (name, group, estimate, error) in enumerate(parts, 1):
        yield FixedColumn(f"f{number}", name, group, float(estimate), float(error))


def _random_effects(fit: NestedModelFit) -> Iterator[RandomEffect]:
    for number, term in enumerate(fit.model.terms):
        covariance = tuple(tuple(float(v) for v in row) for row in fit.covariances[term.name])
        count = len(np.unique(effect_of_row(fit, number)))
        yield RandomEffect(term.name, term.level, f"unit_{term.name}", _columns_of(term), count, covariance)


def _columns_of(term: RandomTerm) -> tuple[str, ...]:
    """Names of the columns of a random effect in the design table."""
    if term.columns.shape[1] == 2:
        return ("1", "z")
    return ("1",) if (term.columns == 1.0).all() else (f"column_{term.name}",)


def _evidence(found: NestedModelFit) -> Iterator[tuple[str, str]]:
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
    fit: NestedModelFit, fixed: tuple[FixedColumn, ...], effects: tuple[RandomEffect, ...]
) -> str:
    """A call of statsmodels' formula interface for a model that it can express."""
    outermost = outermost_level(fit.model)
    terms = zip(effects, fit.model.terms, strict=True)
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


def fit_tables(told: ToldFit) -> Iterator[tuple[str, bytes]]:
    """Yield name and bytes of the design and of both covariances of a fit, at full precision."""
    fit = told.fit
    yield "design.csv", csv_bytes(design_table(told))
    names = [f"f{k}" for k in range(1, len(fit.model.fixed_names) + 1)]
    yield "fixed_covariance.csv", csv_bytes(_matrix(names, fit.coefficient_covariance))
    if fit.method == "REML":
        labels, estimates, covariance = component_covariance(fit)
        matrix = _matrix([f"c{k}" for k in range(1, len(labels) + 1)], covariance)
        matrix.insert(1, "component", list(labels))
        matrix.insert(2, "estimate", estimates)
        yield "component_covariance.csv", csv_bytes(matrix)


def _matrix(names: list[str], values: np.ndarray[Any, np.dtype[np.float64]]) -> pd.DataFrame:
    frame = pd.DataFrame(values, columns=names)
    frame.insert(0, "of", names)
    return frame


def design_table(told: ToldFit) -> pd.DataFrame:
    """Return the design of a fit, one row an observation.

    Columns: which row of the campaign it is (where that is known), ``y``, ``z`` (the second column of an
    effect that is a line), the fixed columns ``f1`` …, the unit of every random effect ``unit_…`` (counted
    from 0), ``column_…`` where an effect's only column is not 1, and ``outermost`` where no effect of the
    outermost level names its units.
    """
    model = told.fit.model
    columns: dict[str, object] = {str(name): told.rows[name].to_numpy() for name in told.rows}
    columns["y"] = model.response
    for number, term in enumerate(model.terms):
        if term.columns.shape[1] == 2:
            columns["z"] = term.columns[:, 1]
        elif (name := _columns_of(term)[0]) != "1":
            columns[name] = term.columns[:, 0]
        columns[f"unit_{term.name}"] = effect_of_row(told.fit, number)
    if model.terms:
        outer = next(k for k, t in enumerate(model.terms) if t.level == outermost_level(model))
        columns["outermost"] = told.fit.compression.term_rows[outer].unit
    return pd.DataFrame({**columns, **{f"f{k}": c for k, c in enumerate(model.fixed.T, 1)}})
