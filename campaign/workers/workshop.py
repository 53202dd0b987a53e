"""With what the work is done: the workers, and the store of what earlier runs found."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path

from campaign.keeping.store import Store, cache_file, open_store
from campaign.workers.crew import Crew, LocalProcesses, ThisProcess, cores

SERIAL_BYTES = 100_000_000
"""Below so many bytes to parse this process alone is faster: others take about two seconds to begin."""


@dataclass(frozen=True)
class Workshop:
    """Workers and store of one run.

    Attributes
    ----------
    crew
        Who does work that is worth sharing.
    store
        Where results are kept; one without a file keeps nothing.
    worth_bytes
        Bytes to parse from which on sharing is worth it; 0 where workers were asked for.
    """

    crew: Crew = field(default_factory=ThisProcess)
    store: Store = field(default_factory=lambda: Store(None))
    worth_bytes: int = 0

    def crew_for(self, size_bytes: float) -> Crew:
        """Return who is to parse so many bytes."""
        return self.crew if size_bytes >= self.worth_bytes else ThisProcess()


@contextmanager
def open_workshop(
    folder: Path,
    probe: str,
    *,
    workers: int | None = None,
    dask: str | None = None,
    ignore_cache: bool = False,
) -> Iterator[Workshop]:
    """Find workers and open the store; both are closed at the end.

    Parameters
    ----------
    folder, probe
        The campaign folder, and a file in it that all workers of a cluster must see alike.
    workers
        Processes on this machine; where ``None``, as many as cores, and only where that is faster.
    dask
        Address of a Dask scheduler that is used instead.
    ignore_cache
        Whether to go without the store.

    Raises
    ------
    CampaignStops
        Where a cluster was asked for and cannot be used.
    """
    with open_store(None if ignore_cache else cache_file()) as store:
        crew = _crew(folder, probe, workers, dask)
        try:
            yield Workshop(crew, store, SERIAL_BYTES if workers is None and dask is None else 0)
        finally:
            crew.close()


def _crew(folder: Path, probe: str, workers: int | None, dask: str | None) -> Crew:
    if dask is not None:
        from campaign.workers.cluster import DaskCluster

        return DaskCluster(dask, folder, probe)
    hands = workers if workers is not None else cores()
    return LocalProcesses(hands) if hands > 1 else ThisProcess()
