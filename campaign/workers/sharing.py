"""Sharing tasks out to workers: a few at a time, results in order, and no death of a worker loses a task.

A worker that dies takes its task along, and often those that others had in hand; nobody says whose fault it
was. All of them are run again, each alone and piece by piece, so that a second death has a name. A piece that
kills its worker twice is given up, and nothing else is. Tasks have no effects, so running one twice does no
harm.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Future
from contextlib import suppress
from dataclasses import dataclass, field
from typing import Any, Generic, TypeVar

from campaign.workers.crew import Crew, CrewGone, ThisProcess

T = TypeVar("T")
R = TypeVar("R")

DEATHS_TO_GIVE_UP = 2
"""A piece that is alone with so many workers that died of it is given up."""

UNEXPLAINED_DEATHS = 3
"""Where workers died so often and no piece was found to be the cause, the rest is done in this process."""

IN_HAND = 2
"""Tasks in hand, a worker: one that is worked on and one that waits."""

ANSWER_S = 2.0
"""How often it is asked whether anybody is left to wait for, s."""


@dataclass(frozen=True)
class Work(Generic[T, R]):
    """What is to be done with every task.

    Attributes
    ----------
    function
        Does one task; a function of a module, without effects, that raises for no task.
    split
        Parts a task into pieces that may be done alone.
    given_up
        What stands for the result of a piece that killed its workers.
    """

    function: Callable[[T], tuple[R, ...]]
    split: Callable[[T], Iterable[T]]
    given_up: Callable[[T], tuple[R, ...]]


def share_out(
    work: Work[T, R], tasks: Iterable[T], crew: Crew, meanwhile: Callable[[], object] | None = None
) -> Iterator[tuple[R, ...]]:
    """Do all tasks and yield their results in the order of the tasks.

    Parameters
    ----------
    work
        What is to be done.
    tasks
        Taken one at a time, when there is a hand for it: at most :data:`IN_HAND` times ``crew.hands`` are
        begun and not yet handed on; all of them at once where this process has something else to do.
    crew
        Who does it.
    meanwhile
        What this process does, once, when all tasks are handed over.

    Yields
    ------
    tuple
        The results of one task.
    """
    if meanwhile is None:
        return _Sharing(work, crew, IN_HAND * crew.hands).results(tasks)
    return _Sharing(work, crew, math.inf).results(_then(tasks, meanwhile))


def _then(tasks: Iterable[T], meanwhile: Callable[[], object]) -> Iterator[T]:
    yield from tasks
    meanwhile()


@dataclass
class _Sharing(Generic[T, R]):
    work: Work[T, R]
    crew: Crew
    most: float
    in_hand: deque[tuple[T, Future[tuple[R, ...]]]] = field(default_factory=deque)
    unexplained: int = 0

    def results(self, tasks: Iterable[T]) -> Iterator[tuple[R, ...]]:
        for task in tasks:
            self.in_hand.append((task, self._begin(task)))
            if len(self.in_hand) >= self.most or self.crew.hands == 1:
                yield self._next()
        while self.in_hand:
            yield self._next()

    def _next(self) -> tuple[R, ...]:
        _, future = self.in_hand[0]
        if not self._went_well(future):
            self._begin_anew()
        _, future = self.in_hand.popleft()
        return future.result()

    def _begin(self, task: T) -> Future[tuple[R, ...]]:
        if isinstance(self.crew, ThisProcess):
            return self.crew.submit(self.work.function, task)
        try:
            return self.crew.submit(self.work.function, task)
        except CrewGone:
            self._go_on_by_itself()
            return self._begin(task)
        except Exception as fault:  # a broken executor raises at once
            failed: Future[tuple[R, ...]] = Future()
            failed.set_exception(fault)
            return failed

    def _went_well(self, future: Future[Any]) -> bool:
        """Wait for a result; a worker's death and whatever else a cluster may raise are the same here."""
        while True:
            try:
                return future.exception(timeout=ANSWER_S) is None
            except TimeoutError:
                if not future.done() and not self.crew.is_there():
                    return False
            except BaseException as fault:
                if isinstance(fault, (KeyboardInterrupt, SystemExit)):
                    raise
                return False

    def _begin_anew(self) -> None:
        """Run again, each alone, what was in hand when a worker died."""
        finished = [(task, future, self._went_well(future)) for task, future in self.in_hand]
        self._renew()
        culprits = 0
        self.in_hand.clear()
        for task, future, well in finished:
            if not well:
                results, deadly = self._alone(task)
                future = Future()
                future.set_result(results)
                culprits += deadly
            self.in_hand.append((task, future))
        if not culprits:
            self.unexplained += 1
            if self.unexplained >= UNEXPLAINED_DEATHS:
                self._go_on_by_itself()

    def _alone(self, task: T) -> tuple[tuple[R, ...], int]:
        """Do a task piece by piece with nothing else in hand; return results and how many were given up."""
        results: list[R] = []
        culprits = 0
        for piece in self.work.split(task):
            found = self._tried(piece)
            culprits += found is None
            results += found if found is not None else self.work.given_up(piece)
        return tuple(results), culprits

    def _tried(self, piece: T) -> tuple[R, ...] | None:
        """Do one piece; ``None`` where it killed its workers, which are there for anything else."""
        for _ in range(DEATHS_TO_GIVE_UP):
            future = self._begin(piece)
            if self._went_well(future):
                return future.result()
            self._renew()
        if self._answers(piece):
            return None
        self._go_on_by_itself()
        return self._begin(piece).result()

    def _answers(self, piece: T) -> bool:
        """Whether a worker can take the piece into its hands and say so: then it is the work that kills."""
        try:
            return self._went_well(self.crew.submit(_take_up, piece))
        except Exception:
            return False

    def _renew(self) -> None:
        """Have new workers; where there are none, what killed a worker is still not tried here."""
        with suppress(CrewGone):
            self.crew.renew()

    def _go_on_by_itself(self) -> None:
        self.crew.close()
        self.crew = ThisProcess()


def _take_up(_: object) -> tuple[()]:
    """Take a task and do nothing."""
    return ()
