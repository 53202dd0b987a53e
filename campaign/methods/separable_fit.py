"""Non-linear least squares where some coefficients enter linearly: y = Σ cₖ φₖ(x; θ) + e, θ > 0.

The linear coefficients are solved for exactly at every θ, so that only the shape parameters θ are searched
(variable projection: G. H. Golub and V. Pereyra, SIAM Journal on Numerical Analysis 10 (1973) 413–432, with
the Jacobian of L. Kaufman, BIT 15 (1975) 49–57). The search runs on ln θ: scales do not matter. A scan over
decades about the start comes first, because a start far from the minimum may see no slope at all.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from itertools import combinations_with_replacement, product

import numpy as np
import numpy.typing as npt
from scipy import linalg, optimize

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

KEPT_STARTS = 2
SEARCH_TOLERANCE = 1e-13
RANK_TOLERANCE = 1e-12
DEPENDENT = 1e-9
"""Columns of unit length whose part of their own is shorter than this are solved for one by one."""


@dataclass(frozen=True)
class SeparableModel:
    """A family of curves with linear coefficients and positive shape parameters.

    Attributes
    ----------
    basis
        (x (n,), θ (q,)) to the columns φ, shape (n, k).
    derivatives
        (x, θ) to ∂φ/∂θ, shape (q, n, k).
    shapes
        Number of shape parameters, q; 0 for a linear model.
    exchangeable
        Whether the shape parameters may be swapped without changing the curve (rates of a sum of
        exponentials): then the scan looks at each combination once.
    """

    basis: Callable[[FloatArray, FloatArray], FloatArray]
    derivatives: Callable[[FloatArray, FloatArray], FloatArray]
    shapes: int
    exchangeable: bool = False


@dataclass(frozen=True)
class SeparableFit:
    """A fitted curve with the evidence of its computation.

    Attributes
    ----------
    coefficients, shape
        Shapes (k,) and (q,): linear coefficients and shape parameters.
    covariance
        Shape (k + q, k + q), coefficients first: s² (J'J)⁻¹ with J the Jacobian of the (whitened) curve; rows
        and columns of shape parameters on a bound are NaN.
    standard_errors
        Shape (k + q,): its square roots.
    residuals
        Shape (n,), as whitened.
    residual_sum_of_squares
        Of the residuals.
    degrees_of_freedom
        n − k − q.
    on_bound
        Shape (q,): which shape parameters ended on a bound and so are not identified.
    evaluations
        Evaluations of the projected residual, scan and searches together.
    converged
        Whether the search ended by one of its tolerances.
    """

    coefficients: FloatArray
    shape: FloatArray
    covariance: FloatArray
    standard_errors: FloatArray
    residuals: FloatArray
    residual_sum_of_squares: float
    degrees_of_freedom: int
    on_bound: BoolArray
    evaluations: int
    converged: bool

    @property
    def parameters(self) -> FloatArray:
        """Coefficients, then shape parameters."""
        return np.concatenate([self.coefficients, self.shape])

    @property
    def residual_sd(self) -> float:
        """√(residual sum of squares / degrees of freedom); NaN without degrees of freedom."""
        free = self.degrees_of_freedom
        return float(np.sqrt(self.residual_sum_of_squares / free)) if free > 0 else float("nan")


Whitening = Callable[[FloatArray], FloatArray]


def as_they_are(columns: FloatArray) -> FloatArray:
    """Return *columns* unchanged: residuals are taken as independent and equally good."""
    return columns


def decades_about(start: Sequence[float], decades: float = 3.0, steps: int = 7) -> tuple[FloatArray, ...]:
    """Return, for every shape parameter, a geometric grid of *steps* values about its *start*.

    The grid reaches *decades* powers of ten to both sides and holds the start itself where *steps* is odd.
    """
    return tuple(s * 10.0 ** np.linspace(-decades, decades, steps) for s in start)


def fit_separable(
    model: SeparableModel,
    x: FloatArray,
    y: FloatArray,
    scan: Sequence[FloatArray],
    *,
    low: Sequence[float] | None = None,
    high: Sequence[float] | None = None,
    whiten: Whitening = as_they_are,
) -> SeparableFit:
    """Fit *model* to points (x, y) by least squares.

    Parameters
    ----------
    model
        The family of curves.
    x, y
        Shape (n,), finite, n at least the number of parameters.
    scan
        One grid a shape parameter, positive; every combination is tried and the best few are refined.
    low, high
        Bounds of the shape parameters, positive; where not given, twice beyond the scan.
    whiten
        Takes (n,) or (n, k) to what has independent residuals of equal variance.

    Returns
    -------
    SeparableFit
        The least sum of squares found.

    Raises
    ------
    ValueError
        Where there are fewer points than parameters.
    """
    columns = model.basis(x, np.array([grid[0] for grid in scan])).shape[1]
    if len(x) < columns + model.shapes:
        raise ValueError(f"{len(x)} points for {columns + model.shapes} parameters")
    problem = _Problem(model, x, whiten(y), whiten)
    if model.shapes == 0:
        return _completed(problem, np.zeros(0), np.zeros(0, dtype=bool), 1, True)
    bounds = (
        np.log(low if low is not None else [grid.min() / 2.0 for grid in scan]),
        np.log(high if high is not None else [grid.max() * 2.0 for grid in scan]),
    )
    starts, tried = _scanned(problem, scan)
    found = [_searched(problem, np.clip(start, *bounds), bounds) for start in starts]
    best = min(found, key=lambda result: float(result.cost))
    edge = 1e-6 * np.maximum(np.abs(best.x), 1.0)
    on_bound = (best.x - bounds[0] <= edge) | (bounds[1] - best.x <= edge)
    evaluations = tried + sum(int(result.nfev) for result in found)
    return _completed(problem, best.x, np.asarray(on_bound), evaluations, bool(best.status > 0))


@dataclass(frozen=True)
class _Problem:
    """The projected problem: residual and Jacobian as functions of ln θ."""

    model: SeparableModel
    x: FloatArray
    y: FloatArray
    whiten: Whitening
    _met: dict[bytes, tuple[FloatArray, FloatArray]] = field(default_factory=dict)

    def columns(self, logarithms: FloatArray) -> FloatArray:
        return self.whiten(self.model.basis(self.x, np.exp(logarithms)))

    def projected(self, logarithms: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Columns and coefficients; kept for the last point, where the Jacobian is asked for next."""
        key = logarithms.tobytes()
        if key not in self._met:
            basis = self.columns(logarithms)
            self._met.clear()
            self._met[key] = basis, solved(basis, self.y)
        return self._met[key]

    def residual(self, logarithms: FloatArray) -> FloatArray:
        basis, coefficients = self.projected(logarithms)
        return np.asarray(self.y - basis @ coefficients)

    def slopes(self, logarithms: FloatArray, coefficients: FloatArray) -> FloatArray:
        """∂(curve)/∂ ln θ at kept coefficients, shape (n, q)."""
        theta = np.exp(logarithms)
        changes = self.model.derivatives(self.x, theta) @ coefficients
        return self.whiten(np.ascontiguousarray(changes.T)) * theta

    def jacobian(self, logarithms: FloatArray) -> FloatArray:
        basis, coefficients = self.projected(logarithms)
        slopes = self.slopes(logarithms, coefficients)
        return -(slopes - basis @ solved(basis, slopes))


def solved(basis: FloatArray, y: FloatArray) -> FloatArray:
    """Return the least-squares coefficients of columns scaled to equal length, shape (k,) or (k, columns)."""
    scale = np.sqrt(np.einsum("ij,ij->j", basis, basis))
    scale = np.where(scale > 0, scale, 1.0)
    found = np.linalg.lstsq(basis / scale, y, rcond=RANK_TOLERANCE)[0]
    return np.asarray((found.T / scale).T)


def _scanned(problem: _Problem, scan: Sequence[FloatArray]) -> tuple[list[FloatArray], int]:
    """The best combinations of the grids, as ln θ, and how many were tried."""
    tried = [np.log(combination) for combination in _combinations(problem.model, scan)]
    order = np.argsort(_costs(problem, tried), kind="stable")[:KEPT_STARTS]
    return [tried[i] for i in order], len(tried)


def _costs(problem: _Problem, points: Sequence[FloatArray]) -> FloatArray:
    """Residual sums of squares at many points at once, as far as their columns are independent.

    They only choose where to start, so the orthogonal projection does instead of the coefficients.
    """
    plain = [problem.model.basis(problem.x, np.exp(point)) for point in points]
    whitened = problem.whiten(np.hstack(plain)).reshape(len(problem.y), len(points), -1)
    columns = whitened.transpose(1, 0, 2)
    length = np.sqrt(np.einsum("pnk,pnk->pk", columns, columns))
    scaled = columns / np.where(length > 0, length, 1.0)[:, None, :]
    orthogonal, triangular = np.linalg.qr(scaled)
    along = orthogonal.transpose(0, 2, 1) @ problem.y
    rest = problem.y - (orthogonal @ along[:, :, None])[:, :, 0]
    costs = np.einsum("pn,pn->p", rest, rest)
    shortest = np.abs(np.diagonal(triangular, axis1=1, axis2=2)).min(axis=1)
    for place in np.flatnonzero(shortest < DEPENDENT).tolist():
        costs[place] = float(np.sum(problem.residual(points[place]) ** 2))
    return np.asarray(costs)


def _combinations(model: SeparableModel, scan: Sequence[FloatArray]) -> list[FloatArray]:
    if model.exchangeable and model.shapes > 1:
        together = np.unique(np.concatenate(scan))
        if len(together) > 16:
            together = np.geomspace(together[0], together[-1], 16)
        every = combinations_with_replacement(together.tolist(), model.shapes)
        return [np.array(c) for c in every if len(set(c)) == model.shapes]
    return [np.array(c) for c in product(*(grid.tolist() for grid in scan))]


def _searched(
    problem: _Problem, start: FloatArray, bounds: tuple[FloatArray, FloatArray]
) -> optimize.OptimizeResult:
    return optimize.least_squares(
        problem.residual,
        start,
        problem.jacobian,
        bounds,
        x_scale="jac",
        xtol=SEARCH_TOLERANCE,
        ftol=SEARCH_TOLERANCE,
        gtol=SEARCH_TOLERANCE,
        max_nfev=300,
    )


def _completed(
    problem: _Problem, logarithms: FloatArray, on_bound: BoolArray, evaluations: int, converged: bool
) -> SeparableFit:
    basis, coefficients = problem.projected(logarithms)
    residuals = np.asarray(problem.y - basis @ coefficients)
    shape = np.exp(logarithms)
    squares = float(residuals @ residuals)
    freedom = len(problem.y) - len(coefficients) - len(shape)
    jacobian = basis
    if len(shape):
        jacobian = np.hstack([basis, problem.slopes(logarithms, coefficients) / shape])
    known = np.concatenate([np.ones(len(coefficients), dtype=bool), ~on_bound])
    covariance = np.full((len(known), len(known)), np.nan)
    covariance[np.ix_(known, known)] = inverse_of_squares(jacobian[:, known]) * (
        squares / freedom if freedom > 0 else np.nan
    )
    errors = np.sqrt(np.diag(covariance))
    return SeparableFit(
        coefficients, shape, covariance, errors, residuals, squares, freedom, on_bound, evaluations, converged
    )


def inverse_of_squares(columns: FloatArray) -> FloatArray:
    """Return (J'J)⁻¹ of scaled columns by their triangular factor; NaN where they are dependent."""
    scale = np.sqrt(np.einsum("ij,ij->j", columns, columns))
    if not np.all(scale > 0):
        return np.full((columns.shape[1], columns.shape[1]), np.nan)
    factor = linalg.qr(columns / scale, mode="r")[0][: columns.shape[1]]
    if np.min(np.abs(np.diag(factor))) < RANK_TOLERANCE:
        return np.full((columns.shape[1], columns.shape[1]), np.nan)
    inverse = linalg.solve_triangular(factor, np.eye(columns.shape[1]))
    return np.asarray((inverse @ inverse.T) / np.outer(scale, scale))
