"""Work that leaves the event loop: the picture's own thread, and the sprinklings behind it.

`Flight` belongs to one page: at most one computation runs, and the latest request wins.
`Workshop` belongs to the server: one process that takes draws from all pages in turn and keeps
their readings, so that returning to a state costs nothing.  Tasks (references: a twin, a chain)
wait in the same line; unlike a draw they can be stopped without ending the process.
"""

from __future__ import annotations

import multiprocessing
import os
import threading
import time
from collections import OrderedDict
from collections.abc import Callable, Iterable, Sequence
from multiprocessing.connection import Connection
from multiprocessing.process import BaseProcess
from multiprocessing.synchronize import Event
from typing import TYPE_CHECKING, Any, NamedTuple

from lozenge_dashboard.worker import Failure, Outcome, Task, work
from lozenge_engine.errors import Cancelled
from lozenge_engine.workers import one_thread

if TYPE_CHECKING:
    from lozenge_engine.pointfile import PointFile
    from lozenge_engine.samples import Draw, Reading

__all__ = ["Failure", "Flight", "Progress", "Workshop", "keyed"]

PATIENCE = 0.6
"""A computation younger than this (s) is let finish when a newer request comes, so that a
picture follows even while a slider is dragged without pause."""
PROGRESS_STEP = 0.2
"""Least time (s) between two reports of progress."""
CACHED_DRAWS = 4096
"""Draws whose readings are kept; each is a few kB."""
QUIET = 1.0
"""After work in front no new draw is begun for this time (s), so that the page stays fluid."""
LATE = 3.0
"""A draw that nobody wants any more is given up after this time (s)."""


class Progress(NamedTuple):
    """How far a computation is: its stage, fraction of it in [0, 1], seconds so far."""

    stage: str
    fraction: float
    seconds: float


Report = Callable[[str, float], None]
Work = Callable[[Report], Any]


def keyed(key: object, task: Callable[..., Any], report: Report) -> tuple[object, Any]:
    """What a task gives, or why it gives nothing, under the key that it was asked by."""
    try:
        return key, task(report=report)
    except Cancelled:
        raise
    except Exception as error:  # noqa: BLE001 (shown in the page: nobody else would hear it)
        return key, error


class Flight:
    """Single flight, latest wins: one thread that runs the newest request.

    Parameters
    ----------
    done : callable
        Called in the thread as ``done(value)`` or ``done(error)`` for a request that no newer
        one has replaced; never for one that was cancelled.
    progress : callable
        Called in the thread with a `Progress`, at most every 0.2 s.
    """

    def __init__(self, done: Callable[[Any], None], progress: Callable[[Progress], None]) -> None:
        self._done = done
        self._progress = progress
        self._changed = threading.Condition()
        self._next: Work | None = None
        self._stop = False
        self._closed = False
        self._thread: threading.Thread | None = None

    def request(self, work: Work) -> None:
        """Run `work` next, instead of whatever was waiting."""
        with self._changed:
            self._next = work
            if self._thread is None:
                self._thread = threading.Thread(target=self._run, name="picture", daemon=True)
                self._thread.start()
            self._changed.notify()

    def cancel(self) -> None:
        """Drop what waits and stop what runs at its next report."""
        with self._changed:
            self._next = None
            self._stop = True

    def close(self) -> None:
        """Cancel, and end the thread."""
        with self._changed:
            self._next, self._stop, self._closed = None, True, True
            self._changed.notify()

    def _run(self) -> None:
        while True:
            with self._changed:
                self._changed.wait_for(lambda: self._next is not None or self._closed)
                if self._closed:
                    return
                work, self._next, self._stop = self._next, None, False
            if work is None:
                continue
            try:
                outcome = work(self._report())
            except Cancelled:
                continue
            except Exception as error:  # noqa: BLE001 (shown in the page: nobody else would hear it)
                outcome = error
            if not self._stop:
                self._done(outcome)

    def _report(self) -> Report:
        """Make the report of one run: it stops the run, or passes its progress on."""
        start = time.monotonic()
        last = start

        def report(stage: str, fraction: float) -> None:
            nonlocal last
            now = time.monotonic()
            if self._stop or (self._next is not None and now - start > PATIENCE):
                raise Cancelled(stage)
            if now - last > PROGRESS_STEP:
                last = now
                self._progress(Progress(stage, fraction, now - start))

        return report


# ---------------------------------------------------------------- what runs behind


class _Queue(NamedTuple):
    """What one page waits for: draws and tasks by their keys, in order."""

    draws: dict[str, Draw | Task]
    points: PointFile | None
    notify: Callable[[], None]


