"""Where a cluster's scheduler becomes the bottleneck: what a task costs that does nothing.

Run as ``python -m benchmarks.scheduler`` (``--tasks 100000``). A Dask cluster of two worker processes on this
machine is given tasks as a report gives them, through ``Client.get_executor(pure=False)`` with a bounded
number in hand; then the same tasks all at once, as many programs would. Prints one Markdown table and what
follows for batches.
"""

from __future__ import annotations

import argparse
import time
from collections import deque
from concurrent.futures import Executor, Future
from typing import Any

import distributed

IN_HAND = 2
"""Tasks in hand, a worker, as in ``campaign.workers.sharing``."""


def nothing(number: int) -> int:
    """Do a task that costs nothing."""
    return number


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawTextHelpFormatter)
    parser.add_argument("--tasks", type=int, default=100_000)
    parser.add_argument("--workers", type=int, default=2)
    options = parser.parse_args()
    dask: Any = distributed
    with (
        dask.LocalCluster(
            n_workers=options.workers, threads_per_worker=1, dashboard_address=None, silence_logs=50
        ) as cluster,
        dask.Client(cluster) as client,
    ):
        print("| how tasks are handed over | tasks | ms a task |\n|---|---|---|")
        for tasks in (options.tasks // 100, options.tasks // 10, options.tasks):
            executor = client.get_executor(pure=False, retries=0)
            cost = one_by_one(executor, tasks, IN_HAND * options.workers)
            print(f"| one by one, {IN_HAND * options.workers} in hand | {tasks:,} | {cost:.2f} |", flush=True)
        cost = all_at_once(client, options.tasks)
        print(f"| all at once | {options.tasks:,} | {cost:.2f} |", flush=True)


def one_by_one(executor: Executor, tasks: int, in_hand: int) -> float:
    """Return the milliseconds a task costs where only so many are begun and not yet taken back."""
    waiting: deque[Future[int]] = deque()
    began = time.perf_counter()
    for number in range(tasks):
        waiting.append(executor.submit(nothing, number))
        if len(waiting) >= in_hand:
            waiting.popleft().result()
    while waiting:
        waiting.popleft().result()
    return 1e3 * (time.perf_counter() - began) / tasks


def all_at_once(client: Any, tasks: int) -> float:
    """Return the milliseconds a task costs where all are handed over together."""
    began = time.perf_counter()
    client.gather(client.map(nothing, range(tasks), pure=False))
    return 1e3 * (time.perf_counter() - began) / tasks


if __name__ == "__main__":
    main()
