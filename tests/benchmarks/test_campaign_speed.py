"""Campaigns: what a second worker gains, what a cluster costs, what a worker needs.

Run on an idle machine: ``pytest -m benchmark tests/benchmarks/test_campaign_speed.py -s``.
"""

from __future__ import annotations

import resource
import time
from concurrent.futures import Executor
from pathlib import Path

import pytest

from lozenge_engine.campaign import run
from lozenge_engine.config import Setup
from lozenge_engine.design import Design, child_seed, design
from lozenge_engine.estimates import estimates
from lozenge_engine.plan import Axis, CampaignPlan
from lozenge_engine.presets import Preset
from lozenge_engine.realisation import realise
from lozenge_engine.store import create, inspect
from lozenge_engine.workers import Processes

ONE = Setup(region_count=1, half_width=0.2)


def campaign(density: float, realisations: int) -> Preset:
    axis = Axis(name="density", values=(density,))
    plan = CampaignPlan(axes=(axis,), realisations=realisations)
    return Preset(title="t", sentence="s", setup=ONE, campaign=plan)


def peak() -> float:
    """Most memory that this process has had, in bytes."""
    return 1024.0 * resource.getrusage(resource.RUSAGE_SELF).ru_maxrss


def warmed(pool: Executor, layout: Design, count: int) -> None:
    """Let every worker load and compile what it needs."""
    for future in [pool.submit(time.sleep, 0.5) for _ in range(count)]:
        future.result()
    for future in [pool.submit(realise, layout, 0, 10_000 + i) for i in range(count)]:
        future.result()


def seconds(preset: Preset, pool: Executor, capacity: int, path: Path) -> float:
    assert preset.campaign is not None
    warmed(pool, design(preset.setup, preset.campaign), capacity)
    begin = time.monotonic()
    with create(path, preset) as results:
        run(results, executor=pool, capacity=capacity)
    return time.monotonic() - begin


@pytest.mark.parametrize(
    ("density", "realisations", "least"), [(2000.0, 24, 1.8), (10_000.0, 4, None)]
)
def test_two_workers_against_one(
    tmp_path: Path, density: float, realisations: int, least: float | None
) -> None:
    wanted = campaign(density, realisations)
    ratios = []
    for turn in range(3 if least else 1):
        with Processes(1) as pool:
            one = seconds(wanted, pool, 1, tmp_path / f"one{turn}.sqlite")
        with Processes(2) as pool:
            two = seconds(wanted, pool, 2, tmp_path / f"two{turn}.sqlite")
        ratios.append(one / two)
        print(f"\n{2 * density:.0f} elements: {one:.1f} s, two {two:.1f} s, {ratios[-1]:.2f} times")
    if least is not None:
        assert sorted(ratios)[len(ratios) // 2] >= least


def test_a_cluster_against_the_processes(tmp_path: Path) -> None:
    distributed = pytest.importorskip("distributed", reason="needs the extra cluster")
    wanted = campaign(2000.0, 72)  # the cluster's start, about 0.7 s, is not its pace
    ratios = []
    with (
        distributed.LocalCluster(
            n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None
        ) as cluster,
        distributed.Client(cluster) as client,
    ):
        for turn in range(3):
            with Processes(2) as pool:
                own = seconds(wanted, pool, 2, tmp_path / f"own{turn}.sqlite")
            dask = seconds(wanted, client.get_executor(), 2, tmp_path / f"dask{turn}.sqlite")
            ratios.append(dask / own)
            print(f"\nprocesses {own:.1f} s, cluster {dask:.1f} s, {ratios[-1]:.2f} times")
    assert sorted(ratios)[1] <= 1.1


def test_a_worker_at_20_000_elements_stays_under_a_gibibyte() -> None:
    plan = CampaignPlan(axes=(Axis(name="density", values=(10_000.0,)),))
    with Processes(1) as pool:
        record = pool.submit(realise, design(ONE, plan), 0, 0).result()
        bytes_ = pool.submit(peak).result()
    print(f"\n{record.elements} elements, {record.seconds:.1f} s, {bytes_ / 2**20:.0f} MiB")
    assert bytes_ < 2**30


def test_a_hundred_thousand_rows_are_read_and_fitted_within_two_seconds(tmp_path: Path) -> None:
    path, count = tmp_path / "a.sqlite", 20_000
    axis = Axis(name="density", values=(100.0, 150.0, 200.0, 300.0, 400.0))
    plan = CampaignPlan(axes=(axis,), realisations=count, smallest_region=5)
    wanted = Preset(title="t", sentence="s", setup=ONE, campaign=plan)
    with create(path, wanted) as results:
        results._open().execute("PRAGMA synchronous = OFF")  # it is the reading that is timed
        made = {(g, r): realise(results.design, g, r) for g in range(5) for r in range(20)}
        for g, density in enumerate(axis.values):
            for r in range(count):
                seed = child_seed(ONE.points.seed, kind="poisson", density=density, realisation=r)
                record = made[g, r % 20]._replace(realisation=r, seed=seed)
                results.add(record, elapsed=1.0)
    begin = time.monotonic()
    with inspect(path) as results:
        found = estimates(results)
    took = time.monotonic() - begin
    print(f"\n{found.done} rows, {path.stat().st_size / 1e6:.0f} MB, {took:.2f} s")
    assert took < 2.0
    assert path.stat().st_size < 100e6
