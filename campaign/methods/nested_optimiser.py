"""The search for the covariances: L-BFGS-B, a projected Newton polish, and a certificate of the minimum.

θ_kk = 0 is always a stationary point, so a vanishing gradient proves nothing. The certificate is the
condition of Karush, Kuhn and Tucker on the cone of semidefinite matrices: the derivative with respect to Ψ =
θθ' has no negative eigenvalue at any random effect. Where one is negative the search starts again along its
eigenvector.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from scipy.optimize import minimize

from campaign.methods.batched_algebra import semidefinite_cholesky
from campaign.methods.nested_compression import Compression
from campaign.methods.nested_criterion import Gradient
from campaign.methods.nested_design import FloatArray
from campaign.methods.nested_parameters import Layout, canonical, evaluate, layout_of, replicates_at_once
from campaign.methods.nested_start import start_vector

_CONE_TOLERANCE = 1e-6
"""How far below zero, in units of its natural scale, the smallest eigenvalue of a cone's gradient may lie."""


_LARGEST = 1e5
"""Largest relative factor looked at: beyond it the readings have no noise and the likelihood no bound."""


@dataclass(frozen=True)
class Optimum:
    """Where the search ended, with the evidence.

    Attributes
    ----------
    vector
        (n,) parameters at the minimum.
    start
        (n,) parameters at the start.
    criterion
        Value in scaled columns.
    evaluations, restarts
        How often the criterion was computed, and how often the certificate sent the search back.
    certificate
        For each random effect the smallest eigenvalue of ∂criterion/∂Ψ, over the scale of that derivative.
    gradient_size
        Largest remaining gradient, as the decrease of the criterion that a Newton step still promises.
    converged
        Certificate and gradient are both as they should be.
    """

    vector: FloatArray
    start: FloatArray
    criterion: float
    evaluations: int
    restarts: int
    certificate: tuple[float, ...]
    gradient_size: float
    converged: bool


@dataclass
class _Search:
    """The criterion of one data set, counting its evaluations."""

    compression: Compression
    layout: Layout
    restricted: bool
    evaluations: int = 0
    last: Gradient | None = field(default=None, repr=False)

    def __call__(self, vector: FloatArray) -> tuple[float, FloatArray]:
        value, gradient, self.last = evaluate(
            self.compression, self.layout, vector[:, None], restricted=self.restricted
        )
        self.evaluations += 1
        return float(value.criterion[0]), gradient[:, 0]

    def gradients(self, vectors: FloatArray) -> FloatArray:
        """Gradients (n, R) at many places at once."""
        chunk = replicates_at_once(self.compression)
        parts = [
            evaluate(self.compression, self.layout, vectors[:, k : k + chunk], restricted=self.restricted)[1]
            for k in range(0, vectors.shape[1], chunk)
        ]
        self.evaluations += vectors.shape[1]
        return np.hstack(parts)


def optimise(compression: Compression, *, restricted: bool, start: FloatArray | None = None) -> Optimum:
    """Minimise the criterion.

    Parameters
    ----------
    compression
        The model.
    restricted
        REML or maximum likelihood.
    start
        (n,) parameters to start from; None: analysis-of-variance moments.
    """
    layout = layout_of(compression)
    search = _Search(compression, layout, restricted)
    first = start_vector(compression, layout)[1] if start is None else np.asarray(start, dtype=float)
    best = _descend(search, first)
    restarts = 0
    while restarts < 12:
        criterion, _ = search(best)
        away = _away_from_false_stop(search, best)
        if away is None:
            break
        candidate = _descend(search, away)
        restarts += 1
        if search(candidate)[0] >= criterion - 1e-12 * max(abs(criterion), 1.0):
            break
        best = candidate
    return _evidence(search, first, best, restarts)


def _evidence(search: _Search, start: FloatArray, best: FloatArray, restarts: int) -> Optimum:
    criterion, gradient = search(best)
    certificate = tuple(value for value, _ in _cone_minima(search))
    free = _free(search.layout, best)
    promise = 0.0
    if free:
        step = _newton_step(_hessian(search, best, gradient, free), gradient[free])
        promise = float(-gradient[free] @ step) / 2.0
    bounded = np.abs(best).max(initial=0.0) < 0.1 * _LARGEST
    good = bounded and min(certificate, default=0.0) > -_CONE_TOLERANCE and promise < 1e-6
    return Optimum(best, start, criterion, search.evaluations, restarts, certificate, promise, bool(good))


