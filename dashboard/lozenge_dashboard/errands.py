"""Errands: one process that computes what the evidence pages ask for, one thing at a time.

Everything that takes longer than a picture runs here, so that no page waits for it.  An errand is
asked to stop at its next report; one that does not hear is ended with its process.
"""

from __future__ import annotations

import contextlib
import multiprocessing
import os
import signal
import threading
import time
from collections import OrderedDict
from collections.abc import Callable
from multiprocessing.connection import Connection
from multiprocessing.process import BaseProcess
from typing import Any, NamedTuple

from lozenge_dashboard.jobs import PROGRESS_STEP, Progress
from lozenge_engine.errors import Cancelled, InputError
from lozenge_engine.workers import NICENESS, one_thread, watch_parent

__all__ = ["Errands", "Task", "work"]

LOOK = 0.05
"""Time (s) between two looks at a running errand: the longest that a stop waits to be sent."""
GRACE = 2.0
"""Time (s) that an errand has to stop by itself."""
STEP = 0.5
"""Longest time (s) between two reports to the page."""
STOP = "stop"

Task = Callable[..., Any]
"""Function of a module, called in the process as ``task(ask, stages=..., report=...,
publish=...)``; what it publishes is shown before it ends."""


class _Part(NamedTuple):
    """A value that is not finished."""

    value: Any


class _Failure(NamedTuple):
    """Why an errand has no value; `known` if its text is meant for the user."""

    text: str
    known: bool


class _Stopped(NamedTuple):
    """That an errand was stopped."""


def _report(connection: Connection) -> Callable[[str, float], None]:
    """Make the report of one errand: it stops the errand, or passes its progress on."""
    last = time.monotonic()

    def report(stage: str, fraction: float) -> None:
        nonlocal last
        while connection.poll():
            if connection.recv() == STOP:
                raise Cancelled(stage)
        now = time.monotonic()
        if now - last > PROGRESS_STEP:
            last = now
            connection.send(Progress(stage, float(fraction), 0.0))

    return report


def _publish(connection: Connection) -> Callable[[Any], None]:
    """Make the function that shows what is known so far."""

    def publish(value: Any) -> None:
        connection.send(_Part(value))

    return publish


def work(connection: Connection, parent: int) -> None:
    """Do errands from a connection, until it closes.

    Parameters
    ----------
    connection : Connection
        Receives (task, ask) pairs and stops; sends `Progress`, then a one-tuple of the value, a
        failure or that it was stopped; parts of it before.
    parent : int
        Process whose end ends this one.
    """
    watch_parent(parent)
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # the server ends this process itself
    with contextlib.suppress(AttributeError, OSError):
        os.nice(NICENESS)
    from lozenge_engine.stages import ONE_THREAD, Stages

    stages = Stages(threads_from=ONE_THREAD, compiled=True)
    while True:
        try:
            order = connection.recv()
        except (EOFError, OSError):
            return
        if order == STOP:  # it came after the end of what it meant
            continue
        task, ask = order
        outcome: tuple[Any] | _Failure | _Stopped
        try:
            report, publish = _report(connection), _publish(connection)
            outcome = (task(ask, stages=stages, report=report, publish=publish),)
        except Cancelled:
            outcome = _Stopped()
        except InputError as error:
            outcome = _Failure(str(error), known=True)
        except Exception as error:  # noqa: BLE001 (shown in the page: must not end the process)
            outcome = _Failure(f"{type(error).__name__}: {error}", known=False)
        try:
            connection.send(outcome)
        except OSError:
            return


class _Errand(NamedTuple):
    """What is to be done, and who is told."""

    task: Task
    ask: Any
    done: Callable[[Any], None]
    part: Callable[[Any], None]
    progress: Callable[[Progress], None]


_Key = tuple[object, str]


