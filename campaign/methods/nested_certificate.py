"""The same model in statsmodels: an independent likelihood at our estimate, and its results object.

statsmodels takes variance components with free variances only, not a covariance of intercept and slope below
the outermost level. Random columns rotated by our Cholesky factor have unit variances in units of σ², so that
at our estimate its model is the same model.
"""

from __future__ import annotations

import warnings
from typing import Any

import numpy as np

from campaign.methods.nested_design import FloatArray, IntArray
from campaign.methods.nested_fit import NestedModelFit


def statsmodels_log_likelihood(fit: NestedModelFit) -> float:
    """Log (restricted) likelihood that statsmodels computes at the estimate of `fit`.

    The time grows with the square of the rows of an outermost unit; a few thousand rows take seconds.
    """
    model, unit = _mixed_model(fit, fit.model.response - fit.model.fixed @ fit.coefficients)
    degrees = len(fit.model.response) - (len(fit.coefficients) if fit.restricted else 0)
    return float(model.loglike(_unit_parameters(model))) - degrees * float(np.log(unit))


def as_statsmodels(fit: NestedModelFit) -> Any:
    """`MixedLMResults` of statsmodels at the estimate of `fit`.

    The response is divided by the residual SD and the random columns are rotated, so that its scale and its
    variance components are one; coefficients are in units of the residual SD. Effects estimated as zero are
    left out.

    Raises
    ------
    ValueError
        All random effects are estimated as zero: the fit is ordinary least squares.
    """
    if not fit.vector.any():
        raise ValueError("no random effect differs from zero: use statsmodels' OLS")
    model, _ = _mixed_model(fit, fit.model.response)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return model.fit(
            start_params=_unit_parameters(model), reml=fit.restricted, method="lbfgs", maxiter=0, disp=False
        )


def _unit_parameters(model: Any) -> Any:
    from statsmodels.regression.mixed_linear_model import MixedLMParams

    return MixedLMParams.from_components(
        fe_params=np.zeros(model.k_fe), cov_re=np.zeros((0, 0)), vcomp=np.ones(model.k_vc)
    )


def _mixed_model(fit: NestedModelFit, response: FloatArray) -> tuple[Any, float]:
    """The model of statsmodels for response/σ, and σ."""
    from statsmodels.regression.mixed_linear_model import MixedLM, VCSpec

    unit = float(np.sqrt(fit.residual_variance))
    groups = _outermost_units(fit)
    names, matrices = [], []
    for number, term in enumerate(fit.model.terms):
        columns = _rotated_columns(fit, number, groups)
        if columns[0].shape[1]:
            names.append(term.name)
            matrices.append(columns)
    if not names:
        names, matrices = ["none"], [[np.zeros((n, 1)) for n in np.unique(groups, return_counts=True)[1]]]
    labels = [[[str(k) for k in range(m.shape[1])] for m in mine] for mine in matrices]
    model = MixedLM(response / unit, fit.model.fixed, groups, exog_vc=VCSpec(names, labels, matrices))
    model.reml, model.cov_pen, model.fe_pen = fit.restricted, None, None
    return model, unit


def _outermost_units(fit: NestedModelFit) -> IntArray:
    steps = fit.compression.steps
    if not steps:
        return np.zeros(len(fit.model.response), dtype=np.int64)
    outermost = steps[-1].level
    number = next(k for k, term in enumerate(fit.model.terms) if term.level == outermost)
    return fit.compression.term_rows[number].unit


def _rotated_columns(fit: NestedModelFit, number: int, groups: IntArray) -> list[FloatArray]:
    """For each outermost unit the columns of a random term, a set for each effect, times its factor."""
    theta = fit.layout.factors(fit.vector[:, None])[number][:, :, 0]
    rows = fit.compression.term_rows[number]
    turned = fit.compression.columns.terms[number] @ theta[:, theta.any(axis=0)]
    effect = rows.unit * rows.copies + rows.copy
    out = []
    for group in np.unique(groups):
        here = np.flatnonzero(groups == group)
        units = np.unique(effect[here])
        out.append(np.hstack([turned[here] * (effect[here] == unit)[:, None] for unit in units]))
    return out
