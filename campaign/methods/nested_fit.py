"""Fitting a nested mixed model by restricted (or full) maximum likelihood, and what the fit holds."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np

from campaign.methods.batched_algebra import semidefinite_cholesky
from campaign.methods.nested_compression import Compression, compress
from campaign.methods.nested_criterion import Value
from campaign.methods.nested_design import FloatArray, NestedModel, check_model
from campaign.methods.nested_optimiser import Optimum, optimise
from campaign.methods.nested_parameters import Layout, evaluate, layout_of
from campaign.methods.nested_start import moment_covariances


@dataclass(frozen=True)
class NestedModelFit:
    """Estimates of a nested mixed model, with the evidence of their computation.

    Attributes
    ----------
    model
        What was fitted.
    restricted
        REML if True, maximum likelihood if False.
    coefficients, coefficient_covariance
        (p,) and (p, p), fixed part, in the user's columns.
    residual_variance
        σ².
    covariances
        Name of each random effect → its covariance (d, d) in the user's columns, rank-deficient where the
        estimate lies on the boundary.
    criterion
        −2 log restricted (or full) likelihood in the user's columns.
    log_likelihood
        −criterion / 2.
    start
        Name → covariance (d, d) from which the search started.
    evaluations, restarts
        Evaluations of the criterion; times the certificate sent the search back.
    certificate
        Name → smallest eigenvalue of the derivative with respect to the covariance, over its natural scale.
        At a minimum none is below zero (beyond rounding).
    gradient_size
        Decrease of the criterion that one more Newton step promises.
    singular
        Some covariance is on the boundary (a variance of zero, a correlation of ±1).
    converged
        The certificate and the gradient hold.
    method
        'REML', 'ML', or 'type 1 analysis of variance' where no search converged and the moments stand in.
    vector
        The parameters, for the methods that go on from here.
    compressed
        The compressed model; None: it is made of the model where it is asked for.
    """

    model: NestedModel
    restricted: bool
    coefficients: FloatArray
    coefficient_covariance: FloatArray
    residual_variance: float
    covariances: dict[str, FloatArray]
    criterion: float
    log_likelihood: float
    start: dict[str, FloatArray]
    evaluations: int
    restarts: int
    certificate: dict[str, float]
    gradient_size: float
    singular: bool
    converged: bool
    method: str
    vector: FloatArray = field(repr=False)
    compressed: Compression | None = field(repr=False)

    @cached_property
    def compression(self) -> Compression:
        """The compressed model."""
        return compress(self.model) if self.compressed is None else self.compressed

    @property
    def layout(self) -> Layout:
        """Which parameter is which element of which factor."""
        return layout_of(self.compression)


def fit_nested_model(
    model: NestedModel, *, restricted: bool = True, start: Mapping[str, FloatArray] | None = None
) -> NestedModelFit:
    """Fit a nested mixed model by profiled REML (or ML).

    Parameters
    ----------
    model
        The model; the response in any unit.
    restricted
        REML if True, maximum likelihood if False.
    start
        Name → covariance (d, d) to start from, in the user's columns; None: analysis-of-variance moments.

    Returns
    -------
    NestedModelFit
        The estimates. Where neither the search nor two further starts end in a certified minimum, the
        analysis-of- variance moments, with `converged` False and `method` saying so.

    Raises
    ------
    ValueError
        Shapes do not match, or columns are linearly dependent.

    References
    ----------
    Bates, Mächler, Bolker & Walker (2015), Journal of Statistical Software 67(1): the profiled criterion.
    """
    check_model(model)
    compression = compress(model)
    first = None if start is None else _vector_from(compression, model, start)
    optimum = optimise(compression, restricted=restricted, start=first)
    for factor in (0.2, 5.0):
        if optimum.converged:
            break
        again = optimise(compression, restricted=restricted, start=optimum.start * factor)
        optimum = min(optimum, again, key=lambda o: (not o.converged, o.criterion))
    if optimum.converged:
        return _fit(model, compression, optimum, optimum.vector, restricted, "REML" if restricted else "ML")
    return _fit(model, compression, optimum, _moments(compression), restricted, "type 1 analysis of variance")


def _moments(compression: Compression) -> FloatArray:
    covariances, _, variance = moment_covariances(compression)
    tidy = [semidefinite_cholesky(c / variance, 1e-10)[:, :, None] for c in covariances]
    return layout_of(compression).vector(tidy)[:, 0]


def _vector_from(compression: Compression, model: NestedModel, start: Mapping[str, FloatArray]) -> FloatArray:
    """Parameters of covariances in the user's columns; σ² is guessed by the moments."""
    _, _, variance = moment_covariances(compression)
    factors = []
    for term, basis in zip(model.terms, compression.columns.term_bases, strict=True):
        scaled = basis @ np.asarray(start[term.name], dtype=float) @ basis.T
        factors.append(semidefinite_cholesky(scaled / variance)[:, :, None])
    return layout_of(compression).vector(factors)[:, 0]


def _fit(
    model: NestedModel,
    compression: Compression,
    optimum: Optimum,
    vector: FloatArray,
    restricted: bool,
    method: str,
) -> NestedModelFit:
    layout = layout_of(compression)
    value, _, _ = evaluate(compression, layout, vector[:, None], restricted=restricted)
    variance = residual_variance(compression, value, restricted)
    coefficients, covariance = fixed_part(compression, value, variance)
    criterion = float(value.criterion[0]) + basis_constant(compression, restricted)
    names = [term.name for term in model.terms]
    return NestedModelFit(
        model=model,
        restricted=restricted,
        coefficients=coefficients,
        coefficient_covariance=covariance,
        residual_variance=variance,
        covariances=dict(zip(names, covariances_of(compression, vector, variance), strict=True)),
        criterion=criterion,
        log_likelihood=-criterion / 2.0,
        start=dict(zip(names, covariances_of(compression, optimum.start, variance), strict=True)),
        evaluations=optimum.evaluations,
        restarts=optimum.restarts,
        certificate=dict(zip(names, optimum.certificate, strict=True)),
        gradient_size=optimum.gradient_size,
        singular=bool((vector[layout.diagonal()] == 0.0).any()),
        converged=optimum.converged,
        method=method,
        vector=vector,
        compressed=compression,
    )


def residual_variance(compression: Compression, value: Value, restricted: bool) -> float:
    """σ² that minimises the criterion."""
    return float(value.residual_square[0]) / (compression.rows - (compression.fixed if restricted else 0))


def basis_constant(compression: Compression, restricted: bool) -> float:
    """What the criterion in the user's fixed columns has more than that in scaled ones: 2 log|det G|."""
    return 2.0 * float(np.linalg.slogdet(compression.columns.fixed_basis)[1]) if restricted else 0.0


def fixed_part(compression: Compression, value: Value, variance: float) -> tuple[FloatArray, FloatArray]:
    """Coefficients (p,) and their covariance (p, p) in the user's columns."""
    back = np.linalg.inv(compression.columns.fixed_basis)
    coefficients = back @ (compression.least_squares + value.coefficients[:, 0])
    return coefficients, variance * back @ value.unscaled_covariance[0] @ back.T


def covariances_of(compression: Compression, vector: FloatArray, variance: float) -> list[FloatArray]:
    """Covariances (d, d) of all random effects in the user's columns."""
    factors = layout_of(compression).factors(vector[:, None])
    out = []
    for theta, basis in zip(factors, compression.columns.term_bases, strict=True):
        user = np.linalg.solve(basis, theta[:, :, 0])
        out.append(variance * user @ user.T)
    return out
