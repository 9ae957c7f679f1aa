"""What the worker process does: draws and references, one at a time."""

from __future__ import annotations

import contextlib
import os
import signal
from collections.abc import Callable
from multiprocessing.connection import Connection
from multiprocessing.synchronize import Event
from typing import TYPE_CHECKING, Any, NamedTuple, Protocol

from lozenge_engine.errors import Cancelled
from lozenge_engine.workers import NICENESS, watch_parent

if TYPE_CHECKING:
    from lozenge_engine.pointfile import PointFile
    from lozenge_engine.samples import Draw
    from lozenge_engine.stages import Stages

__all__ = ["Failure", "Outcome", "Task", "work"]

SETS_BYTES = 600_000_000
"""Bytes of modes that the worker keeps."""


class Task(Protocol):
    """Work that is no draw: it can be sent to a process, and stops at its next report."""

    @property
    def key(self) -> str:
        """Names everything that the outcome depends on."""

    def take(self, *, stages: Stages, report: Callable[[str, float], None]) -> tuple[Any, ...]:
        """Do it; `report` may raise `Cancelled`."""


class Failure(NamedTuple):
    """Why a draw or a task has no outcome."""

    text: str


Outcome = tuple[Any, ...] | Failure


def work(connection: Connection, parent: int, stop: Event) -> None:
    """Take draws and tasks from a connection and send back what they give, until it closes.

    Parameters
    ----------
    connection : Connection
        Receives (draw or task, points) pairs; sends tuples, a `Failure`, or None for a task that
        was stopped.
    parent : int
        Process whose end ends this one.
    stop : Event
        Set while the present task is not wanted any more.
    """
    watch_parent(parent)
    signal.signal(signal.SIGINT, signal.SIG_IGN)  # the server ends this process itself
    with contextlib.suppress(AttributeError, OSError):
        os.nice(NICENESS)
    from lozenge_engine.stages import ONE_THREAD, Stages

    stages = Stages(threads_from=ONE_THREAD, limit_bytes=SETS_BYTES)
    while True:
        try:
            wanted, points = connection.recv()
        except (EOFError, OSError):
            return
        outcome: Outcome | None
        try:
            outcome = _taken(wanted, points, stages, stop)
        except Cancelled:
            outcome = None
        except Exception as error:  # noqa: BLE001 (shown in the page: must not end the worker)
            outcome = Failure(str(error))
        try:
            connection.send(outcome)
        except OSError:
            return


def _taken(
    wanted: Draw | Task, points: PointFile | None, stages: Stages, stop: Event
) -> tuple[Any, ...]:
    """Take one of them; a stopped task raises `Cancelled` and what it had finished stays cached."""
    from lozenge_engine.samples import Draw, take

    if isinstance(wanted, Draw):
        return take(wanted, points=points, stages=stages)

    # Sets have many elements: the loops save more than they cost.
    if not stages.compiled and getattr(wanted, "level", "exact") != "exact":
        from lozenge_engine.kernels.order import warm

        warm()
        stages.compiled = True

    def report(stage: str, _fraction: float) -> None:
        if stop.is_set():
            raise Cancelled(stage)

    return wanted.take(stages=stages, report=report)
