"""A real Dask cluster: tasks in order, a deadly task, and clusters that are not what is asked for."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pytest

from campaign.notices import CampaignStops
from campaign.workers import cluster as clusters
from campaign.workers.cluster import DaskCluster
from campaign.workers.sharing import share_out
from tests.workers.cluster import Cluster, cluster
from tests.workers.test_sharing import GIVEN_UP, SQUARES, flat, tasks

PROBE = "campaign.toml"

pytestmark = pytest.mark.filterwarnings(
    "ignore::ResourceWarning:distributed", "ignore::DeprecationWarning:distributed"
)


@pytest.fixture(scope="module")
def two() -> Iterator[Cluster]:
    """Two workers; a task that kills one is not tried with another."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("DASK_DISTRIBUTED__SCHEDULER__ALLOWED_FAILURES", "0")
        with cluster(workers=2) as running:
            yield running


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    (tmp_path / PROBE).write_text("format = 1\n")
    return tmp_path


def codes(stops: CampaignStops) -> list[str]:
    return [notice.code for notice in stops.notices]


def test_a_deadly_piece_is_given_up_and_no_other(two: Cluster, folder: Path) -> None:
    with DaskCluster(two.address, folder, PROBE) as crew:
        assert crew.hands == 2
        found = flat(share_out(SQUARES, tasks(deadly=frozenset({7})), crew))
    assert found == [GIVEN_UP if number == 7 else number**2 for number in range(36)]


def test_the_same_task_is_done_again_and_not_remembered(two: Cluster, folder: Path, tmp_path: Path) -> None:
    """Files change while tasks stay the same: what a cluster remembers of a task would be wrong."""
    with DaskCluster(two.address, folder, PROBE) as crew:
        text = tmp_path / "text"
        found = []
        for word in ("first", "second"):
            text.write_text(word)
            found.append(crew.submit(Path.read_text, text).result())
    assert found == ["first", "second"]


def test_workers_with_another_program_are_refused(
    two: Cluster, folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(clusters, "program_digest", lambda: "another")
    with pytest.raises(CampaignStops, match="another version") as stops:
        DaskCluster(two.address, folder, PROBE)
    assert codes(stops.value) == ["cluster-differs"]


def test_workers_that_do_not_see_the_folder_are_refused(
    two: Cluster, folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    clusters.program_digest()
    monkeypatch.setattr(clusters.Path, "read_bytes", lambda _: b"what only this process sees")
    with pytest.raises(CampaignStops, match="does not see") as stops:
        DaskCluster(two.address, folder, PROBE)
    assert codes(stops.value) == ["cluster-differs"]


def test_a_cluster_without_workers_is_refused(folder: Path) -> None:
    with cluster(workers=0) as none, pytest.raises(CampaignStops, match="no workers") as stops:
        DaskCluster(none.address, folder, PROBE)
    assert codes(stops.value) == ["cluster-silent"]


def test_tasks_go_on_here_when_the_cluster_ends(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("campaign.workers.cluster.ANSWER_S", 1.0)
    monkeypatch.setattr("campaign.workers.cluster.PATIENCE_S", 0.5)
    monkeypatch.setattr("campaign.workers.sharing.ANSWER_S", 0.2)
    with cluster(workers=1) as one, DaskCluster(one.address, folder, PROBE) as crew:
        results = share_out(SQUARES, tasks(), crew)
        first = next(results)
        one.end()
        rest = flat(results)
    assert [*first, *rest] == [number**2 for number in range(36)]
