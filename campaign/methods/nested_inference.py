"""Degrees of freedom for contrasts of the fixed part and for the variance of a new unit's value."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from campaign.methods.nested_design import FloatArray
from campaign.methods.nested_fit import NestedModelFit, covariances_of
from campaign.methods.nested_parameters import evaluate, replicates_at_once


def satterthwaite(
    fit: NestedModelFit, contrast: FloatArray, extra: Mapping[str, FloatArray] | None = None
) -> tuple[float, float]:
    """Variance of a contrast (plus that of new random effects) and its degrees of freedom.

    Parameters
    ----------
    fit
        The fitted model.
    contrast
        (p,) weights of the fixed coefficients.
    extra
        Name of a random effect → its direction v (d,): v'Σv is added, as for the value of a new sensor.
        'residual' adds σ² times the square of its single weight.

    Returns
    -------
    tuple
        Variance V and degrees of freedom 2 V²/Var(V).

    Notes
    -----
    V = σ² h(θ). With σ² profiled, Var(V) = 2 V²/(N − p) + 2 ∇V'H⁻¹∇V, where H is the second derivative of the
    profiled criterion and ∇V that of V along the profile.

    References
    ----------
    Satterthwaite (1946), Biometrics Bulletin 2, 110; Giesbrecht & Burns (1985), Biometrics 41, 477.
    """
    return satterthwaite_each(fit, [(contrast, extra or {})])[0]


def satterthwaite_each(
    fit: NestedModelFit, requests: Sequence[tuple[FloatArray, Mapping[str, FloatArray]]]
) -> list[tuple[float, float]]:
    """Return what :func:`satterthwaite` does for many contrasts, with one look at the criterion's curvature.

    Parameters
    ----------
    fit
        The fitted model.
    requests
        Pairs of contrast and extra effects, as there.
    """
    degrees = fit.compression.rows - (fit.compression.fixed if fit.restricted else 0)
    free = [n for n in range(len(fit.vector)) if not _in_zero_column(fit, n)]
    places, widths = _star(fit, free)
    star = _looked_at(fit, places)
    variances = _variances(fit, places, star, requests)
    hessian = _curvature(star, widths, free) if free else None
    found = []
    for row in variances:
        variance = float(row[0])
        if not variance > 0.0:
            found.append((variance, float(degrees)))
            continue
        spread = 1.0 / degrees
        if hessian is not None:
            spread += _quadratic(hessian, (row[1::2] - row[2::2]) / (2.0 * widths * variance))
        found.append((variance, 1.0 / spread))
    return found


def component_covariance(fit: NestedModelFit) -> tuple[tuple[str, ...], FloatArray, FloatArray]:
    """Estimates of all covariances of random effects and of σ², with their large-sample covariance.

    Parameters
    ----------
    fit
        The fitted model.

    Returns
    -------
    tuple
        Names (n,), such as 'sensor: covariance of columns 1 and 2'; estimates (n,) in the user's columns; and
        their covariance (n, n).

    Notes
    -----
    All are σ² times functions of θ; the covariance is that of :func:`satterthwaite`, element by element: 2
    vv'/(N − p) for σ² and 2 J H⁻¹ J' along the profile. A column of θ that is estimated as zero is kept
    there, so that nothing is said of its uncertainty: use the profile intervals.
    """
    free = [n for n in range(len(fit.vector)) if not _in_zero_column(fit, n)]
    places, widths = _star(fit, free)
    star = _looked_at(fit, places)
    degrees = fit.compression.rows - (fit.compression.fixed if fit.restricted else 0)
    elements = np.column_stack(
        [
            _component_elements(
                covariances_of(fit.compression, place, float(square) / degrees), square / degrees
            )
            for place, square in zip(places.T, star.residual_square, strict=True)
        ]
    )
    covariance = 2.0 / degrees * np.outer(elements[:, 0], elements[:, 0])
    if free:
        slopes = (elements[:, 1::2] - elements[:, 2::2]) / (2.0 * widths)
        covariance += 2.0 * slopes @ _inverse(_curvature(star, widths, free)) @ slopes.T
    return _component_names(fit), elements[:, 0], covariance


def _component_elements(covariances: Sequence[FloatArray], residual: float) -> FloatArray:
    return np.array([*(c[i, k] for c in covariances for i in range(len(c)) for k in range(i + 1)), residual])


def _component_names(fit: NestedModelFit) -> tuple[str, ...]:
    names = [
        f"{term.name}: variance of column {i + 1}"
        if i == k
        else f"{term.name}: covariance of columns {k + 1} and {i + 1}"
        for term in fit.model.terms
        for i in range(term.columns.shape[1])
        for k in range(i + 1)
    ]
    return (*names, "residual: variance")


def _inverse(hessian: FloatArray) -> FloatArray:
    """Inverse over the directions in which the criterion is curved."""
    size = np.sqrt(np.maximum(np.diag(hessian), 1e-12 * np.abs(hessian).max()))
    values, vectors = np.linalg.eigh(hessian / np.outer(size, size))
    kept = values > 1e-8 * values.max()
    scaled = vectors[:, kept] / size[:, None]
    return np.asarray(scaled / values[kept] @ scaled.T)


@dataclass(frozen=True)
class _Star:
    """The criterion around the estimate, R places.

    Attributes
    ----------
    residual_square
        (R,).
    unscaled_covariance
        (R, p, p) of the fixed part in scaled columns.
    gradients
        (n, R).
    """

    residual_square: FloatArray
    unscaled_covariance: FloatArray
    gradients: FloatArray


def _looked_at(fit: NestedModelFit, places: FloatArray) -> _Star:
    """Look at the criterion at every place, some places together."""
    chunk = replicates_at_once(fit.compression)
    values, gradients = [], []
    for k in range(0, places.shape[1], chunk):
        here = places[:, k : k + chunk]
        value, gradient, _ = evaluate(fit.compression, fit.layout, here, restricted=fit.restricted)
        values.append(value)
        gradients.append(gradient)
    return _Star(
        np.concatenate([value.residual_square for value in values]),
        np.concatenate([value.unscaled_covariance for value in values]),
        np.hstack(gradients),
    )


def _curvature(star: _Star, widths: FloatArray, free: list[int]) -> FloatArray:
    """Second derivatives of the profiled criterion from gradients on the star, (free, free)."""
    hessian = (star.gradients[free, 1::2] - star.gradients[free, 2::2]) / (2.0 * widths)
    return np.asarray((hessian + hessian.T) / 2.0)


def _scaled_directions(fit: NestedModelFit, extra: Mapping[str, FloatArray]) -> dict[int, FloatArray]:
    """Term number (−1 for the residual) → direction in scaled columns."""
    names = [term.name for term in fit.model.terms]
    out = {}
    for name, direction in extra.items():
        vector = np.atleast_1d(np.asarray(direction, dtype=float))
        if name == "residual":
            out[-1] = vector
        else:
            number = names.index(fit.model.term(name).name)
            out[number] = np.linalg.solve(fit.compression.columns.term_bases[number].T, vector)
    return out


def _in_zero_column(fit: NestedModelFit, parameter: int) -> bool:
    diagonal = set(fit.layout.diagonal())
    return any(fit.vector[n] == 0.0 for n in fit.layout.column_of(parameter) if n in diagonal)


def _star(fit: NestedModelFit, free: list[int]) -> tuple[FloatArray, FloatArray]:
    """The estimate, then each free parameter a little above and a little below it."""
    largest = float(np.abs(fit.vector).max()) if len(fit.vector) else 1.0
    widths = 1e-4 * np.maximum(np.abs(fit.vector[free]), 1e-2 * largest)
    places = np.repeat(fit.vector[:, None], 1 + 2 * len(free), axis=1)
    for k, n in enumerate(free):
        places[n, 1 + 2 * k] += widths[k]
        places[n, 2 + 2 * k] -= widths[k]
    return places, widths


def _variances(
    fit: NestedModelFit,
    places: FloatArray,
    star: _Star,
    requests: Sequence[tuple[FloatArray, Mapping[str, FloatArray]]],
) -> FloatArray:
    """V of each request along the profile at each place, (requests, R)."""
    compression = fit.compression
    factors = fit.layout.factors(places)
    contrasts = np.array([contrast for contrast, _ in requests], dtype=float)
    weights = np.linalg.solve(compression.columns.fixed_basis.T, contrasts.T).T
    relative = (np.matmul(weights, star.unscaled_covariance) * weights).sum(axis=2).T.copy()
    for k, (_, extra) in enumerate(requests):
        for number, direction in _scaled_directions(fit, extra).items():
            if number < 0:
                relative[k] += direction[0] ** 2
            else:
                relative[k] += (np.einsum("i,ikr->kr", direction, factors[number]) ** 2).sum(axis=0)
    degrees = compression.rows - (compression.fixed if fit.restricted else 0)
    return np.asarray(star.residual_square / degrees * relative)


def _quadratic(hessian: FloatArray, slope: FloatArray) -> float:
    """Quadratic form slope' hessian⁻¹ slope over the directions in which the criterion is curved."""
    return float(slope @ _inverse(hessian) @ slope)
