"""The nested model fitted by statsmodels on its own, where that package can express it.

MixedLM takes a covariance of several random columns for the units of its groups only; everything inside a
group has independent variance components of one column each. So it can express a model in which only the
outermost level carries lines.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from typing import Any

import numpy as np

from campaign.methods.nested_design import FloatArray, IntArray, NestedModel
from campaign.methods.nested_fit import NestedModelFit


@dataclass(frozen=True)
class StatsmodelsFit:
    """What statsmodels' own search found, in the user's units.

    Attributes
    ----------
    log_likelihood
        Restricted (or full) log-likelihood at its optimum.
    coefficients
        (p,) fixed part.
    covariances
        Name of each random effect → its covariance (d, d).
    residual_variance
        σ².
    converged
        Whether it says so itself.
    """

    log_likelihood: float
    coefficients: FloatArray
    covariances: dict[str, FloatArray]
    residual_variance: float
    converged: bool


def why_not_in_statsmodels(model: NestedModel) -> str:
    """Say why MixedLM cannot express *model*; empty where it can."""
    if not model.terms:
        return "the model has no random effect"
    outermost = outermost_level(model)
    wide = [term for term in model.terms if term.columns.shape[1] > 1]
    if inner := [term.name for term in wide if term.level != outermost or term.copies is not None]:
        return f"{' and '.join(inner)} carry a covariance of several columns inside the units of {outermost}"
    if len(wide) > 1:
        return f"several effects of {outermost} carry a covariance of their own"
    return ""


def outermost_level(model: NestedModel) -> str:
    """Return the outermost level on which a random effect lives."""
    carried = {term.level for term in model.terms}
    return next(name for name, _ in model.levels if name in carried)


def fit_by_statsmodels(fit: NestedModelFit) -> StatsmodelsFit:
    """Fit the model of *fit* by statsmodels' MixedLM from its own starting point.

    Only the scale of the response is taken from *fit*: MixedLM searches badly where a variance is far from
    one.

    Raises
    ------
    ValueError
        Where MixedLM cannot express the model, or its search fails.
    """
    model = fit.model
    if reason := why_not_in_statsmodels(model):
        raise ValueError(reason)
    unit = float(np.sqrt(fit.residual_variance))
    theirs, wide = _mixed_model(fit, unit)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            found = theirs.fit(reml=fit.restricted, method=["bfgs", "lbfgs", "cg"], maxiter=500)
        except (np.linalg.LinAlgError, IndexError) as fault:
            raise ValueError(f"statsmodels' search failed: {fault}") from fault
    degrees = len(model.response) - (model.fixed.shape[1] if fit.restricted else 0)
    variances = dict(zip(theirs.exog_vc.names, np.asarray(found.vcomp), strict=True))
    covariances = {
        term.name: unit**2
        * (np.asarray(found.cov_re) if term.name == wide else np.array([[variances[term.name]]]))
        for term in model.terms
    }
    return StatsmodelsFit(
        log_likelihood=float(found.llf) - degrees * float(np.log(unit)),
        coefficients=np.asarray(found.fe_params, dtype=float) * unit,
        covariances=covariances,
        residual_variance=float(found.scale) * unit**2,
        converged=bool(found.converged),
    )


def effect_of_row(fit: NestedModelFit, number: int) -> IntArray:
    """Return which effect of term *number* each row belongs to, counted from 0 over units and copies."""
    rows = fit.compression.term_rows[number]
    return np.asarray(rows.unit * rows.copies + rows.copy, dtype=np.int64)


def _mixed_model(fit: NestedModelFit, unit: float) -> tuple[Any, str]:
    """The model of statsmodels for response/unit, and the name of the effect of its groups."""
    from statsmodels.regression.mixed_linear_model import MixedLM, VCSpec

    model = fit.model
    outermost = outermost_level(model)
    number = next(k for k, term in enumerate(model.terms) if term.level == outermost)
    groups = fit.compression.term_rows[number].unit
    own = [k for k, t in enumerate(model.terms) if t.level == outermost and t.copies is None]
    own.sort(key=lambda k: -model.terms[k].columns.shape[1])
    wide = model.terms[own[0]] if own else None
    others = [k for k in range(len(model.terms)) if wide is None or model.terms[k] is not wide]
    labels, matrices = [], []
    for k in others:
        columns = _indicators(fit, k, groups)
        labels.append([[str(j) for j in range(m.shape[1])] for m in columns])
        matrices.append(columns)
    components = VCSpec([model.terms[k].name for k in others], labels, matrices)
    made = MixedLM(
        model.response / unit,
        model.fixed,
        groups,
        exog_re=wide.columns if wide is not None else None,
        exog_vc=components,
    )
    return made, wide.name if wide is not None else ""


def _indicators(fit: NestedModelFit, number: int, groups: IntArray) -> list[FloatArray]:
    """For each group, the single column of a term parted over its effects there."""
    effect, column = effect_of_row(fit, number), fit.model.terms[number].columns[:, 0]
    out = []
    for group in np.unique(groups):
        here = np.flatnonzero(groups == group)
        units = np.unique(effect[here])
        out.append((effect[here][:, None] == units) * column[here][:, None])
    return out
