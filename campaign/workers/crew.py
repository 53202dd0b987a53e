"""Who does the work: this process, processes of this machine, or a Dask cluster, all as executors.

Anything that is a :class:`concurrent.futures.Executor` serves; of an executor only ``submit(function, task)``
with one argument is used. Processes are spawned, never forked: a fork copies locks that other threads hold.
"""

from __future__ import annotations

import atexit
import os
import signal
import threading
import time
from collections.abc import Callable
from concurrent.futures import Executor, Future, ProcessPoolExecutor
from multiprocessing import active_children, connection, get_context, parent_process
from multiprocessing.process import BaseProcess
from types import TracebackType
from typing import Protocol, Self, TypeVar

T = TypeVar("T")
R = TypeVar("R")

ALGEBRA_THREADS = ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS")
"""Variables by which algebra libraries are told their number of threads."""


GRACE_S = 1.0
"""How long processes may take to end by themselves, s."""


class CrewGone(Exception):  # noqa: N818 - work goes on without the crew
    """There is nobody left to work, and nobody can be found: what is left is done in this process."""


class Crew(Protocol):
    """An executor that can be begun anew when a worker died.

    Attributes
    ----------
    hands
        Workers; tasks wait for as many again (see :func:`campaign.workers.sharing.share_out`).
    apart
        Whether workers may see other files than this process does.
    """

    hands: int
    apart: bool

    def submit(self, function: Callable[[T], R], task: T) -> Future[R]:
        """Hand a task to a worker; raises :class:`CrewGone` where there is none."""

    def is_there(self) -> bool:
        """Whether there is still somebody to wait for."""

    def renew(self) -> None:
        """Put new workers in the place of those that died."""

    def close(self) -> None:
        """Send everybody home; tasks that have not begun are dropped."""


class Closing:
    """A crew is closed where its ``with`` ends."""

    def close(self) -> None:
        """Send everybody home."""

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, fault: BaseException | None, where: TracebackType | None
    ) -> None:
        self.close()


class ThisProcess(Closing):
    """Works by itself: a task is done when it is handed over."""

    hands = 1
    apart = False

    def submit(self, function: Callable[[T], R], task: T) -> Future[R]:
        """Do the task now."""
        future: Future[R] = Future()
        try:
            future.set_result(function(task))
        except Exception as fault:
            future.set_exception(fault)
        return future

    def is_there(self) -> bool:
        """Return True."""
        return True

    def renew(self) -> None:
        """There is nothing to renew."""


class LocalProcesses(Closing):
    """Processes of this machine, started when the first task is handed over.

    Parameters
    ----------
    hands
        How many; :func:`cores` where ``None``.
    """

    apart = False

    def __init__(self, hands: int | None = None) -> None:
        self.hands = hands if hands is not None else cores()
        self._executor: Executor | None = None
        self._processes: list[BaseProcess] = []

    def submit(self, function: Callable[[T], R], task: T) -> Future[R]:
        """Hand a task to one of the processes."""
        try:
            if self._executor is not None:
                return self._executor.submit(function, task)
            others = active_children()
            self._executor = ProcessPoolExecutor(self.hands, get_context("spawn"), _begin_worker)
            future = self._executor.submit(function, task)  # spawned processes begin all at once
            self._processes = [child for child in active_children() if child not in others]
            return future
        except OSError as fault:
            raise CrewGone(str(fault)) from fault

    def is_there(self) -> bool:
        """Return True: the executor itself tells when a process died."""
        return True

    def renew(self) -> None:
        """Leave the processes that are left, and start others with the next task."""
        self.close()

    def close(self) -> None:
        """Let the processes end; those that are busy with what nobody waits for any more are ended."""
        executor, self._executor = self._executor, None
        if executor is not None:
            executor.shutdown(wait=False, cancel_futures=True)
            end = time.monotonic() + GRACE_S
            for process in self._processes:
                process.join(max(end - time.monotonic(), 0.0))
                process.terminate()
            executor.shutdown(wait=True)


def cores() -> int:
    """Return how many cores this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def _begin_worker() -> None:
    """Prepare a spawned process: one thread of algebra, no answer to Ctrl-C, and an end with its parent.

    It runs before NumPy is loaded. A worker that waits for tasks does not notice that its parent was killed,
    so a thread waits for that. One that is sent home leaves what it loaded to the system, which is faster
    than taking it down piece by piece: its results are with the parent already.
    """
    atexit.register(os._exit, 0)  # registered first, so it comes last
    for name in ALGEBRA_THREADS:
        os.environ.setdefault(name, "1")
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    parent = parent_process()
    if parent is not None:
        threading.Thread(target=_end_with, args=(parent.sentinel,), daemon=True).start()


def _end_with(sentinel: int) -> None:
    connection.wait([sentinel])
    os._exit(1)
