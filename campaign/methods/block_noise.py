"""Noise of means over stretches of time: white noise plus slow noise that forgets exponentially.

    Cov(ȳᵢ, ȳⱼ) = σ_w² δᵢⱼ/nᵢ + σ_s² × mean over both stretches of exp(−|t − t′|/T)

The slow part is a stationary process of first order in continuous time (J. L. Doob, Annals of Mathematics 43
(1942) 351–369), averaged over each stretch exactly. Ratio and memory T are found by restricted likelihood on a
grid, so that means over short and long stretches, early and late, are weighed and whitened together.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import linalg

FloatArray = npt.NDArray[np.float64]
IntArray = npt.NDArray[np.int64]

MEMORIES = 14
RATIOS = np.concatenate([[0.0], np.geomspace(1e-3, 30.0, 12)])
"""Variance of the slow noise over that of one sample's white noise that are tried; 0 is white noise alone."""


@dataclass(frozen=True)
class Stretches:
    """Stretches of time that samples were averaged over.

    Attributes
    ----------
    starts_s, stops_s
        Shape (stretches,): first and last time of each; equal for single samples. They do not overlap and
        rise.
    counts
        Shape (stretches,): samples averaged.
    """

    starts_s: FloatArray
    stops_s: FloatArray
    counts: IntArray


@dataclass(frozen=True)
class BlockNoise:
    """Noise found.

    Attributes
    ----------
    white_variance
        σ_w² of one sample, squared unit of the signal.
    slow_variance
        σ_s², same unit; 0 where no slow noise was found.
    memory_s
        T in s; NaN where there is no slow noise.
    """

    white_variance: float
    slow_variance: float
    memory_s: float

    def covariance(self, stretches: Stretches) -> FloatArray:
        """Return the covariance of the means over *stretches*, shape (stretches, stretches)."""
        covariance = np.diag(self.white_variance / stretches.counts)
        if self.slow_variance > 0:
            covariance = covariance + self.slow_variance * slow_correlation(stretches, self.memory_s)
        return covariance


def slow_correlation(stretches: Stretches, memory_s: float) -> FloatArray:
    """Return the mean of exp(−|t − t′|/T) over all pairs of times of two stretches, (stretches, stretches)."""
    start, stop = stretches.starts_s / memory_s, stretches.stops_s / memory_s
    width = stop - start
    gap = np.maximum(start[None, :] - stop[:, None], start[:, None] - stop[None, :])
    fading = _faded(width)
    between = np.exp(-np.maximum(gap, 0.0)) * fading[:, None] * fading[None, :]
    np.fill_diagonal(between, _own(width))
    return np.asarray(between)


def find_block_noise(residual_basis: FloatArray, values: FloatArray, stretches: Stretches) -> BlockNoise:
    """Find the noise of means about a curve.

    Parameters
    ----------
    residual_basis
        Shape (stretches, p): columns that the curve is made of near its best fit (its Jacobian); they are
        projected out, so that what the curve explains is not taken for noise.
    values
        Shape (stretches,): means.
    stretches
        What they are means over.

    Returns
    -------
    BlockNoise
        Of greatest restricted likelihood over a grid of memories (from the shortest gap to the third of the
        record) and ratios, white noise alone included.
    """
    span = float(stretches.stops_s[-1] - stretches.starts_s[0])
    steps = np.diff((stretches.starts_s + stretches.stops_s) / 2.0)
    shortest = max(float(np.median(steps[: max(len(steps) // 3, 1)])), span * 1e-5)
    memories = np.geomspace(shortest, max(span / 3.0, 2.0 * shortest), MEMORIES)
    best = (np.inf, 0.0, np.nan, np.nan)
    white = 1.0 / stretches.counts
    for memory in memories:
        slow = slow_correlation(stretches, float(memory))
        for ratio in RATIOS if memory == memories[0] else RATIOS[1:]:
            criterion, scale = _restricted(np.diag(white) + ratio * slow, residual_basis, values)
            if criterion < best[0]:
                best = (criterion, float(ratio), float(memory), scale)
    _, ratio, memory, scale = best
    return BlockNoise(scale, scale * ratio, memory if ratio > 0 else float("nan"))


def whitening(covariance: FloatArray) -> FloatArray:
    """Return the lower triangular W with W C W' = 1, from the Cholesky factor of *covariance* (n, n)."""
    factor = np.linalg.cholesky(covariance)
    return np.asarray(linalg.solve_triangular(factor, np.eye(len(factor)), lower=True))


def _restricted(covariance: FloatArray, basis: FloatArray, values: FloatArray) -> tuple[float, float]:
    """−2 log restricted likelihood, scale profiled out, and that scale."""
    factor = np.linalg.cholesky(covariance)
    both = linalg.solve_triangular(factor, np.column_stack([basis, values]), lower=True)
    triangle = np.abs(np.diag(np.linalg.qr(both, mode="r")))
    free = len(values) - basis.shape[1]
    square = float(triangle[-1] ** 2)
    if square <= 0.0:
        return np.inf, 0.0
    logarithms = 2.0 * float(np.sum(np.log(np.diag(factor)))) + 2.0 * float(
        np.sum(np.log(np.maximum(triangle[:-1], 1e-300)))
    )
    return logarithms + free * float(np.log(square / free)), square / free


def _faded(width: FloatArray) -> FloatArray:
    """(1 − e⁻ʷ)/w, 1 at 0."""
    small = width < 1e-8
    return np.where(small, 1.0, -np.expm1(-width) / np.where(small, 1.0, width))


def _own(width: FloatArray) -> FloatArray:
    """Mean of exp(−|t − t′|) over one stretch: 2/w − 2 (1 − e⁻ʷ)/w², 1 at 0."""
    small = width < 1e-4
    safe = np.where(small, 1.0, width)
    return np.where(small, 1.0 - width / 3.0, 2.0 / safe - 2.0 * -np.expm1(-safe) / safe**2)
