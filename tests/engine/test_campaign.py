"""The running of campaigns: what is computed, in which order, and what interruptions change."""

from __future__ import annotations

import itertools
import math
import os
import random
import signal
import sqlite3
import subprocess
import sys
import threading
import time
from collections.abc import Callable
from concurrent.futures import BrokenExecutor, Executor, Future, ThreadPoolExecutor
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from lozenge_engine.campaign import ATTEMPTS, INNOCENT, Progress, run
from lozenge_engine.config import Setup
from lozenge_engine.design import design
from lozenge_engine.errors import InputError
from lozenge_engine.plan import Axis, CampaignPlan, Target
from lozenge_engine.presets import Preset, dumps
from lozenge_engine.realisation import realise
from lozenge_engine.schedule import PILOT, advance, first_round, nominal_seconds
from lozenge_engine.store import Results, create, inspect, resume
from lozenge_engine.workers import Processes

DENSITIES = (150.0, 250.0, 400.0)


def preset(**changes: Any) -> Preset:
    """A campaign of small sprinklings."""
    plan: dict[str, Any] = {
        "axes": (Axis(name="density", values=DENSITIES),),
        "realisations": 6,
        "smallest_region": 20,
    }
    setup = Setup(region_count=1, half_width=0.4)
    return Preset(title="t", sentence="s", setup=setup, campaign=CampaignPlan(**plan | changes))


class Here(Executor):
    """Computes at once, in this process."""

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        future: Future[Any] = Future()
        future.set_result(fn(*args, **kwargs))
        return future


class Breaking(Executor):
    """Loses what it is given, some times or always, as a killed worker does."""

    def __init__(self, lost: Callable[[int, int], bool]) -> None:
        self.lost = lost
        self.calls: dict[tuple[int, int], int] = {}

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        future: Future[Any] = Future()
        task = args[1:]
        self.calls[task] = self.calls.get(task, 0) + 1
        if self.lost(task[0], self.calls[task]):
            future.set_exception(BrokenExecutor("a worker is gone"))
        else:
            future.set_result(fn(*args, **kwargs))
        return future


def rows(path: Path) -> list[tuple[Any, ...]]:
    """All that a results file says of its samples, but for the times that they took."""
    connection = sqlite3.connect(path)
    try:
        found = connection.execute(
            "SELECT s.sprinkling, s.realisation, s.cell, s.trusted, s.numbers, r.seed, r.elements,"
            " r.ordering_fraction FROM samples AS s JOIN realisations AS r"
            " ON r.sprinkling = s.sprinkling AND r.realisation = s.realisation"
            " ORDER BY s.sprinkling, s.realisation, s.cell"
        ).fetchall()
    finally:
        connection.close()
    return found


def finished(path: Path, wanted: Preset, executor: Executor, capacity: int = 1) -> str:
    """Run a campaign into a new file; the reason why it ended."""
    with create(path, wanted) as results:
        return run(results, executor=executor, capacity=capacity).reason


def test_all_realisations_of_all_sprinklings_are_computed(tmp_path: Path) -> None:
    path = tmp_path / "a.sqlite"
    assert finished(path, preset(), Here()) == "finished"
    with inspect(path) as results:
        assert results.done() == set(itertools.product(range(3), range(6)))


def test_rows_do_not_depend_on_workers_or_engine(tmp_path: Path) -> None:
    one, two, threads = (tmp_path / f"{name}.sqlite" for name in ("one", "two", "threads"))
    finished(one, preset(), Here())
    with Processes(2) as pool:
        finished(two, preset(), pool, 2)
    with ThreadPoolExecutor(3) as pool:
        finished(threads, preset(), pool, 3)
    assert rows(one) == rows(two) == rows(threads)
    assert len(rows(one)) == 18


def test_samples_are_what_a_realisation_computes_by_itself(tmp_path: Path) -> None:
    path = tmp_path / "a.sqlite"
    finished(path, preset(), Here())
    with inspect(path) as results:
        record = realise(results.design, 1, 4)
        assert results.table(1).union_support[4, 0] == record.samples[0].union_support


def test_a_paused_campaign_resumes_to_the_same_rows(tmp_path: Path) -> None:
    straight, paused = tmp_path / "straight.sqlite", tmp_path / "paused.sqlite"
    finished(straight, preset(), Here())
    stop = threading.Event()

    def pause(progress: Progress) -> None:
        if progress.done >= 5:
            stop.set()

    with create(paused, preset()) as results:
        ending = run(results, executor=Here(), capacity=1, report=pause, stop=stop)
    assert ending.reason == "paused"
    with resume(paused) as results:
        assert 5 <= len(results.done()) < 18
        assert run(results, executor=Here(), capacity=1).reason == "finished"
    assert rows(paused) == rows(straight)


def test_more_realisations_add_to_those_there_are(tmp_path: Path) -> None:
    path = tmp_path / "a.sqlite"
    finished(path, preset(), Here())
    before = rows(path)
    with resume(path, preset(realisations=8)) as results:
        run(results, executor=Here(), capacity=1)
        assert results.done() == set(itertools.product(range(3), range(8)))
    after = rows(path)
    assert [row for row in after if row[1] < 6] == before