class Errands:
    """What all evidence pages wait for; the process starts with the first errand.

    All methods may be called from any thread.
    """

    def __init__(self) -> None:
        self._changed = threading.Condition()
        self._waiting: OrderedDict[_Key, _Errand] = OrderedDict()
        self._current: _Key | None = None
        self._stop = False
        self._closed = False
        self._thread: threading.Thread | None = None
        self._process: BaseProcess | None = None
        self._connection: Connection | None = None

    def request(
        self,
        page: object,
        name: str,
        task: Task,
        ask: Any,
        *,
        done: Callable[[Any], None],
        part: Callable[[Any], None],
        progress: Callable[[Progress], None],
    ) -> None:
        """Do something next but what waits already, instead of what this page asked by this name.

        Parameters
        ----------
        page : object
            Who asks; hashable.
        name : str
            What for: the latest request of a name wins.
        task, ask : callable, object
            Function of a module and its argument; both and the value are pickled.
        done : callable
            Called in a thread with the value, or with an exception; never for one that was
            cancelled or replaced.
        part : callable
            Called in a thread with what the task publishes before it ends.
        progress : callable
            Called in a thread with a `Progress`, at least every 0.5 s.
        """
        key = page, name
        with self._changed:
            if self._current == key:
                self._stop = True
            self._waiting[key] = _Errand(task, ask, done, part, progress)
            if self._thread is None and not self._closed:
                self._thread = threading.Thread(target=self._run, name="errands", daemon=True)
                self._thread.start()
            self._changed.notify()

    def first(self, page: object, name: str) -> None:
        """Let something that waits be the next."""
        with self._changed:
            if (page, name) in self._waiting:
                self._waiting.move_to_end((page, name), last=False)

    def cancel(self, page: object, name: str) -> None:
        """Drop something that waits or stop it if it runs."""
        with self._changed:
            self._waiting.pop((page, name), None)
            if self._current == (page, name):
                self._stop = True

    def remove(self, page: object) -> None:
        """Forget everything that a page waits for."""
        with self._changed:
            for key in [key for key in self._waiting if key[0] is page]:
                del self._waiting[key]
            if self._current is not None and self._current[0] is page:
                self._stop = True

    def close(self) -> None:
        """End the process."""
        with self._changed:
            self._closed, self._stop = True, True
            self._waiting.clear()
            self._changed.notify()
        self._end()

    def _run(self) -> None:
        while True:
            with self._changed:
                self._changed.wait_for(lambda: self._waiting or self._closed)
                if self._closed:
                    return
                self._current, errand = self._waiting.popitem(last=False)
                self._stop = False
            outcome = self._done(errand)
            with self._changed:
                stopped, self._current = self._stop, None
            if not stopped and not isinstance(outcome, _Stopped):
                errand.done(outcome)

    def _done(self, errand: _Errand) -> Any:
        """Have the process do an errand; its value or the exception."""
        try:
            connection = self._worker()
            connection.send((errand.task, errand.ask))
            outcome = self._awaited(connection, errand)
        except (EOFError, OSError):
            self._end()
            return RuntimeError("the computation ended without a result; press Compute")
        if isinstance(outcome, _Failure):
            return (InputError if outcome.known else RuntimeError)(outcome.text)
        return outcome[0] if isinstance(outcome, tuple) and len(outcome) == 1 else outcome

    def _awaited(self, connection: Connection, errand: _Errand) -> Any:
        """Wait for an outcome; passes parts and progress on, and a stop to the process."""
        start = told = time.monotonic()
        stopping: float | None = None
        last = Progress("", 0.0, 0.0)
        while True:
            now = time.monotonic()
            if self._stop and stopping is None:
                stopping = now
                connection.send(STOP)
            if stopping is not None and now - stopping > GRACE:
                self._end()
                return _Stopped()
            news = connection.recv() if connection.poll(LOOK) else None
            if isinstance(news, Progress):
                last = news
            elif isinstance(news, _Part):
                if stopping is None:
                    errand.part(news.value)
            elif news is not None:
                return news
            if stopping is None and (isinstance(news, Progress) or now - told > STEP):
                told = now
                errand.progress(last._replace(seconds=now - start))

    def _worker(self) -> Connection:
        """The connection to the process, which is started if need be."""
        if self._connection is None or self._process is None or not self._process.is_alive():
            context = multiprocessing.get_context("spawn")
            self._connection, theirs = context.Pipe()
            self._process = context.Process(
                target=work, args=(theirs, os.getpid()), name="evidence", daemon=True
            )
            with one_thread():
                self._process.start()
            theirs.close()
        return self._connection

    def _end(self) -> None:
        process, self._process, self._connection = self._process, None, None
        if process is not None:
            process.terminate()
