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

from campaign.analyses.variance_fit import GenerationFit, fit_generation
from campaign.analyses.variance_model import VarianceModel
from campaign.keeping.program import digest_of, program_digest
from campaign.keeping.value_codec import encode
from campaign.methods.nested_compression import Compression, compress
from campaign.methods.nested_design import NestedModel
from campaign.workers.crew import LocalProcesses, ThisProcess
from campaign.workers.sharing import Work, share_out
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
    keys = [_key(task) for task in tasks] if workshop.store.is_open else []
    kept = workshop.store.get_many(keys)
    known = [kept[key].get("") if key in kept else None for key in keys] or [None] * len(tasks)
    readings = sum(
        len(task.model.response) for task, found in zip(tasks, known, strict=True) if found is None
    )
    local = isinstance(workshop.crew, LocalProcesses) and readings >= WORTH_READINGS
    crew = workshop.crew if local else ThisProcess()
    wanted = [task for task, found in zip(tasks, known, strict=True) if found is None]
    made = (outcome for (outcome,) in share_out(_WORK, wanted, crew))
    outcomes: list[Outcome] = []
    for number, (task, found) in enumerate(zip(tasks, known, strict=True)):
        outcome = cast(Outcome, found) if found is not None else next(made)
        if found is None and keys:
            workshop.store.put(keys[number], outcome)
        outcomes.append(outcome if isinstance(outcome, str) else _with_data(outcome, task.model))
    return outcomes


def fit_task(task: FitTask) -> tuple[Outcome]:
    """Fit one task; what cannot be fitted is a sentence, not a fault."""
    try:
        fit = fit_generation(task.model, task.places, limits_at=task.limits_at)
    except (ValueError, np.linalg.LinAlgError) as error:
        return (str(error),)
    return (_without_data(fit),)


_WORK: Work[FitTask, Outcome] = Work(fit_task, lambda task: (task,), fit_task)


def _key(task: FitTask) -> str:
    return digest_of([program_digest(), "nested fit", encode(task)])


def _without_data(fit: GenerationFit) -> GenerationFit:
    bare = replace(fit.fit, model=cast(NestedModel, None), compression=cast(Compression, None))
    return replace(fit, model=cast(VarianceModel, None), fit=bare)


def _with_data(fit: GenerationFit, model: VarianceModel) -> GenerationFit:
    return replace(
        fit, model=model, fit=replace(fit.fit, model=model.model, compression=compress(model.model))
    )