def _descend(search: _Search, start: FloatArray) -> FloatArray:
    """L-BFGS-B, polish, and zero for what is zero up to rounding."""
    if not len(start):
        return start
    vector = _polish(search, _quasi_newton(search, start))
    return _snap(search, vector)


def _quasi_newton(search: _Search, start: FloatArray) -> FloatArray:
    criterion, gradient = search(start)
    assert search.last is not None
    scale = _parameter_scales(search.layout, start, search.last, search.compression)
    if np.abs(gradient / scale).max() < 1e-4:
        return start
    diagonal = set(search.layout.diagonal())
    bounds = [
        (0.0 if n in diagonal else -_LARGEST * scale[n], _LARGEST * scale[n]) for n in range(len(start))
    ]

    def scaled(x: FloatArray) -> tuple[float, FloatArray]:
        value, slope = search(x / scale)
        return value - criterion, slope / scale

    found = minimize(
        scaled,
        start * scale,
        jac=True,
        method="L-BFGS-B",
        bounds=bounds,
        options={"ftol": 1e-6, "gtol": 1e-3, "maxiter": 300, "maxcor": 20},
    )
    return np.asarray(found.x / scale)


def _parameter_scales(
    layout: Layout, vector: FloatArray, gradient: Gradient, compression: Compression
) -> FloatArray:
    """Square roots of a rough second derivative, with respect to Ψ I²/U for U units of information I."""
    units = _unit_counts(compression)
    factors = layout.factors(vector[:, None])
    out = np.empty(len(vector))
    for n, (t, i, k) in enumerate(layout.places):
        information = np.maximum(np.diag(gradient.information[t][:, :, 0]), 1e-300)
        spread = np.sqrt(units[t] / information)
        size = max(float(np.abs(factors[t][:, k, 0]).max()), 0.3 * float(spread[k]))
        out[n] = size * np.sqrt(2.0 * information[i] * information[k] / units[t])
    return out


def _unit_counts(compression: Compression) -> list[int]:
    return [rows.units * rows.copies for rows in compression.term_rows]


def _free(layout: Layout, vector: FloatArray) -> list[int]:
    """Parameters in columns whose diagonal element is not zero."""
    dead = {m for n in layout.diagonal() if vector[n] == 0.0 for m in layout.column_of(n)}
    return [n for n in range(len(vector)) if n not in dead]


def _hessian(search: _Search, vector: FloatArray, gradient: FloatArray, free: list[int]) -> FloatArray:
    """Second derivative from differences of the exact gradient."""
    width = 1e-5 * np.maximum(np.abs(vector[free]), 1e-2 * np.abs(vector).max())
    places = np.repeat(vector[:, None], len(free), axis=1)
    places[free, range(len(free))] += width
    hessian = (search.gradients(places)[free] - gradient[free, None]) / width
    return np.asarray((hessian + hessian.T) / 2.0)


def _newton_step(hessian: FloatArray, gradient: FloatArray) -> FloatArray:
    """Newton step that always goes downhill: eigenvalues by their absolute value, tiny ones left out."""
    size = np.sqrt(np.maximum(np.abs(np.diag(hessian)), 1e-12 * max(np.abs(hessian).max(), 1e-300)))
    values, vectors = np.linalg.eigh(hessian / np.outer(size, size))
    strength = np.abs(values)
    kept = strength > 1e-9 * strength.max()
    along = vectors[:, kept]
    return np.asarray(-(along @ ((along.T @ (gradient / size)) / strength[kept])) / size)


