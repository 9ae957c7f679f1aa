"""Worker processes: what they inherit, and how they end."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from concurrent.futures import BrokenExecutor
from pathlib import Path

import pytest

from lozenge_engine.errors import InputError
from lozenge_engine.workers import Processes, cores, one_thread

ALONE = """
import os, sys, time
from lozenge_engine.workers import Processes
if __name__ == "__main__":
    pool = Processes(2)
    print(*(pool.submit(os.getpid).result() for _ in range(4)), flush=True)
    pool.submit(time.sleep, 60)
    pool.submit(time.sleep, 60)
    time.sleep(60)
"""


def alive(process: int) -> bool:
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    # A zombie is gone, but for its parent's notice.
    state = Path(f"/proc/{process}/stat")
    return not (state.exists() and state.read_text().rsplit(")", 1)[1].split()[0] == "Z")


def gone(processes: set[int], *, within: float) -> bool:
    end = time.monotonic() + within
    while any(alive(p) for p in processes):
        if time.monotonic() > end:
            return False
        time.sleep(0.1)
    return True


def test_work_is_done_in_another_process() -> None:
    with Processes(1) as pool:
        assert pool.submit(os.getpid).result() != os.getpid()


def test_workers_start_with_one_thread_of_linear_algebra() -> None:
    with Processes(1) as pool:
        assert pool.submit(os.getenv, "OPENBLAS_NUM_THREADS").result() == "1"


def test_the_environment_comes_back_after_one_thread(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("OMP_NUM_THREADS", "7")
    monkeypatch.delenv("MKL_NUM_THREADS", raising=False)
    with one_thread():
        assert os.environ["OMP_NUM_THREADS"] == os.environ["MKL_NUM_THREADS"] == "1"
    assert os.environ["OMP_NUM_THREADS"] == "7"
    assert "MKL_NUM_THREADS" not in os.environ


def test_work_goes_on_after_a_worker_was_killed() -> None:
    with Processes(1) as pool:
        first = pool.submit(os.getpid).result()
        doomed = pool.submit(time.sleep, 60)
        os.kill(first, signal.SIGKILL)
        with pytest.raises(BrokenExecutor):
            doomed.result(timeout=30)
        assert pool.submit(os.getpid).result(timeout=30) != first


def test_giving_up_ends_work_in_the_middle() -> None:
    pool = Processes(1)
    process = pool.submit(os.getpid).result()
    pool.submit(time.sleep, 60)
    begin = time.monotonic()
    pool.shutdown(wait=True, cancel_futures=True)
    assert gone({process}, within=10)
    assert time.monotonic() - begin < 30


@pytest.mark.skipif(sys.platform == "win32", reason="SIGKILL is not known there")
def test_workers_end_when_their_parent_was_killed(tmp_path: Path) -> None:
    script = tmp_path / "alone.py"
    script.write_text(ALONE)
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join(filter(None, sys.path))}
    parent = subprocess.Popen(
        [sys.executable, script], stdout=subprocess.PIPE, text=True, env=environment
    )
    assert parent.stdout is not None
    workers = {int(word) for word in parent.stdout.readline().split()}
    parent.kill()
    parent.wait()
    parent.stdout.close()
    assert workers
    assert gone(workers, within=10)


@pytest.mark.parametrize("count", [0, -1, 257, 1.5, True])
def test_a_number_of_workers_that_makes_no_sense_is_refused(count: int) -> None:
    with pytest.raises(InputError, match="workers"):
        Processes(count)


def test_there_is_at_least_one_core() -> None:
    assert cores() >= 1
