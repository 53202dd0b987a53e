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

import numpy as np

from campaign.methods.batched_algebra import inverse_cholesky, product, product_transposed, transposed_product
from campaign.methods.nested_compression import Compression
from campaign.methods.nested_design import BoolArray, FloatArray
from campaign.methods.nested_transfer import Step, hand_over, in_seats, take_back

Factors = list[FloatArray]
"""For each random effect its relative factor θ (d, d, R), R replicates of the whole model."""


_THIN = 8
"""Slots from which the innermost level is kept thin: units hand over columns, not whole matrices."""


@dataclass(frozen=True)
class Elimination:
    """One level eliminated: what the way back needs.

    Attributes
    ----------
    before
        Cross-products (m, m, B) before; B = R · units, units running fastest.
    after
        The same after; None at a thin level, where they are not formed.
    half
        T (D, D, B): T T' = F (I + F'CF)⁻¹ F'.
    scaled
        Y (m, D, B); at a thin level its columns in the seats of their parents, (R, D, parents, seats, m').
    """

    before: FloatArray
    after: FloatArray | None
    half: FloatArray
    scaled: FloatArray


@dataclass(frozen=True)
class Eliminated:
    """The whole model eliminated down to its fixed part.

    Attributes
    ----------
    levels
        One elimination a level, innermost first.
    root
        (p + 1, p + 1, R): X'V⁻¹X with X'V⁻¹y and y'V⁻¹y, V in units of σ².
    log_determinant
        (R,) log|V|.
    """

    levels: tuple[Elimination, ...]
    root: FloatArray
    log_determinant: FloatArray


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
    compression: Compression, products: FloatArray, factors: Factors, handed: FloatArray | None = None
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
    handed
        (m', m', R · parents) the products added up in the parents' slots, where `products` are not the
        model's own and the innermost level is thin; None: they are added up here.
    """
    replicates = factors[0].shape[2] if factors else products.shape[2]
    steps = compression.steps
    current = products
    levels = []
    log_determinant = np.zeros(replicates)
    for depth, step in enumerate(steps):
        if depth == 0 and is_thin(compression):
            whole = compression.handed if products is compression.products else handed
            if whole is None:
                whole = hand_over(step, products, products.shape[2] // step.units)
            level, logs, current = _eliminate_thin(compression, products, whole, factors, replicates)
        else:
            if depth == 0 and current.shape[2] != replicates * step.units:
                current = np.tile(current, (1, 1, replicates))
            level, logs = _eliminate_level(step, current, factors, replicates)
            current = hand_over(step, _formed(level), replicates)
        log_determinant += logs
        levels.append(level)
    return Eliminated(tuple(levels), current, log_determinant)


def is_thin(compression: Compression) -> bool:
    """Whether the innermost units hand over columns: many slots, few random columns, parents of like size."""
    if not compression.steps:
        return False
    step, slots = compression.steps[0], compression.products.shape[0]
    return (
        slots >= _THIN
        and 2 * len(step.random) < slots
        and step.seats * step.parent_units <= 3 * step.units
        and step.seats * len(step.random) <= 2 * step.parent_slots
    )


def _formed(level: Elimination) -> FloatArray:
    if level.after is None:
        raise ValueError("a thin level has no cross-products after its elimination")
    return level.after


def _eliminate_thin(
    compression: Compression, products: FloatArray, whole: FloatArray, factors: Factors, replicates: int
) -> tuple[Elimination, FloatArray, FloatArray]:
    """Eliminate the innermost level and hand it over as whole − Y Y', Y in the parents' slots.

    Only the half T changes from evaluation to evaluation: Y is a sum of the units' columns, seated once.
    """
    step = compression.steps[0]
    half, logs = _half(step, _thin_corner(step, products, replicates), factors, replicates)
    scaled = _mixed(_thin_columns(compression, products), in_seats(step, half, replicates))
    lost = sum(np.matmul(part.transpose(0, 1, 3, 2), part) for part in scaled.swapaxes(0, 1))
    current = _repeated(whole, step.parent_units, replicates) - np.moveaxis(
        np.reshape(lost, (-1, step.parent_slots, step.parent_slots)), 0, 2
    )
    return Elimination(products, None, half, scaled), logs, np.ascontiguousarray(current)


def _thin_corner(step: Step, products: FloatArray, replicates: int) -> FloatArray:
    """Cross-products of the random slots of every unit, (D, D, R · units)."""
    return _repeated(products[np.ix_(step.random, step.random)], step.units, replicates)


def _thin_columns(compression: Compression, products: FloatArray) -> FloatArray:
    """Random columns of every unit in the seats of its parent, (1 or R, D, parents, seats, m')."""
    return compression.seated if products is compression.products else compression.seated_of(products)


def _mixed(columns: FloatArray, weights: FloatArray) -> FloatArray:
    """Σⱼ columnsⱼ weightsⱼₖ for every k, as `columns`; weights (R, D, D, parents, seats, 1)."""
    size = columns.shape[1]
    out = np.empty((len(weights), size, *columns.shape[2:]))
    for k in range(size):
        np.multiply(columns[:, 0], weights[:, 0, k], out=out[:, k])
        for j in range(1, size):
            out[:, k] += columns[:, j] * weights[:, j, k]
    return out


def _repeated(stack: FloatArray, units: int, replicates: int) -> FloatArray:
    return stack if stack.shape[2] == units * replicates else np.tile(stack, (1, 1, replicates))


def _level_factor(step: Step, factors: Factors, replicates: int) -> FloatArray:
    """Block-diagonal factor of all random columns of a level, (D, D, 1 or R · units)."""
    size = len(step.random)
    out = np.zeros((size, size, replicates))
    for block in step.blocks:
        for copy in range(block.copies):
            at = slice(block.start + copy * block.size, block.start + (copy + 1) * block.size)
            out[at, at] = factors[block.term]
    return out if replicates == 1 else np.repeat(out, step.units, axis=2)


def _half(step: Step, corner: FloatArray, factors: Factors, replicates: int) -> tuple[FloatArray, FloatArray]:
    """T (D, D, B) of a level whose random slots have cross-products `corner`, and its log|V| (R,)."""
    factor = _level_factor(step, factors, replicates)
    inner = transposed_product(factor, product(corner, factor))
    for k in range(len(inner)):
        inner[k, k] += 1.0
    upper, logs = inverse_cholesky(inner)
    return product(factor, upper), logs.reshape(replicates, -1).sum(axis=1)


def _eliminate_level(
    step: Step, products: FloatArray, factors: Factors, replicates: int
) -> tuple[Elimination, FloatArray]:
    columns = products[:, step.random]
    half, logs = _half(step, columns[step.random], factors, replicates)
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
    for depth in reversed(range(len(compression.steps))):
        step, level = compression.steps[depth], eliminated.levels[depth]
        if level.after is None:
            _add_thin_cones(compression, level, adjoint, out, replicates)
            break
        adjoint = take_back(step, adjoint, len(level.after), replicates)
        columns = level.after[:, step.random]
        lost = transposed_product(columns, product(adjoint, columns))
        _add_cones(step, columns[step.random], lost, out, replicates)
        if depth:
            adjoint = _before_level(step, level, adjoint)
    for theta, cone, mine in zip(factors, out.cones, out.factors, strict=True):
        mine[:] = 2.0 * product(cone, theta)
    return out


def _add_thin_cones(
    compression: Compression, level: Elimination, adjoint: FloatArray, out: Gradient, replicates: int
) -> None:
    """The cones of the innermost level where its units are kept thin; `adjoint` is that of their parents."""
    step = compression.steps[0]
    corner = _thin_corner(step, level.before, replicates)
    own = product(corner, level.half)
    after = _thin_columns(compression, level.before) - _mixed(
        level.scaled, in_seats(step, own.transpose(1, 0, 2), replicates)
    )
    slots, size = step.parent_slots, len(step.random)
    shape = (replicates, 1, step.parent_units, slots, slots)
    pulled = np.matmul(after, np.moveaxis(adjoint, 2, 0).reshape(shape))
    flat = (replicates, size, -1)
    lost = np.matmul(after.reshape(flat), pulled.reshape(flat).transpose(0, 2, 1)).transpose(1, 2, 0)
    _add_cones(step, corner - product_transposed(own, own), lost, out, replicates)


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
