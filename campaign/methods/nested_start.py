"""Where the search for the covariances starts: matrix analysis-of-variance moments.

For each unit the random columns are fitted to the residuals of the fixed part by least squares. The
covariance of these coefficients between units of the same parent is the level's covariance plus what the
inner levels and the noise add to it; subtracting that from inside outwards gives the analysis-of-variance
estimate (exactly, where the design is balanced).
"""

from __future__ import annotations

import numpy as np

from campaign.methods.batched_algebra import nearest_semidefinite, semidefinite_cholesky
from campaign.methods.nested_compression import Compression
from campaign.methods.nested_criterion import eliminate
from campaign.methods.nested_design import FloatArray
from campaign.methods.nested_parameters import Layout
from campaign.methods.nested_transfer import Block, Step


def moment_covariances(compression: Compression) -> tuple[list[FloatArray], list[FloatArray], float]:
    """Analysis-of-variance covariances of every random effect, in scaled columns.

    Returns
    -------
    tuple
        Covariances (d, d), projected onto semidefinite matrices; the noise (d, d) that inner levels and
        readings add to one unit's coefficients; the residual variance.
    """
    sizes = [basis.shape[0] for basis in compression.columns.term_bases]
    if not sizes:
        return [], [], 1.0
    zero = [np.zeros((d, d, 1)) for d in sizes]
    levels = eliminate(compression, compression.products, zero).levels
    found: list[FloatArray] = [np.zeros((d, d)) for d in sizes]
    noises: list[FloatArray] = [np.zeros((d, d)) for d in sizes]
    variance = _residual_variance(compression)
    inner: list[tuple[int, int]] = []
    for step, level in zip(compression.steps, levels, strict=True):
        here = []
        for block in step.blocks:
            spread, inverse = _spread(step, block, level.before)
            noise = variance * inverse
            for term, count in inner:
                if np.shares_memory(compression.columns.terms[term], compression.columns.terms[block.term]):
                    noise = noise + found[term] * (step.units * block.copies / count)
            found[block.term] = nearest_semidefinite(spread - noise)
            noises[block.term] = noise
            here.append((block.term, step.units * block.copies))
        inner += here
    return found, noises, variance


def _residual_variance(compression: Compression) -> float:
    """Mean square of what the innermost units' own columns leave."""
    step, products = compression.steps[0], compression.products
    own = sorted(set(step.random.tolist()))
    square, cross = products[np.ix_(own, own)].transpose(2, 0, 1), products[own, -1].T
    rank = int(np.linalg.matrix_rank(square, hermitian=True).sum())
    fitted = np.einsum("ui,uij,uj->", cross, np.linalg.pinv(square, hermitian=True), cross)
    total = float(products[-1, -1].sum())
    left = total - float(fitted)
    degrees = compression.rows - rank
    if degrees < 1 or left <= 1e-10 * total:
        return max(0.1 * total / compression.rows, np.finfo(float).tiny)
    return left / degrees


def _spread(step: Step, block: Block, products: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Covariance within parents of the units' least-squares coefficients, and mean inverse information."""
    coefficients, inverses, parents = [], [], []
    for copy in range(block.copies):
        at = step.random[block.start + copy * block.size : block.start + (copy + 1) * block.size]
        square, cross = products[np.ix_(at, at)].transpose(2, 0, 1), products[at, -1].T
        seen = np.linalg.matrix_rank(square, hermitian=True) == block.size
        inverse = np.linalg.pinv(square[seen], hermitian=True)
        coefficients.append(np.einsum("uij,uj->ui", inverse, cross[seen]))
        inverses.append(inverse)
        parents.append(_parents(step, block)[seen])
    b, group = np.concatenate(coefficients), np.concatenate(parents)
    if len(b) == 0:
        return np.zeros((block.size, block.size)), np.zeros((block.size, block.size))
    mean_inverse = np.concatenate(inverses).mean(axis=0)
    if step.parent_units > 1 or block.copies > 1:
        counts = np.maximum(np.bincount(group), 1)
        means = np.column_stack([np.bincount(group, weights=column) / counts for column in b.T])
        b = b - means[group]
        degrees = len(b) - len(np.unique(group))
    else:
        degrees = len(b) - len(step.transfers)
    return b.T @ b / max(degrees, 1), mean_inverse


def _parents(step: Step, block: Block) -> np.ndarray[tuple[int], np.dtype[np.int64]]:
    if block.copies > 1:
        return np.arange(step.units)
    out = np.zeros(step.units, dtype=np.int64)
    for transfer in step.transfers:
        if transfer.children is None:
            return transfer.parent_of_child
        out[transfer.children] = transfer.parent_of_child
    return out


def start_vector(compression: Compression, layout: Layout) -> tuple[FloatArray, FloatArray]:
    """Parameters to start from: the moments, and the moments lifted off the boundary.

    At θ = 0 the gradient with respect to θ vanishes, so a search must not begin there; the lift is a
    twentieth of the noise of one unit's coefficients.

    Returns
    -------
    tuple
        (n,) the moments, (n,) the start.
    """
    found, noises, variance = moment_covariances(compression)
    plain, lifted = [], []
    for covariance, noise in zip(found, noises, strict=True):
        relative = covariance / variance
        plain.append(semidefinite_cholesky(relative, 1e-10)[:, :, None])
        values, vectors = np.linalg.eigh(relative)
        floor = 0.05 * max(float(np.trace(noise)) / variance / len(noise), 1e-12)
        raised = (vectors * np.maximum(values, floor)) @ vectors.T
        lifted.append(semidefinite_cholesky(raised if values[0] < 1e-3 * floor else relative)[:, :, None])
    return layout.vector(plain)[:, 0], layout.vector(lifted)[:, 0]
