"""Nested fits shared out to workers, and taken from an earlier run where the same was fitted before.

What is handed over and kept is a fit without its data: the model it belongs to is here already, and
compressing that anew costs little beside the search. So a fit is the same, to the last bit, whoever made it
and when.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from typing import cast

import numpy as np

from campaign.analyses.shared_work import do_all
from campaign.analyses.variance_fit import GenerationFit, fit_generation
from campaign.analyses.variance_model import VarianceModel
from campaign.methods.nested_compression import Compression, compress
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
    """

    model: VarianceModel
    places: Mapping[str, float]
    limits_at: tuple[str, ...]


Outcome = GenerationFit | str
"""A fit, or why there is none."""


def fit_all(tasks: Sequence[FitTask], workshop: Workshop) -> list[Outcome]:
    """Fit every task and return its outcome, in order."""
    outcomes = do_all(fit_task, tasks, workshop, _are_worth_sharing)
    return [
        outcome if isinstance(outcome, str) else _with_data(outcome, task.model)
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
    return (_without_data(fit),)


def _without_data(fit: GenerationFit) -> GenerationFit:
    bare = replace(fit.fit, model=cast(NestedModel, None), compression=cast(Compression, None))
    return replace(fit, model=cast(VarianceModel, None), fit=bare)


def _with_data(fit: GenerationFit, model: VarianceModel) -> GenerationFit:
    return replace(
        fit, model=model, fit=replace(fit.fit, model=model.model, compression=compress(model.model))
    )
