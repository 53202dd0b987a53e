"""The free numbers of a nested model as one vector: the lower triangles of all relative factors θ."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from campaign.methods.batched_algebra import semidefinite_cholesky
from campaign.methods.nested_compression import Compression
from campaign.methods.nested_criterion import Gradient, Value, eliminate, gradient_of, value_of
from campaign.methods.nested_design import FloatArray
from campaign.methods.nested_factors import Factors
from campaign.methods.nested_many_slots import Innermost


@dataclass(frozen=True)
class Layout:
    """Which element of which factor each parameter is.

    Attributes
    ----------
    sizes
        d of each random effect.
    places
        (term, row, column) of each parameter; row ≥ column.
    """

    sizes: tuple[int, ...]
    places: tuple[tuple[int, int, int], ...]

    @staticmethod
    def of(sizes: tuple[int, ...]) -> Layout:
        """Layout of random effects of the given sizes, column by column of each factor."""
        return Layout(
            sizes, tuple((t, i, k) for t, d in enumerate(sizes) for k in range(d) for i in range(k, d))
        )

    def factors(self, vectors: FloatArray) -> Factors:
        """Factors θ (d, d, R) of parameter vectors (n, R)."""
        out = [np.zeros((d, d, vectors.shape[1])) for d in self.sizes]
        for value, (t, i, k) in zip(vectors, self.places, strict=True):
            out[t][i, k] = value
        return out

    def vector(self, factors: Factors) -> FloatArray:
        """Parameter vectors (n, R) of factors θ (d, d, R); also picks the gradient's free elements."""
        replicates = factors[0].shape[2] if factors else 1
        out = np.empty((len(self.places), replicates))
        for row, (t, i, k) in zip(out, self.places, strict=True):
            row[:] = factors[t][i, k]
        return out

    def diagonal(self) -> list[int]:
        """Numbers of the parameters that are diagonal elements."""
        return [n for n, (_, i, k) in enumerate(self.places) if i == k]

    def column_of(self, parameter: int) -> list[int]:
        """Parameters that stand in the same column of the same factor."""
        t, _, k = self.places[parameter]
        return [n for n, (other, _, column) in enumerate(self.places) if (other, column) == (t, k)]


def layout_of(compression: Compression) -> Layout:
    """Layout of a compressed model."""
    return Layout.of(tuple(basis.shape[0] for basis in compression.columns.term_bases))


def canonical(layout: Layout, vector: FloatArray, tolerance: float = 1e-14) -> FloatArray:
    """The same covariances with diagonal ≥ 0 and, where a pivot is zero, a zero column; vector is (n,)."""
    factors = layout.factors(vector[:, None])
    tidy = [semidefinite_cholesky(f[:, :, 0] @ f[:, :, 0].T, tolerance)[:, :, None] for f in factors]
    return layout.vector(tidy)[:, 0]


def evaluate(
    compression: Compression,
    layout: Layout,
    vectors: FloatArray,
    *,
    restricted: bool,
    products: FloatArray | None = None,
    innermost: Innermost | None = None,
) -> tuple[Value, FloatArray, Gradient]:
    """Criterion with σ² profiled out and its gradient.

    Parameters
    ----------
    compression, layout
        The model.
    vectors
        (n, R) parameters.
    restricted
        REML or maximum likelihood.
    products
        Cross-products of the replicates; None: those of the data.
    innermost
        As in :func:`campaign.methods.nested_criterion.eliminate`.

    Returns
    -------
    tuple
        Value, gradient (n, R), and the gradient by factors and cones.
    """
    factors = layout.factors(vectors)
    used = compression.products if products is None else products
    eliminated = eliminate(compression, used, factors, innermost)
    value = value_of(compression, eliminated, restricted=restricted)
    gradient = gradient_of(compression, eliminated, value, factors, restricted=restricted)
    return value, layout.vector(gradient.factors), gradient


_AT_ONCE = 600_000
"""Numbers of one level's cross-products to work on at once."""


def replicates_at_once(compression: Compression) -> int:
    """How many replicates of the model to work on at once so that the arrays stay in the cache."""
    if not compression.steps:
        return 1000
    slots = [compression.products.shape[0], *(step.parent_slots for step in compression.steps[:-1])]
    sizes = [m * m * step.units for m, step in zip(slots, compression.steps, strict=True)]
    if compression.many_slots is not None:
        sizes[0] = compression.many_slots.innermost.columns.size
    return max(1, _AT_ONCE // int(max(sizes)))