def _polish(search: _Search, vector: FloatArray) -> FloatArray:
    """Newton steps until the gradient is rounding noise; the Hessian is renewed when steps stop shrinking."""
    vector = canonical(search.layout, vector)
    criterion, gradient = search(vector)
    hessian: FloatArray | None = None
    free: list[int] = []
    last = np.inf
    for _ in range(40):
        if hessian is None:
            free = _free(search.layout, vector)
            if not free:
                break
            hessian = _hessian(search, vector, gradient, free)
        step = np.zeros_like(vector)
        step[free] = _newton_step(hessian, gradient[free])
        promise = float(-gradient @ step) / 2.0
        if promise < 1e-17 * max(abs(criterion), 1.0) or (promise < 1e-11 and promise > 0.25 * last):
            break
        if promise > 0.05 * last:
            hessian, last = None, np.inf
            continue
        last = promise
        moved = _line_search(search, vector, criterion, step, promise)
        if moved is None:
            break
        vector, criterion, gradient, whole = moved
        if not whole:
            hessian, last = None, np.inf
    return canonical(search.layout, vector)


def _line_search(
    search: _Search, vector: FloatArray, criterion: float, step: FloatArray, promise: float
) -> tuple[FloatArray, float, FloatArray, bool] | None:
    """The first of the steps 1, 1/3, 1/9 … that does not raise the criterion beyond rounding."""
    noise = 1e-13 * max(abs(criterion), 1.0) if promise < 1e-6 else 0.0
    for length in 3.0 ** -np.arange(8.0):
        there = vector + length * step
        if np.abs(there).max() > _LARGEST:
            continue
        value, gradient = search(there)
        if value <= criterion - 0.1 * length * promise + noise:
            return there, value, gradient, length == 1.0
    return None


def _snap(search: _Search, vector: FloatArray) -> FloatArray:
    """Put the smallest directions of a covariance to exactly zero where that does not raise the criterion."""
    criterion, _ = search(vector)
    for t in range(len(search.layout.sizes)):
        for candidate in _without_smallest(search, vector, t):
            polished = _polish(search, candidate)
            value, _ = search(polished)
            if value <= criterion + 1e-12 * max(abs(criterion), 1.0):
                vector, criterion = polished, value
    return vector


def _without_smallest(search: _Search, vector: FloatArray, t: int) -> list[FloatArray]:
    """The parameters with the smallest direction of effect t taken away; none where it is far from zero."""
    assert search.last is not None
    factors = search.layout.factors(vector[:, None])
    theta = factors[t][:, :, 0]
    information = np.diag(search.last.information[t][:, :, 0]) / _unit_counts(search.compression)[t]
    size = np.sqrt(np.maximum(information, 1e-300))
    values, vectors = np.linalg.eigh((theta @ theta.T) * np.outer(size, size))
    rank = int((np.diag(theta) > 0.0).sum())
    dropped = len(values) - rank
    if rank == 0 or values[dropped] > 1e-3:
        return []
    kept = vectors[:, dropped + 1 :] * np.sqrt(np.maximum(values[dropped + 1 :], 0.0)) / size[:, None]
    factors[t][:, :, 0] = semidefinite_cholesky(kept @ kept.T, 1e-10)
    return [search.layout.vector(factors)[:, 0]]


def _cone_minima(search: _Search) -> list[tuple[float, FloatArray]]:
    """Smallest eigenvalue of each cone's gradient over its natural scale, with its eigenvector."""
    assert search.last is not None
    out = []
    for cone, information in zip(search.last.cones, search.last.information, strict=True):
        size = np.sqrt(np.maximum(np.diag(information[:, :, 0]), 1e-300))
        values, vectors = np.linalg.eigh(cone[:, :, 0] / np.outer(size, size))
        out.append((float(values[0]), vectors[:, 0] / size))
    return out


def _away_from_false_stop(search: _Search, vector: FloatArray) -> FloatArray | None:
    """A start along the eigenvector of every negative eigenvalue; None where the certificate holds."""
    minima = _cone_minima(search)
    if min((value for value, _ in minima), default=0.0) > -_CONE_TOLERANCE:
        return None
    units = _unit_counts(search.compression)
    factors = search.layout.factors(vector[:, None])
    for t, (value, direction) in enumerate(minima):
        if value <= -_CONE_TOLERANCE:
            covariance = factors[t][:, :, 0] @ factors[t][:, :, 0].T
            lift = 0.3 * np.sqrt(units[t]) * min(1.0, -value * np.sqrt(units[t]))
            factors[t][:, :, 0] = semidefinite_cholesky(covariance + lift * np.outer(direction, direction))
    return search.layout.vector(factors)[:, 0]
