"""Tasks that other processes can do, some of which kill them."""

from __future__ import annotations

import os
import signal
import time
from dataclasses import dataclass
from pathlib import Path


@dataclass(frozen=True)
class Numbers:
    """Numbers to be squared together; a worker dies of those that are deadly.

    ``once`` names a file that is made by the first worker that dies: then no other does.
    """

    numbers: tuple[int, ...]
    deadly: frozenset[int] = frozenset()
    once: Path | None = None


def squares(task: Numbers) -> tuple[int, ...]:
    """Square numbers, or die."""
    if task.deadly & set(task.numbers) and (task.once is None or _first(task.once)):
        os.kill(os.getpid(), signal.SIGKILL)
    return tuple(number**2 for number in task.numbers)


def _first(mark: Path) -> bool:
    try:
        mark.touch(exist_ok=False)
    except FileExistsError:
        return False
    return True


def process_and_threads(_: object) -> tuple[tuple[int, str], ...]:
    """Say which process works, and how many threads its algebra may use."""
    return ((os.getpid(), os.environ["OMP_NUM_THREADS"]),)


def sleep_long(mark: Path) -> tuple[()]:
    """Say who works, then be busy for a minute."""
    mark.write_text(str(os.getpid()))
    time.sleep(60)
    return ()
