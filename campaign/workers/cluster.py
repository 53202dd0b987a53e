"""A Dask cluster that users have already: its workers see the campaign folder under the same path.

Dask itself is an extra (``cluster``) and is imported only where an address is given.
"""

from __future__ import annotations

import hashlib
import time
from collections.abc import Callable
from concurrent.futures import Future
from importlib import import_module
from pathlib import Path
from typing import Any, TypeVar

from campaign.keeping.program import program_digest
from campaign.notices import CampaignStops, Notice
from campaign.workers.crew import Closing, CrewGone

T = TypeVar("T")
R = TypeVar("R")

ANSWER_S = 10.0
"""How long the scheduler may take to answer, s."""

PATIENCE_S = 60.0
"""How long a cluster may be without any worker before the rest is done without it, s."""


class DaskCluster(Closing):
    """The workers of a running cluster.

    Parameters
    ----------
    address
        Of the scheduler, such as ``tcp://host:8786``.
    folder, probe
        A folder and a file in it that every worker must see as this process does.

    Raises
    ------
    CampaignStops
        Where Dask is not installed, nobody answers, or workers have another program or other files.
    """

    apart = True

    def __init__(self, address: str, folder: Path, probe: str) -> None:
        self._client = _client(address)
        try:
            _check_workers(self._client, address, (folder.absolute() / probe))
        except BaseException:
            self._client.close()
            raise
        self.hands = max(sum(self._client.nthreads().values()), 1)
        # "pure" would give the result of an earlier run for a file that changed since
        self._executor = self._client.get_executor(pure=False, retries=0)
        self._seen = time.monotonic()

    def submit(self, function: Callable[[T], R], task: T) -> Future[R]:
        """Hand a task to the scheduler."""
        try:
            future: Future[R] = self._executor.submit(function, task)
            return future
        except Exception as fault:
            raise CrewGone(str(fault)) from fault

    def is_there(self) -> bool:
        """Whether the cluster answers and had a worker during the last :data:`PATIENCE_S` seconds."""
        if self._has_workers():
            self._seen = time.monotonic()
        return self._client.status == "running" and time.monotonic() - self._seen < PATIENCE_S

    def renew(self) -> None:
        """Wait until the cluster has put a worker in the place of the one that died."""
        while not self._has_workers():
            if not self.is_there():
                raise CrewGone("the cluster has no workers left")
            time.sleep(0.1)

    def _has_workers(self) -> bool:
        try:
            return bool(self._client.nthreads())
        except Exception:  # whatever a connection that broke, or is closed, may raise
            return False

    def close(self) -> None:
        """Leave the cluster."""
        self._client.close()


def describe_worker(probe: str) -> tuple[str, str]:
    """Return which program a worker runs, and what it sees under a path: a digest of each."""
    try:
        seen = hashlib.sha256(Path(probe).read_bytes()).hexdigest()
    except OSError:
        seen = ""
    return program_digest(), seen


def _client(address: str) -> Any:
    try:
        client: Any = import_module("distributed").Client
    except ImportError:
        what = "the library 'distributed' is not installed"
        raise _stops("cluster-not-installed", what, "pip install 'campaign-report[cluster]'") from None
    try:
        return client(address, timeout=ANSWER_S, set_as_default=False)
    # TypeError: an address that is none; AssertionError: on a busy machine its thread did not start in time
    except (OSError, ValueError, TypeError, AssertionError) as fault:
        what = f"no scheduler answers at {address} ({type(fault).__name__})"
        raise _stops("cluster-silent", what, "start one with 'dask scheduler', or mend the address") from None


def _check_workers(client: Any, address: str, probe: Path) -> None:
    expected = describe_worker(str(probe))
    try:
        found = client.run(describe_worker, str(probe))
    except Exception as fault:
        what = f"a worker of {address} cannot load this program ({type(fault).__name__})"
        raise _stops("cluster-differs", what, "install the same version on every worker") from None
    if not found:
        what = f"the scheduler at {address} has no workers"
        raise _stops("cluster-silent", what, "start some with 'dask worker'")
    for worker, (program, seen) in sorted(found.items()):
        if program != expected[0]:
            what = f"the worker {worker} has another version of this program or of its libraries"
            raise _stops("cluster-differs", what, "install the same versions on every worker")
        if seen != expected[1]:
            what = f"the worker {worker} does not see {probe} as this process does"
            raise _stops("cluster-differs", what, "put the campaign on a folder that all share")


def _stops(code: str, what: str, remedy: str) -> CampaignStops:
    return CampaignStops([Notice(code, "stops", None, None, None, what, "the campaign is not read", remedy)])
