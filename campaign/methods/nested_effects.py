"""Predicted random effects of a nested fit, their prediction errors, and residuals.

The elimination is run backwards: the fixed part is known with its covariance, then each level's effects given
what lies outside them, down to the innermost units. The covariance is that of the prediction error û − u and
includes the uncertainty of the fixed part (Henderson's C matrix), at the estimated variances.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from campaign.methods.batched_algebra import product, product_transposed
from campaign.methods.nested_criterion import Elimination, eliminate, value_of
from campaign.methods.nested_design import FloatArray, IntArray
from campaign.methods.nested_fit import NestedModelFit
from campaign.methods.nested_many_slots import ManySlotsLevel
from campaign.methods.nested_transfer import Step


@dataclass(frozen=True)
class RandomEffects:
    """Predicted effects of one random term.

    Attributes
    ----------
    name, level
        Name of the term and of its level.
    first_row
        (n,) a row of the data that belongs to the effect, for looking up names.
    units
        (n, depth) codes of the unit, outermost level first.
    copies
        (n,) code of the copy as the model gave it; 0 where there are none.
    estimates
        (n, d) best linear unbiased predictions, in the user's columns.
    covariances
        (n, d, d) covariance of the prediction errors.
    """

    name: str
    level: str
    first_row: IntArray
    units: IntArray
    copies: IntArray
    estimates: FloatArray
    covariances: FloatArray


@dataclass
class _Known:
    """Coefficients of a level's slots: mean (m, B) and error covariance in units of σ² (m, m, B)."""

    mean: FloatArray
    covariance: FloatArray


def random_effects(fit: NestedModelFit) -> dict[str, RandomEffects]:
    """Predicted effects of every random term.

    Returns
    -------
    dict
        Name of the term → its effects, sorted by unit and copy.

    References
    ----------
    Henderson (1975), Biometrics 31, 423; Robinson (1991), Statistical Science 6, 15.
    """
    compression = fit.compression
    factors = fit.layout.factors(fit.vector[:, None])
    eliminated = eliminate(compression, compression.products, factors)
    value = value_of(compression, eliminated, restricted=fit.restricted)
    known = _Known(value.coefficients, value.unscaled_covariance.transpose(1, 2, 0))
    found: dict[int, tuple[FloatArray, FloatArray]] = {}
    for step, level in reversed(list(zip(compression.steps, eliminated.levels, strict=True))):
        known = _handed_down(step, known, len(level.before) - 1)
        known, effects, errors = _effects_of_level(step, level, known)
        for block in step.blocks:
            found[block.term] = _of_block(effects, errors, block.start, block.size, block.copies)
    return {
        term.name: _in_user_columns(fit, number, *found[number])
        for number, term in enumerate(fit.model.terms)
    }


def _handed_down(step: Step, parent: _Known, slots: int) -> _Known:
    """Coefficients of the parents' slots as coefficients of the children's."""
    mean = np.zeros((slots, step.units))
    covariance = np.zeros((slots, slots, step.units))
    for transfer in step.transfers:
        source, target, above = transfer.source[:-1], transfer.target[:-1], transfer.parent_of_child
        children = np.arange(step.units) if transfer.children is None else transfer.children
        scale = transfer.scale_of_slots()[:-1]
        for s, t, f in zip(source, target, scale, strict=True):
            mean[s, children] += f * parent.mean[t, above]
            for s2, t2, f2 in zip(source, target, scale, strict=True):
                covariance[s, s2, children] += f * f2 * parent.covariance[t, t2, above]
    return _Known(mean, covariance)


def _effects_of_level(
    step: Step, level: Elimination | ManySlotsLevel, outer: _Known
) -> tuple[_Known, FloatArray, FloatArray]:
    """What is then known of the slots, the level's effects (D, B) and their error covariances (D, D, B)."""
    gain = product(product_transposed(level.half, level.half), level.before[step.random])
    slots = gain[:, :-1]
    effects = gain[:, -1] - product(slots, outer.mean[:, None])[:, 0]
    mean = outer.mean.copy()
    spread = product(slots, outer.covariance)
    errors = product_transposed(level.half, level.half) + product_transposed(spread, slots)
    covariance = outer.covariance.copy()
    for k, slot in enumerate(step.random):
        mean[slot] += effects[k]
    for k, slot in enumerate(step.random):
        covariance[slot] -= spread[k]
        covariance[:, slot] -= spread[k]
    for k, slot in enumerate(step.random):
        for j, other in enumerate(step.random):
            covariance[slot, other] += errors[k, j]
    return _Known(mean, covariance), effects, errors


def _of_block(
    effects: FloatArray, errors: FloatArray, start: int, size: int, copies: int
) -> tuple[FloatArray, FloatArray]:
    """Effects (units, copies, d) and covariances (units, copies, d, d) of one random term."""
    places = [slice(start + copy * size, start + (copy + 1) * size) for copy in range(copies)]
    return (
        np.stack([effects[at] for at in places]).transpose(2, 0, 1),
        np.stack([errors[at, at] for at in places]).transpose(3, 0, 1, 2),
    )


def _in_user_columns(
    fit: NestedModelFit, number: int, effects: FloatArray, errors: FloatArray
) -> RandomEffects:
    compression, term = fit.compression, fit.model.terms[number]
    rows = compression.term_rows[number]
    back = np.linalg.inv(compression.columns.term_bases[number])
    _, first = np.unique(rows.unit * rows.copies + rows.copy, return_index=True)
    unit, copy = rows.unit[first], rows.copy[first]
    return RandomEffects(
        name=term.name,
        level=term.level,
        first_row=first.astype(np.int64),
        units=compression.unit_codes[term.level][unit],
        copies=np.zeros(len(first), dtype=np.int64)
        if term.copies is None
        else np.asarray(term.copies)[first],
        estimates=effects[unit, copy] @ back.T,
        covariances=fit.residual_variance * back @ errors[unit, copy] @ back.T,
    )


def marginal_residuals(fit: NestedModelFit) -> FloatArray:
    """Residuals about the fixed part, y − X β̂, (N,)."""
    return np.asarray(fit.model.response - fit.model.fixed @ fit.coefficients)


def conditional_residuals(
    fit: NestedModelFit, predicted: Mapping[str, RandomEffects] | None = None
) -> FloatArray:
    """Residuals about fixed part and predicted effects, y − X β̂ − Σ Z û, (N,).

    *predicted* are the :func:`random_effects` where they are known already.
    """
    residuals = marginal_residuals(fit)
    for number, effects in enumerate((predicted or random_effects(fit)).values()):
        term, rows = fit.model.terms[number], fit.compression.term_rows[number]
        table = np.zeros((rows.units * rows.copies, term.columns.shape[1]))
        table[(rows.unit * rows.copies + rows.copy)[effects.first_row]] = effects.estimates
        residuals = residuals - np.einsum(
            "nd,nd->n", term.columns, table[rows.unit * rows.copies + rows.copy]
        )
    return residuals
