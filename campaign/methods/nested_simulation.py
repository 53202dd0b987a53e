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
    total = np.sqrt(residual_variance) * generator.standard_normal((count, replicates))
    for term in model.terms:
        if term.name in covariances:
            total += _effects_of(model, term, covariances[term.name], replicates, generator)
    return np.asarray(total)


def unit_codes(model: NestedModel, term: RandomTerm) -> IntArray:
    """Number the independent effects of *term* (unit of its level, copy) from 0, shape (readings,)."""
    codes = dict(model.levels)[term.level]
    if term.copies is not None:
        codes = np.unique(np.column_stack([codes, term.copies]), axis=0, return_inverse=True)[1].ravel()
    return np.unique(codes, return_inverse=True)[1].astype(np.int64)


def _effects_of(
    model: NestedModel,
    term: RandomTerm,
    covariance: FloatArray,
    replicates: int,
    generator: np.random.Generator,
) -> FloatArray:
    codes = unit_codes(model, term)
    root = symmetric_root(covariance)
    drawn = generator.standard_normal((int(codes.max()) + 1, len(root), replicates))
    effects = np.einsum("jk,ukr->ujr", root, drawn)
    out = term.columns[:, :1] * effects[codes, 0]
    for k in range(1, len(root)):
        out += term.columns[:, k : k + 1] * effects[codes, k]
    return np.asarray(out)


def symmetric_root(covariance: FloatArray) -> FloatArray:
    """Return the symmetric square root of a covariance, shape (d, d); zero variances are ordinary values."""
    values, vectors = np.linalg.eigh(covariance)
    return np.asarray((vectors * np.sqrt(np.clip(values, 0.0, None))) @ vectors.T)
