"""Campaigns on a Dask cluster: the same rows, also when a worker is killed in the middle."""

from __future__ import annotations

import os
import signal
import threading
import time
import warnings
from collections.abc import Iterator
from concurrent.futures import Executor, Future
from pathlib import Path
from typing import Any

import pytest

from lozenge_engine.campaign import run
from lozenge_engine.config import Setup
from lozenge_engine.plan import Axis, CampaignPlan
from lozenge_engine.presets import Preset
from lozenge_engine.store import Results, create

distributed = pytest.importorskip("distributed", reason="needs the extra cluster")

WANTED = Preset(
    title="t",
    sentence="s",
    setup=Setup(region_count=1, half_width=0.3),
    campaign=CampaignPlan(axes=(Axis(name="density", values=(150.0, 600.0)),), realisations=40),
)
# What the cluster's own processes and sockets say while they are killed and closed.
pytestmark = [pytest.mark.slow, pytest.mark.filterwarnings("ignore")]


class Here(Executor):
    """Computes at once, in this process."""

    def submit(self, fn: Any, /, *args: Any, **kwargs: Any) -> Future[Any]:
        future: Future[Any] = Future()
        future.set_result(fn(*args, **kwargs))
        return future


@pytest.fixture(scope="module")
def client() -> Iterator[Any]:
    """A cluster of two processes on this machine."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        cluster = distributed.LocalCluster(
            n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None
        )
        with cluster, distributed.Client(cluster) as client:
            yield client


def rows(results: Results) -> list[Any]:
    return [
        (table.realisation.tolist(), table.union_support.tolist(), table.elements.tolist())
        for table in (results.table(0), results.table(1))
    ]


@pytest.fixture(scope="module")
def alone(tmp_path_factory: pytest.TempPathFactory) -> list[Any]:
    """The rows without a cluster."""
    with create(tmp_path_factory.mktemp("alone") / "a.sqlite", WANTED) as results:
        run(results, executor=Here(), capacity=1)
        return rows(results)


def test_a_cluster_gives_the_same_rows(client: Any, tmp_path: Path, alone: list[Any]) -> None:
    with create(tmp_path / "a.sqlite", WANTED) as results:
        assert run(results, executor=client.get_executor(), capacity=2).reason == "finished"
        assert rows(results) == alone


def test_a_killed_worker_of_a_cluster_loses_nothing(
    client: Any, tmp_path: Path, alone: list[Any]
) -> None:
    processes = list(client.run(os.getpid).values())
    assert len(processes) == 2

    def kill() -> None:
        while len(results.done()) < 10:
            time.sleep(0.01)
        os.kill(processes[0], signal.SIGKILL)

    with create(tmp_path / "a.sqlite", WANTED) as results:
        killer = threading.Thread(target=kill)
        killer.start()
        ending = run(results, executor=client.get_executor(), capacity=2)
        killer.join()
        assert ending.reason == "finished"
        assert results.counts() == ((40, 0), (40, 0))
        assert rows(results) == alone
    assert processes[0] not in client.run(os.getpid).values()
