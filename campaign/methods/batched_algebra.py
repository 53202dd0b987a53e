"""Algebra of many small matrices at once, laid out with the matrices' index last.

A stack of B matrices of shape (i, j) is an array (i, j, B). For matrices of a few rows this lets one vector
instruction work on all of them, an order of magnitude faster than a loop over the stack; from a certain size
on the ordinary matrix product wins, and `product` turns the stack round by itself.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

_LARGE = 150
"""Multiplications a matrix from which BLAS beats the vector loop (measured; the place hardly matters)."""


def _stack_first(a: FloatArray) -> FloatArray:
    return np.ascontiguousarray(a.transpose(2, 0, 1))


def product(a: FloatArray, b: FloatArray) -> FloatArray:
    """Product of each pair of matrices.

    Parameters
    ----------
    a, b
        Stacks (i, j, B) and (j, k, B); a stack of one matrix (… , 1) is used for all.

    Returns
    -------
    FloatArray
        (i, k, B).
    """
    size = a.shape[0] * a.shape[1] * b.shape[1]
    if size < _LARGE or (a.shape[1] <= 2 and b.shape[2] >= 50):
        return np.asarray(np.einsum("ijn,jkn->ikn", a, b))
    return np.asarray(np.matmul(_stack_first(a), _stack_first(b)).transpose(1, 2, 0))


def product_transposed(a: FloatArray, b: FloatArray) -> FloatArray:
    """Product of each matrix of `a` (i, j, B) with the transpose of that of `b` (k, j, B): (i, k, B)."""
    return product(a, b.transpose(1, 0, 2))


def transposed_product(a: FloatArray, b: FloatArray) -> FloatArray:
    """Product of the transpose of each matrix of `a` (j, i, B) with that of `b` (j, k, B): (i, k, B)."""
    return product(a.transpose(1, 0, 2), b)


def inverse_cholesky(m: FloatArray) -> tuple[FloatArray, FloatArray]:
    """A root of the inverse (of the transposed Cholesky factor) and the logarithm of the determinant.

    Parameters
    ----------
    m
        Matrices (d, d, B) without an eigenvalue below one, as I + F'CF has none.

    Returns
    -------
    tuple
        U (d, d, B) with U U' = m⁻¹, and log|m| (B,).
    """
    d = m.shape[0]
    if d == 1:
        m = np.maximum(m, 1.0)
        return 1.0 / np.sqrt(m), np.log(m[0, 0])
    if d == 2:
        return _inverse_cholesky_of_two(m)
    try:
        lower = np.linalg.cholesky(_stack_first(m))
    except np.linalg.LinAlgError:
        return _inverse_root(m)
    log_determinant = 2.0 * np.log(np.diagonal(lower, axis1=1, axis2=2)).sum(axis=1)
    inverse = _inverse_triangle(np.ascontiguousarray(lower.transpose(1, 2, 0)))
    return inverse.transpose(1, 0, 2), log_determinant


def _inverse_triangle(lower: FloatArray) -> FloatArray:
    """Inverses of lower triangles (d, d, B), row by row: a quarter of the time of a general inverse."""
    inverse = np.zeros(lower.shape)
    for k in range(len(lower)):
        inverse[k, k] = 1.0 / lower[k, k]
        if k:
            np.einsum("ib,ijb->jb", lower[k, :k], inverse[:k, :k], out=inverse[k, :k])
            inverse[k, :k] *= -inverse[k, k]
    return inverse


def _inverse_cholesky_of_two(m: FloatArray) -> tuple[FloatArray, FloatArray]:
    upper = np.zeros(m.shape)
    first = np.maximum(m[0, 0], 1.0)  # neither pivot is below the least eigenvalue
    ratio = m[1, 0] / first
    rest = np.maximum(m[1, 1] - ratio * m[1, 0], 1.0)
    upper[0, 0] = 1.0 / np.sqrt(first)
    upper[1, 1] = 1.0 / np.sqrt(rest)
    upper[0, 1] = -ratio * upper[1, 1]
    return upper, np.log(first) + np.log(rest)


def _inverse_root(m: FloatArray) -> tuple[FloatArray, FloatArray]:
    """The same by eigenvalues, where rounding has pushed some of them below one."""
    finite = np.where(np.isfinite(m), m, 1e300)
    values, vectors = np.linalg.eigh(_stack_first(finite))
    values = np.maximum(values, 1.0)
    return (vectors / np.sqrt(values)[:, None, :]).transpose(1, 2, 0), np.log(values).sum(axis=1)


def semidefinite_cholesky(covariance: FloatArray, tolerance: float = 1e-14) -> FloatArray:
    """Lower-triangular factor of one positive semidefinite matrix, zero columns where it is singular.

    Parameters
    ----------
    covariance
        (d, d), symmetric, positive semidefinite up to rounding.
    tolerance
        A pivot below this fraction of its diagonal element counts as zero.

    Returns
    -------
    FloatArray
        θ (d, d), lower triangular, diagonal ≥ 0, θθ' = covariance.
    """
    rest = np.array(covariance, dtype=float)
    factor = np.zeros_like(rest)
    diagonal = np.diag(rest).copy()
    for k in range(len(rest)):
        if rest[k, k] > tolerance * max(diagonal[k], np.finfo(float).tiny):
            factor[k:, k] = rest[k:, k] / np.sqrt(rest[k, k])
            rest = rest - np.outer(factor[:, k], factor[:, k])
    return factor


def nearest_semidefinite(matrix: FloatArray) -> FloatArray:
    """The symmetric matrix (d, d) with its negative eigenvalues put to zero."""
    values, vectors = np.linalg.eigh((matrix + matrix.T) / 2.0)
    return np.asarray((vectors * np.maximum(values, 0.0)) @ vectors.T)
