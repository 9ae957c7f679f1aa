"""Worker processes: how they start, how they end, and how work goes on when one is killed."""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import signal
import threading
import time
from collections.abc import Callable, Iterator
from concurrent.futures import BrokenExecutor, Executor, Future, ProcessPoolExecutor
from multiprocessing.synchronize import Event
from typing import Any

from lozenge_engine.errors import refuse

__all__ = ["MAX_WORKERS", "Processes", "cores", "one_thread", "watch_parent"]

NICENESS = 10
"""Workers give way to whatever is in front."""
WATCH = 0.3
"""Seconds between two looks of a worker at its parent."""
MAX_WORKERS = 256


def cores() -> int:
    """Processors that this process may use, at least one.

    Returns
    -------
    int
        The number.
    """
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def watch_parent(parent: int, leave: Event | None = None) -> None:
    """Let this process end when its parent is gone, however that ended, or when told to.

    Parameters
    ----------
    parent : int
        Process whose end ends this one.
    leave : Event or None
        Set to end this process in the middle of its work.
    """

    def watch() -> None:
        while os.getppid() == parent and not (leave is not None and leave.is_set()):
            time.sleep(WATCH)
        os._exit(1)

    threading.Thread(target=watch, daemon=True).start()


@contextlib.contextmanager
def one_thread() -> Iterator[None]:
    """Environment in which a process starts with one thread of linear algebra.

    Yields
    ------
    None
        What was there before comes back at the end.
    """
    names = ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS")
    before = {name: os.environ.get(name) for name in names}
    os.environ.update(dict.fromkeys(names, "1"))
    try:
        yield
    finally:
        for name, value in before.items():
            if value is None:
                del os.environ[name]
            else:
                os.environ[name] = value


def _begin(parent: int, leave: Event) -> None:
    """First thing that a worker does."""
    watch_parent(parent, leave)
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # the parent decides what Ctrl-C means
    with contextlib.suppress(AttributeError, OSError):
        os.nice(NICENESS)


class Processes(Executor):
    """Worker processes with one thread of linear algebra each.

    A killed worker breaks a pool and fails what was in it; the next `submit` starts a new one.
    What failed so says so by `concurrent.futures.BrokenExecutor`, and may be submitted again.

    Parameters
    ----------
    count : int
        Processes, 1 to 256.

    Raises
    ------
    InputError
        If the count is out of range.
    """

    def __init__(self, count: int) -> None:
        if isinstance(count, bool) or not isinstance(count, int) or not 1 <= count <= MAX_WORKERS:
            raise refuse(
                "workers",
                given=count,
                allowed=f"a whole number from 1 to {MAX_WORKERS}",
                do=f"take one for each core, here {cores()}",
            )
        self.count = count
        self._context = multiprocessing.get_context("spawn")
        self._leave = self._context.Event()
        self._lock = threading.Lock()
        self._pool = self._started()

    def _started(self) -> ProcessPoolExecutor:
        return ProcessPoolExecutor(
            self.count,
            mp_context=self._context,
            initializer=_begin,
            initargs=(os.getpid(), self._leave),
        )

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        """Have a worker call a function; see `concurrent.futures.Executor.submit`.

        Parameters
        ----------
        fn : callable
            Of a module, as are its arguments and its value.
        *args, **kwargs : Any
            What it is called with.

        Returns
        -------
        Future
            Of its value.
        """
        with self._lock, one_thread():
            try:
                return self._pool.submit(fn, *args, **kwargs)
            except BrokenExecutor:
                self._pool.shutdown(wait=False)
                self._pool = self._started()
                return self._pool.submit(fn, *args, **kwargs)

    def __exit__(self, *_: object) -> None:
        """End the workers, also in the middle of what nobody waits for any more."""
        self.shutdown(wait=True, cancel_futures=True)

    def shutdown(self, wait: bool = True, *, cancel_futures: bool = False) -> None:
        """End the workers.

        Parameters
        ----------
        wait : bool
            Whether to wait for their end.
        cancel_futures : bool
            Whether to leave work undone, also what is in the middle.
        """
        if cancel_futures:
            self._leave.set()
        with self._lock:
            self._pool.shutdown(wait=wait, cancel_futures=cancel_futures)
