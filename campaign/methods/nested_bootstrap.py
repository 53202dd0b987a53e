"""Many refits of one design: parametric bootstrap of a nested fit, and the test of a component by it.

The design's cross-products are common to all replicates; only those with the response differ. All replicates
are minimised together, from the fit's own estimate and second derivative.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from campaign.methods.analysis_of_variance import nested_analysis_of_variance
from campaign.methods.batched_algebra import semidefinite_cholesky
from campaign.methods.batched_minimiser import IntArray, Objective, inverse_curvature, minimise_many
from campaign.methods.nested_compression import Compression
from campaign.methods.nested_criterion import Gradient
from campaign.methods.nested_design import BoolArray, FloatArray
from campaign.methods.nested_fit import NestedModelFit, basis_constant, fit_nested_model
from campaign.methods.nested_many_slots import innermost_of
from campaign.methods.nested_parameters import Layout, evaluate, replicates_at_once

_CONE_TOLERANCE = 1e-4


@dataclass(frozen=True)
class Refits:
    """Fits of one model to many responses.

    Attributes
    ----------
    coefficients
        (R, p) fixed part, in the user's columns.
    residual_variance
        (R,).
    covariances
        Name → (R, d, d) in the user's columns.
    criterion
        (R,) −2 log likelihood in the user's columns.
    converged
        (R,) gradient and certificate hold.
    evaluations
        Evaluations of one replicate's criterion, all together.
    """

    coefficients: FloatArray
    residual_variance: FloatArray
    covariances: dict[str, FloatArray]
    criterion: FloatArray
    converged: BoolArray
    evaluations: int


@dataclass(frozen=True)
class ComponentTest:
    """Test that a random effect has no variance.

    Attributes
    ----------
    kind
        'exact F' or 'parametric bootstrap'.
    statistic
        F, or the criterion without the effect less that with it.
    p
        Probability of as large a statistic where there is no such effect.
    degrees_of_freedom
        Of F; (0, 0) for the bootstrap.
    replicates
        Of the bootstrap; 0 for F.
    """

    kind: str
    statistic: float
    p: float
    degrees_of_freedom: tuple[float, float]
    replicates: int


def simulate_responses(fit: NestedModelFit, replicates: int, seed: int) -> FloatArray:
    """Draw responses from a fitted model.

    Parameters
    ----------
    fit
        The model and its estimates.
    replicates
        R.
    seed
        Seed of the random numbers.

    Returns
    -------
    FloatArray
        (N, R), rows as in the model.
    """
    random = np.random.default_rng(seed)
    mean = fit.model.fixed @ fit.coefficients
    out = mean[:, None] + np.sqrt(fit.residual_variance) * random.standard_normal((len(mean), replicates))
    for term, rows in zip(fit.model.terms, fit.compression.term_rows, strict=True):
        factor = semidefinite_cholesky(fit.covariances[term.name])
        effects = random.standard_normal((rows.units * rows.copies, replicates, len(factor))) @ factor.T
        effect = rows.unit * rows.copies + rows.copy
        for k, column in enumerate(term.columns.T):
            out += column[:, None] * effects[effect, :, k]
    return np.asarray(out)


def bootstrap_refits(fit: NestedModelFit, replicates: int, seed: int) -> Refits:
    """Refit the model to responses drawn from it.

    Parameters
    ----------
    fit
        The model and its estimates.
    replicates
        How many.
    seed
        Seed of the random numbers.
    """
    return refit(fit, simulate_responses(fit, replicates, seed))


def refit(fit: NestedModelFit, responses: FloatArray) -> Refits:
    """Fit the model of `fit` to other responses of the same design.

    Parameters
    ----------
    fit
        A fit of the model, from whose estimate the searches start.
    responses
        (N, R), rows as in the model.
    """
    compression, layout = fit.compression, fit.layout
    residuals, least_squares = _residuals(compression, responses)
    start, inverse = _common_start(fit)
    chunk = replicates_at_once(compression)
    parts = []
    evaluations = 0
    for k in range(0, responses.shape[1], chunk):
        products = compression.products_of(residuals[:, k : k + chunk])
        search = _Refits(compression, layout, fit.restricted, products)
        vectors, good = search.run(start, inverse)
        evaluations += search.evaluations
        parts.append(_collect(fit, vectors, products, least_squares[:, k : k + chunk], good))
    return Refits(
        coefficients=np.concatenate([part.coefficients for part in parts]),
        residual_variance=np.concatenate([part.residual_variance for part in parts]),
        covariances={
            name: np.concatenate([part.covariances[name] for part in parts]) for name in fit.covariances
        },
        criterion=np.concatenate([part.criterion for part in parts]),
        converged=np.concatenate([part.converged for part in parts]),
        evaluations=evaluations,
    )


def _residuals(compression: Compression, responses: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Responses less their least-squares fit on the fixed part, which REML does not see but rounding does."""
    fixed = compression.columns.fixed
    least_squares = np.linalg.solve(fixed.T @ fixed, fixed.T @ responses)
    return np.asarray(responses - fixed @ least_squares), np.asarray(least_squares)


