"""Elimination of units that have many slots: units first in memory, so that matrices meet BLAS as they are.

The steps are those of :mod:`campaign.methods.nested_criterion`. Of the innermost units nothing but T changes
from evaluation to evaluation: they are handed over as they are, once and for all, and their few random
columns A Z sit beside each other in the slots of their parents, which lose Σ (A Z T)(A Z T)'.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from campaign.methods.batched_algebra import inverse_cholesky, product, product_transposed, transposed_product
from campaign.methods.nested_design import FloatArray, IntArray
from campaign.methods.nested_factors import Factors, half_of, level_factor
from campaign.methods.nested_routes import Routes, routes_of
from campaign.methods.nested_transfer import Step

FEWEST = 8
"""Slots of the innermost units from which this way is faster."""


@dataclass(frozen=True)
class Innermost:
    """What the innermost units give, whatever the parameters.

    Attributes
    ----------
    stack
        (R, units, m, m) their cross-products.
    whole
        (R, parents, m', m') the same added up in the slots of their parents.
    columns
        (R, parents, seats, D, m') A Z of every unit among the units of its parent; empty seats are zero.
    """

    stack: FloatArray
    whole: FloatArray
    columns: FloatArray

    def of(self, which: IntArray) -> Innermost:
        """Return those of some replicates."""
        return Innermost(self.stack[which], self.whole[which], self.columns[which])


@dataclass(frozen=True)
class ManySlots:
    """A model whose units have many slots, ready to be eliminated.

    Attributes
    ----------
    steps
        Levels from the innermost outwards.
    routes
        The ways of every level but the innermost.
    innermost
        Of the model's own response.
    """

    steps: tuple[Step, ...]
    routes: tuple[Routes, ...]
    innermost: Innermost


@dataclass(frozen=True)
class ManySlotsLevel:
    """One level eliminated.

    Attributes
    ----------
    stack
        (R, units, m, m) cross-products before.
    root
        T (R, units, D, D): T T' = F (I + F'CF)⁻¹ F'.
    """

    stack: FloatArray
    root: FloatArray

    @property
    def before(self) -> FloatArray:
        """Cross-products before as other models have them, (m, m, R · units)."""
        return _matrices_last(self.stack)

    @property
    def half(self) -> FloatArray:
        """T as other models have it, (D, D, R · units)."""
        return _matrices_last(self.root)


def has_many_slots(steps: tuple[Step, ...], slots: int) -> bool:
    """Whether the innermost units have many slots, few of them random, and parents of like size.

    Parameters
    ----------
    steps
        Levels from the innermost outwards.
    slots
        Of the innermost units, the response among them.
    """
    if not steps or slots < FEWEST:
        return False
    step = steps[0]
    return (
        2 * len(step.random) < slots
        and step.seats * step.parent_units <= 3 * step.units
        and step.seats * len(step.random) <= 2 * step.parent_slots
        and all((above.random == np.arange(len(above.random))).all() for above in steps[1:])
    )


def many_slots(steps: tuple[Step, ...], products: FloatArray) -> ManySlots:
    """Make a model ready, from the cross-products (m, m, units) of its innermost units."""
    pairs = zip(steps[1:], steps[:-1], strict=True)
    return ManySlots(
        steps,
        tuple(routes_of(step, below.parent_slots) for step, below in pairs),
        innermost_of(steps[0], products),
    )


def innermost_of(step: Step, products: FloatArray) -> Innermost:
    """Return what the innermost units give, for cross-products (m, m, R · units)."""
    stack = _units_first(products, products.shape[2] // step.units)
    whole = routes_of(step, len(products)).hand_over(stack)
    return Innermost(stack, whole, _seated(step, stack[:, :, step.random]))


def _seated(step: Step, columns: FloatArray) -> FloatArray:
    """Columns (R, units, D, m) in their parents' slots and seats, (R, parents, seats, D, m')."""
    replicates, _, size, _ = columns.shape
    out = np.zeros((replicates, step.parent_units * step.seats, size, step.parent_slots))
    for transfer in step.transfers:
        children = np.arange(step.units) if transfer.children is None else transfer.children
        given = columns[:, children][..., transfer.source] * transfer.scale_of_slots().T[:, None]
        out[:, step.seat[children][:, None, None], np.arange(size)[:, None], transfer.target] = given
    return out.reshape(replicates, step.parent_units, step.seats, size, step.parent_slots)


def eliminate_many_slots(
    model: ManySlots, innermost: Innermost, factors: Factors
) -> tuple[tuple[ManySlotsLevel, ...], FloatArray, FloatArray]:
    """Eliminate all random effects.

    Parameters
    ----------
    model
        The model.
    innermost
        Its own, or that of R other responses.
    factors
        θ (d, d, R) of each random effect.

    Returns
    -------
    tuple
        Levels, innermost first; the fixed part (p + 1, p + 1, R); log|V| (R,).
    """
    replicates, step = factors[0].shape[2], model.steps[0]
    half, logs = half_of(step, _corner(step, innermost, replicates), factors, replicates)
    root = _units_first(half, replicates)
    levels = [ManySlotsLevel(innermost.stack, root)]
    current = innermost.whole - _lost(step, innermost, root)
    for step, routes in zip(model.steps[1:], model.routes, strict=True):
        rows = current[:, :, : len(step.random)]
        root, more = _root_of(step, rows[..., : len(step.random)], factors)
        logs = logs + more
        levels.append(ManySlotsLevel(current, root))
        after = _square(np.matmul(root.swapaxes(2, 3), rows))
        np.subtract(current, after, out=after)
        current = routes.hand_over(after)
    return tuple(levels), current[:, 0].transpose(1, 2, 0), logs


def _root_of(step: Step, corner: FloatArray, factors: Factors) -> tuple[FloatArray, FloatArray]:
    """As :func:`half_of`, units first: T (R, units, D, D) and log|V| (R,)."""
    factor = level_factor(step, factors).transpose(2, 0, 1)[:, None]
    inner = np.matmul(factor.swapaxes(2, 3), np.matmul(corner, factor))
    inner += np.eye(len(step.random))
    upper, logs = inverse_cholesky(_matrices_last(inner))
    return np.matmul(factor, _units_first(upper, len(factor))), logs.reshape(len(factor), -1).sum(axis=1)


def cones_of_many_slots(
    model: ManySlots,
    innermost: Innermost,
    levels: tuple[ManySlotsLevel, ...],
    adjoint: FloatArray,
) -> Iterator[tuple[Step, FloatArray, FloatArray]]:
    """Derivatives with respect to the covariance of every level, by the elimination backwards.

    Parameters
    ----------
    model, innermost
        As in :func:`eliminate_many_slots`.
    levels
        Its levels.
    adjoint
        (p + 1, p + 1, R) derivative with respect to the fixed part.

    Yields
    ------
    tuple
        The level; what the determinant and what the fixed part and response contribute (D, D, R · units).
    """
    replicates = adjoint.shape[2]
    given = np.ascontiguousarray(adjoint.transpose(2, 0, 1))[:, None]
    for step, routes, level in list(zip(model.steps[1:], model.routes, levels[1:], strict=True))[::-1]:
        given = routes.take_back(given)
        size = len(step.random)
        rows, root = level.stack[:, :, :size], level.root
        corner = rows[..., :size]
        moved = np.matmul(rows, given)
        within = np.matmul(moved, rows.swapaxes(2, 3))
        own = np.matmul(corner, root)
        rest = np.eye(size) - np.matmul(root, own.swapaxes(2, 3))
        lost = np.matmul(rest.swapaxes(2, 3), np.matmul(within, rest))
        yield step, _matrices_last(corner - np.matmul(own, own.swapaxes(2, 3))), _matrices_last(lost)
        square = np.matmul(root, root.swapaxes(2, 3))
        taken = np.matmul(square, moved)
        given[:, :, :size] -= taken
        given[..., :size] -= taken.swapaxes(2, 3)
        given[:, :, :size, :size] += square + np.matmul(square, np.matmul(within, square))
    step = model.steps[0]
    corner, half = _corner(step, innermost, replicates), levels[0].half
    within = _within(step, innermost, given)
    own = product(corner, half)
    rest = -product_transposed(half, own)
    for k in range(len(rest)):
        rest[k, k] += 1.0
    lost = transposed_product(rest, product(within, rest))
    yield step, corner - product_transposed(own, own), lost


def _corner(step: Step, innermost: Innermost, replicates: int) -> FloatArray:
    """Cross-products of the random slots of the innermost units, (D, D, R · units)."""
    corner = _matrices_last(innermost.stack[:, :, step.random[:, None], step.random])
    return corner if len(innermost.stack) == replicates else np.tile(corner, (1, 1, replicates))


def _lost(step: Step, innermost: Innermost, root: FloatArray) -> FloatArray:
    """What the parents lose by the innermost elimination, (R, parents, m', m')."""
    replicates, size = len(root), len(step.random)
    turned = np.zeros((replicates, step.parent_units * step.seats, size, size))
    turned[:, step.seat] = root.swapaxes(2, 3)
    split = turned.reshape(replicates, step.parent_units, step.seats, size, size)
    scaled = np.matmul(split, innermost.columns)
    return _square(scaled.reshape(replicates, step.parent_units, -1, step.parent_slots))


def _square(rows: FloatArray) -> FloatArray:
    """Y'Y of rows Y (R, units, n, m); of one array with itself numpy makes a slower product."""
    return np.asarray(np.matmul(rows.swapaxes(2, 3), rows.copy()))


def _within(step: Step, innermost: Innermost, adjoint: FloatArray) -> FloatArray:
    """(A Z)' adjoint (A Z) of every innermost unit, (D, D, R · units)."""
    columns, size = innermost.columns, len(step.random)
    flat = columns.reshape(*columns.shape[:2], -1, step.parent_slots)
    moved = np.matmul(flat, adjoint).reshape(-1, *columns.shape[1:])
    found: FloatArray = np.matmul(moved, columns.swapaxes(3, 4)).reshape(len(adjoint), -1, size, size)
    return _matrices_last(found[:, step.seat])


def _matrices_last(stack: FloatArray) -> FloatArray:
    """(R, units, i, j) as (i, j, R · units)."""
    return stack.transpose(2, 3, 0, 1).reshape(*stack.shape[2:], -1)


def _units_first(stack: FloatArray, replicates: int) -> FloatArray:
    """(i, j, R · units) as (R, units, i, j)."""
    return np.ascontiguousarray(stack.reshape(*stack.shape[:2], replicates, -1).transpose(2, 3, 0, 1))
