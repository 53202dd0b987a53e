"""Nested fits shared out to workers, and taken from an earlier run where the same was fitted before.

What is handed over and kept is a fit without its data: the model it belongs to is here already, and is
compressed anew where something asks for that. So a fit is the same, to the last bit, whoever made it
and when.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import cast

import numpy as np

from campaign.analyses.fit_checks import FitChecks, check_fit
from campaign.analyses.shared_work import do_all
from campaign.analyses.variance_fit import GenerationFit, fit_generation
from campaign.analyses.variance_model import VarianceModel
from campaign.methods.nested_design import NestedModel
from campaign.workers.workshop import Workshop

WORTH_READINGS = 30_000
"""Readings of all fits together from which on sharing them out is faster."""


@dataclass(frozen=True)
class FitTask:
    """What is to be fitted.

    Attributes
    ----------
    model
        The model.
    places
        ``zero``, ``mid``, ``full`` → x.
    limits_at
        As in :func:`campaign.analyses.variance_fit.fit_generation`.
    asked, unit, reference_unit
        What else is asked of the fit, as in :func:`campaign.analyses.fit_checks.check_fit`.
    """

    model: VarianceModel
    places: Mapping[str, float]
    limits_at: tuple[str, ...]
    asked: tuple[str, ...] = ()
    unit: str = ""
    reference_unit: str = ""


@dataclass(frozen=True)
class CheckedFit:
    """A fit, and the answers to what was asked of it."""

    fit: GenerationFit
    checks: FitChecks


Outcome = CheckedFit | str
"""A fit, or why there is none."""


def fit_all(
    tasks: Sequence[FitTask], workshop: Workshop, meanwhile: Callable[[], object] | None = None
) -> list[Outcome]:
    """Fit every task and return its outcome, in order.

    *meanwhile* is what this process does, once, while others fit (:func:`.shared_work.do_all`).
    """
    outcomes = do_all(fit_task, [_bare(task) for task in tasks], workshop, _are_worth_sharing, meanwhile)
    return [
        outcome if isinstance(outcome, str) else replace(outcome, fit=_with_data(outcome.fit, task.model))
        for task, outcome in zip(tasks, outcomes, strict=True)
    ]


def _are_worth_sharing(tasks: list[FitTask]) -> bool:
    return sum(len(task.model.response) for task in tasks) >= WORTH_READINGS


def fit_task(task: FitTask) -> tuple[Outcome]:
    """Fit one task; what cannot be fitted is a sentence, not a fault."""
    try:
        fit = fit_generation(task.model, task.places, limits_at=task.limits_at)
    except (ValueError, np.linalg.LinAlgError) as error:
        return (str(error),)
    checks = check_fit(fit, task.asked, task.unit, task.reference_unit)
    return (CheckedFit(_without_data(fit), checks),)


_COLUMNS = ["x", "order"]
"""Columns of the readings that a fit looks at; all else of them is in the model already."""


def _bare(task: FitTask) -> FitTask:
    """The task without what its outcome does not depend on: names of recordings, places in a table."""
    readings = task.model.readings[_COLUMNS].reset_index(drop=True)
    return replace(task, model=replace(task.model, readings=readings))


def _without_data(fit: GenerationFit) -> GenerationFit:
    bare = replace(fit.fit, model=cast(NestedModel, None), compressed=None)
    return replace(fit, model=cast(VarianceModel, None), fit=bare)


def _with_data(fit: GenerationFit, model: VarianceModel) -> GenerationFit:
    return replace(fit, model=model, fit=replace(fit.fit, model=model.model))
