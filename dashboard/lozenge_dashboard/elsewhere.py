"""A search for modes in a process of its own, which a cancelled request ends at once.

The dense route spends many seconds inside single library calls that nothing can interrupt; in a
process of its own it can be stopped, and the page's thread stays free.
"""

from __future__ import annotations

import multiprocessing
import os
import time
from collections.abc import Callable
from multiprocessing.connection import Connection
from typing import TYPE_CHECKING

from lozenge_engine.errors import InputError
from lozenge_engine.workers import one_thread, watch_parent

if TYPE_CHECKING:
    from lozenge_engine.config import Config
    from lozenge_engine.pointfile import PointFile
    from lozenge_engine.stages import Stages

__all__ = ["prepare_elsewhere"]

STEP = 0.1
"""Time (s) between two looks at the process, and so the longest that a cancel has to wait."""


def search(connection: Connection, parent: int, config: Config, points: PointFile | None) -> None:
    """Search the patch's modes and send them, or the error's text.

    Parameters
    ----------
    connection : Connection
        Where the key and the modes go.
    parent : int
        Process whose end ends this one.
    config : Config
        What will be computed.
    points : PointFile or None
        The imported points.
    """
    watch_parent(parent)
    from lozenge_engine.pipeline import prepare
    from lozenge_engine.stages import ONE_THREAD, Stages

    try:
        connection.send(prepare(config, points=points, stages=Stages(threads_from=ONE_THREAD)))
    except InputError as error:
        connection.send(error)


def prepare_elsewhere(
    config: Config,
    *,
    points: PointFile | None,
    stages: Stages,
    report: Callable[[str, float], None],
    predicted: float,
) -> None:
    """Fill the cache with the patch's modes, searched in another process.

    Parameters
    ----------
    config : Config
        What will be computed.
    points : PointFile or None
        The imported points.
    stages : Stages
        Cache that the modes go into.
    report : callable
        Called every 0.1 s; may raise to stop, which ends the process.
    predicted : float
        Seconds that the search is expected to take.

    Raises
    ------
    InputError
        As for `lozenge_engine.pipeline.compute`.
    RuntimeError
        If the process ended without a word.
    """
    context = multiprocessing.get_context("spawn")
    ours, theirs = context.Pipe()
    process = context.Process(
        target=search, args=(theirs, os.getpid(), config, points), name="modes", daemon=True
    )
    with one_thread():
        process.start()
    theirs.close()
    start = time.monotonic()
    try:
        while not ours.poll(STEP):
            report("modes", min(0.98, (time.monotonic() - start) / max(predicted, STEP)))
        outcome = ours.recv()
    except EOFError as error:
        raise RuntimeError("the search for modes ended without a result") from error
    finally:
        process.terminate()
        process.join(1.0)
        ours.close()
    if isinstance(outcome, InputError):
        raise outcome
    stages.put(*outcome)
