"""Sharing out: results in order, few tasks in hand, and no death of a worker loses a task."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from concurrent.futures import Future
from pathlib import Path

import pytest

from campaign.workers.crew import Crew, CrewGone, LocalProcesses, ThisProcess, cores
from campaign.workers.sharing import IN_HAND, Work, share_out
from tests.workers.deadly import Numbers, process_and_threads, sleep_long, squares

GIVEN_UP = -1


def singly(task: Numbers) -> Iterator[Numbers]:
    for number in task.numbers:
        yield Numbers((number,), task.deadly, task.once)


def minus_one(task: Numbers) -> tuple[int, ...]:
    return (GIVEN_UP,) * len(task.numbers)


SQUARES: Work[Numbers, int] = Work(squares, singly, minus_one)


def tasks(
    deadly: frozenset[int] = frozenset(), once: Path | None = None, taken: list[int] | None = None
) -> Iterator[Numbers]:
    """Twelve tasks of three numbers from 0 on; *taken* is told which were asked for."""
    for first in range(0, 36, 3):
        if taken is not None:
            taken.append(first)
        yield Numbers(tuple(range(first, first + 3)), deadly, once)


def flat(results: Iterator[tuple[int, ...]]) -> list[int]:
    return [number for some in results for number in some]


@pytest.fixture
def processes() -> Iterator[LocalProcesses]:
    with LocalProcesses(2) as crew:
        yield crew


def test_results_come_in_the_order_of_the_tasks(processes: LocalProcesses) -> None:
    expected = [number**2 for number in range(36)]
    assert flat(share_out(SQUARES, tasks(), ThisProcess())) == expected
    assert flat(share_out(SQUARES, tasks(), processes)) == expected


def test_no_more_tasks_are_taken_than_hands_can_hold(processes: LocalProcesses) -> None:
    taken: list[int] = []
    results = share_out(SQUARES, tasks(taken=taken), processes)
    for handed_on, _ in enumerate(results, start=1):
        assert len(taken) <= handed_on - 1 + IN_HAND * processes.hands
    assert len(taken) == 12


def test_this_process_takes_one_task_at_a_time() -> None:
    taken: list[int] = []
    for handed_on, _ in enumerate(share_out(SQUARES, tasks(taken=taken), ThisProcess()), start=1):
        assert len(taken) == handed_on


def test_a_piece_that_kills_its_workers_is_given_up_and_no_other(processes: LocalProcesses) -> None:
    found = flat(share_out(SQUARES, tasks(deadly=frozenset({7})), processes))
    assert found == [GIVEN_UP if number == 7 else number**2 for number in range(36)]


def test_a_worker_that_dies_once_costs_nothing(processes: LocalProcesses, tmp_path: Path) -> None:
    mark = tmp_path / "died"
    found = flat(share_out(SQUARES, tasks(frozenset({7}), mark), processes))
    assert mark.exists()
    assert found == [number**2 for number in range(36)]


class Hopeless:
    """A crew whose workers die of whatever they take up."""

    hands = 2
    apart = False

    def __init__(self) -> None:
        self.asked = 0

    def submit(self, function: Callable[[Numbers], object], task: Numbers) -> Future[object]:
        self.asked += 1
        future: Future[object] = Future()
        future.set_exception(RuntimeError("died"))
        return future

    def is_there(self) -> bool:
        return True

    def renew(self) -> None:
        """Nothing helps."""

    def close(self) -> None:
        """Nobody is there."""


class Leaving(Hopeless):
    """A crew that is gone after a few tasks."""

    def submit(self, function: Callable[[Numbers], object], task: Numbers) -> Future[object]:
        self.asked += 1
        if self.asked > 4:
            raise CrewGone("gone")
        return ThisProcess().submit(function, task)


class Silent(Hopeless):
    """A crew that takes tasks and answers no more."""

    def submit(self, function: Callable[[Numbers], object], task: Numbers) -> Future[object]:
        return Future()

    def is_there(self) -> bool:
        return False

    def renew(self) -> None:
        raise CrewGone("nobody left")


@pytest.mark.parametrize("crew", [Hopeless(), Leaving(), Silent()], ids=lambda crew: type(crew).__name__)
def test_where_no_worker_is_left_the_rest_is_done_here(crew: Crew, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("campaign.workers.sharing.ANSWER_S", 0.01)
    assert flat(share_out(SQUARES, tasks(), crew)) == [number**2 for number in range(36)]


def test_deaths_that_nothing_explains_end_in_this_process(tmp_path: Path) -> None:
    """Something outside kills a worker with every batch, but nothing that is tried alone dies."""

    class Unlucky(Hopeless):
        def submit(self, function: Callable[[Numbers], object], task: Numbers) -> Future[object]:
            return (
                super().submit(function, task)
                if self._together(task)
                else ThisProcess().submit(function, task)
            )

        def _together(self, task: Numbers) -> bool:
            return len(task.numbers) > 1

    crew = Unlucky()
    assert flat(share_out(SQUARES, tasks(), crew)) == [number**2 for number in range(36)]
    assert crew.asked <= 12, "after some deaths this crew is asked no more"


def test_processes_are_spawned_and_keep_algebra_on_one_thread(
    processes: LocalProcesses, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.delenv("OMP_NUM_THREADS")
    own = os.getpid()
    said = {processes.submit(process_and_threads, None).result()[0] for _ in range(4)}
    assert own not in {process for process, _ in said}
    assert {threads for _, threads in said} == {"1"}


def test_workers_end_when_their_parent_is_killed(tmp_path: Path) -> None:
    mark = tmp_path / "worker"
    script = (
        "import sys, pathlib; from campaign.workers.crew import LocalProcesses\n"
        "from tests.workers.deadly import sleep_long\n"
        "if __name__ == '__main__':\n"
        "    LocalProcesses(1).submit(sleep_long, pathlib.Path(sys.argv[1])).result()\n"
    )
    assert sleep_long.__module__ == "tests.workers.deadly"
    parent = subprocess.Popen([sys.executable, "-c", script, str(mark)])
    try:
        wait_until(lambda: mark.exists() and bool(mark.read_text()))
        worker = int(mark.read_text())
    finally:
        parent.send_signal(signal.SIGKILL)
        parent.wait()
    wait_until(lambda: not is_running(worker))


def test_a_crew_that_is_sent_home_does_not_finish_what_nobody_waits_for(tmp_path: Path) -> None:
    crew = LocalProcesses(1)
    crew.submit(sleep_long, tmp_path / "worker")
    wait_until(lambda: (tmp_path / "worker").exists() and bool((tmp_path / "worker").read_text()))
    begun = time.monotonic()
    crew.close()
    assert time.monotonic() - begun < 30.0, "the task takes a minute"
    wait_until(lambda: not is_running(int((tmp_path / "worker").read_text())))


def is_running(process: int) -> bool:
    """Whether a process still runs; one that ended and that nobody asks for any more does not."""
    try:
        state = Path(f"/proc/{process}/stat").read_text().rsplit(")", 1)[1].split()[0]
    except FileNotFoundError:
        return False
    return state != "Z"


def wait_until(holds: Callable[[], bool], seconds: float = 30.0) -> None:
    end = time.monotonic() + seconds
    while not holds():
        assert time.monotonic() < end, "waited too long"
        time.sleep(0.05)


def test_there_is_at_least_one_core() -> None:
    assert cores() >= 1
    assert LocalProcesses().hands == cores()
