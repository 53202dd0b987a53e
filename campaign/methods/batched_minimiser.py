"""Many small smooth minimisations at once, each by the BFGS quasi-Newton method.

All problems that are still running are evaluated together, so that profiles and bootstrap refits cost one
vectorised evaluation an iteration.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

Objective = Callable[[FloatArray, IntArray], tuple[FloatArray, FloatArray]]
"""(x (n, k), numbers of the k problems) → values (k,), gradients (n, k).

Gradients may have further rows, which are not looked at: they stand in the result where a problem ended.
"""


@dataclass(frozen=True)
class Minima:
    """Where the problems ended.

    Attributes
    ----------
    x
        (n, R).
    value
        (R,).
    gradient
        (n, R), and what further rows the objective gave.
    promise
        (R,) by how much one further step would lower the value, were the function a parabola.
    inverse
        (n, n, R) approximate inverse second derivatives, for a warm start.
    converged
        (R,) whether the decrease that a further step promises is below the tolerance.
    evaluations
        Evaluations of one problem, all together.
    """

    x: FloatArray
    value: FloatArray
    gradient: FloatArray
    promise: FloatArray
    inverse: FloatArray
    converged: NDArray[np.bool_]
    evaluations: int


def minimise_many(
    objective: Objective,
    start: FloatArray,
    inverse: FloatArray,
    *,
    tolerance: float | FloatArray,
    iterations: int = 200,
    longest: FloatArray | None = None,
) -> Minima:
    """Minimise R functions of n variables each.

    Parameters
    ----------
    objective
        Values and gradients of any of the problems.
    start
        (n, R).
    inverse
        (n, n, R) positive definite first guesses of the inverse second derivative.
    tolerance
        A problem ends when half of −gradient · step is below this; one number, or (R,).
    iterations
        Most evaluations of any problem.
    longest
        (n,) longest change of each variable in one step; None: no limit.

    References
    ----------
    Nocedal & Wright (2006), Numerical Optimization, chapters 3 and 6.
    """
    x, inverse = start.copy(), inverse.copy()
    n = len(x)
    below = np.broadcast_to(np.asarray(tolerance), x.shape[1:])
    everyone = np.arange(x.shape[1])
    value, gradient = objective(x, everyone)
    count = x.shape[1]
    direction = -np.einsum("ijr,jr->ir", inverse, gradient[:n])
    length = _first_length(direction, longest)
    running = everyone
    converged = np.zeros(x.shape[1], dtype=bool)
    for _ in range(iterations):
        promise = -(gradient[:n, running] * direction[:, running]).sum(axis=0)
        finished = promise / 2.0 < below[running]
        converged[running[finished]] = True
        going = ~finished & (length[running] > 1e-8)
        running = running[going]
        if not len(running):
            break
        there = x[:, running] + length[running] * direction[:, running]
        new_value, new_gradient = objective(there, running)
        count += len(running)
        slope = -promise[going]
        good = new_value <= value[running] + 1e-4 * length[running] * slope + 1e-12 * np.abs(value[running])
        moved, stuck = running[good], running[~good]
        length[stuck] *= _shorter(length[stuck], value[stuck], slope[~good], new_value[~good])
        change = new_gradient[:n, good] - gradient[:n, moved]
        inverse[:, :, moved] = _updated(inverse[:, :, moved], there[:, good] - x[:, moved], change)
        x[:, moved], value[moved], gradient[:, moved] = there[:, good], new_value[good], new_gradient[:, good]
        direction[:, moved] = -np.einsum("ijr,jr->ir", inverse[:, :, moved], gradient[:n, moved])
        length[moved] = _first_length(direction[:, moved], longest)
    promise = -(gradient[:n] * direction).sum(axis=0) / 2.0
    return Minima(x, value, gradient, promise, inverse, converged, count)


def _first_length(direction: FloatArray, longest: FloatArray | None) -> FloatArray:
    if longest is None:
        return np.ones(direction.shape[1])
    with np.errstate(divide="ignore"):
        return np.asarray(np.minimum(1.0, (longest[:, None] / np.abs(direction)).min(axis=0)))


def _shorter(length: FloatArray, value: FloatArray, slope: FloatArray, there: FloatArray) -> FloatArray:
    """Factor for a step that was too long: the minimum of the parabola, between 0.1 and 0.5."""
    curvature = np.where(np.isfinite(there), there - value - length * slope, np.inf)
    best = -0.5 * length * slope / np.maximum(curvature, 1e-300)
    return np.asarray(np.clip(best, 0.1, 0.5))


def _updated(inverse: FloatArray, step: FloatArray, change: FloatArray) -> FloatArray:
    """The inverse second derivative after a step; unchanged where the function was not seen to be convex."""
    along = (step * change).sum(axis=0)
    size = np.sqrt((step**2).sum(axis=0) * (change**2).sum(axis=0))
    good = along > 1e-8 * size
    safe = np.where(good, along, 1.0)
    turned = np.einsum("ijr,jr->ir", inverse, change)
    scale = (safe + (change * turned).sum(axis=0)) / safe**2
    cross = step[:, None] * turned[None, :]
    new = inverse + scale * step[:, None] * step[None, :] - (cross + cross.transpose(1, 0, 2)) / safe
    return np.where(good, new, inverse)


def inverse_curvature(hessian: FloatArray, floor: float = 1e-3) -> FloatArray:
    """Positive definite inverses of symmetric matrices (n, n, R), small eigenvalues lifted.

    Parameters
    ----------
    hessian
        Second derivatives; rows and columns are scaled to unit diagonal before eigenvalues are taken.
    floor
        Least eigenvalue of the scaled matrix.
    """
    stack = hessian.transpose(2, 0, 1)
    diagonal = np.abs(np.diagonal(stack, axis1=1, axis2=2))
    size = np.sqrt(np.maximum(diagonal, 1e-8 * np.maximum(diagonal.max(axis=1, keepdims=True), 1e-300)))
    values, vectors = np.linalg.eigh(stack / (size[:, :, None] * size[:, None, :]))
    inverse = (vectors / np.maximum(np.abs(values), floor)[:, None, :]) @ vectors.transpose(0, 2, 1)
    return np.asarray((inverse / (size[:, :, None] * size[:, None, :])).transpose(1, 2, 0))