def test_what_a_killed_worker_took_with_it_is_computed_again(tmp_path: Path) -> None:
    straight, broken = tmp_path / "straight.sqlite", tmp_path / "broken.sqlite"
    finished(straight, preset(), Here())
    assert (
        finished(broken, preset(), Breaking(lambda _, call: call < INNOCENT + ATTEMPTS))
        == "finished"
    )
    assert rows(broken) == rows(straight)


def test_what_kills_every_worker_is_recorded_and_stops_nothing(tmp_path: Path) -> None:
    path = tmp_path / "a.sqlite"
    assert finished(path, preset(), Breaking(lambda g, _: g == 2)) == "finished"
    with inspect(path) as results:
        assert results.counts() == ((6, 0), (6, 0), (6, 6))
        assert results.failures()[0][1] == 6
        assert "workers ended" in results.failures()[0][0]


def test_an_executor_that_cannot_compute_ends_the_run_and_spoils_nothing(tmp_path: Path) -> None:
    class Broken(Here):
        def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
            future: Future[Any] = Future()
            future.set_exception(ModuleNotFoundError("no such module on this worker"))
            return future

    with create(tmp_path / "a.sqlite", preset()) as results:
        with pytest.raises(InputError, match="no such module"):
            run(results, executor=Broken(), capacity=1)
        with pytest.raises(InputError, match="the scheduler is gone"):
            run(results, executor=Here(), capacity=1, trouble=lambda: "the scheduler is gone")
        assert results.done() == set()
        assert run(results, executor=Here(), capacity=1).reason == "finished"


def test_a_target_is_not_called_reached_before_the_pilot(tmp_path: Path) -> None:
    wanted = preset(target=Target(quantity="entropy", error=9.0), realisations=5)
    assert finished(tmp_path / "a.sqlite", wanted, Here()) == "finished"


def test_a_realisation_that_cannot_be_computed_is_recorded(tmp_path: Path) -> None:
    path = tmp_path / "a.sqlite"
    few = preset(axes=(Axis(name="density", values=(12.0, 300.0)),), realisations=12)
    finished(path, few, Here())
    with inspect(path) as results:
        (done, failed), (also, none) = results.counts()
        assert done == also == 12
        assert 0 < failed < 12
        assert none == 0
        assert results.table(0).realisation.size == 12 - failed
        assert "elements" in results.failures()[0][0]


def test_a_budget_ends_a_campaign_and_counts_resumed_runs_together(tmp_path: Path) -> None:
    path = tmp_path / "a.sqlite"
    endless = preset(realisations=100_000, budget=1.0)
    assert finished(path, endless, Here()) == "budget"
    with resume(path) as results:
        before = results.done()
        # The time recorded is that of the last row, a moment before the budget was looked at.
        assert results.elapsed >= 0.9
        assert run(results, executor=Here(), capacity=1).reason == "budget"
        assert len(results.done() - before) <= 1


def test_a_target_on_every_entropy_ends_a_campaign(tmp_path: Path) -> None:
    path = tmp_path / "a.sqlite"
    wanted = preset(target=Target(quantity="entropy", error=0.02), realisations=2000)
    assert finished(path, wanted, Here()) == "target"
    with inspect(path) as results:
        for g in range(3):
            samples = results.table(g).union_support[:, 0]
            assert samples.std(ddof=1) / math.sqrt(samples.size) <= 0.02
            assert PILOT <= samples.size < 2000


def test_rounds_follow_from_finished_rows_alone(tmp_path: Path) -> None:
    straight, paused = tmp_path / "straight.sqlite", tmp_path / "paused.sqlite"
    wanted = preset(target=Target(quantity="slope", error=0.05), realisations=400)
    assert finished(straight, wanted, Here()) == "target"
    # Interrupted at random places, by an executor that also returns things out of order.
    random.seed(20)
    create(paused, wanted).close()
    for _ in range(12):
        stop = threading.Event()
        with resume(paused) as results, ThreadPoolExecutor(3) as pool:
            pause_at = len(results.done()) + random.randrange(5, 120)

            def pause(progress: Progress, at: int = pause_at, stop: Any = stop) -> None:
                if progress.done >= at:
                    stop.set()

            if run(results, executor=pool, capacity=3, report=pause, stop=stop).reason == "target":
                break
    assert rows(paused) == rows(straight)


def test_a_round_goes_where_it_lowers_the_slopes_error_most_per_second() -> None:
    wanted = preset(target=Target(quantity="slope", error=1e-4), realisations=10_000)
    layout = design(wanted.setup, wanted.campaign or CampaignPlan(axes=()))
    goals = first_round(layout).goals
    assert goals == (PILOT,) * 3
    tables = [synthetic(layout, g, PILOT, seed=g) for g in range(3)]
    after = advance(layout, goals, tables).goals
    gained = np.subtract(after, goals)
    # The ends of the ladder carry the slope, the cheap one more than the dear one per second.
    assert gained[0] > gained[1]
    assert gained[0] > gained[2]
    costs = [nominal_seconds(layout, g) for g in range(3)]
    assert np.dot(gained, costs) <= 0.5 * PILOT * sum(costs) + max(costs)


