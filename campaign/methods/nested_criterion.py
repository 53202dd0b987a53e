"""The profiled restricted likelihood of a compressed nested model, and its exact gradient.

With θ the factor of a random effect's covariance in units of the residual SD, one level is eliminated by

    C = Z'A Z,   I + F'C F = L L',   T = F L'⁻¹,   Y = A Z T,   A ← A − Y Y',   log|V| += 2 log|L|

where A holds a unit's cross-products, Z picks its random slots and F = blockdiag(θ …). What is left is added
up over the units of a parent. After the outermost level A holds X'V⁻¹X, X'V⁻¹y and y'V⁻¹y. Nothing is
inverted that could be singular: I + F'C F has no eigenvalue below one, and θ = 0 is an ordinary value.

The gradient runs the same steps backwards. Its derivative with respect to Ψ = θθ' is symmetric; at a minimum
over the cone of semidefinite matrices it must be semidefinite itself, which `nested_optimiser` uses as its
certificate.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import cast

import numpy as np

from campaign.methods.batched_algebra import product, product_transposed, transposed_product
from campaign.methods.nested_compression import Compression
from campaign.methods.nested_design import BoolArray, FloatArray
from campaign.methods.nested_factors import Factors, half_of
from campaign.methods.nested_many_slots import (
    Innermost,
    ManySlotsLevel,
    cones_of_many_slots,
    eliminate_many_slots,
    innermost_of,
)
from campaign.methods.nested_transfer import Step, hand_over, take_back


@dataclass(frozen=True)
class Elimination:
    """One level eliminated: what the way back needs.

    Attributes
    ----------
    before
        Cross-products (m, m, B) before; B = R · units, units running fastest.
    after
        The same after.
    half
        T (D, D, B): T T' = F (I + F'CF)⁻¹ F'.
    scaled
        Y (m, D, B).
    """

    before: FloatArray
    after: FloatArray
    half: FloatArray
    scaled: FloatArray


@dataclass(frozen=True)
class Eliminated:
    """The whole model eliminated down to its fixed part.

    Attributes
    ----------
    levels
        One elimination a level, innermost first.
    innermost
        What the innermost units gave, where they have many slots.
    root
        (p + 1, p + 1, R): X'V⁻¹X with X'V⁻¹y and y'V⁻¹y, V in units of σ².
    log_determinant
        (R,) log|V|.
    """

    levels: tuple[Elimination | ManySlotsLevel, ...]
    root: FloatArray
    log_determinant: FloatArray
    innermost: Innermost | None = None


@dataclass(frozen=True)
class Value:
    """Criterion of R replicates.

    Attributes
    ----------
    criterion
        (R,) −2 log restricted (or full) likelihood, in the scaled columns.
    residual_square
        (R,) r = min over β of (y − Xβ)'V⁻¹(y − Xβ).
    coefficients
        (p, R) β in scaled columns, after the least-squares fit was taken off.
    unscaled_covariance
        (R, p, p) (X'V⁻¹X)⁻¹ in scaled columns.
    """

    criterion: FloatArray
    residual_square: FloatArray
    coefficients: FloatArray
    unscaled_covariance: FloatArray


@dataclass(frozen=True)
class Gradient:
    """Derivatives of the criterion.

    Attributes
    ----------
    factors
        For each random effect ∂/∂θ (d, d, R).
    cones
        For each random effect the symmetric ∂/∂Ψ (d, d, R).
    information
        For each random effect the part of `cones` that the determinant contributes: its natural scale.
    """

    factors: Factors
    cones: Factors
    information: Factors


def eliminate(
    compression: Compression, products: FloatArray, factors: Factors, innermost: Innermost | None = None
) -> Eliminated:
    """Eliminate all random effects, level by level from the innermost.

    Parameters
    ----------
    compression
        The model.
    products
        (m, m, R · units) cross-products of the innermost units, or of one replicate (m, m, units) for all.
    factors
        θ (d, d, R) of each random effect.
    innermost
        What :func:`~campaign.methods.nested_many_slots.innermost_of` makes of `products`, where these are not
        the model's own and units have many slots; None: it is made here.
    """
    ready = compression.many_slots
    if ready is not None:
        own = products is compression.products
        used = innermost or (ready.innermost if own else innermost_of(compression.steps[0], products))
        found, root, logs = eliminate_many_slots(ready, used, factors)
        return Eliminated(found, root, logs, used)
    replicates = factors[0].shape[2] if factors else products.shape[2]
    steps = compression.steps
    current = products
    levels = []
    log_determinant = np.zeros(replicates)
    for depth, step in enumerate(steps):
        if depth == 0 and current.shape[2] != replicates * step.units:
            current = np.tile(current, (1, 1, replicates))
        level, logs = _eliminate_level(step, current, factors, replicates)
        current = hand_over(step, level.after, replicates)
        log_determinant += logs
        levels.append(level)
    return Eliminated(tuple(levels), current, log_determinant)


def _eliminate_level(
    step: Step, products: FloatArray, factors: Factors, replicates: int
) -> tuple[Elimination, FloatArray]:
    columns = products[:, step.random]
    half, logs = half_of(step, columns[step.random], factors, replicates)
    scaled = product(columns, half)
    return Elimination(products, products - product_transposed(scaled, scaled), half, scaled), logs


def value_of(
    compression: Compression,
    eliminated: Eliminated,
    *,
    restricted: bool,
    residual_variance: FloatArray | None = None,
) -> Value:
    """Criterion from an eliminated model.

    Parameters
    ----------
    compression
        The model.
    eliminated
        The model at the factors in question.
    restricted
        REML if True, maximum likelihood if False.
    residual_variance
        (R,) σ²; None: the σ² that minimises the criterion.
    """
    p = compression.fixed
    root = eliminated.root.transpose(2, 0, 1)
    square, cross = root[:, :p, :p], root[:, :p, p]
    square, unusable = _usable(square)
    lower = np.linalg.cholesky(square)
    inverse_lower = np.linalg.inv(lower)
    inverse = inverse_lower.transpose(0, 2, 1) @ inverse_lower
    coefficients = (inverse @ cross[:, :, None])[:, :, 0]
    least = 1e-20 * compression.total + 1e-290  # a perfect fit must not divide by zero
    residual_square = np.maximum(root[:, p, p] - (coefficients * cross).sum(axis=1), least)
    degrees = compression.rows - (p if restricted else 0)
    variance = residual_square / degrees if residual_variance is None else residual_variance
    criterion = (
        eliminated.log_determinant + degrees * np.log(2.0 * np.pi * variance) + residual_square / variance
    )
    if restricted:
        criterion = criterion + 2.0 * np.log(np.diagonal(lower, axis1=1, axis2=2)).sum(axis=1)
    criterion = np.where(unusable | ~np.isfinite(criterion), np.inf, criterion)
    return Value(criterion, residual_square, coefficients.T, inverse)


def _usable(square: FloatArray) -> tuple[FloatArray, BoolArray]:
    """X'V⁻¹X with the unit matrix where rounding has left it indefinite, and where that was."""
    p = square.shape[1]
    diagonal = np.diagonal(square, axis1=1, axis2=2)
    unusable = np.asarray(~(np.isfinite(square).all(axis=(1, 2)) & (diagonal > 0.0).all(axis=1)))
    try:
        np.linalg.cholesky(square)
    except np.linalg.LinAlgError:
        finite = np.where(unusable[:, None, None], np.eye(p), square)
        unusable |= np.linalg.eigvalsh(finite)[:, 0] <= 0.0
    return np.where(unusable[:, None, None], np.eye(p), square) if unusable.any() else square, unusable


def gradient_of(
    compression: Compression,
    eliminated: Eliminated,
    value: Value,
    factors: Factors,
    *,
    restricted: bool,
    residual_variance: FloatArray | None = None,
) -> Gradient:
    """Derivative of the criterion with respect to every factor, by the steps of the elimination backwards.

    Parameters as in :func:`value_of`, whose result is `value`. Where `residual_variance` is given the
    derivative is at fixed σ².
    """
    p = compression.fixed
    replicates = len(value.criterion)
    degrees = compression.rows - (p if restricted else 0)
    weight = degrees / value.residual_square if residual_variance is None else 1.0 / residual_variance
    ends = np.vstack([-value.coefficients, np.ones(replicates)])
    adjoint = weight * ends[:, None] * ends[None, :]
    if restricted:
        adjoint[:p, :p] += value.unscaled_covariance.transpose(1, 2, 0)
    out = Gradient(*([np.zeros_like(f) for f in factors] for _ in range(3)))
    if compression.many_slots is not None and eliminated.innermost is not None:
        levels = cast(tuple[ManySlotsLevel, ...], eliminated.levels)
        for found in cones_of_many_slots(compression.many_slots, eliminated.innermost, levels, adjoint):
            _add_cones(*found, out, replicates)
    else:
        _add_all_cones(
            compression, cast(tuple[Elimination, ...], eliminated.levels), adjoint, out, replicates
        )
    for theta, cone, mine in zip(factors, out.cones, out.factors, strict=True):
        mine[:] = 2.0 * product(cone, theta)
    return out


def _add_all_cones(
    compression: Compression,
    levels: tuple[Elimination, ...],
    adjoint: FloatArray,
    out: Gradient,
    replicates: int,
) -> None:
    for depth in reversed(range(len(compression.steps))):
        step, level = compression.steps[depth], levels[depth]
        adjoint = take_back(step, adjoint, len(level.after), replicates)
        columns = level.after[:, step.random]
        lost = transposed_product(columns, product(adjoint, columns))
        _add_cones(step, columns[step.random], lost, out, replicates)
        if depth:
            adjoint = _before_level(step, level, adjoint)


def _add_cones(step: Step, determinant: FloatArray, lost: FloatArray, out: Gradient, replicates: int) -> None:
    """∂/∂Ψ of a level: after_zz − after_z' adjoint after_z, summed over units and copies."""
    for block in step.blocks:
        for copy in range(block.copies):
            at = slice(block.start + copy * block.size, block.start + (copy + 1) * block.size)
            shape = (block.size, block.size, replicates, -1)
            information = determinant[at, at].reshape(shape).sum(axis=3)
            out.cones[block.term][:] += information - lost[at, at].reshape(shape).sum(axis=3)
            out.information[block.term][:] += information


def _before_level(step: Step, level: Elimination, adjoint: FloatArray) -> FloatArray:
    """Adjoint before a level from the adjoint after it: H adjoint H' plus the determinant's part."""
    back = product_transposed(level.half, level.scaled)
    moved = product_transposed(adjoint, back)
    corner = product(back, moved) + product_transposed(level.half, level.half)
    out = adjoint.copy()
    for k, slot in enumerate(step.random):
        out[:, slot] -= moved[:, k]
        out[slot, :] -= moved[:, k]
    if len(np.unique(step.random)) == len(step.random):
        out[np.ix_(step.random, step.random)] += corner
        return out
    for i, a in enumerate(step.random):
        for j, b in enumerate(step.random):
            out[a, b] += corner[i, j]
    return out