def _common_start(fit: NestedModelFit) -> tuple[FloatArray, FloatArray]:
    """The estimate lifted off the boundary, and the inverse second derivative there."""
    vector, layout = fit.vector.copy(), fit.layout
    for n in layout.diagonal():
        rows = fit.compression.term_rows[layout.places[n][0]]
        noise = np.sqrt(rows.units * rows.copies / fit.compression.rows)
        vector[n] = max(vector[n], 0.3 * noise)
    widths = 1e-4 * np.maximum(np.abs(vector), 1e-2 * np.abs(vector).max(initial=0.0))
    places = np.column_stack([vector, vector[:, None] + np.diag(widths)])
    gradients = np.hstack(
        [
            evaluate(fit.compression, layout, places[:, [k]], restricted=fit.restricted)[1]
            for k in range(places.shape[1])
        ]
    )
    hessian = (gradients[:, 1:] - gradients[:, :1]) / widths
    return vector, inverse_curvature(((hessian + hessian.T) / 2.0)[:, :, None])[:, :, 0]


class _Refits:
    """The search for a chunk of replicates."""

    def __init__(
        self, compression: Compression, layout: Layout, restricted: bool, products: FloatArray
    ) -> None:
        self.compression, self.layout, self.restricted = compression, layout, restricted
        units = compression.steps[0].units if compression.steps else 1
        self.products = products.reshape(*products.shape[:2], -1, units)
        ready = compression.many_slots
        self.innermost = None if ready is None else innermost_of(compression.steps[0], products)
        self.evaluations = 0

    def objective(self, vectors: FloatArray, which: IntArray) -> tuple[FloatArray, FloatArray]:
        """Criterion and gradient of some replicates."""
        value, gradient, _ = self._evaluate(vectors, which)
        return value, gradient

    def _evaluate(self, vectors: FloatArray, which: IntArray) -> tuple[FloatArray, FloatArray, Gradient]:
        products = self.products[:, :, which].reshape(*self.products.shape[:2], -1)
        value, gradient, cones = evaluate(
            self.compression,
            self.layout,
            vectors,
            restricted=self.restricted,
            products=products,
            innermost=None if self.innermost is None else self.innermost.of(which),
        )
        self.evaluations += len(which)
        return value.criterion, gradient, cones

    def run(self, start: FloatArray, inverse: FloatArray) -> tuple[FloatArray, BoolArray]:
        """Minimise all; start those again whose certificate fails."""
        replicates = self.products.shape[2]
        vectors = np.repeat(start[:, None], replicates, axis=1)
        if not len(start):
            return vectors, np.ones(replicates, dtype=bool)
        which = np.arange(replicates)
        good = np.zeros(replicates, dtype=bool)
        for _ in range(4):
            stack = np.repeat(inverse[:, :, None], len(which), axis=2)
            minima = minimise_many(self._some(which), vectors[:, which], stack, tolerance=1e-8)
            vectors[:, which] = minima.x
            _, _, gradient = self._evaluate(vectors[:, which], which)
            away, holds = _leave_false_stops(self.compression, self.layout, vectors[:, which], gradient)
            good[which] = minima.converged & holds
            vectors[:, which[~holds]] = away[:, ~holds]
            which = which[~holds]
            if not len(which):
                break
        return vectors, good

    def _some(self, which: IntArray) -> Objective:
        return lambda vectors, some: self.objective(vectors, which[some])


