"""Responses drawn from a nested model: for bootstrap tests and for what a model predicts of a procedure."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import numpy.typing as npt

from campaign.methods.nested_model import NestedModel, RandomTerm

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]


def simulate_deviations(
    model: NestedModel,
    covariances: Mapping[str, FloatArray],
    residual_variance: float,
    replicates: int,
    generator: np.random.Generator,
) -> FloatArray:
    """Draw random effects and noise of a nested model.

    Parameters
    ----------
    model
        Levels and terms; its response and fixed part are not looked at.
    covariances
        Term → covariance of its effect, shape (d, d); a term that is missing has none.
    residual_variance
        Variance of the noise.
    replicates
        How many independent copies of the campaign to draw.
    generator
        Source of random numbers.

    Returns
    -------
    numpy.ndarray
        Shape (readings, replicates): deviations from the fixed part.
    """
    count = len(model.response)
    total = generator.standard_normal((count, replicates))
    total *= np.sqrt(residual_variance)
    for term in model.terms:
        if term.name in covariances:
            _add_effects(total, unit_codes(model, term), term.columns, covariances[term.name], generator)
    return np.asarray(total)


def unit_codes(model: NestedModel, term: RandomTerm) -> IntArray:
    """Number the independent effects of *term* (unit of its level, copy) from 0, shape (readings,)."""
    codes = np.unique(dict(model.levels)[term.level], return_inverse=True)[1].ravel()
    if term.copies is not None:
        copies = np.unique(term.copies, return_inverse=True)[1].ravel()
        codes = np.unique(codes * (int(copies.max()) + 1) + copies, return_inverse=True)[1].ravel()
    return codes.astype(np.int64)


_AT_ONCE = 100_000
"""Numbers to work on at once: what is added up then stays in the cache, and little memory is taken."""


def _add_effects(
    total: FloatArray,
    codes: IntArray,
    columns: FloatArray,
    covariance: FloatArray,
    generator: np.random.Generator,
) -> None:
    """Draw the effects of a term and add them to *total*, some readings at a time."""
    root, replicates = symmetric_root(covariance), total.shape[1]
    drawn = generator.standard_normal((int(codes.max()) + 1, len(root), replicates))
    effects = np.einsum("jk,ukr->ujr", root, drawn)
    step = max(_AT_ONCE // max(replicates, 1), 1)
    for first in range(0, len(total), step):
        rows = slice(first, first + step)
        mine, own = columns[rows], codes[rows]
        added = mine[:, :1] * effects[own, 0]
        for k in range(1, len(root)):
            added += mine[:, k : k + 1] * effects[own, k]
        total[rows] += added


def symmetric_root(covariance: FloatArray) -> FloatArray:
    """Return the symmetric square root of a covariance, shape (d, d); zero variances are ordinary values."""
    values, vectors = np.linalg.eigh(covariance)
    return np.asarray((vectors * np.sqrt(np.clip(values, 0.0, None))) @ vectors.T)
