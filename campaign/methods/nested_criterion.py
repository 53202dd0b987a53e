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
from campaign.methods.nested_compression import Compression, Step, Transfer
from campaign.methods.nested_design import BoolArray, FloatArray, IntArray

Factors = list[FloatArray]
"""For each random effect its relative factor θ (d, d, R), R replicates of the whole model."""


@dataclass(frozen=True)
class Elimination:
    """One level eliminated: what the way back needs.

    Attributes
    ----------
    before, after
        Cross-products (m, m, B) before and after; B = R · units, units running fastest.
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


def eliminate(compression: Compression, products: FloatArray, factors: Factors) -> Eliminated:
    """Eliminate all random effects, level by level from the innermost.

    Parameters
    ----------
    compression
        The model.
    products
        (m, m, R · units) cross-products of the innermost units, or of one replicate (m, m, units) used for
        all.
    factors
        θ (d, d, R) of each random effect.
    """
    replicates = factors[0].shape[2] if factors else products.shape[2]
    current = products
    if compression.steps and products.shape[2] != replicates * compression.steps[0].units:
        current = np.tile(products, (1, 1, replicates))
    levels = []
    log_determinant = np.zeros(replicates)
    for step in compression.steps:
        level, logs = _eliminate_level(step, current, factors, replicates)
        log_determinant += logs
        levels.append(level)
        current = _hand_over(step, level.after, replicates)
    return Eliminated(tuple(levels), current, log_determinant)


def _level_factor(step: Step, factors: Factors, replicates: int) -> FloatArray:
    """Block-diagonal factor of all random columns of a level, (D, D, 1 or R · units)."""
    size = len(step.random)
    out = np.zeros((size, size, replicates))
    for block in step.blocks:
        for copy in range(block.copies):
            at = slice(block.start + copy * block.size, block.start + (copy + 1) * block.size)
            out[at, at] = factors[block.term]
    return out if replicates == 1 else np.repeat(out, step.units, axis=2)


def _eliminate_level(
    step: Step, products: FloatArray, factors: Factors, replicates: int
) -> tuple[Elimination, FloatArray]:
    factor = _level_factor(step, factors, replicates)
    columns = products[:, step.random]
    inner = transposed_product(factor, product(columns[step.random], factor))
    for k in range(len(inner)):
        inner[k, k] += 1.0
    upper, logs = inverse_cholesky(inner)
    half = product(factor, upper)
    scaled = product(columns, half)
    after = products - product_transposed(scaled, scaled)
    return Elimination(products, after, half, scaled), logs.reshape(replicates, -1).sum(axis=1)


def _hand_over(step: Step, after: FloatArray, replicates: int) -> FloatArray:
    """Add what is left of the units to their parents, slot by slot."""
    split = after.reshape(after.shape[0], after.shape[1], replicates, step.units)
    if len(step.transfers) == 1 and len(step.transfers[0].source) == step.parent_slots:
        only = step.transfers[0]
        return _summed(_picked(split, only), only).reshape(step.parent_slots, step.parent_slots, -1)
    out = np.zeros((step.parent_slots, step.parent_slots, replicates, step.parent_units))
    for transfer in step.transfers:
        added = _summed(_picked(split, transfer), transfer)
        if not transfer.every_parent:
            spread = np.zeros((*added.shape[:3], step.parent_units))
            spread[..., transfer.parents] = added
            added = spread
        out[np.ix_(transfer.target, transfer.target)] += added
    return out.reshape(step.parent_slots, step.parent_slots, -1)


def _picked(split: FloatArray, transfer: Transfer) -> FloatArray:
    """The children of a transfer with the slots they hand over, (k, k, R, children)."""
    if transfer.children is not None:
        split = split[..., transfer.children]
    if not _in_order(transfer.source, len(split)):
        split = split[transfer.source[:, None], transfer.source[None, :]]
    return split if transfer.scale is None else split * _squared_scale(transfer.scale)


def _in_order(source: IntArray, slots: int) -> bool:
    return len(source) == slots and bool((source == np.arange(slots)).all())


def _summed(block: FloatArray, transfer: Transfer) -> FloatArray:
    """Sum over the children of each parent, (k, k, R, parents)."""
    each = transfer.children_each
    if each == 1:
        return block
    if 1 < each <= 8:
        total = block[..., 0::each] + block[..., 1::each]
        for k in range(2, each):
            total += block[..., k::each]
        return total
    return np.add.reduceat(block, transfer.starts, axis=3)


def _squared_scale(scale: FloatArray) -> FloatArray:
    return (scale[:, None] * scale[None, :])[:, :, None, :]


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
    residual_square = np.maximum(root[:, p, p] - (coefficients * cross).sum(axis=1), np.finfo(float).tiny)
    degrees = compression.rows - (p if restricted else 0)
    variance = residual_square / degrees if residual_variance is None else residual_variance
    criterion = (
        eliminated.log_determinant + degrees * np.log(2.0 * np.pi * variance) + residual_square / variance
    )
    if restricted:
        criterion = criterion + 2.0 * np.log(np.diagonal(lower, axis1=1, axis2=2)).sum(axis=1)
    criterion = np.where(unusable, np.inf, criterion)
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
        adjoint = _take_back(step, adjoint, len(level.after), replicates)
        _add_cones(step, level, adjoint, out, replicates)
        if depth:
            adjoint = _before_level(step, level, adjoint)
    for theta, cone, mine in zip(factors, out.cones, out.factors, strict=True):
        mine[:] = 2.0 * product(cone, theta)
    return out


def _take_back(step: Step, adjoint: FloatArray, slots: int, replicates: int) -> FloatArray:
    """Adjoint of :func:`_hand_over`."""
    parents = adjoint.reshape(step.parent_slots, step.parent_slots, replicates, step.parent_units)
    out = np.zeros((slots, slots, replicates, step.units))
    for transfer in step.transfers:
        given = parents
        if not _in_order(transfer.target, step.parent_slots):
            given = parents[np.ix_(transfer.target, transfer.target)]
        if not (transfer.every_parent and transfer.children_each == 1):
            given = given[..., transfer.parent_of_child]
        if transfer.scale is not None:
            given = given * _squared_scale(transfer.scale)
        received = _gathered(_gathered(given, transfer.source, slots).swapaxes(0, 1), transfer.source, slots)
        if transfer.children is None and len(step.transfers) == 1:
            return received.reshape(slots, slots, -1)
        out[..., slice(None) if transfer.children is None else transfer.children] += received
    return out.reshape(slots, slots, -1)


def _gathered(given: FloatArray, source: IntArray, slots: int) -> FloatArray:
    """Add up along the first axis what belongs to the same slot."""
    if _in_order(source, slots):
        return given
    out = np.zeros((slots, *given.shape[1:]))
    if len(np.unique(source)) == len(source):
        out[source] = given
        return out
    for k, slot in enumerate(source):
        out[slot] += given[k]
    return out


def _add_cones(step: Step, level: Elimination, adjoint: FloatArray, out: Gradient, replicates: int) -> None:
    """∂/∂Ψ of a level: after_zz − after_z' adjoint after_z, summed over units and copies."""
    columns = level.after[:, step.random]
    determinant = columns[step.random]
    cone = determinant - transposed_product(columns, product(adjoint, columns))
    for block in step.blocks:
        for copy in range(block.copies):
            at = slice(block.start + copy * block.size, block.start + (copy + 1) * block.size)
            shape = (block.size, block.size, replicates, step.units)
            out.cones[block.term][:] += cone[at, at].reshape(shape).sum(axis=3)
            out.information[block.term][:] += determinant[at, at].reshape(shape).sum(axis=3)


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