def _leave_false_stops(
    compression: Compression, layout: Layout, vectors: FloatArray, gradient: Gradient
) -> tuple[FloatArray, BoolArray]:
    """Vectors moved along the eigenvector of a cone's negative eigenvalue, and where there was none."""
    factors = layout.factors(vectors)
    holds = np.ones(vectors.shape[1], dtype=bool)
    for t, (cone, information) in enumerate(zip(gradient.cones, gradient.information, strict=True)):
        rows = compression.term_rows[t]
        size = np.sqrt(np.maximum(np.einsum("iir->ri", information), 1e-300))
        values, eigenvectors = np.linalg.eigh(cone.transpose(2, 0, 1) / (size[:, :, None] * size[:, None, :]))
        for r in np.flatnonzero(values[:, 0] < -_CONE_TOLERANCE):
            direction = eigenvectors[r, :, 0] / size[r]
            lift = 0.3 * np.sqrt(rows.units * rows.copies)
            theta = factors[t][:, :, r]
            factors[t][:, :, r] = semidefinite_cholesky(
                theta @ theta.T + lift * np.outer(direction, direction)
            )
            holds[r] = False
    return layout.vector(factors), holds


def _collect(
    fit: NestedModelFit, vectors: FloatArray, products: FloatArray, least_squares: FloatArray, good: BoolArray
) -> Refits:
    compression = fit.compression
    value, _, _ = evaluate(compression, fit.layout, vectors, restricted=fit.restricted, products=products)
    degrees = compression.rows - (compression.fixed if fit.restricted else 0)
    variance = value.residual_square / degrees
    covariances = {}
    bases = compression.columns.term_bases
    for term, basis, theta in zip(fit.model.terms, bases, fit.layout.factors(vectors), strict=True):
        user = np.linalg.inv(basis) @ theta.transpose(2, 0, 1)
        covariances[term.name] = variance[:, None, None] * user @ user.transpose(0, 2, 1)
    coefficients = np.linalg.solve(compression.columns.fixed_basis, least_squares + value.coefficients)
    constant = basis_constant(compression, fit.restricted)
    return Refits(np.asarray(coefficients.T), variance, covariances, value.criterion + constant, good, 0)


def test_component(fit: NestedModelFit, name: str, replicates: int, seed: int) -> ComponentTest:
    """Test that the random effect `name` has no variance.

    An exact F where all random effects are single values without copies, one a level, and the design is
    balanced; else a parametric bootstrap of the likelihood ratio under the model without the effect.

    Parameters
    ----------
    fit
        The fitted model.
    name
        The random effect in question.
    replicates
        Of the bootstrap.
    seed
        Of the bootstrap.

    References
    ----------
    Davison & Hinkley (1997), Bootstrap Methods and their Application, 4.2: p = (1 + exceedances)/(1 +
    replicates).
    """
    exact = _exact_test(fit, name)
    if exact is not None:
        return exact
    term = fit.model.term(name)
    smaller = replace(fit.model, terms=tuple(t for t in fit.model.terms if t is not term))
    without = fit_nested_model(smaller, restricted=fit.restricted)
    statistic = max(without.criterion - fit.criterion, 0.0)
    responses = simulate_responses(without, replicates, seed)
    drawn = refit(without, responses).criterion - refit(fit, responses).criterion
    exceeding = int((drawn >= statistic - 1e-7).sum())
    return ComponentTest(
        "parametric bootstrap", statistic, (1 + exceeding) / (1 + replicates), (0.0, 0.0), replicates
    )


test_component.__test__ = False  # type: ignore[attr-defined]  # not a test of pytest's


def _exact_test(fit: NestedModelFit, name: str) -> ComponentTest | None:
    model = fit.model
    levels = [step.level for step in reversed(fit.compression.steps)]
    plain = all(
        term.copies is None and term.columns.shape[1] == 1 and (term.columns == 1.0).all()
        for term in model.terms
    )
    if not plain or sorted(term.level for term in model.terms) != sorted(levels):
        return None
    used = [(level, codes) for level, codes in model.levels if level in levels]
    table = nested_analysis_of_variance(model.response, used, fixed=model.fixed)
    if not table.balanced:
        return None
    test = table.test(model.term(name).level)
    return ComponentTest("exact F", test.statistic, test.p, test.degrees_of_freedom, 0)
