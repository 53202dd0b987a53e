"""Noise of means over stretches of time: white noise plus slow noise that forgets exponentially.

    Cov(ȳᵢ, ȳⱼ) = σ_w² δᵢⱼ/nᵢ + σ_s² × mean over both stretches of exp(−|t − t′|/T)

The slow part is a stationary process of first order in continuous time (J. L. Doob, Annals of Mathematics 43
(1942) 351–369), averaged over each stretch exactly. It has one state, so that whitening is a filter along the
stretches (R. E. Kalman, Journal of Basic Engineering 82 (1960) 35–45), run for all tried memories at once.
Ratio and memory are those of greatest restricted likelihood on a grid: means over short and long stretches,
early and late, are weighed and whitened together.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

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

    def whitening(self, stretches: Stretches) -> FloatArray:
        """Return the lower triangular W, (stretches, stretches), with W C W' = 1 for the covariance C."""
        ratio = self.slow_variance / self.white_variance
        memory = self.memory_s if ratio > 0 else 1.0
        whitened, _ = _filtered(
            np.eye(len(stretches.counts)), stretches, np.array([memory]), np.array([ratio])
        )
        return np.asarray(whitened[:, 0] / np.sqrt(self.white_variance))


def slow_correlation(stretches: Stretches, memory_s: float) -> FloatArray:
    """Return the mean of exp(−|t − t′|/T) over all pairs of times of two stretches: a square matrix."""
    start, stop = stretches.starts_s / memory_s, stretches.stops_s / memory_s
    width = stop - start
    gap = np.maximum(start[None, :] - stop[:, None], start[:, None] - stop[None, :])
    fading = _faded(width)
    between = np.exp(-np.maximum(gap, 0.0)) * fading[:, None] * fading[None, :]
    np.fill_diagonal(between, _own(width))
    return np.asarray(between)


def find_block_noise(smooth: FloatArray, values: FloatArray, stretches: Stretches) -> BlockNoise:
    """Find the noise of means about a smooth curve.

    Parameters
    ----------
    smooth
        Shape (stretches, p): independent columns that follow any smooth curve; they are projected out, so
        that what a curve explains is not taken for noise.
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
    basis = np.linalg.qr(smooth)[0]
    rest = values - basis @ (basis.T @ values)
    memory, ratio = (grid.ravel() for grid in np.meshgrid(_memories(stretches), RATIOS, indexing="ij"))
    whitened, variances = _filtered(np.column_stack([basis, rest]), stretches, memory, ratio)
    squares = np.einsum("nga,ngb->gab", whitened, whitened)
    inner, mixed = squares[:, :-1, :-1], squares[:, :-1, -1]
    explained = np.einsum("ga,ga->g", mixed, np.linalg.solve(inner, mixed[..., None])[..., 0])
    free = len(values) - smooth.shape[1]
    scales = np.maximum(squares[:, -1, -1] - explained, 1e-300) / free
    criterion = np.log(variances).sum(axis=0) + np.linalg.slogdet(inner)[1] + free * np.log(scales)
    best = int(np.argmin(criterion))
    slow = float(ratio[best])
    return BlockNoise(
        float(scales[best]), float(scales[best]) * slow, float(memory[best]) if slow > 0 else float("nan")
    )


def _memories(stretches: Stretches) -> FloatArray:
    span = float(stretches.stops_s[-1] - stretches.starts_s[0])
    steps = np.diff((stretches.starts_s + stretches.stops_s) / 2.0)
    shortest = max(float(np.median(steps[: max(len(steps) // 3, 1)])), span * 1e-5)
    return np.geomspace(shortest, max(span / 3.0, 2.0 * shortest), MEMORIES)


def _filtered(
    columns: FloatArray, stretches: Stretches, memory_s: FloatArray, ratio: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Innovations of *columns* (n, c) by their SD, (n, grid, c), and their variances, (n, grid).

    *memory_s* and *ratio* have shape (grid,); the white variance of one sample is 1. The state is the slow
    noise at the end of a stretch.
    """
    width = (stretches.stops_s - stretches.starts_s)[:, None] / memory_s
    gap = np.diff(stretches.starts_s, prepend=0.0)
    gap[1:] = stretches.starts_s[1:] - stretches.stops_s[:-1]
    kept_over_gap = np.exp(-gap[:, None] / memory_s)
    kept = np.exp(-width)
    fading = _faded(width)
    own = np.maximum(_own(width) - fading**2, 0.0)
    whitened = np.empty((len(columns), len(ratio), columns.shape[1]))
    variances = np.empty((len(columns), len(ratio)))
    state, spread = np.zeros((len(ratio), columns.shape[1])), ratio.copy()
    for i, column in enumerate(columns):
        state = state * kept_over_gap[i][:, None]
        spread = ratio + (spread - ratio) * kept_over_gap[i] ** 2
        variance = fading[i] ** 2 * spread + ratio * own[i] + 1.0 / stretches.counts[i]
        shared = kept[i] * fading[i] * spread + ratio * fading[i] * (1.0 - kept[i])
        innovation = column - fading[i][:, None] * state
        state = kept[i][:, None] * state + (shared / variance)[:, None] * innovation
        spread = ratio + (spread - ratio) * kept[i] ** 2 - shared**2 / variance
        whitened[i], variances[i] = innovation / np.sqrt(variance)[:, None], variance
    return whitened, variances


def _faded(width: FloatArray) -> FloatArray:
    """(1 − e⁻ʷ)/w, 1 at 0."""
    small = width < 1e-8
    return np.where(small, 1.0, -np.expm1(-width) / np.where(small, 1.0, width))


def _own(width: FloatArray) -> FloatArray:
    """Mean of exp(−|t − t′|) over one stretch: 2/w − 2 (1 − e⁻ʷ)/w², 1 at 0."""
    small = width < 1e-4
    safe = np.where(small, 1.0, width)
    return np.where(small, 1.0 - width / 3.0, 2.0 / safe - 2.0 * -np.expm1(-safe) / safe**2)
