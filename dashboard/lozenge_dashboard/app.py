"""The server: loopback only, one page per session, everything that pages share."""

from __future__ import annotations

import asyncio
import errno
import gc
import socket
import sys
import threading
import webbrowser
from collections.abc import Callable
from pathlib import Path
from typing import Any

from lozenge_dashboard.guard import guard
from lozenge_engine.config import Setup
from lozenge_engine.errors import refuse
from lozenge_engine.presets import FIRST, Preset, shipped
from lozenge_engine.stages import Stages
from lozenge_engine.threads import blas_threads

__all__ = ["ADDRESS", "FIRST_PORT", "free_port", "serve"]

ADDRESS = "127.0.0.1"
FIRST_PORT = 5480
PORTS_TRIED = 50
FIRST_LIMIT = 5000
"""Elements up to which the first picture is computed before a page asks for it, and up to which
one thread searches, since the sprinklings behind the picture need the other cores."""
WARM_AFTER = 3.0
"""Seconds after the first page was loaded."""
SWITCH = 1e-3
"""Seconds after which a thread that computes lets the event loop in."""


def free_port(wanted: int) -> int:
    """The wanted port on the loopback address, or the next one that is free.

    Parameters
    ----------
    wanted : int
        1 to 65535.

    Returns
    -------
    int
        A port that was free a moment ago.

    Raises
    ------
    InputError
        If none of the next 50 is free.
    """
    for port in range(wanted, min(wanted + PORTS_TRIED, 65536)):
        with socket.socket() as probe:
            probe.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
            try:
                probe.bind((ADDRESS, port))
            except OSError as error:
                if error.errno not in (errno.EADDRINUSE, errno.EACCES):
                    raise
                continue
        return port
    raise refuse(
        "port",
        given=wanted,
        allowed=f"a port with a free one among the next {PORTS_TRIED}",
        do="name another with --port",
    )


def _first_picture(setup: Setup, stages: Stages, done: threading.Event) -> None:
    """Compute what the first page will ask for, while the page's libraries are imported."""
    try:
        from lozenge_engine.pipeline import compute

        patch_rule, _ = setup.rules()
        small = 2 * setup.points.density <= FIRST_LIMIT and patch_rule.kind != "none"
        if setup.points.kind != "file" and small:
            compute(setup.config(), stages=stages)
    finally:
        done.set()


def _warm(stages: Stages) -> None:
    """Compile the loops and measure the machine, once the first picture is on the screen."""
    from lozenge_engine.kernels.order import warm
    from lozenge_engine.pipeline import predict

    predict(Setup().config())
    warm()
    stages.compiled = True
    _settle()


def _settle() -> None:
    """Keep the event loop from waiting: for a computing thread, or for the collector.

    Called whenever libraries were loaded.  Without it every full collection walks their two
    hundred thousand objects again, and no page is answered for a quarter of a second.
    """
    sys.setswitchinterval(SWITCH)
    gc.collect()
    gc.freeze()


def _once(timer: threading.Timer) -> Callable[[], None]:
    """Start a timer at the first call."""

    def start() -> None:
        if not (timer.is_alive() or timer.finished.is_set()):
            timer.start()

    return start


def _say(line: str) -> None:
    """Write a line for the person at the terminal."""
    sys.stdout.write(f"{line}\n")
    sys.stdout.flush()


def _unless_gone(loop: asyncio.AbstractEventLoop, context: dict[str, Any]) -> None:
    """Report what went wrong in the event loop; a tab that closes while written to is no error."""
    from tornado.websocket import WebSocketClosedError

    if not isinstance(context.get("exception"), WebSocketClosedError):
        loop.default_exception_handler(context)


def serve(
    preset: Preset | None = None,
    path: Path | None = None,
    port: int | None = None,
    browser: bool = True,
) -> None:
    """Serve the page until interrupted.

    Parameters
    ----------
    preset : Preset or None
        The screen to open with; None opens the first shipped one.
    path : Path or None
        Where the preset was read from; imported points are looked for beside it.
    port : int or None
        Port on the loopback address; the next free one if it is taken, which is said.
    browser : bool
        Whether to open the browser.

    Raises
    ------
    InputError
        If no port is free, or the preset is too large for the page.
    """
    known = shipped()
    first = preset or known[FIRST]
    stages, ready = Stages(threads_from=FIRST_LIMIT), threading.Event()
    threading.Thread(
        target=_first_picture, args=(first.setup, stages, ready), name="first", daemon=True
    ).start()
    wanted = FIRST_PORT if port is None else port
    chosen = free_port(wanted)
    if chosen != wanted:
        _say(f"Port {wanted} is taken; using {chosen}.")

    # Panel and HoloViews take a second to import; the first picture is computed meanwhile.
    from lozenge_dashboard.page import pages

    warming = threading.Timer(WARM_AFTER, _warm, args=(stages,))
    warming.daemon = True
    factories, close = pages(first, known, stages, path=path, ready=ready, loaded=_once(warming))
    import panel as pn

    allowed = [f"{ADDRESS}:{chosen}", f"localhost:{chosen}"]
    options: dict[str, Any] = {
        "port": chosen,
        "address": ADDRESS,
        "websocket_origin": allowed,
        "show": False,
        "title": "Lozenge",
        "verbose": False,
        "start": False,
    }
    address = f"http://{ADDRESS}:{chosen}/"
    try:
        # Idle threads of a larger pool spin and slow the page's small matrices tenfold; the engine
        # asks for more threads where they pay.
        with blas_threads(1):
            server = pn.serve(factories, **options)
            guard(server._tornado, allowed=allowed)
            server.start()
            server.io_loop.asyncio_loop.set_exception_handler(_unless_gone)
            _settle()
            _say(f"Lozenge is at {address} (Ctrl-C ends it).")
            if browser:
                threading.Thread(target=webbrowser.open, args=(address,), daemon=True).start()
            server.run_until_shutdown()
    finally:
        close()
