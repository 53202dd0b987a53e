"""Costly steps of analyses: shared out to workers, and taken from an earlier run that had the same input."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import TypeVar, cast

from campaign.keeping.program import digest_of, program_digest
from campaign.keeping.value_codec import encode
from campaign.workers.crew import LocalProcesses, ThisProcess
from campaign.workers.sharing import Work, share_out
from campaign.workers.workshop import Workshop

T = TypeVar("T")
R = TypeVar("R")


def do_all(
    function: Callable[[T], tuple[R]],
    tasks: Sequence[T],
    workshop: Workshop,
    worth: Callable[[list[T]], bool],
    meanwhile: Callable[[], object] | None = None,
) -> list[R]:
    """Return the result of every task, in order.

    Parameters
    ----------
    function
        Does one task; a function of a module, without effects, that raises for no task. Its results are never
        ``None``.
    tasks
        Values that :mod:`campaign.keeping.value_codec` writes: what a result is told by.
    workshop
        Who works, and what earlier runs left.
    worth
        Whether sharing out the tasks that nobody has done yet is faster than doing them here. Processes of
        this machine may share them; a cluster reads only.
    meanwhile
        What this process does, once, while others work: after all tasks are handed over.
    """
    keys = [_key(function, task) for task in tasks] if workshop.store.is_open else []
    kept = workshop.store.get_many(keys)
    known = [kept[key].get("") if key in kept else None for key in keys] or [None] * len(tasks)
    wanted = [task for task, found in zip(tasks, known, strict=True) if found is None]
    shared = isinstance(workshop.crew, LocalProcesses) and worth(wanted)
    work: Work[T, R] = Work(function, lambda task: (task,), function)
    crew = workshop.crew if shared else ThisProcess()
    made = iter([result for (result,) in share_out(work, wanted, crew, meanwhile)])
    results = [cast(R, found) if found is not None else next(made) for found in known]
    if keys:
        for key, found, result in zip(keys, known, results, strict=True):
            if found is None:
                workshop.store.put(key, result)
    return results


def keep(function: Callable[[T], tuple[R]], task: T, workshop: Workshop) -> R:
    """Return the result of one task, from an earlier run where that had the same; as :func:`do_all` does."""
    return do_all(function, [task], workshop, lambda _: False)[0]


def _key(function: Callable[[T], tuple[R]], task: T) -> str:
    return digest_of([program_digest(), f"{function.__module__}.{function.__qualname__}", encode(task)])
