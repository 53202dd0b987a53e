"""The factor of a level's random columns, and what eliminating them takes from it."""

from __future__ import annotations

import numpy as np

from campaign.methods.batched_algebra import inverse_cholesky, product, transposed_product
from campaign.methods.nested_design import FloatArray
from campaign.methods.nested_transfer import Step

Factors = list[FloatArray]
"""For each random effect its relative factor θ (d, d, R), R replicates of the whole model."""


def half_of(
    step: Step, corner: FloatArray, factors: Factors, replicates: int
) -> tuple[FloatArray, FloatArray]:
    """Eliminate the random columns of a level, as far as they alone are concerned.

    Parameters
    ----------
    step
        The level.
    corner
        (D, D, R · units) cross-products C of its random slots.
    factors
        θ (d, d, R) of each random effect.
    replicates
        R.

    Returns
    -------
    tuple
        T (D, D, R · units), T T' = F (I + F'CF)⁻¹ F', and log|V| of the level (R,).
    """
    factor = level_factor(step, factors)
    if replicates > 1:
        factor = np.repeat(factor, step.units, axis=2)
    inner = transposed_product(factor, product(corner, factor))
    for k in range(len(inner)):
        inner[k, k] += 1.0
    upper, logs = inverse_cholesky(inner)
    return product(factor, upper), logs.reshape(replicates, -1).sum(axis=1)


def level_factor(step: Step, factors: Factors) -> FloatArray:
    """Block-diagonal factor F of all random columns of a level, (D, D, R)."""
    size = len(step.random)
    out = np.zeros((size, size, factors[0].shape[2]))
    for block in step.blocks:
        for copy in range(block.copies):
            at = slice(block.start + copy * block.size, block.start + (copy + 1) * block.size)
            out[at, at] = factors[block.term]
    return out