def test_every_sprinkling_has_its_share_of_the_time() -> None:
    axis = Axis(name="density", values=(150.0, 200.0, 250.0, 300.0, 400.0))
    target = Target(quantity="slope", error=1e-4)
    wanted = preset(axes=(axis,), target=target, realisations=10_000)
    layout = design(wanted.setup, wanted.campaign or CampaignPlan(axes=()))
    goals = first_round(layout).goals
    for _ in range(8):
        tables = [synthetic(layout, g, goals[g], seed=g) for g in range(5)]
        goals = advance(layout, goals, tables).goals
    spent = np.array([nominal_seconds(layout, g) * n for g, n in enumerate(goals)])
    assert spent.min() >= 0.04 * spent.sum()
    assert goals[0] > 4 * goals[2]


def synthetic(layout: Any, sprinkling: int, count: int, *, seed: int) -> Any:
    """A table of made-up samples with the scatter of real ones."""
    from lozenge_engine.store import Table

    cell = layout.cells[sprinkling]
    noise = np.random.default_rng(seed).normal(0.0, 0.14, size=(count, 1))
    entropy = cell.x / 3 + 1.0 + noise
    ones, none = np.ones((count, 1)), np.empty((count, 0))
    return Table(
        realisation=np.arange(count),
        seconds=np.ones(count),
        elements=np.full(count, 100),
        ordering_fraction=np.full(count, 0.5),
        trusted=np.ones((count, 1), dtype=bool),
        entropy=(entropy,),
        kept=(ones,),
        region_elements=(ones,),
        union_support=entropy,
        union_direct_sum=entropy,
        pair_support=(none,),
        pair_direct_sum=(none,),
        cross_block=(none,),
    )


# --------------------------------------------------------------------- kills

KILLED = """
import sys
from pathlib import Path
from lozenge_engine.campaign import run
from lozenge_engine.presets import parse
from lozenge_engine.store import create, resume
from lozenge_engine.workers import Processes
if __name__ == "__main__":
    path, text = Path(sys.argv[1]), Path(sys.argv[2]).read_text()
    with (resume(path) if path.exists() else create(path, parse(text))) as results:
        with Processes(2) as pool:
            print("begun", flush=True)
            print(run(results, executor=pool, capacity=2).reason, flush=True)
"""


def workers_of(process: int) -> list[int]:
    """Worker processes that a process has started."""
    found = []
    for stat in Path("/proc").glob("[0-9]*/stat"):
        try:
            fields = stat.read_text().rsplit(")", 1)[1].split()
            command = stat.with_name("cmdline").read_bytes()
        except OSError:
            continue
        if int(fields[1]) == process and b"spawn_main" in command:
            found.append(int(stat.parent.name))
    return found


@pytest.mark.slow
@pytest.mark.skipif(not Path("/proc/self/stat").exists(), reason="finds its victims in /proc")
def test_thirty_random_kills_change_no_bit_of_the_table(tmp_path: Path) -> None:
    straight, killed = tmp_path / "straight.sqlite", tmp_path / "killed.sqlite"
    densities = (150.0, 300.0, 500.0)
    wanted = preset(
        axes=(Axis(name="density", values=densities),),
        target=Target(quantity="slope", error=0.03),
        realisations=1500,
    )
    with Processes(2) as pool:
        assert finished(straight, wanted, pool, 2) == "target"
    script, text = tmp_path / "killed.py", tmp_path / "preset.json"
    script.write_text(KILLED)
    text.write_text(dumps(wanted))
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join(filter(None, sys.path))}
    rng, kills, parents, reason = random.Random(30), 0, 0, ""
    while reason != "target":
        parent = subprocess.Popen(
            [sys.executable, script, killed, text],
            stdout=subprocess.PIPE,
            text=True,
            env=environment,
        )
        assert parent.stdout is not None
        assert parent.stdout.readline() == "begun\n"
        while kills < 30 and parent.poll() is None:
            time.sleep(rng.uniform(0.2, 0.9))
            own = workers_of(parent.pid)
            kill_parent = rng.random() < 0.4 or not own
            victim = parent.pid if kill_parent else rng.choice(own)
            try:
                os.kill(victim, signal.SIGKILL)
            except ProcessLookupError:
                continue
            kills += 1
            parents += kill_parent
            if kill_parent:
                break
        reason = parent.stdout.read().strip()
        parent.wait()
        parent.stdout.close()
    assert kills == 30, "the campaign ended before all kills: raise its realisations"
    assert 5 <= parents <= 25
    assert rows(killed) == rows(straight)


def test_results_say_what_they_were_made_with(tmp_path: Path) -> None:
    path = tmp_path / "a.sqlite"
    finished(path, preset(realisations=1), Here())
    with inspect(path) as results:
        assert isinstance(results, Results)
        assert {"python", "numpy", "scipy", "lozenge"} <= set(results.versions)
