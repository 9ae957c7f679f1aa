"""The server: loopback only, one page per session, everything that pages share."""

from __future__ import annotations

import errno
import socket
import sys
import threading
import webbrowser
from pathlib import Path
from typing import Any

from lozenge_engine.config import Setup
from lozenge_engine.errors import refuse
from lozenge_engine.presets import FIRST, Preset, shipped
from lozenge_engine.stages import Stages
from lozenge_engine.threads import blas_threads

__all__ = ["ADDRESS", "FIRST_PORT", "free_port", "serve"]

ADDRESS = "127.0.0.1"
FIRST_PORT = 5480
PORTS_TRIED = 50


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


def _first_picture(setup: Setup, stages: Stages) -> None:
    """Compute what the first page will ask for, and warm the compiled loops after it."""
    from lozenge_engine.kernels.order import warm
    from lozenge_engine.pipeline import compute, predict

    if setup.points.kind != "file" and 2 * setup.points.density <= 5000:
        compute(setup.config(), stages=stages)
    predict(setup.config())
    warm()
    stages.compiled = True


def _say(line: str) -> None:
    """Write a line for the person at the terminal."""
    sys.stdout.write(f"{line}\n")
    sys.stdout.flush()


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
    stages = Stages()
    threading.Thread(
        target=_first_picture, args=(first.setup, stages), name="first", daemon=True
    ).start()
    wanted = FIRST_PORT if port is None else port
    chosen = free_port(wanted)
    if chosen != wanted:
        _say(f"Port {wanted} is taken; using {chosen}.")

    # Panel and HoloViews take a second to import; the first picture is computed meanwhile.
    from lozenge_dashboard.page import pages

    factory, close = pages(first, known, stages, path=path)
    import panel as pn

    address = f"http://{ADDRESS}:{chosen}/"
    _say(f"Lozenge is at {address} (Ctrl-C ends it).")
    if browser:
        threading.Timer(0.2, webbrowser.open, args=(address,)).start()
    options: dict[str, Any] = {
        "port": chosen,
        "address": ADDRESS,
        "websocket_origin": [f"{ADDRESS}:{chosen}", f"localhost:{chosen}"],
        "show": False,
        "title": "Lozenge",
        "verbose": False,
    }
    try:
        # Idle threads of a larger pool spin and slow the page's small matrices tenfold; the engine
        # asks for more threads where they pay.
        with blas_threads(1):
            pn.serve({"/": factory}, **options)
    finally:
        close()