class Workshop:
    """One worker process for all pages, started with the first draw.

    Draws are taken from the pages in turn, one at a time.  All methods may be called from any
    thread.
    """

    def __init__(self) -> None:
        self._changed = threading.Condition()
        self._queues: OrderedDict[object, _Queue] = OrderedDict()
        self._cache: OrderedDict[str, Outcome] = OrderedDict()
        self._thread: threading.Thread | None = None
        self._process: BaseProcess | None = None
        self._connection: Connection | None = None
        self._stop: Event | None = None
        self._current: tuple[str, float] | None = None
        self._eager = False  # whether a task may begin at once
        self._soft = False  # whether what is being taken stops at its next report
        self._quiet_until = 0.0
        self._closed = False

    @property
    def busy(self) -> bool:
        """Whether a draw is being taken."""
        return self._current is not None

    def wait(self) -> None:
        """Begin no new draw for a second: a page is busy in front."""
        self._quiet_until = time.monotonic() + QUIET

    @property
    def quiet(self) -> bool:
        """Whether a page was busy in front within the last second."""
        return time.monotonic() < self._quiet_until

    def replace(
        self,
        page: object,
        draws: Sequence[Draw | Task],
        *,
        points: PointFile | None = None,
        notify: Callable[[], None],
    ) -> None:
        """Let a page wait for these draws instead of its former ones.

        Parameters
        ----------
        page : object
            Who asks; hashable.
        draws : sequence of Draw or Task
            In the order wanted; those known already are passed over.
        points : PointFile or None
            Imported points that the draws need.
        notify : callable
            Called without arguments, in another thread, when a draw is finished.
        """
        keyed = {draw.key: draw for draw in draws}
        with self._changed:
            waiting = {key: draw for key, draw in keyed.items() if key not in self._cache}
            self._queues.pop(page, None)
            self._eager = True
            if waiting:
                self._queues[page] = _Queue(waiting, points, notify)
                if self._thread is None and not self._closed:
                    self._thread = threading.Thread(target=self._run, name="workshop", daemon=True)
                    self._thread.start()
            self._changed.notify()
        self._give_up(LATE)

    def hold(self, page: object) -> None:
        """Stop the task that is worked on for a page; it stays in line and is begun again."""
        with self._changed:
            self._eager = False
            queue, current = self._queues.get(page), self._current
            if queue is not None and current is not None and current[0] in queue.draws:
                self._stop_task()

    def _stop_task(self) -> None:
        """Let the present task end at its next report."""
        if self._soft and self._stop is not None:
            self._stop.set()

    def remove(self, page: object) -> None:
        """Forget what a page waits for, and stop at once if it was working on that."""
        with self._changed:
            self._queues.pop(page, None)
        self._give_up(0.0)

    def readings(self, keys: Iterable[str]) -> dict[str, tuple[Reading, ...]]:
        """Readings known so far, by the key of their draw; empty for one that failed."""
        known = self._known(keys)
        return {k: () if isinstance(v, Failure) else v for k, v in known.items()}

    def outcomes(self, keys: Iterable[str]) -> dict[str, tuple[Any, ...]]:
        """What tasks gave so far, by their key; empty for one that failed."""
        return self.readings(keys)

    def failures(self, keys: Iterable[str]) -> list[str]:
        """Why draws failed, each reason once."""
        known = self._known(keys).values()
        return list(dict.fromkeys(v.text for v in known if isinstance(v, Failure)))

    def _known(self, keys: Iterable[str]) -> dict[str, Outcome]:
        with self._changed:
            known = {key: self._cache[key] for key in keys if key in self._cache}
            for key in known:
                self._cache.move_to_end(key)
        return known

    def close(self) -> None:
        """End the worker process."""
        with self._changed:
            self._closed = True
            self._queues.clear()
            self._changed.notify()
        self._terminate()

    def _give_up(self, age: float) -> None:
        """Stop the present draw if nobody waits for it and it is older than `age` seconds."""
        with self._changed:
            if self._current is None:
                return
            key, start = self._current
            wanted = any(key in queue.draws for queue in self._queues.values())
            if wanted:
                return
            if self._soft:
                self._stop_task()
                return
            if time.monotonic() - start < age:
                return
        self._terminate()

    def _terminate(self) -> None:
        process = self._process
        if process is not None:
            process.terminate()

    def _run(self) -> None:
        while True:
            with self._changed:
                self._changed.wait_for(lambda: self._queues or self._closed)
                while (left := self._patience()) > 0 and not self._closed:
                    self._changed.wait(left)
                if self._closed:
                    return
                if not self._queues:
                    continue
                page, queue = next(iter(self._queues.items()))
                self._queues.move_to_end(page)
                key, draw = next(iter(queue.draws.items()))
                self._current = key, time.monotonic()
                self._soft = hasattr(draw, "take")
                if self._stop is not None:
                    self._stop.clear()
            self._finish(key, self._take(draw, queue.points))

    def _patience(self) -> float:
        """Seconds to wait before the next draw; none before a task that a page has just asked for.

        Such a page is at rest, and should it move again, `hold` stops the task.
        """
        queue = next(iter(self._queues.values()), None)
        if self._eager and queue is not None and hasattr(next(iter(queue.draws.values())), "take"):
            return 0.0
        return self._quiet_until - time.monotonic()

    def _finish(self, key: str, outcome: Outcome | None) -> None:
        """Store an outcome, and tell every page that waits for it; None: it was stopped."""
        told: list[Callable[[], None]] = []
        with self._changed:
            self._current = None
            if outcome is None:
                return
            self._cache[key] = outcome
            while len(self._cache) > CACHED_DRAWS:
                self._cache.popitem(last=False)
            for page, queue in list(self._queues.items()):
                if queue.draws.pop(key, None) is None:
                    continue
                told.append(queue.notify)
                if not queue.draws:
                    del self._queues[page]
        for notify in told:
            notify()

    def _take(self, draw: Draw | Task, points: PointFile | None) -> Outcome | None:
        """Have the worker take a draw; None when it was stopped."""
        try:
            connection = self._worker()
            connection.send((draw, points))
            outcome: Outcome | None = connection.recv()
        except (EOFError, OSError):
            self._process = self._connection = None
            return None
        return outcome

    def _worker(self) -> Connection:
        """The connection to the worker, which is started if need be."""
        if self._connection is None or self._process is None or not self._process.is_alive():
            context = multiprocessing.get_context("spawn")
            self._connection, theirs = context.Pipe()
            self._stop = context.Event()
            self._process = context.Process(
                target=work,
                args=(theirs, os.getpid(), self._stop),
                name="sprinklings",
                daemon=True,
            )
            with one_thread():
                self._process.start()
            theirs.close()
        return self._connection
