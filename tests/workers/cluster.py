"""A real Dask cluster in a process of its own: a scheduler and two worker processes on this machine.

Run as a script it says the scheduler's address and the workers' process numbers, and ends with its input.
"""

from __future__ import annotations

import os
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

ROOT = Path(__file__).parents[2]


@dataclass(frozen=True)
class Cluster:
    """Where the scheduler listens, the process numbers of its workers, and the process it is."""

    address: str
    workers: tuple[int, ...]
    process: subprocess.Popen[str]

    def end(self) -> None:
        """Kill the scheduler; its workers end with it."""
        self.process.kill()
        self.process.wait(30)


@contextmanager
def cluster(workers: int = 2) -> Iterator[Cluster]:
    """Start a cluster, and end it."""
    command = [sys.executable, "-m", "tests.workers.cluster", str(workers)]
    environment = os.environ | {"PYTHONPATH": str(ROOT)}
    process = subprocess.Popen(
        command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, cwd=ROOT, env=environment
    )
    assert process.stdin is not None
    assert process.stdout is not None
    try:
        address, *numbers = process.stdout.readline().split()
        yield Cluster(address, tuple(map(int, numbers)), process)
    finally:
        process.stdin.close()
        process.wait(30)
        process.stdout.close()


def main(workers: int) -> None:
    """Start a cluster, say where, and wait for the end of the input."""
    import logging

    from distributed import Client, LocalCluster

    logging.disable(logging.CRITICAL)  # the death of a worker is what is tried here
    with (
        LocalCluster(
            n_workers=workers, threads_per_worker=1, dashboard_address=":0", host="127.0.0.1"
        ) as running,
        Client(running) as client,
    ):
        print(running.scheduler_address, *client.run(os.getpid).values(), flush=True)
        sys.stdin.read()


if __name__ == "__main__":
    main(int(sys.argv[1]))
